"""Sums of areas over the pixels of regions, in the order of the pixels (plain arrays)."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def add_areas(weights: np.ndarray, kept: np.ndarray, sums: np.ndarray) -> None:
    """Add the area of the pixels kept to each region: (region, pixel), (pixel) -> (region).

    One pixel after the other, so that a region has the same bits whatever other pixels the block
    holds (they weigh nothing in it) and wherever blocks end.

    Parameters
    ----------
    weights
        float64, ha of each pixel inside each region.
    kept
        bool.
    sums
        float64, ha; changed in place.
    """
    for region in range(weights.shape[0]):
        for pixel in range(weights.shape[1]):
            if kept[pixel]:
                sums[region] += weights[region, pixel]


@njit(cache=True, nogil=True)
def add_flagged(weights: np.ndarray, flagged: np.ndarray, sums: np.ndarray) -> None:
    """Add the area flagged in each year: (region, pixel), (pixel, year) -> (region, year).

    Parameters
    ----------
    weights
        float64, ha of each pixel inside each region; 0 for a pixel that is left out.
    flagged
        bool.
    sums
        float64, ha; changed in place.
    """
    for region in range(weights.shape[0]):
        for pixel in range(weights.shape[1]):
            weight = weights[region, pixel]
            if weight == 0.0:
                continue
            for year in range(flagged.shape[1]):
                if flagged[pixel, year]:
                    sums[region, year] += weight
