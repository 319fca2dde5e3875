"""How often weather without a trend is called an impact on yields: level and power of the test.

    python tests/validation/impact_level.py [--worlds N] [--randomisations M] [--quick] [--json]

Every world is a region of pixels with invented weather: two indices, AR(1) in time, correlated in
space and with each other, and a response with a heat threshold and a rainfall optimum. Prints the
tables of docs/trend.md. With ``--json`` the last line is one JSON object with the keys level_05
(share of trendless worlds significant at 5 %, mean over responses and lag-1 correlations 0, 0.3,
0.6, 60 years), level_05_max and level_05_min (of those), level_05_max_n30, naive_level (the test
of the ratio of the two yields itself) and slope_error (root mean square difference between the
slope that is tested and that of the log ratio of production, as a share of the latter's spread).
"""

from __future__ import annotations

import argparse
import json
from typing import Any

import numpy as np
import xarray as xr
from stook.regions.totals import SystemGrids
from stook.trend.impact import Setting, SystemImpact, system_impact
from stook.trend.impact_kernels import ratio_trends
from stook.trend.impact_table import impact_table
from stook.trend.kernels import linear_fit
from stook.trend.series import TrendOptions, series_trends
from stook.yields.response import Response

LEVEL = 0.05
YEARS = (30, 60, 100)
LAG1 = (0.0, 0.3, 0.6)
RISES = (0.0, 0.5, 1.0, 1.5, 2.0, 3.0)
PIXELS = 6
BATCH = 100

RESPONSES: dict[str, dict[str, Any]] = {
    "linear, log": {
        "link": "log",
        "terms": {"heat": {"form": "linear", "index": "heat", "coefficient": -0.004}},
        "standard_errors": [0.001],
    },
    "threshold and optimum, log": {
        "link": "log",
        "terms": {
            "heat": {
                "form": "piecewise-linear",
                "index": "heat",
                "knots": [60],
                "coefficients": [0.001, -0.006],
            },
            "rain": {"form": "quadratic", "index": "rain", "coefficients": [0.002, -2.2e-6]},
        },
        "standard_errors": [0.001] * 4,
    },
    "threshold and optimum, level": {
        "link": "level",
        "intercept": 3.0,
        "terms": {
            "heat": {
                "form": "piecewise-linear",
                "index": "heat",
                "knots": [60],
                "coefficients": [0.004, -0.025],
            },
            "rain": {"form": "quadratic", "index": "rain", "coefficients": [0.008, -8.8e-6]},
        },
        "standard_errors": [0.001] * 4,
    },
}


def response(name: str) -> Response:
    """Return one of the invented responses."""
    return Response.model_validate(
        {
            "crop": "maize",
            "system": "rainfed",
            "indices": {
                "heat": {"measure": "degree-days", "base": 29},
                "rain": {"measure": "total"},
            },
            "estimation_range": {"heat": [0, 300], "rain": [50, 1200]},
            "citation": "invented",
            "note": "invented",
        }
        | RESPONSES[name]
    )


def weather(
    random: np.random.Generator, years: int, worlds: int, lag1: float, rise: float = 0.0
) -> dict[str, np.ndarray]:
    """Return heat and rain, shape (years, worlds, PIXELS); rise in standard deviations of heat."""
    shocks = random.standard_normal((years, 2, worlds, PIXELS))
    common = random.standard_normal((years, 2, worlds, 1))
    shocks = 0.6 * shocks + 0.8 * common  # correlation between pixels 0.64
    shocks[:, 1] = -0.5 * shocks[:, 0] + np.sqrt(0.75) * shocks[:, 1]  # hot years are dry
    series = shocks.copy()
    for t in range(1, years):
        series[t] = lag1 * series[t - 1] + np.sqrt(1 - lag1**2) * shocks[t]
    line = rise * np.linspace(0, 1, years)[:, None, None]
    base = 45 + 6 * np.arange(PIXELS)
    heat = np.clip(base + 18 * (series[:, 0] + line), 0, None)
    return {"heat": heat, "rain": np.clip(430 + 90 * series[:, 1], 0, None)}


