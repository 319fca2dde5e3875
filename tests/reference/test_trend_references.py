"""Trends against statsmodels, scipy, pymannkendall and published figures."""

from __future__ import annotations

import numpy as np
import pymannkendall
import pytest
import statsmodels.api as sm
from scipy import stats
from statsmodels.stats.multitest import multipletests
from stook.trend import kernels
from stook.trend.blocktest import Detrended
from stook.trend.discovery import benjamini_hochberg
from stook.trend.field import EVERYWHERE, Field
from stook.trend.randomise import probability
from stook.trend.series import RandomTrends, TrendOptions, series_trends

YEARS = np.arange(1950, 2010)


def series(count: int, seed: int) -> np.ndarray:
    """Return series (60 years) with rising trends and some spread."""
    random = np.random.default_rng(seed)
    noise = random.standard_normal((60, count))
    return noise + np.linspace(-0.05, 0.05, count) * np.arange(60)[:, None]


def test_slopes_and_spread_against_least_squares() -> None:
    """statsmodels OLS and scipy.stats.linregress."""
    values = series(8, 1)
    slopes, residuals = kernels.linear_fit(values, YEARS.astype(float))
    squares, _ = kernels.residual_sums(residuals)
    design = sm.add_constant(YEARS - 1980.0)
    for i in range(8):
        fit = sm.OLS(values[:, i], design).fit()
        line = stats.linregress(YEARS, values[:, i])
        assert slopes[i] == pytest.approx(fit.params[1], rel=1e-10)
        assert slopes[i] == pytest.approx(line.slope, rel=1e-9)
        error = np.sqrt(squares[i] / 58 / (60 * (60**2 - 1) / 12))
        assert error == pytest.approx(fit.bse[1], rel=1e-10)
        assert error == pytest.approx(line.stderr, rel=1e-9)
        np.testing.assert_allclose(residuals[:, i], fit.resid, atol=1e-11)


def test_studentised_slope_against_statsmodels() -> None:
    """With the correlation factor (1 + r)/(1 - r) taken out, the statistic is OLS's t squared."""
    values = series(8, 2)
    found = Detrended.of(values)
    factor = (1 + found.lag1) / (1 - found.lag1)
    for i in range(8):
        fit = sm.OLS(values[:, i], sm.add_constant(np.arange(60.0))).fit()
        assert found.statistic[i] * factor[i] == pytest.approx(fit.tvalues[1] ** 2, rel=1e-9)
        raw = sm.tsa.acf(fit.resid, nlags=1, adjusted=False)[1]  # residuals have mean 0
        assert found.lag1[i] == pytest.approx((60 * raw + 2) / 56, rel=1e-9)


def test_lag1_correction_takes_out_the_bias() -> None:
    """Mean of 4,000 estimates from detrended AR(1) series of known correlation, statsmodels."""
    for rho in (0.0, 0.3, 0.6):
        np.random.seed(5)  # noqa: NPY002 - what statsmodels draws from
        process = sm.tsa.ArmaProcess([1, -rho], [1])
        values = process.generate_sample((60, 4000), axis=0, burnin=100)
        found = Detrended.of(values).lag1
        raw = np.mean(found) * 56 / 60 - 2 / 60
        # Standard error of the mean about 0.002; the raw estimate is 0.03 to 0.07 too small.
        assert np.mean(found) == pytest.approx(rho, abs=0.02)
        assert abs(raw - rho) > 0.03


def test_theil_sen_against_scipy() -> None:
    """scipy.stats.theilslopes, also with uneven years and ties."""
    values = series(6, 3)
    values[:, 2] = np.rint(values[:, 2])
    for years in (YEARS, np.delete(np.arange(1950, 2013), [4, 5, 30])):
        found = kernels.theil_sen(values, years.astype(float))
        expected = [stats.theilslopes(values[:, i], years).slope for i in range(6)]
        np.testing.assert_allclose(found, expected, rtol=1e-10, atol=1e-15)


def test_direction_against_mann_kendall() -> None:
    """pymannkendall: the same sign, and the same verdict on independent years but at the edge."""
    values = series(40, 4)
    trends, _ = series_trends(values, YEARS, TrendOptions(1, 999, 20))
    agreed = 0
    for i in range(40):
        result = pymannkendall.original_test(values[:, i])
        assert trends.theil_sen[i] == pytest.approx(result.slope, rel=1e-10)
        if result.p < 0.01:
            assert np.sign(trends.slope[i]) == np.sign(result.slope)
            assert trends.p["shuffle"][i] < 0.05
            assert result.trend == ("increasing" if trends.slope[i] > 0 else "decreasing")
            agreed += 1
        if result.p > 0.2:
            assert trends.p["shuffle"][i] > 0.05
    assert agreed > 10


