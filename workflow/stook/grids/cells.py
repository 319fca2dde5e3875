"""Areas of latitude-longitude cells on the sphere."""

from __future__ import annotations

import math

import numpy as np

from stook.constants import EARTH_RADIUS_KM


def sine(degrees: np.ndarray) -> np.ndarray:
    """Return the sine of angles in degrees, one by one.

    A vectorised sine may differ in the last bit with the place of a value in its array; a part of
    a grid must have exactly the numbers of the whole.
    """
    return np.array([math.sin(math.radians(value)) for value in degrees], dtype=np.float64)


def cell_areas(lat_edges: np.ndarray, lon_edges: np.ndarray) -> np.ndarray:
    """Return the area of every cell, ``R**2 (sin lat2 - sin lat1) (lon2 - lon1)``.

    Parameters
    ----------
    lat_edges, lon_edges
        Ascending cell edges in degrees, shapes (lat + 1,) and (lon + 1,).

    Returns
    -------
    ndarray
        km2, shape (lat, lon); R is 6371 km.
    """
    heights = np.diff(sine(lat_edges))
    widths = np.diff(np.deg2rad(lon_edges))
    return EARTH_RADIUS_KM**2 * heights[:, None] * widths[None, :]
