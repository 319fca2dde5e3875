"""Jobs of the prepare stage: files in and out."""

from __future__ import annotations

from contextlib import ExitStack

import xarray as xr

from stook.assessment.crops import Layer
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.simulations import find_simulation
from stook.assessment.variables import series_variables
from stook.audit.ledger import Job
from stook.constants import OBSERVED
from stook.errors import InputError
from stook.grids.analysis import AnalysisGrid, analysis_grid, tile_count
from stook.grids.files import open_result
from stook.prepare.climate import common_steps, prepare_series, time_coordinate
from stook.prepare.layers import SystemLayers, crop_layers
from stook.prepare.rasters import Number, Raster, open_raster
from stook.prepare.resample import YIELD_UNIT, area_on_grid, calendar_on_grid, yield_on_grid
from stook.prepare.series import open_series


def layers(assessment: Assessment) -> None:
    """Write area, calendar and baseline yield of every crop and system: `Layout.layers`.

    Reads the crop layers of the assessment and the region overlay, whose grid it takes.
    """
    layout = Layout.of(assessment)
    parents = [assessment.path(layer.file) for layer in _layers(assessment) if layer.file]
    with (
        Job(assessment, "prepare_layers", [layout.overlay, *parents]) as job,
        open_result(layout.overlay) as overlay,
    ):
        full = analysis_grid(assessment)
        systems = {
            f"{crop}_{system}": _system_layers(assessment, crop, system, full)
            for crop, system in assessment.systems
        }
        dataset = crop_layers(systems, full, overlay, subset=bool(assessment.subset))
        job.netcdf(dataset, layout.layers, "Crop area, calendar and baseline yield")


def tile(assessment: Assessment, simulation: str, tile: str) -> None:
    """Write the climate of one simulation on a tile of the analysis grid: `Layout.prepared`.

    Reads the raw files of the variables that some index needs, and the crop layers.
    """
    layout = Layout.of(assessment)
    found = find_simulation(assessment, simulation)
    variables = series_variables(assessment, found.files)
    if not variables:
        raise InputError(
            f"{assessment.source}: {simulation} has none of the variables that the responses need"
        )
    files = [path for variable in variables for path in found.files[variable]]
    wildcards = {"simulation": simulation, "tile": tile}
    with (
        Job(assessment, "prepare_tile", [layout.layers, *files], wildcards) as job,
        ExitStack() as stack,
    ):
        with open_result(layout.layers) as crops:
            whole = AnalysisGrid.from_dataset(crops)
            rows = whole.rows(int(tile), tile_count(assessment))
            grid = whole.part(rows, slice(0, whole.shape[1]))
            computed = crops["computed"].values[rows] == 1
        series = [
            stack.enter_context(open_series(found.files[variable], variable))
            for variable in variables
        ]
        steps = common_steps(series, assessment.periods.span, whole=simulation != OBSERVED)
        block_mb = assessment.store.block_mb
        dataset = xr.Dataset(
            {
                one.variable: prepare_series(one, part, grid, computed, block_mb)
                for one, part in zip(series, steps, strict=True)
            },
            coords={"time": time_coordinate(series[0], steps[0]), **grid.coordinates()},
            attrs={"time_step": series[0].step, "simulation": simulation},
        )
        job.netcdf(
            dataset,
            layout.prepared(simulation, int(tile)),
            f"Climate of {simulation} on the analysis grid",
            assessment.store.daily_codec,
        )


def _layers(assessment: Assessment) -> list[Layer]:
    specs = [assessment.system(crop, system) for crop, system in assessment.systems]
    return [
        layer
        for spec in specs
        for layer in (
            spec.area,
            spec.calendar.planting,
            spec.calendar.maturity,
            spec.baseline_yield,
        )
    ]


def _system_layers(
    assessment: Assessment, crop: str, system: str, grid: AnalysisGrid
) -> SystemLayers:
    spec = assessment.system(crop, system)
    block_mb = assessment.store.block_mb

    def source(key: str, layer: Layer, unit: str | None = None) -> Raster | Number:
        where = f"{assessment.source}: crops.{crop}.systems.{system}.{key}"
        if layer.file is None:
            assert layer.value is not None
            return Number(where, layer.value, layer.unit or unit)
        return open_raster(assessment.path(layer.file), layer)

    area = source("area", spec.area, "ha")
    return SystemLayers(
        area=area_on_grid(area, grid, block_mb),
        planting=calendar_on_grid(
            source("calendar.planting", spec.calendar.planting), grid, block_mb
        ),
        maturity=calendar_on_grid(
            source("calendar.maturity", spec.calendar.maturity), grid, block_mb
        ),
        baseline_yield=yield_on_grid(
            source("baseline_yield", spec.baseline_yield, YIELD_UNIT), grid, area, block_mb
        ),
    )
