"""Cases whose answer is known exactly, and properties every correction must have."""

from __future__ import annotations

import numpy as np
import pytest
from correct_inputs import WHOLE_YEAR, annual, correct, days, months
from scipy import stats
from stook.grids.missing import Reason

YEARS = (1991, 2000)
AXIS = days(*YEARS)
COUNT = len(AXIS)
PROBABILITY = (np.arange(COUNT) + 0.5) / COUNT
ONE = {**WHOLE_YEAR, "cdf_years": 10, "ratio_cap": 1e9}
METHODS = ("quantile-delta", "quantile", "mean")


def drawn(distribution: object, seed: int) -> np.ndarray:
    """Return the exact quantiles of a distribution at Hazen probabilities, in random order."""
    values = distribution.ppf(PROBABILITY)  # type: ignore[attr-defined]
    return np.random.default_rng(seed).permutation(values)


def mapped(o: np.ndarray, h: np.ndarray, f: np.ndarray, **options: object) -> np.ndarray:
    out, reason, _ = correct(o, h, f, (AXIS, AXIS, AXIS), **{**ONE, **options})
    assert reason == 0
    return out


def test_quantile_delta_of_normals() -> None:
    """N(15,3), N(17,4), N(20,5) give N(18,4): derived from Cannon, Sobie & Murdock 2015."""
    o, h, f = (
        drawn(stats.norm(*parameters), seed)
        for seed, parameters in enumerate([(15, 3), (17, 4), (20, 5)])
    )
    out = mapped(o, h, f)
    np.testing.assert_allclose(np.sort(out), stats.norm(18, 4).ppf(PROBABILITY), atol=1e-9)
    assert (np.argsort(out) == np.argsort(f)).all()


def test_quantile_delta_of_exponentials() -> None:
    """Scales 4, 6, 9 give scale 4 * 9 / 6: derived from Cannon, Sobie & Murdock 2015."""
    o, h, f = (drawn(stats.expon(scale=scale), seed) for seed, scale in enumerate((4.0, 6.0, 9.0)))
    out = mapped(o, h, f, ratio=True)
    np.testing.assert_allclose(np.sort(out), stats.expon(scale=6).ppf(PROBABILITY), rtol=1e-9)


@pytest.mark.parametrize("size", [30])
def test_random_normals_within_sampling_error(size: int) -> None:
    """Mean and spread of random samples: four standard errors of the three samples together."""
    axis = days(1991, 1990 + size)
    random = np.random.default_rng(3)
    o, h, f = (random.normal(*p, len(axis)) for p in [(15, 3), (17, 4), (20, 5)])
    out, _, _ = correct(o, h, f, (axis, axis, axis), **{**ONE, "cdf_years": size})
    error = 4 * np.sqrt((9 + 16 + 25) / len(axis))
    assert abs(out.mean() - 18) < error
    assert abs(out.std() - 4) < error


def test_projection_equal_to_history_gives_the_reference() -> None:
    o, h = drawn(stats.norm(15, 3), 1), drawn(stats.gamma(3, scale=4), 2)
    for method in ("quantile-delta", "quantile"):
        out = mapped(o, h, h, method=method)
        np.testing.assert_allclose(np.sort(out), np.sort(o), atol=1e-12)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("ratio", [False, True])
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_identity_when_model_equals_reference(method: str, ratio: bool, dtype: type) -> None:
    f_axis = days(1981, 2030, "standard")
    f = (5 + np.random.default_rng(1).gamma(2, 3, len(f_axis))).astype(dtype)
    f[::7] = np.round(f[::7])  # ties
    inside = f_axis.years(1991, 2020)
    axes = (f_axis.part(inside), f_axis.part(inside), f_axis)
    out, reason, _ = correct(f[inside], f[inside], f, axes, ratio, method=method)
    assert reason == 0
    np.testing.assert_allclose(out, f, rtol=2e-7 if dtype == np.float32 else 1e-12)


