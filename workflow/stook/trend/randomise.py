"""Randomised trends: the same shuffled years, blocks and phases for every series of a length.

A randomised slope is a weighted sum of a series. Every randomisation is therefore a matrix of
weights (randomisation, year), one matrix product gives the randomised slopes of many series at
once, and whole-number weights and values (`to_integers`) make that product exact.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property, lru_cache
from typing import Any

import numpy as np

from stook.randomness import generator

SIGNIFICAND_BITS = 53
"""Whole numbers up to two to this power are exact in float64."""

PHASE_BITS = 10
"""Weights of randomised phases are rounded to two to minus this power of a year."""


@dataclass(frozen=True)
class Randomisations:
    """The randomisations of all series with the same years.

    They depend on the seed, the number of years and the number of the randomisation only: not on
    the series, the region, nor on how many are drawn in all.

    Attributes
    ----------
    seed
        The assessment's seed.
    years
        Increasing; they need not be consecutive.
    count
        Number of randomisations, m.
    """

    seed: int
    years: tuple[int, ...]
    count: int
    _blocks: dict[int, np.ndarray] = field(default_factory=dict, compare=False, repr=False)

    @cached_property
    def orders(self) -> np.ndarray:
        """Shuffled years, int64 (m, n): each row a permutation; ``y[orders[j]]`` is the series."""
        stream = self._stream("orders")
        return np.stack([stream.permutation(len(self.years)) for _ in range(self.count)])

    @cached_property
    def year_weights(self) -> np.ndarray:
        """Whole numbers in proportion to ``year - mean``, float64 (n,), as small as possible."""
        years = np.array(self.years, dtype=np.int64)
        whole = len(years) * years - years.sum()
        return (whole // np.gcd.reduce(whole)).astype(np.float64)

    @cached_property
    def step_weights(self) -> np.ndarray:
        """Twice the centred number of the year there is, float64 (n,): ``2 t - (n - 1)``."""
        n = len(self.years)
        return (2 * np.arange(n) - (n - 1)).astype(np.float64)

    @cached_property
    def shuffled_years(self) -> np.ndarray:
        """Weights that sum to `year_weights` times a shuffled series, float64 (m, n)."""
        return self._shuffled(self.year_weights)

    @cached_property
    def shuffled_steps(self) -> np.ndarray:
        """Weights that sum to `step_weights` times a shuffled series, float64 (m, n)."""
        return self._shuffled(self.step_weights)

    @cached_property
    def shifted_phases(self) -> np.ndarray:
        """Weights that sum to `step_weights` times a series of random phases, float64 (m, n).

        In units of ``2**-PHASE_BITS``. Every frequency of every series is shifted by the same
        random angle, so that spectra and spectra between series are kept (Theiler et al. 1992,
        Physica D 58:77; Prichard & Theiler 1994, Phys. Rev. Lett. 73:951). The shift is
        orthogonal: shifting the series one way is the same as shifting the weights the other.
        """
        n = len(self.years)
        stream = self._stream("phases")
        angles = np.stack([stream.uniform(0, 2 * np.pi, n // 2 + 1) for _ in range(self.count)])
        turns = np.exp(1j * angles)
        if n % 2 == 0:
            turns[:, -1] = np.where(angles[:, -1] < np.pi, 1.0, -1.0)
        weights = np.fft.irfft(np.fft.rfft(self.step_weights) * turns, n, axis=1)
        return np.rint(np.ldexp(weights, PHASE_BITS))

    def moved_blocks(self, length: int) -> np.ndarray:
        """Return weights that sum to `step_weights` times moved blocks of a series, (m, n).

        Blocks of the given length, from anywhere in the series and with replacement, are joined
        until the series is full (Kuensch 1989, Ann. Stat. 17:1217).
        """
        if length not in self._blocks:
            n = len(self.years)
            stream = self._stream("blocks")
            places = np.stack([stream.random(n) for _ in range(self.count)])
            starts = np.floor(places[:, : -(-n // length)] * (n - length + 1)).astype(np.int64)
            index = (starts[:, :, None] + np.arange(length)).reshape(self.count, -1)[:, :n]
            weights = np.zeros((self.count, n))
            rows = np.broadcast_to(np.arange(self.count)[:, None], index.shape)
            np.add.at(weights, (rows, index), np.broadcast_to(self.step_weights, index.shape))
            self._blocks[length] = weights
        return self._blocks[length]

    def _stream(self, name: str) -> np.random.Generator:
        return generator(self.seed, "trend", name, str(len(self.years)))

    def _shuffled(self, weights: np.ndarray) -> np.ndarray:
        result = np.empty(self.orders.shape)
        np.put_along_axis(result, self.orders, weights[None, :], axis=1)
        return result


@lru_cache(maxsize=4)
def randomisations(seed: int, years: tuple[int, ...], count: int) -> Randomisations:
    """Return the randomisations of series with the given years; the last few are kept."""
    return Randomisations(seed, years, count)


def block_length(lag1: np.ndarray, n: int) -> np.ndarray:
    """Return lengths of moving blocks from lag-1 correlations; ``(s) -> (s)`` int.

    The smallest L with ``L >= (n - L + 1) ** (2/3 (1 - n'/n))``, where
    ``n' = n (1 - rho) / (1 + rho)``; 1 for rho not above 0 (Wilks 1997, J. Climate 10:65, from
    memory).
    """
    rho = np.clip(lag1, 0.0, None)
    power = 2.0 / 3.0 * (1.0 - (1.0 - rho) / (1.0 + rho))
    lengths = np.arange(1, n // 2 + 1)
    enough = lengths >= (n - lengths + 1.0) ** power[:, None]
    return np.where(enough.any(axis=1), lengths[np.argmax(enough, axis=1)], n // 2)


def to_integers(values: np.ndarray, weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Scale series to whole numbers so small that weighted sums over the years are exact.

    A sum of products of whole numbers below 2**53 in float64 is exact, so that a matrix product
    gives the same bits for a series in any block, order of summation, thread count and library;
    and equal values stay exactly equal. The rounding is below 1e-7 of a series' largest value
    for 300 years.

    Parameters
    ----------
    values
        float64, shape (n, s), no missing values; about zero.
    weights
        Whole numbers, shape (..., n): those of the sums to come.

    Returns
    -------
    integers
        float64, shape (n, s).
    units
        float64, shape (s,): a power of two each; values are about ``integers * unit``.
    """
    room = float(np.abs(weights).max()) * weights.shape[-1]
    bits = SIGNIFICAND_BITS - 1 - int(np.ceil(np.log2(room)))
    units = np.ldexp(1.0, np.frexp(np.abs(values).max(axis=0))[1] - bits)
    return np.rint(values / units), units


def probability(counts: Any, count: int) -> Any:
    """Return ``p = (b + 1) / (m + 1)`` for b randomised trends of m as large as the observed.

    A number, or an array of them. Phipson & Smyth 2010, Stat. Appl. Genet. Mol. Biol. 9:39.

    Examples
    --------
    >>> probability(0, 999)
    0.001
    """
    return (counts + 1.0) / (count + 1.0)
