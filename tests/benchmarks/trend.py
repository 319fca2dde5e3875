"""Time and memory of the trend tests, against one bare matrix product of the same size.

    python tests/benchmarks/trend.py [--pixels N] [--randomisations M] [--years N] [--json]

One thread each. The product is that of the randomised year weights (M, years) and the series
(years, pixels) in float64; the tests include everything from the series to the p-values. With
``--json`` the last line is one JSON object: shuffle_over_matmul, ar1_over_matmul, peak_mib (of
the whole process after the tests, before the product).
"""

# ruff: noqa: E402 - threads are limited before NumPy is imported
from __future__ import annotations

import os

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"

import argparse
import json
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
from stook.trend.blocktest import Detrended, ar1_test, shuffled_test
from stook.trend.randomise import Randomisations
from stook.trend.series import BLOCK


def shuffle(values: np.ndarray, drawn: Randomisations) -> np.ndarray:
    """Return p-values against shuffled years, block by block."""
    blocks = (values[:, first : first + BLOCK] for first in range(0, values.shape[1], BLOCK))
    return np.concatenate([shuffled_test(block, drawn).probability() for block in blocks])


def ar1(values: np.ndarray, drawn: Randomisations) -> np.ndarray:
    """Return p-values against AR(1) surrogates, block by block."""
    blocks = (values[:, first : first + BLOCK] for first in range(0, values.shape[1], BLOCK))
    return np.concatenate([ar1_test(Detrended.of(block), drawn).probability() for block in blocks])


def best(task: Callable[[], object], repeats: int) -> float:
    """Return the least time of some runs, s."""
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        task()
        times.append(time.perf_counter() - start)
    return min(times)


def peak_mib() -> float:
    """Return the largest memory of this process so far (not of the one that started it), MiB."""
    status = Path("/proc/self/status").read_text(encoding="utf-8")
    return int(status.split("VmHWM:")[1].split()[0]) / 1024


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pixels", type=int, default=20_000)
    parser.add_argument("--years", type=int, default=80)
    parser.add_argument("--randomisations", type=int, default=1000)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    random = np.random.default_rng(3)
    values = random.standard_normal((given.years, given.pixels))
    values[1:] += 0.4 * values[:-1]
    years = tuple(range(1941, 1941 + given.years))
    drawn = Randomisations(1, years, given.randomisations)
    for task in (shuffle, ar1):  # compile, draw
        task(values[:, :BLOCK], drawn)
    seconds = {
        "shuffled years": best(lambda: shuffle(values, drawn), given.repeats),
        "AR(1) surrogates": best(lambda: ar1(values, drawn), given.repeats),
    }
    peak = peak_mib()
    weights = drawn.shuffled_years
    out = np.empty((given.randomisations, given.pixels))
    np.matmul(weights, values, out=out)
    bare = best(lambda: np.matmul(weights, values, out=out), given.repeats)
    print(
        f"{given.pixels} pixels, {given.years} years, {given.randomisations} randomisations, "
        "one thread"
    )
    print(f"| task | s | times the product |\n|---|---|---|\n| matrix product | {bare:.3f} | 1 |")
    for name, value in seconds.items():
        print(f"| {name} | {value:.3f} | {value / bare:.2f} |")
    print(f"peak memory of the tests {peak:.0f} MiB")
    if given.json:
        result = {
            "shuffle_over_matmul": round(seconds["shuffled years"] / bare, 3),
            "ar1_over_matmul": round(seconds["AR(1) surrogates"] / bare, 3),
            "peak_mib": round(peak, 1),
        }
        print(json.dumps(result))


if __name__ == "__main__":
    main()
