"""Time and memory of the season kernels, against one pass of ``np.arcsin``.

    python tests/benchmarks/season.py [--pixels N] [--years N] [--json]

Processor time, one thread. Daily float32 weather of a temperate climate, whole series of a block
of pixels; seasons of 150 days, planted between day 95 and day 115. A kernel visits the days of
the seasons only; the pass of ``np.arcsin`` is over as many float64 values as these days, in
blocks that stay in the processor's cache. With ``--json`` the last line is one JSON object:
kernel_over_arcsin (degree days between 10 and 30 degC, the heaviest: two thresholds),
above_over_arcsin (degree days above 30), series_over_arcsin (the first, against as many values as
the whole series has), peak_mib (of the whole process after the kernels).
"""

# ruff: noqa: E402 - threads are limited before NumPy is imported
from __future__ import annotations

import os

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"

import argparse
import json
import resource
import time
from collections.abc import Callable

import numpy as np
from stook.season import kernels

SEASON_DAYS = 150
CACHED = 20_000


def weather(years: int, pixels: int) -> dict[str, np.ndarray]:
    """Return tasmin, tasmax (degC), pr (mm day-1), hurs (%), float32 (time, pixel)."""
    random = np.random.default_rng(1)
    days = 365 * years
    position = np.arange(days) % 365 / 365
    # Mean temperature, half the range, rain, humidity: spread of all pixels, and of each.
    spread = ((4.0, 1.0), (1.5, 0.5), (4.0, 4.0), (10.0, 5.0))
    mean, half, rain, humidity = (
        (shared * random.standard_normal((days, 1))).astype(np.float32)
        + np.float32(own) * random.standard_normal((days, pixels), dtype=np.float32)
        for shared, own in spread
    )
    mean += (12 - 12 * np.cos(2 * np.pi * (position - 0.04))).astype(np.float32)[:, None]
    half += 5
    np.maximum(half, 0.25, out=half)
    np.maximum(rain - 2, 0, out=rain)
    np.clip(humidity + 70, 5, 100, out=humidity)
    return {"tasmin": mean - half, "tasmax": mean + half, "pr": rain, "hurs": humidity}


def best(tasks: dict[str, Callable[[], object]], repeats: int) -> dict[str, float]:
    """Return the least processor time of some rounds of all tasks, s."""
    times = dict.fromkeys(tasks, np.inf)
    for _ in range(repeats):
        for name, task in tasks.items():
            start = time.process_time()
            task()
            times[name] = min(times[name], time.process_time() - start)
    return times


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pixels", type=int, default=100)
    parser.add_argument("--years", type=int, default=100)
    parser.add_argument("--repeats", type=int, default=7)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    grids = weather(given.years, given.pixels)
    planting = np.random.default_rng(2).integers(95, 116, given.pixels)
    first = 365 * np.arange(given.years)[:, None] + planting
    season = first, first + SEASON_DAYS
    pair = grids["tasmin"], grids["tasmax"]
    tasks: dict[str, Callable[[], object]] = {
        "degree days, 10 to 30": lambda: kernels.season_degree_days(*pair, *season, 10.0, 30.0),
        "degree days above 30": lambda: kernels.season_degree_days(*pair, *season, 30.0, np.inf),
        "sum": lambda: kernels.season_sums(grids["pr"], *season),
        "days above 30": lambda: kernels.season_counts(pair[1], pair[1], *season, 30.0),
        "longest dry spell": lambda: kernels.season_dry_spells(grids["pr"], *season, 1.0),
        "vapour pressure deficit": lambda: kernels.season_vapour_pressure_deficits(
            *pair, grids["hurs"], *season
        ),
    }
    for task in tasks.values():  # compile
        task()
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    values = given.years * given.pixels * SEASON_DAYS
    ratios = np.random.default_rng(3).uniform(-1, 1, CACHED)
    out = np.empty(CACHED)
    rounds = -(-values // CACHED)
    seconds = best(
        {"np.arcsin": lambda: [np.arcsin(ratios, out=out) for _ in range(rounds)]} | tasks,
        given.repeats,
    )
    bare = seconds["np.arcsin"] * values / (rounds * CACHED)
    print(f"{given.pixels} pixels, {given.years} seasons of {SEASON_DAYS} days, one thread")
    print("| task | ns a day of a season | times np.arcsin |\n|---|---|---|")
    for name, value in seconds.items():
        print(f"| {name} | {1e9 * value / values:.2f} | {value / bare:.2f} |")
    print(f"peak memory {peak:.0f} MiB")
    if given.json:
        heavy = seconds["degree days, 10 to 30"] / bare
        result = {
            "kernel_over_arcsin": round(heavy, 3),
            "above_over_arcsin": round(seconds["degree days above 30"] / bare, 3),
            "series_over_arcsin": round(heavy * SEASON_DAYS / 365, 3),
            "peak_mib": round(peak, 1),
        }
        print(json.dumps(result))


if __name__ == "__main__":
    main()
