"""Opening every input of an assessment before anything is computed, and reporting all problems."""

from __future__ import annotations

import glob
import os
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from stook.assessment.areas import SystemFacts, inspect_areas
from stook.assessment.inventory import SeriesFacts, as_problems, inspect_series, pair_problems
from stook.assessment.load import results_folder
from stook.assessment.requirements import (
    NeededPixels,
    response_problems,
    series_problems,
    table_problems,
    weight_problems,
)
from stook.assessment.schema import Assessment
from stook.assessment.simulations import Simulation, observed, simulations
from stook.assessment.variables import series_variables
from stook.errors import Problem, StookError
from stook.grids.analysis import analysis_grid

Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class Check:
    """What a check found.

    Attributes
    ----------
    simulations
        `observed`, if there is a reference, and every simulation whose files were found.
    series
        Facts of every climate series that could be opened.
    systems
        Facts of every crop x water system whose area could be read.
    pixels
        Pixels of the analysis grid that would be computed.
    problems
        Errors first, then warnings, each in the order they were found.
    """

    simulations: list[Simulation] = field(default_factory=list)
    series: list[SeriesFacts] = field(default_factory=list)
    systems: list[SystemFacts] = field(default_factory=list)
    pixels: int = 0
    problems: list[Problem] = field(default_factory=list)

    @property
    def errors(self) -> list[Problem]:
        """The problems that stop a run."""
        return [problem for problem in self.problems if problem.severity == "error"]

    @property
    def warnings(self) -> list[Problem]:
        """The problems that are carried into the report."""
        return [problem for problem in self.problems if problem.severity == "warning"]


def check(assessment: Assessment, progress: Progress | None = None) -> Check:
    """Open every input of an assessment and report all problems at once; write nothing.

    Parameters
    ----------
    assessment
        Validated.
    progress
        Called as ``progress(done, all, what)`` before every climate series.
    """
    problems: list[Problem] = list(_missing_files(assessment))
    found = _simulations(assessment, problems)
    problems += response_problems(assessment, found)
    problems += weight_problems(assessment, found)
    problems += table_problems(assessment, found)
    systems: list[SystemFacts] = []
    pixels = None
    try:
        grid = analysis_grid(assessment)
        systems, needed, wrong = inspect_areas(assessment, grid)
        pixels = None if needed is None else NeededPixels(grid, needed)
        problems += wrong
    except StookError as error:
        problems += as_problems(error)
    facts = _series(assessment, found, problems, progress)
    problems += series_problems(assessment, found, facts, pixels)
    problems += _results_problems(results_folder(assessment))
    ordered = sorted(dict.fromkeys(problems), key=lambda problem: problem.severity)
    series = [one for variables in facts.values() for one in variables.values()]
    count = int(pixels.needed.sum()) if pixels else 0
    return Check(found, series, systems, count, ordered)


def _missing_files(assessment: Assessment) -> Iterator[Problem]:
    """Yield every climate file or pattern of the assessment that names nothing."""
    spec = assessment.simulations
    named = [assessment.reference.files] if assessment.reference else []
    named += [run.files for run in spec.runs]
    for files in named:
        for variable, patterns in files.items():
            for pattern in patterns:
                path = assessment.folder / pattern
                if not glob.glob(str(path), recursive=True):
                    yield Problem("error", str(path), f"no such file (for {variable})")


def _simulations(assessment: Assessment, problems: list[Problem]) -> list[Simulation]:
    found: list[Simulation] = []
    reported = {problem.where for problem in problems}
    try:
        reference = observed(assessment)
        found += [reference] if reference else []
    except StookError as error:
        problems += [p for p in as_problems(error) if p.where not in reported]
    try:
        found += simulations(assessment)
    except StookError as error:
        problems += [p for p in as_problems(error) if p.where not in reported]
    return found


def _series(
    assessment: Assessment,
    found: Sequence[Simulation],
    problems: list[Problem],
    progress: Progress | None,
) -> dict[str, dict[str, SeriesFacts]]:
    """Inspect every series that would be prepared, by simulation and variable."""
    wanted = [(s, v) for s in found for v in _wanted(assessment, s)]
    facts: dict[str, dict[str, SeriesFacts]] = {}
    for done, (simulation, variable) in enumerate(wanted):
        if progress is not None:
            progress(done, len(wanted), f"{simulation.name} {variable}")
        one, wrong = inspect_series(simulation.name, variable, simulation.files[variable])
        problems += wrong
        if one is not None:
            facts.setdefault(simulation.name, {})[variable] = one
    for series in facts.values():
        if "tasmin" in series and "tasmax" in series:
            problems += pair_problems(series["tasmin"], series["tasmax"])
    return facts


def _wanted(assessment: Assessment, simulation: Simulation) -> list[str]:
    """Return the variables that are prepared; all there are if a response cannot be read."""
    try:
        return series_variables(assessment, simulation.files)
    except StookError:
        return list(simulation.files)


def _results_problems(root: Path) -> Iterator[Problem]:
    """Yield an error if the results folder cannot be made or written, without trying."""
    there = root
    while not there.exists():
        there = there.parent
    if not there.is_dir() or not os.access(there, os.W_OK | os.X_OK):
        what = "is no folder" if not there.is_dir() else "cannot be written"
        yield Problem("error", str(root), f"{there} {what}; give another with --set results=FOLDER")
