"""Small invented climate files, crop layers and assessments for the tests of prepare."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import cftime
import numpy as np
import rasterio
import xarray as xr
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment, save_resolved
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.grids.analysis import AnalysisGrid

LAT, LON = np.arange(9.5, 14), np.arange(19.5, 25)
UNITS = {
    "tas": "K",
    "tasmin": "K",
    "tasmax": "K",
    "pr": "kg m-2 s-1",
    "rsds": "W m-2",
    "hurs": "%",
}

RESPONSE = """\
crop: grain
system: rainfed
link: log
indices:
  growth: {measure: mean, variable: tas}
  rain: {measure: total}
terms:
  growth: {form: linear, index: growth, coefficient: -0.01}
  rain: {form: linear, index: rain, coefficient: 0.0001}
standard_errors: [0.01, 0.0001]
estimation_range:
  growth: [-50.0, 50.0]
  rain: [0.0, 5000.0]
citation: invented for this test
note: Invented coefficients; they describe no real crop.
"""


def axis(name: str, values: np.ndarray, bounds: np.ndarray | None = None) -> dict[str, Any]:
    """Return coordinates for one axis, with bounds if given."""
    standard = "latitude" if name.startswith("lat") else "longitude"
    unit = "degrees_north" if standard == "latitude" else "degrees_east"
    attributes = {"standard_name": standard, "units": unit}
    if bounds is None:
        return {name: (name, values, attributes)}
    attributes["bounds"] = f"{name}_bnds"
    return {name: (name, values, attributes), f"{name}_bnds": ((name, "bnds"), bounds)}


def days(first: str, count: int, calendar: str = "standard") -> tuple[np.ndarray, str]:
    """Return encoded noons of consecutive days and their unit."""
    year, month, day = map(int, first.split("-"))
    start = cftime.datetime(year, month, day, 12, calendar=calendar)
    unit = "days since 1850-01-01"
    return cftime.date2num(start, unit, calendar=calendar) + np.arange(count), unit


def climate_file(
    path: Path,
    variable: str,
    values: np.ndarray,
    lat: np.ndarray,
    lon: np.ndarray,
    first: str = "2001-01-01",
    calendar: str = "standard",
    unit: str | None = None,
    times: np.ndarray | None = None,
    **attributes: Any,
) -> Path:
    """Write values (time, lat, lon) as a model file."""
    encoded, time_unit = days(first, len(values), calendar)
    stamps = encoded if times is None else times
    dataset = xr.Dataset(
        {variable: (("time", "lat", "lon"), values)},
        axis("lat", lat) | axis("lon", lon) | {"time": ("time", stamps)},
    )
    dataset["time"].attrs = {"units": time_unit, "calendar": calendar, "standard_name": "time"}
    dataset[variable].attrs = {"units": UNITS[variable] if unit is None else unit, **attributes}
    path.parent.mkdir(parents=True, exist_ok=True)
    dataset.to_netcdf(path)
    return path


def crop_file(
    path: Path, fields: dict[str, np.ndarray], lat: np.ndarray, lon: np.ndarray, unit: str | None
) -> Path:
    """Write crop layers (lat, lon) as NetCDF."""
    attributes = {} if unit is None else {"units": unit}
    dataset = xr.Dataset(
        {name: (("lat", "lon"), values, attributes) for name, values in fields.items()},
        axis("lat", lat) | axis("lon", lon),
    )
    dataset.to_netcdf(path)
    return path


def crop_tiff(
    path: Path, values: np.ndarray, west: float, north: float, step: float, **options: Any
) -> Path:
    """Write a band, first row in the north, as GeoTIFF in geographic coordinates."""
    transform = rasterio.Affine(step, 0, west, 0, -step, north)
    profile = {
        "driver": "GTiff", "height": values.shape[0], "width": values.shape[1], "count": 1,
        "dtype": str(values.dtype), "crs": "EPSG:4326", "transform": transform,
    }  # fmt: skip
    with rasterio.open(path, "w", **(profile | options)) as target:
        target.write(values, 1)
    return path


def grid_of(south: float, north: float, west: float, east: float, step: float) -> AnalysisGrid:
    """Return an analysis grid between edges."""
    lat = np.arange(round((north - south) / step) + 1) * step + south
    lon = np.arange(round((east - west) / step) + 1) * step + west
    return AnalysisGrid((lat[:-1] + lat[1:]) / 2, (lon[:-1] + lon[1:]) / 2, lat, lon)


def assessment_of(
    folder: Path, content: dict[str, Any], regions: tuple[str, ...] = ()
) -> Assessment:
    """Write an assessment with usual choices, some replaced by `content`; return it, loaded."""
    (folder / "response.yaml").write_text(RESPONSE, encoding="utf-8")
    system = {
        "area": {"value": 100.0, "unit": "ha"},
        "calendar": {"planting": 100, "maturity": 200},
        "baseline_yield": 3.0,
        "response": "response.yaml",
    }
    base = {
        "title": "Invented grain",
        "name": "grain",
        "seed": 1,
        "grid": {
            "lat": {"first": 10.25, "last": 12.75, "step": 0.5},
            "lon": {"first": 20.25, "last": 23.75, "step": 0.5},
        },
        "periods": {"baseline": [2001, 2001]},
        "simulations": {
            "pattern": "climate/{variable}_{model}_{scenario}_{realisation}_*.nc",
        },
        "correct": {"all": {"method": "none"}},
        "crops": {"grain": {"systems": {"rainfed": system | content.pop("system", {})}}},
        "regions": {"file": "regions.gpkg"},
    }
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(base | content), encoding="utf-8")
    assessment = load_assessment(path, regions=regions)
    save_resolved(assessment)
    return assessment


def write_overlay(
    assessment: Assessment, grid: AnalysisGrid, coverage: dict[str, np.ndarray]
) -> None:
    """Write the overlay that the regions stage would write."""
    names = list(coverage)
    dataset = xr.Dataset(
        {"coverage": (("region", "lat", "lon"), np.stack([coverage[name] for name in names]))},
        {"region": ("region", names), **grid.coordinates()},
    )
    with Job(assessment, "regions_overlay", parents=[]) as job:
        job.netcdf(dataset, Layout.of(assessment).overlay, "Invented overlay")
