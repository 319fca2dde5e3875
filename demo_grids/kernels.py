"""Compiled loops of the generator."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def combine(series: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Return weighted sums of modes: (time, mode), (mode, cell) -> (time, cell), float32.

    A matrix product summed in a fixed order. Compiled matrix libraries sum in an order that
    depends on the number of threads, and the world must not depend on the machine's cores.
    """
    out = np.zeros((series.shape[0], weights.shape[1]), dtype=np.float32)
    for time in range(series.shape[0]):
        for mode in range(series.shape[1]):
            value = series[time, mode]
            for cell in range(weights.shape[1]):
                out[time, cell] += value * weights[mode, cell]
    return out
