"""Observed impact: regions ranked, crop by crop, and maps of the pixels."""

from __future__ import annotations

from collections.abc import Mapping

import geopandas as gpd
import numpy as np
import pandas as pd
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import BoundaryNorm
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from stook.report.figures_maps import HATCH, diverging, draw_map, map_legend, map_shape
from stook.report.style import (
    INK,
    PALE,
    WIDTH,
    Drawing,
    drawing_settings,
    new_figure,
    nice_limit,
    percent,
    signed,
)

_FOUND = "#0072B2"
_COLUMNS = 3
_MAP_STEPS = 10


def impact_chart(table: pd.DataFrame, period: str, test: str, level: float) -> Drawing:
    """Draw the impact on every region of every crop, the largest loss first.

    Parameters
    ----------
    table
        The impact table of one period, a row per crop and region.
    period
        Its name.
    test
        Column of the p-value.
    level
        Level of the test.
    """
    crops = list(table["crop"].unique())
    columns = min(_COLUMNS, len(crops))
    lines = -(-len(crops) // columns)
    ranked = {crop: table[table["crop"] == crop].sort_values("impact") for crop in crops}
    most = max(len(rows) for rows in ranked.values())
    with drawing_settings():
        figure = new_figure(0.9 + lines * (0.55 + 0.24 * most))
        axes = figure.subplots(lines, columns, sharex=True, squeeze=False).ravel()
        for spare in axes[len(crops) :]:
            spare.set_axis_off()
        for axis, (crop, rows) in zip(axes, ranked.items(), strict=False):
            _ranking(axis, rows, test, level)
            axis.set_title(crop)
            axis.set_ylim(most - 0.5, -0.5)
            axis.tick_params(labelbottom=True)
        figure.supxlabel("change of yield by the trends of the weather, %", fontsize=9)
        figure.legend(
            handles=_handles(table, level), loc="outside upper left", ncols=2, fontsize=8.5
        )
    years = f"{table['first_year'].min():.0f} to {table['last_year'].max():.0f}"
    return Drawing(
        f"impact_{period}",
        f"Change of yield by the trends of the observed weather, {years}, by region and crop, the "
        "largest loss on top. Marker: central coefficients; thick line: 17-83 % of the "
        "coefficient draws; thin line: 5-95 %. Grey bar: what weather without a trend gives in "
        f"9 of 10 cases. Filled marker: more than chance at level {level:g}.",
        _alt(ranked, years, test, level),
        figure,
        pd.concat(ranked.values(), ignore_index=True),
    )


def _ranking(axis: Axes, rows: pd.DataFrame, test: str, level: float) -> None:
    y = np.arange(len(rows))
    axis.hlines(y, rows["chance_p05"], rows["chance_p95"], PALE, linewidth=9)
    axis.axvline(0, color=INK, linewidth=0.8)
    axis.hlines(y, rows["impact_p05"], rows["impact_p95"], _FOUND, linewidth=1.1)
    axis.hlines(y, rows["impact_p17"], rows["impact_p83"], _FOUND, linewidth=3.4, alpha=0.55)
    sure = (rows[test] <= level).to_numpy()
    for mask, face in ((sure, _FOUND), (~sure, "white")):
        axis.plot(
            rows["impact"].to_numpy()[mask],
            y[mask],
            linestyle="none",
            marker="o",
            markersize=5,
            markeredgecolor=_FOUND,
            markerfacecolor=face,
        )
    axis.set_yticks(y, list(rows["region"]))
    axis.tick_params(axis="y", length=0)
    axis.locator_params(axis="x", nbins=6)


def _handles(table: pd.DataFrame, level: float) -> list[Line2D | Patch]:
    def marker(face: str, label: str) -> Line2D:
        return Line2D(
            [], [], color=_FOUND, marker="o", linewidth=2, markerfacecolor=face, label=label
        )

    handles: list[Line2D | Patch] = [
        marker(_FOUND, f"more than chance (p up to {level:g})"),
        marker("white", "not more than chance"),
        Patch(color=PALE, label="weather without a trend, 5-95 %"),
    ]
    if table["impact_p05"].notna().any():
        label = "coefficient draws, 17-83 % and 5-95 %"
        handles.append(Line2D([], [], color=_FOUND, linewidth=3.4, alpha=0.55, label=label))
    return handles


def _alt(ranked: Mapping[str, pd.DataFrame], years: str, test: str, level: float) -> str:
    parts = []
    for crop, rows in ranked.items():
        known = rows[rows["impact"].notna()]
        if known.empty:
            parts.append(f"{crop}: no value")
            continue
        first, last = known.iloc[0], known.iloc[-1]
        text = f"{crop}: {signed(first['impact'])} % in {first['region']}"
        if len(known) > 1:
            text += f" to {signed(last['impact'])} % in {last['region']}"
        parts.append(f"{text}, {int((known[test] <= level).sum())} of {len(known)} significant")
    return f"Ranked impacts on yield, {years}. {'; '.join(parts)}."


def impact_map(
    pixels: Mapping[tuple[str, str], xr.Dataset],
    period: str,
    test: str,
    level: float,
    polygons: gpd.GeoDataFrame,
) -> Drawing:
    """Draw the impact on every pixel in one period, a panel per crop and system.

    Parameters
    ----------
    pixels
        By (crop, system), the impact maps, dimensions (period, lat, lon).
    period
        Its name.
    test
        Variable of the p-value.
    level
        Level of the test.
    polygons
        Region outlines, EPSG:4326.
    """
    chosen = {key: dataset.sel(period=period) for key, dataset in pixels.items()}
    values = np.concatenate([d["impact"].values.ravel() for d in chosen.values()])
    limit = nice_limit(values)
    norm = BoundaryNorm(np.linspace(-1, 1, _MAP_STEPS + 1) * limit, 256, extend="both")
    columns = min(_COLUMNS, len(chosen))
    lines = -(-len(chosen) // columns)
    with drawing_settings():
        first = next(iter(chosen.values()))
        height = min(4.6, (WIDTH - 1.9) / columns / map_shape(first))
        figure = new_figure(0.75 + lines * (height + 0.32))
        axes = figure.subplots(lines, columns, sharex=True, sharey=True, squeeze=False)
        for spare in axes.ravel()[len(chosen) :]:
            spare.set_axis_off()
        for axis, ((crop, system), one) in zip(axes.ravel(), chosen.items(), strict=False):
            draw_map(axis, one, "impact", {HATCH: one[test].values > level}, norm, polygons)
            axis.set_title(f"{crop}, {system}")
        bar = figure.colorbar(
            ScalarMappable(norm, diverging()), ax=axes, shrink=0.85, aspect=30, pad=0.02
        )
        bar.set_ticks(norm.boundaries.tolist())
        bar.set_label("change of yield, %")
        bar.outline.set_visible(False)
        map_legend(figure, {HATCH: f"not more than chance (p above {level:g})"})
    return Drawing(
        f"impact_map_{period}",
        "Change of yield by the trends of the observed weather, "
        f"{int(first['first_year'])} to {int(first['last_year'])}, central coefficients. Hatched: "
        f"the pixel's own p-value is above {level:g}. Grey: no harvested area, or no value. "
        "Lines: regions.",
        _map_alt(chosen, test, level),
        figure,
        _map_data(chosen, period, test),
    )


def _map_alt(chosen: Mapping[tuple[str, str], xr.Dataset], test: str, level: float) -> str:
    parts = []
    for (crop, system), one in chosen.items():
        values = one["impact"].values
        valid = np.isfinite(values)
        if not valid.any():
            parts.append(f"{crop}, {system}: no value")
            continue
        sure = one[test].values[valid] <= level
        parts.append(
            f"{crop}, {system}: a loss in {percent(float((values[valid] < 0).mean()))} of pixels, "
            f"{percent(float(sure.mean()))} significant"
        )
    return f"Maps of the impact of the weather's trends on yield. {'; '.join(parts)}."


def _map_data(chosen: Mapping[tuple[str, str], xr.Dataset], period: str, test: str) -> pd.DataFrame:
    names = ["impact", "impact_p05", "impact_p95", test, "lag1"]
    parts = []
    for (crop, system), one in chosen.items():
        frame = one[names].to_dataframe().reset_index()
        frame = frame[frame["impact"].notna()]
        frame = frame.assign(crop=crop, system=system, period=period)
        parts.append(frame[["crop", "system", "period", "lat", "lon", *names]])
    return pd.concat(parts, ignore_index=True)
