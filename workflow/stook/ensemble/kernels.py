"""Statistics over ensemble members (plain arrays).

All sums run over members, or years, in order, so that a value does not depend on what else is
computed beside it.
"""

from __future__ import annotations

import numpy as np
from numba import njit

SHARE_OF_YEARS = 2.0 / 3.0
"""Share of a period's years that a mean needs."""


@njit(cache=True, nogil=True)
def period_means(values: np.ndarray, inside: np.ndarray, length: int) -> np.ndarray:
    """Return means over a period (kernel): (series, year), (year) -> (series).

    Parameters
    ----------
    values
        float64; NaN is missing.
    inside
        bool: the years of the period.
    length
        Years of the period, whether the series has them or not.

    Returns
    -------
    ndarray
        NaN with values in fewer than two thirds of the years.
    """
    result = np.full(values.shape[0], np.nan)
    for series in range(values.shape[0]):
        total, count = 0.0, 0
        for year in range(values.shape[1]):
            value = values[series, year]
            if inside[year] and not np.isnan(value):
                total += value
                count += 1
        if count > 0 and count >= SHARE_OF_YEARS * length - 1e-9:
            result[series] = total / count
    return result


@njit(cache=True, nogil=True)
def simulation_weights(
    there: np.ndarray, model: np.ndarray, model_weight: np.ndarray
) -> np.ndarray:
    """Return the weight of each simulation (kernel): (simulation), (simulation), (model).

    A model's weight is shared equally by its simulations that have a value; weights sum to 1.

    Parameters
    ----------
    there
        bool: the simulation has a value.
    model
        int: number of its model.
    model_weight
        float64, not negative.
    """
    count = np.zeros(model_weight.size)
    for s in range(there.size):
        if there[s]:
            count[model[s]] += 1.0
    weights = np.zeros(there.size)
    total = 0.0
    for s in range(there.size):
        if there[s]:
            weights[s] = model_weight[model[s]] / count[model[s]]
            total += weights[s]
    for s in range(there.size):
        weights[s] = weights[s] / total if total > 0.0 else 0.0
    return weights


@njit(cache=True, nogil=True)
def percentiles(values: np.ndarray, weights: np.ndarray, shares: np.ndarray) -> np.ndarray:
    """Return weighted percentiles (kernel): (member), (member), (q) -> (q).

    Members sorted by value are laid end to end, each as long as its share of the weight, from 0 to
    1. Percentile p is the mean of what lies between ``(n - 1) p / n`` and ``((n - 1) p + 1) / n``,
    where n is the effective number of members (Kish 1965), ``(sum w)**2 / sum w**2``. With equal
    weights this is definition 7 of Hyndman & Fan (1996), the usual one; the extension to weights is
    that of Akinshin (2023, arXiv:2304.07265). Neither the order of equal values nor members of no
    weight matter.

    Parameters
    ----------
    values
        float64, without NaN.
    weights
        float64; members of weight 0 do not count.
    shares
        float64 in 0..1, ascending.
    """
    kept = np.flatnonzero(weights > 0.0)
    result = np.full(shares.size, np.nan)
    if kept.size == 0:
        return result
    equal = True
    for member in kept:
        equal = equal and weights[member] == weights[kept[0]]
    if equal:
        ordered = np.sort(values[kept])
        for q in range(shares.size):
            place = shares[q] * (kept.size - 1)
            below = int(place)
            above = min(below + 1, kept.size - 1)
            step = ordered[above] - ordered[below]
            result[q] = ordered[below] + (place - below) * step
        return result
    order = kept[np.argsort(values[kept], kind="mergesort")]
    total, squares = 0.0, 0.0
    for member in order:
        total += weights[member]
        squares += weights[member] * weights[member]
    effective = total * total / squares
    for q in range(shares.size):
        low = (effective - 1.0) * shares[q] / effective
        high = low + 1.0 / effective
        start, value, length = 0.0, 0.0, 0.0
        for member in order:
            end = start + weights[member] / total
            part = min(end, high) - max(start, low)
            if part > 0.0:
                value += part * values[member]
                length += part
            start = end
        result[q] = value / length
    return result


@njit(cache=True, nogil=True)
def member_statistics(
    values: np.ndarray,
    simulation: np.ndarray,
    model: np.ndarray,
    model_weight: np.ndarray,
    shares: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Summarise members (kernel): (series, member), (member), (simulation), (model), (q).

    The members of a simulation share its weight equally, those without a value left out.

    Parameters
    ----------
    values
        float64; NaN is missing.
    simulation
        int, number of each member's simulation.
    model
        int, number of each simulation's model.
    model_weight
        float64, not negative.
    shares
        float64 in 0..1, ascending: percentiles wanted, 0.5 among them; none for the mean alone.

    Returns
    -------
    statistics
        float64, shape (series, 3 + q): mean, share of members below 0, share of models whose mean
        has the sign of the median, percentiles. NaN without members.
    counts
        int64, shape (series, 3): members, simulations, models with a value and a weight.
    """
    middle = int(np.argmin(np.abs(shares - 0.5))) if shares.size else 0
    statistics = np.full((values.shape[0], 3 + shares.size), np.nan)
    counts = np.zeros((values.shape[0], 3), np.int64)
    weights = np.empty(values.shape[1])
    for series in range(values.shape[0]):
        row = values[series]
        draws = np.zeros(model.size)
        sums = np.zeros(model.size)
        for m in range(row.size):
            if not np.isnan(row[m]):
                draws[simulation[m]] += 1.0
                sums[simulation[m]] += row[m]
        own = simulation_weights(draws > 0, model, model_weight)
        mean, falling = 0.0, 0.0
        for m in range(row.size):
            weights[m] = 0.0
            s = simulation[m]
            if not np.isnan(row[m]) and own[s] > 0.0:
                weights[m] = own[s] / draws[s]
                mean += weights[m] * row[m]
                falling += weights[m] if row[m] < 0.0 else 0.0
                counts[series, 0] += 1
        if counts[series, 0] == 0:
            continue
        statistics[series, 0] = mean
        statistics[series, 1] = min(falling, 1.0)
        if shares.size == 0:
            continue
        statistics[series, 3:] = percentiles(row, weights, shares)
        sign = np.sign(statistics[series, 3 + middle])
        agreeing = _agreeing(sums, draws, own, model, model_weight.size, sign, counts[series])
        statistics[series, 2] = agreeing
    return statistics, counts


@njit(cache=True, nogil=True)
def _agreeing(
    sums: np.ndarray,
    draws: np.ndarray,
    own: np.ndarray,
    model: np.ndarray,
    models: int,
    sign: float,
    counts: np.ndarray,
) -> float:
    """Return the share of models whose mean has a sign, each counted once; fill the counts."""
    means, found = np.zeros(models), np.zeros(models)
    for s in range(model.size):
        if own[s] > 0.0:
            means[model[s]] += sums[s] / draws[s]
            found[model[s]] += 1.0
            counts[1] += 1
    agreeing = 0
    for k in range(models):
        if found[k] > 0.0:
            counts[2] += 1
            agreeing += np.sign(means[k] / found[k]) == sign
    return agreeing / counts[2]
