"""The evaluation of the correction as a table: crop-area means and spread over pixels."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
import xarray as xr

from stook.correct.grids import STAGES
from stook.correct.kernels_scores import CHANGES, SCORES, SEASONS
from stook.correct.setup import HALVES

COLUMNS = ("simulation", "variable", "season", "stage", "statistic", "unit", "mean", "p05", "p95")


def summarise(simulation: str, tiles: Sequence[xr.Dataset], area: xr.DataArray) -> pd.DataFrame:
    """Return the evaluation of one simulation over the crop area.

    Parameters
    ----------
    simulation
        Its name.
    tiles
        Its evaluation files.
    area
        Crop area of all systems, ha, (lat, lon) of the whole grid.

    Returns
    -------
    DataFrame
        simulation, variable, season, stage, statistic, unit, mean, p05, p95: mean and 5th and
        95th percentile over the pixels, weighted by crop area. Of the two halves of the
        calibration period each pixel counts with the one whose value is larger in size: biases
        of the two halves have opposite signs after a correction, and their mean would be zero by
        construction.
    """
    rows = []
    for name in tiles[0].data_vars:
        statistic, _, variable = str(name).rpartition("_")
        if statistic not in SCORES + CHANGES:
            continue
        parts = [tile[name].load() for tile in tiles]
        values = xr.concat(parts, "lat", join="exact") if parts[1:] else parts[0]
        weights = area.sel(lat=values["lat"], lon=values["lon"]).values
        unit = str(values.attrs["units"])
        for label, grids in _cases(statistic, values):
            for season in SEASONS:
                for stage in STAGES:
                    grid = grids.sel(season=season, stage=stage).values
                    found = weighted_summary(grid, weights)
                    if not np.isnan(found[0]):
                        row = (simulation, variable, season, stage, label, unit, *found)
                        rows.append(row)
    return pd.DataFrame(rows, columns=list(COLUMNS))


def _cases(statistic: str, values: xr.DataArray) -> list[tuple[str, xr.DataArray]]:
    """Return the statistics of one variable of the file by the name they have in the table."""
    if statistic in SCORES:
        return [(statistic, worse_half(values))]
    return [
        (f"{statistic}_{horizon}", values.sel(horizon=horizon))
        for horizon in values["horizon"].values
    ]


def worse_half(values: xr.DataArray) -> xr.DataArray:
    """Return, at every pixel, the half whose value is larger in size; the first of equals."""
    samples = values.sel(sample=list(HALVES)).transpose("sample", ...)
    sizes = np.nan_to_num(np.abs(samples.values), nan=-1.0)
    chosen = np.argmax(sizes, axis=0)
    return samples.isel(sample=0, drop=True).copy(
        data=np.take_along_axis(samples.values, chosen[None], axis=0)[0]
    )


def weighted_summary(values: np.ndarray, weights: np.ndarray) -> tuple[float, float, float]:
    """Return weighted mean, 5th and 95th percentile of the values that are there.

    A percentile is linear between values placed at the middle of their weights.
    """
    there = np.isfinite(values) & (weights > 0)
    if not there.any():
        return np.nan, np.nan, np.nan
    order = np.argsort(values[there], kind="stable")
    x, w = values[there][order], weights[there][order]
    places = (np.cumsum(w) - w / 2) / w.sum()
    low, high = np.interp([0.05, 0.95], places, x)
    return float((x * w).sum() / w.sum()), float(low), float(high)
