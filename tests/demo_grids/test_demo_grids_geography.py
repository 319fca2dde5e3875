"""Districts and crop layers of the invented world."""

from __future__ import annotations

import numpy as np
import pytest
import rasterio
import xarray as xr

from demo_grids.crop_files import area_layer, hectares, write_crops, write_districts
from demo_grids.domain import domain
from demo_grids.geography import LAYERS, district_shapes, season_days
from demo_grids.true_yields import pixel_area, region_coverage

NAMES = {"Upper Hollin", "Saltmere", "Brackwater", "Thornfold", "Eastmoor", "Lowsend"}


def test_districts_share_borders_without_overlap():
    shapes = district_shapes()
    assert set(shapes) == NAMES
    names = list(shapes)
    for place, name in enumerate(names):
        assert shapes[name].is_valid
        for other in names[place + 1 :]:
            assert shapes[name].intersection(shapes[other]).area < 1e-12, (name, other)


def test_saltmere_has_a_lake_and_lowsend_an_enclave():
    shapes = district_shapes()
    assert len(shapes["Saltmere"].interiors) == 1
    assert len(shapes["Lowsend"].interiors) == 1
    enclave = min(shapes["Brackwater"].geoms, key=lambda part: part.area)
    hole = shapes["Lowsend"].interiors[0]
    assert enclave.exterior.hausdorff_distance(hole) < 1e-12


def test_districts_file_is_projected_and_keeps_its_bytes(tmp_path):
    import geopandas

    world = domain("tiny")
    for name in ("a.gpkg", "b.gpkg"):
        write_districts(tmp_path / name, world)
    assert (tmp_path / "a.gpkg").read_bytes() == (tmp_path / "b.gpkg").read_bytes()
    frame = geopandas.read_file(tmp_path / "a.gpkg", layer="districts")
    assert frame.crs.is_projected
    assert set(frame["name"]) == NAMES
    # the six districts leave a part of the land to nobody
    land = hectares(world.lat, world.lon, world.step).sum() * 1e4
    assert 0.6 < frame.area.sum() / land < 0.85


@pytest.mark.parametrize("size", ["tiny", "demo"])
def test_every_district_grows_something_and_some_land_lies_outside(size):
    world = domain(size)
    coverage = region_coverage(world)
    areas = {layer.name: pixel_area(world, layer) for layer in LAYERS}
    for name, share in coverage.items():
        assert sum((area * share).sum() for area in areas.values()) > 1000, name
    outside = 1 - sum(coverage.values())
    for name, area in areas.items():
        assert 0.02 < (area * outside).sum() / area.sum() < 0.3, name


@pytest.mark.parametrize("size", ["tiny", "demo"])
def test_some_pixels_grow_nothing(size):
    world = domain(size)
    grown = sum(pixel_area(world, layer) for layer in LAYERS) > 0
    assert 0 < (~grown).sum() < 0.2 * grown.size
    if size == "demo":
        assert 70 <= grown.sum() <= 110


def test_the_analysis_grid_holds_every_hectare():
    for world in (domain("tiny"), domain("demo"), domain(pixels=30)):
        for layer in LAYERS:
            lat, lon, share = area_layer(world, layer)
            step = world.step * layer.area_step
            total = (share * hectares(lat, lon, step)).sum()
            # sampled 20 x 20 in a pixel; rice cells of 0.2 degree fall between the samples
            assert pixel_area(world, layer).sum() == pytest.approx(total, rel=2e-3)


def test_cell_area_is_the_published_one():
    # 30 to 30.5 N, half a degree: 2,670.174 km2 on a sphere of 6371 km
    # (R^2 (sin lat2 - sin lat1) dlon, worked out by hand).
    area = hectares(np.array([30.25]), np.array([0.25]), 0.5)[0, 0]
    assert area / 100 == pytest.approx(2670.174, abs=5e-4)


def test_layers_lie_on_different_grids_and_in_different_units(tmp_path):
    world = domain("tiny")
    write_crops(tmp_path, world)
    with rasterio.open(tmp_path / "maize_rainfed_area.tif") as source:
        assert source.crs.to_epsg() == 4326
        assert source.transform.a == pytest.approx(0.125)
        assert source.transform.e == pytest.approx(-0.125)
        hectare = source.read(1)
        assert source.units == ("ha",)
    lat, lon, share = area_layer(world, LAYERS[0])
    expected = (share * hectares(lat, lon, 0.125))[::-1]
    np.testing.assert_allclose(hectare, expected, rtol=1e-6)
    steps = {}
    for name in ("maize_irrigated", "barley_rainfed", "rice_irrigated"):
        with xr.open_dataset(tmp_path / f"{name}_area.nc") as dataset:
            steps[name] = float(dataset["lat"][1] - dataset["lat"][0])
            assert dataset["harvested_share"].attrs["units"] == "1"
            assert 0 <= dataset["harvested_share"].min() < dataset["harvested_share"].max() <= 1
    assert steps == pytest.approx(
        {"maize_irrigated": 0.25, "barley_rainfed": 1.0, "rice_irrigated": 0.2}
    )
    with xr.open_dataset(tmp_path / "yields.nc") as dataset:
        assert dataset["barley_rainfed"].attrs["units"] == "kg ha-1"
        assert 3000 < float(dataset["barley_rainfed"].mean()) < 6000
        assert dataset["rice_irrigated"].attrs["units"] == "t ha-1"
        assert 4 < float(dataset["rice_irrigated"].mean()) < 9


def test_barley_is_sown_in_autumn_and_reaped_in_the_next_year():
    u, v = np.meshgrid(np.linspace(0, 1, 9), np.linspace(0, 1, 9))
    for layer in LAYERS:
        planting, maturity = season_days(layer.name, u, v)
        for days in (planting, maturity):
            assert np.all((days >= 1) & (days <= 365) & (days == np.round(days)))
        assert np.all((maturity < planting) == (layer.crop == "barley"))


def test_rice_phases_follow_one_another():
    rice = next(layer for layer in LAYERS if layer.crop == "rice")
    assert list(rice.phases) == ["vegetative", "reproductive", "ripening"]
    starts, ends = zip(*rice.phases.values(), strict=True)
    assert starts[0] == 0
    assert ends[-1] == 1
    assert starts[1:] == ends[:-1]
