"""The arcsine and the single sine of the season kernels."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numba import njit
from scipy import integrate
from stook.season.sine import arccosine, part_above


@njit
def arccosines(x: np.ndarray) -> np.ndarray:
    result = np.empty_like(x)
    for i in range(x.size):
        result[i] = arccosine(x[i])
    return result


def test_arccosine_against_the_library_of_the_machine() -> None:
    """math.acos; two units in the last place."""
    random = np.random.default_rng(1)
    x = np.concatenate(
        [random.uniform(-1, 1, 20_000), [-1, -0.5, 0, 0.5, 1], 1 - 10.0 ** -np.arange(1, 16)]
    )
    expected = np.array([math.acos(value) for value in x])
    np.testing.assert_allclose(arccosines(x), expected, rtol=4.5e-16, atol=0)


def test_arccosine_does_not_depend_on_the_place_in_an_array() -> None:
    x = np.random.default_rng(2).uniform(-1, 1, 1003)
    whole = arccosines(x)
    for start in (1, 2, 3, 5, 998, 1002):
        assert np.array_equal(arccosines(x[start:].copy()), whole[start:])


@pytest.mark.parametrize(
    ("low", "high", "threshold"), [(7, 14, 12), (10, 30, 12), (-3, 31, 30.9), (22, 38, 29)]
)
def test_part_above_is_the_area_under_the_sine(low: float, high: float, threshold: float) -> None:
    """scipy.integrate.quad over one day of the sine itself."""
    mean, half = (low + high) / 2, (high - low) / 2
    area, _ = integrate.quad(
        lambda t: max(mean + half * math.sin(2 * math.pi * t) - threshold, 0),
        0,
        1,
        limit=500,
        points=[
            t % 1
            for t in (
                math.asin((threshold - mean) / half) / (2 * math.pi),
                0.5 - math.asin((threshold - mean) / half) / (2 * math.pi),
            )
        ],
    )
    assert call_part(mean - threshold, half) == pytest.approx(area, abs=1e-9)


@njit
def call_part(excess: float, half: float) -> float:
    return part_above(excess, half)
