"""Writing the crop layers and the districts."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pyogrio
import xarray as xr
from stook.constants import EARTH_RADIUS_KM
from stook.version import VERSION

from demo_grids.domain import Domain
from demo_grids.geography import (
    CRS,
    LAYERS,
    CropLayer,
    area_share,
    baseline_yield,
    districts,
    season_days,
)

COMMENT = "Invented data: describes no real place."
YIELD_STEP = 0.5
FIXED_DATE = "2026-01-01T00:00:00Z"


def positions(domain: Domain, lat: np.ndarray, lon: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return positions in the world of a grid's cells, each of shape (lat, lon)."""
    up, across = np.meshgrid(domain.up(lat), domain.across(lon), indexing="ij")
    return across, up


def hectares(lat: np.ndarray, lon: np.ndarray, step: float) -> np.ndarray:
    """Return the area of the cells of a grid on the sphere, ha, shape (lat, lon)."""
    edges = np.sin(np.deg2rad(np.stack([lat - step / 2, lat + step / 2])))
    band = EARTH_RADIUS_KM**2 * np.deg2rad(step) * (edges[1] - edges[0])
    return 100 * np.repeat(band[:, None], len(lon), axis=1)


def area_layer(domain: Domain, layer: CropLayer) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return latitudes, longitudes and harvested share of an area layer, shape (lat, lon).

    Cells that reach beyond the analysis grid bear nothing, so that the grid holds every hectare.
    """
    step = domain.step * layer.area_step
    lat, lon = domain.axes(step)
    share = area_share(layer.name, *positions(domain, lat, lon))
    share[lat + step / 2 > domain.south + domain.height + 1e-6] = 0
    share[:, lon + step / 2 > domain.west + domain.width + 1e-6] = 0
    return lat, lon, share


def write_crops(folder: Path, domain: Domain) -> None:
    """Write area, calendar and baseline yield of every crop and system."""
    folder.mkdir(parents=True, exist_ok=True)
    for layer in LAYERS:
        lat, lon, share = area_layer(domain, layer)
        step = domain.step * layer.area_step
        if layer.geotiff:
            path = folder / f"{layer.name}_area.tif"
            _geotiff(path, lat, lon, share * hectares(lat, lon, step), step)
        else:
            attributes = {"long_name": f"harvested share of the cell, {layer.name}", "units": "1"}
            fields = {"harvested_share": (share.astype("f4"), attributes)}
            _netcdf(folder / f"{layer.name}_area.nc", lat, lon, step, fields)
    place = positions(domain, domain.lat, domain.lon)
    days = {}
    for layer in LAYERS:
        for what, values in zip(
            ("planting", "maturity"), season_days(layer.name, *place), strict=True
        ):
            attributes = {"long_name": f"{what}, {layer.name}, day of the year", "units": "1"}
            days[f"{layer.name}_{what}"] = (values.astype("f4"), attributes)
    _netcdf(folder / "calendars.nc", domain.lat, domain.lon, domain.step, days)
    _yields(folder / "yields.nc", domain)


def write_districts(path: Path, domain: Domain) -> None:
    """Write the districts as a GeoPackage in an equal-area projection, metres."""
    frame = districts(domain).to_crs(CRS)
    path.unlink(missing_ok=True)
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": FIXED_DATE})
    try:
        frame.to_file(path, layer="districts", driver="GPKG")
    finally:
        pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": None})


def _yields(path: Path, domain: Domain) -> None:
    step = domain.step * YIELD_STEP
    lat, lon = domain.axes(step)
    fields = {}
    for layer in LAYERS:
        factor = 1000.0 if layer.yield_units == "kg ha-1" else 1.0
        values = factor * baseline_yield(layer.name, *positions(domain, lat, lon))
        attributes = {"long_name": f"mean yield, {layer.name}", "units": layer.yield_units}
        fields[layer.name] = (values.astype("f4"), attributes)
    _netcdf(path, lat, lon, step, fields)


def _netcdf(
    path: Path,
    lat: np.ndarray,
    lon: np.ndarray,
    step: float,
    fields: dict[str, tuple[np.ndarray, dict[str, str]]],
) -> None:
    coordinates: dict[str, xr.Variable] = {}
    for name, standard, unit, axis, values in (
        ("lat", "latitude", "degrees_north", "Y", lat),
        ("lon", "longitude", "degrees_east", "X", lon),
    ):
        attributes = {"standard_name": standard, "units": unit, "axis": axis}
        coordinates[name] = xr.Variable(name, values, attributes | {"bounds": f"{name}_bnds"})
        bounds = np.stack([values - step / 2, values + step / 2], axis=1)
        coordinates[f"{name}_bnds"] = xr.Variable((name, "bnds"), bounds)
    dataset = xr.Dataset(
        {
            name: (("lat", "lon"), values, attributes)
            for name, (values, attributes) in fields.items()
        }
        | {name: value for name, value in coordinates.items() if name.endswith("_bnds")},
        {name: value for name, value in coordinates.items() if not name.endswith("_bnds")},
        {
            "Conventions": "CF-1.11",
            "title": "Invented crop layers of Hollin",
            "institution": "Invented for the demo world of Stook",
            "source": "demo_grids (invented)",
            "history": f"Generated by demo_grids of Stook {VERSION}",
            "comment": COMMENT,
            "references": "docs/demo-world.md",
        },
    )
    encoding: dict[str, dict[str, Any]] = {
        str(name): {"_FillValue": None} for name in dataset.variables
    }
    encoding |= {name: {"_FillValue": np.float32("nan"), "zlib": True} for name in fields}
    dataset.to_netcdf(path, engine="netcdf4", encoding=encoding)


def _geotiff(path: Path, lat: np.ndarray, lon: np.ndarray, values: np.ndarray, step: float) -> None:
    import rasterio

    transform = rasterio.Affine(step, 0, lon[0] - step / 2, 0, -step, lat[-1] + step / 2)
    with rasterio.open(
        path, "w", driver="GTiff", width=len(lon), height=len(lat), count=1, dtype="float32",
        crs="EPSG:4326", transform=transform, compress="deflate",
    ) as target:  # fmt: skip
        target.write(values[::-1].astype("f4"), 1)
        target.set_band_description(1, "harvested area, ha")
        target.set_band_unit(1, "ha")
        target.update_tags(COMMENT=COMMENT)
