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
from stook.ensemble.pixels import pixel_changes
from stook.ensemble.series import Models, read_series


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
