"""Figures of regional change: ranges by region and yields through the years."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from stook.constants import OBSERVED
from stook.report.style import (
    INK,
    QUIET,
    Drawing,
    Look,
    drawing_settings,
    looks,
    new_figure,
    panels,
    signed,
)
from stook.report.tables import combined, in_order, in_regions

_MOST_HORIZONS = 3
_RANGE_COLUMNS = [
    *("crop", "system", "region", "scenario", "horizon", "change_p05", "change_p17"),
    *("change_p50", "change_p83", "change_p95", "agreement", "share_decrease"),
]


def range_figure(
    changes: pd.DataFrame,
    crop: str,
    scenarios: Sequence[str],
    horizons: Sequence[str],
    regions: Sequence[str],
) -> Drawing:
    """Draw the range of yield change of every region, a panel per horizon (the last three).

    Parameters
    ----------
    changes
        The changes table.
    """
    rows = in_regions(combined(changes[changes["crop"] == crop]))
    rows = in_order(rows, horizon=horizons, region=regions, scenario=scenarios)
    shown = list(horizons)[-_MOST_HORIZONS:]
    rows = rows[rows["horizon"].isin(shown)]
    with drawing_settings():
        look = looks(scenarios)
        line = 0.16 * max(1, len(scenarios)) + 0.14
        figure = new_figure(1.15 + line * len(regions))
        axes = figure.subplots(1, len(shown), sharex=True, sharey=True, squeeze=False)[0]
        for axis, horizon in zip(axes, shown, strict=True):
            _ranges(axis, rows[rows["horizon"] == horizon], regions, look)
            axis.set_title(horizon)
            axis.set_xlabel("yield change, %")
        handles = [
            Line2D([], [], color=own.colour, marker=own.marker, linewidth=3, alpha=0.9, label=name)
            for name, own in look.items()
        ]
        _legend_above(figure, handles)
    last = rows[(rows["horizon"] == shown[-1]) & rows["change_p50"].notna()]
    words = "; ".join(
        f"{scenario}: medians {signed(group['change_p50'].min())} to "
        f"{signed(group['change_p50'].max())} %"
        for scenario, group in last.groupby("scenario", sort=False)
    )
    return Drawing(
        f"change_{crop}",
        f"Yield change of {crop} against the baseline, by region. Marker: median of all members; "
        "thick line: 17-83 % of members; thin line: 5-95 %. Hollow marker: fewer than 80 % of "
        "models agree on the sign.",
        f"Ranges of yield change of {crop} in {len(regions)} regions for {len(scenarios)} "
        f"scenarios. {shown[-1]}, {words}.",
        figure,
        rows[_RANGE_COLUMNS],
    )


def _ranges(
    axis: Axes, rows: pd.DataFrame, regions: Sequence[str], look: Mapping[str, Look]
) -> None:
    axis.axvline(0, color=INK, linewidth=0.8)
    axis.grid(axis="x")
    axis.set_axisbelow(True)
    place = {name: number for number, name in enumerate(regions)}
    step = 0.7 / max(1, len(look))
    for number, (scenario, own) in enumerate(look.items()):
        chosen = rows[rows["scenario"] == scenario]
        y = chosen["region"].map(place) + (number - (len(look) - 1) / 2) * step
        axis.hlines(y, chosen["change_p05"], chosen["change_p95"], own.colour, linewidth=1.1)
        axis.hlines(
            y, chosen["change_p17"], chosen["change_p83"], own.colour, linewidth=3.4, alpha=0.55
        )
        agree = chosen["agreement"] >= 0.8
        for mask, face in ((agree, own.colour), (~agree, "white")):
            axis.plot(
                chosen["change_p50"][mask],
                y[mask],
                linestyle="none",
                marker=own.marker,
                markersize=5,
                markeredgecolor=own.colour,
                markerfacecolor=face,
            )
    axis.set_yticks(range(len(regions)), list(regions))
    axis.set_ylim(len(regions) - 0.5, -0.5)
    axis.tick_params(axis="y", length=0)


def series_figure(
    yearly: pd.DataFrame,
    crop: str,
    scenarios: Sequence[str],
    regions: Sequence[str],
    periods: Mapping[str, tuple[int, int]],
) -> Drawing:
    """Draw regional yields through the years: observed, and the spread of every scenario.

    Parameters
    ----------
    yearly
        The yearly table.
    periods
        First and last year of the baseline (first) and the horizons, to be shaded.
    """
    rows = in_regions(combined(yearly[yearly["crop"] == crop]))
    order = [OBSERVED, *scenarios]
    rows = in_order(rows, region=regions, scenario=order, year=sorted(rows["year"].unique()))
    first_year, last_year = rows["year"].min(), rows["year"].max()
    periods = {k: v for k, v in periods.items() if v[0] <= last_year and v[1] >= first_year}
    with drawing_settings():
        columns = 3 if len(regions) <= 12 else 5
        figure, axes = panels(len(regions), columns, 1.9 if columns == 3 else 1.35)
        look = looks(scenarios)
        for axis, region in zip(axes, regions, strict=True):
            here = rows[rows["region"] == region]
            _shade(axis, periods)
            for scenario, own in look.items():
                _spread(axis, here[here["scenario"] == scenario], own)
            seen = here[here["scenario"] == OBSERVED]
            axis.plot(seen["year"], seen["yield_p50"], color=INK, linewidth=1.0)
            axis.set_title(region)
            axis.grid(axis="y")
        figure.supylabel("yield, t/ha", fontsize=9)
        _legend_above(figure, _series_handles(look, rows, periods))
    return Drawing(
        f"series_{crop}",
        f"Yield of {crop} by region and year, harvest years. Line: median of all members; shaded: "
        "5-95 % of members, year by year; grey bands: baseline and horizons. Technology is held "
        "constant, so that only the weather moves the lines.",
        _series_alt(rows, crop, regions, scenarios),
        figure,
        rows.drop(columns=["production_mean_t"], errors="ignore"),
    )


def _shade(axis: Axes, periods: Mapping[str, tuple[int, int]]) -> None:
    for number, (first, last) in enumerate(periods.values()):
        shade = "#e6eaec" if number == 0 else "#f3f5f6"
        axis.axvspan(first - 0.5, last + 0.5, color=shade, linewidth=0, zorder=0)


def _spread(axis: Axes, rows: pd.DataFrame, look: Look) -> None:
    axis.fill_between(
        rows["year"],
        rows["yield_p05"],
        rows["yield_p95"],
        color=look.colour,
        alpha=0.2,
        linewidth=0,
    )
    axis.plot(
        rows["year"], rows["yield_p50"], color=look.colour, linestyle=look.line, linewidth=1.1
    )


def _series_handles(
    look: Mapping[str, Look], rows: pd.DataFrame, periods: Mapping[str, tuple[int, int]]
) -> list[Line2D | Patch]:
    handles: list[Line2D | Patch] = []
    if (rows["scenario"] == OBSERVED).any():
        handles.append(Line2D([], [], color=INK, linewidth=1.2, label=OBSERVED))
    handles += [
        Line2D([], [], color=own.colour, linestyle=own.line, linewidth=1.6, label=name)
        for name, own in look.items()
    ]
    if look:
        handles.append(Patch(color=QUIET, alpha=0.3, label="5-95 % of members"))
    names = ", ".join(periods)
    handles.append(Patch(color="#e6eaec", label=names))
    return handles


def _series_alt(
    rows: pd.DataFrame, crop: str, regions: Sequence[str], scenarios: Sequence[str]
) -> str:
    shown = [*([OBSERVED] if (rows["scenario"] == OBSERVED).any() else []), *scenarios]
    years = rows["year"]
    when = f", {years.min()} to {years.max()}" if len(years) else ""
    low, high = np.nanmin(rows["yield_p50"]), np.nanmax(rows["yield_p50"])
    return (
        f"Time series of {crop} yield in {len(regions)} regions{when}: {', '.join(shown)}. "
        f"Medians lie between {low:.2f} and {high:.2f} t/ha."
    )


def _legend_above(figure: Figure, handles: Sequence[Line2D | Patch]) -> None:
    if handles:
        figure.legend(
            handles=list(handles), loc="outside upper left", ncols=min(5, len(handles)), fontsize=9
        )
