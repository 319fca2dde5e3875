"""The benchmark of the prepare stage runs and gives its keys."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

BENCHMARK = Path(__file__).parents[1] / "benchmarks" / "prepare.py"


def test_benchmark_runs() -> None:
    size = ("--rows", "10", "--columns", "10", "--years", "2", "--repeats", "1")
    command = [sys.executable, str(BENCHMARK), *size, "--json"]
    done = subprocess.run(command, check=True, capture_output=True, text=True)
    found = json.loads(done.stdout.splitlines()[-1])
    assert set(found) == {"bilinear_over_copy", "conservative_over_copy", "peak_mib", "block_mib"}
    assert found["bilinear_over_copy"] > 0
    assert 0 < found["peak_mib"] < 1024
