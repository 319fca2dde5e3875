"""A run that is killed or interrupted goes on where it was."""

from __future__ import annotations

import contextlib
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import psutil
import pytest
from engine_inputs import JOBS, run_all, traced

pytestmark = pytest.mark.filterwarnings("ignore:unclosed file:ResourceWarning")  # in Snakemake

RUN = "import sys; from engine_inputs import run_all; from pathlib import Path; run_all(Path({!r}))"


@pytest.mark.parametrize("way", ["killed", "interrupted"])
def test_goes_on_where_it_was(file, tmp_path, way):
    root = tmp_path / "results" / "engine"
    here = os.pathsep.join([os.environ["PYTHONPATH"], str(Path(__file__).parent)])
    run = subprocess.Popen(
        [sys.executable, "-c", RUN.format(str(file))],
        env=os.environ | {"PYTHONPATH": here, "STAND_IN_SECONDS": "0.5"},
        stderr=subprocess.PIPE,
        start_new_session=True,
    )
    wait_for(lambda: list(root.glob("correct/*/.*.part")), run)
    jobs = psutil.Process(run.pid).children(recursive=True)
    if way == "killed":
        run.kill()
    else:
        os.killpg(run.pid, signal.SIGINT)
    _, told = run.communicate(timeout=60)
    assert run.returncode != 0
    if way == "interrupted":
        assert b"Interrupted: interrupted; run again to go on" in told
    psutil.wait_procs(jobs, timeout=20)
    assert not any(job.is_running() for job in jobs)  # no job outlives its run
    if way == "interrupted":
        assert list(root.rglob(".*.part")) == []
    whole = {path for path in root.rglob("*.nc") if not path.name.startswith(".")}
    assert whole
    for path in whole:
        assert path.read_text(encoding="utf-8") != "half"
    done = traced()
    run_all(file)
    again = traced()
    assert 0 < len(again) < JOBS
    assert len({*done, *again}) == JOBS
    assert list(root.rglob(".*.part")) == []


def wait_for(condition, run, seconds=60.0):
    end = time.monotonic() + seconds
    while not condition():
        assert run.poll() is None, "the run ended"
        assert time.monotonic() < end, "waited in vain"
        with contextlib.suppress(OSError):
            time.sleep(0.02)
