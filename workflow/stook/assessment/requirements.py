"""What an assessment requires of its climate series: variables, periods, time steps, coverage."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from stook.assessment.inventory import SeriesFacts, as_problems
from stook.assessment.schema import Assessment
from stook.assessment.simulations import Simulation
from stook.assessment.variables import (
    series_variables,
    sources,
    system_indices,
    system_response,
    yield_response,
)
from stook.constants import OBSERVED
from stook.ensemble.horizons import level_windows
from stook.ensemble.supply import read_population
from stook.errors import AssessmentError, Problem, StookError
from stook.grids.analysis import AnalysisGrid
from stook.season.definition import (
    SEASON,
    DaysAbove,
    DegreeDays,
    DrySpell,
    IndexDefinition,
    LargestTotal,
    WetDays,
    needed_variables,
)
from stook.yields.co2 import HISTORICAL, concentrations, read_concentrations
from stook.yields.technology import technology_factors

DAILY_ONLY = (DegreeDays, DaysAbove, DrySpell, WetDays, LargestTotal)
"""Indices that cannot be taken from monthly or annual means."""


@dataclass(frozen=True)
class NeededPixels:
    """The analysis grid, and where on it climate is needed, bool (lat, lon)."""

    grid: AnalysisGrid
    needed: np.ndarray


Facts = Mapping[str, Mapping[str, SeriesFacts]]
"""Facts by simulation and variable."""


def response_problems(assessment: Assessment, found: Sequence[Simulation]) -> list[Problem]:
    """Return what is wrong with response documents, and the indices no simulation can give."""
    problems: dict[Problem, None] = {}
    for crop, system in assessment.systems:
        path = assessment.path(assessment.system(crop, system).response)
        try:
            response = system_response(assessment, crop, system)
        except StookError as error:
            problems |= dict.fromkeys(as_problems(error))
            continue
        if (response.crop, response.system) != (crop, system):
            message = (
                f"is the response of {response.crop}, {response.system}; "
                f"it is used for {crop}, {system}"
            )
            problems[Problem("warning", str(path), message)] = None
        for name, definition in system_indices(assessment, crop, system).items():
            where = str(path if name in response.indices else assessment.source)
            lacking = (
                _lacking_phase(assessment, crop, system, definition),
                _lacking_variable(definition, found),
            )
            for text in filter(None, lacking):
                problems[Problem("error", where, f"index {name} {text}")] = None
    return list(problems)


def _lacking_phase(
    assessment: Assessment, crop: str, system: str, definition: IndexDefinition
) -> str | None:
    phases = [SEASON, *assessment.system(crop, system).phases]
    if definition.phase in phases:
        return None
    return (
        f"is taken over the phase {definition.phase}, which {crop}, {system} has not; "
        f"it has {', '.join(phases)}"
    )


def _lacking_variable(definition: IndexDefinition, found: Sequence[Simulation]) -> str | None:
    without = [s for s in found if sources(definition, s.files) is None]
    if not without:
        return None
    needed = needed_variables(definition)
    lost = [v for v in needed if v not in without[0].files] or list(needed)
    names = [s.name for s in without]
    return f"needs {_listed(lost)}; {_listed(names)} {'has' if len(names) == 1 else 'have'} none"


def series_problems(
    assessment: Assessment,
    found: Sequence[Simulation],
    facts: Facts,
    pixels: NeededPixels | None,
) -> list[Problem]:
    """Return what is wrong with the series of each simulation, taken together."""
    problems: list[Problem] = []
    for simulation in found:
        series = facts.get(simulation.name, {})
        if series:
            problems += _alike(series)
            problems += _periods(assessment, simulation.name, series)
            problems += _steps(assessment, simulation, series)
        if pixels is not None:
            problems += _coverage(series, pixels)
    problems += _corrected(assessment, found, facts)
    return problems


def _alike(series: Mapping[str, SeriesFacts]) -> Iterator[Problem]:
    first, *others = series.values()
    for other in others:
        for what in ("calendar", "step"):
            one, two = getattr(first.series, what), getattr(other.series, what)
            if one != two:
                name = "time step" if what == "step" else what
                yield _problem(
                    other,
                    f"{other.variable} has the {name} {two}, {first.variable} has {one}; "
                    "the variables of one simulation need the same",
                )


def _periods(
    assessment: Assessment, name: str, series: Mapping[str, SeriesFacts]
) -> Iterator[Problem]:
    """Yield the periods that the whole years of a simulation's variables do not cover."""
    wanted = {"periods.baseline": assessment.periods.baseline}
    if assessment.correct.calibration:
        wanted["correct.calibration"] = assessment.correct.calibration
    if name != OBSERVED:
        if assessment.periods.span:
            wanted["periods.span"] = assessment.periods.span
        for horizon, years in assessment.periods.horizons.items():
            wanted[f"periods.horizons.{horizon}"] = years
    alike: dict[tuple[int, int], list[SeriesFacts]] = {}
    for one in series.values():
        alike.setdefault(one.years, []).append(one)
    for (first, last), variables in alike.items():
        names = _listed([one.variable for one in variables])
        verb = "covers" if len(variables) == 1 else "cover"
        held = f"the whole years {first} to {last}" if first <= last else "no whole year"
        for key, (start, end) in wanted.items():
            if start < first or end > last:
                yield _problem(
                    variables[0], f"{names} of {name} {verb} {held}; {key} needs {start} to {end}"
                )


