"""Randomised trends: the same shuffled years and surrogates for every series of a length."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from stook.randomness import generator

SIGNIFICAND_BITS = 53
"""Whole numbers up to two to this power are exact in float64."""


@dataclass(frozen=True)
class Randomisations:
    """The randomisations of all series with the same years.

    Attributes
    ----------
    years
        int64, shape (n,), increasing; they need not be consecutive.
    orders
        int64, shape (m, n): each row a permutation; the shuffled series is ``y[orders[j]]``.
    """

    years: np.ndarray
    orders: np.ndarray

    @property
    def count(self) -> int:
        """Number of randomisations, m."""
        return len(self.orders)

    def shuffled_weights(self, weights: np.ndarray) -> np.ndarray:
        """Return weights W with ``W[j] @ y == weights @ y[orders[j]]``, shape (m, n), float64."""
        result = np.empty(self.orders.shape)
        np.put_along_axis(result, self.orders, weights[None, :], axis=1)
        return result


def randomisations(seed: int, years: np.ndarray, count: int) -> Randomisations:
    """Draw the randomisations for series with the given years.

    They depend on the seed, the number of years and the number of the randomisation only: not on
    the series, the region, nor on how many are drawn in all.

    Parameters
    ----------
    seed
        The assessment's seed.
    years
        int, shape (n,), increasing.
    count
        Number of randomisations, m.
    """
    stream = generator(seed, "trend", "orders", str(len(years)))
    orders = np.stack([stream.permutation(len(years)) for _ in range(count)])
    return Randomisations(np.asarray(years, dtype=np.int64), orders)


def to_integers(values: np.ndarray, weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Scale series to whole numbers so small that weighted sums over the years are exact.

    A sum of products of whole numbers below 2**53 in float64 is exact, so that a matrix product
    gives the same bits for a series in any block, order of summation, thread count and library;
    and equal values stay exactly equal. The rounding is below 1e-9 of a series' range for the
    longest series in use.

    Parameters
    ----------
    values
        float64, shape (n, s), no missing values.
    weights
        Whole numbers, shape (n,): the largest weights of the sums to come.

    Returns
    -------
    integers
        float64, shape (n, s).
    units
        float64, shape (s,): a power of two each; values are about ``centre + integers * unit``.
    """
    low, high = values.min(axis=0), values.max(axis=0)
    room = float(np.abs(weights).max()) * len(weights)
    bits = SIGNIFICAND_BITS - 1 - int(np.ceil(np.log2(room)))
    exponents = np.frexp(high - low)[1]
    units = np.ldexp(1.0, exponents - bits)
    return np.rint((values - low) / units) - np.rint((high - low) / units / 2.0), units


def centred_weights(positions: np.ndarray) -> np.ndarray:
    """Return whole numbers proportional to ``position - mean``, float64, as small as possible.

    Parameters
    ----------
    positions
        int, shape (n,), increasing.
    """
    whole = len(positions) * positions - positions.sum()
    return (whole // np.gcd.reduce(whole)).astype(np.float64)


def probability(counts: np.ndarray, count: int) -> np.ndarray:
    """Return ``p = (b + 1) / (m + 1)`` for b randomised trends of m as large as the observed.

    Phipson & Smyth 2010, Stat. Appl. Genet. Mol. Biol. 9:39.
    """
    return (counts + 1.0) / (count + 1.0)
