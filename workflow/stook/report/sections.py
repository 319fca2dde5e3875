"""The sections of the report: each reads what it needs, writes its files and fills the page."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import pandas as pd
import xarray as xr

from stook.assessment.variables import system_indices
from stook.constants import OBSERVED
from stook.grids.files import open_result, read_table
from stook.report import assumptions, tables
from stook.report import rows as written
from stook.report.figures_correct import WHOLE_YEAR, correction_figure
from stook.report.figures_drivers import drivers_figure, effects_in_percent
from stook.report.figures_maps import change_maps
from stook.report.figures_series import range_figure, series_figure
from stook.report.figures_trend import simulations_figure, trend_figure
from stook.report.geo import region_layers
from stook.report.page import Cell, Page, Table
from stook.report.publisher import Publisher
from stook.report.reading import (
    area_means,
    central_totals,
    ensemble_grids,
    season_paths,
    significant_shares,
)
from stook.report.source import BASELINE, Source
from stook.season.definition import describe, unit_of
from stook.trend.field import EVERYWHERE

_CHANGE_BANDS = (
    *("change_p50", "change_p05", "change_p17", "change_p83", "change_p95", "change_mean"),
    *("agreement", "models"),
)


def add_results(source: Source, page: Page, publisher: Publisher) -> None:
    """Add the changes by region: table, ranges, sentences, polygons."""
    parents = [source.layout.changes]
    polygons = source.assessment.path(source.assessment.regions.file)
    publisher.table("changes", source.changes, parents, "every change, all percentiles")
    publisher.geopackage(region_layers(source.polygons, source.changes), [*parents, polygons])
    if source.changes.empty:
        return
    page.has_changes = True
    page.lead = tables.main_findings(source.changes, list(source.horizons)[-1])
    page.headline = written.headline_tables(source.changes)
    if note := written.outside_note(source.changes):
        page.notes.append(note)
    for crop in source.changes["crop"].unique():
        drawing = range_figure(
            source.changes, crop, source.scenarios, list(source.horizons), source.regions
        )
        page.ranges.append(publisher.drawing(drawing, parents))


def add_maps(source: Source, page: Page, publisher: Publisher) -> None:
    """Add the maps of yield change, and hand the pixels on as NetCDF and GeoTIFF."""
    if not source.horizons or not source.runs:
        return
    for crop in source.assessment.crops:
        pixels = ensemble_grids(source.assessment, crop, source.scenarios)
        paths = {key: _pixel_files(source, crop, *key) for key in pixels}
        parents = [path for own in paths.values() for path in own]
        drawing = change_maps(pixels, crop, list(source.horizons)[-1], source.polygons)
        page.maps.append(publisher.drawing(drawing, parents))
        for (system, scenario), dataset in pixels.items():
            publisher.grids(
                f"change_{crop}_{system}_{scenario}",
                dataset,
                {str(horizon): _bands(dataset) for horizon in dataset["horizon"].values},
                "horizon",
                paths[system, scenario],
                f"Yield change of {crop}, {system}, {scenario}",
            )


def _pixel_files(source: Source, crop: str, system: str, scenario: str) -> list[Path]:
    """Return the files of the pixels of one crop, system and scenario that are there."""
    robustness = source.layout.robustness_pixels(crop, system, scenario)
    changes = source.layout.ensemble_pixels(crop, system, scenario)
    return [changes, robustness] if robustness.exists() else [changes]


def _bands(dataset: xr.Dataset) -> tuple[str, ...]:
    return (*_CHANGE_BANDS, "robustness") if "robustness" in dataset else _CHANGE_BANDS


def add_years(source: Source, page: Page, publisher: Publisher) -> None:
    """Add the series of regional yields, the yearly and production tables."""
    layout, parents = source.layout, [source.layout.yearly]
    publisher.table("yearly", source.yearly, parents, "yield by year, spread of members")
    for crop in source.yearly["crop"].unique():
        drawing = series_figure(
            source.yearly, crop, source.scenarios, source.regions, source.periods
        )
        page.series.append(publisher.drawing(drawing, parents))
    paths = {
        (simulation.name, crop): layout.totals(simulation.name, crop)
        for simulation in source.series
        for crop in source.assessment.crops
    }
    production = tables.production_table({k: central_totals(path) for k, path in paths.items()})
    publisher.table(
        "production", production, list(paths.values()), "production by year, central estimate"
    )
    for _, row in tables.left_out_area(production).iterrows():
        page.notes.append(
            f"{row['crop']}, {row['region']}: {row['missing_area_ha']:,.0f} ha of harvested area "
            f"({100 * row['share']:.1f} %) have no value and are left out of area and production."
        )


def add_drivers(source: Source, page: Page, publisher: Publisher) -> None:
    """Add what moves the yield: effects of the terms and changes of the weather indices."""
    if not source.horizons or not source.runs:
        return
    horizon = list(source.horizons)[-1]
    names = [simulation.name for simulation in source.runs]
    for kind, name, description in (
        ("effect", "effects", "mean effect of each response term by period"),
        ("index", "indices", "mean of each weather index by period"),
    ):
        parents = [source.layout.layers, *_parents(source, kind, names)]
        yearly = area_means(source.assessment, source.runs, kind, source.responses)
        if yearly.empty:
            continue
        means = tables.period_means(yearly, source.periods)
        if kind == "effect":
            means = effects_in_percent(means)
        publisher.table(name, means, parents, description)
        if kind == "effect":
            drawing = drivers_figure(means, horizon, source.scenarios)
            page.drivers.append(publisher.drawing(drawing, parents))
        else:
            changes = tables.index_changes(means, BASELINE, horizon)
            page.driver_tables.append(written.index_table(changes, horizon, _index_words(source)))


def _parents(source: Source, kind: str, simulations: Sequence[str]) -> list[Path]:
    paths: list[Path] = []
    for simulation in simulations:
        for crop, system in source.assessment.systems:
            if kind == "index":
                paths += season_paths(source.assessment, simulation, crop, system)
            else:
                paths.append(source.layout.yields(simulation, crop, system))
    return paths


def _index_words(source: Source) -> dict[tuple[str, str, str], str]:
    return {
        (crop, system, name): describe(definition)
        for crop, system in source.assessment.systems
        for name, definition in system_indices(source.assessment, crop, system).items()
    }


def add_trends(source: Source, page: Page, publisher: Publisher) -> None:
    """Add the trends against chance: distributions, regional tables, counts."""
    spec, layout = source.assessment.trend, source.layout
    names = [simulation.name for simulation in source.series]
    parents = [layout.trend_regions(name) for name in names]
    publisher.table("trend_regions", source.trends, parents, "regional yield trends, all series")
    if source.trends.empty:
        return
    shown = source.trends[source.trends["simulation"] == names[0]]
    shown = tables.in_regions(tables.combined(shown))
    what = "under observed weather" if names[0] == OBSERVED else f"of {names[0]}"
    page.trend_tables.append(written.trend_table(shown, f"Regional yield trends {what}"))
    if len(names) > 1:
        summary = tables.trend_summary(source.trends, f"p_{spec.method}", spec.level)
        page.trend_tables.append(written.trend_summary_table(summary, spec.level))
    if not (fields := _fields(source, names[0])).empty:
        page.trend_tables.insert(0, written.field_table(fields, _units(source)))
    with open_result(layout.layers) as layers:
        area = layers["area"].load()
    for crop, system in source.assessment.systems:
        own = area.sel(crop_system=f"{crop}_{system}")
        _add_distributions(source, page, publisher, crop, system, own)


def _fields(source: Source, simulation: str) -> pd.DataFrame:
    """Return the field significance of one series over all pixels of each crop and system."""
    parts = []
    for crop, system in source.assessment.systems:
        field = read_table(source.layout.trend_field(simulation, crop, system))
        parts.append(field[field["region"] == EVERYWHERE].assign(crop=crop, system=system))
    return pd.concat(parts, ignore_index=True)


def _units(source: Source) -> dict[tuple[str, str, str], str]:
    units = {}
    for crop, system in source.assessment.systems:
        for name, definition in system_indices(source.assessment, crop, system).items():
            units[crop, system, name] = unit_of(definition)
        units[crop, system, "yield"] = "t/ha"
    return units


def _add_distributions(
    source: Source, page: Page, publisher: Publisher, crop: str, system: str, area: xr.DataArray
) -> None:
    """Add the pixel trends of one crop and system: the first series in full, yields of the rest."""
    layout, names = source.layout, [simulation.name for simulation in source.series]
    first, others = names[0], names[1:]
    grid = layout.trend_pixels(first, crop, system)
    distribution = read_table(layout.trend_distribution(first, crop, system))
    if not distribution.empty:
        units = {
            name: unit for (*pair, name), unit in _units(source).items() if pair == [crop, system]
        }
        drawing = trend_figure(
            distribution,
            f"trend_{crop}_{system}_{first}",
            f"{crop}, {system}, {first.replace('_', ' ')}",
            units,
            significant_shares(grid, area),
        )
        parents = [layout.layers, grid, layout.trend_distribution(first, crop, system)]
        page.trends.append(publisher.drawing(drawing, parents))
    with open_result(grid) as dataset:
        bands = [str(name) for name in dataset.data_vars if str(name).endswith("_yield")]
        publisher.grids(
            f"trend_{crop}_{system}_{first}",
            dataset.load(),
            {str(period): bands for period in dataset["period"].values},
            "period",
            [grid],
            f"Trends of {crop}, {system}, {first}",
        )
    found = {name: read_table(layout.trend_distribution(name, crop, system)) for name in others}
    found = {name: frame for name, frame in found.items() if not frame.empty}
    if found:
        shares = {
            (name, period): share
            for name in found
            for (quantity, period), share in significant_shares(
                layout.trend_pixels(name, crop, system), area
            ).items()
            if quantity == "yield"
        }
        drawing = simulations_figure(
            found, f"trend_{crop}_{system}_simulations", f"{crop}, {system}", shares
        )
        parents = [layout.trend_distribution(name, crop, system) for name in found]
        parents += [layout.layers, *(layout.trend_pixels(name, crop, system) for name in found)]
        page.trends.append(publisher.drawing(drawing, parents))


def add_correction(source: Source, page: Page, publisher: Publisher) -> None:
    """Add the correction before and after."""
    if source.evaluation is None or source.evaluation.empty:
        return
    parents = [source.layout.evaluation_table]
    publisher.table("evaluation", source.evaluation, parents, "correction before and after")
    page.correction.append(publisher.drawing(correction_figure(source.evaluation), parents))
    whole_year = source.evaluation[source.evaluation["season"] == WHOLE_YEAR]
    page.correction_tables.append(written.correction_table(whole_year))


def add_assumptions(source: Source, page: Page) -> None:
    """Add what was assumed and which simulations there are."""
    assessment = source.assessment
    page.assumed = assumptions.general(assessment)
    page.trend_text = assumptions.trend(assessment)
    inputs = [list(row) for row in assumptions.crop_inputs(assessment)]
    columns = ["Crop", "System", "Harvested area", "Planting to maturity", "Baseline yield"]
    page.assumed_tables.append(Table("Crop layers", columns, [_head(row) for row in inputs]))
    if steps := assumptions.correction(assessment):
        rows = [_head(list(step)) for step in steps]
        page.assumed_tables.append(Table("Correction", ["Variable", "Method"], rows))
    page.responses = assumptions.response_texts(source.responses)
    page.several_models = len(source.models) > 1
    if source.runs:
        rows = [
            _head(
                [
                    simulation.name,
                    simulation.model,
                    simulation.scenario,
                    simulation.realisation,
                    ", ".join(f"{name} ({len(paths)})" for name, paths in simulation.files.items()),
                ]
            )
            for simulation in source.runs
        ]
        columns = ["Simulation", "Model", "Scenario", "Realisation", "Variables (files)"]
        page.simulations = Table("Simulations of this assessment", columns, rows)


def _head(row: list[Any]) -> list[Any]:
    return [Cell(str(row[0]), 1), *row[1:]]
