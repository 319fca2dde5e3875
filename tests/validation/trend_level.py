"""How often series without a trend are called a trend: level of the trend tests, and power.

    python tests/validation/trend_level.py [--series N] [--randomisations M] [--json]

Prints the tables of docs/trend.md. With ``--json`` the last line is one JSON object with the
keys ar1_level_max_n60 and ar1_level_min_n60 (over lag-1 correlation 0, 0.3, 0.6 and 60, 100
years), ar1_level_max_n30 (the same correlations, 30 years) and shuffle_level_n60_r06.
"""

from __future__ import annotations

import argparse
import json

import numpy as np
from stook.trend.breakpoint import find_break
from stook.trend.discovery import benjamini_hochberg, rate_for_level
from stook.trend.field import Field
from stook.trend.randomise import randomisations
from stook.trend.series import TrendOptions, series_trends

LEVEL = 0.05
YEARS = (30, 60, 100)
LAG1 = (-0.3, 0.0, 0.3, 0.6, 0.8, 0.9)
CHECKED = (0.0, 0.3, 0.6)
METHODS = ("ar1", "shuffle", "blocks", "phases")
FIELD_TESTS = (
    "area share",
    "mean trend",
    "any discovery on the map",
    "10 of 100 pixels, taken as independent",
)
SLOPES = (0.0, 0.5, 1.0, 1.5, 2.0, 3.0)


def ar1_series(
    random: np.random.Generator, years: int, series: int, lag1: float, shape: str = "normal"
) -> np.ndarray:
    """Return stationary AR(1) series of variance 1, shape (years, series)."""
    if shape == "normal":
        shocks = random.standard_normal((years, series))
    else:
        shocks = random.exponential(1.0, (years, series)) - 1.0
    result = np.empty_like(shocks)
    result[0] = shocks[0]
    for t in range(1, years):
        result[t] = lag1 * result[t - 1] + np.sqrt(1 - lag1**2) * shocks[t]
    return result


def rejections(values: np.ndarray, count: int) -> dict[str, float]:
    """Return the share of series with p at or below the level, by method."""
    shares = {}
    for method in METHODS:
        options = TrendOptions(seed=1, count=count, minimum_years=20, method=method)
        trends, _ = series_trends(values, np.arange(len(values)) + 1901, options)
        shares[method] = float(np.mean(trends.p[method] <= LEVEL))
    return shares


def levels(series: int, count: int) -> dict[tuple[str, int, float], float]:
    """Return the level by method, years and lag-1 correlation."""
    found = {}
    for years in YEARS:
        for lag1 in LAG1:
            random = np.random.default_rng([years, int(10 * lag1 + 10)])
            shares = rejections(ar1_series(random, years, series, lag1), count)
            found |= {(method, years, lag1): share for method, share in shares.items()}
    return found


def other_series(series: int, count: int) -> dict[str, dict[str, float]]:
    """Return the level for 60 years and lag-1 correlation 0.3 where assumptions do not hold."""
    random = np.random.default_rng(60)
    skewed = ar1_series(random, 60, series, 0.3, "exponential")
    gaps = ar1_series(random, 60, series, 0.3)
    gaps[[7, 20, 21, 40, 52]] = np.nan
    ties = np.floor(ar1_series(random, 60, series, 0.3).clip(0) * 3)
    wave = np.cos(2 * np.pi * (np.arange(60)[:, None] / 11 + random.random(series)))
    cycle = ar1_series(random, 60, series, 0.3) + wave
    return {
        "skewed (exponential) shocks": rejections(skewed, count),
        "five years missing inside": rejections(gaps, count),
        "whole days, half of them zero": rejections(ties, count),
        "an 11-year cycle added": rejections(cycle, count),
    }


def power(series: int, count: int) -> dict[tuple[str, float, float], float]:
    """Return the share found by method, lag-1 correlation and slope; 60 years.

    Slopes are in standard deviations of the series over the 60 years.
    """
    found = {}
    for lag1 in CHECKED:
        values = ar1_series(np.random.default_rng([7, int(10 * lag1)]), 60, series, lag1)
        for slope in SLOPES:
            line = slope * np.arange(60)[:, None] / 59
            shares = rejections(values + line, count)
            found |= {(method, lag1, slope): share for method, share in shares.items()}
    return found


