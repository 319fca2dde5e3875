"""Arrays only: area-weighted sums, and least squares with the units' own effects taken out."""

from __future__ import annotations

import numpy as np
from numba import njit
from scipy import sparse


@njit(cache=True, nogil=True)
def add_weighted(weights: np.ndarray, values: np.ndarray, total: np.ndarray) -> None:
    """Add weighted values of pixels to the totals of units, pixel by pixel in order.

    Parameters
    ----------
    weights
        float64, shape (unit, pixel); a pixel of no weight is left out.
    values
        float64, shape (pixel, year, k); a missing value makes the total of its year missing.
    total
        float64, shape (unit, year, k); changed in place.
    """
    for unit in range(weights.shape[0]):
        for pixel in range(weights.shape[1]):
            weight = weights[unit, pixel]
            if weight > 0.0:
                for year in range(values.shape[1]):
                    for k in range(values.shape[2]):
                        total[unit, year, k] += weight * values[pixel, year, k]


def group_coefficients(
    values: np.ndarray, basis: np.ndarray, group: np.ndarray, groups: int, weights: np.ndarray
) -> np.ndarray:
    """Regress columns on a basis within each group (weighted least squares).

    Parameters
    ----------
    values
        shape (row, m).
    basis
        shape (row, q): 1 for a mean, 1 and t for a line.
    group
        int, shape (row,), 0 to groups - 1.
    groups
        Number of groups; a group without rows, or with too few, has the shortest solution.
    weights
        shape (row,).

    Returns
    -------
    ndarray
        shape (group, q, m).
    """
    rows, size = basis.shape
    sums = sparse.csr_array((weights, (group, np.arange(rows))), shape=(groups, rows))
    moment = sums @ (basis[:, :, None] * basis[:, None, :]).reshape(rows, -1)
    cross = sums @ (basis[:, :, None] * values[:, None, :]).reshape(rows, -1)
    inverse = np.linalg.pinv(moment.reshape(groups, size, size), rcond=1e-12, hermitian=True)
    result: np.ndarray = inverse @ cross.reshape(groups, size, -1)
    return result


def take_out(
    values: np.ndarray, basis: np.ndarray, group: np.ndarray, groups: int, weights: np.ndarray
) -> np.ndarray:
    """Return what is left of columns after regression on a basis within each group.

    With a basis of ones this is the within transformation. Parameters as `group_coefficients`.
    """
    found = group_coefficients(values, basis, group, groups, weights)
    left: np.ndarray = values - np.einsum("rq,rqm->rm", basis, found[group])
    return left


def within_fit(
    response: np.ndarray,
    regressors: np.ndarray,
    basis: np.ndarray,
    group: np.ndarray,
    groups: int,
    weights: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, int]:
    """Least squares with a basis for every group (Frisch & Waugh 1933; Lovell 1963).

    The slopes equal those of a regression with a dummy, and its products with the basis, for
    every group. Regressors the data cannot tell apart share the shortest solution.

    Parameters
    ----------
    response
        shape (row,).
    regressors
        shape (row, k).
    basis, group, groups, weights
        See `group_coefficients`.

    Returns
    -------
    slopes
        shape (k,).
    effects
        Coefficients of the basis, shape (group, q).
    rank
        Of the regressors within the groups; k if all slopes are determined.
    """
    scale = np.maximum(np.abs(regressors).max(axis=0, initial=0.0), 1e-300)
    joined = np.column_stack([regressors / scale, response])
    left = take_out(joined, basis, group, groups, weights) * np.sqrt(weights)[:, None]
    lengths = np.sqrt((left[:, :-1] ** 2).sum(axis=0))
    noise = 1e-9 * np.sqrt(weights.sum())
    lengths = np.where(lengths > noise, lengths, np.inf)
    slopes, _, rank, _ = np.linalg.lstsq(left[:, :-1] / lengths, left[:, -1], rcond=1e-10)
    slopes = slopes / lengths / scale
    rest = (response - regressors @ slopes)[:, None]
    effects = group_coefficients(rest, basis, group, groups, weights)[:, :, 0]
    return slopes, effects, int(rank)
