"""Invented results that the observed impact is worked out from: two systems, three regions."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.constants import OBSERVED
from stook.grids.analysis import analysis_grid, tile_count
from stook.grids.missing import Reason, reason_attributes

REGIONS = ["Saltmere", "Thornfold", "Lowsend"]
SYSTEMS = {"rainfed": "log", "irrigated": "level"}
YEARS = range(1961, 2021)
TREND = {"randomisations": 199, "periods": {"early": [1961, 1990], "late": [1991, 2020]}}


def response(system: str) -> dict[str, Any]:
    log = SYSTEMS[system] == "log"
    size = 1.0 if log else 4.0
    return {
        "crop": "maize",
        "system": system,
        "link": SYSTEMS[system],
        "intercept": 0.0 if log else 4.0,
        "indices": {
            "heat": {"measure": "degree-days", "base": 29},
            "rain": {"measure": "total"},
            "night": {"measure": "mean", "variable": "tasmin"},
        },
        "terms": {
            "heat": {
                "form": "piecewise-linear",
                "index": "heat",
                "knots": [70],
                "coefficients": [0.0005 * size, -0.004 * size],
            },
            "rain": {
                "form": "quadratic",
                "index": "rain",
                "coefficients": [0.001 * size, -1e-6 * size],
            },
            "night": {"form": "linear", "index": "night", "coefficient": -0.02 * size},
        },
        "standard_errors": [0.0002 * size, 0.001 * size, 0.0002 * size, 1e-7, 0.005 * size],
        "estimation_range": {"heat": [0, 300], "rain": [100, 900], "night": [5, 25]},
        "citation": "invented",
        "note": "invented",
    }


def write_assessment(folder: Path, tiles: int = 1, trend: dict[str, Any] | None = None) -> Path:
    """Write an assessment of a 6 x 8 grid with one crop under two systems; return its path."""
    folder.mkdir(parents=True, exist_ok=True)
    systems = {}
    for system in SYSTEMS:
        text = yaml.safe_dump(response(system))
        (folder / f"{system}.yaml").write_text(text, encoding="utf-8")
        systems[system] = {
            "area": 1,
            "calendar": {"planting": 100, "maturity": 250},
            "baseline_yield": 5,
            "response": f"{system}.yaml",
        }
    content = {
        "title": "Invented impacts",
        "name": "hollin",
        "seed": 11,
        "grid": {
            "lat": {"first": 44.25, "last": 46.75, "step": 0.5},
            "lon": {"first": 5.25, "last": 8.75, "step": 0.5},
            "tiles": tiles,
        },
        "periods": {"baseline": [1981, 2010]},
        "reference": {"name": "invented", "files": {"pr": ["pr.nc"]}},
        "crops": {"maize": {"systems": systems}},
        "regions": {"file": "regions.gpkg"},
        "trend": trend if trend is not None else dict(TREND),
        "ensemble": {"draws": 30},
    }
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content, sort_keys=False), encoding="utf-8")
    return path


def weather(shape: tuple[int, int], lat: np.ndarray, years: range) -> dict[str, np.ndarray]:
    """Return heat (rising), rain and night (rising), shape (year, lat, lon)."""
    random = np.random.default_rng(5)
    noise = random.standard_normal((3, len(years), *shape))
    for t in range(1, len(years)):
        noise[:, t] += 0.4 * noise[:, t - 1]
    step = np.arange(len(years))[:, None, None]
    heat = 50 + 0.5 * step + 4 * (lat[:, None] - 44) + 12 * noise[0]
    return {
        "heat": np.clip(heat, 0, None),
        "rain": np.clip(420 + 80 * noise[1], 0, None),
        "night": 15 + 0.02 * step + 0.6 * noise[2],
    }


def write_results(path: Path, region: str | None = None, years: range = YEARS) -> Assessment:
    """Write layers, overlay, seasons, yields and draws of `observed`.

    A pixel without crop, one without a yield, one with too few years, one with a gap.
    """
    assessment = load_assessment(path, regions=[region] if region else [])
    layout = Layout.of(assessment)
    full = analysis_grid(assessment)
    # Three regions side by side; the columns 2 and 5 are shared half and half.
    shares = np.zeros((3, 8))
    shares[0, :3], shares[1, 2:6], shares[2, 5:] = (1, 1, 0.5), (0.5, 1, 1, 0.5), (0.5, 1, 1)
    columns = {None: slice(0, 8), "Saltmere": slice(0, 3), "Thornfold": slice(2, 6)}[region]
    kept = [REGIONS.index(region)] if region else [0, 1, 2]
    coverage = np.repeat(shares[:, None, :], 6, axis=1)
    coverage[2, 0] = 0.3  # a strip outside all regions
    grid = full.part(slice(0, 6), columns)
    coordinates = grid.coordinates()
    series = weather(full.shape, full.lat, years)
    for values in series.values():
        values[0] = np.nan  # first season of a crop that crosses the year
        values[:, 0, 0] = np.nan
        values[5:50, 1, 1] = np.nan
    series["rain"][12, 3, 3] = np.nan
    reason = np.zeros(full.shape, dtype=np.int8)
    reason[0, 0] = int(Reason.OUTSIDE_CROP_AREA)
    reason[4, 4] = int(Reason.TOO_FEW_VALUES)
    area = np.where(reason == 1, 0.0, 100 + np.add.outer(np.arange(6) * 7.3, np.arange(8) * 3.1))
    areas = np.stack([area, 0.4 * area])[..., columns]
    main = shares.argmax(axis=0)[columns] if region is None else np.zeros(grid.shape[1])
    maps = ("lat", "lon")
    layers = xr.Dataset(
        {
            "area": (("crop_system", *maps), areas),
            "baseline_yield": (("crop_system", *maps), np.full(areas.shape, 5.5)),
            "reason": (
                ("crop_system", *maps),
                np.stack([reason * (reason == 1)] * 2)[..., columns],
                reason_attributes(),
            ),
            "main_region": (maps, np.broadcast_to(main, grid.shape).astype(np.int16)),
        },
        coordinates
        | {
            "crop_system": [f"maize_{system}" for system in SYSTEMS],
            "region": [REGIONS[number] for number in kept],
        },
    )
    overlay = xr.Dataset(
        {"coverage": (("region", *maps), coverage[kept][..., columns])},
        coordinates | {"region": [REGIONS[number] for number in kept]},
    )
    if region is None:
        overlay["covered"] = (maps, coverage.sum(axis=0))
    season = xr.Dataset(
        {
            name: (("year", *maps), np.asarray(values[..., columns]))
            for name, values in series.items()
        },
        coordinates | {"year": list(years)},
    )
    yields = xr.Dataset({"reason": (maps, reason[:, columns], reason_attributes())}, coordinates)
    random = np.random.default_rng(8)
    with Job(assessment, "invented", []) as job:
        job.netcdf(layers, layout.layers, "layers")
        job.netcdf(overlay, layout.overlay, "overlay")
        for system in SYSTEMS:
            for tile in range(tile_count(assessment)):
                rows = grid.rows(tile, tile_count(assessment))
                target = layout.season(OBSERVED, "maize", system, tile)
                job.netcdf(season.isel(lat=rows), target, "season")
            job.netcdf(yields, layout.yields(OBSERVED, "maize", system), "yields")
            job.table(_draws(system, random), layout.coefficients("maize", system))
    return assessment


def _draws(system: str, random: np.random.Generator) -> pd.DataFrame:
    document = response(system)
    names = ["heat.1", "heat.2", "rain.1", "rain.2", "night"]
    central = np.array(
        [
            *document["terms"]["heat"]["coefficients"],
            *document["terms"]["rain"]["coefficients"],
            document["terms"]["night"]["coefficient"],
        ]
    )
    errors = np.array(document["standard_errors"])
    rows = central + errors * random.standard_normal((31, 5))
    rows[0] = central
    return pd.DataFrame(rows, columns=names).assign(draw=np.arange(31))
