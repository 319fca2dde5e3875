"""Jobs of the correct stage: files in and out."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from typing import Any

import dask
import dask.array as da
import netCDF4
import numpy as np
import pandas as pd
import xarray as xr

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.simulations import simulations
from stook.audit.ledger import Job
from stook.constants import OBSERVED
from stook.correct.grids import correct_grids
from stook.correct.plan import series_of
from stook.correct.setup import Setup, make_setup
from stook.correct.summary import COLUMNS, summarise
from stook.errors import InputError
from stook.grids.analysis import AnalysisGrid, tile_count
from stook.grids.files import PIXEL_CHUNK, open_result, pixel_chunks
from stook.grids.missing import Reason

_BLOCK_VARIABLE = ("time", "lat", "lon")

_CHUNK_CACHE = 4 * 2**20
"""Cache of a variable of a NetCDF file, bytes: a block is whole chunks, none is read twice."""


def tile(assessment: Assessment, simulation: str, tile: str) -> None:
    """Write the corrected climate of one simulation on a tile of the analysis grid.

    Reads the prepared simulation, the prepared reference and the crop layers; writes
    `Layout.corrected`, `Layout.transfer` and `Layout.evaluation`.
    """
    layout = Layout.of(assessment)
    number = int(tile)
    source = layout.prepared(simulation, number)
    parents = [layout.layers, source]
    if assessment.reference is not None:
        parents.append(layout.prepared(OBSERVED, number))
    wildcards = {"simulation": simulation, "tile": tile}
    with (
        _small_cache(),
        Job(assessment, "correct_tile", parents, wildcards) as job,
        ExitStack() as stack,
    ):
        model = stack.enter_context(open_result(source))
        reference = None
        if assessment.reference is not None:
            reference = stack.enter_context(open_result(parents[-1]))
        variables = [str(name) for name in model.data_vars if model[name].dims == _BLOCK_VARIABLE]
        _check_reference(assessment, simulation, model, reference, variables)
        setup = _setup(assessment, simulation, model, reference, variables)
        outside = _outside(layout, number, tile_count(assessment))
        found = [
            _lazy_group(group, reference, model, outside, setup, assessment.store.block_mb)
            for group in setup.groups
        ]
        grid = AnalysisGrid.from_dataset(model).coordinates()
        attributes = {"time_step": model.attrs["time_step"], "simulation": simulation}
        grids, transfer, evaluation = (
            xr.merge(parts, join="exact").assign_coords(grid).assign_attrs(attributes)
            for parts in zip(*found, strict=True)
        )
        grids = grids.assign_coords(time=model["time"])
        codec = assessment.store.daily_codec
        of = f"the correction of {simulation}"
        paths = [
            path(simulation, number)
            for path in (layout.corrected, layout.transfer, layout.evaluation)
        ]
        job.netcdf_files(
            [
                (grids, paths[0], f"Corrected climate of {simulation}", codec),
                (transfer, paths[1], f"Calibration quantiles of {of}", "zlib"),
                (evaluation, paths[2], f"Split-sample evaluation of {of}", "zlib"),
            ]
        )


def _setup(
    assessment: Assessment,
    simulation: str,
    model: xr.Dataset,
    reference: xr.Dataset | None,
    variables: list[str],
) -> Setup:
    """Return what the blocks of a simulation share: windows, choices, seeds."""
    step = model.attrs["time_step"]
    return make_setup(
        None if reference is None else series_of(reference["time"], step),
        series_of(model["time"], step),
        variables,
        assessment.correct,
        assessment.correct.calibration or assessment.periods.baseline,
        assessment.periods.horizons,
        simulation,
        assessment.seed,
    )


def summary(assessment: Assessment) -> None:
    """Write the evaluation of all simulations, averaged over the crop area.

    Reads the evaluation of every simulation and tile and the crop layers; writes
    `Layout.evaluation_table`.
    """
    layout = Layout.of(assessment)
    tiles = range(tile_count(assessment))
    names = [found.name for found in simulations(assessment)]
    paths = {name: [layout.evaluation(name, tile) for tile in tiles] for name in names}
    parents = [layout.layers, *(path for found in paths.values() for path in found)]
    with Job(assessment, "correct_summary", parents) as job:
        with open_result(layout.layers) as layers:
            area = layers["area"].sum("crop_system").load()
        frames = []
        for name in names:
            with ExitStack() as stack:
                parts = [stack.enter_context(open_result(path)) for path in paths[name]]
                frames.append(summarise(name, parts, area))
        table = pd.concat(frames, ignore_index=True) if frames else pd.DataFrame(columns=COLUMNS)
        job.table(table[list(COLUMNS)], layout.evaluation_table)


@contextmanager
def _small_cache() -> Iterator[None]:
    """Let NetCDF files that are opened inside keep few chunks in memory."""
    before = netCDF4.get_chunk_cache()
    netCDF4.set_chunk_cache(_CHUNK_CACHE)
    try:
        yield
    finally:
        netCDF4.set_chunk_cache(*before)


def _check_reference(
    assessment: Assessment,
    simulation: str,
    model: xr.Dataset,
    reference: xr.Dataset | None,
    variables: list[str],
) -> None:
    """Check that the reference has what the correction needs."""
    if reference is None:
        return
    if reference.attrs["time_step"] != model.attrs["time_step"]:
        raise InputError(
            f"{simulation}: values are {model.attrs['time_step']} but those of the reference are "
            f"{reference.attrs['time_step']}; both must have the same time step"
        )
    for name in variables:
        if name not in reference and assessment.correct.choice(name).method != "none":
            raise InputError(
                f"{simulation}: the reference has no {name}; give reference.files.{name} "
                f"or set correct.variables.{name}.method to none"
            )


def _outside(layout: Layout, tile: int, tiles: int) -> xr.DataArray:
    """Return the reason code of pixels of a tile that are not computed, 0 for the others."""
    with open_result(layout.layers) as layers:
        rows = AnalysisGrid.from_dataset(layers).rows(tile, tiles)
        part = layers[["computed", "reason"]].isel(lat=rows).load()
    requested = int(Reason.OUTSIDE_REQUESTED_REGION)
    elsewhere = (part["reason"] == requested).any("crop_system")
    why = xr.where(elsewhere, requested, int(Reason.OUTSIDE_CROP_AREA))
    return xr.where(part["computed"] == 1, 0, why).astype(np.int8)


def _lazy_group(
    group: tuple[str, ...],
    reference: xr.Dataset | None,
    model: xr.Dataset,
    outside: xr.DataArray,
    setup: Setup,
    block_mb: float,
) -> tuple[xr.Dataset, ...]:
    """Return the three datasets of a group of variables, computed block by block when written."""

    def work(rows: slice, columns: slice) -> tuple[dict[str, np.ndarray], ...]:
        here = {"lat": rows, "lon": columns}
        names = list(group)
        o = None
        if reference is not None and set(names) <= set(reference):
            o = reference[names].isel(here).load()
        found = correct_grids(group, o, model[names].isel(here).load(), outside.isel(here), setup)
        return tuple(
            {str(name): variable.values for name, variable in dataset.data_vars.items()}
            for dataset in found.datasets()
        )

    nothing = {"lat": slice(0, 0), "lon": slice(0, 0)}
    empty = model[list(group)].isel(nothing).load()
    o_empty = None
    if reference is not None and set(group) <= set(reference):
        o_empty = reference[list(group)].isel(nothing).load()
    templates = correct_grids(group, o_empty, empty, outside.isel(nothing), setup).datasets()
    values = len(group) * (model.sizes["time"] + (reference.sizes["time"] if reference else 0))
    chunks = pixel_chunks(model, block_mb, values)
    rows = _slices(model.sizes["lat"], chunks["lat"])
    columns = _slices(model.sizes["lon"], chunks["lon"])
    task = dask.delayed(work, pure=False, traverse=False)
    blocks = [[task(row, column) for column in columns] for row in rows]
    return tuple(
        _assemble(template, number, blocks, rows, columns)
        for number, template in enumerate(templates)
    )


def _slices(size: int, step: int) -> list[slice]:
    """Cut an axis into pieces that are whole chunks of the file."""
    step = -(-step // PIXEL_CHUNK) * PIXEL_CHUNK
    return [slice(start, min(start + step, size)) for start in range(0, size, step)]


def _assemble(
    template: xr.Dataset, number: int, blocks: Any, rows: list[slice], columns: list[slice]
) -> xr.Dataset:
    """Return a dataset like the template whose data are joined from delayed blocks."""
    result = xr.Dataset(
        coords={n: c for n, c in template.coords.items() if n not in ("lat", "lon")}
    )
    for name, variable in template.data_vars.items():
        pieces = [
            [
                da.from_delayed(
                    blocks[i][j][number][name],
                    (*variable.shape[:-2], row.stop - row.start, column.stop - column.start),
                    meta=np.empty((0,) * variable.ndim, variable.dtype),
                )
                for j, column in enumerate(columns)
            ]
            for i, row in enumerate(rows)
        ]
        data = da.concatenate([da.concatenate(row, axis=-1) for row in pieces], axis=-2)
        result[name] = xr.Variable(variable.dims, data, variable.attrs)
    return result
