"""From the file pattern of an assessment to its simulations, each with its files per variable."""

from __future__ import annotations

import glob
import re
from dataclasses import dataclass
from pathlib import Path
from typing import get_args

from stook.assessment.schema import Assessment, Simulations
from stook.constants import OBSERVED
from stook.errors import AssessmentError, InputError
from stook.season.definition import Variable


@dataclass(frozen=True)
class Simulation:
    """One model x scenario x realisation, historical and scenario part together.

    `files` maps a variable to the files of its series, sorted by name.
    """

    model: str
    scenario: str
    realisation: str
    files: dict[str, tuple[Path, ...]]

    @property
    def name(self) -> str:
        """``MODEL_SCENARIO_REALISATION``, or ``observed``."""
        if self.model == OBSERVED:
            return OBSERVED
        return f"{self.model}_{self.scenario}_{self.realisation}"


def simulations(assessment: Assessment) -> list[Simulation]:
    """Return all simulations of an assessment, sorted by name, without `observed`.

    Raises
    ------
    InputError
        If a pattern finds no file.
    AssessmentError
        If models or scenarios are asked for that the pattern does not find.
    """
    spec = assessment.simulations
    if spec.pattern is not None:
        return _expand(assessment, spec)
    found = [
        Simulation(run.model, run.scenario, run.realisation, _expand_files(assessment, run.files))
        for run in spec.runs
    ]
    names = [simulation.name for simulation in found]
    if twice := sorted({name for name in names if names.count(name) > 1}):
        raise AssessmentError(f"{assessment.source}: simulations.runs: {twice[0]} stands twice")
    return sorted(found, key=lambda simulation: simulation.name)


def observed(assessment: Assessment) -> Simulation | None:
    """Return the reference data as the pseudo-simulation `observed`, if there is a reference."""
    if assessment.reference is None:
        return None
    files = _expand_files(assessment, assessment.reference.files)
    return Simulation(OBSERVED, OBSERVED, OBSERVED, files)


def all_simulations(assessment: Assessment) -> list[Simulation]:
    """Return `observed`, if there is a reference, and then every simulation."""
    reference = observed(assessment)
    return ([reference] if reference else []) + simulations(assessment)


def find_simulation(assessment: Assessment, name: str) -> Simulation:
    """Return the simulation of a name, `observed` included.

    Raises
    ------
    AssessmentError
        If there is none; the message lists the names there are.
    """
    known = all_simulations(assessment)
    for simulation in known:
        if simulation.name == name:
            return simulation
    raise AssessmentError(
        f"{assessment.source}: no simulation {name}; there are "
        f"{', '.join(simulation.name for simulation in known)}"
    )


def _expand_files(
    assessment: Assessment, files: dict[Variable, list[str]]
) -> dict[str, tuple[Path, ...]]:
    expanded: dict[str, tuple[Path, ...]] = {}
    for variable, patterns in files.items():
        found: dict[Path, None] = {}
        for pattern in patterns:
            matches = sorted(glob.glob(str(assessment.folder / pattern), recursive=True))
            if not matches:
                raise InputError(f"{assessment.folder / pattern}: no such file (for {variable})")
            found |= dict.fromkeys(Path(match).resolve() for match in matches)
        expanded[variable] = tuple(found)
    return expanded


def _expand(assessment: Assessment, spec: Simulations) -> list[Simulation]:
    assert spec.pattern is not None
    template = str(assessment.folder / spec.pattern)
    found: dict[tuple[str, str, str], dict[str, list[Path]]] = {}
    expression = _expression(template)
    variables = get_args(Variable)
    for name in sorted(glob.glob(re.sub(r"\{\w+\}", "*", template), recursive=True)):
        match = expression.fullmatch(name)
        if match and match["variable"] in variables:
            key = (match["model"], match["scenario"], match["realisation"])
            found.setdefault(key, {}).setdefault(match["variable"], []).append(Path(name).resolve())
    if not found:
        raise InputError(f"{template}: no file matches this pattern of simulations.pattern")
    keys = [key for key in found if key[1] != spec.historical] or list(found)
    keys = [key for key in keys if spec.models is None or key[0] in spec.models]
    keys = [key for key in keys if spec.scenarios is None or key[1] in spec.scenarios]
    _require_named(assessment, "models", spec.models, {key[0] for key in keys})
    _require_named(assessment, "scenarios", spec.scenarios, {key[1] for key in keys})
    result = []
    for model, scenario, realisation in sorted(keys):
        past = found.get((model, str(spec.historical), realisation), {})
        if scenario == spec.historical:
            past = {}
        here = found[model, scenario, realisation]
        files = {v: tuple(past.get(v, []) + here.get(v, [])) for v in variables}
        files = {variable: paths for variable, paths in files.items() if paths}
        result.append(Simulation(model, scenario, realisation, files))
    return result


def _require_named(
    assessment: Assessment, key: str, wanted: list[str] | None, there: set[str]
) -> None:
    if lost := sorted(set(wanted or []) - there):
        raise AssessmentError(
            f"{assessment.source}: simulations.{key}: {', '.join(lost)} not found by the pattern; "
            f"found {', '.join(sorted(there)) or 'none'}"
        )


def _expression(template: str) -> re.Pattern[str]:
    """Turn a pattern with named fields and ``*``/``?`` into a regular expression."""
    parts = []
    seen: set[str] = set()
    for token in re.split(r"(\{\w+\}|\*\*/|\*|\?)", template):
        if token.startswith("{"):
            field = token[1:-1]
            parts.append(f"(?P={field})" if field in seen else f"(?P<{field}>[^/_]+)")
            seen.add(field)
        elif token == "**/":
            parts.append("(?:.*/)?")
        elif token == "*":
            parts.append("[^/]*")
        elif token == "?":
            parts.append("[^/]")
        else:
            parts.append(re.escape(token))
    return re.compile("".join(parts))
