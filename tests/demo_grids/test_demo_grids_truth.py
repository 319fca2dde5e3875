"""The stated truth against the files, and the true yields against hand-worked cases."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import xarray as xr
from stook.assessment.load import load_assessment
from stook.assessment.simulations import all_simulations
from stook.season.definition import (
    DaysAbove,
    DegreeDays,
    DrySpell,
    Mean,
    Total,
    VapourPressureDeficit,
)
from stook.yields.response import load_response

from demo_grids import truth
from demo_grids.climate_files import record_source, simulation_source
from demo_grids.crop_files import positions
from demo_grids.domain import domain
from demo_grids.geography import LAYERS
from demo_grids.geography import season_days as calendar
from demo_grids.indices import degree_days, longest_run, phase_days, season_days, season_index
from demo_grids.models import MODELS, TimeAxis
from demo_grids.responses import (
    STANDARD_ERRORS,
    TRUE,
    coefficients,
    estimated_document,
    write_responses,
)
from demo_grids.true_yields import (
    _yields,
    model_changes,
    nature_changes,
    regional_changes,
    unbiased,
)
from demo_grids.world import generate

SEED = 11
CF_TIME = xr.coders.CFDatetimeCoder(use_cftime=True)
TO_PLAIN = {
    "K": lambda values: values - 273.15,
    "kg m-2 s-1": lambda values: values * 86400,
    "1": lambda values: values * 100,
}


@pytest.fixture(scope="module")
def world():
    """The demo world cut to forty years: the record is as long as the simulations."""
    return domain(years=40)


@pytest.fixture(scope="module")
def files(tmp_path_factory, world):
    """Mean over the baseline at the pixel centres, by simulation and variable."""
    folder = tmp_path_factory.mktemp("truth")
    assessment = load_assessment(generate(folder, seed=SEED, years=40))
    return {
        simulation.name: {
            variable: baseline_mean(simulation, variable, world)
            for variable in ("tasmin", "tasmax", "pr", "hurs")
        }
        for simulation in all_simulations(assessment)
    }


def baseline_mean(simulation, variable, world):
    """Return the yearly means at the pixel centres, shape (year, lat, lon), in degC, mm, %."""
    parts = []
    for path in simulation.files[variable]:
        with xr.open_dataset(path, decode_times=CF_TIME) as dataset:
            grid = dataset[variable].load()
        yearly = grid.groupby("time.year").mean()
        yearly = yearly.rename({yearly.dims[1]: "lat", yearly.dims[2]: "lon"}).sortby("lat")
        yearly = yearly.assign_coords(lon=(yearly["lon"] + 180) % 360 - 180).astype(float)
        parts.append(yearly.interp(lat=world.lat, lon=world.lon))
        parts[-1].values = TO_PLAIN.get(grid.attrs["units"], np.asarray)(parts[-1].values)
    series = xr.concat(parts, "year")
    return series.sel(year=slice(*world.baseline)).values


@pytest.mark.parametrize("model", list(MODELS))
def test_bias_read_from_the_files_is_the_stated_bias(files, world, model):
    stated = truth.mean_bias(world, model)
    for variable, expected in stated.items():
        wrong, right = files[f"{model}_moderate_r1i1p1f1"][variable], files["observed"][variable]
        wrong, right = wrong.mean(axis=(1, 2)), right.mean(axis=(1, 2))
        found = wrong.mean() - right.mean()
        error = np.sqrt((wrong.var(ddof=1) + right.var(ddof=1)) / len(right))
        if variable == "pr":
            found, error = 100 * found / right.mean(), 100 * error / right.mean()
            assert abs(found - expected.mean()) < 4 * error, variable
    assert abs(stated["tasmin"].mean()) > 0.5
    assert abs(stated["pr"].mean()) > 5


@pytest.mark.parametrize("model", list(MODELS))
def test_bias_is_exact_for_the_same_weather(world, model):
    source = simulation_source(world, SEED, MODELS[model], "high")
    true = unbiased(source)
    biased = replace(true, bias=MODELS[model].bias)
    days = slice(0, len(source.axis.day))
    wrong, right = biased.daily(days), true.daily(days)
    lat, lon = world.lat, world.lon
    here = truth.mean_climate(world, model, "high", world.simulated)
    there = truth.mean_climate(world, model, "high", world.simulated, biased=False)
    for variable, tolerance in (("tasmin", 0.08), ("tasmax", 0.08), ("hurs", 0.3), ("pr", 0.12)):
        found = (wrong[variable] - right[variable]).mean(axis=0, dtype=float)
        stated = (here[variable] - there[variable]).reshape(len(lat) * len(lon))
        np.testing.assert_allclose(found, stated, atol=tolerance, err_msg=variable)


def test_change_of_the_mean_is_the_sensitivity_times_the_path():
    world = domain("demo")
    change = truth.mean_change(world, "nature", "high", (2081, 2100))
    warming = (change["tasmin"] + change["tasmax"]) / 2
    # by hand: path(y) = 0.85 + 0.025 n + 0.00025 n^2 with n = y - 2015 from 2015 on, mid-year
    years = np.arange(2081, 2101) + 0.5 - 2015
    base = np.concatenate(
        [
            0.025 * (np.arange(1991, 2015) + 0.5 - 1981),
            0.85 + 0.025 * (np.arange(6) + 0.5) + 0.00025 * (np.arange(6) + 0.5) ** 2,
        ]
    )
    path = (0.85 + 0.025 * years + 0.00025 * years**2).mean() - base.mean()
    assert warming.mean() == pytest.approx(path, abs=0.01)
    assert np.all(change["tasmin"] > change["tasmax"])
    for model in MODELS:
        own = truth.mean_change(world, model, "high", (2081, 2100))
        ratio = (own["tasmin"] + own["tasmax"]).mean() / (2 * warming.mean())
        assert ratio == pytest.approx(MODELS[model].change.sensitivity, abs=1e-3)


def test_change_is_in_the_files_weather(world):
    """Late minus early years of one model's own weather, within four standard errors."""
    long = domain(pixels=4, years=120)
    source = unbiased(simulation_source(long, SEED, MODELS["ROWAN-CM"], "high"))
    daily = source.daily(slice(0, len(source.axis.day)))
    stated = truth.mean_change(long, "ROWAN-CM", "high", (2081, 2100))
    for variable in ("tasmin", "tasmax"):
        yearly = daily[variable].reshape(120, 365, -1).mean(axis=(1, 2), dtype=float)
        early, late = yearly[10:40], yearly[100:120]
        error = np.sqrt(early.var(ddof=1) / 30 + late.var(ddof=1) / 20)
        assert abs(late.mean() - early.mean() - stated[variable].mean()) < 4 * error


