"""The validation of the fit runs and gives its keys."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

SCRIPT = Path(__file__).parents[1] / "validation" / "fit_coverage.py"


def test_coverage_of_a_few_replications() -> None:
    command = [sys.executable, str(SCRIPT), "--replications", "25", "--json"]
    alone = os.environ | {"OPENBLAS_NUM_THREADS": "1"}  # small matrices: threads only wait
    done = subprocess.run(command, check=True, capture_output=True, text=True, env=alone)
    found = json.loads(done.stdout.splitlines()[-1])
    assert set(found) == {
        "coverage_95",
        "coverage_95_cluster_unit",
        "coverage_95_cluster_year",
    }
    # 2 x 25 replications of 4 coefficients: standard error about 2 %; the run of 500 that
    # docs/fit.md prints holds 93 to 97 %.
    assert 0.90 < found["coverage_95"] < 0.99
