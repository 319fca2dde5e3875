"""Jobs of the trend stage: files in and out."""

from __future__ import annotations

from contextlib import ExitStack
from pathlib import Path

import numpy as np
import xarray as xr

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.variables import system_indices, system_response
from stook.audit.ledger import Job
from stook.constants import OBSERVED
from stook.grids.analysis import AnalysisGrid, tile_count
from stook.grids.files import PIXEL_CHUNK, open_result, read_table
from stook.regions.totals import SystemGrids
from stook.season.definition import describe, unit_of
from stook.trend.distribution import COLUMNS as DISTRIBUTION_COLUMNS
from stook.trend.field import COLUMNS as FIELD_COLUMNS
from stook.trend.impact import Setting, system_impact
from stook.trend.impact_pixels import impact_maps
from stook.trend.impact_table import COLUMNS as IMPACT_COLUMNS
from stook.trend.impact_table import impact_table
from stook.trend.periods import is_covered, trend_periods
from stook.trend.pixels import Domain, Quantity, join_tables, map_trends
from stook.trend.regions import COLUMNS, regional_trends, regional_yields
from stook.trend.series import TrendOptions
from stook.yields.technology import climate_yield

_CHUNKS = {"year": -1, "lat": PIXEL_CHUNK, "lon": -1}


def pixels(assessment: Assessment, simulation: str, crop: str, system: str) -> None:
    """Write the trend maps of one simulation, crop and system, and their distributions.

    Reads the season indices, the yields and the crop layers; writes
    `Layout.trend_pixels`, `Layout.trend_distribution` and `Layout.trend_field`.
    """
    layout = Layout.of(assessment)
    tiles = [
        layout.season(simulation, crop, system, tile) for tile in range(tile_count(assessment))
    ]
    source = layout.yields(simulation, crop, system)
    wildcards = {"simulation": simulation, "crop": crop, "system": system}
    parents = [layout.layers, *tiles, source]
    with Job(assessment, "trend_pixels", parents, wildcards) as job, ExitStack() as stack:
        layers = stack.enter_context(open_result(layout.layers))
        season = _joined(tiles, stack)
        yields = stack.enter_context(open_result(source, _CHUNKS))
        domain = _domain(layers, crop, system)
        periods = trend_periods(assessment, yields["year"].values)
        options = TrendOptions.of(assessment)
        found = []
        for quantity in _quantities(assessment, crop, system):
            own = quantity.name == "yield"
            dataset = yields if own else season
            found.append(
                map_trends(
                    climate_yield(yields) if own else season[quantity.name],
                    dataset["reason"].values,
                    quantity,
                    domain,
                    periods,
                    options,
                    assessment.store.block_mb,
                )
            )
        grids = xr.merge([one.grids for one in found])
        grids = grids.assign_coords(AnalysisGrid.from_dataset(layers).coordinates())
        title = f"Trends of {crop}, {system}, {simulation}"
        job.netcdf(
            _with_years(grids, periods), layout.trend_pixels(simulation, crop, system), title
        )
        distribution = join_tables([one.distribution for one in found], DISTRIBUTION_COLUMNS)
        job.table(distribution, layout.trend_distribution(simulation, crop, system))
        field = join_tables([one.field for one in found], FIELD_COLUMNS)
        job.table(field, layout.trend_field(simulation, crop, system))


def regions(assessment: Assessment, simulation: str) -> None:
    """Write the trends of the regional yields of one simulation, all crops.

    Reads the totals of every crop; writes `Layout.trend_regions`.
    """
    layout = Layout.of(assessment)
    parents = {crop: layout.totals(simulation, crop) for crop in assessment.crops}
    wildcards = {"simulation": simulation}
    with Job(assessment, "trend_regions", parents.values(), wildcards) as job:
        tables = []
        for crop, path in parents.items():
            yields = regional_yields(read_table(path))
            if yields.empty:
                continue
            periods = trend_periods(assessment, yields.index.to_numpy())
            tables.append(
                regional_trends(
                    yields, crop, periods, assessment.periods.baseline, TrendOptions.of(assessment)
                )
            )
        job.table(join_tables(tables, COLUMNS), layout.trend_regions(simulation))