def test_trend_of_the_record_is_that_of_its_path(world):
    trend = truth.mean_trend(world, "nature", "moderate", (1981, 2014))
    # 0.025 K a year for a sensitivity of one; nights warm more than days
    assert (trend["tasmin"] + trend["tasmax"]) / 2 == pytest.approx(0.25, abs=0.003)
    assert trend["tasmin"] > trend["tasmax"]


def test_estimates_lie_within_one_standard_error_but_not_on_the_truth(tmp_path):
    for seed in (1, 2, 3):
        write_responses(tmp_path / str(seed), seed)
        for name, true in TRUE.items():
            response = load_response(tmp_path / str(seed) / f"{name}.yaml")
            deviation = (response.coefficient_vector - coefficients(true)) / STANDARD_ERRORS[name]
            assert np.all(np.abs(deviation) <= 1.0001), name
            assert np.abs(deviation).max() > 0.05, name
            np.testing.assert_allclose(
                np.sqrt(np.diag(response.covariance_matrix)), STANDARD_ERRORS[name]
            )


def test_the_truth_is_not_changed_by_making_estimates():
    before = {name: coefficients(document) for name, document in TRUE.items()}
    for name in TRUE:
        estimated_document(name, 9)
    for name, values in before.items():
        np.testing.assert_array_equal(coefficients(TRUE[name]), values)


@pytest.mark.parametrize(
    ("low", "high", "base", "cap", "expected"),
    [
        # Single sine, worked out by integration (Baskerville & Emin 1969; Allen 1976).
        (10, 30, 20, None, 3.183099),
        (5, 35, 10, 30, 10.0),
        (12, 28, 15, 25, 5.0),
        (8, 12, 15, 30, 0.0),
        (31, 38, 10, 30, 20.0),
        (7, 14, 12, 33, 0.468059),
        (15, 33, 29, None, 0.819485),
    ],
)
def test_degree_days_of_one_day(low, high, base, cap, expected):
    low, high = (np.array([[float(value)]]) for value in (low, high))
    daily = degree_days(low, high, base) - (degree_days(low, high, cap) if cap else 0)
    assert daily[0, 0] == pytest.approx(expected, abs=1e-6)


def test_indices_of_three_days_by_hand():
    weather = {
        "tasmin": np.array([[10.0], [12.0], [14.0]]),
        "tasmax": np.array([[20.0], [36.0], [30.0]]),
        "pr": np.array([[0.5], [6.0], [0.0]]),
        "hurs": np.array([[50.0], [50.0], [50.0]]),
    }

    def index(definition):
        return float(season_index(weather, definition, 6.0)[0])

    assert index(Mean(measure="mean", variable="tasmin")) == pytest.approx(12)
    assert index(Mean(measure="mean", variable="tas")) == pytest.approx(61 / 3)
    assert index(Mean(measure="mean", variable="diurnal-range")) == pytest.approx(50 / 3)
    assert index(Total(measure="total")) == pytest.approx(13)
    hot = DaysAbove(measure="days-above", variable="tasmax", threshold=30)
    assert index(hot) == pytest.approx(2)
    assert index(DrySpell(measure="longest-dry-spell")) == 1
    assert index(DegreeDays(measure="degree-days", base=0)) == pytest.approx(2 * 61)


