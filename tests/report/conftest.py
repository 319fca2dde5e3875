"""One invented assessment with its report, made once for all tests of the report."""

from __future__ import annotations

from pathlib import Path

import pytest
from invented_results import invent
from stook.assessment.schema import Assessment
from stook.report import job


@pytest.fixture(scope="session")
def reported(tmp_path_factory: pytest.TempPathFactory) -> Assessment:
    """Return an assessment whose report folder is complete; do not alter it."""
    assessment = invent(Path(tmp_path_factory.mktemp("reported")))
    job.page(assessment)
    return assessment
