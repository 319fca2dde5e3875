"""Regridding against what must hold for every grid, and against scipy and shapely.

Conservative remapping, invariants: Jones 1999, Mon. Weather Rev. 127, 2204-2210: the area-weighted
sum is kept, a constant field stays constant, the weights of a covered target cell sum to 1.
"""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.interpolate import RegularGridInterpolator
from stook.grids.axes import axis_of_edges
from stook.grids.cells import cell_areas
from stook.grids.regrid import (
    HALF,
    AxisWeights,
    bilinear_weights,
    conservative_weights,
    weighted_mean,
    weighted_total,
)

QUICK = settings(max_examples=25, derandomize=True, deadline=None, database=None)


def edges(low: float, high: float, largest: int = 9) -> st.SearchStrategy[np.ndarray]:
    """Return ascending edges from low to high with cells of uneven width."""
    return st.lists(st.floats(0.2, 1.0), min_size=1, max_size=largest).map(
        lambda widths: low + (high - low) * np.append(0.0, np.cumsum(widths) / np.sum(widths))
    )


def random_field(seed: int, rows: int, columns: int) -> np.ndarray:
    return np.random.default_rng(seed).normal(5.0, 3.0, (1, rows, columns))


def mean_of(
    values: np.ndarray, rows: AxisWeights, columns: AxisWeights, least: float = HALF
) -> np.ndarray:
    shape = len(rows.start) - 1, len(columns.start) - 1
    result = np.empty((len(values), *shape))
    wanted = np.ones(shape, dtype=bool)
    weighted_mean(values, rows.arrays, columns.arrays, None, wanted, least, 1.0, 0.0, result)
    return result


@QUICK
@given(
    source_lat=edges(-90, 90),
    source_lon=edges(0, 360),
    lat=edges(-90, 90),
    lon=edges(-180, 180),
    seed=st.integers(0, 99),
)
def test_global_area_weighted_sum_is_kept(
    source_lat: np.ndarray, source_lon: np.ndarray, lat: np.ndarray, lon: np.ndarray, seed: int
) -> None:
    rows = conservative_weights(axis_of_edges(source_lat, False, None), lat, "lat")
    columns = conservative_weights(axis_of_edges(source_lon, False, 360.0), lon, "lon")
    for weights in (rows, columns):
        sums = np.add.reduceat(weights.weight, weights.start[:-1])
        np.testing.assert_allclose(sums, 1.0, rtol=0, atol=1e-12)
    values = random_field(seed, len(source_lat) - 1, len(source_lon) - 1)
    found = mean_of(values, rows, columns)[0]
    before = (values[0] * cell_areas(source_lat, source_lon)).sum()
    assert (found * cell_areas(lat, lon)).sum() == pytest.approx(before, rel=1e-11)
    assert found.min() >= values.min() - 1e-9
    assert found.max() <= values.max() + 1e-9


@QUICK
@given(
    source_lat=edges(10, 30), source_lon=edges(170, 190), lat=edges(5, 40), seed=st.integers(0, 9)
)
def test_totals_are_kept_inside_the_grid(
    source_lat: np.ndarray, source_lon: np.ndarray, lat: np.ndarray, seed: int
) -> None:
    """A source over the antimeridian; the target reaches round the globe."""
    lon = np.linspace(-180, 180, 14)
    rows = conservative_weights(axis_of_edges(source_lat, False, None), lat, "lat", "source")
    columns = conservative_weights(axis_of_edges(source_lon, False, 360.0), lon, "lon", "source")
    hectares = np.abs(random_field(seed, len(source_lat) - 1, len(source_lon) - 1)[0])
    hectares.flat[0] = np.nan
    found = np.empty((len(lat) - 1, len(lon) - 1))
    weighted_total(hectares, rows.arrays, columns.arrays, found)
    assert found.sum() == pytest.approx(np.nansum(hectares), rel=1e-12)


@QUICK
@given(
    source_lat=edges(-40, 60),
    source_lon=edges(-30, 200),
    lat=edges(-60, 70),
    lon=edges(-90, 170),
    constant=st.floats(-300, 300, width=32),
)
def test_constant_field_stays_constant(
    source_lat: np.ndarray,
    source_lon: np.ndarray,
    lat: np.ndarray,
    lon: np.ndarray,
    constant: float,
) -> None:
    """Bit for bit in the float32 of the files; what lies outside is missing."""
    source = axis_of_edges(source_lat, False, None), axis_of_edges(source_lon, False, 360.0)
    values = np.full((1, len(source[0]), len(source[1])), constant, dtype=np.float32)
    conservative = (
        conservative_weights(source[0], lat, "lat"),
        conservative_weights(source[1], lon, "lon"),
    )
    bilinear = (
        bilinear_weights(source[0], (lat[:-1] + lat[1:]) / 2, "lat"),
        bilinear_weights(source[1], (lon[:-1] + lon[1:]) / 2, "lon"),
    )
    for rows, columns in (conservative, bilinear):
        found = mean_of(values, rows, columns).astype(np.float32)
        assert set(np.unique(found[~np.isnan(found)])) <= {np.float32(constant)}


