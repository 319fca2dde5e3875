"""What happens once before the first job: the check, and the resolved assessment on disk."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from stook.assessment.load import save_resolved
from stook.engine.plan import Plan
from stook.errors import Problem, ResultsError, raise_problems
from stook.grids.files import temporary_name

CHECKED = "checked"
"""Key of the Snakemake configuration that says the check has been made already."""


def start(plan: Plan, config: Mapping[str, Any]) -> None:
    """Check the assessment, unless that was done, and write its resolved form.

    Raises
    ------
    StookError
        If the check finds an error, or the results folder cannot be written.
    """
    if not config.get(CHECKED):
        from stook.assessment.check import check

        found = check(plan.assessment)
        raise_problems(found.problems)
        save_problems(plan.root, found.problems)
    save_resolved(plan.assessment)


def prepare_folder(root: Path) -> None:
    """Make the results folder and see that it can be written.

    Raises
    ------
    ResultsError
        If it cannot.
    """
    try:
        root.mkdir(parents=True, exist_ok=True)
        probe = root / f".writable.{os.getpid()}"
        probe.touch()
        probe.unlink()
    except OSError as error:
        raise ResultsError(
            f"{root}: the results folder cannot be written ({error.strerror}); "
            "give another with --set results=FOLDER"
        ) from None


def save_problems(root: Path, problems: Sequence[Problem]) -> None:
    """Write the findings of the check for the report, if they differ from those written."""
    path = root / "check.json"
    content = [{"severity": p.severity, "where": p.where, "message": p.message} for p in problems]
    text = json.dumps(content, indent=1, ensure_ascii=False)
    if not path.exists() or path.read_text(encoding="utf-8") != text:
        temporary = temporary_name(path)
        temporary.write_text(text, encoding="utf-8")
        temporary.replace(path)
