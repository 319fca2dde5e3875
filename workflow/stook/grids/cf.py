"""Reading other people's NetCDF files: variables, axes and times by CF conventions."""

from __future__ import annotations

import warnings
from pathlib import Path

import cf_xarray  # noqa: F401  (registers the `.cf` accessor)
import numpy as np
import xarray as xr

from stook.errors import InputError
from stook.grids.calendars import calendar_name
from stook.grids.files import CF_TIME

STANDARD_NAMES = {
    "tas": ("air_temperature",),
    "tasmin": ("air_temperature",),
    "tasmax": ("air_temperature",),
    "pr": ("precipitation_flux", "lwe_precipitation_rate"),
    "rsds": ("surface_downwelling_shortwave_flux_in_air",),
    "hurs": ("relative_humidity",),
}
"""CF standard names a variable may carry when it does not carry its CMIP name."""

_EXTREME = {"tasmin": "minimum", "tasmax": "maximum"}


def open_input(path: Path) -> xr.Dataset:
    """Open an input NetCDF file lazily; use it in a ``with`` block, which closes it.

    The time coordinate, whatever its name in the file, becomes ``time`` with cftime dates. Where
    time has bounds that contain it, the date is the middle of the bounds, so that a value stamped
    at the end of its day or month belongs to that day or month.

    Raises
    ------
    InputError
        If it is missing, is no NetCDF file, is damaged, or its times cannot be decoded.
    """
    raw = open_undecoded(path)
    try:
        return _decode_times(raw, path)
    except InputError:
        raw.close()
        raise


def open_undecoded(path: Path) -> xr.Dataset:
    """Open an input NetCDF file lazily, with missing values and packing decoded but not times.

    Raises
    ------
    InputError
        If it is missing, is no NetCDF file, or is damaged.
    """
    if not Path(path).exists():
        raise InputError(f"{path}: no such file")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # other people's encodings; what matters is checked
            return xr.open_dataset(path, engine="netcdf4", decode_times=False)
    except (OSError, ValueError, RuntimeError, AttributeError) as error:
        raise InputError(f"{path}: not a readable NetCDF file ({_reason(error)})") from None


def read_window(
    variable: xr.Variable, path: Path, name: str, window: dict[str, slice]
) -> np.ndarray:
    """Read part of a variable of an input file that is open.

    Parameters
    ----------
    variable
        Of a dataset of `open_undecoded`; may be read in any thread while the dataset is open.
    path, name
        The file and the variable's name in it, for the message.
    window
        Slice for every dimension that is not read whole, by dimension name.

    Returns
    -------
    ndarray
        float32 or float64, dimensions as in the file; missing values are NaN.

    Raises
    ------
    InputError
        If the values cannot be read: the file is damaged or cut short.
    """
    try:
        values = np.asarray(variable.isel(window).values)
    except (OSError, ValueError, RuntimeError) as error:
        raise InputError(f"{path}: {name} cannot be read ({_reason(error)})") from None
    return values if values.dtype in (np.float32, np.float64) else values.astype(np.float64)


def _decode_times(raw: xr.Dataset, path: Path) -> xr.Dataset:
    time = _time_name(raw)
    if time is None:
        return raw
    attributes = raw[time].attrs
    units = str(attributes.get("units", ""))
    if "since" not in units:
        raise InputError(f"{path}: {time} has no units like 'days since 1850-01-01'")
    calendar = calendar_name(str(attributes.get("calendar", "standard")), path)
    try:
        encoded = xr.Variable(
            raw[time].dims, _middle(raw, time), {"units": units, "calendar": calendar}
        )
        dates = xr.decode_cf(xr.Dataset({"t": encoded}), decode_times=CF_TIME)["t"].values
    except (ValueError, OverflowError, OSError, RuntimeError) as error:
        raise InputError(f"{path}: {time} cannot be decoded ({_reason(error)})") from None
    renamed = raw if time == "time" else raw.rename({time: "time"})
    return renamed.assign_coords(time=(renamed["time"].dims, dates))


def _time_name(raw: xr.Dataset) -> str | None:
    if "time" in raw.variables:
        return "time"
    for name, variable in raw.variables.items():
        if variable.attrs.get("standard_name") == "time" and variable.dims == (name,):
            return str(name)
    return None


def _middle(raw: xr.Dataset, time: str) -> np.ndarray:
    """Return encoded times, moved to the middle of their bounds where these contain them."""
    stamps = np.asarray(raw[time].values, dtype=np.float64)
    bounds = raw.variables.get(str(raw[time].attrs.get("bounds", "")))
    if bounds is None or bounds.shape != (*stamps.shape, 2):
        return stamps
    low, high = np.asarray(bounds.values, dtype=np.float64).T
    if np.all((low < high) & (low <= stamps) & (stamps <= high)):
        return (low + high) / 2
    return stamps


