"""Job of the season stage: files in and out."""

from __future__ import annotations

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.variables import system_indices
from stook.audit.ledger import Job
from stook.grids.analysis import AnalysisGrid
from stook.grids.files import open_result, pixel_chunks
from stook.season.indices import season_indices


def tile(assessment: Assessment, simulation: str, crop: str, system: str, tile: str) -> None:
    """Write the season indices of one simulation, crop, water system and tile.

    Reads the climate grids of the tile and the crop layers; writes `Layout.season`.
    """
    layout = Layout.of(assessment)
    source = layout.climate(simulation, int(tile))
    wildcards = {"simulation": simulation, "crop": crop, "system": system, "tile": tile}
    definitions = system_indices(assessment, crop, system)
    with (
        Job(assessment, "season_tile", [source, layout.layers], wildcards) as job,
        open_result(source) as lazy,
        open_result(layout.layers) as layers,
    ):
        series = sum(variable.dims[:1] == ("time",) for variable in lazy.data_vars.values())
        chunks = pixel_chunks(lazy, assessment.store.block_mb, series * lazy.sizes["time"])
        climate = lazy.chunk(chunks, token=str(source))  # else the times are hashed for names
        here = layers.sel(crop_system=f"{crop}_{system}", lat=lazy["lat"], lon=lazy["lon"]).load()
        indices = season_indices(
            climate,
            here["planting"],
            here["maturity"],
            here["reason"],
            definitions,
            assessment.system(crop, system).phases,
            source,
        )
        indices = indices.assign_coords(AnalysisGrid.from_dataset(lazy).coordinates())
        title = f"Season indices of {crop}, {system}, {simulation}"
        job.netcdf(indices, layout.season(simulation, crop, system, int(tile)), title)