def impacts(indices: dict[str, np.ndarray], given: Response, options: TrendOptions) -> SystemImpact:
    """Return the sums of every world, each a region of its own."""
    years, worlds, pixels = indices["heat"].shape
    coordinates = {
        "year": np.arange(years) + 1901,
        "lat": np.arange(worlds) * 0.01,
        "lon": np.arange(pixels) * 1.0,
    }
    season = xr.Dataset(
        {name: (("year", "lat", "lon"), values) for name, values in indices.items()}, coordinates
    )
    maps = ("lat", "lon")
    layer = xr.Dataset(
        {
            "area": (maps, np.tile(100.0 + 20 * np.arange(pixels), (worlds, 1))),
            "baseline_yield": (maps, np.full((worlds, pixels), 5.0)),
        }
    )
    reason = xr.Dataset({"reason": (maps, np.zeros((worlds, pixels), dtype=np.int8))})
    shares = np.repeat(np.eye(worlds)[:, :, None], pixels, axis=2)
    overlay = xr.Dataset(
        {"coverage": (("region", *maps), shares)},
        {"region": [f"world {number}" for number in range(worlds)]},
    )
    ends = (1901, 1900 + years)
    setting = Setting(given, given.coefficient_vector[None], ends, options, 64)
    return system_impact(SystemGrids(season, reason, layer), overlay, setting, ends)


def found(
    name: str, years: int, lag1: float, worlds: int, count: int, rise: float = 0.0
) -> dict[str, float]:
    """Return the share of worlds called significant, and how well the tested slope fits."""
    options = TrendOptions(seed=1, count=count, minimum_years=20)
    random = np.random.default_rng([years, int(10 * lag1), int(10 * rise), len(name)])
    p, naive, errors, spread = [], [], [], []
    for first in range(0, worlds, BATCH):
        indices = weather(random, years, min(BATCH, worlds - first), lag1, rise)
        sums = impacts(indices, response(name), options)
        p.append(impact_table("maize", {"rainfed": sums}, "all", options)["p_ar1"])
        ratio = np.log(sums.actual[0] / sums.detrended[0]).T
        naive.append(series_trends(ratio, sums.years, options)[0].p["ar1"])
        positions = sums.years.astype(np.float64)
        tested, _ = linear_fit((sums.series / sums.weight[:, None]).T.copy(), positions)
        exact = ratio_trends(sums.actual, sums.detrended, positions)[0]
        errors.append(tested - exact)
        spread.append(exact)
    scale = float(np.std(np.concatenate(spread)))
    return {
        "level": float(np.mean(np.concatenate(p) <= LEVEL)),
        "naive": float(np.mean(np.concatenate(naive) <= LEVEL)),
        "error": float(np.sqrt(np.mean(np.concatenate(errors) ** 2))) / scale,
    }


def main() -> None:
    """Print the tables and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--worlds", type=int, default=1000)
    parser.add_argument("--randomisations", type=int, default=999)
    parser.add_argument("--quick", action="store_true", help="60 years, lag-1 correlation 0.3 only")
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    size = (given.worlds, given.randomisations)
    cases = [(60, 0.3)] if given.quick else [(years, lag1) for years in YEARS for lag1 in LAG1]
    levels = {
        (name, years, lag1): found(name, years, lag1, *size)
        for name in RESPONSES
        for years, lag1 in cases
    }
    if not given.quick:
        print_tables(levels, *size)
    if given.json:
        print(json.dumps({key: value for key, value in keys(levels).items() if value == value}))


def print_tables(
    levels: dict[tuple[str, int, float], dict[str, float]], worlds: int, count: int
) -> None:
    """Print level and power."""
    print(f"Share of {worlds} worlds without a trend called an impact, nominal 5 %, per cent")
    print("| response | years |" + "".join(f" lag-1 {lag1:g} |" for lag1 in LAG1))
    print("|---|---|" + "---|" * len(LAG1))
    for name in RESPONSES:
        for years in YEARS:
            cells = (f" {100 * levels[name, years, lag1]['level']:.1f} |" for lag1 in LAG1)
            print(f"| {name} | {years} |" + "".join(cells))
    print("\nShare of worlds with a trend of heat called an impact, 60 years, per cent;")
    print("rise over the 60 years in standard deviations of the index")
    print("| response | lag-1 |" + "".join(f" rise {rise:g} |" for rise in RISES))
    print("|---|---|" + "---|" * len(RISES))
    for name in RESPONSES:
        for lag1 in LAG1:
            shares = [found(name, 60, lag1, worlds // 2, count, r)["level"] for r in RISES]
            print(f"| {name} | {lag1:g} |" + "".join(f" {100 * one:.0f} |" for one in shares))


def keys(levels: dict[tuple[str, int, float], dict[str, float]]) -> dict[str, float]:
    """Return the figures to check."""
    usual = [one["level"] for (_, years, _), one in levels.items() if years == 60]
    short = [one["level"] for (_, years, _), one in levels.items() if years == 30]
    return {
        "level_05": float(np.mean(usual)),
        "level_05_max": max(usual),
        "level_05_min": min(usual),
        "level_05_max_n30": max(short, default=float("nan")),
        "naive_level": float(np.mean([one["naive"] for one in levels.values()])),
        "slope_error": max(one["error"] for one in levels.values()),
    }


if __name__ == "__main__":
    main()