def _reason(error: Exception) -> str:
    text = str(getattr(error, "strerror", None) or error)
    return " ".join(text.split())[:120]


def horizontal_axes(dataset: xr.Dataset, path: Path | str) -> tuple[xr.DataArray, xr.DataArray]:
    """Return the latitude and longitude coordinates of a rectilinear grid.

    They are found by standard name, by units (degrees_north, degrees_east), or by the plain names
    latitude, longitude, lat, lon.

    Raises
    ------
    InputError
        If there is no latitude or longitude, or the grid is rotated, curvilinear or unstructured.
    """
    found = []
    for key in ("latitude", "longitude"):
        names = sorted(dataset.cf.standard_names.get(key, []))
        names += [n for n in dataset.cf.coordinates.get(key, []) if n not in names]
        names += [n for n in (key, key[:3]) if n in dataset.variables and n not in names]
        if not names:
            unit = "degrees_north" if key == "latitude" else "degrees_east"
            raise InputError(f"{path}: has no {key} coordinate (standard_name {key}, units {unit})")
        axes = [n for n in names if dataset[n].dims == (n,)]
        if not axes:
            raise InputError(
                f"{path}: the grid is rotated, curvilinear or unstructured "
                f"({names[0]} has dimensions ({', '.join(map(str, dataset[names[0]].dims))})); "
                "regrid it to regular latitude and longitude first"
            )
        found.append(dataset[axes[0]])
    return found[0], found[1]


def find_variable(dataset: xr.Dataset, name: str, path: Path | str) -> xr.DataArray:
    """Return a climate variable by its CMIP name, or by CF standard name and cell methods.

    ``air_temperature`` whose cell methods name a minimum is tasmin, a maximum tasmax; with a mean
    or without cell methods it is tas.

    Raises
    ------
    InputError
        If there is none, or more than one that could be meant.
    """
    if name in dataset.data_vars:
        return dataset[name]
    candidates = [
        str(key)
        for key, variable in dataset.data_vars.items()
        if variable.attrs.get("standard_name") in STANDARD_NAMES[name]
        and _matches_method(name, str(variable.attrs.get("cell_methods", "")))
    ]
    if len(candidates) == 1:
        return dataset[candidates[0]]
    if candidates:
        raise InputError(f"{path}: {name} could be any of {', '.join(candidates)}; rename one")
    there = ", ".join(map(str, dataset.data_vars)) or "nothing"
    raise InputError(
        f"{path}: has no variable {name}, nor one of standard name "
        f"{' or '.join(STANDARD_NAMES[name])} with fitting cell methods; it holds {there}"
    )


def _matches_method(name: str, cell_methods: str) -> bool:
    extreme = _EXTREME.get(name)
    if extreme:
        return extreme in cell_methods
    if name != "tas":
        return True
    extremes = any(word in cell_methods for word in _EXTREME.values())
    return not extremes and (not cell_methods.strip() or "mean" in cell_methods)


def axis_cells(axis: xr.DataArray, dataset: xr.Dataset, path: Path | str) -> np.ndarray:
    """Return cell edges along an axis: from its bounds, else halfway between centres.

    Parameters
    ----------
    axis
        1-D coordinate, degrees, rising or falling without a jump (longitudes: after unwrapping).
    dataset
        Where bounds are looked for.
    path
        For messages.

    Returns
    -------
    ndarray
        float64, shape (axis, 2): lower and upper edge of each cell, in the order of the axis.

    Raises
    ------
    InputError
        If there is only one cell and no bounds, or bounds leave gaps or overlap.
    """
    centres = axis.values.astype(np.float64)
    bounds = dataset.variables.get(str(axis.attrs.get("bounds", "")))
    if bounds is not None and bounds.shape == (len(centres), 2):
        away = np.asarray(bounds.values, dtype=np.float64) - centres[:, None]
        away = (away + 180.0) % 360.0 - 180.0
        cells = centres[:, None] + np.sort(away, axis=1)
    elif len(centres) > 1:
        middle = (centres[:-1] + centres[1:]) / 2
        edges = np.concatenate(
            [[2 * centres[0] - middle[0]], middle, [2 * centres[-1] - middle[-1]]]
        )
        cells = np.sort(np.stack([edges[:-1], edges[1:]], axis=1), axis=1)
    else:
        raise InputError(f"{path}: {axis.name} has one value and no bounds; its cell is unknown")
    ordered = cells[np.argsort(cells[:, 0], kind="stable")]
    width = (ordered[:, 1] - ordered[:, 0]).min()
    if width <= 0 or np.abs(ordered[1:, 0] - ordered[:-1, 1]).max(initial=0.0) > 1e-3 * width:
        raise InputError(f"{path}: bounds of {axis.name} have gaps or overlaps")
    return cells