def impact(assessment: Assessment, crop: str) -> None:
    """Write the observed impact of one crop by region: observed against detrended weather.

    Reads season indices and yields of `observed`, the coefficient draws, the responses, the crop
    layers and the overlay; writes `Layout.impact`.
    """
    layout = Layout.of(assessment)
    systems = list(assessment.crops[crop].systems)
    parents = [layout.overlay, layout.layers]
    for system in systems:
        parents += _impact_parents(assessment, crop, system)
    with Job(assessment, "trend_impact", parents, {"crop": crop}) as job, ExitStack() as stack:
        overlay = stack.enter_context(open_result(layout.overlay))
        grids = {system: _observed_grids(assessment, crop, system, stack) for system in systems}
        settings = {system: _setting(assessment, crop, system) for system in systems}
        named = {
            system: trend_periods(assessment, one.season["year"].values)
            for system, one in grids.items()
        }
        tables = []
        for period in next(iter(named.values())):
            sums = {
                system: system_impact(grids[system], overlay, settings[system], ends[period])
                for system, ends in named.items()
                if is_covered(ends[period], grids[system].season["year"].values)
            }
            if sums:
                options = TrendOptions.of(assessment)
                tables.append(impact_table(crop, sums, period, options))
        job.table(join_tables(tables, IMPACT_COLUMNS), layout.impact(crop))


def impact_map(assessment: Assessment, crop: str, system: str) -> None:
    """Write the observed impact at every pixel of one crop and water system.

    Reads season indices and yields of `observed`, the coefficient draws, the response and the
    crop layers; writes `Layout.impact_map`.
    """
    layout = Layout.of(assessment)
    parents = [layout.layers, *_impact_parents(assessment, crop, system)]
    wildcards = {"crop": crop, "system": system}
    with Job(assessment, "trend_impact_map", parents, wildcards) as job, ExitStack() as stack:
        layers = stack.enter_context(open_result(layout.layers))
        grids = _observed_grids(assessment, crop, system, stack)
        periods = trend_periods(assessment, grids.season["year"].values)
        setting = _setting(assessment, crop, system)
        maps = impact_maps(grids, setting, _domain(layers, crop, system), periods)
        maps = maps.assign_coords(AnalysisGrid.from_dataset(layers).coordinates())
        title = f"Observed impact of the trends of the weather on {crop}, {system}"
        job.netcdf(_with_years(maps, periods), layout.impact_map(crop, system), title)


def _impact_parents(assessment: Assessment, crop: str, system: str) -> list[Path]:
    layout = Layout.of(assessment)
    return [
        *(layout.season(OBSERVED, crop, system, t) for t in range(tile_count(assessment))),
        layout.yields(OBSERVED, crop, system),
        layout.coefficients(crop, system),
        assessment.path(assessment.system(crop, system).response),
    ]


def _observed_grids(
    assessment: Assessment, crop: str, system: str, stack: ExitStack
) -> SystemGrids:
    layout = Layout.of(assessment)
    tiles = [layout.season(OBSERVED, crop, system, t) for t in range(tile_count(assessment))]
    layers = stack.enter_context(open_result(layout.layers))
    yields = stack.enter_context(open_result(layout.yields(OBSERVED, crop, system), _CHUNKS))
    layer = layers[["area", "baseline_yield"]].sel(crop_system=f"{crop}_{system}")
    return SystemGrids(_joined(tiles, stack), yields, layer)


def _setting(assessment: Assessment, crop: str, system: str) -> Setting:
    response = system_response(assessment, crop, system)
    draws = read_table(Layout.of(assessment).coefficients(crop, system)).sort_values("draw")
    return Setting(
        response,
        draws[response.coefficient_names].to_numpy(dtype=np.float64),
        assessment.periods.baseline,
        TrendOptions.of(assessment),
        assessment.store.block_mb,
    )


def _joined(tiles: list[Path], stack: ExitStack) -> xr.Dataset:
    """Open the tiles of one grid as one, lazily."""
    parts = [stack.enter_context(open_result(path, _CHUNKS)) for path in tiles]
    return xr.concat(parts, "lat", data_vars="minimal", join="exact") if parts[1:] else parts[0]


def _quantities(assessment: Assessment, crop: str, system: str) -> list[Quantity]:
    indices = [
        Quantity(name, describe(definition), unit_of(definition))
        for name, definition in system_indices(assessment, crop, system).items()
    ]
    return [*indices, Quantity("yield", f"{crop} yield, {system}", "t ha-1")]


def _domain(layers: xr.Dataset, crop: str, system: str) -> Domain:
    layer = layers.sel(crop_system=f"{crop}_{system}")
    names = [str(name) for name in layers["region"].values]
    region = layers["main_region"].values
    return Domain(layer["reason"].values, layer["area"].values, region, names)


def _with_years(grids: xr.Dataset, periods: dict[str, tuple[int, int]]) -> xr.Dataset:
    """Add the first and the last year of each period."""
    ends = np.array(list(periods.values()), dtype=np.int32).reshape(len(periods), 2)
    return grids.assign_coords(
        first_year=("period", ends[:, 0], {"long_name": "first year of the period"}),
        last_year=("period", ends[:, 1], {"long_name": "last year of the period"}),
    )
