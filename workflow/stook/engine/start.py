"""What happens once before the first job: the check, and the resolved assessment on disk."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from stook.assessment.load import save_resolved
from stook.engine.plan import Plan, assessment_of
from stook.errors import Problem, ResultsError, raise_problems
from stook.grids.files import temporary_name

CHECKED = "checked"
"""Key of the Snakemake configuration that says the check has been made already."""


def checked_plan(config: Mapping[str, Any], first: bool) -> tuple[Plan, list[Problem] | None]:
    """Return the plan of a Snakemake configuration, checked before anything is written.

    Parameters
    ----------
    config
        See `Plan.from_config`.
    first
        Whether this is the process that starts the jobs, and not one of a job.

    Returns
    -------
    plan
        The jobs.
    problems
        The warnings of the check; None if it was not for this process to check.

    Raises
    ------
    StookError
        If the check finds an error: a line for each.
    """
    if not first or config.get(CHECKED):
        return Plan.from_config(config), None
    from stook.assessment.check import check

    found = check(assessment_of(config))
    raise_problems(found.problems)
    return Plan.from_config(config), found.problems


def start(plan: Plan, problems: Sequence[Problem] | None) -> None:
    """Write the resolved assessment and, unless that was done, the warnings of its check.

    Raises
    ------
    ResultsError
        If the results folder cannot be written.
    """
    prepare_folder(plan.root)
    if problems is not None:
        save_problems(plan.root, problems)
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
