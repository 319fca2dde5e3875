"""The benchmark and the validation of the ensemble run, and print what they promise."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

TESTS = Path(__file__).parents[1]


def run(script: str, *arguments: str) -> dict[str, float]:
    command = [sys.executable, str(TESTS / script), *arguments, "--json"]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    return json.loads(done.stdout.splitlines()[-1])


def test_coverage_of_a_few_worlds() -> None:
    found = run("validation/spread_coverage.py", "--worlds", "60", "--models", "10")
    assert set(found) == {"coverage_90", "coverage_90_central", "low", "high"}
    assert found["low"] <= found["coverage_90"] <= found["high"]
    # 60 worlds: within three standard errors of nine in ten
    assert found["coverage_90"] == pytest.approx(0.9, abs=0.12)
    assert found["coverage_90_central"] < found["coverage_90"]


def test_benchmark_of_a_small_ensemble() -> None:
    sizes = ("--simulations", "4", "--draws", "5", "--regions", "3", "--crops", "2")
    found = run("benchmarks/ensemble.py", *sizes)
    assert {"seconds", "peak_mib", "seconds_changes", "seconds_risk"} <= set(found)
    assert found["seconds"] > 0
    assert found["peak_mib"] > 0
