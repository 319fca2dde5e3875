"""The jobs of the correction on invented prepared files: files, tiles, blocks, subsets, errors."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import dask
import numpy as np
import pandas as pd
import pytest
import xarray as xr
from correct_world import (
    BASELINE,
    COMPUTED,
    ELSEWHERE,
    GAP,
    SHORT,
    SIMULATION,
    prepared,
    write_assessment,
    write_results,
)
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.plain import correct as plain
from stook.correct import job
from stook.correct.plan import series_of
from stook.errors import InputError
from stook.grids.analysis import tile_count
from stook.grids.files import CF_TIME
from stook.grids.missing import Reason

FILES = ("corrected", "transfer", "evaluation")


def run(assessment: Assessment) -> Layout:
    for tile in range(tile_count(assessment)):
        job.tile(assessment, simulation=SIMULATION, tile=f"{tile:02d}")
    job.summary(assessment)
    return Layout.of(assessment)


def load(layout: Layout, kind: str, tiles: int = 1) -> xr.Dataset:
    parts = [
        xr.load_dataset(getattr(layout, kind)(SIMULATION, tile), decode_times=CF_TIME)
        for tile in range(tiles)
    ]
    return xr.concat(parts, "lat", data_vars="minimal", join="exact") if tiles > 1 else parts[0]


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> Layout:
    return run(write_results(write_assessment(tmp_path_factory.mktemp("full"))))


def test_corrected_grids_stay_on_their_time_axis(full: Layout) -> None:
    found = load(full, "corrected")
    source = xr.load_dataset(full.prepared(SIMULATION, 0), decode_times=CF_TIME)
    assert list(found["time"].values) == list(source["time"].values)
    assert found["pr"].dtype == np.float32
    assert found.attrs["time_step"] == "daily"
    for name in ("tasmin", "tasmax", "pr"):
        assert found[name].attrs["units"] == source[name].attrs["units"]
    low, high = (found[name].values for name in ("tasmin", "tasmax"))
    assert (low <= high)[~np.isnan(low)].all()


def test_bias_is_gone_in_the_calibration_years(full: Layout) -> None:
    found = load(full, "corrected")
    record = xr.load_dataset(full.prepared("observed", 0), decode_times=CF_TIME)
    inside = [time.year <= BASELINE[1] for time in found["time"].values]
    for name, tolerance in (("tasmin", 0.1), ("tasmax", 0.1), ("pr", 0.1)):
        means = [x[name].isel(lat=8, lon=8).mean() for x in (found.isel(time=inside), record)]
        assert float(means[0] - means[1]) == pytest.approx(0, abs=tolerance)


def test_missing_pixels_carry_their_reason(full: Layout) -> None:
    found = load(full, "corrected")
    expected = np.where(COMPUTED, 0, int(Reason.OUTSIDE_CROP_AREA))
    expected[GAP], expected[SHORT] = int(Reason.MISSING_INPUT), int(Reason.TOO_FEW_VALUES)
    for name in ("tasmin", "tasmax", "pr"):
        reason = found[f"reason_{name}"].values
        np.testing.assert_array_equal(reason, expected)
        np.testing.assert_array_equal(np.isnan(found[name]).all("time"), reason != 0)
        np.testing.assert_array_equal(np.isnan(found[name]).any("time"), reason != 0)
    for kind in ("transfer", "evaluation"):
        values = load(full, kind)
        for name, grids in values.data_vars.items():
            if grids.dtype.kind == "f" and "lat" in grids.dims and "bnds" not in grids.dims:
                assert np.isnan(grids.values[..., GAP[0], GAP[1]]).all(), name


def test_one_pixel_by_the_plain_path(full: Layout) -> None:
    """Precipitation and the temperature pair, from prepared to corrected, by the plain path."""
    found = load(full, "corrected").isel(lat=7, lon=9)
    sources = [
        xr.load_dataset(full.prepared(name, 0), decode_times=CF_TIME).isel(lat=7, lon=9)
        for name in ("observed", SIMULATION)
    ]
    assessment = write_results_again(full)
    choice = assessment.correct.choice("pr")
    times = []
    for source in sources:
        axis = series_of(source["time"], "daily")
        times.append(plain.PlainTimes(axis.year, axis.month, axis.position, axis.day))
    inside = times[1].year <= BASELINE[1]
    lat, lon = float(found["lat"]), float(found["lon"])

    def corrected(o: np.ndarray, f: np.ndarray, ratio: bool, trace: float) -> np.ndarray:
        series = (
            plain.PlainSeries(o, times[0]),
            plain.PlainSeries(f[inside], times[1].part(inside)),
            plain.PlainSeries(f, times[1]),
        )
        return plain.correct_series(*series, choice, ratio, trace)

    o, f = (
        plain.fill_dry(x["pr"].values, t.day, lat, lon, 11, name, 0.05)
        for x, t, name in zip(sources, times, ("observed", SIMULATION), strict=True)
    )
    rain = corrected(o, f, True, 0.05)
    np.testing.assert_allclose(found["pr"], np.where(rain < 0.05, 0, rain), atol=1e-5, rtol=1e-5)
    pairs = [plain.mean_and_range(x["tasmin"].values, x["tasmax"].values) for x in sources]
    mean = corrected(pairs[0][0], pairs[1][0], False, 0)
    gap = corrected(pairs[0][1], pairs[1][1], True, 0)
    np.testing.assert_allclose(found["tasmin"], mean - gap / 2, atol=1e-5)
    np.testing.assert_allclose(found["tasmax"], mean + gap / 2, atol=1e-5)


def write_results_again(layout: Layout) -> Assessment:
    from stook.assessment.load import load_assessment

    return load_assessment(layout.root.parents[1] / "assessment.yaml")


def test_transfer_functions_are_calibration_quantiles(full: Layout) -> None:
    found = load(full, "transfer").isel(lat=7, lon=9)
    record = xr.load_dataset(full.prepared("observed", 0), decode_times=CF_TIME)
    record = record.isel(lat=7, lon=9)
    day = float(found["day_of_year_mean_temperature"][3])
    position = series_of(record["time"], "daily").position * 365
    inside = np.abs(position - day) < 15.5
    mean = ((record["tasmin"] + record["tasmax"]) / 2).values[inside]
    expected = np.quantile(mean, found["probability"], method="hazen")
    values = found["reference_mean_temperature"].isel(day_of_year_mean_temperature=3)
    np.testing.assert_allclose(values, expected, atol=1e-4)


def test_evaluation_out_of_sample(full: Layout) -> None:
    """Halves of five years: 0.8 degC is four standard errors of the four sample means."""
    found = load(full, "evaluation").isel(lat=8, lon=8).sel(season="all")
    assert list(found["sample"].values[:2]) == ["first half", "second half"]
    for name in ("tasmin", "tasmax"):
        bias = found[f"mean_bias_{name}"]
        assert (abs(bias.sel(stage="raw")) > 1).all()
        assert (abs(bias.sel(stage="corrected")) < 0.8).all()
        change = found[f"mean_change_{name}"]
        altered = change.sel(stage="corrected", horizon="late") - change.sel(
            stage="raw", horizon="late"
        )
        assert abs(float(altered)) < 0.1
    wet = found["wet_day_bias_pr"]
    assert (abs(wet.sel(stage="raw")) > 10).all()
    assert (abs(wet.sel(stage="corrected")) < 4).all()
    assert (found["cdf_distance_pr"].sel(stage="corrected") < 0.1).all()


def test_summary_table(full: Layout) -> None:
    table = pd.read_parquet(full.evaluation_table)
    expected = [
        "simulation",
        "variable",
        "season",
        "stage",
        "statistic",
        "unit",
        "mean",
        "p05",
        "p95",
    ]
    assert list(table.columns) == expected
    assert set(table["variable"]) == {"tasmin", "tasmax", "pr"}
    assert set(table["season"]) == {"all", "DJF", "MAM", "JJA", "SON"}
    assert set(table["stage"]) == {"raw", "corrected"}
    assert list(table["statistic"].unique()[:4]) == [
        "mean_bias",
        "p05_bias",
        "p95_bias",
        "cdf_distance",
    ]
    assert (table["p05"] <= table["p95"]).all()
    assert not table.isna().any().any()


@pytest.mark.parametrize(("tiles", "block_mb", "threads"), [(3, 64, 1), (1, 1, 2)])
def test_tiles_blocks_and_threads_change_nothing(
    full: Layout, tmp_path: Path, tiles: int, block_mb: int, threads: int
) -> None:
    with dask.config.set(scheduler="threads", num_workers=threads):
        layout = run(write_results(write_assessment(tmp_path, tiles, block_mb)))
    for kind in FILES:
        one, other = load(full, kind), load(layout, kind, tiles)
        for name in one.data_vars:
            np.testing.assert_array_equal(one[name].values, other[name].values, err_msg=name)
    pd.testing.assert_frame_equal(
        pd.read_parquet(full.evaluation_table), pd.read_parquet(layout.evaluation_table)
    )


def test_a_region_alone_gives_the_same_pixels(full: Layout, tmp_path: Path) -> None:
    layout = run(write_results(write_assessment(tmp_path), region="Saltmere"))
    for kind in FILES:
        whole, part = load(full, kind), load(layout, kind)
        for name in part.data_vars:
            if name == "lon_bnds" or "lat" not in part[name].dims:
                continue
            expected = whole[name].sel(lat=part["lat"], lon=part["lon"]).copy()
            values = part[name].copy()
            values[..., *ELSEWHERE] = expected[..., *ELSEWHERE]
            np.testing.assert_array_equal(values, expected, err_msg=name)
    reason = load(layout, "corrected")["reason_pr"]
    assert reason[ELSEWHERE] == int(Reason.OUTSIDE_REQUESTED_REGION)


def test_ledger_knows_all_three_files(full: Layout) -> None:
    for kind in FILES:
        path = getattr(full, kind)(SIMULATION, 0)
        record = json.loads(
            (full.ledger / f"{path.relative_to(full.root)}.json").read_text(encoding="utf-8")
        )
        assert record["rule"] == "correct_tile"
        assert set(record["parents"]) == {
            "prepare/layers.nc",
            f"prepare/{SIMULATION}/tile-00.nc",
            "prepare/observed/tile-00.nc",
        }
        assert record["variables"]


def test_files_follow_cf(full: Layout) -> None:
    files = [str(getattr(full, kind)(SIMULATION, 0)) for kind in FILES]
    program = str(Path(sys.executable).with_name("compliance-checker"))
    command = [program, "--test", "cf:1.11", "--criteria", "strict", *files]
    done = subprocess.run(command, capture_output=True, text=True)
    assert done.stdout.count("All tests passed!") == len(files), done.stdout


def test_without_a_reference_nothing_is_corrected(tmp_path: Path) -> None:
    path = write_assessment(tmp_path, correct={"all": {"method": "none"}}, reference=None)
    assessment = write_results(path, reference=False)
    job.tile(assessment, simulation=SIMULATION, tile="00")
    layout = Layout.of(assessment)
    found = load(layout, "corrected")
    source = xr.load_dataset(layout.prepared(SIMULATION, 0), decode_times=CF_TIME)
    np.testing.assert_array_equal(found["pr"], source["pr"])
    assert found["reason_pr"].values[GAP] == int(Reason.MISSING_INPUT)
    assert not load(layout, "transfer").data_vars.keys() - {"lat_bnds", "lon_bnds"}


def test_one_variable_may_stay_as_it_is(tmp_path: Path) -> None:
    choices = {"all": {"minimum_values": 50}, "variables": {"pr": {"method": "none"}}}
    assessment = write_results(write_assessment(tmp_path, correct=choices))
    layout = run(assessment)
    found = load(layout, "corrected")
    source = xr.load_dataset(layout.prepared(SIMULATION, 0), decode_times=CF_TIME)
    np.testing.assert_array_equal(found["pr"].values[:, 8, 8], source["pr"].values[:, 8, 8])
    assert (found["tasmax"].values[:, 8, 8] != source["tasmax"].values[:, 8, 8]).any()


def test_monthly_series(tmp_path: Path) -> None:
    choices = {"all": {"minimum_values": 10}}
    path = write_assessment(tmp_path, correct=choices, periods={"baseline": list(BASELINE)})
    layout = run(write_results(path, step="monthly"))
    found = load(layout, "corrected")
    assert found.attrs["time_step"] == "monthly"
    assert int(found["reason_tasmax"][8, 8]) == 0
    assert load(layout, "transfer").sizes["day_of_year_pr"] == 12


def test_reference_without_a_variable_is_refused(tmp_path: Path) -> None:
    assessment = write_results(write_assessment(tmp_path))
    layout = Layout.of(assessment)
    source = layout.prepared("observed", 0)
    short = xr.load_dataset(source, decode_times=CF_TIME).drop_vars("pr")
    source.unlink()
    short.to_netcdf(source)
    with pytest.raises(InputError, match=r"the reference has no pr; give reference\.files\.pr"):
        job.tile(assessment, simulation=SIMULATION, tile="00")
    assert not layout.corrected(SIMULATION, 0).exists()


def test_years_in_common_are_needed(tmp_path: Path) -> None:
    changes = {"correct": {"calibration": [2001, 2020]}}
    assessment = write_results(write_assessment(tmp_path, **changes))
    with pytest.raises(InputError, match="share fewer than two of the calibration years"):
        job.tile(assessment, simulation=SIMULATION, tile="00")


def test_time_steps_must_agree(tmp_path: Path) -> None:
    assessment = write_results(write_assessment(tmp_path))
    layout = Layout.of(assessment)
    source = layout.prepared("observed", 0)
    monthly = prepared("observed", BASELINE, "standard", 0.0, "monthly")
    source.unlink()
    monthly.to_netcdf(source)
    with pytest.raises(InputError, match="both must have the same time step"):
        job.tile(assessment, simulation=SIMULATION, tile="00")
