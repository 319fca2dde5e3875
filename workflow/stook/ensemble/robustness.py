"""Robust, no robust signal, conflicting: the advanced approach of IPCC AR6.

IPCC AR6 WGI (2021), Cross-Chapter Box Atlas.1. A change counts where it is larger than what
variability alone gives in 90 % of cases: ``1.645 s sqrt(1/n + 1/m)``, s the standard deviation of
single years about a straight line over the baseline, n and m the years of the two periods (with
20 years each ``sqrt(2/20) 1.645 s``, from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from enum import IntEnum

import numpy as np
import pandas as pd
from numba import njit

from stook.constants import CENTRAL_DRAW
from stook.ensemble.series import Models
from stook.ensemble.summary import RunSummary, period_weights, stacked_rows

EXCEEDING = 0.66
"""Share of models whose change must exceed the threshold."""

AGREEING = 0.80
"""Share of models that must agree on the sign."""

NORMAL_90 = 1.645
"""Two-sided 90 % quantile of the normal distribution, as the source has it."""

RULE = (
    "robust: at least 66 % of models change more than variability and at least 80 % agree on the "
    "sign; no robust signal: fewer than 66 % change more than variability; conflicting: at least "
    "66 % do, but fewer than 80 % agree on the sign"
)
"""The rule in words."""

ROBUSTNESS = {
    **dict.fromkeys(("crop", "system", "region", "scenario", "horizon"), "str"),
    **dict.fromkeys(("models", "simulations"), "int64"),
    **dict.fromkeys(("effective_models", "threshold", "share_exceeding", "agreement"), "float64"),
    "robustness": "str",
}
"""Columns of the robustness table; threshold in per cent, mean over simulations."""


class Signal(IntEnum):
    """Class of a change; 0 is no value."""

    NO_VALUE = 0
    ROBUST = 1
    NO_ROBUST_SIGNAL = 2
    CONFLICTING = 3


WORDS = {
    Signal.ROBUST: "robust",
    Signal.NO_ROBUST_SIGNAL: "no robust signal",
    Signal.CONFLICTING: "conflicting",
}
"""The classes as they stand in tables."""


def variability_threshold(deviation: np.ndarray, baseline: int, horizon: int) -> np.ndarray:
    """Return the change that variability alone exceeds in 10 % of cases.

    Parameters
    ----------
    deviation
        Standard deviation of single years, any shape and unit.
    baseline, horizon
        Years of the two periods.

    Examples
    --------
    >>> round(float(variability_threshold(np.float64(1.0), 20, 20)), 4)
    0.5202
    """
    return NORMAL_90 * deviation * np.sqrt(1.0 / baseline + 1.0 / horizon)


@njit(cache=True, nogil=True)
def classify(
    change: np.ndarray, threshold: np.ndarray, model: np.ndarray, models: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the class of a change (kernel): (series, simulation) x 2 -> (series) x 3 shares.

    A model counts once, with the mean change and the mean threshold of its realisations.

    Parameters
    ----------
    change, threshold
        Same unit; a simulation without one of the two does not count.
    model
        int, number of each simulation's model.
    models
        Number of models.

    Returns
    -------
    signal
        int8, see `Signal`.
    shares
        Share of models beyond the threshold, share that agrees on the more common sign;
        (series, 2).
    counts
        int64, models and simulations with a value, (series, 2).
    """
    signal = np.zeros(change.shape[0], np.int8)
    shares = np.full((change.shape[0], 2), np.nan)
    counts = np.zeros((change.shape[0], 2), np.int64)
    for series in range(change.shape[0]):
        number, moved, bar = np.zeros(models), np.zeros(models), np.zeros(models)
        for s in range(model.size):
            if np.isnan(change[series, s]) or np.isnan(threshold[series, s]):
                continue
            number[model[s]] += 1.0
            moved[model[s]] += change[series, s]
            bar[model[s]] += threshold[series, s]
            counts[series, 1] += 1
        there, beyond, up, down = 0, 0, 0, 0
        for m in range(models):
            if number[m] > 0.0:
                there += 1
                beyond += abs(moved[m]) > bar[m]
                up += moved[m] > 0.0
                down += moved[m] < 0.0
        counts[series, 0] = there
        if there == 0:
            continue
        shares[series, 0] = beyond / there
        shares[series, 1] = max(up, down) / there
        if shares[series, 0] < EXCEEDING:
            signal[series] = 2
        else:
            signal[series] = 1 if shares[series, 1] >= AGREEING else 3
    return signal, shares, counts


def effective_models(models: Models, there: np.ndarray) -> float:
    """Return the effective number of models, ``(sum w)^2 / sum w^2`` (Kish 1965, Survey Sampling).

    The number of models if they have equal weights, fewer if some weigh more. It says nothing of
    what models have in common.

    Parameters
    ----------
    there
        bool, the simulations that count.
    """
    weights = models.weight[np.unique(models.number[there])]
    total = float(weights.sum())
    return total * total / float((weights * weights).sum()) if total > 0 else 0.0


def robustness_table(
    runs: Sequence[RunSummary], models: Models, horizons: Sequence[str]
) -> pd.DataFrame:
    """Return the class of every regional change of one scenario, columns `ROBUSTNESS`.

    Central estimate; models count once each, whatever their weight.
    """
    first = runs[0]
    rows: list[dict[str, object]] = []
    for horizon in horizons:
        shape = (len(first.regions), len(runs))
        change, threshold = np.full(shape, np.nan), np.full(shape, np.nan)
        for number, run in enumerate(runs):
            if horizon not in run.windows:
                continue
            change[:, number] = run.change(horizon)[:, CENTRAL_DRAW]
            years = [b - a + 1 for a, b in (run.windows[run.periods[0]], run.windows[horizon])]
            threshold[:, number] = variability_threshold(run.baseline_deviation, *years)
        signal, shares, counts = classify(change, threshold, models.number, models.weight.size)
        there = np.isfinite(change) & np.isfinite(threshold)
        weights = period_weights(there, models)
        for region, name in first.grown():
            known = weights[region] > 0
            mean = float((weights[region, known] * threshold[region, known]).sum())
            rows.append(
                {
                    "crop": first.crop,
                    "system": first.system,
                    "region": name,
                    "scenario": first.simulation.scenario,
                    "horizon": horizon,
                    "models": counts[region, 0],
                    "simulations": counts[region, 1],
                    "effective_models": effective_models(models, there[region]),
                    "threshold": mean if known.any() else np.nan,
                    "share_exceeding": shares[region, 0],
                    "agreement": shares[region, 1],
                    "robustness": WORDS.get(Signal(int(signal[region]))),
                }
            )
    return stacked_rows(rows, ROBUSTNESS)