def test_changes_of_quantiles_are_kept() -> None:
    """Additive: as a difference; ratio: as a factor; at every probability that is stored."""
    o, h, f = (
        drawn(stats.gamma(shape, scale=scale), seed)
        for seed, (shape, scale) in enumerate([(2, 3), (3, 2.5), (3.5, 3)])
    )
    for p in np.linspace(0.0005, 0.9995, 400):
        qo, qh, qf = (np.quantile(values, p, method="hazen") for values in (o, h, f))
        for ratio, expected in ((False, qo + qf - qh), (True, qo * qf / qh)):
            if p == 0.0005:
                mapped_values = {r: mapped(o, h, f, ratio=r) for r in (False, True)}
            found = np.quantile(mapped_values[ratio], p, method="hazen")
            # between two values a quantile of ratios is not the ratio of quantiles
            assert found == pytest.approx(expected, abs=2e-3 if ratio else 1e-9)
    at = np.sort(o) * np.sort(f) / np.sort(h)
    np.testing.assert_allclose(np.sort(mapped_values[True]), at, rtol=1e-12)


def test_constant_extrapolation_of_quantile_mapping() -> None:
    """Beyond the calibrated range the correction of the end is kept (Boe et al. 2007)."""
    o, h = drawn(stats.uniform(5, 10), 1), drawn(stats.uniform(0, 10), 2)
    f = h.copy()
    f[:4] = [-3.0, h.min(), h.max(), 14.0]
    out = mapped(o, h, f, method="quantile")
    low, high = o.min() - h.min(), o.max() - h.max()
    np.testing.assert_allclose(out[:4], [-3 + low, o.min(), o.max(), 14 + high], atol=1e-12)
    ratio = mapped(o, h + 1, f + 1, method="quantile", ratio=True)
    assert ratio[3] == pytest.approx(15 * o.max() / (h.max() + 1), rel=1e-12)


def test_mean_method_by_hand() -> None:
    o, h = np.full(COUNT, 6.0), np.full(COUNT, 4.0)
    f = np.arange(COUNT) % 11.0
    np.testing.assert_allclose(mapped(o, h, f, method="mean"), f + 2)
    np.testing.assert_allclose(mapped(o, h, f, method="mean", ratio=True), f * 1.5)
    np.testing.assert_allclose(mapped(o, h, f, method="mean", ratio=True, ratio_cap=1.25), f * 1.25)


def test_cap_is_counted() -> None:
    o, h = drawn(stats.uniform(1, 2), 1), drawn(stats.uniform(1, 2), 2)
    f = 1.5 * h
    f[:3] = [60.0, 70.0, 80.0]
    options = {**ONE, "ratio_cap": 2.0}
    out, _, capped = correct(o, h, f, (AXIS, AXIS, AXIS), ratio=True, **options)
    assert capped == 3
    top = np.sort(o)[-3:]
    np.testing.assert_allclose(np.sort(out)[-3:], 2 * top)


def test_ties_get_one_value_of_the_middle_rank() -> None:
    """Ranks 1..5 of (1, 2, 2, 2, 9) are 1, 3, 3, 3, 5; repeated so that windows are full."""
    axis = annual(1991, 2010)
    f = np.tile([1.0, 2.0, 2.0, 2.0, 9.0], 4)
    o = np.linspace(10, 29, 20)
    out, reason, _ = correct(o, f, f, (axis, axis, axis), cdf_years=20)
    assert reason == 0
    # Middle ranks of the twenty: 1 -> 2.5, 2 -> 10.5, 9 -> 18.5; o there is 11.5, 19.5, 27.5.
    expected = {1.0: 11.5, 2.0: 19.5, 9.0: 27.5}
    np.testing.assert_allclose(out, [expected[value] for value in f])


def test_constant_series() -> None:
    o, h, f = np.full(COUNT, 3.0), np.full(COUNT, 5.0), np.full(COUNT, 6.0)
    for method in METHODS:
        np.testing.assert_allclose(mapped(o, h, f, method=method), 4.0)
        np.testing.assert_allclose(mapped(o, h, f, method=method, ratio=True), 3.6)


