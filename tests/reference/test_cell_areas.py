"""Areas of cells against published formula and values, and against integration.

The values are those of a sphere of 6371 km radius, computed by ``R**2 (sin lat2 - sin lat1) dlon``
(the usual formula, for example in Jones 1999, Mon. Weather Rev. 127, 2204-2210).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import dblquad
from stook.grids.cells import cell_areas, sine


@pytest.mark.parametrize(
    ("south", "north", "width", "expected"),
    [
        (0.0, 1.0, 1.0, 12_363.684),
        (-0.5, 0.5, 1.0, 12_364.155),
        (45.0, 46.0, 1.0, 8_666.151),
        (0.0, 0.5, 0.5, 3_091.039),
        (30.0, 30.5, 0.5, 2_670.174),
        (-90.0, 90.0, 360.0, 510_064_472.0),
    ],
)
def test_area_of_one_cell(south: float, north: float, width: float, expected: float) -> None:
    area = cell_areas(np.array([south, north]), np.array([0.0, width]))
    assert area.shape == (1, 1)
    assert area[0, 0] == pytest.approx(expected, rel=2e-9, abs=5e-4)


def test_area_against_integration() -> None:
    """The integral of cos(latitude) over the cell (scipy)."""
    low, high, west, east = map(math.radians, (51.2, 53.7, 4.0, 9.5))
    expected, _ = dblquad(lambda lat, lon: 6371.0**2 * math.cos(lat), west, east, low, high)
    area = cell_areas(np.array([51.2, 53.7]), np.array([4.0, 9.5]))[0, 0]
    assert area == pytest.approx(expected, rel=1e-12)


def test_cells_of_the_globe_add_up() -> None:
    areas = cell_areas(np.linspace(-90, 90, 73), np.linspace(-180, 180, 97))
    assert areas.sum() == pytest.approx(4 * math.pi * 6371.0**2, rel=1e-12)
    np.testing.assert_allclose(areas, areas[::-1], rtol=1e-12)


def test_sine_of_a_part_has_the_bits_of_the_whole() -> None:
    degrees = np.linspace(-90, 90, 1801)
    whole = sine(degrees)
    for start in (1, 2, 3, 700):
        np.testing.assert_array_equal(sine(degrees[start : start + 5]), whole[start : start + 5])
    np.testing.assert_allclose(whole, np.sin(np.deg2rad(degrees)), rtol=0, atol=1e-15)
