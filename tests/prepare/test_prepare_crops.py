"""Crop layers: reading NetCDF and GeoTIFF, totals, yields, calendars, and the plain path."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
import rasterio
from hypothesis import given, settings
from hypothesis import strategies as st
from prepare_inputs import crop_file, crop_tiff, grid_of
from stook.assessment.crops import Layer
from stook.audit.plain.prepare import (
    PlainGrid,
    PlainPixel,
    area_of_pixel,
    cell_km2,
    yield_of_pixel,
)
from stook.errors import InputError
from stook.grids.axes import axis_of_edges
from stook.grids.cells import cell_areas
from stook.prepare.rasters import Number, Raster, open_raster
from stook.prepare.resample import area_on_grid, calendar_on_grid, yield_on_grid

GRID = grid_of(10, 13, 20, 24, 0.5)


def raster_of(
    values: np.ndarray, lat_edges: np.ndarray, lon_edges: np.ndarray, unit: str | None
) -> Raster:
    """Return a raster in memory."""
    lat, lon = axis_of_edges(lat_edges, False, None), axis_of_edges(lon_edges, False, 360.0)
    return Raster("memory", lat, lon, unit, lambda rows, columns: values[rows, columns].copy())


def spread(size: float, step: float = 0.1) -> np.ndarray:
    return np.round(np.arange(round(size / step) + 1) * step, 9)


@pytest.mark.parametrize("step", [0.1, 0.25, 1 / 3, 0.5, 1.0, 1.7])
@pytest.mark.parametrize("block_mb", [1e-4, 64])
def test_area_is_kept_at_every_resolution(step: float, block_mb: float) -> None:
    """Finer, equal, coarser and uneven; cells that lie inside the grid."""
    rows, columns = int(3 / step), int(4 / step)
    values = np.random.default_rng(1).gamma(1.0, 50.0, (rows, columns))
    values[0, 0] = np.nan
    raster = raster_of(
        values, 10 + step * np.arange(rows + 1), 20 + step * np.arange(columns + 1), "ha"
    )
    found = area_on_grid(raster, GRID, block_mb)
    assert found.sum() == pytest.approx(np.nansum(values), rel=1e-12)
    np.testing.assert_array_equal(found, area_on_grid(raster, GRID, 64))


def test_area_on_the_same_grid_is_unchanged() -> None:
    values = np.random.default_rng(2).gamma(1.0, 50.0, GRID.shape)
    raster = raster_of(values, GRID.lat_edges, GRID.lon_edges, "ha")
    np.testing.assert_array_equal(area_on_grid(raster, GRID, 64), values)


@pytest.mark.parametrize(
    ("unit", "value", "hectares"),
    [("ha", 40.0, 40.0), ("hectare", 40.0, 40.0), ("km2", 0.4, 40.0), ("m2", 4e5, 40.0)],
)
def test_units_of_area(unit: str, value: float, hectares: float) -> None:
    raster = raster_of(np.full(GRID.shape, value), GRID.lat_edges, GRID.lon_edges, unit)
    np.testing.assert_allclose(area_on_grid(raster, GRID, 64), hectares, rtol=1e-14)
    number = Number("key", value, unit)
    np.testing.assert_allclose(area_on_grid(number, GRID, 64), hectares, rtol=1e-14)


@pytest.mark.parametrize(("unit", "value"), [("1", 0.2), ("%", 20.0), ("percent", 20.0)])
def test_shares_of_the_cell(unit: str, value: float) -> None:
    expected = 0.2 * 100 * cell_areas(GRID.lat_edges, GRID.lon_edges)
    fine = raster_of(np.full((6, 8), value), np.linspace(10, 13, 7), np.linspace(20, 24, 9), unit)
    np.testing.assert_allclose(area_on_grid(fine, GRID, 64), expected, rtol=1e-13)
    coarse = raster_of(np.full((1, 2), value), np.array([8.0, 15]), np.array([19.0, 22, 27]), unit)
    np.testing.assert_allclose(area_on_grid(coarse, GRID, 64), expected, rtol=1e-13)
    np.testing.assert_allclose(area_on_grid(Number("key", value, unit), GRID, 64), expected)


def test_pixels_outside_the_file_bear_nothing() -> None:
    raster = raster_of(
        np.full((2, 2), 9.0), np.array([11.0, 11.5, 12]), np.array([21.0, 21.5, 22]), "ha"
    )
    found = area_on_grid(raster, GRID, 64)
    assert found.sum() == 36.0
    assert (found > 0).sum() == 4


def test_global_raster_from_0_to_360() -> None:
    """The grid lies over the seam of the file."""
    grid = grid_of(-1, 1, -2, 2, 0.5)
    values = np.arange(8 * 720.0).reshape(8, 720)
    raster = raster_of(values, np.linspace(-2, 2, 9), np.linspace(0, 360, 721), "ha")
    expected = np.concatenate([values[2:6, -4:], values[2:6, :4]], axis=1)
    np.testing.assert_array_equal(area_on_grid(raster, grid, 64), expected)


@settings(max_examples=15, derandomize=True, deadline=None, database=None)
@given(rows=st.integers(1, 9), columns=st.integers(1, 9), seed=st.integers(0, 9999))
def test_area_and_yield_are_those_of_the_plain_path(rows: int, columns: int, seed: int) -> None:
    random = np.random.default_rng(seed)
    lat_edges = np.sort(random.uniform(9, 14, rows + 1)) + 1e-3 * np.arange(rows + 1)
    lon_edges = np.sort(random.uniform(19, 25, columns + 1)) + 1e-3 * np.arange(columns + 1)
    hectares = random.gamma(1.0, 50.0, (rows, columns))
    hectares[random.random(hectares.shape) < 0.3] = random.choice([0.0, np.nan])
    yields = random.gamma(2.0, 2.0, (rows, columns))
    yields[random.random(yields.shape) < 0.2] = random.choice([0.0, np.nan])
    area = raster_of(hectares, lat_edges, lon_edges, "ha")
    mean = raster_of(yields, lat_edges, lon_edges, "kg ha-1")
    other = raster_of(hectares[:1], lat_edges[:2], lon_edges, "ha")
    plain_grid = PlainGrid(
        (lat_edges[:-1] + lat_edges[1:]) / 2, np.stack([lat_edges[:-1], lat_edges[1:]], axis=1),
        (lon_edges[:-1] + lon_edges[1:]) / 2, np.stack([lon_edges[:-1], lon_edges[1:]], axis=1),
    )  # fmt: skip
    areas = area_on_grid(area, GRID, 64)
    by_area = yield_on_grid(mean, GRID, area, 64)
    by_overlap = yield_on_grid(mean, GRID, other if rows > 1 else Number("key", 1.0, "ha"), 64)
    for _ in range(6):
        i, j = random.integers(GRID.shape[0]), random.integers(GRID.shape[1])
        pixel = PlainPixel(*GRID.lat_edges[i : i + 2], *GRID.lon_edges[j : j + 2])
        plain = area_of_pixel(hectares, plain_grid, pixel)
        assert areas[i, j] == pytest.approx(plain, rel=1e-9, abs=1e-6)
        for found, weights in ((by_area, hectares), (by_overlap, None)):
            plain = yield_of_pixel(yields, weights, plain_grid, pixel) / 1000
            assert found[i, j] == pytest.approx(plain, rel=1e-9, nan_ok=True)


def test_plain_cell_area_is_the_published_one() -> None:
    """Facts: the cell of 45-46 N, one degree wide, on a sphere of 6371 km: 8,666.151 km2."""
    assert cell_km2(PlainPixel(45, 46, 7, 8)) == pytest.approx(8666.151, abs=5e-4)


def test_yield_is_weighted_by_the_crop_area_of_its_own_grid() -> None:
    """One pixel over two cells: 10 ha at 2 t/ha and 30 ha at 4 t/ha make 3.5 t/ha."""
    grid = grid_of(10, 10.5, 20, 20.5, 0.5)
    edges = np.array([10.0, 10.5]), np.array([20.0, 20.25, 20.5])
    yields = raster_of(np.array([[2.0, 4.0]]), *edges, "t ha-1")
    area = raster_of(np.array([[10.0, 30.0]]), *edges, "ha")
    assert yield_on_grid(yields, grid, area, 64)[0, 0] == pytest.approx(3.5, rel=1e-14)
    assert yield_on_grid(yields, grid, Number("key", 5.0, "ha"), 64)[0, 0] == 3.0
    uneven = edges[0], np.array([20.0, 20.25, 21.0])  # a third of the 30 ha lies in the pixel
    yields_, area_ = (
        raster_of(np.array([pair]), *uneven, unit)
        for pair, unit in (([2.0, 4.0], "t ha-1"), ([10.0, 30.0], "ha"))
    )
    assert yield_on_grid(yields_, grid, area_, 64)[0, 0] == pytest.approx(3.0, rel=1e-14)
    nothing = raster_of(np.array([[0.0, np.nan]]), *edges, "ha")
    assert math.isnan(yield_on_grid(yields, grid, nothing, 64)[0, 0])


def test_zero_yield_is_no_yield() -> None:
    grid = grid_of(10, 10.5, 20, 21, 0.5)
    edges = np.array([10.0, 10.5]), np.array([20.0, 20.25, 20.5, 21.0])
    yields = raster_of(np.array([[0.0, 4.0, 0.0]]), *edges, "t ha-1")
    found = yield_on_grid(yields, grid, Number("key", 5.0, "ha"), 64)
    np.testing.assert_array_equal(found, [[4.0, np.nan]])
    assert np.isnan(yield_on_grid(Number("key", 0.0, "t ha-1"), grid, yields, 64)).all()


@pytest.mark.parametrize(
    ("unit", "value"),
    [("t ha-1", 3.0), ("t/ha", 3.0), ("kg ha-1", 3000.0), ("g m-2", 300.0), ("Mg ha-1", 3.0)],
)
def test_units_of_yield(unit: str, value: float) -> None:
    raster = raster_of(np.full(GRID.shape, value), GRID.lat_edges, GRID.lon_edges, unit)
    area = Number("key", 1.0, "ha")
    np.testing.assert_allclose(yield_on_grid(raster, GRID, area, 64), 3.0, rtol=1e-14)
    number = Number("key", value, unit)
    np.testing.assert_allclose(yield_on_grid(number, GRID, area, 64), 3.0, rtol=1e-14)


def test_calendar_is_that_of_the_cell_at_the_centre() -> None:
    """Centres 10.25, 10.75; cells of 0.75 degrees from 10: 10-10.75 holds both, at its edge too."""
    grid = grid_of(10, 11.5, 20, 20.5, 0.5)
    raster = raster_of(
        np.array([[120.0], [366.0]]), 10 + 0.75 * np.arange(3), np.array([20.0, 20.5]), "1"
    )
    assert calendar_on_grid(raster, grid, 64)[:, 0].tolist() == [120.0, 120.0, 365.0]


def test_calendar_without_a_date() -> None:
    grid = grid_of(10, 11, 20, 21, 0.5)
    values = np.array([[np.nan, 0.0], [1.0, 60.5]])
    raster = raster_of(values, grid.lat_edges, grid.lon_edges, None)
    found = calendar_on_grid(raster, grid, 64)
    np.testing.assert_array_equal(found, [[np.nan, np.nan], [1.0, 60.5]])
    assert (calendar_on_grid(Number("key", 250.0, None), grid, 64) == 250.0).all()


def test_netcdf_layers(tmp_path: Path) -> None:
    values = np.random.default_rng(3).gamma(1.0, 50.0, GRID.shape).astype("f4")
    fields = {"maize": values, "rice": values + 1}
    path = crop_file(tmp_path / "a.nc", fields, GRID.lat, GRID.lon, "ha")
    raster = open_raster(path, Layer(file=path, variable="rice"))
    assert raster.unit == "ha"
    np.testing.assert_array_equal(area_on_grid(raster, GRID, 64), values + 1)
    turned = crop_file(tmp_path / "b.nc", {"m": values[::-1]}, GRID.lat[::-1], GRID.lon + 360, "ha")
    raster = open_raster(turned, Layer(file=turned, unit="km2"))
    np.testing.assert_array_equal(area_on_grid(raster, GRID, 64), values.astype(float) * 100)
    assert raster.same_grid(open_raster(path, Layer(file=path, variable="maize")))
    moved = crop_file(tmp_path / "c.nc", {"m": values}, GRID.lat, GRID.lon + 0.5, "ha")
    assert not raster.same_grid(open_raster(moved, Layer(file=moved)))


def test_geotiff_layers(tmp_path: Path) -> None:
    """Rows run from north to south in the file; -9 is declared missing."""
    values = np.random.default_rng(4).gamma(1.0, 50.0, GRID.shape).astype("f4")
    values[2, 3] = -9
    path = crop_tiff(tmp_path / "a.tif", values[::-1], 20, 13, 0.5, nodata=-9)
    raster = open_raster(path, Layer(file=path, unit="ha"))
    values[2, 3] = 0
    np.testing.assert_array_equal(area_on_grid(raster, GRID, 64), values.astype(float))
    with rasterio.open(path, "r+") as source:
        source.set_band_unit(1, "km2")
    assert open_raster(path, Layer(file=path)).unit == "km2"


def _fails(path: Path, layer: Layer) -> str:
    with pytest.raises(InputError) as caught:
        area_on_grid(open_raster(path, layer), GRID, 64)
    text = str(caught.value)
    assert "\n" not in text
    return text


def test_messages_of_netcdf_layers(tmp_path: Path) -> None:
    values = np.ones(GRID.shape)
    two = crop_file(tmp_path / "a.nc", {"maize": values, "rice": values}, GRID.lat, GRID.lon, "ha")
    assert _fails(two, Layer(file=two)) == f"{two}: holds maize, rice; name one with `variable`"
    assert _fails(two, Layer(file=two, variable="wheat")) == (
        f"{two}: has no variable wheat; it holds maize, rice"
    )
    none = crop_file(tmp_path / "b.nc", {"maize": values}, GRID.lat, GRID.lon, None)
    assert _fails(none, Layer(file=none)) == (
        f"{none}: has no unit; give `unit` in the assessment: "
        "ha, km2, or 1 or % for a share of the cell"
    )
    assert _fails(none, Layer(file=none, unit="kg")) == (
        f"{none}: unit 'kg' is neither an area (ha, km2) nor a share (1, %)"
    )
    assert _fails(none, Layer(file=none, unit="acres of land")) == (
        f"{none}: unit 'acres of land' is not known; "
        "give ha, km2, or 1 or % for a share of the cell"
    )
    bad = crop_file(tmp_path / "c.nc", {"maize": -values}, GRID.lat, GRID.lon, "ha")
    assert _fails(bad, Layer(file=bad)) == (
        f"{bad}: holds negative or infinite values where an area is expected; "
        "declare the missing value in the file"
    )
    lost = tmp_path / "d.nc"
    assert _fails(lost, Layer(file=lost)) == f"{lost}: no such file"


def test_messages_of_geotiff_layers(tmp_path: Path) -> None:
    values = np.ones(GRID.shape, dtype="f4")
    metres = crop_tiff(tmp_path / "a.tif", values, 5e5, 13e5, 500, crs="EPSG:32633")
    assert _fails(metres, Layer(file=metres, unit="ha")) == (
        f"{metres}: has EPSG:32633; reproject it to geographic latitude and longitude (EPSG:4326)"
    )
    good = crop_tiff(tmp_path / "b.tif", values, 20, 13, 0.5)
    assert _fails(good, Layer(file=good, band=2)) == f"{good}: has 1 bands, not 2"
    high = crop_tiff(tmp_path / "c.tif", values, 20, 91, 0.5)
    assert _fails(high, Layer(file=high)) == f"{high}: rows leave -90 to 90 degrees"
    text = tmp_path / "d.tif"
    text.write_text("no picture", encoding="utf-8")
    assert _fails(text, Layer(file=text)).startswith(f"{text}: not a readable GeoTIFF (")


def test_messages_of_yields_and_calendars() -> None:
    days = raster_of(np.full(GRID.shape, 400.0), GRID.lat_edges, GRID.lon_edges, "1")
    with pytest.raises(InputError) as caught:
        calendar_on_grid(days, GRID, 64)
    assert str(caught.value) == "memory: holds days outside 1 to 366; give days of the year"
    with pytest.raises(InputError) as caught:
        yield_on_grid(Number("file: key", 3.0, "kg"), GRID, days, 64)
    assert str(caught.value) == "file: key: unit 'kg' is not convertible to t ha-1"
    with pytest.raises(InputError, match="negative or infinite values where a yield is expected"):
        yield_on_grid(Number("file: key", -3.0, "t ha-1"), GRID, days, 64)
