"""The command line from a sound assessment on: run, dry run, demo, with stand-in jobs."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import pytest
from stook import cli
from stook.demo import MARK
from stook.engine.disk import size

STAND_IN = Path(__file__).parents[1] / "engine" / "stand_in"

pytestmark = pytest.mark.filterwarnings("ignore:unclosed file:ResourceWarning")  # in Snakemake


def test_run_of_one_region(case):
    arguments = ["run", "--region", "Saltmere", "--until", "prepare", "--cores", "2"]
    status, out, err = case.process(*arguments, PYTHONPATH=str(STAND_IN))
    assert (status, err) == (0, "")
    root = case.folder / "results" / "hollin-tiny@Saltmere"
    assert out.splitlines()[-2:] == ["4 jobs done", f"results: {root}"]
    assert json.loads((root / "check.json").read_text(encoding="utf-8")) == []
    assert (root / "prepare" / "SEDGE-LR_high_r1i1p1f1" / "tile-00.nc").exists()
    status, out, err = case.process(*arguments, PYTHONPATH=str(STAND_IN))
    assert (status, err) == (0, "")
    assert out.splitlines() == ["everything is up to date", f"results: {root}"]


def test_warnings_are_shown_and_written_for_the_report(case):
    settings = ["--set", "grid.lat.last=40.25", "--set", "regions.only=[Saltmere]"]
    arguments = ["run", "--until", "prepare", *settings]
    status, _, err = case.process(*arguments, PYTHONPATH=str(STAND_IN))
    assert status == 0
    path = case.folder / "results" / "hollin-tiny" / "check.json"
    (entry,) = json.loads(path.read_text(encoding="utf-8"))
    assert entry["severity"] == "warning"
    assert entry["where"].endswith("districts.gpkg")
    assert err.splitlines() == [f"warning: {entry['where']}: {entry['message']}"]


def test_failing_job_is_one_line_and_status_1(case):
    environment = {"PYTHONPATH": str(STAND_IN), "STAND_IN_FAIL": "prepare_tile observed"}
    status, _, err = case.process("run", "--until", "prepare", "--cores", "1", **environment)
    root = case.folder / "results" / "hollin-tiny"
    assert status == 1
    assert err == (
        f"error: prepare: observed 00: {root}/prepare/observed/tile-00.nc was not made: "
        f"climate.nc: tas is broken (log: {root}/logs/prepare/tile_observed_00.log)\n"
    )


def test_dry_run_says_what_and_how_much(case, capsys, monkeypatch):
    before = case.listing()
    assert case.stook("run", "--dry-run", "--until", "correct", monkeypatch=monkeypatch) == 0
    out = capsys.readouterr().out.splitlines()
    assert [line.split()[:3] for line in out[:-1]] == [
        ["prepare", "layers", "1"],
        ["prepare", "tile", "2"],
        ["correct", "tile", "1"],
        ["correct", "summary", "1"],
        ["regions", "overlay", "1"],
    ]
    assert all(line.endswith("not made yet") for line in out[:-1])
    # Daily values of 23 pixels: 4 variables, 20 observed and twice 50 simulated years, 4 bytes,
    # of which 0.80 (precipitation 0.30) are left when compressed; 50 kB of each of six files more.
    daily = 23 * 365 * (20 + 50 + 50) * 4 * (3 * 0.80 + 0.30)
    told = out[-1].split(" would run and write about ")
    assert told[0] == "6 jobs"
    number, unit = told[1].split()[:2]
    assert unit == "MB"
    assert float(number) == pytest.approx((daily + 6 * 50e3) / 1e6, rel=0.02)
    assert case.listing() == before


def test_unknown_stage(case, capsys, monkeypatch):
    assert case.stook("run", "--until", "harvest", monkeypatch=monkeypatch) == 1
    assert capsys.readouterr().err == (
        "error: --until: no stage harvest; the stages are prepare, correct, season, yields, "
        "regions, ensemble, trend, report\n"
    )


@pytest.fixture
def demo(tmp_path, monkeypatch):
    """Run the demo without its jobs; return the exit status and the file that would be run."""
    ran = []
    monkeypatch.setattr(cli, "_run", lambda file, cores=None: ran.append((file, cores)))

    def call(*arguments):
        ran.clear()
        argv = ["stook", "demo", str(tmp_path / "here"), "--size", "tiny", "--cores", "2"]
        monkeypatch.setattr(sys, "argv", [*argv, *arguments])
        with pytest.raises(SystemExit) as end:
            cli.main()
        return int(end.value.code or 0), list(ran)

    return call


def test_demo_generates_once(demo, tmp_path, capsys):
    file = tmp_path / "here" / "assessment.yaml"
    assert demo() == (0, [(file, 2)])
    assert capsys.readouterr().out == f"generated the invented world in {tmp_path / 'here'}\n"
    made = file.stat().st_mtime_ns
    assert demo() == (0, [(file, 2)])
    assert (
        capsys.readouterr().out == f"the invented world in {tmp_path / 'here'} is there already\n"
    )
    assert file.stat().st_mtime_ns == made
    assert demo("--seed", "7") == (0, [(file, 2)])
    assert "seed: 7 " in file.read_text(encoding="utf-8")
    file.unlink()  # as after an interruption: the assessment is written last
    assert demo("--seed", "7") == (0, [(file, 2)])
    assert file.exists()


def test_demo_leaves_the_folder_of_others_alone(demo, tmp_path, capsys):
    other = tmp_path / "here" / "districts.gpkg"
    other.parent.mkdir()
    other.write_text("mine", encoding="utf-8")
    assert demo() == (1, [])
    assert capsys.readouterr().err == (
        f"error: {other.parent}: is not empty and holds no demo world; give another folder\n"
    )
    assert other.read_text(encoding="utf-8") == "mine"
    assert not (other.parent / MARK).exists()


def test_demo_refuses_an_impossible_world(demo, capsys):
    assert demo("--years", "3") == (1, [])
    assert capsys.readouterr().err == "error: demo: years must be 20 or more, got 3\n"


@pytest.mark.parametrize(
    ("count", "words"),
    [(10, "1 kB"), (52_000, "52 kB"), (1.24e6, "1.2 MB"), (3.26e9, "3.3 GB"), (2e12, "2.0 TB")],
)
def test_size_in_words(count, words):
    assert size(count) == words