@QUICK
@given(source_lat=edges(0, 9), source_lon=edges(0, 9), seed=st.integers(0, 999))
def test_overlap_on_a_small_plane_is_that_of_shapely(
    source_lat: np.ndarray, source_lon: np.ndarray, seed: int
) -> None:
    """With latitude as its sine, overlaps are those of rectangles (shapely)."""
    random = np.random.default_rng(seed)
    lat = np.sort(random.uniform(-1, 10, 4))
    lon = np.sort(random.uniform(-1, 10, 4))
    assume(min(np.diff(lat).min(), np.diff(lon).min()) > 1e-3)
    rows = conservative_weights(axis_of_edges(source_lat, False, None), lat, "lat")
    columns = conservative_weights(axis_of_edges(source_lon, False, 360.0), lon, "lon")

    def box(south: float, north: float, west: float, east: float) -> shapely.Geometry:
        return shapely.box(west, np.sin(np.deg2rad(south)), east, np.sin(np.deg2rad(north)))

    shares = np.zeros((3, 3, len(source_lat) - 1, len(source_lon) - 1))
    for i in range(3):
        for j in range(3):
            pixel = box(lat[i], lat[i + 1], lon[j], lon[j + 1])
            for a in range(len(source_lat) - 1):
                for b in range(len(source_lon) - 1):
                    cell = box(*source_lat[a : a + 2], *source_lon[b : b + 2])
                    shares[i, j, a, b] = pixel.intersection(cell).area / pixel.area
    found = (
        dense(rows, len(source_lat) - 1)[:, None, :, None]
        * (dense(columns, len(source_lon) - 1)[None, :, None, :])
    )
    np.testing.assert_allclose(found, shares, rtol=0, atol=1e-6)


def test_bilinear_is_that_of_scipy() -> None:
    random = np.random.default_rng(4)
    lat_edges = np.array([-10.0, -4.0, 1.5, 3.0, 9.0, 14.0])
    lon_edges = np.array([30.0, 36.0, 37.0, 44.0, 49.5])
    source = axis_of_edges(lat_edges, False, None), axis_of_edges(lon_edges, False, 360.0)
    values = random.normal(size=(3, 5, 4))
    lat = np.sort(random.uniform(source[0].centres[0], source[0].centres[-1], 40))
    lon = np.sort(random.uniform(source[1].centres[0], source[1].centres[-1], 30))
    found = mean_of(
        values, bilinear_weights(source[0], lat, "lat"), bilinear_weights(source[1], lon, "lon")
    )
    for t in range(3):
        expected = RegularGridInterpolator((source[0].centres, source[1].centres), values[t])
        np.testing.assert_allclose(found[t], expected(tuple(np.meshgrid(lat, lon, indexing="ij"))))


def test_bilinear_round_the_globe_is_that_of_scipy() -> None:
    """The reference gets the columns of both sides of the seam."""
    random = np.random.default_rng(5)
    lat_edges, lon_edges = np.linspace(-90, 90, 10), np.linspace(0, 360, 13)
    source = axis_of_edges(lat_edges, False, None), axis_of_edges(lon_edges, False, 360.0)
    values = random.normal(size=(1, 9, 12))
    lat, lon = np.linspace(-79, 79, 33), np.linspace(-179.3, 179.6, 57)
    found = mean_of(
        values, bilinear_weights(source[0], lat, "lat"), bilinear_weights(source[1], lon, "lon")
    )
    centres = source[1].centres
    wide = np.concatenate([centres - 360, centres, centres + 360])
    expected = RegularGridInterpolator((source[0].centres, wide), np.tile(values[0], (1, 3)))
    np.testing.assert_allclose(found[0], expected(tuple(np.meshgrid(lat, lon, indexing="ij"))))


def dense(weights: AxisWeights, size: int) -> np.ndarray:
    """Return weights as a matrix, shape (target, source)."""
    result = np.zeros((len(weights.start) - 1, size))
    target = np.repeat(np.arange(len(result)), np.diff(weights.start))
    np.add.at(result, (target, weights.index), weights.weight)
    return result
