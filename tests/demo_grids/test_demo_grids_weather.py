"""The weather law: exact means, memory, wet days, and smoothness in space."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from demo_grids.domain import domain
from demo_grids.kernels import combine
from demo_grids.models import MODELS, TimeAxis
from demo_grids.weather import (
    FAST,
    NATURE,
    RAIN_SHAPE,
    Bias,
    Change,
    expected,
    knots,
    latent_weather,
    mean_state,
    mode_weights,
    warming_path,
    weather,
)

SEED = 5
YEARS = 60


@pytest.fixture(scope="module")
def sample():
    """Sixty years without a warming path at nine places of the demo world."""
    world = domain("demo")
    axis = TimeAxis.of((1981, 1980 + YEARS), "noleap")
    lat, lon = (grid.ravel() for grid in np.meshgrid(world.lat[::4], world.lon[::5]))
    law = mean_state(world.across(lon), world.up(lat), axis.fractions[:365])
    latent = latent_weather(SEED, [("sample", len(axis.day))], len(knots(world)))
    daily = weather(law, axis.day, 0 * axis.day, latent, mode_weights(world, lat, lon))
    return law, axis, daily


def test_combine_is_a_matrix_product_summed_in_order():
    generator = np.random.default_rng(1)
    series = generator.normal(size=(7, 4)).astype("f4")
    weights = generator.normal(size=(4, 5)).astype("f4")
    by_hand = np.zeros((7, 5), "f4")
    for mode in range(4):
        by_hand += series[:, mode, None] * weights[mode]
    np.testing.assert_array_equal(combine(series, weights), by_hand)
    np.testing.assert_allclose(by_hand, series @ weights, rtol=1e-5, atol=1e-6)


def test_warming_path_starts_at_zero_and_parts_in_2015():
    for scenario in ("moderate", "high"):
        assert warming_path(scenario, np.array([1981.0]))[0] == 0
        assert warming_path(scenario, np.array([2015.0]))[0] == pytest.approx(0.85)
        assert np.all(np.diff(warming_path(scenario, np.arange(1981, 2101))) > 0)
    high, moderate = (warming_path(name, np.array([2100.0]))[0] for name in ("high", "moderate"))
    # by hand: 0.85 + 0.025 x 85 + 0.00025 x 85 x 85; 0.85 + 1.45 x (1 - exp(-85/45))
    assert high == pytest.approx(4.78125)
    assert moderate == pytest.approx(0.85 + 1.45 * (1 - np.exp(-85 / 45)))


def test_weights_give_unit_variance_and_smooth_fields():
    world = domain("demo")
    lat = np.full(6, 40.5)
    lon = -35.0 + np.array([0.0, 0.5, 1.0, 2.0, 4.0, 8.0])
    weights = mode_weights(world, lat, lon)
    np.testing.assert_allclose((weights**2).sum(axis=0), 1, rtol=1e-6)
    correlation = weights.T @ weights[:, 0]
    assert np.all(np.diff(correlation) < 0)
    # neighbouring pixels (0.5 degree) hardly differ, places 8 degrees apart hardly agree
    assert correlation[1] > 0.97
    assert correlation[5] < 0.1


def test_latent_weather_remembers_and_is_standard():
    latent = latent_weather(SEED, [("a", 40_000)], 3)
    for series, memory in ((latent.fast, FAST), (latent.noise, 0.0)):
        assert series.dtype == np.float32
        assert series.std() == pytest.approx(1, abs=0.03)
        assert np.corrcoef(series[:-1, 0], series[1:, 0])[0, 1] == pytest.approx(memory, abs=0.02)


def test_scenarios_share_the_weather_of_their_common_part():
    first = latent_weather(SEED, [("past", 50), ("one", 10)], 2)
    other = latent_weather(SEED, [("past", 50), ("two", 10)], 2)
    np.testing.assert_array_equal(first.slow[:50], other.slow[:50])
    assert not np.array_equal(first.slow[50:], other.slow[50:])


def test_sample_means_are_the_expected_means(sample):
    law, _, daily = sample
    for name, mean in expected(law, 0.0).items():
        yearly = daily[name].reshape(YEARS, 365, -1).mean(axis=1, dtype=float)
        error = yearly.std(axis=0, ddof=1) / np.sqrt(YEARS)
        assert np.all(np.abs(yearly.mean(axis=0) - mean.mean(axis=0)) < 4 * error), name


def test_weather_is_possible(sample):
    _, _, daily = sample
    assert np.all(daily["tasmin"] < daily["tasmax"])
    assert daily["hurs"].min() > 0
    assert daily["hurs"].max() < 100
    assert daily["pr"].min() == 0
    # colder and narrower on wet days
    wet = daily["pr"] > 1
    spread = daily["tasmax"] - daily["tasmin"]
    assert spread[wet].mean() < 0.85 * spread[~wet].mean()
    assert daily["hurs"][wet].mean() > daily["hurs"][~wet].mean() + 5


def test_wet_days_come_as_often_as_the_law_says(sample):
    law, _, daily = sample
    observed = (daily["pr"] > 0).reshape(YEARS, 365, -1).mean(axis=(0, 1))
    np.testing.assert_allclose(observed, law.wet_share.mean(axis=0), atol=0.012)


def test_wet_day_amounts_are_gamma_distributed(sample):
    law, axis, daily = sample
    # Kolmogorov-Smirnov distance to scipy's gamma law; days far apart are independent enough.
    days = slice(None, None, 5)
    rain, scale = daily["pr"][days, 4], law.amount[axis.day[days], 4]
    amounts = (rain / scale)[rain > 0]
    distance = stats.kstest(amounts, stats.gamma(RAIN_SHAPE, scale=1 / RAIN_SHAPE).cdf)
    assert distance.pvalue > 0.001
    wrong = stats.kstest(amounts, stats.gamma(1.0, scale=1.0).cdf)
    assert wrong.pvalue < 0.001


def test_seasons_are_where_they_belong(sample):
    law, _, _ = sample
    warmest = law.temperature.argmax(axis=0)
    assert np.all((warmest > 180) & (warmest < 225))


def test_bias_and_change_act_on_the_means_as_stated():
    place, days = np.array([0.5]), (np.arange(365) + 0.5) / 365
    true = expected(mean_state(place, place, days), 0.0)
    biased = expected(
        mean_state(place, place, days, Bias(temperature=1.5, diurnal=0.8, wet_share=0.1, rain=0.2)),
        0.0,
    )
    half = (true["tasmax"] - true["tasmin"]).mean() / 2
    assert (biased["tasmax"] - true["tasmax"]).mean() == pytest.approx(1.5 - 0.2 * half, abs=1e-4)
    assert (biased["tasmin"] - true["tasmin"]).mean() == pytest.approx(1.5 + 0.2 * half, abs=1e-4)
    assert biased["pr"].mean() / true["pr"].mean() == pytest.approx(1.2, rel=1e-5)
    change = Change(sensitivity=2.0)
    warmer = expected(mean_state(place, place, days, change=change), 1.0, change)
    tas = {k: (v["tasmin"] + v["tasmax"]).mean() / 2 for k, v in {"a": true, "b": warmer}.items()}
    assert tas["b"] - tas["a"] == pytest.approx(2.0, abs=1e-4)


def test_models_changes_scatter_around_natures():
    changes = [model.change for model in MODELS.values()]
    for field in ("sensitivity", "rain_summer", "rain_winter"):
        values = [getattr(change, field) for change in changes]
        assert np.mean(values) == pytest.approx(getattr(NATURE, field))
        assert min(values) < getattr(NATURE, field) < max(values)
