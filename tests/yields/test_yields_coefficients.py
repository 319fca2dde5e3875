"""Draws of the response coefficients."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import linalg, stats
from stook.audit.plain.yields import drawn_coefficients
from stook.yields.coefficients import coefficient_draws, correlation_root
from yields_inputs import response

ERRORS = np.array([0.0001, 0.0002, 0.0001, 0.0006, 0.0003, 3e-7])


def correlated() -> list[list[float]]:
    correlation = np.eye(6)
    correlation[4, 5] = correlation[5, 4] = -0.95
    correlation[0, 1] = correlation[1, 0] = 0.4
    return (correlation * np.outer(ERRORS, ERRORS)).tolist()


def test_the_first_row_is_the_central_estimate() -> None:
    model = response()
    draws = coefficient_draws(model, 3, seed=1)
    assert draws["draw"].tolist() == [0, 1, 2, 3]
    assert draws["draw"].dtype == np.int64
    assert list(draws.columns[1:]) == model.coefficient_names
    np.testing.assert_array_equal(draws.iloc[0, 1:], model.coefficient_vector)


def test_no_draws_leave_the_central_estimate() -> None:
    assert len(coefficient_draws(response(), 0, seed=1)) == 1


def test_first_draws_are_the_same_whatever_the_number() -> None:
    few, many = (coefficient_draws(response(), count, seed=1) for count in (5, 50))
    assert few.equals(many.iloc[:6])


def test_draws_depend_on_seed_crop_and_system() -> None:
    draws = [
        coefficient_draws(model, 2, seed).iloc[1:, 1:].to_numpy()
        for model, seed in (
            (response(), 1),
            (response(), 2),
            (response(crop="rice"), 1),
            (response(system="irrigated"), 1),
        )
    ]
    for i, one in enumerate(draws):
        assert all(not np.array_equal(one, other) for other in draws[:i])


def test_draws_have_the_given_mean_and_covariance() -> None:
    """Mean by its standard error; covariance by Bartlett's likelihood-ratio test, scipy."""
    model = response(standard_errors=None, covariance=correlated())
    count = 20_000
    draws = coefficient_draws(model, count, seed=7).iloc[1:, 1:].to_numpy()
    z = (draws - model.coefficient_vector) / ERRORS
    assert np.abs(z.mean(axis=0)).max() < 4 / np.sqrt(count)
    expected = np.array(correlated()) / np.outer(ERRORS, ERRORS)
    found = np.cov(z.T, bias=True)
    ratio = np.linalg.solve(expected, found)
    statistic = count * (np.trace(ratio) - np.linalg.slogdet(ratio)[1] - 6)
    assert stats.chi2(21).sf(statistic) > 0.001
    assert stats.kstest(z[:, 5], "norm").pvalue > 0.001


def test_a_singular_covariance_keeps_its_linear_relation() -> None:
    errors = np.array([0.001, 0.002, 0.0, 0.001, 0.001, 1e-7])
    covariance = np.diag(errors**2)
    covariance[0, 1] = covariance[1, 0] = errors[0] * errors[1]  # fully correlated
    model = response(standard_errors=None, covariance=covariance.tolist())
    away = coefficient_draws(model, 100, seed=3).iloc[1:, 1:].to_numpy() - model.coefficient_vector
    np.testing.assert_allclose(away[:, 1], 2 * away[:, 0], rtol=1e-6, atol=1e-12)
    np.testing.assert_array_equal(away[:, 2], 0)
    assert away[:, 0].std() == pytest.approx(0.001, rel=0.3)


def test_the_root_is_that_of_scipy() -> None:
    """scipy.linalg.sqrtm of the correlation matrix."""
    root, errors = correlation_root(np.array(correlated()))
    np.testing.assert_allclose(errors, ERRORS, rtol=1e-15)
    correlation = np.array(correlated()) / np.outer(ERRORS, ERRORS)
    np.testing.assert_allclose(root, linalg.sqrtm(correlation), atol=2e-12)


def test_same_as_the_plain_path() -> None:
    model = response(standard_errors=None, covariance=correlated())
    found = coefficient_draws(model, 30, seed=9).iloc[:, 1:].to_numpy()
    np.testing.assert_allclose(found, drawn_coefficients(model, 30, seed=9), rtol=1e-9)
