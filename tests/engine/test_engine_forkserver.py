"""The fork server: the same exit status, output and files as a process of its own."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import psutil
import pytest
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment, save_resolved
from stook.engine.forkserver import ADDRESS, forkserver

STAND_IN = Path(__file__).parent / "stand_in"
CONTENT = {
    "title": "Fork server (invented)",
    "name": "forked",
    "seed": 1,
    "grid": {
        "lat": {"first": 40, "last": 41, "step": 1},
        "lon": {"first": 0, "last": 1, "step": 1},
    },
    "periods": {"baseline": [1991, 2010]},
    "reference": {"name": "R", "files": {"tas": ["tas.nc"]}},
    "crops": {
        "maize": {
            "systems": {
                "rainfed": {
                    "area": {"value": 1, "unit": "ha"},
                    "calendar": {"planting": {"value": 100}, "maturity": {"value": 200}},
                    "baseline_yield": {"value": 1},
                    "response": "maize.yaml",
                }
            }
        }
    },
    "regions": {"file": "regions.gpkg"},
}


@pytest.fixture
def results(tmp_path):
    """A results folder with a resolved assessment."""
    path = tmp_path / "assessment.yaml"
    path.write_text(yaml.safe_dump(CONTENT), encoding="utf-8")
    return save_resolved(load_assessment(path)).parent


@pytest.fixture
def server(monkeypatch):
    """A running server whose stages are stand-ins."""
    monkeypatch.setenv("PYTHONPATH", str(STAND_IN))
    with forkserver():
        yield


def start(results, *extra, **environment):
    """Start a job that writes the overlay."""
    command = [sys.executable, "-m", "stook.job", "regions", "overlay", "--results", str(results)]
    return subprocess.Popen(
        [*command, *extra],
        env=os.environ | environment,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def test_a_job_is_forked_and_writes_its_file(server, results):
    job = start(results)
    out, err = job.communicate(timeout=60)
    assert (job.returncode, err) == (0, "")
    assert out.startswith("python -m stook.job regions overlay --results")
    assert Layout(results).overlay.read_text() == "regions_overlay []"


def test_the_same_without_a_server(results):
    assert ADDRESS not in os.environ
    job = start(results, PYTHONPATH=str(STAND_IN))
    job.communicate(timeout=60)
    assert job.returncode == 0
    assert Layout(results).overlay.read_text() == "regions_overlay []"


def test_a_users_error_is_one_line_and_status_1(server, results):
    job = start(results, STAND_IN_FAIL="regions_overlay")
    _, err = job.communicate(timeout=60)
    assert (job.returncode, err) == (1, "error: climate.nc: tas is broken\n")
    assert not Layout(results).overlay.exists()


def test_a_defect_keeps_its_traceback(server, results):
    job = start(results, STAND_IN_CRASH="regions_overlay")
    _, err = job.communicate(timeout=60)
    assert job.returncode == 1
    assert "Traceback" in err
    assert "ZeroDivisionError: a defect" in err


@pytest.mark.parametrize("sent", [signal.SIGTERM, signal.SIGKILL])
def test_a_forked_job_ends_with_the_process_that_asked(server, results, sent):
    before = _processes()
    job = start(results, STAND_IN_SECONDS="60")
    folder = Layout(results).overlay.parent
    _until(lambda: list(folder.glob(".*.part")))
    assert len(_processes()) == len(before) + 1
    job.send_signal(sent)
    job.communicate(timeout=60)
    _until(lambda: _processes() == before)
    assert list(folder.iterdir()) == []  # the forked job could tidy up


def test_the_server_ends_with_the_run(monkeypatch):
    monkeypatch.setenv("PYTHONPATH", str(STAND_IN))
    with forkserver():
        assert _processes()
    assert not _processes()
    assert ADDRESS not in os.environ


def _processes():
    """Return the server of this process and the jobs forked from it."""
    found = set()
    for process in psutil.Process().children(recursive=True):
        try:
            if "stook.engine.forkserver" in process.cmdline():
                found.add(process.pid)
        except psutil.Error:
            continue
    return found


def _until(condition, seconds=60):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.05)
