"""Observed impact: hand-computable cases, truth, statsmodels, the plain path, level and jobs."""

from __future__ import annotations

import json
import math
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from impact_inputs import REGIONS, SYSTEMS, TREND, YEARS, response, write_assessment, write_results
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.plain.impact import impact_of, pixel_impact
from stook.audit.plain.trend import trend_of_series
from stook.grids.missing import Reason
from stook.regions.totals import SystemGrids
from stook.trend import job
from stook.trend.detrend import detrend, impact_series, lowest_value
from stook.trend.impact import Setting, system_impact
from stook.trend.impact_kernels import impact_percent, logarithmic_mean, ratio_trends
from stook.trend.impact_table import COLUMNS, impact_table, spread
from stook.trend.series import TrendOptions
from stook.yields.response import Response

OPTIONS = TrendOptions(seed=11, count=199, minimum_years=20)
TESTS = Path(__file__).parents[1]


def run(assessment: Assessment) -> Layout:
    job.impact(assessment, crop="maize")
    for system in SYSTEMS:
        job.impact_map(assessment, crop="maize", system=system)
    return Layout.of(assessment)


def table(layout: Layout) -> pd.DataFrame:
    return pd.read_parquet(layout.impact("maize"))


def maps(layout: Layout, system: str) -> xr.Dataset:
    return xr.load_dataset(layout.impact_map("maize", system))


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> Layout:
    return run(write_results(write_assessment(tmp_path_factory.mktemp("full"))))


def linear(coefficient: float, link: str = "log") -> Response:
    content = response("rainfed") | {
        "link": link,
        "intercept": 0.0 if link == "log" else 5.0,
        "terms": {"heat": {"form": "linear", "index": "heat", "coefficient": coefficient}},
        "standard_errors": [0.001],
    }
    return Response.model_validate(content)


def test_detrended_weather_keeps_the_first_level_and_the_ups_and_downs() -> None:
    years = np.arange(1981, 2011)
    wiggle = np.where(years % 2 == 0, 3.0, -3.0)
    rise = 40 + 0.5 * (years - 1981.0)
    heat = np.stack([rise, rise + wiggle, np.full(30, 7.0)], axis=1)
    found = detrend({"heat": heat}, years, 1981, {"heat": 0.0}, OPTIONS)
    np.testing.assert_allclose(found.detrended["heat"][:, 0], 40.0, rtol=1e-13)
    # statsmodels: residuals of the line, about its value in the first year
    fit = sm.OLS(heat[:, 1], sm.add_constant(years - 1981.0)).fit()
    expected = fit.resid + fit.params[0]
    np.testing.assert_allclose(found.detrended["heat"][:, 1], expected, rtol=1e-11)
    np.testing.assert_array_equal(found.detrended["heat"][:, 2], 7.0)
    assert found.enough.all()


def test_detrended_degree_days_are_not_negative() -> None:
    years = np.arange(1981, 2011)
    heat = np.clip(2.0 * (years - 1990), 0, None)[:, None] + np.zeros((30, 1))
    found = detrend({"heat": heat}, years, 1981, {"heat": 0.0}, OPTIONS)
    assert found.detrended["heat"].min() == 0.0
    document = Response.model_validate(response("rainfed"))
    assert lowest_value(document.indices["heat"]) == 0.0
    assert lowest_value(document.indices["night"]) == -math.inf


def test_impact_by_hand() -> None:
    # 0.5 degree days a year, each -0.004 of log yield: exp(-0.002 x 29) - 1 over 30 years.
    years = np.arange(1981, 2011)
    heat = (40 + 0.5 * (years - 1981.0))[:, None]
    found = detrend({"heat": heat}, years, 1981, {"heat": 0.0}, OPTIONS)
    carried = impact_series(linear(-0.004), np.array([-0.004]), found)
    np.testing.assert_allclose(carried[:, 0], -0.004 * heat[:, 0], rtol=1e-12)
    slope = ratio_trends(
        np.exp(-0.004 * heat.T)[None], np.exp(-0.004 * np.full((1, 1, 30), 40.0)), years * 1.0
    )
    np.testing.assert_allclose(slope, -0.002, rtol=1e-12)
    np.testing.assert_allclose(
        impact_percent(slope.ravel(), 29.0), 100 * math.expm1(-0.058), rtol=1e-12
    )


