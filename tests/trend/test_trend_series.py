"""Trends of many series: each depends on itself only; too short, constant and straight series."""

from __future__ import annotations

from dataclasses import replace

import dask
import numpy as np
import pytest
from stook.trend.series import BLOCK, TrendOptions, draw, series_trends

OPTIONS = TrendOptions(seed=2, count=99, minimum_years=20)
YEARS = np.arange(50) + 1971


def many_series(count: int) -> np.ndarray:
    random = np.random.default_rng(9)
    values = random.standard_normal((50, count)).cumsum(axis=0) / 3
    values += 5 * random.standard_normal((50, count))
    values[:, ::5] = np.rint(values[:, ::5])  # ties
    values[0, ::3] = np.nan
    values[[20, 21], 1::7] = np.nan
    values[10:, 2::11] = np.nan
    return values


def everything(values: np.ndarray, options: TrendOptions = OPTIONS) -> dict[str, np.ndarray]:
    trends, random = series_trends(values, YEARS, options, with_random=True)
    assert random is not None
    return {
        "years": trends.years,
        "slope": trends.slope,
        "theil_sen": trends.theil_sen,
        "lag1": trends.lag1,
        "random": random.slopes,
        "significant": random.significant,
    } | trends.p


@pytest.mark.parametrize("method", ["ar1", "shuffle", "blocks", "phases"])
def test_same_bits_in_any_subset_order_and_number_of_threads(method: str) -> None:
    options = TrendOptions(seed=2, count=99, minimum_years=20, method=method)
    values = many_series(2 * BLOCK + 61)
    whole = everything(values, options)
    order = np.random.default_rng(1).permutation(values.shape[1])
    for columns in (np.arange(7), np.arange(250, 391), order, np.array([400])):
        with dask.config.set(scheduler="synchronous"):
            part = everything(values[:, columns], options)
        for name, found in part.items():
            np.testing.assert_array_equal(found, whole[name][..., columns], err_msg=name)


def test_constant_series_have_no_trend() -> None:
    values = np.stack([np.zeros(50), np.full(50, 0.1), np.full(50, 1e9)], axis=1)
    values[::2, 2] += 1e-7  # rounding
    found = everything(values)
    np.testing.assert_array_equal(found["slope"], 0.0)
    np.testing.assert_array_equal(found["theil_sen"], 0.0)
    np.testing.assert_array_equal(found["ar1"], 1.0)
    np.testing.assert_array_equal(found["shuffle"], 1.0)
    assert np.isnan(found["lag1"]).all()
    assert not found["significant"].any()


def test_straight_line_has_the_smallest_p() -> None:
    values = np.stack([3 + 0.1 * (YEARS - 1971), -1e-5 * YEARS], axis=1)
    found = everything(values)
    np.testing.assert_allclose(found["slope"], [0.1, -1e-5], rtol=1e-9)
    np.testing.assert_array_equal(found["ar1"], 1 / 100)
    np.testing.assert_array_equal(found["shuffle"], 1 / 100)


def test_years_missing_at_the_ends_shorten_a_series() -> None:
    values = np.random.default_rng(3).standard_normal((50, 1))
    short = values.copy()
    short[:1] = np.nan
    short[48:] = np.nan
    alone, _ = series_trends(values[1:48], YEARS[1:48], OPTIONS)
    found, _ = series_trends(short, YEARS, OPTIONS)
    assert found.years[0] == 47
    np.testing.assert_array_equal(found.slope, alone.slope)
    np.testing.assert_array_equal(found.p["ar1"], alone.p["ar1"])


def test_gap_keeps_the_years_where_they_are() -> None:
    line = (0.2 * (YEARS - 1971))[:, None]
    line[[12, 13, 30, 31, 32]] = np.nan
    found, _ = series_trends(line, YEARS, OPTIONS)
    assert found.slope[0] == pytest.approx(0.2, rel=1e-12)
    assert found.theil_sen[0] == pytest.approx(0.2, rel=1e-12)
    line[33] = np.nan  # six of fifty years: more than a tenth
    lost, _ = series_trends(line, YEARS, OPTIONS)
    assert lost.years[0] == 0
    assert np.isnan(lost.slope[0])
    assert np.isnan(lost.p["ar1"][0])


