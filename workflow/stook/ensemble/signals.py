"""Maps of robustness, and the harvested area that loses: one pass over the yields of a scenario."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np
import xarray as xr

from stook.ensemble.kernels import period_means
from stook.ensemble.losses import LIMITS, add_losing
from stook.ensemble.robustness import RULE, Signal, classify, variability_threshold
from stook.ensemble.series import Models
from stook.ensemble.smooth import detrended_deviation
from stook.ensemble.summary import TOTAL, Years
from stook.grids.analysis import AnalysisGrid
from stook.grids.files import PIXEL_CHUNK, open_result
from stook.grids.missing import Reason, reason_attributes
from stook.regions.totals import region_weights
from stook.yields.technology import climate_yield


@dataclass(frozen=True)
class Signals:
    """What `signals` returns.

    Attributes
    ----------
    grids
        Dimensions (horizon, lat, lon): robustness (flags of `Signal`), share_exceeding, agreement,
        threshold (per cent, mean over simulations), reason.
    regions
        Names, the sum of the regions last.
    losing, whole
        ha, (simulation, horizon, region, limit) and (simulation, horizon, region).
    """

    grids: xr.Dataset
    regions: list[str]
    losing: np.ndarray
    whole: np.ndarray


def signals(
    sources: Sequence[Path],
    models: Models,
    baseline: Years,
    windows: Sequence[Mapping[str, Years]],
    horizons: Sequence[str],
    layer: xr.DataArray,
    overlay: xr.Dataset,
) -> Signals:
    """Classify the change of every pixel and sum the area that loses, in bands of rows.

    Parameters
    ----------
    sources
        Yields of each simulation, central coefficients.
    windows
        First and last year of each horizon a simulation has, one mapping per simulation.
    layer
        Harvested area, ha, (lat, lon).
    overlay
        ``coverage`` and, in a full run, ``covered``.
    """
    with open_result(sources[0]) as first:
        grid = AnalysisGrid.from_dataset(first)
    names = region_weights(overlay)[0]
    regions = [*names, TOTAL] if overlay.sizes["region"] > 1 else names
    count = (len(sources), len(horizons))
    losing = np.zeros((count[0] * count[1], len(regions), len(LIMITS)))
    whole = np.zeros((count[0] * count[1], len(regions)))
    shape = (len(horizons), *grid.shape)
    result = {"robustness": np.zeros(shape, np.int8), "reason": np.zeros(shape, np.int8)}
    result |= {
        name: np.full(shape, np.nan) for name in ("share_exceeding", "agreement", "threshold")
    }
    for start, stop in pairwise([*range(0, grid.shape[0], PIXEL_CHUNK), grid.shape[0]]):
        rows = slice(start, stop)
        change, threshold, reason = _read(sources, rows, baseline, windows, horizons)
        weights = _weights(layer.isel(lat=rows), overlay.isel(lat=rows), len(regions))
        flat = np.ascontiguousarray(change.reshape(-1, change.shape[-1]))
        add_losing(flat, weights, np.array(LIMITS), losing, whole)
        for name, values in _classes(change, threshold, reason, models).items():
            result[name][:, rows] = values.reshape(len(horizons), stop - start, -1)
    return Signals(
        _dataset(grid, horizons, result),
        regions,
        losing.reshape(*count, len(regions), len(LIMITS)),
        whole.reshape(*count, len(regions)),
    )


def _read(
    sources: Sequence[Path],
    rows: slice,
    baseline: Years,
    windows: Sequence[Mapping[str, Years]],
    horizons: Sequence[str],
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return change and threshold (simulation, horizon, pixel), per cent, and reasons of a band."""
    changes, thresholds, reasons = [], [], []
    for path, own in zip(sources, windows, strict=True):
        with open_result(path) as dataset:
            part = dataset.isel(lat=rows)
            grids = {"yield": climate_yield(part), "reason": part["reason"]}
            part = xr.Dataset(grids).load()
        years = part["year"].values
        grid = part["yield"].transpose("lat", "lon", "year").values.astype(np.float64)
        grid = np.where(part["reason"].values[..., None] == 0, grid, np.nan)
        series = np.ascontiguousarray(grid.reshape(-1, years.size))
        inside = (years >= baseline[0]) & (years <= baseline[1])
        base = period_means(series, inside, baseline[1] - baseline[0] + 1)
        base = np.where(base > 0, base, np.nan)
        deviation = 100.0 * detrended_deviation(series, years, inside) / base
        change, threshold = [], []
        for horizon in horizons:
            first, last = own.get(horizon, (1, 0))
            there = (years >= first) & (years <= last)
            mean = period_means(series, there, last - first + 1)
            change.append(100.0 * (mean / base - 1.0))
            length = max(1, last - first + 1)
            bar = variability_threshold(deviation, baseline[1] - baseline[0] + 1, length)
            threshold.append(np.where(np.isfinite(mean), bar, np.nan))
        changes.append(change)
        thresholds.append(threshold)
        reasons.append(part["reason"].values.ravel())
    return np.array(changes), np.array(thresholds), np.array(reasons)


