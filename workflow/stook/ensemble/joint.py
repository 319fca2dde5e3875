"""Shortfalls in the same year: of several regions, or of several crops of one region.

The share of years in which at least k of n fall short, against what independence would give with
each one's own frequency (the Poisson binomial distribution). Central estimate; regions are those
of the run, so that a run for some regions speaks of these only.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd
from numba import njit

from stook.constants import OUTSIDE
from stook.ensemble.kernels import SHARE_OF_YEARS, simulation_weights
from stook.ensemble.series import Models
from stook.ensemble.short_years import REFERENCES
from stook.ensemble.summary import TOTAL, RunSummary, Years, stacked_rows

ALL_CROPS = "all crops"
"""Name in the column `crop` of what holds for the crops together."""

MOST_LISTED = 10
"""Every k up to this has a row; above, every fifth."""

JOINT = {
    **dict.fromkeys(("of", "crop", "region", "scenario", "period", "reference"), "str"),
    **dict.fromkeys(("units", "at_least", "simulations", "years"), "int64"),
    **dict.fromkeys(("share", "independent", "ratio"), "float64"),
}
"""Columns of the table; `of` is regions or crops, `units` how many, shares of years 0 to 1."""


@njit(cache=True, nogil=True)
def at_least(shares: np.ndarray) -> np.ndarray:
    """Return the probability of at least k independent events (kernel): (n) -> (n + 1).

    Parameters
    ----------
    shares
        Probability of each event, shape (n).

    Examples
    --------
    >>> at_least(np.array([0.5, 0.5]))
    array([1.  , 0.75, 0.25])
    """
    exactly = np.zeros(shares.size + 1)
    exactly[0] = 1.0
    for number in range(shares.size):
        share = shares[number]
        for k in range(number + 1, 0, -1):
            exactly[k] = exactly[k] * (1.0 - share) + exactly[k - 1] * share
        exactly[0] *= 1.0 - share
    total = 0.0
    for k in range(shares.size, -1, -1):
        total += exactly[k]
        exactly[k] = min(total, 1.0)
    return exactly


def joint_shares(flags: np.ndarray) -> tuple[np.ndarray, np.ndarray, int]:
    """Return how often at least k fall short together, observed and if independent.

    Parameters
    ----------
    flags
        1 short, 0 not, -1 unknown, shape (unit, year); a year with an unknown is left out.

    Returns
    -------
    observed, independent
        shape (unit + 1), for k = 0 to the number of units; NaN without a year.
    years
        Years used.
    """
    known = (flags >= 0).all(axis=0)
    years = int(known.sum())
    if years == 0:
        return np.full(len(flags) + 1, np.nan), np.full(len(flags) + 1, np.nan), 0
    short = flags[:, known] == 1
    number = short.sum(axis=0)
    observed = np.bincount(number, minlength=len(flags) + 1)[::-1].cumsum()[::-1] / years
    return observed, at_least(short.mean(axis=1)), years


def joint_regions(runs: Sequence[RunSummary], models: Models) -> pd.DataFrame:
    """Return the joint shortfalls of the regions, one scenario and crop, columns `JOINT`."""
    first = runs[0]
    units = [
        number
        for number, name in first.grown()
        if name not in (OUTSIDE, TOTAL) and first.area[number] > 0
    ]
    stacks = [(run.flags[units], run.years, run.windows) for run in runs]
    names = {"of": "regions", "crop": first.crop, "region": TOTAL}
    rows = _rows(stacks, models, names | {"scenario": first.simulation.scenario})
    return stacked_rows(rows, JOINT)


def joint_crops(by_crop: Sequence[Sequence[RunSummary]], models: Models) -> pd.DataFrame:
    """Return the joint shortfalls of the crops in each region, one scenario, columns `JOINT`.

    Parameters
    ----------
    by_crop
        For every crop, the runs of the scenario, in the same order.
    """
    rows: list[dict[str, object]] = []
    for region in by_crop[0][0].regions:
        grown = [
            runs
            for runs in by_crop
            if region in runs[0].regions and runs[0].area[runs[0].regions.index(region)] > 0
        ]
        if len(grown) < 2:
            continue
        stacks = []
        for together in zip(*grown, strict=True):
            years = together[0].years
            for run in together[1:]:
                years = np.intersect1d(years, run.years)
            flags = np.stack(
                [r.flags[r.regions.index(region)][:, np.isin(r.years, years)] for r in together]
            )
            stacks.append((flags, years, together[0].windows))
        names = {"of": "crops", "crop": ALL_CROPS, "region": region}
        names["scenario"] = by_crop[0][0].simulation.scenario
        rows += _rows(stacks, models, names)
    return stacked_rows(rows, JOINT)


def _rows(
    stacks: Sequence[tuple[np.ndarray, np.ndarray, Mapping[str, Years]]],
    models: Models,
    names: dict[str, str],
) -> list[dict[str, object]]:
    """Return the rows of units whose flags are (unit, reference, year), a stack per simulation."""
    rows: list[dict[str, object]] = []
    units = len(stacks[0][0])
    if units < 2:
        return rows
    for period in dict.fromkeys(name for _, _, windows in stacks for name in windows):
        for number, reference in enumerate(REFERENCES):
            observed, independent, years = [], [], []
            for flags, year, windows in stacks:
                first, last = windows.get(period, (1, 0))
                inside = (year >= first) & (year <= last)
                found = joint_shares(flags[:, number][:, inside])
                if found[2] < SHARE_OF_YEARS * (last - first + 1):
                    found = (*joint_shares(flags[:, number][:, :0])[:2], 0)
                observed.append(found[0])
                independent.append(found[1])
                years.append(found[2])
            there = np.array(years) > 0
            if not there.any():
                continue
            weights = simulation_weights(there, models.number, models.weight)
            counted = {"units": units, "simulations": int(there.sum()), "years": sum(years)}
            own = names | {"period": period, "reference": reference}
            for k in _listed(units):
                share, chance = _mean(observed, weights, k), _mean(independent, weights, k)
                ratio = share / chance if chance > 0 else np.nan
                numbers = {"at_least": k, "share": share, "independent": chance, "ratio": ratio}
                rows.append({**own, **counted, **numbers})
    return rows


def _mean(values: Sequence[np.ndarray], weights: np.ndarray, k: int) -> float:
    total = 0.0
    for value, weight in zip(values, weights, strict=True):
        if weight > 0:
            total += float(weight * value[k])
    return min(total, 1.0)


def _listed(units: int) -> list[int]:
    return [k for k in range(1, units + 1) if k <= MOST_LISTED or k % 5 == 0 or k == units]
