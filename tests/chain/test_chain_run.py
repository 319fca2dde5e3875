"""The whole run: every result is there, is recorded, and nothing runs twice."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
from chain_runs import stook
from stook.assessment.layout import STAGES

pytestmark = pytest.mark.xdist_group("chain")


def results_of(chain):
    return [p for stage in STAGES for p in (chain.root / stage).rglob("*") if p.is_file()]


def test_every_stage_has_results(full):
    for stage in STAGES:
        assert full.files(f"{stage}/**/*.*"), stage
    assert full.layout.report_page.stat().st_size > 100_000


def test_no_half_written_file_is_left(full):
    assert [path for path in full.root.rglob("*.part")] == []


def test_verify_finds_every_file_as_recorded(full):
    done = stook("verify", full.root)
    assert (done.returncode, done.stdout.strip()) == (0, "every file is as recorded"), done.stderr


def test_every_result_has_a_record(full):
    lost = [
        str(path.relative_to(full.root))
        for path in results_of(full)
        if not (full.root / "ledger" / f"{path.relative_to(full.root)}.json").exists()
    ]
    assert lost == []


def test_a_second_run_has_nothing_to_do(full):
    before = {path: path.stat().st_mtime_ns for path in results_of(full)}
    done = stook("run", full.file, "--cores", 2, "--set", f"results={full.root.parent}")
    assert done.returncode == 0, done.stderr
    assert "everything is up to date" in done.stdout.splitlines()
    assert before == {path: path.stat().st_mtime_ns for path in results_of(full)}


def test_a_change_of_one_response_reruns_what_it_touches(full):
    done = stook(
        *("run", full.file, "--dry-run"),
        *("--set", f"results={full.root.parent}"),
        *("--set", "crops.barley.systems.rainfed.phases.filling=[0.8, 1]"),
    )
    assert done.returncode == 0, done.stderr
    found = [line.split() for line in done.stdout.splitlines()]
    jobs = {" ".join(words[:2]): words[2] for words in found if len(words) > 3}
    assert jobs["season tile"] == "4"  # of barley, in every simulation
    assert jobs["yields grid"] == "4"
    assert not {"prepare tile", "correct tile", "regions overlay"} & set(jobs)


def test_warnings_of_the_check_reach_the_report(full):
    found = json.loads((full.root / "check.json").read_text())
    assert all(entry["severity"] == "warning" for entry in found)


@pytest.mark.parametrize("target", ["all", "season"])
def test_plain_snakemake_plans_the_same(full, target):
    top = Path(__file__).parents[2]
    done = subprocess.run(
        [
            *(sys.executable, "-m", "snakemake", "--cores", "1", "--dry-run", "--quiet"),
            *("--config", f"assessment={full.file}", f"set=results={full.root.parent}"),
            *("--", target),
        ],
        cwd=top,
        capture_output=True,
        text=True,
        timeout=300,
    )
    assert done.returncode == 0, done.stderr
    assert "Nothing to be done" in done.stdout + done.stderr
