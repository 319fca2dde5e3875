"""Jobs of the yields stage: files in and out."""

from __future__ import annotations

from contextlib import ExitStack
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.variables import system_response, yield_response
from stook.audit.ledger import Job
from stook.constants import CENTRAL_DRAW
from stook.errors import ResultsError
from stook.grids.analysis import AnalysisGrid, tile_count
from stook.grids.files import open_result, pixel_chunks, read_table
from stook.yields.co2 import (
    CO2,
    HISTORICAL,
    co2_index,
    concentrations,
    effect_draws,
    effect_of,
    read_concentrations,
    scenario_of,
)
from stook.yields.coefficients import coefficient_draws
from stook.yields.grids import yield_grids
from stook.yields.response import Response
from stook.yields.technology import TableTechnology, technology_factors

_COPIES = 6
"""Arrays of 4 bytes a value that a block holds per index, year and pixel, about."""


def coefficients(assessment: Assessment, crop: str, system: str) -> None:
    """Write the draws of the response coefficients of one crop and water system.

    Reads the response document; writes `Layout.coefficients`.
    """
    source = assessment.path(assessment.system(crop, system).response)
    wildcards = {"crop": crop, "system": system}
    with Job(assessment, "yields_coefficients", [source], wildcards) as job:
        response = system_response(assessment, crop, system)
        count, seed = assessment.ensemble.draws, assessment.seed
        draws = coefficient_draws(response, count, seed)
        effect = effect_of(assessment.co2, crop)
        if effect is not None and assessment.co2 is not None:
            draws[CO2] = effect_draws(effect, assessment.co2.use, crop, count, seed)
        job.table(draws, Layout.of(assessment).coefficients(crop, system))


def grid(assessment: Assessment, simulation: str, crop: str, system: str) -> None:
    """Write the yields of one simulation, crop and water system, all tiles joined.

    Reads the season indices, the central coefficients, the response and the crop layers; writes
    `Layout.yields`.
    """
    layout = Layout.of(assessment)
    tiles = [layout.season(simulation, crop, system, t) for t in range(tile_count(assessment))]
    source = assessment.path(assessment.system(crop, system).response)
    table = layout.coefficients(crop, system)
    wildcards = {"simulation": simulation, "crop": crop, "system": system}
    parents = [*tiles, table, source, *path_files(assessment, crop), layout.layers]
    with Job(assessment, "yields_grid", parents, wildcards) as job, ExitStack() as stack:
        response = yield_response(assessment, crop, system)
        layers = stack.enter_context(open_result(layout.layers))
        parts = [stack.enter_context(open_result(path)) for path in tiles]
        size = _COPIES * parts[0].sizes["year"] * len(response.coefficient_names)
        block = assessment.store.block_mb
        parts = [
            part.chunk(pixel_chunks(part, block, size), token=str(path))
            for path, part in zip(tiles, parts, strict=True)
        ]
        season = (
            xr.concat(parts, "lat", data_vars="minimal", join="exact") if parts[1:] else parts[0]
        )
        season = season_with_co2(assessment, simulation, crop, season)
        here = layers.sel(crop_system=f"{crop}_{system}").load()
        grids = yield_grids(
            season,
            here["baseline_yield"],
            here["reason"],
            response,
            central_coefficients(table, response),
            assessment.periods.baseline,
            technology_of(assessment, crop, season["year"].values),
        )
        grids = grids.assign_coords(AnalysisGrid.from_dataset(layers).coordinates())
        title = f"Yields of {crop}, {system}, {simulation}"
        job.netcdf(grids, layout.yields(simulation, crop, system), title)


def technology_of(assessment: Assessment, crop: str, years: np.ndarray) -> pd.Series | None:
    """Return the technology factor of a crop by year; None where it is constant."""
    technology = assessment.crops[crop].technology
    last = assessment.periods.baseline[1]
    return technology_factors(technology, years, last, assessment.folder)


def season_with_co2(
    assessment: Assessment, simulation: str, crop: str, season: xr.Dataset
) -> xr.Dataset:
    """Return season indices with that of CO2, if it acts on the crop."""
    effect, spec = effect_of(assessment.co2, crop), assessment.co2
    if effect is None or spec is None:
        return season
    path = assessment.path(spec.file)
    historical = assessment.simulations.historical or HISTORICAL
    scenario = scenario_of(simulation, historical)
    years = season["year"].values
    ppm = concentrations(read_concentrations(path), scenario, historical, years, path)
    return co2_index(season, ppm, effect.ppm[0])


def path_files(assessment: Assessment, crop: str) -> list[Path]:
    """Return the tables of a crop's technology path and of CO2, if there are any."""
    technology = assessment.crops[crop].technology
    files = [technology.file] if isinstance(technology, TableTechnology) else []
    if assessment.co2 is not None and effect_of(assessment.co2, crop) is not None:
        files.append(assessment.co2.file)
    return [assessment.path(file) for file in files]


def central_coefficients(path: Path, response: Response) -> np.ndarray:
    """Read the central coefficients of a response, float64 (k,), in document order.

    Raises
    ------
    ResultsError
        If the table is of another response.
    """
    draws = read_table(path).set_index("draw")
    if missing := [name for name in response.coefficient_names if name not in draws]:
        raise ResultsError(
            f"{path}: lacks {', '.join(missing)} of the response; delete it and run again"
        )
    return draws.loc[CENTRAL_DRAW, response.coefficient_names].to_numpy(dtype=np.float64)