def test_shuffled_p_against_scipy() -> None:
    """scipy.stats.permutation_test of the correlation with time; 9,999 permutations each."""
    values = series(10, 5)
    trends, _ = series_trends(values, YEARS, TrendOptions(1, 9999, 20))
    for i in range(10):
        y = values[:, i]

        def slope(x: np.ndarray, axis: int = -1) -> np.ndarray:
            return np.sum((YEARS - YEARS.mean()) * x, axis=axis)

        result = stats.permutation_test(
            (y,),
            slope,
            permutation_type="pairings",
            n_resamples=9999,
            vectorized=True,
            rng=np.random.default_rng(i),
        )
        # Both are estimates of one p: five standard errors of their difference.
        error = np.sqrt(2 * result.pvalue * (1 - result.pvalue) / 9999)
        assert trends.p["shuffle"][i] == pytest.approx(result.pvalue, abs=5 * error + 2e-4)


def test_shuffled_p_of_a_short_series_is_exact() -> None:
    """All 5,040 orders of seven values by scipy, against many random ones."""
    y = np.array([1.0, 0.2, 2.1, 1.1, 2.9, 1.9, 2.2])
    x = np.arange(7) - 3.0
    exact = stats.permutation_test(
        (y,),
        lambda one, axis: np.sum(x * one, axis=axis),
        permutation_type="pairings",
        n_resamples=np.inf,
        vectorized=True,
    ).pvalue
    years = np.arange(2001, 2008)
    trends, _ = series_trends(y[:, None], years, TrendOptions(1, 20000, 5))
    assert trends.p["shuffle"][0] == pytest.approx(exact, abs=5 * np.sqrt(exact / 20000))


def test_p_formula() -> None:
    """Phipson & Smyth 2010, Stat. Appl. Genet. Mol. Biol. 9, 39: m = 999, b = 0 -> 0.001."""
    assert probability(0, 999) == 0.001


def test_benjamini_hochberg_against_statsmodels_and_scipy() -> None:
    random = np.random.default_rng(6)
    for size in (1, 2, 7, 100, 1000):
        for power in (1, 3):
            p = np.round(random.random(size) ** power, 3).clip(0.001)  # ties, as of 999 surrogates
            for alpha in (0.05, 0.1):
                found = benjamini_hochberg(p, alpha)
                expected = multipletests(p, alpha, method="fdr_bh")[0]
                np.testing.assert_array_equal(found, expected)
                # scipy gives adjusted p-values; the last bit of its division is given room.
                adjusted = stats.false_discovery_control(p, method="bh")
                np.testing.assert_array_equal(found, adjusted <= alpha * (1 + 1e-12))


def test_four_value_trap() -> None:
    """p = (.030, .040, .041, .042) at .05: the rule takes the LARGEST rank that passes: all four.

    Benjamini & Hochberg 1995, JRSS B 57, 289-300; derived by hand.
    """
    p = np.array([0.030, 0.040, 0.041, 0.042])
    assert benjamini_hochberg(p, 0.05).all()
    assert multipletests(p, 0.05, method="fdr_bh")[0].all()


@pytest.mark.parametrize(
    ("tests", "needed", "p"), [(100, 10, 0.0282), (30, 5, None), (1000, 63, None)]
)
def test_local_tests_of_independent_pixels(tests: int, needed: int, p: float | None) -> None:
    """How many of N independent local tests at 5 % make a field significant at 5 %.

    Livezey & Chen 1983, Mon. Weather Rev. 111, 46-59; binomial table, derived. The field test on
    fields of independent marks comes to the same number.
    """
    assert stats.binom.sf(needed - 1, tests, 0.05) <= 0.05 < stats.binom.sf(needed - 2, tests, 0.05)
    if p is not None:
        assert stats.binom.sf(needed - 1, tests, 0.05) == pytest.approx(p, abs=5e-5)
        assert stats.binom.sf(needed - 2, tests, 0.05) == pytest.approx(0.0631, abs=5e-5)
    random = np.random.default_rng(tests)
    count = 4999
    marks = random.random((count + 1, tests)) < 0.05
    options = TrendOptions(1, count, 20)
    found = []
    for extra in (needed - 2, needed):
        marks[0] = np.arange(tests) < extra
        sums = Field([], YEARS, count)
        slopes = np.zeros((count + 1, tests))
        sums.add(series(tests, 1), RandomTrends(slopes, marks), *ones(tests))
        table = sums.table("x", "all", 1.0, 10.0, options).set_index("region")
        found.append(table.loc[EVERYWHERE, "share_p"])
    assert found[1] <= 0.05 < found[0]


def ones(tests: int) -> tuple[np.ndarray, np.ndarray]:
    """Return one unit of area and no region for each pixel."""
    return np.ones(tests, dtype=np.int64), np.full(tests, -1)
