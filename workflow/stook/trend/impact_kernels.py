"""Array kernels of the observed impact: trends of ratios and what they amount to."""

from __future__ import annotations

import math

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def ratio_trends(
    actual: np.ndarray, detrended: np.ndarray, years: np.ndarray
) -> np.ndarray:  # pragma: no cover - compiled
    """Return least-squares slopes of log(actual / detrended); ``(d, r, n) x 2, (n) -> (d, r)``.

    Parameters
    ----------
    actual, detrended
        float64, shape (d, r, n): yield or production, the same unit; NaN is missing.
    years
        float64, shape (n,), increasing.

    Returns
    -------
    ndarray
        float64, shape (d, r), per year, over the years both have; NaN where those are fewer than
        two or a value is not positive.
    """
    draws, regions, n = actual.shape
    result = np.empty((draws, regions))
    for d in range(draws):
        for r in range(regions):
            count, centre = 0, 0.0
            for t in range(n):
                if not (math.isnan(actual[d, r, t]) or math.isnan(detrended[d, r, t])):
                    centre += years[t]
                    count += 1
            if count < 2:
                result[d, r] = np.nan
                continue
            centre /= count
            spread, moment = 0.0, 0.0
            for t in range(n):
                over, under = actual[d, r, t], detrended[d, r, t]
                if math.isnan(over) or math.isnan(under):
                    continue
                logarithm = math.log(over / under) if over > 0.0 and under > 0.0 else np.nan
                spread += (years[t] - centre) ** 2
                moment += (years[t] - centre) * logarithm
            result[d, r] = moment / spread
    return result


@njit(cache=True, nogil=True)
def logarithmic_mean(a: np.ndarray, b: np.ndarray) -> np.ndarray:  # pragma: no cover - compiled
    """Return (a - b) / log(a / b), a where both are equal; ``(n, s), (n, s) -> (n, s)``.

    It turns a difference into a difference of logarithms. NaN unless both are positive.
    """
    result = np.empty(a.shape)
    for t in range(a.shape[0]):
        for i in range(a.shape[1]):
            one, other = a[t, i], b[t, i]
            if not (one > 0.0 and other > 0.0):
                result[t, i] = np.nan
            elif abs(one - other) <= 1e-6 * other:
                result[t, i] = 0.5 * (one + other)
            else:
                result[t, i] = (one - other) / math.log(one / other)
    return result


@njit(cache=True, nogil=True)
def impact_percent(slopes: np.ndarray, span: float) -> np.ndarray:  # pragma: no cover - compiled
    """Return what slopes of a log ratio amount to over `span` years, per cent; ``(s) -> (s)``."""
    result = np.empty(slopes.shape[0])
    for i in range(slopes.shape[0]):
        result[i] = 100.0 * math.expm1(span * slopes[i])
    return result