def fields(number: int, count: int, reach: float) -> dict[str, float]:
    """Return the share of fields without a trend that the field tests call significant.

    10 x 10 pixels, 60 years, lag-1 correlation 0.3, correlation falling as exp(-distance/reach);
    a reach of 0 is independent pixels.
    """
    random = np.random.default_rng([77, int(reach)])
    row, column = np.divmod(np.arange(100), 10)
    distance = np.hypot(row[:, None] - row, column[:, None] - column)
    mixing = np.linalg.cholesky(np.exp(-distance / reach)) if reach else np.eye(100)
    options = TrendOptions(seed=1, count=count, minimum_years=20)
    years = np.arange(60) + 1901
    found: dict[str, list[bool]] = {name: [] for name in FIELD_TESTS}
    for _ in range(number):
        values = ar1_series(random, 60, 100, 0.3) @ mixing.T
        trends, randomised = series_trends(values, years, options, with_random=True)
        assert randomised is not None
        sums = Field([], years, count)
        sums.add(values, randomised, np.ones(100, dtype=np.int64), np.full(100, -1))
        row_ = sums.table("x", "all", 1.0, 10.0, options).iloc[0]
        found["area share"].append(row_["share_p"] <= LEVEL)
        found["mean trend"].append(row_["mean_trend_p"] <= LEVEL)
        found["any discovery on the map"].append(
            bool(benjamini_hochberg(trends.p["ar1"], rate_for_level(LEVEL)).any())
        )
        # 10 of 100 independent tests at 5 %: P = 0.0282 (Livezey & Chen 1983).
        found["10 of 100 pixels, taken as independent"].append((trends.p["ar1"] <= LEVEL).sum() > 9)
    return {name: float(np.mean(marks)) for name, marks in found.items()}


def breaks(number: int, count: int) -> dict[tuple[int, float], float]:
    """Return the share of series without a break in which one is found."""
    found = {}
    for years in (40, 60, 100):
        drawn = randomisations(1, tuple(range(1901, 1901 + years)), count)
        for lag1 in CHECKED:
            random = np.random.default_rng([5, years, int(10 * lag1)])
            values = ar1_series(random, years, number, lag1)
            p = [one.p for column in values.T if (one := find_break(column, drawn)) is not None]
            found[years, lag1] = float(np.mean(np.array(p) <= LEVEL))
    return found


def print_breaks(number: int, count: int) -> None:
    """Print the level of the search for a break."""
    found = breaks(number, count)
    print(
        f"\nShare of {number} series without a break in which one is found, nominal 5 %, per cent"
    )
    print("| years |" + "".join(f" lag-1 {lag1:g} |" for lag1 in CHECKED))
    print("|---|" + "---|" * len(CHECKED))
    for years in (40, 60, 100):
        cells = (f" {100 * found[years, lag1]:.1f} |" for lag1 in CHECKED)
        print(f"| {years} |" + "".join(cells))


def print_fields(number: int, count: int) -> None:
    """Print the level of the field tests."""
    print(f"\nShare of {number} fields without a trend called significant, nominal 5 %, per cent")
    columns = {f"reach {reach:g} pixels": fields(number, count, reach) for reach in (0, 3, 10)}
    print("| test | " + " | ".join(columns) + " |")
    print("|---|" + "---|" * len(columns))
    for name in FIELD_TESTS:
        print(f"| {name} |" + "".join(f" {100 * one[name]:.1f} |" for one in columns.values()))


def main() -> None:
    """Print the tables and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--series", type=int, default=2000)
    parser.add_argument("--randomisations", type=int, default=999)
    parser.add_argument("--fields", type=int, default=500)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    found = levels(given.series, given.randomisations)
    print(f"Share of {given.series} series without a trend called a trend, nominal 5 %, per cent")
    print("| test | years |" + "".join(f" lag-1 {lag1:g} |" for lag1 in LAG1))
    print("|---|---|" + "---|" * len(LAG1))
    for method in METHODS:
        for years in YEARS:
            cells = (f" {100 * found[method, years, lag1]:.1f} |" for lag1 in LAG1)
            print(f"| {method} | {years} |" + "".join(cells))
    print("\nThe same, 60 years, lag-1 correlation 0.3, where assumptions do not hold")
    print("| series | " + " | ".join(METHODS) + " |")
    print("|---|" + "---|" * len(METHODS))
    for name, shares in other_series(given.series, given.randomisations).items():
        print(f"| {name} |" + "".join(f" {100 * shares[method]:.1f} |" for method in METHODS))
    print("\nShare of series with a trend called a trend, 60 years, per cent;")
    print("rise over the 60 years in standard deviations of the series without it")
    print("| test | lag-1 |" + "".join(f" rise {slope:g} |" for slope in SLOPES))
    print("|---|---|" + "---|" * len(SLOPES))
    powers = power(given.series, given.randomisations)
    for method in METHODS:
        for lag1 in CHECKED:
            cells = (f" {100 * powers[method, lag1, slope]:.0f} |" for slope in SLOPES)
            print(f"| {method} | {lag1:g} |" + "".join(cells))
    print_fields(given.fields, given.randomisations)
    print_breaks(given.series // 2, min(given.randomisations, 199))
    if given.json:
        print(json.dumps(keys(found)))


def keys(found: dict[tuple[str, int, float], float]) -> dict[str, float]:
    """Return the figures to check."""
    long = [found["ar1", years, lag1] for years in (60, 100) for lag1 in CHECKED]
    return {
        "ar1_level_max_n60": max(long),
        "ar1_level_min_n60": min(long),
        "ar1_level_max_n30": max(found["ar1", 30, lag1] for lag1 in CHECKED),
        "shuffle_level_n60_r06": found["shuffle", 60, 0.6],
    }


if __name__ == "__main__":
    main()
