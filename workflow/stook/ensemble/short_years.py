"""Years of shortfall, counted (plain arrays).

A shortfall is a year with production at least a given share below the expected path. Two paths:
the baseline mean of the same member, which counts the change of the mean as well, and the smooth
path of the member itself, which counts the bad years around it only.
"""

from __future__ import annotations

import numpy as np
from numba import njit

REFERENCES = ("baseline mean", "smooth path")
"""The two expected paths."""


@njit(cache=True, nogil=True)
def short_counts(
    values: np.ndarray,
    paths: np.ndarray,
    base: np.ndarray,
    periods: np.ndarray,
    lengths: np.ndarray,
    share: float,
) -> tuple[np.ndarray, np.ndarray]:
    """Count years and shortfalls by period (kernel).

    (series, year) x 2, (series), (period, year), (period) -> (series, period), (series, period, 2)

    Parameters
    ----------
    values, paths
        Production and its smooth path, t; NaN is missing.
    base
        Baseline mean, t, above 0 or NaN.
    periods
        bool, years of each period.
    lengths
        Years of each period, whether the series has them or not.
    share
        Shortfall as a share of the expected production.

    Returns
    -------
    counted
        Years with a value.
    short
        Years with a shortfall against the baseline mean and the smooth path; NaN where the
        expectation is missing or fewer than two thirds of the years have a value.
    """
    counted = np.zeros((values.shape[0], periods.shape[0]))
    short = np.full((values.shape[0], periods.shape[0], 2), np.nan)
    for series in range(values.shape[0]):
        for period in range(periods.shape[0]):
            years, low, below = 0, 0, 0
            for year in range(values.shape[1]):
                value = values[series, year]
                if periods[period, year] and not np.isnan(value):
                    years += 1
                    low += value <= (1.0 - share) * base[series]
                    below += value <= (1.0 - share) * paths[series, year]
            counted[series, period] = years
            if years == 0 or 3 * years < 2 * lengths[period] or np.isnan(base[series]):
                continue
            short[series, period, 0] = low
            known = False
            for year in range(values.shape[1]):
                known = known or (periods[period, year] and not np.isnan(paths[series, year]))
            if known:
                short[series, period, 1] = below
    return counted, short


@njit(cache=True, nogil=True)
def short_years(
    values: np.ndarray, paths: np.ndarray, base: np.ndarray, share: float
) -> np.ndarray:
    """Mark the years of shortfall (kernel): (series, year) x 2, (series) -> (series, 2, year).

    1 a shortfall, 0 none, -1 unknown; arguments as of `short_counts`.
    """
    result = np.full((values.shape[0], 2, values.shape[1]), -1, np.int8)
    for series in range(values.shape[0]):
        for year in range(values.shape[1]):
            value = values[series, year]
            if np.isnan(value) or np.isnan(base[series]):
                continue
            result[series, 0, year] = value <= (1.0 - share) * base[series]
            if not np.isnan(paths[series, year]):
                result[series, 1, year] = value <= (1.0 - share) * paths[series, year]
    return result
