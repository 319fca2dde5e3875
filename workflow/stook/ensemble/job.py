"""Jobs of the ensemble stage: files in and out."""

from __future__ import annotations

import pandas as pd

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.simulations import Simulation, all_simulations
from stook.audit.ledger import Job
from stook.constants import OBSERVED
from stook.ensemble.changes import (
    CHANGES,
    YEARLY,
    Group,
    changes_of,
    changes_table,
    members_table,
    stacked,
    stacked_members,
    yearly_table,
)
from stook.ensemble.horizons import horizon_names, horizons_of, level_windows
from stook.ensemble.losses import area_losses
from stook.ensemble.pixels import pixel_changes
from stook.ensemble.risk import risk_tables
from stook.ensemble.series import Models, read_series
from stook.ensemble.signals import signals
from stook.grids.files import open_result


def changes(assessment: Assessment) -> None:
    """Write the changes, the members behind them, and the spread of every year.

    Reads the totals of every simulation and crop; writes `Layout.changes`, `Layout.members` and
    `Layout.yearly`.
    """
    layout = Layout.of(assessment)
    runs = all_simulations(assessment)
    parents = [layout.totals(run.name, crop) for run in runs for crop in assessment.crops]
    by_scenario: dict[str, list[Simulation]] = {}
    for run in runs:
        by_scenario.setdefault(run.scenario, []).append(run)
    statements: list[pd.DataFrame] = []
    members: list[pd.DataFrame] = []
    years: list[pd.DataFrame] = []
    with Job(assessment, "ensemble_changes", parents) as job:
        for crop in assessment.crops:
            for scenario, chosen in by_scenario.items():
                for group in _groups(assessment, crop, scenario, chosen):
                    years.append(yearly_table(group))
                    if scenario == OBSERVED:
                        continue
                    for horizon, period in assessment.periods.horizons.items():
                        found = changes_of(group.series, assessment.periods.baseline, period)
                        statements.append(changes_table(group, horizon, found))
                        members.append(members_table(group, horizon, found))
        job.table(stacked(statements, CHANGES), layout.changes)
        job.table(stacked_members(members), layout.members)
        job.table(stacked(years, YEARLY), layout.yearly)


def _groups(
    assessment: Assessment, crop: str, scenario: str, runs: list[Simulation]
) -> list[Group]:
    """Read the totals of one crop and scenario, by system."""
    layout = Layout.of(assessment)
    weights = None if scenario == OBSERVED else assessment.ensemble.weights
    models = Models.of(runs, weights, assessment.source)
    series = [read_series(layout.totals(run.name, crop)) for run in runs]
    return [
        Group(crop, system, scenario, runs, [one[system] for one in series], models)
        for system in series[0]
    ]


def pixels(assessment: Assessment, crop: str, system: str, scenario: str) -> None:
    """Write the maps of yield change of one crop, system and scenario.

    Reads the yields of the scenario's simulations and the crop layers; writes
    `Layout.ensemble_pixels`.
    """
    layout = Layout.of(assessment)
    runs = [run for run in all_simulations(assessment) if run.scenario == scenario]
    runs = [run for run in runs if run.name != OBSERVED]
    models = Models.of(runs, assessment.ensemble.weights, assessment.source)
    sources = [layout.yields(run.name, crop, system) for run in runs]
    wildcards = {"crop": crop, "system": system, "scenario": scenario}
    with Job(assessment, "ensemble_pixels", [layout.layers, *sources], wildcards) as job:
        grids = pixel_changes(
            sources, models, assessment.periods.baseline, assessment.periods.horizons
        )
        title = f"Yield change of {crop}, {system}, {scenario}"
        job.netcdf(grids, layout.ensemble_pixels(crop, system, scenario), title)


def risk(assessment: Assessment) -> None:
    """Write the tables of risk: what the totals say beyond the changes.

    Reads the totals of every simulation and crop, and the tables of global mean temperature and of
    population if the assessment names them; writes `Layout.ensemble_table` of every name in
    `stook.ensemble.risk.TABLES`, and of ``windows``.
    """
    layout = Layout.of(assessment)
    runs = all_simulations(assessment)
    parents = [layout.totals(run.name, crop) for run in runs for crop in assessment.crops]
    levels, population = assessment.ensemble.warming_levels, assessment.supply.population
    parents += [assessment.path(levels.file)] if levels else []
    parents += [assessment.path(population)] if population else []
    with Job(assessment, "ensemble_risk", parents) as job:
        windows = level_windows(assessment, [run for run in runs if run.name != OBSERVED])
        tables = risk_tables(assessment, runs, windows)
        for name, table in {**tables, "windows": windows}.items():
            job.table(table, layout.ensemble_table(name))


def robustness(assessment: Assessment, crop: str, system: str, scenario: str) -> None:
    """Write the maps of robustness and the area losses of one crop, system and scenario.

    Reads the yields of the scenario's simulations, crop layers and overlay, and the table of global
    mean temperature if the assessment names one; writes `Layout.robustness_pixels` and
    `Layout.area_losses`.
    """
    layout = Layout.of(assessment)
    runs = [run for run in all_simulations(assessment) if run.scenario == scenario]
    runs = [run for run in runs if run.name != OBSERVED]
    models = Models.of(runs, assessment.ensemble.weights, assessment.source)
    sources = [layout.yields(run.name, crop, system) for run in runs]
    levels = assessment.ensemble.warming_levels
    parents = [layout.layers, layout.overlay, *sources]
    parents += [assessment.path(levels.file)] if levels else []
    names = {"crop": crop, "system": system, "scenario": scenario}
    horizons = horizon_names(assessment)
    with Job(assessment, "ensemble_robustness", parents, names) as job:
        table = level_windows(assessment, runs)
        windows = [horizons_of(assessment, table, run.name) for run in runs]
        with open_result(layout.layers) as layers, open_result(layout.overlay) as overlay:
            area = layers["area"].sel(crop_system=f"{crop}_{system}").load()
            baseline = assessment.periods.baseline
            found = signals(sources, models, baseline, windows, horizons, area, overlay)
        title = f"Robustness of the yield change of {crop}, {system}, {scenario}"
        job.netcdf(found.grids, layout.robustness_pixels(**names), title)
        losses = area_losses(found.losing, found.whole, models, found.regions, horizons, **names)
        job.table(losses, layout.area_losses(**names))
