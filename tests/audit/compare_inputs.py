"""Small invented results folders to compare: layers, yields, totals, changes, ensemble pixels."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment, save_resolved
from stook.audit.ledger import Job
from stook.grids.analysis import analysis_grid, tile_count

SIMULATION = "ALDER-ESM_high_r1"
YEARS = np.arange(1991, 2001)
REGIONS = ["Saltmere", "Thornfold"]


def response(heat: float) -> dict[str, object]:
    return {
        "crop": "maize",
        "system": "rainfed",
        "link": "log",
        "indices": {"heat": {"measure": "degree-days", "base": 29}},
        "terms": {"heat": {"form": "linear", "index": "heat", "coefficient": heat}},
        "standard_errors": [0.001],
        "estimation_range": {"heat": [0, 300]},
        "citation": "invented",
        "note": "invented",
    }


def write_run(
    folder: Path,
    heat: float = -0.006,
    draws: int = 20,
    tiles: int = 1,
    region: str | None = None,
) -> Path:
    """Write one results folder; return it. Values depend on the heat coefficient."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "maize.yaml").write_text(yaml.safe_dump(response(heat)), encoding="utf-8")
    (folder / "pr.nc").write_bytes(b"invented rain")
    content = {
        "title": "Invented",
        "name": "hollin",
        "seed": 3,
        "grid": {
            "lat": {"first": 44.5, "last": 47.5, "step": 1},
            "lon": {"first": 5.5, "last": 8.5, "step": 1},
            "tiles": tiles,
        },
        "periods": {"baseline": [1991, 1995], "horizons": {"late": [1996, 2000]}},
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
        "ensemble": {"draws": draws},
    }
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    assessment = load_assessment(path, regions=[region] if region else [])
    save_resolved(assessment)
    layout = Layout.of(assessment)
    # Saltmere is the western half of the grid; its run is cropped a column further east.
    grid = analysis_grid(assessment)
    columns = slice(0, 3) if region else slice(0, 4)
    grid = grid.part(slice(0, 4), columns)
    warmth = 10.0 * (YEARS - 1990)[:, None, None] + np.arange(16).reshape(4, 4)[:, columns]
    computed = np.broadcast_to(grid.lon < (7 if region else 9), grid.shape)
    # The second column belongs mostly to Thornfold, which has other marks of significance.
    west = np.broadcast_to(grid.lon < 6, grid.shape)
    main = np.where(west, 0, -1) if region else np.where(west, 0, 1)
    marks = np.where(west, 1, -1 if region else 0).astype(np.int8)
    yields = np.where(computed, 5 * np.exp(heat * warmth), np.nan)
    coordinates = grid.coordinates()
    layers = xr.Dataset(
        {
            "computed": (("lat", "lon"), computed.astype(np.int8)),
            "main_region": (("lat", "lon"), main.astype(np.int16)),
        },
        coordinates | {"region": [region] if region else REGIONS},
    )
    pixels = xr.Dataset({"yield": (("year", "lat", "lon"), yields)}, coordinates | {"year": YEARS})
    late = 100 * (yields[5:].mean(axis=0) / yields[:5].mean(axis=0) - 1)
    change = xr.Dataset(
        {"change_p50": (("horizon", "lat", "lon"), late[None])},
        coordinates | {"horizon": ["late"]},
    )
    regions = [region] if region else REGIONS
    classes = pd.DataFrame({"crop": "maize", "region": [*regions, "all regions"]}).merge(
        pd.DataFrame({"number": [0, 1, 2], "share": [0.2, 0.3, 0.5]}), how="cross"
    )
    classes.loc[classes["region"] == "all regions", "share"] += 0.01 * len(regions)
    with Job(assessment, "invented", [folder / "pr.nc", folder / "maize.yaml"]) as job:
        job.netcdf(layers, layout.layers, "layers")
        for tile in range(tile_count(assessment)):
            rows = grid.rows(tile, tile_count(assessment))
            season = xr.Dataset(
                {"heat": (("year", "lat", "lon"), np.where(computed, warmth, np.nan))},
                coordinates | {"year": YEARS},
            )
            target = layout.season(SIMULATION, "maize", "rainfed", tile)
            job.netcdf(season.isel(lat=rows), target, "season")
        job.netcdf(pixels, layout.yields(SIMULATION, "maize", "rainfed"), "yields")
        job.netcdf(change, layout.ensemble_pixels("maize", "rainfed", "high"), "pixels")
        job.netcdf(
            xr.Dataset({"significant_heat": (("lat", "lon"), marks)}, coordinates),
            layout.trend_pixels(SIMULATION, "maize", "rainfed"),
            "trend",
        )
        job.table(_totals(heat, regions), layout.totals(SIMULATION, "maize"))
        job.table(_changes(heat, regions), layout.changes)
        job.table(classes, layout.ensemble_table("classes"))
        shares = pd.DataFrame(
            {"quantity": "heat", "period": "all", "kind": "observed"}
            | {"bin_low": [0.0], "bin_high": [1.0], "area_share": [float(len(regions))]}
        )
        job.table(shares, layout.trend_distribution(SIMULATION, "maize", "rainfed"))
        field = pd.DataFrame(
            {"quantity": "heat", "period": "all", "region": [*regions, "all pixels"]}
        ).assign(pixels=[8] * len(regions) + [8 * len(regions)])
        job.table(field, layout.trend_field(SIMULATION, "maize", "rainfed"))
    return layout.root


def _totals(heat: float, regions: list[str]) -> pd.DataFrame:
    rows = [
        (name, "rainfed", int(year), draw, 1000.0 * (1 + heat * (year - 1990)) + draw)
        for name in regions
        for year in YEARS
        for draw in (0, 1)
    ]
    return pd.DataFrame(rows, columns=["region", "system", "year", "draw", "production_t"])


def _changes(heat: float, regions: list[str]) -> pd.DataFrame:
    return pd.DataFrame({"region": regions}).assign(
        crop="maize",
        system="rainfed",
        scenario="high",
        horizon="late",
        change_p05=1000 * heat - 5,
        change_p50=1000 * heat,
        change_p95=1000 * heat + 5,
        central_mean=1000 * heat,
        baseline_production_t=1000.0,
        likelihood="likely",
    )
