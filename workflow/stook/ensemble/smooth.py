"""Smooth paths through yearly series, and what is left around them (plain arrays).

The forced response is a polynomial of fourth order in time, the residual internal variability
(Hawkins & Sutton 2009, Bull. Am. Meteorol. Soc. 90, 1095-1107). All sums run over years in order,
so that a series does not depend on what else is computed beside it.
"""

from __future__ import annotations

import numpy as np
from numba import njit

ORDER = 4
"""Order of the polynomial (Hawkins & Sutton 2009)."""

LEAST_YEARS = 20
"""Years with a value that a path needs (own choice, no source)."""


def polynomial_basis(years: np.ndarray, kept: np.ndarray) -> np.ndarray:
    """Return polynomials that are orthonormal over the kept years, evaluated in every year.

    Parameters
    ----------
    years
        int, ascending, shape (year,).
    kept
        bool, the years of the fit, shape (year,).

    Returns
    -------
    ndarray
        float64, shape (year, ORDER + 1).
    """
    first, last = years[kept][0], years[kept][-1]
    place = (2.0 * years - (first + last)) / max(1, last - first)
    powers = np.polynomial.legendre.legvander(place, ORDER)
    triangle = np.linalg.qr(powers[kept], mode="r")
    return powers @ np.linalg.inv(triangle)


@njit(cache=True, nogil=True)
def fit(values: np.ndarray, basis: np.ndarray, kept: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return smooth paths and residual sums of squares (kernel): (series, year) -> same, (series).

    Parameters
    ----------
    values
        float64; no missing value in the kept years.
    basis
        Of `polynomial_basis`, shape (year, k).
    kept
        bool, shape (year,).
    """
    count, years = values.shape
    paths = np.empty((count, years))
    squares = np.zeros(count)
    for series in range(count):
        weights = np.zeros(basis.shape[1])
        for year in range(years):
            if kept[year]:
                for k in range(basis.shape[1]):
                    weights[k] += basis[year, k] * values[series, year]
        for year in range(years):
            total = 0.0
            for k in range(basis.shape[1]):
                total += basis[year, k] * weights[k]
            paths[series, year] = total
            if kept[year]:
                rest = values[series, year] - total
                squares[series] += rest * rest
    return paths, squares


@njit(cache=True, nogil=True)
def running_variance(
    values: np.ndarray,
    paths: np.ndarray,
    basis: np.ndarray,
    years: np.ndarray,
    kept: np.ndarray,
    length: int,
) -> np.ndarray:
    """Return the variance of running means of the residuals (kernel): (series, year) -> (series).

    Means are taken over `length` consecutive kept years, their variance about zero; NaN without
    such a run of years. The path takes a part of the variance with it; what is left is scaled up
    by that part, exactly for white noise: by ``(1/L) / mean(1/L - |mean of the basis|^2)``, which
    is n / (n - ORDER - 1) for single years.
    """
    place = np.flatnonzero(kept)
    starts = np.empty(place.size, np.int64)
    windows, left = 0, 0.0
    for start in range(place.size - length + 1):
        if years[place[start + length - 1]] - years[place[start]] == length - 1:
            starts[windows] = start
            windows += 1
            left += 1.0 / length
            for k in range(basis.shape[1]):
                mean = 0.0
                for year in place[start : start + length]:
                    mean += basis[year, k]
                left -= (mean / length) ** 2
    result = np.full(values.shape[0], np.nan)
    if windows == 0 or left <= 1e-9:
        return result
    scale = 1.0 / length / left
    for series in range(values.shape[0]):
        total = 0.0
        for start in starts[:windows]:
            mean = 0.0
            for year in place[start : start + length]:
                mean += values[series, year] - paths[series, year]
            mean /= length
            total += mean * mean
        result[series] = total * scale
    return result


@njit(cache=True, nogil=True)
def detrended_deviation(values: np.ndarray, years: np.ndarray, inside: np.ndarray) -> np.ndarray:
    """Return standard deviations about a straight line (kernel): (series, year) -> (series).

    Over the years inside that have a value, n - 2 degrees of freedom; NaN with fewer than two
    thirds of them or fewer than three.
    """
    result = np.full(values.shape[0], np.nan)
    wanted = 0
    for year in range(years.size):
        wanted += inside[year]
    for series in range(values.shape[0]):
        n, x_mean, y_mean = 0, 0.0, 0.0
        for year in range(years.size):
            if inside[year] and not np.isnan(values[series, year]):
                n += 1
                x_mean += years[year]
                y_mean += values[series, year]
        if n < 3 or 3 * n < 2 * wanted:
            continue
        x_mean /= n
        y_mean /= n
        xx, xy, yy = 0.0, 0.0, 0.0
        for year in range(years.size):
            if inside[year] and not np.isnan(values[series, year]):
                x, y = years[year] - x_mean, values[series, year] - y_mean
                xx += x * x
                xy += x * y
                yy += y * y
        result[series] = np.sqrt(max(0.0, yy - xy * xy / xx) / (n - 2))
    return result
