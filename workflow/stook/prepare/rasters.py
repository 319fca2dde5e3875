"""Crop layers as teams have them: a variable of a NetCDF file or a band of a GeoTIFF."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import rasterio
import xarray as xr
from rasterio.windows import Window

from stook.assessment.crops import Layer
from stook.errors import InputError
from stook.grids.axes import SourceAxis, axis_of_edges, source_axes
from stook.grids.cf import open_undecoded, read_window

_TIFF = (".tif", ".tiff")


@dataclass(frozen=True)
class Raster:
    """A map on a regular latitude-longitude grid; its values stay in the file.

    Attributes
    ----------
    where
        The file, for messages.
    lat, lon
        Axes, ascending.
    unit
        As written in the file or, before that, in the assessment; None if neither has one.
    read
        Reads rows and columns (slices of the axes): float64, NaN where missing.
    """

    where: str
    lat: SourceAxis
    lon: SourceAxis
    unit: str | None
    read: Callable[[slice, slice], np.ndarray]

    def same_grid(self, other: Raster) -> bool:
        """Return whether both lie on the same cells."""
        return self.lat.agrees(other.lat) and self.lon.agrees(other.lon)


@dataclass(frozen=True)
class Number:
    """One number for every pixel, from the assessment.

    Attributes
    ----------
    where
        The key, for messages.
    value, unit
        The number and its unit.
    """

    where: str
    value: float
    unit: str | None


def open_raster(path: Path, layer: Layer) -> Raster:
    """Open the file of a crop layer.

    Parameters
    ----------
    path
        The file: GeoTIFF if it ends in .tif or .tiff, else NetCDF.
    layer
        Names the variable or band, and may name the unit.

    Raises
    ------
    InputError
        If the file cannot be read, holds no such variable or band, or is not on a regular
        latitude-longitude grid.
    """
    if not path.exists():
        raise InputError(f"{path}: no such file")
    if path.suffix.lower() in _TIFF:
        return _open_tiff(path, layer)
    return _open_netcdf(path, layer)


def _open_netcdf(path: Path, layer: Layer) -> Raster:
    with open_undecoded(path) as dataset:
        lat, lon, lat_name, lon_name = source_axes(dataset, path)
        name = layer.variable or _only_variable(dataset, {lat_name, lon_name}, path)
        if name not in dataset.data_vars:
            there = ", ".join(map(str, dataset.data_vars))
            raise InputError(f"{path}: has no variable {name}; it holds {there}")
        variable = dataset[name]
        dims = tuple(map(str, variable.dims))
        if not {lat_name, lon_name} <= set(dims) or variable.size != len(lat) * len(lon):
            raise InputError(
                f"{path}: {name} has dimensions ({', '.join(dims)}); "
                "a crop layer has one value for each latitude and longitude"
            )
        unit = layer.unit or variable.attrs.get("units")
    order = [dims.index(lat_name), dims.index(lon_name)]
    rest = [i for i in range(len(dims)) if i not in order]

    def read(rows: slice, columns: slice) -> np.ndarray:
        window = {lat_name: _in_file(rows, lat), lon_name: _in_file(columns, lon)}
        with open_undecoded(path) as dataset:
            values = read_window(dataset.variables[name], path, name, window)
        values = np.transpose(values, [*order, *rest])
        values = values.reshape(values.shape[:2])
        return _ascending(values, lat, lon).astype(np.float64)

    return Raster(str(path), lat, lon, None if unit is None else str(unit), read)


def _only_variable(dataset: xr.Dataset, wanted: set[str], path: Path) -> str:
    names = [str(n) for n, v in dataset.data_vars.items() if wanted <= set(map(str, v.dims))]
    if len(names) == 1:
        return names[0]
    if not names:
        raise InputError(f"{path}: holds no variable on latitude and longitude")
    raise InputError(f"{path}: holds {', '.join(names)}; name one with `variable`")


def _open_tiff(path: Path, layer: Layer) -> Raster:
    try:
        with rasterio.open(path) as source:
            if source.crs is None or not source.crs.is_geographic:
                given = source.crs.to_string() if source.crs else "no coordinate system"
                raise InputError(
                    f"{path}: has {given[:60]}; "
                    "reproject it to geographic latitude and longitude (EPSG:4326)"
                )
            if layer.band > source.count:
                raise InputError(f"{path}: has {source.count} bands, not {layer.band}")
            transform, height, width = source.transform, source.height, source.width
            unit = layer.unit or source.units[layer.band - 1]
    except rasterio.errors.RasterioError as error:
        raise InputError(
            f"{path}: not a readable GeoTIFF ({' '.join(str(error).split())})"
        ) from None
    if transform.b != 0 or transform.d != 0 or transform.a <= 0:
        raise InputError(f"{path}: is rotated or mirrored; give it north up, west to the left")
    lat = _tiff_axis(transform.f, transform.e, height, path, period=None)
    lon = _tiff_axis(transform.c, transform.a, width, path, period=360.0)

    def read(rows: slice, columns: slice) -> np.ndarray:
        up, across = _in_file(rows, lat), _in_file(columns, lon)
        window = Window(across.start, up.start, across.stop - across.start, up.stop - up.start)
        try:
            with rasterio.open(path) as source:
                values = source.read(layer.band, window=window, masked=True)
        except rasterio.errors.RasterioError as error:
            reason = " ".join(str(error).split())
            raise InputError(f"{path}: band {layer.band} cannot be read ({reason})") from None
        return _ascending(values.astype(np.float64).filled(np.nan), lat, lon)

    return Raster(str(path), lat, lon, unit or None, read)


def _tiff_axis(
    first: float, step: float, count: int, path: Path, period: float | None
) -> SourceAxis:
    edges = first + step * np.arange(count + 1)
    descending = step < 0
    edges = edges[::-1].copy() if descending else edges
    width = abs(step)
    if period is None:
        if edges[0] < -90.0 - 1e-3 * width or edges[-1] > 90.0 + 1e-3 * width:
            raise InputError(f"{path}: rows leave -90 to 90 degrees")
        edges = np.clip(edges, -90.0, 90.0)
    elif edges[-1] - edges[0] > period + 1e-3 * width:
        raise InputError(f"{path}: goes more than once round the globe; drop the repeated columns")
    return axis_of_edges(edges, descending, period)


def _in_file(cells: slice, axis: SourceAxis) -> slice:
    if axis.descending:
        return slice(len(axis) - cells.stop, len(axis) - cells.start)
    return cells


def _ascending(values: np.ndarray, lat: SourceAxis, lon: SourceAxis) -> np.ndarray:
    return values[:: -1 if lat.descending else 1, :: -1 if lon.descending else 1]
