"""Risk of one region under one simulation, written for reading; no code shared."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

Years = tuple[int, int]


def smooth_path(years: Sequence[int], values: Sequence[float]) -> list[float]:
    """Return the fourth-order polynomial through the years that have a value, in every year."""
    known = [(year, value) for year, value in zip(years, values, strict=True) if value == value]
    middle = (known[0][0] + known[-1][0]) / 2
    x = [(year - middle) / 50 for year, _ in known]
    coefficients = np.polyfit(x, [value for _, value in known], 4)
    return [float(np.polyval(coefficients, (year - middle) / 50)) for year in years]


def mean_of(years: Sequence[int], values: Sequence[float], period: Years) -> float:
    """Average over a period; NaN with fewer than two thirds of its years."""
    chosen = [
        value
        for year, value in zip(years, values, strict=True)
        if period[0] <= year <= period[1] and value == value
    ]
    if 3 * len(chosen) < 2 * (period[1] - period[0] + 1):
        return math.nan
    return sum(chosen) / len(chosen)


def shortfalls(
    years: Sequence[int],
    values: Sequence[float],
    baseline: Years,
    period: Years,
    percent: float,
    smooth: bool,
) -> int:
    """Count the years of a period with production so far below the expected path."""
    base = mean_of(years, values, baseline)
    path = smooth_path(years, values) if smooth else [base] * len(values)
    count = 0
    for year, value, expected in zip(years, values, path, strict=True):
        if period[0] <= year <= period[1] and value <= (1 - percent / 100) * expected:
            count += 1
    return count


def year_of_emergence(
    years: Sequence[int], values: Sequence[float], baseline: Years, ratio: float, lasting: int
) -> int | None:
    """Return the first year from which the smooth change stays beyond the noise, to the end."""
    path = smooth_path(years, values)
    rest = [value - expected for value, expected in zip(values, path, strict=True)]
    noise = math.sqrt(sum(one * one for one in rest) / (len(rest) - 5))
    origin = mean_of(years, path, baseline)
    for number, year in enumerate(years):
        left = [one - origin for one in path[number:]]
        beyond = all(one > ratio * noise for one in left) or all(
            one < -ratio * noise for one in left
        )
        if year > baseline[1] and beyond and len(left) >= lasting:
            return int(year)
    return None


def robustness(
    changes: Sequence[float], deviations: Sequence[float], baseline: int, horizon: int
) -> str:
    """Return the class of the changes of several models with one simulation each.

    Parameters
    ----------
    changes, deviations
        Change, and standard deviation of single years about a straight line; same unit.
    baseline, horizon
        Years of the two periods.
    """
    factor = 1.645 * math.sqrt(1 / baseline + 1 / horizon)
    beyond = sum(abs(c) > factor * s for c, s in zip(changes, deviations, strict=True))
    up, down = sum(c > 0 for c in changes), sum(c < 0 for c in changes)
    if beyond < 0.66 * len(changes):
        return "no robust signal"
    return "robust" if max(up, down) >= 0.80 * len(changes) else "conflicting"


def line_deviation(years: Sequence[int], values: Sequence[float], period: Years) -> float:
    """Return the standard deviation about a straight line over a period."""
    chosen = [
        (year, value)
        for year, value in zip(years, values, strict=True)
        if period[0] <= year <= period[1] and value == value
    ]
    x, y = (np.array(column, dtype=float) for column in zip(*chosen, strict=True))
    rest = y - np.polyval(np.polyfit(x - x.mean(), y, 1), x - x.mean())
    return math.sqrt(float((rest**2).sum()) / (len(y) - 2))
