"""Trends against chance: the trends of all pixels beside those of randomised years."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from stook.report.style import INK, Drawing, drawing_settings, new_figure, percent

_FOUND = "#0072B2"
_MOST_QUANTITIES = 6
_MOST_PANELS = 12
KIND_FOUND = "observed"
KIND_RANDOM = "randomised"


def trend_figure(
    distribution: pd.DataFrame,
    name: str,
    subject: str,
    units: Mapping[str, str],
    significant: Mapping[tuple[str, str], float],
) -> Drawing:
    """Draw the distributions of pixel trends of one simulation, crop and system.

    Parameters
    ----------
    distribution
        The trend distribution: quantity, period, kind, bin_low, bin_high, area_share.
    name
        File name.
    subject
        What it is about, such as ``maize, rainfed, observed``.
    units
        Unit of each quantity; a trend is that per decade.
    significant
        By (quantity, period), the share of crop area with a significant trend.
    """
    quantities = list(distribution["quantity"].unique())
    quantities.sort(key=lambda quantity: quantity != "yield")
    periods = list(distribution["period"].unique())
    shown = quantities[:_MOST_QUANTITIES]
    cells = [(quantity, period) for quantity in shown for period in periods]
    columns = len(periods) if len(periods) > 1 else len(cells) if len(cells) < 5 else 3
    return _draw(
        distribution.assign(first=distribution["quantity"]),
        {
            cell: (
                _words(cell[0]) + (f", {cell[1]}" if len(periods) > 1 else ""),
                f"trend, {units.get(cell[0], '')} per decade",
                significant.get(cell, np.nan),
            )
            for cell in cells
        },
        columns,
        name,
        subject,
    )


def simulations_figure(
    distributions: Mapping[str, pd.DataFrame],
    name: str,
    subject: str,
    significant: Mapping[tuple[str, str], float],
) -> Drawing:
    """Draw the distributions of pixel yield trends, a panel per simulation and period.

    Parameters
    ----------
    distributions
        The trend distribution of each simulation.
    significant
        By (simulation, period), the share of crop area with a significant yield trend.
    """
    parts = []
    for simulation, frame in distributions.items():
        chosen = frame[frame["quantity"] == "yield"]
        parts.append(chosen.assign(first=simulation))
    rows = pd.concat(parts, ignore_index=True)
    cells = list(dict.fromkeys(zip(rows["first"], rows["period"], strict=True)))[:_MOST_PANELS]
    several = len(set(rows["period"])) > 1
    panels = {
        cell: (
            cell[0].replace("_", ", ") + (f"\n{cell[1]}" if several else ""),
            "yield trend, t/ha per decade",
            significant.get(cell, np.nan),
        )
        for cell in cells
    }
    return _draw(rows, panels, min(3, len(cells)), name, subject)


def _draw(
    rows: pd.DataFrame,
    panels: Mapping[tuple[str, str], tuple[str, str, float]],
    columns: int,
    name: str,
    subject: str,
) -> Drawing:
    lines = -(-len(panels) // columns)
    with drawing_settings():
        figure = new_figure(0.6 + 1.8 * lines)
        axes = figure.subplots(lines, columns, squeeze=False).ravel()
        for axis in axes[len(panels) :]:
            axis.set_axis_off()
        for axis, (cell, (title, label, share)) in zip(axes, panels.items(), strict=False):
            here = _of_panel(rows, cell)
            _panel(axis, here)
            axis.set_title(title)
            axis.set_xlabel(label)
            if np.isfinite(share):
                _corner(axis, f"significant:\n{percent(share)} of area")
        handles = [
            Patch(facecolor=_FOUND, alpha=0.45, edgecolor=_FOUND, label="trends of all pixels"),
            Line2D([], [], color=INK, linestyle="--", label="trends of randomised years"),
        ]
        figure.legend(handles=handles, loc="outside upper left", ncols=2, fontsize=9)
        figure.supylabel("share of crop area", fontsize=9)
    return Drawing(
        name,
        f"Trends of all pixels of {subject}, against the trends the same pixels show when their "
        "years are randomised. Where the two shapes lie on top of each other, the trend is no more "
        "than chance. Share of area significant: false discovery rate controlled.",
        _alt(rows, panels, subject),
        figure,
        rows.rename(columns={"first": "series"}),
    )


def _of_panel(rows: pd.DataFrame, cell: tuple[str, str]) -> pd.DataFrame:
    return rows[(rows["first"] == cell[0]) & (rows["period"] == cell[1])]


def _panel(axis: Axes, rows: pd.DataFrame) -> None:
    for kind in (KIND_FOUND, KIND_RANDOM):
        chosen = rows[rows["kind"] == kind].sort_values("bin_low")
        if chosen.empty:
            continue
        edges = np.append(chosen["bin_low"].to_numpy(), chosen["bin_high"].to_numpy()[-1])
        shares = chosen["area_share"].to_numpy()
        if kind == KIND_FOUND:
            axis.stairs(shares, edges, fill=True, color=_FOUND, alpha=0.45, linewidth=0)
            axis.stairs(shares, edges, color=_FOUND, linewidth=0.9)
        else:
            axis.stairs(shares, edges, color=INK, linewidth=1.2, linestyle="--")
    axis.axvline(0, color=INK, linewidth=0.6)
    axis.set_ylim(bottom=0)
    axis.locator_params(axis="x", nbins=5)


def _corner(axis: Axes, text: str) -> None:
    axis.text(
        0.98, 0.96, text, transform=axis.transAxes, ha="right", va="top", fontsize=7.5, color=INK
    )


def _words(name: str) -> str:
    return name.replace("_", " ")


def _alt(
    rows: pd.DataFrame,
    panels: Mapping[tuple[str, str], tuple[str, str, float]],
    subject: str,
) -> str:
    parts = []
    for cell, (title, _, share) in panels.items():
        here = _of_panel(rows, cell)
        text = title.replace("\n", ", ")
        for kind, word in ((KIND_FOUND, "all pixels"), (KIND_RANDOM, "randomised")):
            chosen = here[here["kind"] == kind]
            if len(chosen):
                text += f", mean of {word} {_mean(chosen):.3g}"
        parts.append(text + (f", {percent(share)} significant" if np.isfinite(share) else ""))
    return f"Histograms of trends of {subject}. {'; '.join(parts)}."


def _mean(rows: pd.DataFrame) -> float:
    middle = (rows["bin_low"] + rows["bin_high"]) / 2
    return float((middle * rows["area_share"]).sum() / rows["area_share"].sum())