def test_vapour_pressure_deficit_is_that_of_fao56():
    # FAO-56 (Allen et al. 1998), example 3: 24.5 and 15.0 degC give es = 2.39 kPa.
    weather = {
        "tasmin": np.array([[15.0]]),
        "tasmax": np.array([[24.5]]),
        "hurs": np.array([[0.0]]),
    }
    deficit = season_index(weather, VapourPressureDeficit(measure="vapour-pressure-deficit"), 1)
    assert deficit[0] == pytest.approx(2.39, abs=0.005)


def test_longest_run_against_a_plain_loop():
    dry = np.random.default_rng(2).random((200, 7)) < 0.7
    for column, found in zip(dry.T, longest_run(dry), strict=True):
        text = "".join("d" if day else " " for day in column)
        assert found == max(map(len, text.split()))


def test_season_across_the_year_end_counts_on():
    assert season_days(1, 10, 365) == range(0, 10)
    assert season_days(361, 5, 365) == range(360, 370)
    assert season_days(361, 5, 360) == range(355, 365)
    assert phase_days(range(0, 100), (0.45, 0.7)) == range(45, 70)


@pytest.mark.parametrize("layer", LAYERS, ids=lambda layer: layer.name)
def test_true_yields_of_constant_weather_by_hand(layer):
    world = domain("tiny")
    axis = TimeAxis.of((2001, 2003), "noleap")
    shape = (len(axis.day), world.rows * world.columns)
    values = {"tasmin": 16.0, "tasmax": 26.0, "pr": 3.0, "hurs": 60.0}
    daily = {name: np.full(shape, value) for name, value in values.items()}
    found = _yields(world, layer, axis, daily)
    place = positions(world, world.lat, world.lon)
    planting, maturity = (float(days.ravel()[0]) for days in calendar(layer.name, *place))
    days = maturity - planting + 1 + (365 if maturity < planting else 0)
    growing, hot = days * (21.0 - 10.0), 0.0
    rain = 3.0 * days
    es = (1.8181 + 3.3614) / 2  # e0(16) and e0(26), kPa, FAO-56 equation 11, from its table 2.3
    dry_air = es * 0.4
    veg = round(0.45 * days) * 11.0
    expected = {
        "maize_rainfed": lambda: np.exp(
            0.0006 * min(growing, 1600)
            + 0.0002 * max(min(growing, 1950) - 1600, 0)
            - 0.0030 * hot
            + 0.0016 * rain
            - 1.6e-6 * rain**2
        ),
        "maize_irrigated": lambda: np.exp(
            0.0003 * min(growing, 1950) - 0.10 * dry_air - 0.016 * 16.0
        ),
        "barley_rainfed": lambda: (
            0.1 + 0.66 * 21 - 0.030 * 21**2 + 0.0030 * rain - 2.4e-6 * rain**2
        ),
        "rice_irrigated": lambda: np.exp(
            0.00204 * veg - 1.2e-6 * veg**2 - 0.035 * 16.0 - 0.06 * dry_air
        ),
    }[layer.name]()
    first = 1 if layer.crop == "barley" else 0
    assert np.isnan(found[:first]).all()
    np.testing.assert_allclose(found[first:, 0], expected, rtol=2e-4)


def test_no_change_of_yields_is_zero_and_a_tenth_is_ten_percent():
    world = domain("tiny")
    base = {layer.name: np.full((world.rows, world.columns), 2.0) for layer in LAYERS}
    assert np.allclose(regional_changes(world, base, base)["change"], 0)
    later = {name: 1.1 * values for name, values in base.items()}
    table = regional_changes(world, later, base)
    assert np.allclose(table["change"], 10)
    assert set(table.query("crop == 'maize'")["system"]) == {"rainfed", "irrigated", "all"}
    grown = {crop: set(rows["region"]) for crop, rows in table.groupby("crop")}
    assert len(grown["maize"]) == 6
    assert {"Saltmere", "Brackwater", "Lowsend"} <= grown["rice"]
    assert "Upper Hollin" not in grown["rice"]


def test_true_changes_cover_every_case_and_agree_in_sign():
    world = domain("tiny")
    nature = nature_changes(world, SEED, replicates=2)
    models = model_changes(world, SEED)
    keys = ["crop", "system", "region", "scenario", "horizon"]
    assert not nature.duplicated(keys).any()
    assert set(map(tuple, models[keys].values)) == set(map(tuple, nature[keys].values))
    assert set(models["model"]) == {"ALDER-ESM", "SEDGE-LR"}
    assert np.isfinite(nature["change"]).all()
    assert (nature["change"].mean() < 0) & (models["change"].mean() < 0)


def test_record_source_is_what_the_record_holds(files, world):
    source = record_source(world, SEED)
    daily = source.daily(slice(0, len(source.axis.day)))
    baseline = (source.axis.year >= 1991) & (source.axis.year <= 2020)
    found = daily["tasmax"][baseline].mean(dtype=float)
    assert files["observed"]["tasmax"].mean() == pytest.approx(found, abs=2e-3)
