"""What a check says of a sound assessment, and of values that cannot be."""

from __future__ import annotations

import geopandas
import netCDF4
import numpy as np
import pytest
import shapely
from stook.assessment.check import check
from stook.assessment.inventory import inspect_series, pair_problems
from stook.assessment.load import load_assessment

TASMIN = "reference/tasmin_day_HOLLIN-OBS_1991-2010.nc"
TASMAX = "reference/tasmax_day_HOLLIN-OBS_1991-2010.nc"
PR = "reference/pr_day_HOLLIN-OBS_1991-2010.nc"


def set_values(path, variable, change):
    with netCDF4.Dataset(path, "a") as dataset:
        dataset[variable][:] = change(dataset[variable][:])
    return path


def test_tables_of_a_sound_assessment(case, capsys, monkeypatch):
    assert case.stook("check", monkeypatch=monkeypatch) == 0
    out = capsys.readouterr().out
    lines = [line.split() for line in out.splitlines()]
    four = ["tasmin,", "tasmax,", "pr,", "hurs"]
    grid = ["4", "x", "6,", "0.5", "x", "0.5", "deg"]
    assert ["observed", *four, "1991-2010", "daily", "standard", *grid, "4"] in lines
    grid = ["4", "x", "4,", "2", "x", "2.5", "deg"]
    row = ["SEDGE-LR_high_r1i1p1f1", *four, "1991-2040", "daily", "360_day", *grid, "12"]
    assert row in lines
    assert lines[-1] == ["no", "problem", "found"]
    assert not (case.folder / "results").exists()


def test_kelvin_called_celsius(case):
    path = set_values(case.own(TASMAX), "tasmax", lambda values: values + 273.15)
    _, (problem,) = inspect_series("observed", "tasmax", [path])
    assert problem.severity == "error"
    assert "-100 to 70 degC is possible; is its unit 'degC' right?" in problem.message


@pytest.mark.parametrize(("lowest", "severity"), [(-0.5, "warning"), (-5.0, "error")])
def test_negative_precipitation(case, lowest, severity):
    path = set_values(case.own(PR), "pr", lambda values: values + lowest)
    _, (problem,) = inspect_series("observed", "pr", [path])
    assert problem.severity == severity


def test_no_value_at_all(case):
    path = set_values(case.own(PR), "pr", lambda values: np.full_like(values, np.nan))
    facts, (problem,) = inspect_series("observed", "pr", [path])
    assert facts is None
    assert problem.message.startswith("pr has no value in any of the 5 steps")


def test_exchanged_extremes_are_an_error(case):
    low, high = (
        inspect_series("observed", name, [case.folder / file])[0]
        for name, file in (("tasmin", TASMIN), ("tasmax", TASMAX))
    )
    assert pair_problems(low, high) == []
    (problem,) = pair_problems(high, low)
    assert problem.severity == "error"
    assert "is above tasmax in 120 of 120 values" in problem.message  # 5 steps of 24 cells


def test_one_tasmin_above_tasmax_is_a_warning(case):
    def raise_one(values):
        values[0, 0, 0] = 60.0
        return values

    path = set_values(case.own(TASMIN), "tasmin", raise_one)
    low, high = (
        inspect_series("observed", name, [file])[0]
        for name, file in (("tasmin", path), ("tasmax", case.folder / TASMAX))
    )
    (problem,) = pair_problems(low, high)
    assert problem.severity == "warning"


def test_every_broken_file_of_a_series_is_named(case):
    paths = [case.own(name) for name in case.names("climate/SEDGE-LR/pr_*.nc")]
    for path in paths[:2]:
        path.write_bytes(b"no NetCDF")
    facts, problems = inspect_series("S", "pr", paths)
    assert facts is None
    assert [problem.where for problem in problems] == [str(path) for path in paths[:2]]


def test_warnings_are_listed_and_kept_for_the_report(case):
    settings = ["simulations.models=[SEDGE-LR]", "grid.lat.last=40.25", "regions.only=[Saltmere]"]
    found = check(load_assessment(case.file, settings))
    assert found.errors == []
    (warning,) = found.warnings
    assert "of region 'Saltmere' lies off the analysis grid" in warning.message


def test_weights_horizons_and_responses_that_do_not_fit(case):
    settings = [
        "simulations.models=[SEDGE-LR]",
        "ensemble.weights={SEDGE-LR: 1.0, OTHER: 2.0}",
        "periods.horizons={late: [2030, 2050]}",
        "crops.maize.systems.rainfed.response=responses/maize_irrigated.yaml",
    ]
    found = check(load_assessment(case.file, settings))
    told = [str(problem) for problem in found.problems]
    assert f"{case.file}: ensemble.weights: OTHER is no model; models are SEDGE-LR" in told
    assert any("cover the whole years 1991 to 2040; periods.horizons.late" in t for t in told)
    assert any(
        "is the response of maize, irrigated; it is used for maize, rainfed" in t for t in told
    )
    assert [p.severity for p in found.problems] == sorted(p.severity for p in found.problems)


def test_region_without_crop_is_a_warning(case):
    settings = ["simulations.models=[SEDGE-LR]"]
    found = check(load_assessment(case.file, settings))
    ((row, column),) = np.argwhere(np.sum([one.hectares for one in found.systems], axis=0) == 0)
    lat, lon = 39.75 + 0.5 * row, -36.25 + 0.5 * column  # as in the assessment file
    path = case.own("districts.gpkg")
    frame = geopandas.read_file(path, layer="districts").to_crs("EPSG:4326")
    frame.loc[0, "name"] = "Bare"
    frame.loc[0, "geometry"] = shapely.box(lon - 0.1, lat - 0.1, lon + 0.1, lat + 0.1)
    path.unlink()
    frame.to_file(path, layer="districts", driver="GPKG")
    found = check(load_assessment(case.file, settings))
    told = [p.message for p in found.warnings if "harvested" in p.message]
    assert told == ["region 'Bare' has no harvested area of any crop"]
    assert found.pixels == 23
