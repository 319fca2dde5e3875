"""Years of shortfall: how often production falls far below what was expected.

A shortfall is a year with production at least a given share (25 %, common practice, no source)
below the expected path. Two paths: the baseline mean of the same member, which counts the change
of the mean as well, and the smooth path of the member itself, which counts the bad years around
it only.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numba import njit
from scipy import stats

REFERENCES = ("baseline mean", "smooth path")
"""The two expected paths."""

LEVEL = 0.90
"""Coverage of the intervals."""

SHORTFALL = {
    **dict.fromkeys(("crop", "system", "region", "scenario", "period", "reference"), "str"),
    **dict.fromkeys(("simulations", "years"), "int64"),
    **dict.fromkeys(("share", "low", "high"), "float64"),
    **dict.fromkeys(("return_years", "return_low", "return_high"), "float64"),
    **dict.fromkeys(("member_mean", "member_p05", "member_p95"), "float64"),
    **dict.fromkeys(("worst_t", "worst_mean_t", "worst_percent"), "float64"),
}
"""Columns of the shortfall table; see docs/risk.md."""


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


def exact_interval(share: float, years: float, level: float = LEVEL) -> tuple[float, float]:
    """Return the interval of a probability by Clopper & Pearson (1934, Biometrika 26, 404-413).

    Parameters
    ----------
    share
        Share of years with the event.
    years
        Number of years, taken as independent; need not be whole (an effective number).

    Returns
    -------
    low, high
        It holds the true probability in at least `level` of cases.
    """
    if not years > 0 or not np.isfinite(share):
        return np.nan, np.nan
    events, tail = share * years, (1 - level) / 2
    low = 0.0 if events <= 0 else float(stats.beta.ppf(tail, events, years - events + 1))
    high = 1.0 if share >= 1 else float(stats.beta.ppf(1 - tail, events + 1, years - events))
    return low, high


def return_period(share: float) -> float:
    """Return the mean number of years between events, NaN where none was seen."""
    return 1.0 / share if share > 0 else np.nan


def pooled(shares: np.ndarray, years: np.ndarray, weights: np.ndarray) -> tuple[float, float]:
    """Return the weighted share of several simulations, and their effective number of years.

    The effective number is that of one sample with the same sampling variance,
    ``1 / sum(w_i^2 / n_i)``: all years if the weights follow the years.
    """
    used = weights > 0
    if not used.any():
        return np.nan, 0.0
    share, inverse = 0.0, 0.0
    for one, count, weight in zip(shares[used], years[used], weights[used], strict=True):
        share += weight * one
        inverse += weight * weight / count
    return min(float(share), 1.0), float(1.0 / inverse)


def shortfall_row(
    shares: np.ndarray, years: np.ndarray, weights: np.ndarray, members: Sequence[float]
) -> dict[str, float]:
    """Return the statement on one region, period and reference.

    Parameters
    ----------
    shares, years, weights
        Of each simulation, central estimate.
    members
        Mean, 5th and 95th percentile of the share over all members.
    """
    share, effective = pooled(shares, years, weights)
    low, high = exact_interval(share, effective)
    return {
        "simulations": int((weights > 0).sum()),
        "years": int(years[weights > 0].sum()),
        "share": share,
        "low": low,
        "high": high,
        "return_years": return_period(share),
        "return_low": return_period(high),
        "return_high": return_period(low),
        "member_mean": members[0],
        "member_p05": members[1],
        "member_p95": members[2],
    }


def stacked_rows(rows: Sequence[dict[str, object]], columns: dict[str, str]) -> pd.DataFrame:
    """Return rows as a table of the given columns and types."""
    frame = pd.DataFrame(list(rows), columns=list(columns))
    return frame.astype(columns)
