"""The season job: files in and out, tiles, blocks, a region alone."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from compliance_checker.runner import CheckSuite, ComplianceChecker
from season_files import CALENDARS, write_assessment, write_prepared
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.ledger import read_record
from stook.errors import InputError
from stook.grids.analysis import tile_count
from stook.grids.files import open_result
from stook.season.job import tile

NAMES = ("growth", "rain", "hot_days", "dry_air")


def run(assessment: Assessment) -> dict[str, xr.Dataset]:
    """Run every tile of every simulation; return the joined results."""
    layout = Layout.of(assessment)
    results = {}
    for simulation in CALENDARS:
        parts = []
        for number in range(tile_count(assessment)):
            tile(assessment, simulation, "barley", "rainfed", str(number))
            with open_result(layout.season(simulation, "barley", "rainfed", number)) as dataset:
                parts.append(dataset.load())
        results[simulation] = xr.concat(parts, "lat", data_vars="minimal", join="exact")
    return results


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> tuple[Assessment, dict[str, xr.Dataset]]:
    folder = tmp_path_factory.mktemp("whole")
    assessment = write_prepared(write_assessment(folder))
    return assessment, run(assessment)


def test_file(whole: tuple[Assessment, dict[str, xr.Dataset]]) -> None:
    assessment, results = whole
    for result in results.values():
        assert [name for name in result.data_vars if name != "reason"] == list(NAMES)
        np.testing.assert_array_equal(result["year"], [2001, 2002, 2003, 2004])
        grown = result["reason"].values == 0
        assert 30 < grown.sum() < 48
        for name in NAMES:
            assert np.isnan(result[name].values[0]).all()
            assert np.isfinite(result[name].values[1:, grown]).all()
            assert np.isnan(result[name].values[:, ~grown]).all()
    layout = Layout.of(assessment)
    path = layout.season("observed", "barley", "rainfed", 0)
    record = read_record(layout.root, path)
    assert record["rule"] == "season_tile"
    assert set(record["parents"]) == {"prepare/layers.nc", "prepare/observed/tile-00.nc"}
    assert record["wildcards"]["tile"] == "0"


def test_cf_compliance(whole: tuple[Assessment, dict[str, xr.Dataset]], tmp_path: Path) -> None:
    """compliance-checker, CF 1.11."""
    path = Layout.of(whole[0]).season("observed", "barley", "rainfed", 0)
    CheckSuite.load_all_available_checkers()
    passed, errors = ComplianceChecker.run_checker(
        str(path), ["cf:1.11"], 0, "strict", output_filename=str(tmp_path / "report.txt")
    )
    assert passed, (tmp_path / "report.txt").read_text(encoding="utf-8")
    assert not errors


@pytest.mark.parametrize(("tiles", "block_mb"), [(3, 64), (2, 1)])
def test_tiles_and_blocks_give_the_same_bits(
    whole: tuple[Assessment, dict[str, xr.Dataset]], tmp_path: Path, tiles: int, block_mb: int
) -> None:
    assessment = write_prepared(write_assessment(tmp_path, tiles, block_mb))
    for simulation, result in run(assessment).items():
        for name in (*NAMES, "reason", "lat", "lon", "lat_bnds"):
            np.testing.assert_array_equal(result[name], whole[1][simulation][name], strict=True)


def test_a_region_alone_gives_the_same_bits(
    whole: tuple[Assessment, dict[str, xr.Dataset]], tmp_path: Path
) -> None:
    assessment = write_prepared(write_assessment(tmp_path, tiles=3), region="Saltmere")
    for simulation, result in run(assessment).items():
        expected = whole[1][simulation].isel(lon=slice(0, 5))
        for name in (*NAMES, "reason", "lon", "lon_bnds"):
            np.testing.assert_array_equal(result[name], expected[name], strict=True)


def test_a_missing_variable_is_one_line_and_leaves_nothing(tmp_path: Path) -> None:
    assessment = write_prepared(write_assessment(tmp_path))
    layout = Layout.of(assessment)
    source = layout.climate("observed", 0)
    with open_result(source) as dataset:
        poor = dataset.drop_vars("hurs").load()
    poor.drop_encoding().to_netcdf(source, engine="netcdf4")
    with pytest.raises(InputError, match=r"tile-00.nc: index dry_air") as caught:
        tile(assessment, "observed", "barley", "rainfed", "0")
    assert "\n" not in str(caught.value)
    folder = layout.season("observed", "barley", "rainfed", 0).parent
    assert not folder.exists() or not list(folder.iterdir())
