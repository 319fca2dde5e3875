"""Trends of many series at once: slopes, lag-1 correlation and p-values against random trends."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import dask
import numpy as np

from stook.assessment.schema import Assessment
from stook.trend import kernels
from stook.trend.blocktest import ROUNDING, Detrended, block_test
from stook.trend.randomise import Randomisations, randomisations

BLOCK = 256
"""Series a kernel call works on (measured: the sums of a block stay in the first cache)."""

LARGEST_GAP_SHARE = 0.1
"""Largest share of the years between first and last that may be missing."""


ALWAYS = ("ar1", "shuffle")
"""Tests that are always made, besides the one of the assessment."""


@dataclass(frozen=True)
class TrendOptions:
    """What the trend of a series depends on besides its values; see `assessment.schema.Trend`."""

    seed: int
    count: int
    minimum_years: int
    method: str = "ar1"
    level: float = 0.05

    @property
    def tests(self) -> tuple[str, ...]:
        """The tests to make, by name (see `stook.trend.blocktest.block_test`)."""
        return ALWAYS if self.method in ALWAYS else (*ALWAYS, self.method)

    @classmethod
    def of(cls, assessment: Assessment) -> TrendOptions:
        """Return the options of an assessment."""
        spec = assessment.trend
        return cls(
            assessment.seed, spec.randomisations, spec.minimum_years, spec.method, spec.level
        )


@dataclass(frozen=True)
class SeriesTrends:
    """Trends of s series; shape (s,) each, NaN where there are too few years.

    Attributes
    ----------
    years
        int64, values used, 0 where there is no trend.
    slope, theil_sen
        Unit of the series per year.
    lag1
        Lag-1 correlation of the residuals, corrected for bias; NaN for a straight line.
    p
        Two-sided p-values by test.
    """

    years: np.ndarray
    slope: np.ndarray
    theil_sen: np.ndarray
    lag1: np.ndarray
    p: dict[str, np.ndarray]


@dataclass(frozen=True)
class RandomTrends:
    """Randomised trends of s series by the method of the assessment, the observed one first.

    Attributes
    ----------
    slopes
        float64, shape (m + 1, s), unit of the series per year.
    significant
        bool, shape (m + 1, s): at the level of the options, every row judged against all m + 1.
    """

    slopes: np.ndarray
    significant: np.ndarray


def series_trends(
    values: np.ndarray, years: np.ndarray, options: TrendOptions, with_random: bool = False
) -> tuple[SeriesTrends, RandomTrends | None]:
    """Return the trends of series; each depends on its own values only.

    Years missing at the ends shorten a series; a series may miss a tenth of the years between its
    first and its last. One with less than ``options.minimum_years`` values has no trend.

    Parameters
    ----------
    values
        float64, shape (n, s); NaN is missing.
    years
        int, shape (n,), increasing.
    options
        Seed, number of randomisations and the like.
    with_random
        Return the randomised trends as well (8 (m + 1) s bytes).
    """
    series = values.shape[1]
    trends = SeriesTrends(
        years=np.zeros(series, dtype=np.int64),
        slope=np.full(series, np.nan),
        theil_sen=np.full(series, np.nan),
        lag1=np.full(series, np.nan),
        p={name: np.full(series, np.nan) for name in options.tests},
    )
    random = None
    if with_random:
        shape = (options.count + 1, series)
        random = RandomTrends(np.full(shape, np.nan), np.zeros(shape, dtype=bool))
    blocks = list(same_years(values, years, options))
    tasks = [
        dask.delayed(_block_trends)(values[np.ix_(rows, columns)], drawn, options, with_random)
        for rows, columns, drawn in blocks
    ]
    for (rows, columns, _), result in zip(blocks, dask.compute(*tasks), strict=True):
        trends.years[columns] = rows.sum()
        _store(trends, random, columns, result)
    return trends, random


def _store(
    trends: SeriesTrends,
    random: RandomTrends | None,
    columns: np.ndarray,
    result: dict[str, np.ndarray],
) -> None:
    for name in ("slope", "theil_sen", "lag1"):
        getattr(trends, name)[columns] = result[name]
    for name, p in trends.p.items():
        p[columns] = result[f"p_{name}"]
    if random is not None:
        random.slopes[:, columns] = result["random_slopes"]
        random.significant[:, columns] = result["random_significant"]


def draw(years: np.ndarray, options: TrendOptions) -> Randomisations | None:
    """Return the randomisations for the years a series has, or None if they are too few."""
    if len(years) < options.minimum_years:
        return None
    span = years[-1] - years[0] + 1
    if span - len(years) > LARGEST_GAP_SHARE * span:
        return None
    return randomisations(options.seed, tuple(years.tolist()), options.count)


def same_years(
    values: np.ndarray, years: np.ndarray, options: TrendOptions
) -> Iterator[tuple[np.ndarray, np.ndarray, Randomisations]]:
    """Yield blocks of series with the same years: row mask, columns, randomisations."""
    valid = np.isfinite(values)
    patterns, which = np.unique(np.packbits(valid, axis=0), axis=1, return_inverse=True)
    which = which.reshape(-1)
    for k in range(patterns.shape[1]):
        columns = np.flatnonzero(which == k)
        rows = valid[:, columns[0]]
        drawn = draw(np.asarray(years)[rows], options)
        if drawn is None:
            continue
        for first in range(0, len(columns), BLOCK):
            yield rows, columns[first : first + BLOCK], drawn


def _block_trends(
    values: np.ndarray, drawn: Randomisations, options: TrendOptions, with_random: bool
) -> dict[str, np.ndarray]:
    """Return the trends of one block of complete series, ``(n, s) -> (s)`` each, per year."""
    positions = np.array(drawn.years, dtype=np.float64)
    low, high = values.min(axis=0), values.max(axis=0)
    constant = high - low <= ROUNDING * np.maximum(np.abs(low), np.abs(high))
    values = np.where(constant, 0.0, values)
    slope, _ = kernels.linear_fit(values, positions)
    detrended = Detrended.of(values)
    result = {
        "slope": slope,
        "theil_sen": kernels.theil_sen(values, positions),
        "lag1": detrended.lag1,
    }
    for method in options.tests:
        test = block_test(method, values, detrended, drawn)
        result[f"p_{method}"] = np.where(constant, 1.0, test.probability())
        if with_random and method == options.method:
            result["random_slopes"] = np.concatenate([slope[None], test.slopes()])
            result["random_significant"] = test.significant(options.level) & ~constant
    return result
