"""Time and memory of production under coefficient draws, against one pass of ``np.exp``.

    python tests/benchmarks/yields.py [--draws N] [--pixels N] [--years N] [--json]

Processor time, one thread. The kernel goes from the design matrix of four terms to the production
of 50 regions, every pixel in one or two of them, for all draws. The pass of ``np.exp`` is over
pixels x years x draws float64 values, in blocks that stay in the processor's cache. With
``--json`` the last line is one JSON object: draws_over_exp (log link), level_over_exp, peak_mib
(of the whole process after the kernel, the inputs included).
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
from scipy import sparse
from stook.yields.draws import draw_totals

TERMS, REGIONS, CACHED = 4, 50, 20_000


def best(task: Callable[[], object], repeats: int) -> float:
    """Return the least processor time of some runs, s."""
    times = []
    for _ in range(repeats):
        start = time.process_time()
        task()
        times.append(time.process_time() - start)
    return min(times)


def region_weights(random: np.random.Generator, pixels: int) -> sparse.csr_array:
    """Return ha (region, pixel): bands of pixels; every tenth lies in a second region too."""
    own = np.arange(pixels) * REGIONS // pixels
    second = np.arange(0, pixels, 10)
    rows = np.concatenate([own, (own[second] + 1) % REGIONS])
    columns = np.concatenate([np.arange(pixels), second])
    area = random.uniform(10, 1000, len(rows))
    return sparse.csr_array((area, (rows, columns)), shape=(REGIONS, pixels))


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--draws", type=int, default=200)
    parser.add_argument("--pixels", type=int, default=20_000)
    parser.add_argument("--years", type=int, default=100)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    random = np.random.default_rng(4)
    design = random.normal(1.0, 0.3, (given.pixels, given.years, TERMS))
    valid = np.ones((given.pixels, given.years), dtype=bool)
    coefficients = random.normal(0.0, 0.2, (given.draws, TERMS))
    baseline = np.arange(given.years) < 30
    baseline_yield = random.uniform(2, 9, given.pixels)
    weights = region_weights(random, given.pixels)

    def production(log_link: bool, pixels: int = given.pixels) -> np.ndarray:
        part = slice(0, pixels)
        return draw_totals(
            design[part],
            valid[part],
            coefficients,
            3.0,
            log_link,
            baseline,
            baseline_yield[part],
            weights[:, part],
        )

    production(True, 10)  # compile
    seconds = {
        "draws, log link": best(lambda: production(True), given.repeats),
        "draws, level link": best(lambda: production(False), given.repeats),
    }
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    values = given.pixels * given.years * given.draws
    numbers = random.normal(0.0, 0.3, CACHED)
    out = np.empty(CACHED)
    rounds = -(-values // CACHED)
    once = best(lambda: [np.exp(numbers, out=out) for _ in range(rounds)], given.repeats)
    bare = once * values / (rounds * CACHED)
    size = f"{given.draws} draws, {given.pixels} pixels, {given.years} years, {TERMS} terms"
    print(f"{size}, one thread")
    print("| task | s | times np.exp |\n|---|---|---|")
    print(f"| np.exp | {bare:.3f} | 1.00 |")
    for name, value in seconds.items():
        print(f"| {name} | {value:.3f} | {value / bare:.2f} |")
    print(f"peak memory {peak:.0f} MiB")
    if given.json:
        result = {
            "draws_over_exp": round(seconds["draws, log link"] / bare, 3),
            "level_over_exp": round(seconds["draws, level link"] / bare, 3),
            "peak_mib": round(peak, 1),
        }
        print(json.dumps(result))


if __name__ == "__main__":
    main()