def test_kernels_by_hand() -> None:
    one, other = np.array([[8.0, 2.0, 0.0]]), np.array([[2.0, 2.0, 1.0]])
    mean = logarithmic_mean(one, other)
    np.testing.assert_allclose(mean[0, :2], [6 / math.log(4), 2.0], rtol=1e-15)
    assert np.isnan(mean[0, 2])
    years = np.array([1.0, 2.0, 3.0, 4.0])
    gap = np.array([[[1.0, np.nan, math.e**2, math.e**3]]])
    np.testing.assert_allclose(ratio_trends(gap, np.ones((1, 1, 4)), years), 1.0, rtol=1e-14)
    zero = np.array([[[1.0, 0.0, 2.0, 3.0]]])
    assert np.isnan(ratio_trends(zero, np.ones((1, 1, 4)), years)[0, 0])


@settings(derandomize=True, max_examples=12, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    system=st.sampled_from(sorted(SYSTEMS)),
    rise=st.floats(-0.6, 0.6),
    missing=st.integers(0, 3),
    product=st.booleans(),
    extrapolation=st.sampled_from(["flag", "hold"]),
)
def test_same_as_the_plain_path(
    seed: int, system: str, rise: float, missing: int, product: bool, extrapolation: str
) -> None:
    random = np.random.default_rng(seed)
    years = np.arange(1971, 2016)
    indices = {
        "heat": np.clip(60 + rise * (years - 1971) + 15 * random.standard_normal(45), 0, None),
        "rain": np.clip(400 + 90 * random.standard_normal(45), 0, None),
        "night": 15 + 0.6 * random.standard_normal(45),
    }
    indices["rain"][random.choice(45, missing, replace=False)] = np.nan
    content = response(system) | {"extrapolation": extrapolation}
    content["estimation_range"] |= {"heat": [40, 80], "rain": [300, 500]}
    if product:
        content["terms"]["both"] = {
            "form": "product",
            "indices": ["heat", "rain"],
            "coefficient": 4e-6,
        }
        content["standard_errors"] = [*content["standard_errors"], 1e-6]
    document = Response.model_validate(content)
    coefficients = document.coefficient_vector
    period = (1981, 2015)
    inside = years >= 1981
    lowest = {name: lowest_value(document.indices[name]) for name in indices}
    series = {name: values[inside][:, None] for name, values in indices.items()}
    found = detrend(series, years[inside], 1981, lowest, OPTIONS)
    carried = impact_series(document, coefficients, found)[:, 0]
    plain = pixel_impact(document, coefficients, indices, years, (1971, 2000), period, 5.5)
    np.testing.assert_allclose(carried, plain.series, rtol=1e-7, atol=1e-9)
    # The slope of the tested series is that of the log ratio of yields.
    there = np.isfinite(plain.series)
    x = years[inside][there]
    ratio = np.log(plain.actual[there] / plain.detrended[there])
    slopes = [np.polyfit(x - 1981, values, 1)[0] for values in (carried[there], ratio)]
    np.testing.assert_allclose(slopes[0], slopes[1], rtol=1e-7, atol=1e-12)


def pixel_series(layout: Layout, system: str) -> dict[str, np.ndarray]:
    season = xr.load_dataset(layout.season("observed", "maize", system, 0))
    return {name: season[name].values for name in ("heat", "rain", "night")}


@pytest.mark.parametrize("system", sorted(SYSTEMS))
def test_maps_are_those_of_the_plain_path(full: Layout, system: str) -> None:
    found = maps(full, system)
    series = pixel_series(full, system)
    document = Response.model_validate(response(system))
    draws = pd.read_csv(full.coefficients("maize", system))[document.coefficient_names]
    years = np.array(YEARS)
    for period, (row, column) in (("late", (5, 6)), ("early", (3, 3)), ("early", (2, 1))):
        ends = TREND["periods"][period]
        own = {name: values[:, row, column] for name, values in series.items()}
        inside = (years >= ends[0]) & (years <= ends[1])
        impacts = []
        for _, coefficients in draws.iterrows():
            plain = pixel_impact(
                document, coefficients.to_numpy(), own, years, (1981, 2010), ends, 5.5
            )
            impacts.append(impact_of(plain.actual, plain.detrended, years[inside], ends))
        pixel = found.sel(period=period).isel(lat=row, lon=column)
        assert float(pixel["impact"]) == pytest.approx(impacts[0], rel=1e-8)
        for percentile in (5, 50, 95):
            expected = np.percentile(impacts[1:], percentile)
            assert float(pixel[f"impact_p{percentile:02d}"]) == pytest.approx(expected, rel=1e-8)
        assert float(pixel["share_decrease"]) == np.mean(np.array(impacts[1:]) < 0)
        central = pixel_impact(
            document, draws.iloc[0].to_numpy(), own, years, (1981, 2010), ends, 5.5
        )
        trend = trend_of_series(central.series, years[inside], 11, 199, 20)
        assert float(pixel["p_ar1"]) == trend.p_ar1
        assert int(pixel["years"]) == trend.years


