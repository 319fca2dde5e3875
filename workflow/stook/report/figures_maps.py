"""Maps of yield change: a panel per water system and scenario, hatched where not to be relied on.

With classes of robustness the hatching shows them; without, where models disagree on the sign.
"""

from __future__ import annotations

from collections.abc import Mapping

import geopandas as gpd
import matplotlib as mpl
import numpy as np
import pandas as pd
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import BoundaryNorm, Colormap
from matplotlib.patches import Patch, PathPatch
from matplotlib.path import Path as Outline

from stook.ensemble.robustness import Signal
from stook.report.style import (
    INK,
    QUIET,
    WIDTH,
    Drawing,
    drawing_settings,
    new_figure,
    nice_limit,
    percent,
)
from stook.report.tables import AGREEMENT

HATCH = "////"
"""Hatching of what is not to be relied on."""

_CROSSED = "xxxx"
_NO_CROP = "#d3d8da"
_DISAGREE = f"fewer than {percent(AGREEMENT)} of models agree on the sign"
_CLASSES = {
    HATCH: "no robust signal: fewer than 66 % of models change more than variability",
    _CROSSED: "conflicting: at least 66 % do, but fewer than 80 % agree on the sign",
}
_STEPS = 10


def diverging() -> Colormap:
    """Return the colours of change: brown for loss, teal for gain, pale at zero.

    Brown and teal are told apart under all common colour deficiencies (ColorBrewer, BrBG).
    """
    return mpl.colormaps["BrBG"].with_extremes(bad=_NO_CROP)


def change_maps(
    pixels: Mapping[tuple[str, str], xr.Dataset],
    crop: str,
    horizon: str,
    polygons: gpd.GeoDataFrame,
) -> Drawing:
    """Draw the median yield change of one crop at one horizon.

    Parameters
    ----------
    pixels
        By (system, scenario), the ensemble pixels of the crop, dimensions (horizon, lat, lon).
    polygons
        Region outlines, EPSG:4326.
    """
    chosen = {key: dataset.sel(horizon=horizon) for key, dataset in pixels.items()}
    robust = all("robustness" in dataset for dataset in chosen.values())
    systems = list(dict.fromkeys(system for system, _ in chosen))
    scenarios = list(dict.fromkeys(scenario for _, scenario in chosen))
    values = np.concatenate([d["change_p50"].values.ravel() for d in chosen.values()])
    norm = BoundaryNorm(np.linspace(-1, 1, _STEPS + 1) * nice_limit(values), 256, extend="both")
    with drawing_settings():
        first = next(iter(chosen.values()))
        columns = len(scenarios)
        height = min(4.6, (WIDTH - 1.9) / columns / map_shape(first))
        figure = new_figure(0.75 + len(systems) * (height + 0.32))
        axes = figure.subplots(len(systems), columns, sharex=True, sharey=True, squeeze=False)
        for row, system in enumerate(systems):
            for column, scenario in enumerate(scenarios):
                axis = axes[row, column]
                one = chosen[system, scenario]
                draw_map(axis, one, "change_p50", _unsure(one, robust), norm, polygons)
                axis.set_title(f"{crop}, {system} - {scenario}")
        bar = figure.colorbar(
            ScalarMappable(norm, diverging()), ax=axes, shrink=0.85, aspect=30, pad=0.02
        )
        bar.set_ticks(norm.boundaries.tolist())
        bar.set_label("median yield change, %")
        bar.outline.set_visible(False)
        map_legend(figure, _CLASSES if robust else {HATCH: _DISAGREE})
    return Drawing(
        f"map_{crop}_{horizon}",
        f"Median yield change of {crop}, {horizon} against the baseline. Hatched: "
        f"{_hatched(robust)}. Grey: no harvested area, or no value. Lines: regions.",
        _alt(chosen, crop, horizon),
        figure,
        _data(chosen, crop, horizon, robust),
    )


def _unsure(dataset: xr.Dataset, robust: bool) -> dict[str, np.ndarray]:
    """Return the pixels of each hatching."""
    if not robust:
        return {HATCH: dataset["agreement"].values < AGREEMENT - 1e-9}
    classes = dataset["robustness"].values
    return {
        HATCH: classes == Signal.NO_ROBUST_SIGNAL,
        _CROSSED: classes == Signal.CONFLICTING,
    }


def _hatched(robust: bool) -> str:
    if not robust:
        return _DISAGREE
    return (
        "slanted, no robust signal (fewer than 66 % of models change more than variability gives "
        "in nine cases of ten); crossed, conflicting (at least 66 % do, but fewer than 80 % agree "
        "on the sign); not hatched, robust (IPCC AR6 WGI, Cross-Chapter Box Atlas.1)"
    )


def map_shape(dataset: xr.Dataset) -> float:
    """Return width by height of the map, a degree of longitude shortened at the mid latitude."""
    lat, lon = _edges(dataset, "lat"), _edges(dataset, "lon")
    width = (lon[-1] - lon[0]) * np.cos(np.deg2rad((lat[0] + lat[-1]) / 2))
    return float(max(width / (lat[-1] - lat[0]), 0.25))


