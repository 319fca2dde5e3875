"""Invented files of the prepare stage, for the season job."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
import yaml
from season_inputs import weather, whole_years
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.grids.analysis import AnalysisGrid, analysis_grid, tile_count
from stook.grids.missing import Reason, reason_attributes

CALENDARS = {"observed": "standard", "ROWAN-CM_high_r1": "noleap", "SEDGE-LR_high_r1": "360_day"}
RESPONSE: dict[str, Any] = {
    "crop": "barley",
    "system": "rainfed",
    "link": "log",
    "indices": {
        "growth": {"measure": "degree-days", "base": 0, "cap": 30},
        "rain": {"measure": "total"},
        "hot_days": {
            "measure": "days-above",
            "variable": "tasmax",
            "threshold": 25,
            "phase": "filling",
        },
    },
    "terms": {
        "growth": {"form": "linear", "index": "growth", "coefficient": 0.0001},
        "rain": {"form": "linear", "index": "rain", "coefficient": 0.0002},
        "hot_days": {"form": "linear", "index": "hot_days", "coefficient": -0.01},
    },
    "standard_errors": [0.00001, 0.0001, 0.001],
    "estimation_range": {"growth": [0, 3000], "rain": [100, 900], "hot_days": [0, 30]},
    "citation": "invented",
    "note": "invented",
}


def write_assessment(folder: Path, tiles: int = 1, block_mb: int = 64) -> Path:
    """Write an assessment of a 6 x 8 grid with autumn-sown barley; returns its path."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "barley.yaml").write_text(yaml.safe_dump(RESPONSE, sort_keys=False), encoding="utf-8")
    runs = [
        dict(zip(("model", "scenario", "realisation"), name.split("_"), strict=True))
        | {"files": {"pr": ["pr.nc"]}}
        for name in CALENDARS
        if name != "observed"
    ]
    content = {
        "title": "Invented seasons",
        "name": "hollin",
        "seed": 11,
        "grid": {
            "lat": {"first": 44.25, "last": 46.75, "step": 0.5},
            "lon": {"first": 5.25, "last": 8.75, "step": 0.5},
            "tiles": tiles,
        },
        "periods": {"baseline": [2001, 2004]},
        "reference": {"name": "invented", "files": {"pr": ["pr.nc"]}},
        "simulations": {"runs": runs},
        "crops": {
            "barley": {
                "systems": {
                    "rainfed": {
                        "area": 1,
                        "calendar": {"planting": 280, "maturity": 190},
                        "phases": {"filling": [0.75, 1]},
                        "baseline_yield": 4,
                        "response": "barley.yaml",
                        "indices": {"dry_air": {"measure": "vapour-pressure-deficit"}},
                    }
                }
            }
        },
        "regions": {"file": "regions.gpkg"},
        "store": {"block_mb": block_mb},
    }
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    return path


def write_prepared(path: Path, region: str | None = None) -> Assessment:
    """Write layers and climate grids; with a region, its columns of the grid only."""
    assessment = load_assessment(path, regions=[region] if region else [])
    full = analysis_grid(assessment)
    columns = {None: slice(0, 8), "Saltmere": slice(0, 5)}[region]
    grid = full.part(slice(0, 6), columns)
    layout = Layout.of(assessment)
    layers = _layers(full).isel(lon=columns)
    with Job(assessment, "invented", []) as job:
        job.netcdf(layers, layout.layers, "layers")
        for number, (simulation, calendar) in enumerate(CALENDARS.items()):
            climate = weather(whole_years(2001, 2004, calendar), full.shape, seed=number)
            climate = climate.where(layers["reason"][0] == 0).isel(lon=columns)
            for tile in range(tile_count(assessment)):
                rows = grid.rows(tile, tile_count(assessment))
                part = climate.isel(lat=rows).assign_coords(
                    grid.part(rows, slice(0, len(grid.lon))).coordinates()
                )
                job.netcdf(part, layout.climate(simulation, tile), "climate")
    return assessment


def _layers(grid: AnalysisGrid) -> xr.Dataset:
    random = np.random.default_rng(1)
    maps = ("crop_system", "lat", "lon")
    shape = (1, *grid.shape)
    reason = np.where(random.random(shape) < 0.2, int(Reason.OUTSIDE_CROP_AREA), 0)
    planting = random.integers(260, 300, shape).astype(np.float64)
    maturity = random.integers(170, 210, shape).astype(np.float64)
    return xr.Dataset(
        {
            "planting": (maps, planting),
            "maturity": (maps, maturity),
            "baseline_yield": (maps, np.full(shape, 4.0)),
            "reason": (maps, reason.astype(np.int8), reason_attributes()),
        },
        grid.coordinates() | {"crop_system": ["barley_rainfed"]},
    )
