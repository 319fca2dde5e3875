"""The figures of a fit: residuals, and response curves with their bands."""

from __future__ import annotations

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from scipy import stats

from stook.fit.panel import Sample
from stook.report.style import INK, PALE, QUIET, Drawing, drawing_settings, looks, new_figure

_COLUMNS = 3
_BLUE = looks(["effect"])["effect"].colour


def residual_figure(table: pd.DataFrame, link: str) -> Drawing:
    """Draw residuals against fitted values, by year, and against a normal distribution."""
    unit = "log yield" if link == "log" else "t/ha"
    with drawing_settings():
        figure = new_figure(3.4)
        fitted, years, normal = figure.subplots(1, 3)
        for axis in (fitted, years, normal):
            axis.axhline(0, color=QUIET, linewidth=0.7)
            axis.set_ylabel(f"residual ({unit})")
        fitted.plot(table["fitted"], table["residual"], ".", color=_BLUE, markersize=3)
        fitted.set(title="Against the fitted value", xlabel=f"fitted ({unit})")
        _by_year(years, table)
        ordered = np.sort(table["residual"].to_numpy())
        places = stats.norm.ppf((np.arange(len(ordered)) + 0.5) / len(ordered))
        normal.plot(places, ordered, ".", color=_BLUE, markersize=3)
        normal.plot(places, places * ordered.std(), color=INK, linewidth=0.8)
        normal.set(title="Against a normal distribution", xlabel="standard normal quantile")
    return Drawing(
        "residuals",
        "Residuals against the fitted value; by year, with the mean of each year; and against the "
        "quantiles of a normal distribution. Means of years away from zero are shocks that all "
        "units share: cluster by year.",
        f"Residuals of {len(table)} unit-years from {ordered.min():.3g} to {ordered.max():.3g}.",
        figure,
        table,
    )


def curve_figure(table: pd.DataFrame, sample: Sample, title: str) -> Drawing:
    """Draw the response to every term with its 95 % band and where the data lie."""
    parts = list(table.groupby(["term", "index"], sort=False))
    columns = min(_COLUMNS, len(parts))
    rows = -(-len(parts) // columns)
    with drawing_settings():
        figure = new_figure(0.5 + 2.6 * rows)
        axes = list(figure.subplots(rows, columns, squeeze=False).ravel())
        for axis, ((_, index), part) in zip(axes, parts, strict=False):
            _curve(axis, part, sample.indices[index])
        for axis in axes[len(parts) :]:
            axis.set_axis_off()
        figure.suptitle(title, x=0.01, ha="left", fontsize=9.5)
    ends = "; ".join(
        f"{name if name == index else f'{name}, {index},'} "
        f"{part['effect'].min():.3g} to {part['effect'].max():.3g}"
        for (name, index), part in parts
    )
    return Drawing(
        "curves",
        "Change of yield with each index, from the mean of the panel (zero), with the 95 % "
        "confidence band; in a product, with the other index at its mean; the bars "
        "below show where the unit-years lie.",
        f"Response curves: {ends} ({table['effect_unit'].iloc[0]}).",
        figure,
        table,
    )


def _by_year(axis: Axes, table: pd.DataFrame) -> None:
    axis.plot(table["year"], table["residual"], ".", color=PALE, markersize=4)
    means = table.groupby("year")["residual"].mean()
    axis.plot(means.index, means, "o-", color=_BLUE, markersize=3, linewidth=1)
    axis.set(title="By year, and the mean of the year", xlabel="year")
    axis.locator_params(axis="x", integer=True, nbins=5)


def _curve(axis: Axes, part: pd.DataFrame, data: pd.Series) -> None:
    axis.axhline(0, color=QUIET, linewidth=0.7)
    axis.fill_between(part["value"], part["low"], part["high"], color=_BLUE, alpha=0.2, lw=0)
    axis.plot(part["value"], part["effect"], color=_BLUE, linewidth=1.4)
    counts, edges = np.histogram(data, bins=30)
    axis.bar(
        edges[:-1],
        0.12 * counts / max(counts.max(), 1),
        width=np.diff(edges),
        align="edge",
        color=PALE,
        transform=axis.get_xaxis_transform(),
        zorder=0,
    )
    axis.set(
        title=part["term"].iloc[0],
        xlabel=f"{part['index'].iloc[0]} ({part['index_unit'].iloc[0]})",
        ylabel=f"yield ({part['effect_unit'].iloc[0]})",
    )
