"""Draws of the response coefficients from their covariance."""

from __future__ import annotations

import numpy as np
import pandas as pd

from stook.constants import CENTRAL_DRAW
from stook.randomness import generator
from stook.yields.response import Response

_DIGITS = 12  # of the root of the correlation matrix: hides rounding that differs by machine


def coefficient_draws(response: Response, draws: int, seed: int) -> pd.DataFrame:
    """Return the central estimate and draws from the normal distribution of its covariance.

    Parameters
    ----------
    response
        The response.
    draws
        Number of draws; the first ones are the same whatever the number.
    seed
        The assessment's seed.

    Returns
    -------
    DataFrame
        ``draw`` (int64, 0 is the central estimate) and a column per coefficient.
    """
    central = response.coefficient_vector
    root, spread = correlation_root(response.covariance_matrix)
    stream = generator(seed, "coefficients", response.crop, response.system)
    normal = stream.standard_normal((draws, len(central)))
    mixed = np.zeros_like(normal)
    for column in range(len(central)):  # one after the other: no order of a library's own
        mixed += normal[:, [column]] * root[column]
    values = np.vstack([central, central + spread * mixed])
    frame = pd.DataFrame(values, columns=response.coefficient_names)
    frame.insert(0, "draw", np.arange(CENTRAL_DRAW, draws + 1, dtype=np.int64))
    return frame


def correlation_root(covariance: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the symmetric root of the correlation matrix, (k, k), and the standard errors, (k,).

    The symmetric root is unique, whatever eigenvectors a library returns, and exists where the
    matrix is singular; negative eigenvalues from rounding count as zero.
    """
    spread = np.sqrt(np.diag(covariance))
    scale = np.where(spread > 0, spread, 1.0)
    correlation = covariance / scale[:, None] / scale
    values, vectors = np.linalg.eigh(correlation)
    root = (vectors * np.sqrt(np.maximum(values, 0.0))) @ vectors.T
    return np.round((root + root.T) / 2, _DIGITS), spread
