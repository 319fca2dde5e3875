"""Statistics of the evaluation against SciPy, NumPy and by hand; the table over the crop area."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from correct_inputs import days
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from stook.correct.block import season_numbers
from stook.correct.kernels_order import BINS, DIGITS, PLACE, sort_places
from stook.correct.kernels_scores import CHANGES, SCORES, SEASONS, change_pixels, score_pixels
from stook.correct.setup import HALVES
from stook.correct.summary import summarise, weighted_summary, worse_half

AXIS = days(2001, 2004, "standard")
SEASON = season_numbers(AXIS)
QUICK = settings(derandomize=True, deadline=None, max_examples=20)


def scratch(length: int) -> tuple[np.ndarray, ...]:
    return (
        np.empty(length, np.float32),
        np.empty(length, np.uint64),
        np.empty(length, np.uint64),
        np.empty((DIGITS, BINS), np.int64),
    )


@QUICK
@given(
    seed=st.integers(0, 2**32),
    size=st.integers(1, 400),
    kind=st.sampled_from(["normal", "ties", "signs", "tiny", "alike", "gaps"]),
    dtype=st.sampled_from([np.float32, np.float64]),
)
def test_radix_sort_is_a_stable_sort(seed: int, size: int, kind: str, dtype: type) -> None:
    random = np.random.default_rng(seed)
    values = random.standard_normal(size)
    values = {
        "normal": values,
        "ties": np.round(values),
        "signs": random.choice([-0.0, 0.0, -1.0, 1.0, np.inf, -np.inf], size),
        "tiny": values * 1e-42,
        "alike": 1 + values * 1e-12,  # equal as float32
        "gaps": np.where(random.random(size) < 0.3, np.nan, values),
    }[kind].astype(dtype)
    arrays = scratch(size)
    count = sort_places(values, *arrays)
    places = (arrays[1][:count] & PLACE).astype(int)
    expected = np.argsort(values, kind="stable")[:count]
    assert count == np.isfinite(values).sum() + np.isinf(values).sum()
    np.testing.assert_array_equal(places, expected)


def scores_of(o: np.ndarray, raw: np.ndarray, corrected: np.ndarray, wet: float) -> np.ndarray:
    out = np.empty((1, 2, len(SCORES), len(SEASONS)))
    series = (values[None, :] for values in (o, raw, corrected))
    score_pixels(*series, SEASON, SEASON, wet, scratch(len(AXIS)), out)
    return out[0]


def test_scores_by_numpy_and_scipy() -> None:
    random = np.random.default_rng(1)
    o, raw, corrected = random.gamma(0.6, 5, (3, len(AXIS)))
    o[random.random(len(o)) < 0.3] = 0
    raw[:20] = np.nan
    found = scores_of(o, raw, corrected, 1.0)
    for number in range(len(SEASONS)):
        inside = np.ones(len(AXIS), bool) if number == 4 else number == SEASON
        reference = o[inside]
        for stage, series in enumerate((raw, corrected)):
            model = series[inside & ~np.isnan(series)]
            expected = [
                model.mean() - reference.mean(),
                np.quantile(model, 0.05, method="hazen")
                - np.quantile(reference, 0.05, method="hazen"),
                np.quantile(model, 0.95, method="hazen")
                - np.quantile(reference, 0.95, method="hazen"),
                100 * ((model >= 1).mean() - (reference >= 1).mean()),
                stats.ks_2samp(model, reference, method="asymp").statistic,
            ]
            np.testing.assert_allclose(found[stage, :, number], expected, rtol=1e-9, atol=1e-12)


@QUICK
@given(st.integers(0, 2**32), st.integers(1, 6))
def test_distance_of_tied_samples(seed: int, values: int) -> None:
    random = np.random.default_rng(seed)
    o, raw, corrected = random.integers(0, values, (3, len(AXIS))).astype(float)
    found = scores_of(o, raw, corrected, np.nan)
    for stage, series in enumerate((raw, corrected)):
        expected = stats.ks_2samp(series, o, method="asymp").statistic
        assert found[stage, 4, 4] == pytest.approx(expected, abs=1e-12)
    assert np.isnan(found[:, 3]).all()  # no wet days


def test_seasons_are_those_of_the_months() -> None:
    months = {0: {12, 1, 2}, 1: {3, 4, 5}, 2: {6, 7, 8}, 3: {9, 10, 11}}
    for number, expected in months.items():
        assert set(AXIS.month[number == SEASON]) == expected


def test_too_few_values_of_a_season_give_no_score() -> None:
    o = np.where(SEASON == 2, np.nan, 1.0)
    found = scores_of(o, np.ones(len(AXIS)), np.ones(len(AXIS)), np.nan)
    assert np.isnan(found[:, :, 2]).all()
    assert (found[:, 0, [0, 1, 3, 4]] == 0).all()


@pytest.mark.parametrize("percent", [False, True])
def test_changes_by_hand(percent: bool) -> None:
    random = np.random.default_rng(2)
    raw = random.gamma(2, 3, len(AXIS))
    later = AXIS.year >= 2003
    corrected = np.where(later, 1.5 * raw, raw)
    split = int(np.flatnonzero(later)[0])
    starts, ends = np.array([0, split, 0]), np.array([split, len(AXIS), 0])
    out = np.empty((1, 2, 2, len(CHANGES), len(SEASONS)))
    season = SEASON
    args = (raw[None, :], corrected[None, :], season, starts, ends, percent)
    change_pixels(*args, scratch(len(AXIS)), out)
    for number in range(len(SEASONS)):
        inside = np.ones(len(AXIS), bool) if number == 4 else season == number
        for stage, series in enumerate((raw, corrected)):
            then, late = series[inside & ~later], series[inside & later]
            pairs = [(then.mean(), late.mean())]
            for p in (0.05, 0.95):
                pairs.append(tuple(np.quantile(x, p, method="hazen") for x in (then, late)))
            expected = [100 * (b / a - 1) if percent else b - a for a, b in pairs]
            np.testing.assert_allclose(out[0, stage, 0, :, number], expected, rtol=1e-9)
    assert np.isnan(out[0, :, 1]).all()  # a period the simulation does not hold


def test_the_worse_half_counts_with_its_sign() -> None:
    samples = [*HALVES, "even years"]
    values = xr.DataArray([[1.0, -3, np.nan], [-2, 2, 4], [9, 9, 9]], dims=("sample", "lon"))
    found = worse_half(values.assign_coords(sample=samples))
    np.testing.assert_array_equal(found, [-2, -3, 4])


def test_weighted_summary() -> None:
    values = np.array([[1.0, 2.0, np.nan], [4.0, 8.0, 100.0]])
    weights = np.array([[1.0, 1.0, 5.0], [1.0, 1.0, 0.0]])
    mean, low, high = weighted_summary(values, weights)
    assert (mean, low, high) == (15 / 4, 1.0, 8.0)
    many = np.arange(1001.0)
    found = weighted_summary(many, np.ones(1001))
    expected = [500, *np.quantile(many, [0.05, 0.95], method="hazen")]
    np.testing.assert_allclose(found, expected)
    assert np.isnan(weighted_summary(values, 0 * weights)).all()


def test_table_joins_tiles_and_weights_by_crop_area() -> None:
    coords = {"sample": list(HALVES), "stage": ["raw", "corrected"], "season": list(SEASONS)}
    dims = ("sample", "stage", "season", "lat", "lon")
    tiles = []
    for lat, value in ((1.0, 2.0), (2.0, 6.0)):
        grid = np.full((2, 2, 5, 1, 2), value)
        variable = xr.Variable(dims, grid, {"units": "degC"})
        tiles.append(
            xr.Dataset({"mean_bias_tasmin": variable}, {**coords, "lat": [lat], "lon": [0.0, 1.0]})
        )
    area = xr.DataArray(
        [[30.0, 0], [10.0, 0]], {"lat": [1.0, 2.0], "lon": [0.0, 1.0]}, ("lat", "lon")
    )
    table = summarise("ALDER-ESM_high_r1", tiles, area)
    assert len(table) == 10
    assert (table["mean"] == 3.0).all()
    assert set(table["unit"]) == {"degC"}
    assert set(table["season"]) == set(SEASONS)
