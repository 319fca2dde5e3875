"""Invented results of the earlier stages for the trend jobs: layers, season, yields, totals."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.grids.analysis import AnalysisGrid, analysis_grid, tile_count
from stook.grids.missing import Reason, reason_attributes

REGIONS = ["Saltmere", "Thornfold"]
SIMULATION = "ALDER-ESM_high_r1"
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


def write_assessment(folder: Path, tiles: int = 1, trend: dict[str, object] | None = None) -> Path:
    """Write an assessment of a 6 x 8 grid with one crop; returns its path."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "maize.yaml").write_text(yaml.safe_dump(RESPONSE), encoding="utf-8")
    content = {
        "title": "Invented trends",
        "name": "hollin",
        "seed": 11,
        "grid": {
            "lat": {"first": 44.25, "last": 46.75, "step": 0.5},
            "lon": {"first": 5.25, "last": 8.75, "step": 0.5},
            "tiles": tiles,
        },
        "periods": {"baseline": [1991, 2020]},
        "correct": {"all": {"method": "none"}},
        "simulations": {
            "runs": [
                {
                    "model": "ALDER-ESM",
                    "scenario": "high",
                    "realisation": "r1",
                    "files": {"pr": ["pr.nc"]},
                }
            ]
        },
        "crops": {
            "maize": {
                "systems": {
                    "rainfed": {
                        "area": 1,
                        "calendar": {"planting": 100, "maturity": 250},
                        "baseline_yield": 5,
                        "response": "maize.yaml",
                    }
                }
            }
        },
        "regions": {"file": "regions.gpkg"},
        "trend": trend or {"randomisations": 199},
    }
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    return path


def write_results(path: Path, years: range, region: str | None = None) -> Assessment:
    """Write what the trend jobs read; with a region, its columns of the grid only."""
    assessment = load_assessment(path, regions=[region] if region else [])
    full = analysis_grid(assessment)
    # Saltmere is the western half of the grid, Thornfold the eastern.
    columns = {None: slice(0, 8), "Saltmere": slice(0, 4), "Thornfold": slice(4, 8)}[region]
    names = [region] if region else REGIONS
    values = invented_series(full, years)
    grid = full.part(slice(0, 6), columns)
    values = {name: grids[..., columns] for name, grids in values.items()}
    half = np.where(full.lon < 7, 0, 1)[columns]
    main = np.broadcast_to(half if region is None else 0 * half, grid.shape)
    _write(assessment, grid, years, values, main, names)
    return assessment


def invented_series(grid: AnalysisGrid, years: range) -> dict[str, np.ndarray]:
    """Return heat, rain and yield (year, lat, lon), autocorrelated, heat rising."""
    random = np.random.default_rng(5)
    shape = (len(years), *grid.shape)
    noise = random.standard_normal((3, *shape))
    for t in range(1, len(years)):
        noise[:, t] += 0.4 * noise[:, t - 1]
    step = np.arange(len(years))[:, None, None]
    heat = 80 + 0.15 * step * (grid.lat[:, None] - 44) + 10 * noise[0]
    result = {"heat": heat, "rain": 400 + 60 * noise[1], "yield": 5 - 0.01 * step + 0.4 * noise[2]}
    for array in result.values():
        array[:, 0, 0] = np.nan
    result["heat"][0] = np.nan  # first season of a crop that crosses the year
    result["rain"][:, 2, 2] = 0.0
    return result


def _write(
    assessment: Assessment,
    grid: AnalysisGrid,
    years: range,
    values: dict[str, np.ndarray],
    main: np.ndarray,
    names: list[str],
) -> None:
    layout = Layout.of(assessment)
    coordinates = grid.coordinates()
    outside = np.isnan(values["yield"]).all(axis=0)
    reason = np.where(outside, int(Reason.OUTSIDE_CROP_AREA), 0).astype(np.int8)
    area = np.where(outside, 0.0, 100.0 + np.round(grid.lat[:, None] * 10 + grid.lon[None, :], 2))
    maps = ("lat", "lon")
    layers = xr.Dataset(
        {
            "area": (("crop_system", *maps), area[None]),
            "reason": (("crop_system", *maps), reason[None], reason_attributes()),
            "main_region": (maps, main.astype(np.int16)),
        },
        coordinates | {"crop_system": ["maize_rainfed"], "region": names},
    )
    series = ("year", *maps)
    why = (maps, reason, reason_attributes())
    season = xr.Dataset(
        {name: (series, values[name]) for name in ("heat", "rain")} | {"reason": why},
        coordinates | {"year": list(years)},
    )
    yields = xr.Dataset(
        {"yield": (series, values["yield"]), "reason": why}, coordinates | {"year": list(years)}
    )
    with Job(assessment, "invented", []) as job:
        job.netcdf(layers, layout.layers, "layers")
        for tile in range(tile_count(assessment)):
            rows = grid.rows(tile, tile_count(assessment))
            path = layout.season(SIMULATION, "maize", "rainfed", tile)
            job.netcdf(season.isel(lat=rows), path, "season")
        job.netcdf(yields, layout.yields(SIMULATION, "maize", "rainfed"), "yields")
        table = _totals(years, values["yield"], area, main, names)
        job.table(table, layout.totals(SIMULATION, "maize"))


def _totals(
    years: range, yields: np.ndarray, area: np.ndarray, main: np.ndarray, names: list[str]
) -> pd.DataFrame:
    rows = []
    for number, name in enumerate(names):
        inside = (main == number) & (area > 0)
        for k, year in enumerate(years):
            production = float((yields[k][inside] * area[inside]).sum())
            for draw in (0, 1):
                total = production * (1 + draw)
                rows.append((name, "rainfed", year, draw, total, float(area[inside].sum())))
    names_ = ["region", "system", "year", "draw", "production_t", "area_ha"]
    return pd.DataFrame(rows, columns=names_)
