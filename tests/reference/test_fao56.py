"""Vapour pressure against Allen et al. 1998, FAO Irrigation and Drainage Paper 56."""

from __future__ import annotations

import numpy as np
import pytest
from numba import njit
from stook.audit.plain.season import vapour_pressure_deficit as plain_deficit
from stook.season.kernels import (
    saturation_pressure,
    season_vapour_pressure_deficits,
    vapour_pressure_deficit,
)


@njit(error_model="numpy")
def saturation(temperature: float) -> float:
    return saturation_pressure(temperature)


@njit(error_model="numpy")
def deficit(low: float, high: float, humidity: float) -> float:
    return vapour_pressure_deficit(low, high, humidity)


@pytest.mark.parametrize(
    ("temperature", "expected"),
    [
        # Equation 11; 25 degC stands in the paper's table as 3.168, the others follow from it.
        (0, 0.6108),
        (10, 1.2280),
        (15, 1.7053),
        (20, 2.3383),
        (25, 3.1678),
        (30, 4.2431),
        (35, 5.6227),
        (40, 7.3756),
    ],
)
def test_saturation_vapour_pressure(temperature: float, expected: float) -> None:
    assert saturation(temperature) == pytest.approx(expected, abs=5e-5)


def test_example_3_saturation_from_daily_extremes() -> None:
    """Tmax 24.5, Tmin 15: 3.075 and 1.705 kPa, mean 2.39 kPa."""
    assert saturation(24.5) == pytest.approx(3.075, abs=5e-4)
    assert saturation(15.0) == pytest.approx(1.705, abs=5e-4)
    assert deficit(15.0, 24.5, 0.0) == pytest.approx(2.39, abs=5e-3)


def test_examples_5_and_6_deficit() -> None:
    """Tmin 18, Tmax 25, actual pressure 1.70: deficit 0.91 kPa (from memory; recomputed 0.9144).

    The example gives extremes of humidity (82 and 54 %); the mean humidity that stands for the
    same actual pressure is put in here (equation 19).
    """
    actual = (2.0640 * 0.82 + 3.1678 * 0.54) / 2
    saturated = (saturation(18.0) + saturation(25.0)) / 2
    assert actual == pytest.approx(1.70, abs=5e-3)
    found = deficit(18.0, 25.0, 100 * actual / saturated)
    assert found == pytest.approx(0.91, abs=5e-3)
    assert found == pytest.approx(0.9144, abs=1e-4)


def test_saturated_air_has_no_deficit() -> None:
    assert deficit(11.0, 19.0, 100.0) == 0


def test_season_is_the_sum_of_its_days() -> None:
    """By the plain path, day by day."""
    random = np.random.default_rng(3)
    low = random.uniform(-5, 20, (40, 3))
    high = low + random.uniform(0, 18, (40, 3))
    humidity = random.uniform(20, 100, (40, 3))
    first, end = np.array([[3, 3, 10]]), np.array([[30, 40, 40]])
    found = season_vapour_pressure_deficits(low, high, humidity, first, end)[0]
    for pixel in range(3):
        days = range(first[0, pixel], end[0, pixel])
        expected = sum(
            plain_deficit(low[d, pixel], high[d, pixel], humidity[d, pixel]) for d in days
        )
        assert found[pixel] == pytest.approx(expected, rel=1e-13)
