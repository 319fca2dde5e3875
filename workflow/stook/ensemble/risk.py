"""The tables of risk: totals of every simulation in, one table per question out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pandas as pd
import pyarrow.parquet as pq

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.simulations import Simulation
from stook.constants import OBSERVED, OUTSIDE
from stook.ensemble.changes import CHANGES, Changes, Group, changes_table, empty_table
from stook.ensemble.classes import CLASSES, class_table, successive_periods
from stook.ensemble.emergence import EMERGENCE, emergence_table
from stook.ensemble.horizons import horizon_names, horizons_of, level_name
from stook.ensemble.joint import JOINT, joint_crops, joint_regions
from stook.ensemble.losses import LOSSES, region_losses
from stook.ensemble.partition import PARTITION, partition_table
from stook.ensemble.robustness import ROBUSTNESS, robustness_table
from stook.ensemble.series import Models, SystemSeries, read_series
from stook.ensemble.shortfall import SHORTFALL, shortfall_table
from stook.ensemble.summary import (
    LEAD_STEP,
    TOTAL,
    RunSummary,
    Settings,
    summarise,
    with_total,
)
from stook.ensemble.supply import SUPPLY, read_population, supply_table
from stook.regions.totals import COMBINED

TABLES = {
    "partition": PARTITION,
    "emergence": EMERGENCE,
    "classes": CLASSES,
    "robustness": ROBUSTNESS,
    "levels": CHANGES,
    "shortfall": SHORTFALL,
    "joint": JOINT,
    "losses": LOSSES,
    "supply": SUPPLY,
}
"""Columns of every table by its name."""


def risk_tables(
    assessment: Assessment, runs: Sequence[Simulation], windows: pd.DataFrame
) -> dict[str, pd.DataFrame]:
    """Return every table of `TABLES` for an assessment whose totals are there.

    Parameters
    ----------
    runs
        All simulations, `observed` among them if there is a reference.
    windows
        Of `stook.ensemble.horizons.level_windows`.
    """
    parts: dict[str, list[pd.DataFrame]] = {name: [] for name in TABLES}
    together: dict[str, dict[str, list[RunSummary]]] = {}  # scenario, crop: all systems
    settings = _settings(assessment, runs)
    for crop in assessment.crops:
        for summaries in _summaries(assessment, runs, crop, windows, settings).values():
            _add_system(assessment, summaries, settings, parts)
            if summaries[0].system == _combined(assessment, crop):
                for run in summaries:
                    kept = together.setdefault(run.simulation.scenario, {}).setdefault(crop, [])
                    kept.append(_light(run))
    population = {}
    if assessment.supply.population is not None:
        population = read_population(assessment.path(assessment.supply.population))
        population[TOTAL] = _everyone(population, together)
    for by_crop in together.values():
        models = _models(assessment, next(iter(by_crop.values())))
        parts["supply"].append(supply_table(by_crop, models, assessment, population))
        if len(by_crop) > 1:
            parts["joint"].append(joint_crops(list(by_crop.values()), models))
    return {name: _whole(parts[name], columns) for name, columns in TABLES.items()}


def _settings(assessment: Assessment, runs: Sequence[Simulation]) -> Settings:
    """Return the settings; the last year is the latest that any simulation has of any crop."""
    last = assessment.periods.baseline[1]
    layout, crop = Layout.of(assessment), next(iter(assessment.crops))
    for run in runs:
        if run.name != OBSERVED:
            last = max(last, _last_year(layout, run.name, crop))
    spec, end = assessment.ensemble, assessment.periods.baseline[1]
    first = end + 1 + (-(end + 1)) % LEAD_STEP
    return Settings(
        assessment.periods.baseline,
        np.arange(first, last + 1, LEAD_STEP),
        successive_periods(end, last, spec.class_years),
        spec.shortfall,
        spec.partition_years,
    )


def _last_year(layout: Layout, simulation: str, crop: str) -> int:
    path = layout.totals(simulation, crop)
    return int(pq.read_table(path, columns=["year"])["year"].to_numpy().max())


def _summaries(
    assessment: Assessment,
    runs: Sequence[Simulation],
    crop: str,
    windows: pd.DataFrame,
    settings: Settings,
) -> dict[str, list[RunSummary]]:
    """Read the totals of a crop one after the other; return their summaries by system."""
    layout = Layout.of(assessment)
    found: dict[str, list[RunSummary]] = {}
    for run in runs:
        horizons = {} if run.name == OBSERVED else horizons_of(assessment, windows, run.name)
        for system, series in read_series(layout.totals(run.name, crop)).items():
            whole = with_total(series)
            summary = summarise(whole, run, crop, system, horizons, settings)
            found.setdefault(system, []).append(summary)
    return found


def _add_system(
    assessment: Assessment,
    summaries: Sequence[RunSummary],
    settings: Settings,
    parts: dict[str, list[pd.DataFrame]],
) -> None:
    """Add the tables of one crop and system."""
    projected = [run for run in summaries if run.simulation.name != OBSERVED]
    horizons = horizon_names(assessment)
    levels = assessment.ensemble.warming_levels
    combined = summaries[0].system == _combined(assessment, summaries[0].crop)
    if projected:
        weights = _models(assessment, projected).weight
        parts["partition"].append(partition_table(projected, weights))
    for runs in _by_scenario(summaries):
        models = _models(assessment, runs)
        parts["shortfall"].append(shortfall_table(runs, models))
        if combined:
            parts["joint"].append(joint_regions(runs, models))
        if runs[0].simulation.name == OBSERVED:
            continue
        parts["emergence"].append(emergence_table(runs, models, settings.baseline[1]))
        bounds = assessment.ensemble.classes
        parts["classes"].append(class_table(runs, models, settings.steps, bounds))
        parts["robustness"].append(robustness_table(runs, models, horizons))
        parts["losses"].append(region_losses(runs, models, horizons))
        for level in levels.levels if levels else ():
            parts["levels"].append(_level_changes(runs, models, level_name(level)))


def _by_scenario(summaries: Sequence[RunSummary]) -> list[list[RunSummary]]:
    found: dict[str, list[RunSummary]] = {}
    for run in summaries:
        found.setdefault(run.simulation.scenario, []).append(run)
    return list(found.values())


def _models(assessment: Assessment, runs: Sequence[RunSummary]) -> Models:
    simulations = [run.simulation for run in runs]
    observed = simulations[0].name == OBSERVED
    weights = None if observed else assessment.ensemble.weights
    return Models.of(simulations, weights, assessment.source)


def _combined(assessment: Assessment, crop: str) -> str:
    systems = list(assessment.crops[crop].systems)
    return COMBINED if len(systems) > 1 else systems[0]


def _light(run: RunSummary) -> RunSummary:
    """Return a summary without what only the tables of its own crop need."""
    none = np.empty((len(run.regions), 0, 0))
    return replace(run, paths=none, steps=none, short=none)


def _level_changes(runs: Sequence[RunSummary], models: Models, level: str) -> pd.DataFrame:
    """Return the changes at a warming level, the columns of the changes table, no sum of regions.

    Simulations that do not reach the level count as missing.
    """
    first = runs[0]
    kept = [number for number, name in enumerate(first.regions) if name != TOTAL]
    draws = first.production.shape[2]
    change = np.full((len(runs), draws, len(kept)), np.nan)
    before, after, flagged = (np.full((len(runs), len(kept)), np.nan) for _ in range(3))
    for number, run in enumerate(runs):
        if level not in run.windows:
            continue
        place = run.periods.index(level)
        change[number] = run.change(level)[kept].T
        before[number], after[number] = run.production[kept, 0, 0], run.production[kept, place, 0]
        flagged[number] = run.extrapolated[kept, place]
    changes = Changes(change, before, after, flagged)
    regions = [first.regions[number] for number in kept]
    years, made = np.empty(0, np.int64), np.empty((0, len(kept), 0))
    series = [
        SystemSeries(regions, years, made, run.area[kept], run.missing_area[kept], made[0:0])
        for run in runs
    ]
    simulations = [run.simulation for run in runs]
    scenario = first.simulation.scenario
    group = Group(first.crop, first.system, scenario, simulations, series, models)
    return changes_table(group, level, changes)


def _everyone(
    population: dict[str, float], together: dict[str, dict[str, list[RunSummary]]]
) -> float:
    """Return the people of all regions of the run, NaN unless the table has every one."""
    regions: dict[str, None] = {}
    for by_crop in together.values():
        for runs in by_crop.values():
            regions |= dict.fromkeys(runs[0].regions[:-1] if TOTAL in runs[0].regions else ())
    inside = [name for name in regions if name != OUTSIDE]
    if not inside or any(name not in population for name in inside):
        return float("nan")
    return float(sum(population[name] for name in inside))


def _whole(parts: Sequence[pd.DataFrame], columns: dict[str, str]) -> pd.DataFrame:
    """Stack the parts of a table."""
    there = [part for part in parts if len(part)]
    return pd.concat(there, ignore_index=True) if there else empty_table(columns)
