"""Errors that a user can mend.

Every message is one line: which file or key, what is wrong, what would be right. The command line
and the job entry print the message of a `StookError` without a traceback and end with status 1;
any other exception is a defect of the program and keeps its traceback.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal


class StookError(Exception):
    """A mistake in what the user gave; the message is one line that says how to mend it."""


class AssessmentError(StookError):
    """The assessment file, or a response document, is not valid."""


class InputError(StookError):
    """An input file is missing, unreadable, or does not hold what the assessment says."""


class ResultsError(StookError):
    """The results folder cannot be used: not writable, incomplete, or altered."""


@dataclass(frozen=True)
class Problem:
    """One finding of `check`.

    Attributes
    ----------
    severity
        ``error`` stops the run before anything is computed; ``warning`` is listed and carried
        into the report.
    where
        The file, or ``file: key``, it concerns.
    message
        What is wrong and what would be right, one line.
    """

    severity: Literal["error", "warning"]
    where: str
    message: str

    def __str__(self) -> str:
        return f"{self.where}: {self.message}"


def raise_problems(problems: list[Problem], kind: type[StookError] = AssessmentError) -> None:
    """Raise one error that lists every problem of severity ``error``, one line each.

    Raises
    ------
    StookError
        Of the given kind, if there is at least one error.
    """
    errors = [str(problem) for problem in problems if problem.severity == "error"]
    if errors:
        raise kind("\n".join(errors))
