"""Array kernels of the trend stage: fits, lag-1 correlation, surrogates and counts.

Every kernel works on a block ``(years, series)`` without missing values; a series is a column, and
no operation mixes columns, so that a series has the same result in any block. Nothing here uses a
matrix product: sums run over the years in order, one column at a time.
"""

from __future__ import annotations

import numpy as np
from numba import njit

LAG1_LIMIT = 0.95
"""Lag-1 correlations are held within -0.95 to 0.95, so that surrogates stay stationary."""


@njit(cache=True, nogil=True)
def linear_fit(
    values: np.ndarray, positions: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:  # pragma: no cover - compiled
    """Fit a straight line by least squares; ``(n, s), (n) -> (s), (n, s)``.

    Parameters
    ----------
    values
        float64, shape (n, s), no missing values.
    positions
        float64, shape (n,), years; they need not be evenly spaced.

    Returns
    -------
    slopes
        float64, shape (s,), unit of the values per year.
    residuals
        float64, shape (n, s).
    """
    n, series = values.shape
    centre = 0.0
    for t in range(n):
        centre += positions[t]
    centre /= n
    spread = 0.0
    for t in range(n):
        spread += (positions[t] - centre) ** 2
    first = values[0].copy()
    means = np.zeros(series)
    slopes = np.zeros(series)
    for t in range(n):
        x = positions[t] - centre
        for i in range(series):
            difference = values[t, i] - first[i]
            means[i] += difference
            slopes[i] += x * difference
    for i in range(series):
        means[i] /= n
        slopes[i] /= spread
    residuals = np.empty((n, series))
    for t in range(n):
        x = positions[t] - centre
        for i in range(series):
            residuals[t, i] = values[t, i] - first[i] - means[i] - x * slopes[i]
    return slopes, residuals


@njit(cache=True, nogil=True)
def theil_sen(
    values: np.ndarray, positions: np.ndarray
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the median of the slopes between all pairs of years; ``(n, s), (n) -> (s)``.

    Theil 1950, Proc. R. Neth. Acad. Sci. A 53:386; Sen 1968, J. Am. Stat. Assoc. 63:1379.

    Parameters
    ----------
    values
        float64, shape (n, s), no missing values.
    positions
        float64, shape (n,), increasing years.

    Returns
    -------
    ndarray
        float64, shape (s,), unit of the values per year.
    """
    n, series = values.shape
    slopes = np.empty(n * (n - 1) // 2)
    result = np.empty(series)
    for i in range(series):
        k = 0
        for t in range(n):
            for later in range(t + 1, n):
                slopes[k] = (values[later, i] - values[t, i]) / (positions[later] - positions[t])
                k += 1
        result[i] = np.median(slopes)
    return result


@njit(cache=True, nogil=True)
def residual_sums(
    residuals: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:  # pragma: no cover - compiled
    """Return the sum of squares and the sum of lag-1 products; ``(n, s) -> (s), (s)``."""
    n, series = residuals.shape
    squares = np.zeros(series)
    products = np.zeros(series)
    for t in range(n):
        for i in range(series):
            squares[i] += residuals[t, i] * residuals[t, i]
    for t in range(1, n):
        for i in range(series):
            products[i] += residuals[t, i] * residuals[t - 1, i]
    return squares, products


@njit(cache=True, nogil=True, inline="always")
def corrected_lag1(ratio: float, n: int) -> float:  # pragma: no cover - compiled
    """Return a lag-1 correlation of detrended series corrected for its bias (scalar kernel).

    The estimate from the residuals of a fitted line is too small by ``(2 + 4 rho) / n`` to first
    order; solving for rho gives ``(n r + 2) / (n - 4)``, held within `LAG1_LIMIT`.
    """
    return min(max((n * ratio + 2.0) / (n - 4.0), -LAG1_LIMIT), LAG1_LIMIT)


@njit(cache=True, nogil=True, error_model="numpy")
def lag1_and_statistic(
    slopes: np.ndarray, squares: np.ndarray, products: np.ndarray, n: int
) -> tuple[np.ndarray, np.ndarray]:  # pragma: no cover - compiled
    """Return lag-1 correlation and squared studentised slope; ``(s), (s), (s) -> (s), (s)``.

    The variance of the slope is that of independent residuals times ``(1 + rho) / (1 - rho)``.

    Parameters
    ----------
    slopes
        float64, shape (s,), per step, of n values at even steps of 1.
    squares, products
        float64, shape (s,), from `residual_sums`; 0 squares give lag-1 NaN and statistic infinity.
    n
        Number of values of each series, more than 4.
    """
    series = slopes.shape[0]
    lag1 = np.empty(series)
    statistic = np.empty(series)
    spread = n * (n * n - 1.0) / 12.0
    for i in range(series):
        if squares[i] == 0.0:
            lag1[i] = np.nan
            statistic[i] = np.inf
        else:
            rho = corrected_lag1(products[i] / squares[i], n)
            lag1[i] = rho
            statistic[i] = (slopes[i] * slopes[i] * (spread * (n - 2.0)) * (1.0 - rho)) / (
                squares[i] * (1.0 + rho)
            )
    return lag1, statistic


@njit(cache=True, nogil=True)
def innovations(
    residuals: np.ndarray, lag1: np.ndarray
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the AR(1) innovations of residuals, centred; ``(n, s), (s) -> (n, s)``.

    The first is ``sqrt(1 - rho^2) r_0``, so that there are as many innovations as years, all of
    one variance; recolouring them in their own order gives the residuals back (but for the mean).
    """
    n, series = residuals.shape
    result = np.empty((n, series))
    means = np.zeros(series)
    for t in range(n):
        for i in range(series):
            if t == 0:
                result[t, i] = np.sqrt(1.0 - lag1[i] * lag1[i]) * residuals[t, i]
            else:
                result[t, i] = residuals[t, i] - lag1[i] * residuals[t - 1, i]
            means[i] += result[t, i]
    for t in range(n):
        for i in range(series):
            result[t, i] -= means[i] / n
    return result


@njit(cache=True, nogil=True)
def lagged_sums(
    shocks: np.ndarray,
    lag1: np.ndarray,
    start: np.ndarray,
    order: np.ndarray,
    last: np.ndarray,
    lagged: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Run one AR(1) surrogate of every series; ``(n, s), (s), (s), (n) -> (s), (s)``.

    With z the shocks in the given order: ``u_0 = start z_0``, ``u_t = rho u_(t-1) + z_t``. Sets
    `last` to ``u_(n-1)`` and `lagged` to the sum of ``z_t u_(t-1)``, from which every other sum of
    the surrogate follows (see `ar1_surrogates`). Four years a pass and one view a row: measured
    four times faster than one year a pass with two subscripts, which the compiler does not
    vectorise.
    """
    n, series = shocks.shape
    z0 = shocks[order[0]]
    for i in range(series):
        last[i] = start[i] * z0[i]
        lagged[i] = 0.0
    t = 1
    while t + 3 < n:
        z1, z2 = shocks[order[t]], shocks[order[t + 1]]
        z3, z4 = shocks[order[t + 2]], shocks[order[t + 3]]
        for i in range(series):
            rho = lag1[i]
            u = last[i]
            total = lagged[i] + z1[i] * u
            u = rho * u + z1[i]
            total += z2[i] * u
            u = rho * u + z2[i]
            total += z3[i] * u
            u = rho * u + z3[i]
            total += z4[i] * u
            last[i] = rho * u + z4[i]
            lagged[i] = total
        t += 4
    while t < n:
        z1 = shocks[order[t]]
        for i in range(series):
            u = last[i]
            lagged[i] += z1[i] * u
            last[i] = lag1[i] * u + z1[i]
        t += 1


@njit(cache=True, nogil=True, error_model="numpy")
def fit_surrogate(
    n: int,
    lag1: np.ndarray,
    start: np.ndarray,
    first: np.ndarray,
    last: np.ndarray,
    lagged: np.ndarray,
    totals: np.ndarray,
    powers: np.ndarray,
    slopes: np.ndarray,
    statistics: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Fit a line to one surrogate of every series from its sums; all ``(s)``, see `ar1_surrogates`.

    `first` holds the first shock z_0, `totals` and `powers` the sums of z and z^2, `last` and
    `lagged` are from `lagged_sums`; `slopes` and `statistics` are rows of `ar1_surrogates`. With
    f = u_0, l = u_(n-1), centred time x, D = sum z_t u_(t-1) and T = sum x_t z_t:

    - ``(1 - rho) sum u = f - rho l + sum z - z_0``
    - ``(1 - rho) sum x u = x_0 f - rho x_(n-1) l + rho (sum u - l) + T - x_0 z_0``
    - ``(1 - rho^2) sum u^2 = f^2 - rho^2 l^2 + 2 rho D + sum z^2 - z_0^2``
    - ``sum u_t u_(t-1) = rho (sum u^2 - l^2) + D``
    """
    half = (n - 1) / 2.0
    spread = n * (n * n - 1.0) / 12.0
    neighbours = spread - half * half - half
    scale = spread * (n - 2.0)
    for i in range(lag1.shape[0]):
        rho, z, e = lag1[i], first[i], last[i]
        f = start[i] * z
        inverse = 1.0 / (1.0 - rho)
        total = (f - rho * e + totals[i] - z) * inverse
        moment = half * (z - f - rho * e) + rho * (total - e) + 0.5 * slopes[i]
        moment *= inverse
        power = f * f - rho * rho * e * e + 2.0 * rho * lagged[i] + powers[i] - z * z
        power *= start[i] * start[i]
        mean = total / n
        slope = moment / spread
        squares = power - total * mean - slope * moment
        products = rho * (power - e * e) + lagged[i]
        products -= mean * (2.0 * total - f - e) - (n - 1) * mean * mean
        products -= slope * (2.0 * moment + (half + 1.0) * (f - e))
        products += slope * slope * neighbours
        again = corrected_lag1(products / squares, n)
        slopes[i] = slope
        statistics[i] = (slope * slope * scale * (1.0 - again)) / (squares * (1.0 + again))


@njit(cache=True, nogil=True)
def ar1_surrogates(
    shocks: np.ndarray,
    lag1: np.ndarray,
    orders: np.ndarray,
    slopes: np.ndarray,
    statistics: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Fit a line to AR(1) surrogates; ``(n, s), (s), (m, n) -> (m, s), (m, s)``.

    Parameters
    ----------
    shocks
        float64, shape (n, s): whole numbers, see `stook.trend.randomise.to_integers`.
    lag1
        float64, shape (s,), within `LAG1_LIMIT`.
    orders
        int64, shape (m, n): each row a permutation of the years.
    slopes
        float64, shape (m, s): on entry twice the sum of centred time and shocks, T, of each
        surrogate, exactly (a whole number); on return the least-squares slope per step.
    statistics
        float64, shape (m, s): on return the squared studentised slope, with the lag-1 correlation
        of the surrogate estimated anew; NaN for a surrogate without spread.
    """
    n, series = shocks.shape
    start = np.empty(series)
    totals = np.zeros(series)
    powers = np.zeros(series)
    last = np.empty(series)
    lagged = np.empty(series)
    for t in range(n):
        for i in range(series):
            totals[i] += shocks[t, i]
            powers[i] += shocks[t, i] * shocks[t, i]
    for i in range(series):
        start[i] = 1.0 / np.sqrt(1.0 - lag1[i] * lag1[i])
    for j in range(orders.shape[0]):
        lagged_sums(shocks, lag1, start, orders[j], last, lagged)
        fit_surrogate(
            n,
            lag1,
            start,
            shocks[orders[j, 0]],
            last,
            lagged,
            totals,
            powers,
            slopes[j],
            statistics[j],
        )


@njit(cache=True, nogil=True)
def count_as_large(
    random: np.ndarray, observed: np.ndarray
) -> np.ndarray:  # pragma: no cover - compiled
    """Count the randomised statistics as large as the observed in size; ``(m, s), (s) -> (s)``.

    A missing randomised statistic does not count.
    """
    counts = np.zeros(observed.shape[0], dtype=np.int64)
    for j in range(random.shape[0]):
        for i in range(observed.shape[0]):
            counts[i] += abs(random[j, i]) >= abs(observed[i])
    return counts


@njit(cache=True, nogil=True)
def area_sums(
    values: np.ndarray, weights: np.ndarray, sums: np.ndarray
) -> None:  # pragma: no cover - compiled
    """Add weighted values to the sums of each year, pixel by pixel; ``(n, s), (s) -> (n)``.

    The order of the pixels is that of the columns, so that a sum does not depend on how the
    columns are cut into calls. A missing value makes the sum of its year missing.
    """
    for i in range(values.shape[1]):
        for t in range(values.shape[0]):
            sums[t] += weights[i] * values[t, i]