def test_regions_are_those_of_the_plain_path(full: Layout) -> None:
    years, ends = np.array(YEARS), TREND["periods"]["late"]
    inside = years >= ends[0]
    layers, overlay = xr.load_dataset(full.layers), xr.load_dataset(full.overlay)
    rows = table(full).set_index(["region", "system", "period"])
    sums = {}
    for number, system in enumerate(SYSTEMS):
        document = Response.model_validate(response(system))
        draws = pd.read_csv(full.coefficients("maize", system))[document.coefficient_names]
        series, area = pixel_series(full, system), layers["area"].values[number]
        pixels = [
            (row, column)
            for row in range(6)
            for column in range(8)
            if (row, column) not in ((0, 0), (4, 4), (1, 1))
        ]
        for draw in (0, 7):
            actual, detrended = np.zeros(inside.sum()), np.zeros(inside.sum())
            for row, column in pixels:
                own = {name: values[:, row, column] for name, values in series.items()}
                plain = pixel_impact(
                    document, draws.loc[draw].to_numpy(), own, years, (1981, 2010), ends, 5.5
                )
                weight = area[row, column] * overlay["coverage"].values[1, row, column]
                actual += weight * plain.actual
                detrended += weight * plain.detrended
            sums[system, draw] = (actual, detrended)
    for system in SYSTEMS:
        row = rows.loc["Thornfold", system, "late"]
        expected = impact_of(*sums[system, 0], years[inside], ends)
        assert row["impact"] == pytest.approx(expected, rel=1e-9)
        recent = [values[-10:].mean() for values in sums[system, 0]]
        assert row["recent_production_t"] == pytest.approx(recent[0], rel=1e-12)
        assert row["recent_detrended_t"] == pytest.approx(recent[1], rel=1e-12)
    both = [sums["rainfed", 0][k] + sums["irrigated", 0][k] for k in (0, 1)]
    row = rows.loc["Thornfold", "all", "late"]
    assert row["impact"] == pytest.approx(impact_of(*both, years[inside], ends), rel=1e-9)


def test_table(full: Layout) -> None:
    found = table(full)
    assert list(found.columns) == COLUMNS
    names = [*REGIONS, "outside all regions"]
    assert list(found["region"]) == names * 6
    assert list(found["system"].unique()) == ["rainfed", "irrigated", "all"]
    late = found[found["period"] == "late"]
    assert (late["years"] == 30).all()
    # Heat and nights rise: a loss, and more than chance; the draws lie around the estimate.
    assert (late["impact"] < 0).all()
    assert (late["impact_p05"] < late["impact_p95"]).all()
    assert (late["chance_p05"] < 0).all()
    assert (late["chance_p95"] > 0).all()
    assert (late["p_ar1"] >= 1 / 200).all()
    areas = late[late["system"] == "all"].set_index("region")
    assert areas["area_ha"].sum() + areas["missing_area_ha"].sum() == pytest.approx(
        float(xr.load_dataset(full.layers)["area"].sum()), rel=1e-12
    )
    assert (areas.loc[["Saltmere", "Thornfold"], "missing_area_ha"] > 0).all()


def test_missing_impacts_carry_their_reason(full: Layout) -> None:
    found = maps(full, "rainfed")
    missing = np.isnan(found["impact"])
    np.testing.assert_array_equal(missing, found["reason"] != 0)
    np.testing.assert_array_equal(missing, found["years"] == 0)
    np.testing.assert_array_equal(missing, np.isnan(found["p_ar1"]))
    reasons = found["reason"].isel(period=1)
    assert int(reasons[0, 0]) == int(Reason.OUTSIDE_CROP_AREA)
    assert int(reasons[4, 4]) == int(Reason.TOO_FEW_VALUES)
    assert int(reasons[1, 1]) == int(Reason.TOO_FEW_VALUES)
    assert int((reasons != 0).sum()) == 3


@pytest.mark.parametrize("region", ["Saltmere", "Thornfold"])
def test_region_alone_has_the_same_bits(full: Layout, tmp_path: Path, region: str) -> None:
    own = run(write_results(write_assessment(tmp_path), region))
    one, other = table(full), table(own)
    one = one[one["region"] == region].reset_index(drop=True)
    pd.testing.assert_frame_equal(one, other, check_exact=True)
    for system in SYSTEMS:
        here, there = maps(own, system), maps(full, system)
        there = there.sel(lat=here["lat"], lon=here["lon"])
        for name in here.data_vars:
            if name != "significant":  # a family is the pixels of the main region
                np.testing.assert_array_equal(here[name], there[name])


