"""Running a plan: what runs, what is shown, what a failing job says."""

from __future__ import annotations

import pytest
from engine_inputs import JOBS, planned, run_all, traced
from stook.assessment.layout import STAGES
from stook.engine.explain import lines
from stook.engine.lock import run_lock
from stook.engine.run import RunFailed, dry_run
from stook.errors import ResultsError

pytestmark = pytest.mark.filterwarnings("ignore:unclosed file:ResourceWarning")  # in Snakemake


def test_every_job_runs_once(whole):
    folder, jobs, shown = whole
    assert len(jobs) == len(set(jobs)) > JOBS
    assert (folder / "results/engine/report/report.html").exists()
    told = shown.splitlines()
    assert {line.split()[0] for line in told} == set(STAGES)
    assert told[-1].startswith(f"report    1 job done, {len(jobs)}/{len(jobs)} after ")
    early = [job for job in jobs if job.split("_")[0] in ("prepare", "correct", "season", "yields")]
    assert len(early) == JOBS - 1  # and the overlay of regions


def test_nothing_runs_again(finished):
    assert run_all(finished, until="report")[0] == 0
    assert traced() == []


@pytest.mark.parametrize(
    ("override", "stages"),
    [
        ("trend.randomisations=199", {"trend", "report"}),
        ("title=Another title (invented)", {"report"}),
        ("ensemble.draws=50", {"yields", "regions", "ensemble", "trend", "report"}),
    ],
)
def test_changed_key_reruns_what_it_touches(finished, override, stages):
    run_all(finished, override, until="report")
    again = traced()
    assert {line.partition("_")[0] for line in again} == stages
    assert "regions_overlay" not in again


def test_changed_input_reruns_what_follows(finished):
    (finished.parent / "tas_A_low_r1.nc").write_text("other content", encoding="utf-8")
    run_all(finished, until="season")
    assert traced() == [
        "correct_summary",
        "correct_tile A_low_r1 00",
        "prepare_tile A_low_r1 00",
        "season_tile A_low_r1 maize rainfed 00",
    ]


def test_until_ends_with_the_stage(file):
    run_all(file, until="prepare")
    assert {line.split("_")[0] for line in traced()} == {"regions", "prepare"}


def test_dry_run_says_what_and_writes_nothing(file, tmp_path):
    before = sorted(tmp_path.rglob("*"))
    jobs = dry_run(*planned(file))
    assert len(jobs) == JOBS
    assert {job.reason for job in jobs if job.rule == "regions_overlay"} == {
        "Missing output files: regions/overlay.nc"
    }
    assert sorted(tmp_path.rglob("*")) == before


def test_dry_run_says_why(finished):
    assert dry_run(*planned(finished)) == []
    changed = dry_run(*planned(finished, "ensemble.draws=50"))
    assert [(line.stage, line.name, line.count, line.why) for line in lines(changed)] == [
        ("yields", "coefficients", 1, "changed: draws"),
        ("yields", "grid", 3, "follows other jobs"),
    ]


def test_failing_job_is_one_line(file, tmp_path, monkeypatch):
    monkeypatch.setenv("STAND_IN_FAIL", "correct_tile B_low_r1")
    root = tmp_path / "results" / "engine"
    with pytest.raises(RunFailed) as caught:
        run_all(file)
    assert str(caught.value) == (
        f"correct: B_low_r1 00: {root}/correct/B_low_r1/tile-00.nc was not made: "
        f"climate.nc: tas is broken (log: {root}/logs/correct/tile_B_low_r1_00.log)"
    )
    assert not (root / "correct" / "B_low_r1" / "tile-00.nc").exists()


def test_defect_of_a_job_names_the_exception_and_the_log(file, tmp_path, monkeypatch):
    monkeypatch.setenv("STAND_IN_CRASH", "regions_overlay")
    with pytest.raises(RunFailed, match=r"^regions: .* was not made: ZeroDivisionError: a defect"):
        run_all(file)
    log = tmp_path / "results" / "engine" / "logs" / "regions" / "overlay.log"
    assert "Traceback" in log.read_text(encoding="utf-8")


def test_what_failed_runs_the_next_time(file, tmp_path, monkeypatch):
    monkeypatch.setenv("STAND_IN_FAIL", "season_tile observed")
    with pytest.raises(RunFailed, match="season: observed maize rainfed 00"):
        run_all(file)
    done = traced()
    monkeypatch.delenv("STAND_IN_FAIL")
    run_all(file)
    again = traced()
    assert set(done) & set(again) == set()
    assert len(done) + len(again) == JOBS


def test_one_run_at_a_time(file, tmp_path):
    root = tmp_path / "results" / "engine"
    with run_lock(root), pytest.raises(ResultsError, match="another run is working here"):
        run_all(file)
