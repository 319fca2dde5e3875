"""Invented results of the earlier stages for the regions and ensemble jobs, on a small grid."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
import xarray as xr
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.assessment.simulations import all_simulations
from stook.audit.ledger import Job
from stook.grids.analysis import AnalysisGrid, analysis_grid, tile_count
from stook.grids.files import open_result
from stook.grids.missing import Reason, reason_attributes
from stook.regions.job import overlay

YEARS = np.arange(1991, 2011)
BASELINE, HORIZON = (1991, 2000), (2001, 2010)
SYSTEMS = ("rainfed", "irrigated")
POLYGONS = {
    # Two neighbours that share a slanted border, and an island with a lake; the rest is outside.
    "Saltmere": shapely.Polygon([(5.1, 44.1), (6.6, 44.0), (7.1, 46.2), (5.3, 46.4)]),
    "Thornfold": shapely.Polygon([(6.6, 44.0), (8.4, 44.3), (8.6, 46.0), (7.1, 46.2)]),
    "Brackwater": shapely.Polygon(
        [(5.4, 46.5), (8.2, 46.45), (8.0, 46.9), (5.6, 46.95)],
        [[(6.2, 46.6), (7.2, 46.62), (7.1, 46.8), (6.3, 46.78)]],
    ),
}


def response(system: str, link: str = "log") -> dict[str, Any]:
    """Return a response document of two terms, three coefficients."""
    scale = 1.0 if link == "log" else 5.0
    return {
        "crop": "maize",
        "system": system,
        "link": link,
        "intercept": 0.0 if link == "log" else 3.0,
        "indices": {"heat": {"measure": "degree-days", "base": 29}, "rain": {"measure": "total"}},
        "terms": {
            "heat": {"form": "linear", "index": "heat", "coefficient": -0.005 * scale},
            "rain": {
                "form": "quadratic",
                "index": "rain",
                "coefficients": [0.002 * scale, -2e-6 * scale],
            },
        },
        "standard_errors": [0.001, 0.0001, 1e-7],
        "estimation_range": {"heat": [20, 95], "rain": [300, 520]},
        "citation": "invented",
        "note": "invented",
    }


def write_assessment(
    folder: Path,
    runs: Sequence[tuple[str, str, str]] = (("ALDER-ESM", "high", "r1"),),
    systems: Sequence[str] = SYSTEMS,
    links: Sequence[str] = ("log", "level"),
    horizons: dict[str, tuple[int, int]] | None = None,
    **sections: Any,
) -> Path:
    """Write an assessment of a 6 x 8 grid with one crop; returns its path."""
    folder.mkdir(parents=True, exist_ok=True)
    for system, link in zip(systems, links, strict=False):
        text = yaml.safe_dump(response(system, link), sort_keys=False)
        (folder / f"maize_{system}.yaml").write_text(text, encoding="utf-8")
    write_polygons(folder / "regions.gpkg", POLYGONS)
    (folder / "pr.nc").touch()
    content: dict[str, Any] = {
        "title": "Invented regions",
        "name": "hollin",
        "seed": 11,
        "grid": {
            "lat": {"first": 44.25, "last": 46.75, "step": 0.5},
            "lon": {"first": 5.25, "last": 8.75, "step": 0.5},
        },
        "periods": {
            "baseline": list(BASELINE),
            "horizons": {"later": list(HORIZON)} if horizons is None else horizons,
        },
        "correct": {"all": {"method": "none"}},
        "simulations": {
            "runs": [
                {"model": m, "scenario": s, "realisation": r, "files": {"pr": ["pr.nc"]}}
                for m, s, r in runs
            ]
        },
        "crops": {
            "maize": {
                "systems": {
                    system: {
                        "area": 1,
                        "calendar": {"planting": 100, "maturity": 250},
                        "baseline_yield": 5,
                        "response": f"maize_{system}.yaml",
                    }
                    for system in systems
                }
            }
        },
        "regions": {"file": "regions.gpkg"},
        "ensemble": {"draws": 4},
    }
    if not runs:
        del content["simulations"]
        content["reference"] = {"name": "Hollin", "files": {"pr": ["pr.nc"]}}
    for name, values in sections.items():
        content[name] = content.get(name, {}) | values
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    return path


def write_polygons(
    path: Path, shapes: dict[str, shapely.Geometry], crs: Any = 4326, **options: Any
) -> None:
    """Write regions by name."""
    frame = gpd.GeoDataFrame({"name": list(shapes)}, geometry=list(shapes.values()), crs=4326)
    frame.to_crs(crs).to_file(path, **options)


def write_results(path: Path, region: str | None = None) -> Assessment:
    """Write what the stages before leave, the overlay included; with a region, a subset run's."""
    assessment = load_assessment(path, regions=[region] if region else [])
    layout = Layout.of(assessment)
    overlay(assessment)
    with open_result(layout.overlay) as dataset:
        grid = AnalysisGrid.from_dataset(dataset)
        touched = (dataset["coverage"] > 0).any("region").values
    full = analysis_grid(assessment)
    rows, columns = np.isin(full.lat, grid.lat), np.isin(full.lon, grid.lon)
    pixels = _Pixels(full)
    where = np.ix_(rows, columns)
    computed = np.ones(grid.shape, dtype=bool) if region is None else touched
    _layers(assessment, grid, pixels, where, computed)
    for system in assessment.crops["maize"].systems:
        draws = pixels.coefficients(system, assessment.ensemble.draws)
        with Job(assessment, "invented", []) as job:
            job.table(draws, layout.coefficients("maize", system))
        for number, run in enumerate(all_simulations(assessment)):
            _grids(assessment, grid, pixels, where, computed, run.name, number, system)
    return assessment


