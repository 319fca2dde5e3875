"""Regions and pixel summaries for geographic programs: polygons with values, bands, a CRS."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import rioxarray  # noqa: F401  (gives xarray objects the accessor `rio`)
import xarray as xr
from affine import Affine

from stook.report.tables import combined, in_regions

EPSG = 4326
"""Geographic coordinates on WGS 84, degrees: what every grid and polygon of the report is in."""

_GRID_MAPPING = "spatial_ref"


def region_layers(polygons: gpd.GeoDataFrame, changes: pd.DataFrame) -> dict[str, gpd.GeoDataFrame]:
    """Return the layers of the GeoPackage: ``regions``, and one per crop, scenario and horizon.

    Parameters
    ----------
    polygons
        Columns region and geometry, EPSG:4326.
    changes
        The changes table; of a crop with several water systems the combination is taken.

    Returns
    -------
    dict
        By layer name ``CROP_SCENARIO_HORIZON``, polygons with every column of the changes table.
    """
    layers = {"regions": polygons[["region", "geometry"]]}
    rows = in_regions(combined(changes))
    for (crop, scenario, horizon), group in rows.groupby(
        ["crop", "scenario", "horizon"], sort=False
    ):
        joined = polygons[["region", "geometry"]].merge(
            group, on="region", how="inner", validate="1:1"
        )
        order = [*group.columns, "geometry"]
        layers[f"{crop}_{scenario}_{horizon}"] = joined[order]
    return layers


def for_exchange(dataset: xr.Dataset) -> xr.Dataset:
    """Return a dataset on (lat, lon) as other programs expect it by CF.

    It names its coordinate reference system (CF 1.11, section 5.6), and a dimension of names,
    such as ``horizon``, keeps them in an auxiliary coordinate ``horizon_name`` (section 6.1), for a
    coordinate variable proper must be numeric.
    """
    names = {
        str(name): f"{name}_name"
        for name in dataset.indexes
        if dataset[name].dtype.kind not in "iuf"
    }
    described = dataset.reset_index(list(names)).rename_vars(names)
    for dimension, name in names.items():
        described[name].attrs.setdefault("long_name", f"name of the {dimension}")
    described = described.rio.write_crs(EPSG, grid_mapping_name=_GRID_MAPPING)
    described[_GRID_MAPPING].attrs["long_name"] = "coordinate reference system"
    for name, variable in described.data_vars.items():
        if {"lat", "lon"} <= set(variable.dims):
            described[name].attrs["grid_mapping"] = _GRID_MAPPING
    return described


def bands(dataset: xr.Dataset, names: Sequence[str]) -> xr.DataArray:
    """Stack variables as the bands of a GeoTIFF, north up.

    Parameters
    ----------
    dataset
        Variables of dimensions (lat, lon), latitude ascending.
    names
        Variables to take, one a band.

    Returns
    -------
    DataArray
        Dimensions (band, y, x), float64, missing NaN, EPSG:4326; attribute ``long_name`` holds
        the names of the bands.
    """
    layers = np.stack([dataset[name].values.astype(np.float64) for name in names])
    attributes: dict[str, Any] = {"long_name": tuple(names)}
    stacked = xr.DataArray(
        layers[:, ::-1, :],
        dims=("band", "y", "x"),
        coords={
            "band": np.arange(1, len(names) + 1),
            "y": dataset["lat"].values[::-1],
            "x": dataset["lon"].values,
        },
        attrs=attributes,
    )
    stacked = stacked.rio.write_crs(EPSG).rio.write_nodata(np.nan)
    return stacked.rio.write_transform(_transform(dataset))


def _transform(dataset: xr.Dataset) -> Affine:
    lat, lon = dataset["lat_bnds"].values, dataset["lon_bnds"].values
    width = (lon.max() - lon.min()) / len(lon)
    height = (lat.max() - lat.min()) / len(lat)
    return Affine(width, 0.0, lon.min(), 0.0, -height, lat.max())
