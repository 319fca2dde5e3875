"""Jobs of the regions stage: files in and out."""

from __future__ import annotations

from contextlib import ExitStack

import numpy as np
import xarray as xr

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.variables import yield_response
from stook.audit.ledger import Job
from stook.grids.analysis import tile_count
from stook.grids.files import PIXEL_CHUNK, open_result, read_table
from stook.regions.overlay import overlay_dataset
from stook.regions.totals import SystemGrids, Totals, system_totals, totals_table
from stook.yields.job import path_files, season_with_co2, technology_of

_CHUNKS = {"year": -1, "lat": PIXEL_CHUNK, "lon": -1}


def overlay(assessment: Assessment) -> None:
    """Write the share of every cell inside every region.

    Reads the region polygons; writes `Layout.overlay`.
    """
    path = assessment.path(assessment.regions.file)
    with Job(assessment, "regions_overlay", [path]) as job:
        title = "Share of every cell inside every region"
        job.netcdf(overlay_dataset(assessment), Layout.of(assessment).overlay, title)


def totals(assessment: Assessment, simulation: str, crop: str) -> None:
    """Write the production of one simulation and crop by region, system, year and draw.

    Reads the season indices, yields, coefficient draws, crop layers and the overlay; writes
    `Layout.totals`.
    """
    layout = Layout.of(assessment)
    names = list(assessment.crops[crop].systems)
    tiles = range(tile_count(assessment))
    parents = [layout.overlay, layout.layers]
    for system in names:
        parents += [layout.season(simulation, crop, system, tile) for tile in tiles]
        parents += [layout.yields(simulation, crop, system), layout.coefficients(crop, system)]
        parents.append(assessment.path(assessment.system(crop, system).response))
    parents += path_files(assessment, crop)
    wildcards = {"simulation": simulation, "crop": crop}
    with Job(assessment, "regions_totals", parents, wildcards) as job:
        found = {name: _system(assessment, simulation, crop, name) for name in names}
        years = np.unique(np.concatenate([one.years for one in found.values()]))
        table = totals_table(found, technology_of(assessment, crop, years))
        job.table(table, layout.totals(simulation, crop))


def _system(assessment: Assessment, simulation: str, crop: str, system: str) -> Totals:
    layout = Layout.of(assessment)
    response = yield_response(assessment, crop, system)
    draws = read_table(layout.coefficients(crop, system)).sort_values("draw")
    coefficients = draws[response.coefficient_names].to_numpy(dtype=np.float64)
    with ExitStack() as stack:
        layers = stack.enter_context(open_result(layout.layers))
        overlay = stack.enter_context(open_result(layout.overlay))
        parts = [
            stack.enter_context(open_result(layout.season(simulation, crop, system, tile), _CHUNKS))
            for tile in range(tile_count(assessment))
        ]
        season = (
            xr.concat(parts, "lat", data_vars="minimal", join="exact") if parts[1:] else parts[0]
        )
        season = season_with_co2(assessment, simulation, crop, season)
        yields = stack.enter_context(open_result(layout.yields(simulation, crop, system), _CHUNKS))
        layer = layers[["area", "baseline_yield"]].sel(crop_system=f"{crop}_{system}")
        return system_totals(
            SystemGrids(season, yields, layer),
            overlay,
            response,
            coefficients,
            assessment.periods.baseline,
            assessment.store.block_mb,
        )
