"""The exact overlap of polygons and cells against closed forms, shapely and exactextract."""

from __future__ import annotations

import math

import exactextract
import geopandas as gpd
import numpy as np
import pytest
import shapely
from exactextract.raster import NumPyRasterSource
from stook.grids.cells import cell_areas
from stook.grids.overlay import coverage, sphere_area
from stook.regions.polygons import area_km2

CRAG = shapely.Polygon(
    [(0.3, 50.2), (3.9, 50.0), (2.2, 51.1), (3.7, 53.6), (1.9, 52.4), (0.6, 53.9), (1.1, 51.9)],
    [[(1.4, 51.4), (2.4, 52.1), (1.7, 52.3)]],
)


@pytest.mark.parametrize(
    ("box", "km2"),
    [
        # R = 6371 km: R^2 (sin lat2 - sin lat1) dlon, worked out apart to the digits given.
        ((0, 0, 1, 1), "12363.684"),
        ((10, -0.5, 11, 0.5), "12364.155"),
        ((-80, 45, -79, 46), "8666.151"),
        ((0, 0, 0.5, 0.5), "3091.039"),
        ((100, 30, 100.5, 30.5), "2670.174"),
        ((-180, -90, 180, 90), "510064472"),
    ],
)
def test_areas_of_boxes(box: tuple[float, ...], km2: str) -> None:
    digits = len(km2.partition(".")[2])
    assert f"{area_km2(sphere_area(shapely.box(*box))):.{digits}f}" == km2


def test_area_of_a_triangle_to_the_pole() -> None:
    # Between lat = 90 t and lon = 90 t, t from 0 to 1, and the meridian of 90 degrees: the integral
    # of sin(lat) over longitude in radians from 0 to pi/2 where lat = lon is 1.
    triangle = shapely.Polygon([(0, 0), (90, 0), (90, 90)])
    assert sphere_area(triangle) == pytest.approx(1.0, rel=1e-14)
    quarter = coverage(triangle, np.array([0.0, 45, 90]), np.array([0.0, 45, 90]))
    root = math.sqrt(0.5)
    first = (1 - root) / (root * math.pi / 4)
    last = (1 - (1 - root) - root * math.pi / 4) / ((1 - root) * math.pi / 4)
    np.testing.assert_allclose(quarter, [[first, 1], [0, last]], rtol=1e-14)


def test_against_shapely_in_equal_area_coordinates() -> None:
    """Clip by shapely, cut edges to 0.002 degrees, and take the area in (lon, sin lat)."""
    lat, lon = np.arange(50.0, 54.1, 0.5), np.arange(0.0, 4.1, 0.5)
    expected = np.zeros((lat.size - 1, lon.size - 1))
    for i in range(lat.size - 1):
        for j in range(lon.size - 1):
            cell = shapely.box(lon[j], lat[i], lon[j + 1], lat[i + 1])
            areas = []
            for shape in (shapely.intersection(CRAG, cell), cell):
                dense = shapely.segmentize(shape, 0.002)
                flat = shapely.transform(
                    dense, lambda p: np.column_stack([p[:, 0], np.sin(np.deg2rad(p[:, 1]))])
                )
                areas.append(flat.area)
            expected[i, j] = areas[0] / areas[1]
    # A chord of 0.002 degrees leaves the sine by less than (3.5e-5)^2 / 8 = 2e-10 of a cell's edge.
    np.testing.assert_allclose(coverage(CRAG, lat, lon), expected, rtol=0, atol=1e-8)


def test_against_exactextract_on_small_cells() -> None:
    """exactextract gives the planar share; in a cell of 0.01 degrees the two are nearly the same.

    Within a cell cos(lat) varies by tan(lat) dlat, here 1.4 * 1.7e-4, and moves a share by at most
    an eighth of that; exactextract itself keeps shares as 32-bit numbers. Corners are moved off the
    corners of cells, where it (0.3) takes a cell that is only touched for one inside.
    """
    crag = shapely.transform(CRAG, lambda p: p + 0.0037)
    lat, lon = np.linspace(50, 54, 401), np.linspace(0, 4, 401)
    frame = gpd.GeoDataFrame({"name": ["crag"]}, geometry=[crag], crs=4326)
    source = NumPyRasterSource(np.zeros((400, 400)), 0, 50, 4, 54, srs_wkt=frame.crs.to_wkt())
    found = exactextract.exact_extract(source, frame, ["cell_id", "coverage"], output="pandas")
    planar = np.zeros(400 * 400)
    planar[found["cell_id"][0]] = found["coverage"][0]
    ours = coverage(crag, lat, lon)
    np.testing.assert_allclose(ours, planar.reshape(400, 400)[::-1], rtol=0, atol=4e-5)
    total = (ours * cell_areas(lat, lon)).sum()
    assert total == pytest.approx(area_km2(sphere_area(crag)), rel=1e-12)
