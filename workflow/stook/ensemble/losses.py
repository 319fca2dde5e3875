"""Where the losses are: shares of harvested area, and of regions, beyond a limit."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numba import njit

from stook.constants import OUTSIDE
from stook.ensemble.changes import members_of
from stook.ensemble.kernels import percentiles
from stook.ensemble.series import Models
from stook.ensemble.summary import TOTAL, RunSummary, period_weights, stacked_rows

LIMITS = (10.0, 25.0)
"""Losses counted, per cent of the baseline yield."""

_SHARES = np.array([0.05, 0.50, 0.95])

LOSSES = {
    **dict.fromkeys(("of", "crop", "system", "region", "scenario", "horizon"), "str"),
    "limit": "float64",
    "simulations": "int64",
    **dict.fromkeys(("whole", "mean", "p05", "p50", "p95"), "float64"),
}
"""Columns of the loss tables: `of` is area or regions, `whole` the hectares or regions there are,
the others shares 0 to 1 of it: over simulations for area (central estimate), over members for
regions."""


@njit(cache=True, nogil=True)
def add_losing(
    change: np.ndarray,
    weights: np.ndarray,
    limits: np.ndarray,
    losing: np.ndarray,
    whole: np.ndarray,
) -> None:
    """Add the area that loses more than each limit (kernel).

    (row, pixel), (region, pixel), (limit) -> (row, region, limit), (row, region)

    Parameters
    ----------
    change
        per cent; NaN is missing.
    weights
        ha.
    limits
        per cent, positive.
    losing, whole
        ha, added to in pixel order: area beyond each limit, and with a value.
    """
    for row in range(change.shape[0]):
        for region in range(weights.shape[0]):
            for pixel in range(change.shape[1]):
                area = weights[region, pixel]
                if not area > 0.0 or np.isnan(change[row, pixel]):
                    continue
                whole[row, region] += area
                for k in range(limits.size):
                    if change[row, pixel] < -limits[k]:
                        losing[row, region, k] += area


def spread_row(shares: np.ndarray, weights: np.ndarray) -> dict[str, float]:
    """Return mean and percentiles of (run, member) shares; weights of runs sum to 1."""
    own = np.repeat(weights[:, None] / shares.shape[1], shares.shape[1], axis=1)
    found = percentiles(shares.ravel(), own.ravel(), _SHARES)
    names = dict(zip(("p05", "p50", "p95"), found, strict=True))
    return {"mean": min(float((own * shares).sum()), 1.0), **names}


def region_losses(
    runs: Sequence[RunSummary], models: Models, horizons: Sequence[str]
) -> pd.DataFrame:
    """Return the share of regions that lose, one scenario, crop and system, columns `LOSSES`.

    Regions are those of the run with a yield; each counts once.
    """
    first = runs[0]
    units = [
        number
        for number, name in first.grown()
        if name not in (OUTSIDE, TOTAL) and first.area[number] > 0
    ]
    rows: list[dict[str, object]] = []
    for horizon in horizons:
        have = [number for number, run in enumerate(runs) if horizon in run.windows]
        if not have or not units:
            continue
        change = np.stack([members_of(runs[n].change(horizon).T[None])[0][:, units] for n in have])
        there = np.isfinite(change).all(axis=(1, 2))
        if not there.any():
            continue
        own = Models(models.number[have], models.weight)
        weights = period_weights(there[None], own)[0]
        for limit in LIMITS:
            shares = (change[there] < -limit).mean(axis=2)
            rows.append(
                {
                    "of": "regions",
                    "crop": first.crop,
                    "system": first.system,
                    "region": TOTAL,
                    "scenario": first.simulation.scenario,
                    "horizon": horizon,
                    "limit": limit,
                    "simulations": int(there.sum()),
                    "whole": len(units),
                    **spread_row(shares, weights[there]),
                }
            )
    return stacked_rows(rows, LOSSES)


def area_losses(
    losing: np.ndarray,
    whole: np.ndarray,
    models: Models,
    regions: Sequence[str],
    horizons: Sequence[str],
    **names: str,
) -> pd.DataFrame:
    """Return the share of harvested area that loses, columns `LOSSES`.

    Parameters
    ----------
    losing, whole
        ha, (simulation, horizon, region, limit) and (simulation, horizon, region).
    names
        crop, system and scenario.
    """
    rows: list[dict[str, object]] = []
    for place, horizon in enumerate(horizons):
        for region, name in enumerate(regions):
            area = whole[:, place, region]
            there = area > 0
            if not there.any():
                continue
            weights = period_weights(there[None], models)[0][there]
            for number, limit in enumerate(LIMITS):
                shares = losing[there, place, region, number] / area[there]
                counted = {"limit": limit, "simulations": int(there.sum())}
                mean = float((weights * area[there]).sum())
                row = {"of": "area", "region": name, "horizon": horizon, "whole": mean}
                rows.append({**names, **row, **counted, **spread_row(shares[:, None], weights)})
    return stacked_rows(rows, LOSSES)
