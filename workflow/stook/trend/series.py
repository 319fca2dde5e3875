"""Trends of many series at once: slopes, lag-1 correlation and p-values against random trends."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields

import dask
import numpy as np

from stook.assessment.schema import Assessment
from stook.trend import kernels
from stook.trend.randomise import (
    Randomisations,
    centred_weights,
    probability,
    randomisations,
    to_integers,
)

BLOCK = 256
"""Series a kernel call works on (measured: the sums of a block stay in the first cache)."""

LARGEST_GAP_SHARE = 0.1
"""Largest share of the years between first and last that may be missing."""

ROUNDING = 1e-10
"""A series whose range is below this share of its largest value is constant."""


@dataclass(frozen=True)
class TrendOptions:
    """What the trend of a series depends on besides its values; see `assessment.schema.Trend`."""

    seed: int
    count: int
    minimum_years: int
    method: str = "ar1"
    level: float = 0.05

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
    p_ar1, p_shuffle
        Two-sided p-values against AR(1) surrogates and against shuffled years.
    """

    years: np.ndarray
    slope: np.ndarray
    theil_sen: np.ndarray
    lag1: np.ndarray
    p_ar1: np.ndarray
    p_shuffle: np.ndarray


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
        np.zeros(series, dtype=np.int64), *(np.full(series, np.nan) for _ in range(5))
    )
    random = None
    if with_random:
        shape = (options.count + 1, series)
        random = RandomTrends(np.full(shape, np.nan), np.zeros(shape, dtype=bool))
    blocks = list(_blocks(values, years, options))
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
    for field in fields(SeriesTrends):
        if field.name in result:
            getattr(trends, field.name)[columns] = result[field.name]
    if random is not None:
        random.slopes[:, columns] = result["random_slopes"]
        random.significant[:, columns] = result["random_significant"]


def _blocks(
    values: np.ndarray, years: np.ndarray, options: TrendOptions
) -> Iterator[tuple[np.ndarray, np.ndarray, Randomisations]]:
    """Yield blocks of series with the same years: row mask, columns, randomisations."""
    valid = np.isfinite(values)
    patterns, which = np.unique(np.packbits(valid, axis=0), axis=1, return_inverse=True)
    which = which.reshape(-1)
    for k in range(patterns.shape[1]):
        columns = np.flatnonzero(which == k)
        rows = valid[:, columns[0]]
        there = np.asarray(years)[rows]
        if len(there) < options.minimum_years:
            continue
        span = there[-1] - there[0] + 1
        if span - len(there) > LARGEST_GAP_SHARE * span:
            continue
        drawn = randomisations(options.seed, there, options.count)
        for first in range(0, len(columns), BLOCK):
            yield rows, columns[first : first + BLOCK], drawn


def _block_trends(
    values: np.ndarray, drawn: Randomisations, options: TrendOptions, with_random: bool
) -> dict[str, np.ndarray]:
    """Return the trends of one block of complete series, ``(n, s) -> (s)`` each, per year."""
    positions = drawn.years.astype(np.float64)
    low, high = values.min(axis=0), values.max(axis=0)
    constant = high - low <= ROUNDING * np.maximum(np.abs(low), np.abs(high))
    values = np.where(constant, 0.0, values)
    slope, _ = kernels.linear_fit(values, positions)
    shuffled = _Test.shuffled(values, drawn)
    ar1, lag1 = _Test.ar1(values, drawn)
    result = {
        "slope": slope,
        "theil_sen": kernels.theil_sen(values, positions),
        "lag1": lag1,
        "p_shuffle": np.where(constant, 1.0, shuffled.probability()),
        "p_ar1": np.where(constant, 1.0, ar1.probability()),
    }
    if with_random:
        test = ar1 if options.method == "ar1" else shuffled
        result["random_slopes"] = np.concatenate([slope[None], test.slopes()])
        result["random_significant"] = test.significant(options.level) & ~constant
    return result


@dataclass(frozen=True)
class _Test:
    """Randomised against observed statistics of a block; larger in size is more of a trend.

    Attributes
    ----------
    random, observed
        float64, shapes (m, s) and (s,).
    random_slopes
        float64, shape (m, s); times `units`, shape (s,), it is in the unit of the series per year.
    """

    random: np.ndarray
    observed: np.ndarray
    random_slopes: np.ndarray
    units: np.ndarray

    @classmethod
    def shuffled(cls, values: np.ndarray, drawn: Randomisations) -> _Test:
        """Test slopes against those of shuffled years; exact whole numbers."""
        weights = centred_weights(drawn.years)
        integers, units = to_integers(values, weights)
        random = drawn.shuffled_weights(weights) @ integers
        centred = drawn.years - drawn.years.mean()
        per_year = centred[-1] / weights[-1] / np.sum(centred**2)
        return cls(random, weights @ integers, random, units * per_year)

    @classmethod
    def ar1(cls, values: np.ndarray, drawn: Randomisations) -> tuple[_Test, np.ndarray]:
        """Test studentised slopes against AR(1) surrogates; also return the lag-1 correlation.

        The years there are count as consecutive.
        """
        n = len(drawn.years)
        steps = np.arange(n)
        slopes, residuals = kernels.linear_fit(values, steps.astype(np.float64))
        squares, products = kernels.residual_sums(residuals)
        squares[squares <= (ROUNDING * np.abs(values).max(axis=0)) ** 2] = 0.0
        lag1, observed = kernels.lag1_and_statistic(slopes, squares, products, n)
        rho = np.nan_to_num(lag1)
        weights = (2 * steps - (n - 1)).astype(np.float64)
        integers, units = to_integers(kernels.innovations(residuals, rho), weights)
        random_slopes = drawn.shuffled_weights(weights) @ integers
        random = np.empty_like(random_slopes)
        kernels.ar1_surrogates(integers, rho, drawn.orders, random_slopes, random)
        return cls(random, observed, random_slopes, units * np.sqrt(n / (n - 2.0))), lag1

    def probability(self) -> np.ndarray:
        """Return two-sided p-values, shape (s,)."""
        counts = kernels.count_as_large(self.random, self.observed)
        return probability(counts, len(self.random))

    def slopes(self) -> np.ndarray:
        """Return the randomised slopes, shape (m, s), unit of the series per year."""
        return self.random_slopes * self.units

    def significant(self, level: float) -> np.ndarray:
        """Judge observed (first) and randomised trends against all m + 1, shape (m + 1, s)."""
        sizes = np.abs(np.concatenate([self.observed[None], np.nan_to_num(self.random)]))
        largest = int(np.floor(level * len(sizes) + 1e-9))
        critical = np.partition(sizes, len(sizes) - largest, axis=0)[len(sizes) - largest]
        return (sizes >= critical) & (critical > 0)
