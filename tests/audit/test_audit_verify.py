"""Every way in which a results folder can differ from its ledger is found, and named once."""

from __future__ import annotations

import hashlib
import json
import os
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job, forget, ledger_table, record_path, sha256
from stook.audit.verify import Finding, verify
from stook.errors import InputError, ResultsError


@pytest.fixture
def assessment(tmp_path: Path) -> Assessment:
    return Assessment.model_validate(
        {
            "title": "Invented",
            "name": "small",
            "seed": 1,
            "grid": {
                "lat": {"first": 0.5, "last": 1.5, "step": 1},
                "lon": {"first": 0.5, "last": 1.5, "step": 1},
            },
            "periods": {"baseline": (1991, 2020)},
            "correct": {"all": {"method": "none"}},
            "simulations": {"runs": [_run()]},
            "crops": {"maize": {"systems": {"rainfed": _system()}}},
            "regions": {"file": "regions.gpkg"},
            "source": str(tmp_path / "assessment.yaml"),
        }
    )


def _run() -> dict[str, object]:
    return {"model": "M", "scenario": "s", "realisation": "r1", "files": {"pr": ["pr.nc"]}}


def _system() -> dict[str, object]:
    calendar = {"planting": 100, "maturity": 200}
    return {"area": 1.0, "calendar": calendar, "baseline_yield": 2.0, "response": "r.yaml"}


@pytest.fixture
def results(assessment: Assessment, tmp_path: Path) -> Path:
    """Make raw.csv -> prepare/layers.nc -> yields/coefficients/maize_rainfed.csv."""
    raw = tmp_path / "raw.csv"
    raw.write_text("a\n1\n", encoding="utf-8")
    layout = Layout.of(assessment)
    with Job(assessment, "prepare_layers", [raw]) as job:
        data = xr.Dataset({"area": ("lat", [1.0, np.nan, 4.0])})
        job.netcdf(data, layout.layers, "layers")
    write_child(assessment)
    return layout.root


def write_child(assessment: Assessment) -> None:
    layout = Layout.of(assessment)
    with Job(assessment, "yields_coefficients", [layout.layers]) as job:
        frame = pd.DataFrame({"draw": [0, 1], "heat": [0.25, 0.75]})
        job.table(frame, layout.coefficients("maize", "rainfed"))


CHILD = "yields/coefficients/maize_rainfed.csv"
PARENT = "prepare/layers.nc"


def kinds(findings: list[Finding]) -> list[tuple[str, str]]:
    return [(finding.kind, finding.path) for finding in findings]


def test_untouched_results_have_no_findings(results: Path) -> None:
    assert verify(results) == []


def test_digest_is_the_standard_sha256(tmp_path: Path) -> None:
    # FIPS 180-4 example: SHA-256 of "abc" (NIST, Secure Hash Standard examples; from memory)
    file = tmp_path / "abc"
    file.write_bytes(b"abc")
    assert sha256(file) == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


def test_altered_file_is_found_even_if_size_and_date_stay(results: Path) -> None:
    path = results / CHILD
    before = path.stat()
    path.write_text(path.read_text(encoding="utf-8").replace("0.75", "0.57"), encoding="utf-8")
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns))
    assert path.stat().st_size == before.st_size
    findings = verify(results)
    assert kinds(findings) == [("altered", CHILD)]
    assert "was altered after it was made" in str(findings[0])


def test_missing_file_is_found(results: Path) -> None:
    (results / CHILD).unlink()
    assert kinds(verify(results)) == [("missing", CHILD)]


def test_child_of_a_remade_parent_is_stale_until_it_is_made_again(
    results: Path, assessment: Assessment, tmp_path: Path
) -> None:
    layout = Layout.of(assessment)
    with Job(assessment, "prepare_layers", [tmp_path / "raw.csv"]) as job:
        job.netcdf(xr.Dataset({"area": ("lat", [1.0, 2.0])}), layout.layers, "layers")
    findings = verify(results)
    assert kinds(findings) == [("stale", CHILD)]
    assert "an earlier version of prepare/layers.nc" in findings[0].message
    write_child(assessment)
    assert verify(results) == []


def test_touching_a_parent_without_changing_it_is_no_finding(results: Path) -> None:
    (results / PARENT).touch()
    assert verify(results) == []


def test_changed_and_removed_raw_inputs_are_found(results: Path, tmp_path: Path) -> None:
    raw = tmp_path / "raw.csv"
    raw.write_text("a\n2\n", encoding="utf-8")
    findings = verify(results)
    assert kinds(findings) == [("input", str(raw))]
    assert "has changed since prepare/layers.nc was made" in findings[0].message
    raw.unlink()
    assert "is gone since" in verify(results)[0].message