def test_tiles_and_blocks_change_no_bit(full: Layout, tmp_path: Path) -> None:
    path = write_assessment(tmp_path, tiles=3)
    assessment = write_results(path)
    small = assessment.model_copy(
        update={"store": assessment.store.model_copy(update={"block_mb": 1})}
    )
    layout = run(small)
    pd.testing.assert_frame_equal(table(full), table(layout), check_exact=True)
    for system in SYSTEMS:
        xr.testing.assert_equal(maps(full, system), maps(layout, system))


def test_too_few_years(tmp_path: Path) -> None:
    path = write_assessment(tmp_path, trend={"randomisations": 99})
    layout = run(write_results(path, years=range(1991, 2006)))
    assert table(layout).empty
    assert np.isnan(maps(layout, "rainfed")["impact"]).all()


def test_no_period_of_the_series(tmp_path: Path) -> None:
    trend = {"randomisations": 99, "periods": {"future": [2031, 2060]}}
    layout = run(write_results(write_assessment(tmp_path, trend=trend)))
    assert list(table(layout).columns) == COLUMNS
    assert table(layout).empty


def test_maps_follow_cf(full: Layout) -> None:
    from cf_units import Unit

    found = maps(full, "rainfed")
    assert Unit(found["impact"].attrs["units"]) == Unit("percent")
    assert found["p_ar1"].attrs["randomisations"] == 199
    np.testing.assert_array_equal(found["first_year"], [1961, 1991])


def test_level_of_the_test() -> None:
    script = TESTS / "validation" / "impact_level.py"
    command = [sys.executable, str(script), "--quick", "--worlds", "300", "--randomisations", "199"]
    done = subprocess.run([*command, "--json"], check=True, capture_output=True, text=True)
    found = json.loads(done.stdout.splitlines()[-1])
    # Nominal 5 %; 300 worlds: standard error 1.3 %. The full run is in docs/trend.md.
    assert 0.02 < found["level_05"] < 0.09
    # The ratio of the two yields is nearly a straight line: testing it would be no test.
    assert found["naive_level"] > 0.4
    assert found["slope_error"] < 0.1


@pytest.mark.heavy
def test_tables_of_the_docs_are_those_of_the_command() -> None:
    command = [sys.executable, str(TESTS / "validation" / "impact_level.py")]
    done = subprocess.run(command, check=True, capture_output=True, text=True)
    rows = [line for line in done.stdout.splitlines() if line.startswith("|")]
    assert len(rows) == 2 + 9 + 2 + 9
    documented = (TESTS.parent / "docs" / "trend.md").read_text(encoding="utf-8").splitlines()
    assert [row for row in rows if row not in documented] == []


def test_region_with_too_few_complete_years_has_no_impact() -> None:
    # Every pixel lacks two years of its own: none is left out, but the region lacks eight of 30.
    years = np.arange(1981, 2011)
    heat = np.random.default_rng(2).uniform(30, 60, (30, 1, 4))
    for pixel in range(4):
        heat[[3 + 5 * pixel, 5 + 5 * pixel], 0, pixel] = np.nan
    here = {"year": years, "lat": [45.0], "lon": np.arange(4.0)}
    maps = ("lat", "lon")
    season = xr.Dataset({"heat": (("year", *maps), heat)}, here)
    layer = xr.Dataset({name: (maps, np.full((1, 4), 5.0)) for name in ("area", "baseline_yield")})
    reason = xr.Dataset({"reason": (maps, np.zeros((1, 4), dtype=np.int8))})
    overlay = xr.Dataset(
        {"coverage": (("region", *maps), np.ones((1, 1, 4)))}, {"region": ["Saltmere"]}
    )
    setting = Setting(linear(-0.004), np.array([[-0.004], [-0.003]]), (1981, 2010), OPTIONS, 64)
    sums = system_impact(SystemGrids(season, reason, layer), overlay, setting, (1981, 2010))
    row = impact_table("maize", {"rainfed": sums}, "all", OPTIONS).iloc[0]
    assert row["years"] == 0
    assert np.isnan(row[["impact", "impact_p50", "chance_p05", "p_ar1"]].astype(float)).all()
    assert row["area_ha"] == 20.0


def test_without_draws_there_is_no_spread() -> None:
    found = spread(np.array([[3.0, -1.0]]))
    np.testing.assert_array_equal(found["impact"], [3.0, -1.0])
    assert np.isnan(found.drop(columns="impact").to_numpy()).all()
    draws = spread(np.array([[3.0, -1.0], [1.0, np.nan], [-2.0, 0.0], [4.0, 1.0]]))
    assert draws["impact_p50"].iloc[0] == 1.0
    assert draws["share_decrease"].iloc[0] == 1 / 3
    assert np.isnan(draws["impact_p50"].iloc[1])  # a draw is missing
