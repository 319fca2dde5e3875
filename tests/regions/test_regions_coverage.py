"""The share of cells inside polygons: by hand, by identities and by the plain path."""

from __future__ import annotations

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from stook.audit.plain.regions import cell_share
from stook.grids.cells import cell_areas
from stook.grids.overlay import coverage, sphere_area

LAT, LON = np.array([0.0, 1, 2, 3]), np.array([0.0, 1, 2, 3])


def height(south: float, north: float) -> float:
    return math.sin(math.radians(north)) - math.sin(math.radians(south))


def test_a_box_by_hand() -> None:
    found = coverage(shapely.box(0.5, 0.25, 2.0, 2.0), LAT, LON)
    row = height(0.25, 1) / height(0, 1)
    np.testing.assert_allclose(
        found, [[0.5 * row, row, 0], [0.5, 1, 0], [0, 0, 0]], rtol=1e-13, atol=0
    )


def test_a_hole_and_an_island_in_it() -> None:
    ring = shapely.Polygon(shapely.box(0, 0, 3, 3).exterior, [shapely.box(1, 1, 2, 2).exterior])
    island = shapely.box(1.25, 1, 1.75, 2)
    found = coverage(shapely.MultiPolygon([ring, island]), LAT, LON)
    expected = np.ones((3, 3))
    expected[1, 1] = 0.5
    np.testing.assert_allclose(found, expected, rtol=1e-13)
    assert (found[expected == 1] == 1).all()


def test_the_whole_grid_and_nothing() -> None:
    assert (coverage(shapely.box(-5, -5, 9, 9), LAT, LON) == 1).all()
    assert (coverage(shapely.box(4, 0, 5, 3), LAT, LON) == 0).all()
    assert (coverage(shapely.box(3, 0, 5, 3), LAT, LON) == 0).all()  # it only touches
    assert (coverage(shapely.Polygon(), LAT, LON) == 0).all()


def test_orientation_does_not_matter() -> None:
    points = [(0.2, 0.3), (2.7, 0.4), (1.9, 2.8)]
    one, other = (coverage(shapely.Polygon(p), LAT, LON) for p in (points, points[::-1]))
    np.testing.assert_allclose(one, other, rtol=0, atol=1e-15)


def test_a_comb_leaves_nothing_between_its_teeth() -> None:
    """Clipping joins the teeth by edges along the row that must cancel."""
    teeth = [shapely.box(x, 0, x + 0.1, 3) for x in (0.2, 1.2, 2.2)]
    comb = shapely.union_all([shapely.box(0, 2.5, 3, 3), *teeth])
    assert comb.geom_type == "Polygon"
    lon = np.array([0.0, 0.2, 0.3, 1.2, 1.3, 2.2, 2.3, 3])
    found = coverage(comb, np.array([0.0, 1, 2]), lon)
    np.testing.assert_array_equal(found, np.tile([0, 1, 0, 1, 0, 1, 0], (2, 1)))


@st.composite
def stars(draw: st.DrawFn) -> shapely.Geometry:
    """Draw a star-shaped polygon of 5 to 20 points, some with a hole around its middle."""
    count = draw(st.integers(5, 20))
    seed = draw(st.integers(0, 2**31))
    random = np.random.default_rng(seed)
    angle = (np.arange(count) + random.uniform(0.1, 0.9, count)) * 2 * np.pi / count
    radius = random.uniform(0.5, 4, count)
    middle = random.uniform(3, 6), random.uniform(-60, 60)
    ring = np.column_stack([middle[0] + radius * np.cos(angle), middle[1] + radius * np.sin(angle)])
    holes = [np.array(middle) + 0.3 * (ring - middle)] if draw(st.booleans()) else []
    return shapely.Polygon(ring, holes)


@settings(max_examples=25, deadline=None, derandomize=True)
@given(stars(), st.integers(0, 2**31))
def test_identities(star: shapely.Geometry, seed: int) -> None:
    random = np.random.default_rng(seed)
    south = math.floor(star.bounds[1]) - 0.25
    lat, lon = south + 0.5 * np.arange(24), np.arange(-2.0, 12.1, 0.7)
    found = coverage(star, lat, lon)
    assert ((found >= 0) & (found <= 1)).all()
    # The cells together hold the polygon.
    areas = cell_areas(lat, lon) / 6371.0**2
    assert (found * areas).sum() == pytest.approx(sphere_area(star), rel=1e-12)
    # Any part of the grid has the same bits.
    i, j = int(random.integers(0, 10)), int(random.integers(0, 10))
    part = coverage(star, lat[i : i + 8], lon[j : j + 6])
    np.testing.assert_array_equal(part, found[i : i + 7, j : j + 5])
    # A polygon and what it leaves of a box fill the box.
    rest = shapely.difference(shapely.box(-2, lat[0], lon[-1], lat[-1]), star)
    np.testing.assert_allclose(found + coverage(rest, lat, lon), 1, rtol=0, atol=1e-11)
    # The plain path, on the cells that the border crosses and on some others.
    for row, column in random.integers(0, (23, 19), (30, 2)):
        plain = cell_share(star, lat[row], lat[row + 1], lon[column], lon[column + 1])
        assert found[row, column] == pytest.approx(plain, abs=1e-11)
