"""The exact share of every latitude-longitude cell that lies inside a polygon.

A polygon's edges are straight in longitude and latitude. Each ring is clipped to the cell, and the
area of what is left on the unit sphere is the line integral of ``sin(lat) dlon`` along its edges
(Green's theorem), which has a closed form for a straight edge. Nothing is sampled.

A cell is computed from its own four edges and the polygon alone, so that any part of a grid, and
any choice of polygons, gives the same bits.
"""

from __future__ import annotations

import math

import numpy as np
import shapely
from numba import njit

SNAP = 1e-12
"""A share this close to 0 or 1 is 0 or 1: rounding of the line integral."""


def coverage(polygon: shapely.Geometry, lat_edges: np.ndarray, lon_edges: np.ndarray) -> np.ndarray:
    """Return the share of each cell's area on the sphere that lies inside a polygon.

    Parameters
    ----------
    polygon
        Polygon or MultiPolygon, valid, degrees longitude and latitude, within the longitudes that
        the grid counts in (no wrapping here).
    lat_edges, lon_edges
        Ascending cell edges, degrees, shapes (lat + 1,) and (lon + 1,).

    Returns
    -------
    ndarray
        float64 in 0..1, shape (lat, lon).

    Examples
    --------
    >>> coverage(shapely.box(0, 0, 0.5, 1), np.array([0.0, 1.0]), np.array([0.0, 1.0, 2.0]))
    array([[0.5, 0. ]])
    """
    areas = np.zeros((len(lat_edges) - 1, len(lon_edges) - 1))
    lat_edges = np.ascontiguousarray(lat_edges, dtype=np.float64)
    lon_edges = np.ascontiguousarray(lon_edges, dtype=np.float64)
    for part in shapely.get_parts(polygon):
        west, south, east, north = part.bounds
        rows = _touched(lat_edges, south, north)
        columns = _touched(lon_edges, west, east)
        if rows.start >= rows.stop or columns.start >= columns.stop:
            continue
        for hole, ring in enumerate(shapely.get_rings(part)):
            x, y = _open_ring(ring)
            inside = _ring_sign(x, y) * (1.0 if hole == 0 else -1.0)
            add_ring(
                x,
                y,
                lat_edges[rows.start : rows.stop + 1],
                lon_edges[columns.start : columns.stop + 1],
                inside,
                areas[rows, columns],
            )
    return _shares(areas, lat_edges, lon_edges)


def sphere_area(polygon: shapely.Geometry) -> float:
    """Return the area of a polygon on the unit sphere, steradians.

    Parameters
    ----------
    polygon
        As in `coverage`.
    """
    if polygon.is_empty:
        return 0.0
    west, south, east, north = polygon.bounds
    share = coverage(polygon, np.array([south, north]), np.array([west, east]))[0, 0]
    height = math.sin(math.radians(north)) - math.sin(math.radians(south))
    return float(share * height * math.radians(east - west))


def _touched(edges: np.ndarray, low: float, high: float) -> slice:
    """Return the cells along an axis that touch an interval."""
    first = int(np.searchsorted(edges, low, side="right")) - 1
    last = int(np.searchsorted(edges, high, side="left"))
    return slice(max(first, 0), min(last, len(edges) - 1))


def _open_ring(ring: shapely.LinearRing) -> tuple[np.ndarray, np.ndarray]:
    points = shapely.get_coordinates(ring)[:-1]
    return np.ascontiguousarray(points[:, 0]), np.ascontiguousarray(points[:, 1])


@njit(cache=True, nogil=True)
def _ring_sign(x: np.ndarray, y: np.ndarray) -> float:
    """Return 1 for a ring that runs counter-clockwise, else -1."""
    twice = 0.0
    for i in range(1, len(x) - 1):
        twice += (x[i] - x[0]) * (y[i + 1] - y[0]) - (x[i + 1] - x[0]) * (y[i] - y[0])
    return 1.0 if twice >= 0 else -1.0


