"""Reading other people's NetCDF files: variables, axes and times by CF conventions."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
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
    "pr": ("precipitation_flux", "lwe_precipitation_rate", "rainfall_flux"),
    "rsds": ("surface_downwelling_shortwave_flux_in_air",),
    "hurs": ("relative_humidity",),
}
"""CF standard names a variable may carry when it does not carry its CMIP name."""

_EXTREME = {"tasmin": "minimum", "tasmax": "maximum"}
_PROJECTED = ("projection_x_coordinate", "projection_y_coordinate", "grid_latitude")


@contextmanager
def open_input(path: Path) -> Iterator[xr.Dataset]:
    """Open an input NetCDF file lazily, with cftime dates; close it at the end of the block.

    Raises
    ------
    InputError
        If it is missing, is no NetCDF file, is damaged, or its times cannot be decoded.
    """
    dataset = open_lazily(path)
    try:
        yield dataset
    finally:
        dataset.close()


def open_lazily(path: Path, chunks: dict[str, int] | None = None) -> xr.Dataset:
    """Open an input NetCDF file lazily and leave it open; see `open_input`."""
    if not Path(path).exists():
        raise InputError(f"{path}: no such file")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # other people's encodings; what matters is checked
            raw = xr.open_dataset(path, engine="netcdf4", decode_times=False, chunks=chunks)
    except (OSError, ValueError, RuntimeError) as error:
        raise InputError(f"{path}: not a readable NetCDF file ({_reason(error)})") from None
    try:
        return _decode_times(raw, path)
    except InputError:
        raw.close()
        raise


def _decode_times(raw: xr.Dataset, path: Path) -> xr.Dataset:
    if "time" not in raw.variables:
        return raw
    attributes = raw["time"].attrs
    if "since" not in str(attributes.get("units", "")):
        raise InputError(f"{path}: time has no units like 'days since 1850-01-01'")
    name = calendar_name(str(attributes.get("calendar", "standard")), path)
    only_time = raw["time"].assign_attrs(calendar=name)
    try:
        times = xr.decode_cf(only_time.to_dataset(name="t"), decode_times=CF_TIME)["time"]
    except (ValueError, OverflowError) as error:
        raise InputError(f"{path}: time cannot be decoded ({_reason(error)})") from None
    return raw.assign_coords(time=times)


def _reason(error: Exception) -> str:
    text = str(getattr(error, "strerror", None) or error)
    return " ".join(text.split())[:120]


def horizontal_axes(dataset: xr.Dataset, path: Path | str) -> tuple[xr.DataArray, xr.DataArray]:
    """Return the latitude and longitude coordinates of a rectilinear grid.

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
            raise InputError(f"{path}: has no {key} coordinate (CF standard_name {key})")
        axes = [n for n in names if dataset[n].ndim == 1 and dataset[n].dims == (n,)]
        if not axes:
            raise InputError(
                f"{path}: the grid is rotated, curvilinear or unstructured "
                f"({names[0]} has dimensions {', '.join(map(str, dataset[names[0]].dims))}); "
                "regrid it to regular latitude and longitude first"
            )
        found.append(dataset[axes[0]])
    return found[0], found[1]


def find_variable(dataset: xr.Dataset, name: str, path: Path | str) -> xr.DataArray:
    """Return a climate variable by its CMIP name, or by CF standard name and cell methods.

    A lone ``air_temperature`` without minimum or maximum in its cell methods is tas.

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
    return name != "tas" or not any(word in cell_methods for word in _EXTREME.values())


def axis_edges(axis: xr.DataArray, dataset: xr.Dataset, path: Path | str) -> np.ndarray:
    """Return cell edges of an ascending axis: from its bounds, else halfway between centres.

    Parameters
    ----------
    axis
        Ascending 1-D coordinate, degrees.
    dataset
        Where bounds are looked for.

    Returns
    -------
    ndarray
        float64, shape (axis + 1,).

    Raises
    ------
    InputError
        If there is only one cell and no bounds, or bounds have gaps.
    """
    centres = axis.values.astype(np.float64)
    bounds = dataset.variables.get(str(axis.attrs.get("bounds", "")))
    if bounds is not None and bounds.shape == (len(centres), 2):
        pairs = np.sort(bounds.values.astype(np.float64), axis=1)
        pairs = pairs[np.argsort(pairs[:, 0], kind="stable")]
        if np.allclose(pairs[1:, 0], pairs[:-1, 1], atol=1e-4):
            return np.append(pairs[:, 0], pairs[-1, 1])
        raise InputError(f"{path}: bounds of {axis.name} have gaps or overlaps")
    if len(centres) < 2:
        raise InputError(f"{path}: {axis.name} has one value and no bounds; its cell is unknown")
    middle = (centres[:-1] + centres[1:]) / 2
    return np.concatenate([[2 * centres[0] - middle[0]], middle, [2 * centres[-1] - middle[-1]]])
