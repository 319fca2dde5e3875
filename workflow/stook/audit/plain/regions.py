"""The regions stage for one cell and one region, written for reading: no code of the kernels."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import shapely

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(8)


def cell_share(
    polygon: shapely.Geometry, south: float, north: float, west: float, east: float
) -> float:
    """Return the share of a cell's area on the sphere inside a polygon.

    The polygon is clipped to the cell by shapely; the area of what is left is the integral of
    ``sin(lat) dlon`` around it, taken edge by edge by Gauss-Legendre quadrature.

    Parameters
    ----------
    polygon
        Edges straight in longitude and latitude, degrees.
    south, north, west, east
        The cell, degrees.
    """
    inside = shapely.intersection(polygon, shapely.box(west, south, east, north))
    area = 0.0
    for part in shapely.get_parts(inside):
        if part.geom_type == "Polygon":
            area += abs(_loop(part.exterior)) - sum(abs(_loop(hole)) for hole in part.interiors)
    height = math.sin(math.radians(north)) - math.sin(math.radians(south))
    return area / (height * math.radians(east - west))


def _loop(ring: shapely.LinearRing) -> float:
    points = shapely.get_coordinates(ring)
    total = 0.0
    for (lon1, lat1), (lon2, lat2) in pairwise(points):
        middle, half = (lat1 + lat2) / 2, (lat2 - lat1) / 2
        mean = sum(
            weight / 2 * math.sin(math.radians(middle + node * half))
            for node, weight in zip(_NODES, _WEIGHTS, strict=True)
        )
        total += mean * math.radians(lon2 - lon1)
    return total


def region_year(
    yields: np.ndarray, reasons: np.ndarray, areas: np.ndarray, shares: np.ndarray
) -> tuple[float, float, float]:
    """Return production (t), area (ha) and area left out (ha) of one region, year and draw.

    Parameters
    ----------
    yields
        t/ha of every pixel in that year, any shape.
    reasons
        0 where the pixel has yields at all.
    areas
        Harvested area of the pixel, ha.
    shares
        Share of the cell inside the region.
    """
    production, area, left_out = 0.0, 0.0, 0.0
    for value, reason, harvested, share in zip(
        np.ravel(yields), np.ravel(reasons), np.ravel(areas), np.ravel(shares), strict=True
    ):
        weight = harvested * share
        if not weight > 0:
            continue
        if reason != 0:
            left_out += weight
            continue
        area += weight
        production += weight * value  # a missing year makes the year of the region missing
    return float(production), float(area), float(left_out)
