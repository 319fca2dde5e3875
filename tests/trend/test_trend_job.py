"""The trend jobs on invented results: maps, tables, region subsets, tiles, periods, bad input."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.errors import StookError
from stook.grids.missing import Reason
from stook.trend import job
from stook.trend.field import EVERYWHERE
from trend_inputs import REGIONS, SIMULATION, write_assessment, write_results

YEARS = range(1961, 2021)
TREND = {"randomisations": 199, "periods": {"early": [1961, 1990], "late": [1991, 2020]}}


def run(assessment: Assessment) -> Layout:
    job.pixels(assessment, simulation=SIMULATION, crop="maize", system="rainfed")
    job.regions(assessment, simulation=SIMULATION)
    return Layout.of(assessment)


def maps(layout: Layout) -> xr.Dataset:
    return xr.load_dataset(layout.trend_pixels(SIMULATION, "maize", "rainfed"))


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> Layout:
    path = write_assessment(tmp_path_factory.mktemp("full"), tiles=1, trend=dict(TREND))
    return run(write_results(path, YEARS))


def test_maps_by_least_squares(full: Layout) -> None:
    found = maps(full)
    assert list(found["period"].values) == ["early", "late"]
    np.testing.assert_array_equal(found["first_year"], [1961, 1991])
    season = xr.load_dataset(full.season(SIMULATION, "maize", "rainfed", 0))
    for period, (first, last) in (("early", (1962, 1990)), ("late", (1991, 2020))):
        heat = season["heat"].sel(year=slice(first, last))
        for row, column in ((1, 1), (5, 7)):
            series = heat.values[:, row, column]
            slope = 10 * np.polyfit(heat["year"].values - 1990.0, series, 1)[0]
            pixel = found.sel(period=period).isel(lat=row, lon=column)
            assert float(pixel["slope_heat"]) == pytest.approx(slope, rel=1e-9)
            assert int(pixel["years_heat"]) == last - first + 1


def test_units_are_per_decade(full: Layout) -> None:
    from cf_units import Unit

    found = maps(full)
    assert Unit(found["slope_yield"].attrs["units"]) == Unit("0.1 t ha-1 year-1")
    assert Unit(found["slope_heat"].attrs["units"]) == Unit("0.1 K day year-1")
    assert found["significant_heat"].attrs["false_discovery_rate"] == 0.1
    assert found["p_ar1_heat"].attrs["randomisations"] == 199


def test_missing_values_carry_their_reason(full: Layout) -> None:
    found = maps(full)
    for quantity in ("heat", "rain", "yield"):
        reason = found[f"reason_{quantity}"]
        missing = np.isnan(found[f"slope_{quantity}"])
        np.testing.assert_array_equal(missing, reason != 0)
        np.testing.assert_array_equal(missing, found[f"significant_{quantity}"] == -1)
        np.testing.assert_array_equal(missing, found[f"years_{quantity}"] == 0)
        assert (reason[:, 0, 0] == int(Reason.OUTSIDE_CROP_AREA)).all()


def test_no_rain_at_all_is_no_trend(full: Layout) -> None:
    pixel = maps(full).isel(lat=2, lon=2, period=0)
    assert float(pixel["slope_rain"]) == 0.0
    assert float(pixel["p_ar1_rain"]) == 1.0
    assert np.isnan(pixel["lag1_rain"])
    assert int(pixel["significant_rain"]) == 0


def test_tables(full: Layout) -> None:
    distribution = pd.read_parquet(full.trend_distribution(SIMULATION, "maize", "rainfed"))
    shares = distribution.groupby(["quantity", "period", "kind"])["area_share"].sum()
    assert len(shares) == 3 * 2 * 2
    np.testing.assert_allclose(shares, 1.0, rtol=1e-12)
    field = pd.read_parquet(full.trend_field(SIMULATION, "maize", "rainfed"))
    assert len(field) == 3 * 2 * 3
    found = maps(full)
    area = xr.load_dataset(full.layers)["area"].isel(crop_system=0)
    for _, row in field[field["region"] == EVERYWHERE].iterrows():
        grids = found.sel(period=row["period"])
        tested = area.where(np.isfinite(grids[f"slope_{row['quantity']}"]), 0.0)
        marked = tested.where(grids[f"p_ar1_{row['quantity']}"] <= 0.05, 0.0)
        assert row["area_ha"] == pytest.approx(float(tested.sum()), rel=1e-9)
        assert row["share_significant"] == pytest.approx(
            float(marked.sum() / tested.sum()), rel=1e-9
        )
        mean = (grids[f"slope_{row['quantity']}"] * tested).sum() / tested.sum()
        assert row["mean_trend"] == pytest.approx(float(mean), rel=1e-9)


def test_regional_trends(full: Layout) -> None:
    found = pd.read_parquet(full.trend_regions(SIMULATION))
    assert list(found["region"]) == REGIONS * 2
    totals = pd.read_parquet(full.totals(SIMULATION, "maize"))
    for _, row in found.iterrows():
        first, last = TREND["periods"][row["period"]]  # type: ignore[index]
        series = totals[(totals["region"] == row["region"]) & (totals["draw"] == 0)]
        yields = (series["production_t"] / series["area_ha"]).set_axis(series["year"])
        slope = 10 * np.polyfit(np.arange(30.0), yields.loc[first:last], 1)[0]
        assert row["slope"] == pytest.approx(slope, rel=1e-9)
        percent = 100 * slope / yields.loc[1991:2020].mean()
        assert row["slope_percent"] == pytest.approx(percent, rel=1e-9)
        assert row["years"] == 30
        assert 0 < row["p_ar1"] <= 1
        assert first + 9 <= row["break_year"] <= last - 10


@pytest.mark.parametrize("region", REGIONS)
def test_a_region_alone_has_the_values_of_the_full_run(
    full: Layout, tmp_path: Path, region: str
) -> None:
    path = write_assessment(tmp_path, tiles=2, trend=dict(TREND))
    part = run(write_results(path, YEARS, region))
    found = maps(part)
    whole = maps(full).sel(lat=found["lat"], lon=found["lon"])
    xr.testing.assert_identical(found.drop_attrs(), whole.drop_attrs())
    for name in ("trend_regions", "trend_field"):
        arguments = (SIMULATION,) if name == "trend_regions" else (SIMULATION, "maize", "rainfed")
        tables = [pd.read_parquet(getattr(one, name)(*arguments)) for one in (part, full)]
        alone, together = (
            table[table["region"] == region].reset_index(drop=True) for table in tables
        )
        pd.testing.assert_frame_equal(alone, together, check_exact=True)


def test_tiles_blocks_and_threads_do_not_matter(full: Layout, tmp_path: Path) -> None:
    import dask

    path = write_assessment(tmp_path, tiles=6, trend=dict(TREND))
    text = path.read_text(encoding="utf-8") + "store: {block_mb: 1}\n"
    path.write_text(text, encoding="utf-8")
    with dask.config.set(scheduler="threads", num_workers=3):
        part = run(write_results(path, YEARS))
    xr.testing.assert_identical(maps(part).drop_attrs(), maps(full).drop_attrs())
    for name in ("trend_distribution", "trend_field"):
        tables = [
            pd.read_parquet(getattr(one, name)(SIMULATION, "maize", "rainfed"))
            for one in (part, full)
        ]
        pd.testing.assert_frame_equal(*tables, check_exact=True)


def test_a_period_not_covered_is_missing(tmp_path: Path) -> None:
    trend = {"randomisations": 99, "periods": {"past": [1900, 1940], "all": [1960, 2020]}}
    layout = run(write_results(write_assessment(tmp_path, trend=trend), YEARS))
    found = maps(layout)
    assert np.isnan(found["slope_yield"].sel(period="past")).all()
    assert (found["reason_yield"].sel(period="past") != 0).all()
    # One season of 1960 to 2020 is missing: covered all the same.
    assert np.isfinite(found["slope_yield"].sel(period="all")).sum() == 47
    assert set(pd.read_parquet(layout.trend_regions(SIMULATION))["period"]) == {"all"}


def test_no_period_covered_gives_empty_tables(tmp_path: Path) -> None:
    trend = {"randomisations": 99, "periods": {"past": [1900, 1940]}}
    layout = run(write_results(write_assessment(tmp_path, trend=trend), YEARS))
    assert pd.read_parquet(layout.trend_regions(SIMULATION)).empty
    assert pd.read_parquet(layout.trend_distribution(SIMULATION, "maize", "rainfed")).empty
    assert (maps(layout)["significant_heat"] == -1).all()


def test_another_method_has_a_p_value_of_its_own(tmp_path: Path) -> None:
    trend = {"randomisations": 99, "method": "blocks"}
    layout = run(write_results(write_assessment(tmp_path, trend=trend), YEARS))
    found = maps(layout)
    assert "moving blocks" in found["significant_yield"].attrs["long_name"]
    assert {"p_ar1_yield", "p_shuffle_yield", "p_blocks_yield"} <= set(found)
    assert "p_blocks" in pd.read_parquet(layout.trend_regions(SIMULATION))


def test_files_follow_the_conventions(full: Layout, tmp_path: Path) -> None:
    path = full.trend_pixels(SIMULATION, "maize", "rainfed")
    report = tmp_path / "cf.json"
    command = [Path(sys.executable).parent / "compliance-checker", "--test=cf:1.11"]
    command += ["--criteria", "strict", "-f", "json", "-o", report, path]
    subprocess.run(command, check=False, capture_output=True)
    result = json.loads(report.read_text(encoding="utf-8"))["cf:1.11"]
    problems = [
        message
        for priority in ("high_priorities", "medium_priorities", "low_priorities")
        for check in result[priority]
        for message in check["msgs"]
    ]
    assert problems == []


def test_missing_yields_are_one_clear_line(tmp_path: Path) -> None:
    assessment = write_results(write_assessment(tmp_path), YEARS)
    layout = Layout.of(assessment)
    layout.yields(SIMULATION, "maize", "rainfed").unlink()
    with pytest.raises(StookError, match=r"maize_rainfed\.nc: no such file"):
        job.pixels(assessment, SIMULATION, "maize", "rainfed")
    assert not layout.trend_pixels(SIMULATION, "maize", "rainfed").parent.exists()


def test_broken_totals_are_one_clear_line(tmp_path: Path) -> None:
    assessment = write_results(write_assessment(tmp_path), YEARS)
    layout = Layout.of(assessment)
    layout.totals(SIMULATION, "maize").write_text("no table", encoding="utf-8")
    with pytest.raises(StookError, match=r"maize\.parquet: cannot be read"):
        job.regions(assessment, SIMULATION)
    assert not layout.trend_regions(SIMULATION).exists()
