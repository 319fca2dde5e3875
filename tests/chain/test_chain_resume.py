"""A run that is killed leaves nothing that looks finished, and goes on to the same values."""

from __future__ import annotations

import contextlib
import os
import signal
import subprocess
import time

import psutil
import pytest
from chain_runs import ONE_MODEL, Chain, assert_same_results, command, stook

pytestmark = pytest.mark.xdist_group("chain")


def arguments(full, results):
    options = ("--cores", 2, "--until", "yields", "--set", f"results={results}")
    return ("run", full.file, *options, *ONE_MODEL)


@pytest.mark.parametrize(("stage", "whole"), [("prepare", True), ("correct", False)])
def test_killed_in_the_middle(full, tmp_path, stage, whole):
    """Kill everything at once (power cut), or one job only."""
    root = tmp_path / "hollin-tiny"
    run = subprocess.Popen(
        command(*arguments(full, tmp_path)),
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    _until(lambda: list(root.glob(f"{stage}/*/.*.part")), run)
    if whole:
        processes = [psutil.Process(run.pid), *psutil.Process(run.pid).children(recursive=True)]
        for process in processes:
            with contextlib.suppress(psutil.NoSuchProcess):
                process.kill()
    else:
        _kill_a_job(run.pid)
    _, err = run.communicate(timeout=300)
    assert run.returncode != 0
    if not whole:
        assert err.startswith("error: correct: ")
        assert "Traceback" not in err
    for path in root.glob("*/**/*.nc"):
        if not path.name.startswith("."):
            assert (root / "ledger" / f"{path.relative_to(root)}.json").exists()
    done = stook(*arguments(full, tmp_path))
    assert done.returncode == 0, done.stdout + done.stderr
    assert list(root.rglob("*.part")) == []
    assert_same_results(full, Chain(full.file, root), ["correct/*/*.nc", "yields/**/*.*"])
    verified = stook("verify", root)
    assert verified.returncode == 0, verified.stdout


def test_interrupted_from_the_keyboard(full, tmp_path):
    root = tmp_path / "hollin-tiny"
    run = subprocess.Popen(
        command(*arguments(full, tmp_path)),
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    _until(lambda: list(root.glob("prepare/*/.*.part")), run)
    os.killpg(run.pid, signal.SIGINT)
    _, err = run.communicate(timeout=120)
    assert run.returncode == 1
    assert err.startswith("error: interrupted; run again to go on.")
    assert "Traceback" not in err
    assert list(root.rglob("*.part")) == []


def _kill_a_job(driver):
    for process in psutil.Process(driver).children(recursive=True):
        words = process.cmdline()
        if words[1:4] == ["-m", "stook.job", "correct"]:
            process.kill()
            return
    raise AssertionError("no job of the stage was running")


def _until(condition, run, seconds=300):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "waited in vain"
        assert run.poll() is None, run.communicate()
        time.sleep(0.01)
