"""The array kernels: cases that can be checked by hand, identities, and nasty arrays."""

from __future__ import annotations

import numpy as np
import pytest
from stook.trend import kernels


def test_line_and_flat_line() -> None:
    years = np.array([2001.0, 2002, 2003, 2004])
    values = np.stack([2 + 3 * (years - 2001), np.full(4, 7.5)], axis=1)
    slopes, residuals = kernels.linear_fit(values, years)
    np.testing.assert_allclose(slopes, [3.0, 0.0], atol=1e-14)
    np.testing.assert_allclose(residuals, 0.0, atol=1e-13)


def test_slope_by_hand() -> None:
    # x = -1.5, -0.5, 0.5, 1.5; y = 1, 3, 2, 6: sum x y = 7; sum x^2 = 5.
    slopes, residuals = kernels.linear_fit(np.array([[1.0], [3], [2], [6]]), np.arange(4.0))
    assert slopes[0] == pytest.approx(1.4, rel=1e-14)
    np.testing.assert_allclose(residuals[:, 0], [0.1, 0.7, -1.7, 0.9], atol=1e-14)


def test_uneven_years_by_hand() -> None:
    # Years 0, 1, 3 (mean 4/3), y = 0, 1, 3 is the line of slope 1.
    slopes, _ = kernels.linear_fit(np.array([[0.0], [1], [3]]), np.array([0.0, 1, 3]))
    assert slopes[0] == pytest.approx(1.0, rel=1e-14)


def test_large_mean_does_not_hurt() -> None:
    years = np.arange(1950.0, 2020)
    noise = np.random.default_rng(1).standard_normal((70, 1))
    small, _ = kernels.linear_fit(noise, years)
    large, _ = kernels.linear_fit(noise + 2.0**20, years)
    np.testing.assert_allclose(large, small, rtol=1e-8)


def test_theil_sen_by_hand() -> None:
    # Slopes of pairs of 0, 1, 10, 3: 1, 5, 1, 9, 1, -7; the median is 1, whatever the outlier.
    slopes = kernels.theil_sen(np.array([[0.0], [1], [10], [3]]), np.arange(4.0))
    assert slopes[0] == 1.0


def test_residual_sums_by_hand() -> None:
    squares, products = kernels.residual_sums(np.array([[1.0], [-2], [3]]))
    assert (squares[0], products[0]) == (14.0, -8.0)


def test_lag1_correction_and_limits() -> None:
    # (n r + 2) / (n - 4): n = 54, r = 0.2: 12.8 / 50.
    assert kernels.corrected_lag1(0.2, 54) == pytest.approx(0.256, rel=1e-14)
    assert kernels.corrected_lag1(0.99, 54) == 0.95
    assert kernels.corrected_lag1(-0.99, 54) == -0.95


def test_studentised_slope_of_independent_residuals_is_the_usual_t() -> None:
    # Residuals with products such that the corrected correlation is 0: r = -2/n.
    n, slope, squares = 10, 0.3, 4.0
    lag1, statistic = kernels.lag1_and_statistic(
        np.array([slope]), np.array([squares]), np.array([-2 / n * squares]), n
    )
    spread = n * (n**2 - 1) / 12
    assert lag1[0] == pytest.approx(0.0, abs=1e-15)
    assert statistic[0] == pytest.approx(slope**2 / (squares / (n - 2) / spread), rel=1e-13)


def test_no_residuals_are_an_infinite_statistic() -> None:
    lag1, statistic = kernels.lag1_and_statistic(np.ones(1), np.zeros(1), np.zeros(1), 20)
    assert np.isnan(lag1[0])
    assert np.isinf(statistic[0])


def test_whitening_and_colouring_give_the_series_back() -> None:
    residuals = np.random.default_rng(2).standard_normal((30, 3))
    residuals -= residuals.mean(axis=0)
    rho = np.array([-0.5, 0.0, 0.8])
    shocks = kernels.innovations(residuals, rho)
    np.testing.assert_allclose(shocks.mean(axis=0), 0.0, atol=1e-15)
    raw = residuals.copy()
    raw[0] *= np.sqrt(1 - rho**2)
    raw[1:] -= rho * residuals[:-1]
    again = np.empty_like(residuals)
    again[0] = (shocks + raw.mean(axis=0))[0] / np.sqrt(1 - rho**2)
    for t in range(1, 30):
        again[t] = rho * again[t - 1] + (shocks + raw.mean(axis=0))[t]
    np.testing.assert_allclose(again, residuals, atol=1e-13)


@pytest.mark.parametrize("n", [5, 6, 7, 8, 9, 41])
def test_surrogates_by_their_definition(n: int) -> None:
    """The closed forms of the sums against surrogates written out and fitted."""
    random = np.random.default_rng(n)
    shocks = np.round(1e6 * random.standard_normal((n, 4)))
    rho = np.array([-0.9, 0.0, 0.5, 0.95])
    orders = np.stack([random.permutation(n) for _ in range(20)])
    slopes = np.stack([(2 * np.arange(n) - n + 1.0) @ shocks[order] for order in orders])
    statistics = np.empty_like(slopes)
    kernels.ar1_surrogates(shocks, rho, orders, slopes, statistics)
    for j, order in enumerate(orders):
        series = np.empty((n, 4))
        series[0] = shocks[order[0]] / np.sqrt(1 - rho**2)
        for t in range(1, n):
            series[t] = rho * series[t - 1] + shocks[order[t]]
        slope, residuals = kernels.linear_fit(series, np.arange(float(n)))
        _, statistic = kernels.lag1_and_statistic(slope, *kernels.residual_sums(residuals), n)
        np.testing.assert_allclose(slopes[j], slope, rtol=1e-9, atol=1e-6)
        np.testing.assert_allclose(statistics[j], statistic, rtol=1e-7, atol=1e-10)


def test_counts_are_two_sided_and_skip_missing() -> None:
    random = np.array([[1.0, -3.0], [-2.0, np.nan], [2.0, 3.0]])
    np.testing.assert_array_equal(kernels.count_as_large(random, np.array([-2.0, 3.0])), [2, 2])


def test_area_sums_do_not_depend_on_the_cut() -> None:
    random = np.random.default_rng(4)
    values, weights = random.standard_normal((6, 50)), random.random(50)
    whole, cut = np.zeros(6), np.zeros(6)
    kernels.area_sums(values, weights, whole)
    for part in (slice(0, 7), slice(7, 31), slice(31, 50)):
        kernels.area_sums(np.ascontiguousarray(values[:, part]), weights[part], cut)
    np.testing.assert_array_equal(cut, whole)
    np.testing.assert_allclose(whole, values @ weights, rtol=1e-12)


def test_arrays_that_are_not_contiguous_or_single() -> None:
    values = np.random.default_rng(5).standard_normal((2, 24)).T  # columns far apart
    years = np.arange(24.0)
    together, _ = kernels.linear_fit(values, years)
    for i in range(2):
        alone, _ = kernels.linear_fit(values[:, [i]], years)
        np.testing.assert_array_equal(alone, together[[i]])