def test_files_without_a_record_are_found(results: Path) -> None:
    (results / "yields" / "notes.txt").write_text("by hand", encoding="utf-8")
    (results / "prepare" / ".layers.nc.77.part").write_text("half", encoding="utf-8")
    findings = verify(results)
    assert kinds(findings) == [
        ("untracked", "prepare/.layers.nc.77.part"),
        ("untracked", "yields/notes.txt"),
    ]
    assert "half-written" in findings[0].message


def test_logs_and_the_assessment_itself_are_not_results(results: Path) -> None:
    (results / "logs").mkdir()
    (results / "logs" / "a.log").write_text("log", encoding="utf-8")
    (results / "assessment.yaml").write_text("title: x", encoding="utf-8")
    assert verify(results) == []


def test_parent_whose_record_was_removed_is_found(results: Path) -> None:
    record_path(results, results / PARENT).unlink()
    assert kinds(verify(results)) == [("untracked", PARENT), ("stale", CHILD)]


@pytest.mark.parametrize("content", ["{not json", "[]", '{"path": "another/file"}'])
def test_spoilt_record_is_found(results: Path, content: str) -> None:
    record_path(results, results / CHILD).write_text(content, encoding="utf-8")
    findings = verify(results)
    assert kinds(findings) == [("record", f"ledger/{CHILD}.json"), ("untracked", CHILD)]


def test_folder_without_ledger_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ResultsError, match="holds no ledger folder"):
        verify(tmp_path)


def test_progress_ends_with_all_bytes_read(results: Path) -> None:
    calls: list[tuple[int, int]] = []
    verify(results, progress=lambda done, total: calls.append((done, total)))
    sizes = [(results / name).stat().st_size for name in (PARENT, CHILD)]
    assert calls[-1] == (sum(sizes) + 4, sum(sizes) + 4)  # and raw.csv with its 4 bytes
    assert [done for done, _ in calls] == sorted(done for done, _ in calls)


def test_results_moved_to_another_folder_still_verify(results: Path, tmp_path: Path) -> None:
    moved = tmp_path / "handed-on"
    results.rename(moved)
    assert verify(moved) == []


def test_ledger_table_has_a_row_for_each_variable(results: Path) -> None:
    table = ledger_table(results)
    area = table.query("path == @PARENT and variable == 'area'").iloc[0]
    assert (area["missing"], area["minimum"], area["mean"], area["maximum"]) == (1, 1.0, 2.5, 4.0)
    assert area["rule"] == "prepare_layers"
    assert area["size"] == (results / PARENT).stat().st_size
    assert area["sha256"] == hashlib.sha256((results / PARENT).read_bytes()).hexdigest()
    heat = table.query("path == @CHILD and variable == 'heat'").iloc[0]
    assert (heat["minimum"], heat["mean"], heat["maximum"]) == (0.25, 0.5, 0.75)
    assert heat["parents"] == PARENT


def test_file_without_variables_has_one_row(results: Path, assessment: Assessment) -> None:
    with Job(assessment, "report_page", []) as job:
        job.claim(Layout.of(assessment).report_page).write_text("<p>", encoding="utf-8")
    rows = ledger_table(results).query("rule == 'report_page'")
    assert len(rows) == 1
    assert rows["mean"].isna().all()


def test_job_that_runs_again_clears_what_a_killed_one_left(
    results: Path, assessment: Assessment
) -> None:
    left = (results / CHILD).with_name(".maize_rainfed.csv.77.part")
    left.write_text("half", encoding="utf-8")
    write_child(assessment)
    assert not left.exists()
    assert verify(results) == []


def test_parent_in_the_results_but_outside_the_stages_needs_no_record(
    results: Path, assessment: Assessment
) -> None:
    resolved = results / "assessment.yaml"
    resolved.write_text("title: Invented", encoding="utf-8")
    with Job(assessment, "report_page", [resolved]) as job:
        job.claim(Layout.of(assessment).report_page).write_text("<p>", encoding="utf-8")
    record = json.loads(record_path(results, Layout.of(assessment).report_page).read_text())
    assert record["parents"] == {"assessment.yaml": sha256(resolved)}
    assert verify(results) == []
    resolved.write_text("title: Other", encoding="utf-8")
    assert kinds(verify(results)) == [("input", "assessment.yaml")]


def test_failing_job_leaves_nothing(results: Path, assessment: Assessment) -> None:
    path = Layout.of(assessment).report_page

    def fail() -> None:
        with Job(assessment, "report_page", []) as job:
            job.claim(path).write_text("half", encoding="utf-8")
            raise InputError("broken")

    with pytest.raises(InputError, match="broken"):
        fail()
    assert not path.exists()
    assert verify(results) == []


def test_forget_removes_file_and_record(results: Path) -> None:
    forget(results, results / CHILD)
    assert not (results / CHILD).exists()
    assert verify(results) == []
