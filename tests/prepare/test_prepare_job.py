"""The jobs of the stage: files in and out, parts of a grid, reasons, messages."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from prepare_inputs import (
    LAT,
    LON,
    assessment_of,
    climate_file,
    crop_file,
    grid_of,
    write_overlay,
)
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.ledger import read_record
from stook.audit.plain.prepare import PlainPixel, cell_km2
from stook.errors import InputError
from stook.grids.analysis import AnalysisGrid, analysis_grid
from stook.grids.files import open_result
from stook.grids.missing import Reason
from stook.job import run_job
from stook.prepare import job

NAME = "OAK_low_r1"
SHAPE = (6, 8)


def write_climate(folder: Path, days: int = 730) -> None:
    random = np.random.default_rng(1)
    for variable, low in (("tas", 270.0), ("pr", 0.0)):
        values = (low + random.gamma(1.0, 5e-5 if variable == "pr" else 20, (days, 5, 6))).astype(
            "f4"
        )
        for year, part in ((2001, values[:365]), (2002, values[365:])):
            path = folder / "climate" / f"{variable}_OAK_low_r1_{year}.nc"
            climate_file(path, variable, part, LAT, LON, f"{year}-01-01")


def whole(folder: Path, **content: object) -> Assessment:
    """Return an assessment with climate and an overlay of two regions, west and centre."""
    write_climate(folder)
    assessment = assessment_of(folder, dict(content))
    grid = analysis_grid(assessment)
    write_overlay(assessment, grid, two_regions(grid))
    return assessment


def two_regions(grid: AnalysisGrid) -> dict[str, np.ndarray]:
    lon = np.broadcast_to(grid.lon, grid.shape)
    return {"west": (lon < 21).astype(float), "centre": np.where(abs(lon - 22) < 0.8, 0.6, 0.0)}


def result(path: Path) -> xr.Dataset:
    with open_result(path) as dataset:
        return dataset.load()


def test_layers(tmp_path: Path) -> None:
    area = np.full(SHAPE, 40.0)
    area[0] = 0
    planting = np.full(SHAPE, 110.0)
    planting[1] = np.nan
    yields = np.full(SHAPE, 3000.0)
    yields[2] = 0
    grid = grid_of(10, 13, 20, 24, 0.5)
    fields = {"area": area, "planting": planting}
    crop_file(tmp_path / "crops.nc", fields, grid.lat, grid.lon, "km2")
    crop_file(tmp_path / "yields.nc", {"y": yields}, grid.lat, grid.lon, "kg ha-1")
    system = {
        "area": {"file": "crops.nc", "variable": "area"},
        "calendar": {"planting": {"file": "crops.nc", "variable": "planting"}, "maturity": 250},
        "baseline_yield": {"file": "yields.nc"},
    }
    assessment = whole(tmp_path, system=system)
    job.layers(assessment)
    layers = result(Layout.of(assessment).layers)
    assert layers["crop_system"].values.tolist() == ["grain_rainfed"]
    assert layers["region"].values.tolist() == ["west", "centre"]
    np.testing.assert_array_equal(layers["area"].values[0], area * 100)
    np.testing.assert_array_equal(layers["planting"].values[0], planting)
    assert (layers["maturity"].values == 250).all()
    np.testing.assert_array_equal(layers["computed"].values, area > 0)
    reasons = layers["reason"].values[0]
    assert [set(row) for row in reasons] == [
        {Reason.OUTSIDE_CROP_AREA},
        {Reason.NO_CALENDAR},
        {Reason.NO_BASELINE_YIELD},
        *[{Reason.VALID}] * 3,
    ]
    assert layers["baseline_yield"].values[0, 3].tolist() == [3.0] * 8
    assert layers["main_region"].values[0].tolist() == [0, 0, 1, 1, 1, 1, -1, -1]
    plain = cell_km2(PlainPixel(10, 10.5, 20, 20.5))
    np.testing.assert_allclose(layers["cell_area"].values[0], plain, rtol=1e-12)
    record = read_record(Layout.of(assessment).root, Layout.of(assessment).layers)
    assert record["rule"] == "prepare_layers"
    assert record["variables"]["area"]["mean"] == pytest.approx(4000 * 5 / 6)


def test_region_subset_has_the_bits_of_the_full_run(tmp_path: Path) -> None:
    """Pixels that touch the region, in a cropped grid, from a raster that fits neither."""
    random = np.random.default_rng(2)
    lat, lon = 9.31 + 0.37 * np.arange(13), 19.2 + 0.41 * np.arange(15)
    fields = {"area": random.gamma(1.0, 99, (13, 15)), "y": random.gamma(2.0, 1.0, (13, 15))}
    crop_file(tmp_path / "area.nc", {"a": fields["area"]}, lat, lon, "ha")
    crop_file(tmp_path / "yields.nc", {"y": fields["y"]}, lat, lon, "t ha-1")
    system = {"area": {"file": "area.nc"}, "baseline_yield": {"file": "yields.nc"}}
    full = whole(tmp_path, system=dict(system))
    grid = analysis_grid(full)
    subset = assessment_of(tmp_path, {"system": dict(system)}, regions=("centre",))
    rows, columns = slice(1, 5), slice(2, 7)
    here = grid.part(rows, columns)
    touched = np.zeros(here.shape)
    touched[1:3, 1:3] = 0.6
    write_overlay(subset, here, {"centre": touched})
    for assessment in (full, subset):
        job.layers(assessment)
        job.tile(assessment, NAME, "0")
    ours, all_ = (result(Layout.of(one).layers) for one in (subset, full))
    assert ours["computed"].values.sum() == 4
    for name in ("area", "planting", "maturity", "baseline_yield"):
        np.testing.assert_array_equal(ours[name], all_[name][:, rows, columns])
    outside = ours["reason"].values[0][touched == 0]
    assert set(outside) == {Reason.OUTSIDE_REQUESTED_REGION}
    ours, all_ = (result(Layout.of(one).prepared(NAME, 0)) for one in (subset, full))
    assert ours["tas"].shape == (730, 4, 5)
    for name in ("tas", "pr"):
        part = all_[name].values[:, rows, columns]
        assert np.isfinite(part).all()
        np.testing.assert_array_equal(ours[name].values[:, touched > 0], part[:, touched > 0])
        assert np.isnan(ours[name].values[:, touched == 0]).all()


def test_tiles_have_the_bits_of_the_whole(tmp_path: Path) -> None:
    assessment = whole(tmp_path)
    job.layers(assessment)
    job.tile(assessment, NAME, "0")
    expected = result(Layout.of(assessment).prepared(NAME, 0))
    (tmp_path / "tiled").mkdir()
    grid = {
        "lat": {"first": 10.25, "last": 12.75, "step": 0.5},
        "lon": {"first": 20.25, "last": 23.75, "step": 0.5},
        "tiles": 4,
    }
    tiled = whole(tmp_path / "tiled", grid=grid)
    job.layers(tiled)
    for tile in range(4):
        job.tile(tiled, NAME, str(tile))
    parts = [result(Layout.of(tiled).prepared(NAME, tile)) for tile in range(4)]
    assert [part.sizes["lat"] for part in parts] == [2, 2, 1, 1]
    for name in ("tas", "pr"):
        joined = np.concatenate([part[name].values for part in parts], axis=1)
        np.testing.assert_array_equal(joined, expected[name].values)


def test_prepared_file(tmp_path: Path) -> None:
    assessment = whole(tmp_path, periods={"baseline": [2002, 2002], "span": [2002, 2002]})
    job.layers(assessment)
    job.tile(assessment, NAME, "0")
    layout = Layout.of(assessment)
    prepared = result(layout.prepared(NAME, 0))
    assert prepared.attrs["time_step"] == "daily"
    assert list(prepared.data_vars) == ["tas", "pr"]
    assert prepared["tas"].dims == ("time", "lat", "lon")
    assert {str(prepared[name].dtype) for name in ("tas", "pr")} == {"float32"}
    assert prepared["tas"].attrs["units"] == "degC"
    assert prepared["pr"].attrs["units"] == "mm day-1"
    assert [str(prepared["time"].values[i]) for i in (0, -1)] == [
        "2002-01-01 12:00:00",
        "2002-12-31 12:00:00",
    ]
    assert prepared["tas"].encoding["chunksizes"] == (365, 6, 8)
    record = read_record(layout.root, layout.prepared(NAME, 0))
    assert [Path(parent).name for parent in record["parents"]] == [
        "layers.nc",
        *(f"{v}_OAK_low_r1_{year}.nc" for v in ("tas", "pr") for year in (2001, 2002)),
    ]
    assert record["variables"]["pr"]["missing"] == 0


def test_threads_do_not_change_a_bit(tmp_path: Path) -> None:
    assessment = whole(tmp_path, store={"block_mb": 1})
    job.layers(assessment)
    layout = Layout.of(assessment)
    found = []
    for threads in (1, 3):
        run_job("prepare", "tile", str(layout.root), {"simulation": NAME, "tile": "0"}, threads)
        found.append(result(layout.prepared(NAME, 0)).drop_attrs(deep=False))
    xr.testing.assert_identical(*found)


def test_compliance(tmp_path: Path) -> None:
    """CF 1.11, by the compliance checker."""
    from compliance_checker.runner import CheckSuite, ComplianceChecker

    assessment = whole(tmp_path)
    job.layers(assessment)
    job.tile(assessment, NAME, "0")
    CheckSuite.load_all_available_checkers()
    layout = Layout.of(assessment)
    for path in (layout.layers, layout.prepared(NAME, 0)):
        output = tmp_path / "out.json"
        passed, _ = ComplianceChecker.run_checker(
            ds_loc=str(path), checker_names=["cf:1.11"], verbose=0, criteria="strict",
            output_filename=str(output), output_format="json",
        )  # fmt: skip
        assert passed, output.read_text(encoding="utf-8")


def test_a_failing_job_leaves_nothing(tmp_path: Path) -> None:
    assessment = whole(tmp_path)
    job.layers(assessment)
    bad = tmp_path / "climate" / "pr_OAK_low_r1_2002.nc"
    climate_file(bad, "pr", np.zeros((4, 5, 6), "f4"), LAT, LON, "2002-01-02")
    with pytest.raises(InputError) as caught:
        job.tile(assessment, NAME, "0")
    assert str(caught.value) == (
        f"{bad}, after pr_OAK_low_r1_2001.nc: gap between 2001-12-31 and 2002-01-02; "
        "a daily series needs every step"
    )
    folder = Layout.of(assessment).prepared(NAME, 0).parent
    assert not list(folder.glob("*")) if folder.exists() else True


def test_simulation_without_a_needed_variable(tmp_path: Path) -> None:
    assessment = whole(tmp_path)
    job.layers(assessment)
    for path in (tmp_path / "climate").glob("*.nc"):
        variable, rest = path.name.split("_", 1)
        path.rename(path.with_name(f"{'hurs' if variable == 'pr' else 'rsds'}_{rest}"))
    with pytest.raises(InputError) as caught:
        job.tile(assessment, NAME, "0")
    assert str(caught.value) == (
        f"{assessment.source}: {NAME} has none of the variables that the responses need"
    )
