"""Bars by horizon: the share of members in each class of yield change, period after period."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
import pandas as pd

from stook.ensemble.changes import members_of
from stook.ensemble.series import Models
from stook.ensemble.summary import RunSummary, Years, labelled, period_weights

CLASSES = {
    **dict.fromkeys(("crop", "system", "region", "scenario"), "str"),
    **dict.fromkeys(("first", "last", "members", "simulations"), "int64"),
    "number": "int64",
    **dict.fromkeys(("lower", "upper", "share", "central_share"), "float64"),
}
"""Columns of the class table; bounds in per cent, infinite ends NaN; shares 0 to 1."""


def successive_periods(baseline_end: int, last: int, length: int) -> tuple[Years, ...]:
    """Return the whole periods of a length after the baseline.

    Examples
    --------
    >>> successive_periods(2020, 2099, 20)
    ((2021, 2040), (2041, 2060), (2061, 2080))
    """
    starts = range(baseline_end + 1, last - length + 2, length)
    return tuple((start, start + length - 1) for start in starts)


def class_shares(values: np.ndarray, weights: np.ndarray, bounds: np.ndarray) -> np.ndarray:
    """Return the share of members in each class: (member), (member), (bound) -> (bound + 1).

    Class k holds ``bounds[k-1] <= value < bounds[k]``; NaN members do not count.

    Examples
    --------
    >>> class_shares(np.array([-12.0, -5.0, 3.0, 3.0]), np.ones(4), np.array([-5.0, 0.0]))
    array([0.25, 0.25, 0.5 ])
    """
    there = np.isfinite(values)
    place = np.searchsorted(bounds, values[there], side="right")
    shares = np.bincount(place, weights=weights[there], minlength=bounds.size + 1)
    total = shares.sum()
    return shares / total if total > 0 else np.full(shares.size, np.nan)


def class_table(
    runs: Sequence[RunSummary], models: Models, steps: Sequence[Years], bounds: Sequence[float]
) -> pd.DataFrame:
    """Return the share of members by class, columns `CLASSES`.

    Parameters
    ----------
    runs
        Of one scenario, crop and system.
    steps
        The successive periods.
    bounds
        Per cent, ascending.
    """
    edges = np.array(bounds, dtype=np.float64)
    lower, upper = np.array(list(pairwise([np.nan, *edges, np.nan]))).T
    first = runs[0]
    parts = []
    for number, (start, stop) in enumerate(steps):
        values = np.stack([run.steps[:, number] for run in runs], axis=1)  # region, run, draw
        weights = period_weights(np.isfinite(values[..., 0]), models)
        for region, name in first.grown():
            change = members_of(values[region])
            if not np.isfinite(change).any():
                continue
            own = np.repeat(weights[region][:, None] / change.shape[1], change.shape[1], axis=1)
            central = class_shares(values[region, :, 0], weights[region], edges)
            parts.append(
                {
                    "region": name,
                    "first": start,
                    "last": stop,
                    "members": int(np.isfinite(change).sum()),
                    "simulations": int((weights[region] > 0).sum()),
                    "number": np.arange(edges.size + 1),
                    "lower": lower,
                    "upper": upper,
                    "share": class_shares(change.ravel(), own.ravel(), edges),
                    "central_share": central,
                }
            )
    names = {"system": first.system, "scenario": first.simulation.scenario}
    return labelled(parts, CLASSES, crop=first.crop, **names)
