"""Maps of yield change: the spread over simulations, pixel by pixel."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise
from pathlib import Path

import dask
import dask.array as da
import numpy as np
import xarray as xr

from stook.ensemble.changes import SHARES, SPREAD
from stook.ensemble.kernels import member_statistics, period_means
from stook.ensemble.likelihood import CAUTION
from stook.ensemble.series import Models
from stook.grids.analysis import AnalysisGrid
from stook.grids.files import open_result
from stook.grids.missing import Reason, reason_attributes
from stook.yields.technology import climate_yield

_ROWS = 10  # rows of a block, as in the files
_VALUES = ["change_mean", *(f"change_{name}" for name in SPREAD), "share_decrease", "agreement"]
_COUNTS = ["models", "reason"]
_AGREEMENT = "share of models whose mean change has the sign of the median"


def pixel_changes(
    sources: Sequence[Path],
    models: Models,
    baseline: tuple[int, int],
    horizons: Mapping[str, tuple[int, int]],
) -> xr.Dataset:
    """Return maps of the change of mean yield against the baseline, lazily, in bands of rows.

    Parameters
    ----------
    sources
        Yields of each simulation: ``yield`` (year, lat, lon) with central coefficients and
        ``reason`` (lat, lon).
    models
        Models of the simulations, and their weights.
    baseline
        First and last year.
    horizons
        First and last year by name, at least one.

    Returns
    -------
    Dataset
        Dimensions (horizon, lat, lon): change_mean, change_p05 to change_p95 (per cent),
        share_decrease, agreement (1), models (number with a value), reason.
    """
    with open_result(sources[0]) as first:
        grid = AnalysisGrid.from_dataset(first)
    periods = list(horizons.values())
    edges = [*range(0, grid.shape[0], _ROWS), grid.shape[0]]
    blocks = []
    for start, stop in pairwise(edges):
        shape = (len(_VALUES) + len(_COUNTS), len(periods), stop - start, grid.shape[1])
        band = dask.delayed(_band)(sources, models, baseline, periods, slice(start, stop))
        blocks.append(da.from_delayed(band, shape, np.float64))
    values = da.concatenate(blocks, axis=2)
    variables = {
        name: (("horizon", "lat", "lon"), values[number], _attributes(name))
        for number, name in enumerate(_VALUES)
    }
    for number, name in enumerate(_COUNTS):
        whole = values[len(_VALUES) + number].astype(np.int8 if name == "reason" else np.int16)
        variables[name] = (("horizon", "lat", "lon"), whole, _attributes(name))
    names = xr.Variable("horizon", np.array(list(horizons)), {"long_name": "name of the horizon"})
    return xr.Dataset(variables, grid.coordinates() | {"horizon": names})


def _attributes(name: str) -> dict[str, object]:
    if name == "reason":
        return reason_attributes()
    if name == "models":
        return {"long_name": "number of models with a value", "units": "1"}
    if name == "agreement":
        return {"long_name": _AGREEMENT, "units": "1"}
    if name == "share_decrease":
        return {
            "long_name": "weighted share of simulations with a decrease",
            "units": "1",
            "comment": CAUTION,
        }
    what = name.removeprefix("change_")
    statistic = "mean" if what == "mean" else f"percentile {int(what[1:])}"
    return {
        "long_name": f"change of mean yield against the baseline, {statistic} of simulations",
        "units": "percent",
    }


def _band(
    sources: Sequence[Path],
    models: Models,
    baseline: tuple[int, int],
    periods: Sequence[tuple[int, int]],
    rows: slice,
) -> np.ndarray:
    """Return every variable of a band of rows, (variable, horizon, lat, lon)."""
    changes, reasons = [], []
    for path in sources:
        with open_result(path) as dataset:
            part = dataset.isel(lat=rows)
            grids = {"yield": climate_yield(part), "reason": part["reason"]}
            part = xr.Dataset(grids).load()
        changes.append(_changes(part, baseline, periods))
        reasons.append(part["reason"].values)
    change = np.array(changes)  # (simulation, horizon, lat, lon)
    shape = change.shape[1:]
    flat = np.ascontiguousarray(change.reshape(len(sources), -1).T)
    number = np.arange(len(sources))
    found, counts = member_statistics(flat, number, models.number, models.weight, SHARES)
    columns = [0, *range(3, 3 + SHARES.size), 1, 2]
    result = np.empty((len(_VALUES) + len(_COUNTS), *shape))
    result[: len(_VALUES)] = found[:, columns].T.reshape(-1, *shape)
    result[-2] = counts[:, 2].reshape(shape)
    why = _first_reason(np.array(reasons))
    result[-1] = np.where(result[-2] > 0, int(Reason.VALID), why)
    return result


def _changes(
    part: xr.Dataset, baseline: tuple[int, int], periods: Sequence[tuple[int, int]]
) -> np.ndarray:
    """Return the change of one simulation, per cent, (horizon, lat, lon)."""
    years = part["year"].values
    grid = part["yield"].transpose("lat", "lon", "year").values.astype(np.float64)
    grid = np.where(part["reason"].values[..., None] == 0, grid, np.nan)
    series = np.ascontiguousarray(grid.reshape(-1, years.size))
    means = []
    for first, last in (baseline, *periods):
        inside = (years >= first) & (years <= last)
        means.append(period_means(series, inside, last - first + 1))
    base = np.where(means[0] > 0, means[0], np.nan)
    return np.array([100.0 * (mean / base - 1.0) for mean in means[1:]]).reshape(
        len(periods), *grid.shape[:2]
    )


def _first_reason(reasons: np.ndarray) -> np.ndarray:
    """Return the first simulation's reason, or too few values: (simulation, ...) -> (...)."""
    first = np.full(reasons.shape[1:], int(Reason.TOO_FEW_VALUES))
    for reason in reasons[::-1]:
        first = np.where(reason != 0, reason, first)
    return first
