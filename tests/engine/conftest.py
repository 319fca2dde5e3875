"""Stand-ins for the jobs of the engine's tests."""

from __future__ import annotations

import shutil

import pytest
import snakemake.shell  # noqa: F401  keeps the sys.stdout of its import: not that of a test
from engine_inputs import STAND_IN, run_all, traced, write_assessment


@pytest.fixture
def file(tmp_path, monkeypatch):
    """The file of an assessment whose jobs are stand-ins."""
    monkeypatch.setenv("PYTHONPATH", str(STAND_IN))
    monkeypatch.setenv("STAND_IN_TRACE", str(tmp_path / "trace.txt"))
    return write_assessment(tmp_path)


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """The folder of an assessment that has run to the report, and the jobs that ran."""
    folder = tmp_path_factory.mktemp("whole")
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("PYTHONPATH", str(STAND_IN))
        patch.setenv("STAND_IN_TRACE", str(folder / "trace.txt"))
        _, shown = run_all(write_assessment(folder), until="report")
        return folder, traced(), shown


@pytest.fixture
def finished(whole, tmp_path, monkeypatch):
    """The file of a copy of an assessment that has run to the report."""
    monkeypatch.setenv("PYTHONPATH", str(STAND_IN))
    monkeypatch.setenv("STAND_IN_TRACE", str(tmp_path / "trace.txt"))
    shutil.copytree(whole[0], tmp_path / "copy")
    return tmp_path / "copy" / "assessment.yaml"
