"""The exponential of the yields stage."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
from numba import njit
from stook.yields import exponential as module
from stook.yields.exponential import exponential


@njit
def exponentials(x: np.ndarray) -> np.ndarray:
    result = np.empty_like(x)
    for i in range(x.size):
        result[i] = exponential(x[i])
    return result


def test_against_the_library_of_the_machine() -> None:
    """math.exp, within one unit in the last place."""
    random = np.random.default_rng(1)
    x = np.concatenate(
        [random.normal(0, 1, 20_000), random.uniform(-707, 708, 20_000), [0.0, -0.0, 1e-300, 1.0]]
    )
    expected = np.array([math.exp(value) for value in x])
    assert np.max(np.abs(exponentials(x) - expected) / np.spacing(expected)) <= 1


def test_error_of_the_polynomial() -> None:
    """Exact arithmetic: the polynomial itself is off by less than 2e-17 of the exponential."""
    coefficients = [Fraction(getattr(module, f"_C{i}")) for i in range(10)]
    limit = Fraction(math.log(2) / 2)
    for step in range(-20, 21):
        r = limit * Fraction(step, 20)
        polynomial = 1 + r + r**2 * sum(c * r**i for i, c in enumerate(coefficients))
        series = sum(r**i / math.factorial(i) for i in range(30))
        assert abs(float(polynomial / series - 1)) < 2e-17


def test_does_not_depend_on_the_place_in_an_array() -> None:
    x = np.random.default_rng(2).normal(0, 3, 1003)
    whole = exponentials(x)
    for start in (1, 2, 3, 5, 998, 1002):
        assert np.array_equal(exponentials(x[start:].copy()), whole[start:])


def test_ends() -> None:
    found = exponentials(np.array([np.nan, 1e9, np.inf, -1e9, -np.inf]))
    assert np.isnan(found[0])
    assert found[1] == found[2] == exponentials(np.array([709.0]))[0] > 8e307
    assert found[3] == found[4] == exponentials(np.array([-708.0]))[0] < 4e-308
    assert found[3] > 0