@njit(cache=True, nogil=True)
def add_ring(
    x: np.ndarray,
    y: np.ndarray,
    lat_edges: np.ndarray,
    lon_edges: np.ndarray,
    sign: float,
    areas: np.ndarray,
) -> None:
    """Add the area of a ring inside each cell (kernel): (n), (n), (r + 1), (c + 1), () -> (r, c).

    Parameters
    ----------
    x, y
        Longitude and latitude of the vertices, degrees; the first is not repeated.
    lat_edges, lon_edges
        Ascending, degrees.
    sign
        1 if the ring is counter-clockwise and filled, -1 if one of both is otherwise.
    areas
        Steradians; changed in place.
    """
    for row in range(len(lat_edges) - 1):
        south, north = lat_edges[row], lat_edges[row + 1]
        band_y, band_x = _clip(y, x, south, 1.0)
        band_y, band_x = _clip(band_y, band_x, north, -1.0)
        if len(band_x) < 3:
            continue
        west_most, east_most = band_x.min(), band_x.max()
        for column in range(len(lon_edges) - 1):
            west, east = lon_edges[column], lon_edges[column + 1]
            if east <= west_most or west >= east_most:
                continue
            cell_x, cell_y = _clip(band_x, band_y, west, 1.0)
            cell_x, cell_y = _clip(cell_x, cell_y, east, -1.0)
            areas[row, column] += sign * _area_above(cell_x, cell_y, south)


@njit(cache=True, nogil=True)
def _clip(u: np.ndarray, v: np.ndarray, bound: float, side: float) -> tuple[np.ndarray, np.ndarray]:
    """Clip a ring to ``side * (u - bound) >= 0`` (Sutherland & Hodgman 1974, CACM 17, 32-42).

    A ring that falls in pieces stays one ring, its pieces joined by edges along the bound that are
    run both ways and cancel in every line integral.
    """
    n = len(u)
    out_u, out_v = np.empty(2 * n), np.empty(2 * n)
    count = 0
    for i in range(n):
        j = i + 1 if i + 1 < n else 0
        here, there = side * (u[i] - bound) >= 0, side * (u[j] - bound) >= 0
        if here:
            out_u[count], out_v[count] = u[i], v[i]
            count += 1
        if here != there:
            # From the lower to the higher end, so that an edge shared by two polygons, which run
            # it in opposite directions, is cut at the same point.
            low, high = (i, j) if u[i] < u[j] else (j, i)
            share = (bound - u[low]) / (u[high] - u[low])
            out_u[count], out_v[count] = bound, v[low] + share * (v[high] - v[low])
            count += 1
    return out_u[:count], out_v[:count]


@njit(cache=True, nogil=True)
def _area_above(x: np.ndarray, y: np.ndarray, south: float) -> float:
    """Return the signed area of a ring, steradians: minus the integral of sin(lat) dlon.

    The sine is taken above that of `south`, which changes nothing over a closed ring and keeps the
    digits of a small cell. Its mean along a straight edge is sin(middle) sin(h) / h, h half the
    difference of latitude.
    """
    base = math.sin(math.radians(south))
    area = 0.0
    n = len(x)
    for i in range(n):
        j = i + 1 if i + 1 < n else 0
        step = x[j] - x[i]
        if step != 0.0:
            half = math.radians(y[j] - y[i]) / 2
            mean = math.sin(math.radians(y[i] + y[j]) / 2)
            if half != 0.0:
                mean *= math.sin(half) / half
            area -= (mean - base) * math.radians(step)
    return area


@njit(cache=True, nogil=True)
def _shares(areas: np.ndarray, lat_edges: np.ndarray, lon_edges: np.ndarray) -> np.ndarray:
    """Return areas as shares of their cells (kernel): (r, c), (r + 1), (c + 1) -> (r, c)."""
    shares = np.empty_like(areas)
    for row in range(areas.shape[0]):
        height = math.sin(math.radians(lat_edges[row + 1])) - math.sin(math.radians(lat_edges[row]))
        for column in range(areas.shape[1]):
            width = math.radians(lon_edges[column + 1] - lon_edges[column])
            share = areas[row, column] / (height * width)
            if share < SNAP:
                share = 0.0
            elif share > 1.0 - SNAP:
                share = 1.0
            shares[row, column] = share
    return shares
