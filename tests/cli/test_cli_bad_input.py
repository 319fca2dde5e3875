"""Bad input: one clear line that names the file and the remedy, exit status 1, nothing written."""

from __future__ import annotations

import os
import subprocess
import sys

import geopandas
import numpy as np
import pytest
import shapely
import xarray as xr

PR = "reference/pr_day_HOLLIN-OBS_1991-2010.nc"
TASMAX = "reference/tasmax_day_HOLLIN-OBS_1991-2010.nc"
CALENDARS = "crops/calendars.nc"
RESPONSE = "responses/maize_rainfed.yaml"
SIMULATION = "SEDGE-LR_high_r1i1p1f1"


def missing_file(case):
    path = case.folder / "reference/nowhere.nc"
    return ["--set", f"reference.files.pr=[{path}]"], f"{path}: no such file (for pr)"


def missing_layer(case):
    path = case.folder / "nowhere.tif"
    return (
        ["--set", f"crops.maize.systems.rainfed.area={path}"],
        f"{path}: no such file",
    )


def wrong_unit(case):
    path = case.attribute(PR, "pr", "units", "kg")
    return [], f"{path}: pr has unit 'kg', not convertible to mm day-1"


def unknown_calendar(case):
    path = case.attribute(PR, "time", "calendar", "lunar")
    return [], (
        f"{path}: calendar 'lunar' is not known; valid: standard, gregorian, "
        "proleptic_gregorian, julian, noleap, no_leap, 365_day, all_leap, 366_day, 360_day"
    )


def gap_in_time(case):
    keep = np.r_[0:400, 431:7305]  # the record begins on 1 January 1991
    path = case.rewritten(TASMAX, lambda dataset: dataset.isel(time=keep))
    return [], (f"{path}: gap between 1992-02-04 and 1992-03-07; a daily series needs every step")


def reference_too_short(case):
    for name in ("tasmin", "tasmax", "pr", "hurs"):
        file = f"reference/{name}_day_HOLLIN-OBS_1991-2010.nc"
        case.rewritten(file, lambda dataset: dataset.isel(time=slice(1461, None)))
    path = case.folder / "reference/tasmin_day_HOLLIN-OBS_1991-2010.nc"
    return [], (
        f"{path}: tasmin, tasmax, pr and hurs of observed cover the whole years 1995 to 2010; "
        "periods.baseline needs 1991 to 2010"
    )


def region_off_the_grid(case):
    return ["--set", "grid.lon.last=-35.25", "--region", "Lowsend"], (
        f"{case.own('districts.gpkg')}: region 'Lowsend' lies off the analysis grid; "
        "extend grid, or leave it out with regions.only"
    )


def climate_off_the_grid(case):
    paths = [case.own(name) for name in case.names("climate/SEDGE-LR/pr_day_*_h*.nc")]
    for path in paths:
        case.rewritten(path, lambda dataset: dataset.isel(latitude=slice(0, 2)))
    return [], (
        f"{paths[1]}: pr of {SIMULATION} covers latitude 40 to 44 and longitude -40 to -30; "
        "6 of 23 pixels with crops lie outside; give larger files, or a smaller grid"
    )


def unknown_key(case):
    case.text("assessment.yaml", "  baseline:", "  baselin:")
    return [], [
        f"{case.file}: periods.baseline: is required",
        f"{case.file}: periods.baselin: unknown key; valid here: baseline, horizons, span",
    ]


def unavailable_index(case):
    path = case.text(
        RESPONSE,
        "heat: {measure: degree-days, base: 30.0}",
        "heat: {measure: mean, variable: rsds}",
    )
    return [], f"{path}: index heat needs rsds; observed and {SIMULATION} have none"


def corrupt_netcdf(case):
    path = case.own(PR)
    os.truncate(path, path.stat().st_size // 2)
    return [], f"{path}: not a readable NetCDF file (NetCDF: HDF error)"


def empty_polygon(case):
    path = case.own("districts.gpkg")
    frame = geopandas.read_file(path, layer="districts")
    frame.loc[frame["name"] == "Saltmere", "geometry"] = shapely.MultiPolygon()
    frame.to_file(path, layer="districts", driver="GPKG")
    return [], f"{path}: region 'Saltmere' has no polygon; give it one, or remove it"


def area_without_calendar(case):
    def without(dataset):
        dataset["barley_rainfed_planting"][:2] = np.nan
        return dataset

    path = case.rewritten(CALENDARS, lambda dataset: without(dataset.load()))
    # The two southern rows of pixels are the southern row of the area's 1-degree cells.
    with xr.open_dataset(case.folder / "crops/barley_rainfed_area.nc") as areas:
        cells = [
            float(row.sum()) * 6371.0**2 * 100 * np.deg2rad(1) * np.diff(np.sin(np.deg2rad(edges)))
            for row, edges in zip(
                areas["harvested_share"], ([39.5, 40.5], [40.5, 41.5]), strict=True
            )
        ]
    return [], (
        f"{path}: barley, rainfed has crop area without calendar in 12 of 20 pixels, "
        f"{cells[0][0]:,.0f} of {sum(cells)[0]:,.0f} ha; fill the calendar there, "
        "or remove the area"
    )


def results_not_writable(case):
    path = case.own("districts.gpkg")
    return ["--set", f"results={path.name}"], (
        f"{path}/hollin-tiny: {path} is no folder; give another with --set results=FOLDER"
    )


CASES = [
    missing_file,
    missing_layer,
    wrong_unit,
    unknown_calendar,
    gap_in_time,
    reference_too_short,
    region_off_the_grid,
    climate_off_the_grid,
    unknown_key,
    unavailable_index,
    corrupt_netcdf,
    empty_polygon,
    area_without_calendar,
    results_not_writable,
]


@pytest.mark.parametrize("alter", CASES, ids=lambda alter: alter.__name__)
def test_run_refuses_with_one_line_and_writes_nothing(case, alter, capsys, monkeypatch):
    arguments, expected = alter(case)
    before = case.listing()
    assert case.stook("run", *arguments, monkeypatch=monkeypatch) == 1
    out, err = capsys.readouterr()
    lines = [expected] if isinstance(expected, str) else expected
    assert sorted(err.splitlines()) == sorted(f"error: {line}" for line in lines)
    assert out == ""
    assert case.listing() == before


def test_check_reports_all_faults_at_once(case, capsys, monkeypatch):
    faults = [wrong_unit, gap_in_time, unavailable_index, empty_polygon, area_without_calendar]
    expected = [alter(case)[1] for alter in faults]
    before = case.listing()
    assert case.stook("check", monkeypatch=monkeypatch) == 1
    out = capsys.readouterr().out.splitlines()
    found = [line.removeprefix("error: ") for line in out if line.startswith("error: ")]
    assert sorted(found) == sorted(expected)
    assert out[-1] == "5 errors"
    assert case.listing() == before


def test_command_itself_ends_with_status_1_and_no_traceback(case):
    path = case.own(PR)
    os.truncate(path, 100)
    command = [sys.executable, "-m", "stook.cli", "check", str(case.file)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert f"error: {path}: not a readable NetCDF file" in done.stdout
    assert "Traceback" not in done.stdout + done.stderr