def _steps(
    assessment: Assessment, simulation: Simulation, series: Mapping[str, SeriesFacts]
) -> Iterator[Problem]:
    """Yield the indices that need daily values where the series is monthly or annual."""
    for crop, system in assessment.systems:
        try:
            indices = system_indices(assessment, crop, system)
        except StookError:
            continue
        for name, definition in indices.items():
            for variable in sources(definition, simulation.files) or ():
                one = series.get(variable)
                if one and one.series.step != "daily" and isinstance(definition, DAILY_ONLY):
                    yield _problem(
                        one,
                        f"{variable} of {one.simulation} is {one.series.step}; "
                        f"index {name} of {crop}, {system} needs daily values",
                    )


def _coverage(series: Mapping[str, SeriesFacts], pixels: NeededPixels) -> Iterator[Problem]:
    alike: dict[str, list[SeriesFacts]] = {}
    for one in series.values():
        lost = int(np.sum(pixels.needed & ~one.covers(pixels.grid)))
        if lost:
            south, north = one.series.lat.edges[[0, -1]]
            west, east = one.series.lon.edges[[0, -1]]
            text = (
                f"latitude {south:g} to {north:g} and longitude {west:g} to {east:g}; {lost} of "
                f"{np.sum(pixels.needed)} pixels with crops lie outside; "
                "give larger files, or a smaller grid"
            )
            alike.setdefault(text, []).append(one)
    for text, variables in alike.items():
        names = _listed([one.variable for one in variables])
        verb = "covers" if len(variables) == 1 else "cover"
        yield _problem(variables[0], f"{names} of {variables[0].simulation} {verb} {text}")


def _corrected(
    assessment: Assessment, found: Sequence[Simulation], facts: Facts
) -> Iterator[Problem]:
    """Yield the variables that cannot be corrected: the reference lacks them, or their step."""
    if assessment.reference is None:
        return
    lacking: dict[str, list[str]] = {}
    for simulation in found:
        if simulation.name == OBSERVED:
            continue
        try:
            variables = series_variables(assessment, simulation.files)
        except StookError:
            continue
        for variable in variables:
            if assessment.correct.choice(variable).method == "none":
                continue
            if variable not in assessment.reference.files:
                lacking.setdefault(variable, []).append(simulation.name)
            one = facts.get(OBSERVED, {}).get(variable)
            two = facts.get(simulation.name, {}).get(variable)
            if one and two and one.series.step != two.series.step:
                yield _problem(
                    two,
                    f"{variable} is {two.series.step}, that of the reference {one.series.step}; "
                    "both need the same time step",
                )
    for variable, names in lacking.items():
        yield Problem(
            "error",
            f"{assessment.source}: reference.files",
            f"has no {variable}, which {_listed(names)} {'has' if len(names) == 1 else 'have'}; "
            f"give it, or set correct.variables.{variable}.method to none",
        )


def weight_problems(assessment: Assessment, found: Sequence[Simulation]) -> list[Problem]:
    """Return the model weights that are missing or belong to no model."""
    weights = assessment.ensemble.weights
    if weights is None:
        return []
    models = {s.model for s in found if s.name != OBSERVED}
    where = f"{assessment.source}: ensemble.weights"
    problems = []
    if lost := sorted(models - set(weights)):
        problems.append(Problem("error", where, f"has no weight for {_listed(lost)}"))
    if unknown := sorted(set(weights) - models):
        message = f"{_listed(unknown)} is no model; models are {_listed(sorted(models))}"
        problems.append(Problem("error", where, message))
    return problems


def table_problems(assessment: Assessment, found: Sequence[Simulation]) -> list[Problem]:
    """Return what is wrong with the tables of technology, global means and population."""
    problems: list[Problem] = []
    population = assessment.supply.population
    problems += _co2_problems(assessment, found)
    for spec in assessment.crops.values():
        ends = [years[1] for years in assessment.periods.horizons.values()]
        last = assessment.periods.baseline[1]
        years = np.array([last, *ends, *(assessment.periods.span or ())])
        try:
            technology_factors(spec.technology, years, last, assessment.folder)
        except StookError as error:
            problems += as_problems(error)
    try:
        level_windows(assessment, [s for s in found if s.name != OBSERVED])
    except StookError as error:
        problems += as_problems(error)
    try:
        if population is not None:
            read_population(assessment.path(population))
    except StookError as error:
        problems += as_problems(error)
    return problems


def _co2_problems(assessment: Assessment, found: Sequence[Simulation]) -> list[Problem]:
    spec = assessment.co2
    if spec is None or spec.use == "off":
        return []
    path, problems = assessment.path(spec.file), []
    historical = assessment.simulations.historical or HISTORICAL
    periods = [assessment.periods.baseline, *assessment.periods.horizons.values()]
    try:
        table = read_concentrations(path)
    except StookError as error:
        return as_problems(error)
    for scenario in dict.fromkeys(s.scenario for s in found if s.name != OBSERVED):
        try:
            concentrations(table, scenario, historical, np.array(periods).ravel(), path)
        except StookError as error:
            problems += as_problems(error)
    for crop, system in assessment.systems:
        try:
            yield_response(assessment, crop, system)
        except AssessmentError as error:
            if str(error).startswith("co2: "):
                problems += as_problems(error)
    return problems


def _problem(one: SeriesFacts, message: str) -> Problem:
    return Problem("error", str(one.path), message)


def _listed(names: Sequence[str], most: int = 4) -> str:
    """Return names as words: ``a``, ``a and b``, or the first few and the count of the rest."""
    if len(names) > most:
        return f"{', '.join(names[:most])} and {len(names) - most} more"
    return " and ".join(filter(None, [", ".join(names[:-1]), names[-1]]))