def _weights(layer: xr.DataArray, overlay: xr.Dataset, regions: int) -> np.ndarray:
    """Return the harvested area of every pixel in every region, ha, (region, pixel)."""
    area = np.nan_to_num(layer.values).ravel()
    shares = region_weights(overlay.load())[1].values.reshape(-1, area.size)
    if len(shares) < regions:
        inside = shares[: overlay.sizes["region"]]
        whole = np.zeros(area.size)
        for share in inside:
            whole += share
        shares = np.concatenate([shares, np.minimum(whole, 1.0)[None]])
    return np.ascontiguousarray(shares * area)


def _classes(
    change: np.ndarray, threshold: np.ndarray, reason: np.ndarray, models: Models
) -> dict[str, np.ndarray]:
    """Return the variables of a band, (horizon, pixel) each."""
    shape = change.shape[1:]
    moved = np.ascontiguousarray(change.reshape(len(change), -1).T)
    bars = np.ascontiguousarray(threshold.reshape(len(change), -1).T)
    signal, shares, counts = classify(moved, bars, models.number, models.weight.size)
    total, number = np.zeros(len(moved)), np.zeros(len(moved))
    for column in range(moved.shape[1]):
        there = np.isfinite(moved[:, column]) & np.isfinite(bars[:, column])
        total += np.where(there, bars[:, column], 0.0)
        number += there
    mean = np.full(total.shape, np.nan)
    np.divide(total, number, out=mean, where=number > 0)
    why = np.full(shape[1], int(Reason.TOO_FEW_VALUES))
    for one in reason[::-1]:
        why = np.where(one != 0, one, why)
    why = np.where(counts[:, 0].reshape(shape) > 0, int(Reason.VALID), why)
    return {
        "robustness": signal.reshape(shape),
        "share_exceeding": shares[:, 0].reshape(shape),
        "agreement": shares[:, 1].reshape(shape),
        "threshold": mean.reshape(shape),
        "reason": why,
    }


def _dataset(
    grid: AnalysisGrid, horizons: Sequence[str], values: Mapping[str, np.ndarray]
) -> xr.Dataset:
    flags: dict[str, object] = {
        "long_name": "robustness of the change of mean yield",
        "comment": RULE,
        "flag_values": np.array([int(one) for one in Signal], dtype=np.int8),
        "flag_meanings": " ".join(one.name.lower() for one in Signal),
    }
    attributes: dict[str, dict[str, object]] = {
        "robustness": flags,
        "reason": reason_attributes(),
        "share_exceeding": {
            "long_name": "share of models that change more than variability",
            "units": "1",
        },
        "agreement": {"long_name": "share of models with the more common sign", "units": "1"},
        "threshold": {
            "long_name": "change that variability alone exceeds in one case of ten",
            "units": "percent",
        },
    }
    dims = ("horizon", "lat", "lon")
    names = xr.Variable("horizon", np.array(list(horizons)), {"long_name": "name of the horizon"})
    variables = {name: (dims, array, attributes[name]) for name, array in values.items()}
    return xr.Dataset(variables, grid.coordinates() | {"horizon": names})