def _edges(dataset: xr.Dataset, name: str) -> np.ndarray:
    bounds = dataset[f"{name}_bnds"].values
    return np.append(bounds[:, 0], bounds[-1, 1])


def draw_map(
    axis: Axes,
    dataset: xr.Dataset,
    name: str,
    unsure: Mapping[str, np.ndarray],
    norm: BoundaryNorm,
    polygons: gpd.GeoDataFrame,
) -> None:
    """Draw one variable (lat, lon), hatched where it is unsure, with the outlines of regions.

    `unsure` holds the pixels of each hatching.
    """
    lat, lon = _edges(dataset, "lat"), _edges(dataset, "lon")
    axis.set_facecolor(_NO_CROP)
    change = np.ma.masked_invalid(dataset[name].values)
    axis.pcolormesh(lon, lat, change, norm=norm, cmap=diverging(), rasterized=True)
    for hatch, pixels in unsure.items():
        marked = ~np.ma.getmaskarray(change) & pixels
        if marked.any():
            outline = cells_outline(marked, lat, lon)
            axis.add_patch(
                PathPatch(outline, facecolor="none", edgecolor=INK, hatch=hatch, linewidth=0)
            )
    polygons.boundary.plot(ax=axis, color=INK, linewidth=0.7, aspect=None)
    axis.set_xlim(lon[0], lon[-1])
    axis.set_ylim(lat[0], lat[-1])
    axis.set_aspect(1 / np.cos(np.deg2rad((lat[0] + lat[-1]) / 2)))
    axis.set_xlabel("")
    axis.set_ylabel("")
    axis.spines[["left", "bottom"]].set_visible(False)
    axis.tick_params(length=0, labelsize=7.5)
    axis.xaxis.set_major_formatter(lambda x, _: _degrees(x, "E", "W"))
    axis.yaxis.set_major_formatter(lambda y, _: _degrees(y, "N", "S"))


def _degrees(value: float, plus: str, minus: str) -> str:
    return f"{abs(value):g}\N{DEGREE SIGN}{plus if value >= 0 else minus}"


def cells_outline(mask: np.ndarray, lat: np.ndarray, lon: np.ndarray) -> Outline:
    """Return the outline of the marked cells, neighbours of a row joined.

    Parameters
    ----------
    mask
        Shape (lat, lon).
    lat, lon
        Cell edges, shapes (lat + 1,) and (lon + 1,).
    """
    corners, codes = [], []
    one = [Outline.MOVETO, Outline.LINETO, Outline.LINETO, Outline.LINETO, Outline.CLOSEPOLY]
    for row, marked in enumerate(mask):
        steps = np.flatnonzero(np.diff(np.concatenate(([0], marked.astype(np.int8), [0]))))
        for start, stop in zip(steps[::2], steps[1::2], strict=True):
            west, east, south, north = lon[start], lon[stop], lat[row], lat[row + 1]
            corners += [(west, south), (east, south), (east, north), (west, north), (west, south)]
            codes += one
    return Outline(corners, codes)


def map_legend(figure: mpl.figure.Figure, hatched: Mapping[str, str]) -> None:
    """Say what each hatching and grey pixels are."""
    patches = [
        Patch(facecolor="white", edgecolor=INK, hatch=hatch, linewidth=0.4, label=label)
        for hatch, label in hatched.items()
    ]
    patches.append(
        Patch(facecolor=_NO_CROP, edgecolor=QUIET, linewidth=0.4, label="no crop or no value")
    )
    columns = 2 if len(patches) == 2 else 1
    figure.legend(handles=patches, loc="outside lower left", ncols=columns, fontsize=8.5)


def _alt(chosen: Mapping[tuple[str, str], xr.Dataset], crop: str, horizon: str) -> str:
    parts = []
    for (system, scenario), dataset in chosen.items():
        change = dataset["change_p50"].values
        valid = change[np.isfinite(change)]
        if not valid.size:
            parts.append(f"{system}, {scenario}: no value")
            continue
        agree = dataset["agreement"].values[np.isfinite(change)] >= AGREEMENT - 1e-9
        parts.append(
            f"{system}, {scenario}: a decrease in {percent(float((valid < 0).mean()))} of pixels, "
            f"models agree in {percent(float(agree.mean()))}"
        )
    return f"Maps of yield change of {crop}, {horizon}. {'; '.join(parts)}."


def _data(
    chosen: Mapping[tuple[str, str], xr.Dataset], crop: str, horizon: str, robust: bool
) -> pd.DataFrame:
    parts = []
    names = ["change_p05", "change_p50", "change_p95", "agreement", "models"]
    names += ["robustness"] if robust else []
    for (system, scenario), dataset in chosen.items():
        frame = dataset[names].to_dataframe().reset_index()
        frame = frame[frame["change_p50"].notna()]
        parts.append(
            frame.assign(crop=crop, system=system, scenario=scenario, horizon=horizon)[
                ["crop", "system", "scenario", "horizon", "lat", "lon", *names]
            ]
        )
    return pd.concat(parts, ignore_index=True)
