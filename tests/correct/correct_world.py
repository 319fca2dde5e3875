"""Invented prepared files and crop layers for the jobs of the correction."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.constants import OBSERVED
from stook.grids.analysis import AnalysisGrid, analysis_grid, tile_count
from stook.grids.missing import Reason, reason_attributes
from stook.grids.units import INSIDE_UNITS

SIMULATION = "SEDGE-LR_high_r1"
BASELINE = (1991, 2000)
SPAN = (1991, 2010)
SHAPE = (12, 14)
COMPUTED = np.add.outer(np.arange(SHAPE[0]), np.arange(SHAPE[1])) % 4 == 0
GAP, SHORT, ELSEWHERE = (3, 5), (5, 7), (1, 3)
"""Pixels without input, with few values in the reference, and outside the region asked for."""

RESPONSE = {
    "crop": "maize",
    "system": "rainfed",
    "link": "log",
    "indices": {"heat": {"measure": "degree-days", "base": 29}, "rain": {"measure": "total"}},
    "terms": {
        "heat": {"form": "linear", "index": "heat", "coefficient": -0.005},
        "rain": {"form": "linear", "index": "rain", "coefficient": 0.0002},
    },
    "standard_errors": [0.001, 0.0001],
    "estimation_range": {"heat": [0, 300], "rain": [100, 900]},
    "citation": "invented",
    "note": "invented",
}


def write_assessment(folder: Path, tiles: int = 1, block_mb: int = 64, **changes: Any) -> Path:
    """Write an assessment of a 12 x 14 grid with one crop; returns its path."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "maize.yaml").write_text(yaml.safe_dump(RESPONSE), encoding="utf-8")
    files = {name: [f"{name}.nc"] for name in ("tasmin", "tasmax", "pr")}
    for name in files:
        (folder / f"{name}.nc").touch()  # the jobs read prepared files only
    run = {"model": "SEDGE-LR", "scenario": "high", "realisation": "r1", "files": files}
    system = {
        "area": 1,
        "calendar": {"planting": 100, "maturity": 250},
        "baseline_yield": 5,
        "response": "maize.yaml",
    }
    content = {
        "title": "Invented correction",
        "name": "hollin",
        "seed": 11,
        "grid": {
            "lat": {"first": 41.25, "last": 46.75, "step": 0.5},
            "lon": {"first": 5.25, "last": 11.75, "step": 0.5},
            "tiles": tiles,
        },
        "periods": {"baseline": list(BASELINE), "horizons": {"late": [2001, 2010]}},
        "correct": {"all": {"minimum_values": 50}},
        "reference": {"name": "HOLLIN-OBS", "files": files},
        "simulations": {"runs": [run]},
        "crops": {"maize": {"systems": {"rainfed": system}}},
        "regions": {"file": "regions.gpkg"},
        "store": {"block_mb": block_mb},
    } | changes
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    return path


def write_results(
    path: Path, region: str | None = None, reference: bool = True, step: str = "daily"
) -> Assessment:
    """Write what the jobs read; with a region, the western columns of the grid only."""
    assessment = load_assessment(path, regions=[region] if region else [])
    columns = slice(0, 5 if region else SHAPE[1])
    grid = analysis_grid(assessment).part(slice(0, SHAPE[0]), columns)
    _layers(assessment, grid)
    sources = {SIMULATION: (SPAN, "360_day", 2.0)}
    if reference:
        sources[OBSERVED] = (BASELINE, "standard", 0.0)
    for name, (years, calendar, bias) in sources.items():
        data = prepared(name, years, calendar, bias, step)
        data = data.isel(lon=columns).assign_coords(grid.coordinates())
        for tile in range(tile_count(assessment)):
            rows = grid.rows(tile, tile_count(assessment))
            with Job(assessment, "prepare_tile", []) as job:
                job.netcdf(
                    data.isel(lat=rows), Layout.of(assessment).prepared(name, tile), "t", "zstd"
                )
    return assessment


def prepared(
    name: str, years: tuple[int, int], calendar: str, bias: float, step: str = "daily"
) -> xr.Dataset:
    """Return invented prepared grids of the whole analysis grid."""
    frequency = {"daily": "D", "monthly": "MS"}[step]
    last = "12-30" if calendar == "360_day" else "12-31"
    time = xr.date_range(
        f"{years[0]}-01-01 12:00",
        f"{years[1]}-{last} 12:00",
        freq=frequency,
        calendar=calendar,
        use_cftime=True,
    )
    random = np.random.default_rng(len(name))
    shape = (len(time), *SHAPE)
    position = np.array([t.dayofyr for t in time])[:, None, None] / 366
    mean = 12 + bias - 8 * np.cos(2 * np.pi * position) + (3 + bias / 2) * random.normal(size=shape)
    half = (1 - 0.1 * bias) * random.gamma(4, 1.2, shape)
    rain = random.gamma(0.7, 6, shape) * (random.random(shape) < 0.35 + 0.1 * bias)
    values = {"tasmin": mean - half, "tasmax": mean + half, "pr": rain}
    result = xr.Dataset(
        coords={"time": ("time", time, {"standard_name": "time", "axis": "T"})},
        attrs={"time_step": step, "simulation": name},
    )
    for variable, grid in values.items():
        grid[:, ~COMPUTED] = np.nan
        if name == SIMULATION:
            grid[:, *GAP] = np.nan
        else:
            grid[len(time) // 10 :, *SHORT] = np.nan
        attributes = {"units": INSIDE_UNITS[variable], "long_name": variable}
        if variable != "pr":
            attributes["units_metadata"] = "temperature: on_scale"
        result[variable] = (("time", "lat", "lon"), grid.astype(np.float32), attributes)
    return result


def _layers(assessment: Assessment, grid: AnalysisGrid) -> None:
    inside = COMPUTED[:, : grid.shape[1]][None]
    area = np.where(inside, 100.0, 0.0)
    reason = np.where(inside, 0, int(Reason.OUTSIDE_CROP_AREA)).astype(np.int8)
    if assessment.subset:
        reason[0, *ELSEWHERE] = int(Reason.OUTSIDE_REQUESTED_REGION)
    dims = ("crop_system", "lat", "lon")
    layers = xr.Dataset(
        {
            "area": (dims, area, {"units": "hectare", "long_name": "harvested area"}),
            "reason": (dims, reason, reason_attributes()),
            "computed": (("lat", "lon"), (reason[0] == 0).astype(np.int8)),
        },
        {"crop_system": ["maize_rainfed"], **grid.coordinates()},
    )
    with Job(assessment, "prepare_layers", []) as job:
        job.netcdf(layers, Layout.of(assessment).layers, "Invented layers")