def test_no_range_at_all_stays_none() -> None:
    """A ratio of nothing to nothing is one; of something to nothing it is the cap."""
    o, h, f = np.full(COUNT, 2.0), np.zeros(COUNT), np.zeros(COUNT)
    np.testing.assert_array_equal(mapped(o, h, f, ratio=True), 2.0)
    np.testing.assert_array_equal(mapped(o, h, f + 1, ratio=True, ratio_cap=3.0), 6.0)


def test_missing_values_stay_missing_and_do_not_count() -> None:
    random = np.random.default_rng(5)
    o, f = random.normal(15, 3, COUNT), random.normal(17, 4, COUNT)
    gaps = random.random(COUNT) < 0.2
    with_gaps = np.where(gaps, np.nan, f)
    out = mapped(o, with_gaps, with_gaps)
    np.testing.assert_array_equal(np.isnan(out), gaps)
    axis = AXIS.part(~gaps)
    left, _, _ = correct(o, f[~gaps], f[~gaps], (AXIS, axis, axis), **ONE)
    np.testing.assert_array_equal(out[~gaps], left)


@pytest.mark.parametrize("which", [0, 1, 2])
def test_too_few_values(which: int) -> None:
    """One window below the least number is enough to give the pixel up, with its reason."""
    series = [np.random.default_rng(which).normal(10, 3, COUNT) for _ in range(3)]
    summer = (AXIS.position > 0.4) & (AXIS.position < 0.5)
    series[which][summer & (AXIS.year > 1992)] = np.nan
    options = {"cdf_years": 10, "minimum_values": 100}
    out, reason, _ = correct(*series, (AXIS, AXIS, AXIS), **options)
    assert reason == int(Reason.TOO_FEW_VALUES)
    assert np.isnan(out).all()
    out, reason, _ = correct(*series, (AXIS, AXIS, AXIS), cdf_years=10, minimum_values=20)
    assert reason == 0
    series[which][:] = np.nan
    _, reason, _ = correct(*series, (AXIS, AXIS, AXIS), **options)
    assert reason == int(Reason.MISSING_INPUT)


def test_monthly_and_annual_series() -> None:
    for axis_of, groups in ((months, 12), (annual, 1)):
        o_axis, f_axis = axis_of(1981, 2010), axis_of(1951, 2100)
        inside = f_axis.years(1981, 2010)
        o = 10.0 + o_axis.month + np.random.default_rng(1).normal(0, 1, len(o_axis))
        f = 13.0 + 2.0 * f_axis.month + np.random.default_rng(2).normal(0, 1, len(f_axis))
        axes = (o_axis, f_axis.part(inside), f_axis)
        out, reason, _ = correct(o, f[inside], f, axes)
        assert reason == 0
        for month in np.unique(f_axis.month):
            mine = inside & (f_axis.month == month)
            assert out[mine].mean() == pytest.approx(o[o_axis.month == month].mean(), abs=0.2)
        assert len(np.unique(f_axis.month)) == groups


def test_trend_of_the_model_is_kept() -> None:
    """A warming of 4 K over 120 years comes through the moving windows of years.

    Not exactly: within a window late years have high ranks, and o - h depends on the rank.
    """
    axis = days(1981, 2100, "360_day")
    random = np.random.default_rng(7)
    inside = axis.years(1991, 2020)
    f = 12 + (axis.year - 1981) / 30 + random.normal(0, 4, len(axis))
    o = 10 + random.normal(0, 3, inside.sum())
    out, _, _ = correct(o, f[inside], f, (axis.part(inside), axis.part(inside), axis))
    late = axis.year >= 2071
    change = out[late].mean() - out[inside].mean()
    assert change == pytest.approx(f[late].mean() - f[inside].mean(), abs=0.05)