def test_too_few_years_have_no_trend() -> None:
    values = np.random.default_rng(3).standard_normal((50, 2))
    values[20:, 0] = np.nan
    values[19:, 1] = np.nan
    found, _ = series_trends(values, YEARS, OPTIONS)
    np.testing.assert_array_equal(found.years, [20, 0])
    np.testing.assert_array_equal(np.isnan(found.p["ar1"]), [False, True])


def test_all_missing_and_no_series() -> None:
    found, _ = series_trends(np.full((50, 2), np.nan), YEARS, OPTIONS)
    assert np.isnan(found.slope).all()
    none, random = series_trends(np.empty((50, 0)), YEARS, OPTIONS, with_random=True)
    assert none.slope.shape == (0,)
    assert random is not None
    assert random.slopes.shape == (100, 0)


def test_shift_scale_and_sign_do_not_change_p() -> None:
    values = many_series(30)[:, [4, 7, 9]]
    base, _ = series_trends(values, YEARS, OPTIONS)
    turned, _ = series_trends(-1024.0 * values, YEARS, OPTIONS)
    np.testing.assert_allclose(turned.slope, -1024.0 * base.slope, rtol=1e-12)
    for name in ("ar1", "shuffle"):
        np.testing.assert_array_equal(turned.p[name], base.p[name])


def test_strong_trend_is_found_and_significant_share_is_the_level() -> None:
    random = np.random.default_rng(8)
    values = random.standard_normal((50, 40))
    values[:, :20] += 0.1 * np.arange(50)[:, None]
    options = TrendOptions(seed=2, count=999, minimum_years=20)
    found = everything(values, options)
    assert (found["ar1"][:20] <= 0.01).all()
    assert found["significant"][0, :20].all()
    # Of the 1000 trends of a series, observed and randomised, 50 are significant at 5 %.
    np.testing.assert_array_equal(found["significant"].sum(axis=0), 50)
    np.testing.assert_array_equal(found["significant"][0], found["ar1"] <= 0.05)


def test_seed_changes_p_values() -> None:
    values = many_series(12)
    other = TrendOptions(seed=3, count=99, minimum_years=20)
    assert (everything(values)["ar1"] != everything(values, other)["ar1"]).any()


def test_randomised_slopes_are_those_of_randomised_series() -> None:
    """In the unit of the series per year, whatever the test."""
    values = 1e-3 * many_series(9)[:, [4, 5, 7]] - 17.0
    gaps = values.copy()
    gaps[[20, 33]] = np.nan
    for given in (values, gaps):
        there = np.isfinite(given[:, 0])
        drawn = draw(YEARS[there], OPTIONS)
        assert drawn is not None
        _, random = series_trends(given, YEARS, replace(OPTIONS, method="shuffle"), True)
        assert random is not None
        complete = given[there]
        for j in (0, 50, 98):
            fit = np.polyfit(YEARS[there] - 1990.0, complete[drawn.orders[j]], 1)
            np.testing.assert_allclose(random.slopes[j + 1], fit[0], rtol=1e-6, atol=1e-9)
    for method in ("ar1", "blocks", "phases"):
        noise = np.random.default_rng(2).standard_normal((50, 100))
        options = TrendOptions(seed=2, count=400, minimum_years=20, method=method)
        _, random = series_trends(noise, YEARS, options, True)
        assert random is not None
        # Standard deviation of the slope of 50 independent values: sqrt(12 / (50 (50^2 - 1))).
        # Phases lose a tenth of it, as the fit of a line takes from the lowest frequency.
        expected = np.sqrt(12 / (50 * (50**2 - 1)))
        assert random.slopes[1:].std() == pytest.approx(expected, rel=0.12)
        line, _ = series_trends(noise, YEARS, options)
        np.testing.assert_array_equal(random.slopes[0], line.slope)
