"""Observed against randomised trends of a block of complete series, by each randomisation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from stook.trend import kernels
from stook.trend.randomise import (
    PHASE_BITS,
    Randomisations,
    block_length,
    probability,
    to_integers,
)

ROUNDING = 1e-10
"""A series whose range is below this share of its largest value is constant."""


@dataclass(frozen=True)
class BlockTest:
    """Randomised and observed statistics of s series; the larger in size, the more of a trend.

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


@dataclass(frozen=True)
class Detrended:
    """A block without its trend; the years there are count as consecutive.

    Attributes
    ----------
    slopes
        float64, shape (s,), per step.
    residuals
        float64, shape (n, s).
    lag1
        Lag-1 correlation corrected for bias, shape (s,); NaN for a straight line.
    statistic
        Squared studentised slope, shape (s,); infinite for a straight line.
    """

    slopes: np.ndarray
    residuals: np.ndarray
    lag1: np.ndarray
    statistic: np.ndarray

    @classmethod
    def of(cls, values: np.ndarray) -> Detrended:
        """Fit lines to series (n, s)."""
        n = len(values)
        slopes, residuals = kernels.linear_fit(values, np.arange(n, dtype=np.float64))
        squares, products = kernels.residual_sums(residuals)
        squares[squares <= (ROUNDING * np.abs(values).max(axis=0)) ** 2] = 0.0
        lag1, statistic = kernels.lag1_and_statistic(slopes, squares, products, n)
        return cls(slopes, residuals, lag1, statistic)

    @property
    def freedom(self) -> float:
        """Factor that makes up for the spread taken out by the fit of a line."""
        n = len(self.residuals)
        return float(np.sqrt(n / (n - 2.0)))


def block_test(
    method: str, values: np.ndarray, series: Detrended, drawn: Randomisations
) -> BlockTest:
    """Test a block (n, s) by a method: ``ar1``, ``shuffle``, ``blocks`` or ``phases``."""
    match method:
        case "ar1":
            return ar1_test(series, drawn)
        case "shuffle":
            return shuffled_test(values, drawn)
        case "blocks":
            return blocks_test(series, drawn)
        case "phases":
            return phases_test(series, drawn)
        case _:
            raise ValueError(f"no trend test {method!r}")


def shuffled_test(values: np.ndarray, drawn: Randomisations) -> BlockTest:
    """Test slopes against those of shuffled years: right for independent years only."""
    middle = values.min(axis=0) / 2 + values.max(axis=0) / 2
    integers, units = to_integers(values - middle, drawn.year_weights)
    random = drawn.shuffled_years @ integers
    years = np.array(drawn.years) - np.mean(drawn.years)
    per_year = years[-1] / drawn.year_weights[-1] / np.sum(years**2)
    return BlockTest(random, drawn.year_weights @ integers, random, units * per_year)


def ar1_test(series: Detrended, drawn: Randomisations) -> BlockTest:
    """Test studentised slopes against those of AR(1) surrogates.

    The innovations of the residuals are shuffled (the same order for every series) and coloured
    again with the lag-1 correlation of the series.
    """
    rho = np.nan_to_num(series.lag1)
    shocks = kernels.innovations(series.residuals, rho)
    integers, units = to_integers(shocks, drawn.step_weights)
    slopes = drawn.shuffled_steps @ integers
    statistics = np.empty_like(slopes)
    kernels.ar1_surrogates(integers, rho, drawn.orders, slopes, statistics)
    return BlockTest(statistics, series.statistic, slopes, units * series.freedom)


def blocks_test(series: Detrended, drawn: Randomisations) -> BlockTest:
    """Test slopes against those of moving blocks of the residuals."""
    integers, units = to_integers(series.residuals, drawn.step_weights)
    lengths = block_length(np.nan_to_num(series.lag1), len(drawn.years))
    sums = np.empty((drawn.count, len(lengths)))
    for length in np.unique(lengths):
        columns = np.flatnonzero(lengths == length)
        sums[:, columns] = drawn.moved_blocks(int(length)) @ integers[:, columns]
    return _against_slopes(series, sums, units)


def phases_test(series: Detrended, drawn: Randomisations) -> BlockTest:
    """Test slopes against those of series with the spectrum of the residuals, phases at random."""
    weights = drawn.shifted_phases
    integers, units = to_integers(series.residuals, weights)
    return _against_slopes(series, weights @ integers, np.ldexp(units, -PHASE_BITS))


def _against_slopes(series: Detrended, sums: np.ndarray, units: np.ndarray) -> BlockTest:
    """Compare slopes; `sums` are those of `Randomisations.step_weights`, in the given units."""
    n = len(series.residuals)
    units = units * series.freedom * 6.0 / (n * (n * n - 1.0))
    return BlockTest(sums, series.slopes / units, sums, units)
