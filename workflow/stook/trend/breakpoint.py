"""A change of slope within a series: where, by how much, and whether it is more than chance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from stook.trend.kernels import corrected_lag1, innovations
from stook.trend.randomise import Randomisations, probability

LEAST_SIDE = 10
"""Years on either side of a break, at least."""

LEAST_YEARS = 30
"""Years a series needs for the search for a break."""


@dataclass(frozen=True)
class Break:
    """The best single change of slope of a continuous line.

    Attributes
    ----------
    year
        Last year of the first slope.
    before, after
        Slopes, unit of the series per year.
    p
        p-value of the change against AR(1) series with one slope.
    """

    year: int
    before: float
    after: float
    p: float


def find_break(values: np.ndarray, drawn: Randomisations) -> Break | None:
    """Search one complete series for a change of slope.

    The statistic is the largest over the candidate years of the sum of squares that a bend at
    that year explains, over what is left, times ``(1 - rho) / (1 + rho)``; it is found anew, with
    rho, in every AR(1) surrogate of the residuals, so that the search itself is accounted for.

    Parameters
    ----------
    values
        float64, shape (n,), no missing values; the years there are count as consecutive.
    drawn
        The randomisations of its years.

    Returns
    -------
    Break or None
        None for fewer than `LEAST_YEARS` values or a series without spread around a broken line.
    """
    n = len(values)
    if n < LEAST_YEARS:
        return None
    bends, candidates = _bends(n)
    residuals = _without_line(values - values[0])
    best, statistic, rho = _largest(residuals[None], bends)
    rest = residuals - bends[best[0]] * np.sum(bends[best[0]] * residuals)
    if not np.sum(rest**2) > (1e-10 * np.abs(values).max()) ** 2:
        return None
    shocks = innovations(rest[:, None], rho)[:, 0]
    _, random, _ = _largest(_without_line(_surrogates(shocks, rho[0], drawn)), bends)
    p = probability(int(np.count_nonzero(random >= statistic[0])), drawn.count)
    step = int(candidates[best[0]])
    before, after = _slopes(values, np.array(drawn.years, dtype=np.float64), step)
    return Break(drawn.years[step], before, after, float(p))


def _bends(n: int) -> tuple[np.ndarray, np.ndarray]:
    """Return unit vectors (candidate, n) of a bend without mean and line, and its steps."""
    candidates = np.arange(LEAST_SIDE - 1, n - LEAST_SIDE)
    hinges = np.clip(np.arange(n)[None, :] - candidates[:, None], 0, None).astype(np.float64)
    rest = _without_line(hinges)
    return rest / np.sqrt(np.sum(rest**2, axis=1, keepdims=True)), candidates


def _without_line(series: np.ndarray) -> np.ndarray:
    """Return the residuals of a least-squares line, years last."""
    x = np.arange(series.shape[-1]) - (series.shape[-1] - 1) / 2
    centred = series - series.mean(axis=-1, keepdims=True)
    slope = np.sum(centred * x, axis=-1, keepdims=True) / np.sum(x * x)
    return centred - slope * x


def _largest(residuals: np.ndarray, bends: np.ndarray) -> tuple[np.ndarray, ...]:
    """Return the best candidate, its statistic and the lag-1 correlation; ``(m, n) -> (m)``."""
    n = residuals.shape[1]
    # einsum, not a matrix product: its sums do not depend on the number of threads.
    explained = np.einsum("mn,kn->mk", residuals, bends)
    best = np.argmax(explained**2, axis=1)
    size = np.take_along_axis(explained, best[:, None], axis=1)
    rest = residuals - size * bends[best]
    squares = np.sum(rest**2, axis=1)
    ratio = np.sum(rest[:, 1:] * rest[:, :-1], axis=1) / squares
    rho = np.array([corrected_lag1(one, n) for one in ratio])
    return best, size[:, 0] ** 2 / squares * (1 - rho) / (1 + rho), rho


def _surrogates(shocks: np.ndarray, rho: float, drawn: Randomisations) -> np.ndarray:
    """Return AR(1) surrogates (m, n)."""
    z = shocks[drawn.orders]
    result = np.empty_like(z)
    result[:, 0] = z[:, 0] / np.sqrt(1 - rho * rho)
    for t in range(1, z.shape[1]):
        result[:, t] = rho * result[:, t - 1] + z[:, t]
    return result


def _slopes(values: np.ndarray, years: np.ndarray, step: int) -> tuple[float, float]:
    """Return the slopes of a continuous line that bends at a step."""
    bend = np.clip(years - years[step], 0, None)
    design = np.stack([np.ones_like(years), years - years[0], bend], axis=1)
    _, slope, change = np.linalg.lstsq(design, values, rcond=None)[0]
    return float(slope), float(slope + change)