class _Pixels:
    """Invented values of the full grid."""

    def __init__(self, grid: AnalysisGrid) -> None:
        self.shape = grid.shape
        self.random = np.random.default_rng(5)
        self.area = {
            name: np.where(self.random.random(self.shape) > 0.2, 1, 0)
            * self.random.uniform(50, 900, self.shape)
            for name in SYSTEMS
        }
        self.baseline_yield = self.random.uniform(2, 8, self.shape)
        self.left_out = self.random.random(self.shape) < 0.1

    def indices(self, number: int) -> dict[str, np.ndarray]:
        random = np.random.default_rng(100 + number)
        size = (YEARS.size, *self.shape)
        step = (YEARS - YEARS[0])[:, None, None]
        return {
            "heat": 50 + (1 + number) * 0.8 * step + random.normal(0, 20, size),
            "rain": 420 + random.normal(0, 60, size),
        }

    @staticmethod
    def coefficients(system: str, draws: int) -> pd.DataFrame:
        document = response(system, "log" if system == "rainfed" else "level")
        central = np.array(
            [
                document["terms"]["heat"]["coefficient"],
                *document["terms"]["rain"]["coefficients"],
            ]
        )
        random = np.random.default_rng(len(system))
        rows = central * (1 + 0.1 * random.standard_normal((draws + 1, 3)))
        rows[0] = central
        frame = pd.DataFrame(rows, columns=["heat", "rain.1", "rain.2"])
        frame.insert(0, "draw", np.arange(draws + 1))
        return frame


def _layers(
    assessment: Assessment, grid: AnalysisGrid, pixels: _Pixels, where: Any, computed: np.ndarray
) -> None:
    names = list(assessment.crops["maize"].systems)
    area = np.array([pixels.area[name][where] * computed for name in names])
    reason = np.where(area > 0, 0, int(Reason.OUTSIDE_CROP_AREA)).astype(np.int8)
    dims = ("crop_system", "lat", "lon")
    yields = np.array([pixels.baseline_yield[where]] * len(names))
    layers = xr.Dataset(
        {
            "area": (dims, area, {"units": "ha"}),
            "baseline_yield": (dims, yields, {"units": "t ha-1"}),
            "reason": (dims, reason, reason_attributes()),
        },
        grid.coordinates() | {"crop_system": [f"maize_{name}" for name in names]},
    )
    with Job(assessment, "invented", []) as job:
        job.netcdf(layers, Layout.of(assessment).layers, "layers")


def _grids(
    assessment: Assessment,
    grid: AnalysisGrid,
    pixels: _Pixels,
    where: Any,
    computed: np.ndarray,
    simulation: str,
    number: int,
    system: str,
) -> None:
    layout = Layout.of(assessment)
    area = pixels.area[system][where] * computed
    reason = np.where(area > 0, 0, int(Reason.OUTSIDE_CROP_AREA))
    reason = np.where((area > 0) & pixels.left_out[where], int(Reason.NO_CALENDAR), reason)
    valid = reason == 0
    found = {k: np.where(valid, v[:, *where], np.nan) for k, v in pixels.indices(number).items()}
    series = ("year", "lat", "lon")
    why = (("lat", "lon"), reason.astype(np.int8), reason_attributes())
    coordinates = grid.coordinates() | {"year": YEARS}
    season = xr.Dataset({n: (series, v) for n, v in found.items()} | {"reason": why}, coordinates)
    heat, rain = found["heat"], found["rain"]
    marks = ((heat < 20) | (heat > 95)) + 2 * ((rain < 300) | (rain > 520)).astype(np.int16)
    central = pixels.coefficients(system, 0).iloc[0]
    h = central["heat"] * heat + central["rain.1"] * rain + central["rain.2"] * rain**2
    base = np.isin(YEARS, np.arange(BASELINE[0], BASELINE[1] + 1))
    ratio = np.exp(h) if system == "rainfed" else np.maximum(3.0 + h, 0)
    mean = ratio[base].mean(axis=0) if system == "rainfed" else (3.0 + h)[base].mean(axis=0)
    ratio = ratio / mean
    yields = xr.Dataset(
        {
            "yield": (series, ratio * pixels.baseline_yield[where], {"units": "t ha-1"}),
            "extrapolated": (series, marks.astype(np.int16)),
            "reason": why,
        },
        coordinates,
    )
    with Job(assessment, "invented", []) as job:
        for tile in range(tile_count(assessment)):
            rows = grid.rows(tile, tile_count(assessment))
            path = layout.season(simulation, "maize", system, tile)
            job.netcdf(season.isel(lat=rows), path, "season")
        job.netcdf(yields, layout.yields(simulation, "maize", system), "yields")
