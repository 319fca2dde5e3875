"""Climate series on the analysis grid: same time steps, inside units, pixels with crops only."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import cftime
import dask.array as da
import numpy as np
import xarray as xr

from stook.errors import InputError
from stook.grids.analysis import AnalysisGrid
from stook.grids.calendars import step_number
from stook.grids.files import PIXEL_CHUNK, TIME_CHUNK
from stook.grids.regrid import (
    HALF,
    AxisWeights,
    Method,
    bilinear_weights,
    conservative_weights,
    weighted_mean,
)
from stook.grids.units import INSIDE_UNITS
from stook.prepare.series import Series

METHODS: dict[str, Method] = {
    "tas": "bilinear",
    "tasmin": "bilinear",
    "tasmax": "bilinear",
    "pr": "conservative",
    "rsds": "conservative",
    "hurs": "bilinear",
}
"""How each variable is regridded: fluxes keep their area mean, the rest is interpolated."""

_NAMES = {
    "tas": ("air_temperature", "near-surface air temperature"),
    "tasmin": ("air_temperature", "daily minimum near-surface air temperature"),
    "tasmax": ("air_temperature", "daily maximum near-surface air temperature"),
    "pr": ("lwe_precipitation_rate", "precipitation"),
    "rsds": ("surface_downwelling_shortwave_flux_in_air", "incoming shortwave radiation"),
    "hurs": ("relative_humidity", "near-surface relative humidity"),
}
_EXTREMES = {"tasmin": "minimum", "tasmax": "maximum"}


def variable_attributes(variable: str, step: str) -> dict[str, str]:
    """Return the CF attributes of a climate variable in the files of Stook."""
    standard_name, long_name = _NAMES[variable]
    cell_methods = "time: mean"
    if extreme := _EXTREMES.get(variable):
        cell_methods = f"time: {extreme}"
        if step != "daily":
            cell_methods = f"time: {extreme} within days time: mean over days"
    attributes = {
        "standard_name": standard_name,
        "long_name": long_name,
        "units": INSIDE_UNITS[variable],
        "cell_methods": cell_methods,
    }
    if INSIDE_UNITS[variable] == "degC":
        attributes["units_metadata"] = "temperature: on_scale"
    return attributes


def common_steps(
    series: Sequence[Series], span: tuple[int, int] | None, whole: bool = True
) -> list[slice]:
    """Return, for each of several series, its steps within the time common to all.

    Parameters
    ----------
    series
        Variables of one simulation.
    span
        First and last year wanted; None for all years.
    whole
        Whether every variable must cover the whole span; else what there is of it is taken.

    Raises
    ------
    InputError
        If calendars or time steps differ, there is no common time, or the span is not covered
        (without `whole`: not even in part).
    """
    first = series[0]
    for other in series[1:]:
        for what in ("calendar", "step"):
            if getattr(other, what) != getattr(first, what):
                raise InputError(
                    f"{other.files[0].path}: {other.variable} is {getattr(other, what)}, but "
                    f"{first.variable} is {getattr(first, what)}; the variables of a simulation "
                    "have one calendar and one time step"
                )
    low = max(int(one.numbers[0]) for one in series)
    high = min(int(one.numbers[-1]) for one in series)
    if low > high:
        periods = "; ".join(
            f"{one.variable} {str(one.times[0])[:10]} to {str(one.times[-1])[:10]}"
            for one in series
        )
        raise InputError(f"{first.files[0].path}: variables share no time: {periods}")
    if span is not None:
        inside = first.numbers[(first.years >= span[0]) & (first.years <= span[1])]
        inside = inside[(inside >= low) & (inside <= high)]
        for one in series:
            if whole or inside.size == 0:
                _check_span(one, span)
        low, high = int(inside[0]), int(inside[-1])
    return [slice(low - int(one.numbers[0]), high + 1 - int(one.numbers[0])) for one in series]


def _check_span(series: Series, span: tuple[int, int]) -> None:
    calendar = series.calendar
    last_day = 30 if calendar == "360_day" else 31
    begin = cftime.datetime(span[0], 1, 1, 12, calendar=calendar)
    end = cftime.datetime(span[1], 12, last_day, 12, calendar=calendar)
    first, last = _numbers(series, begin), _numbers(series, end)
    if first < series.numbers[0] or last > series.numbers[-1]:
        raise InputError(
            f"{series.files[0].path}: {series.variable} holds {str(series.times[0])[:10]} to "
            f"{str(series.times[-1])[:10]}, not the whole of periods.span {span[0]} to {span[1]}"
        )


def _numbers(series: Series, date: Any) -> int:
    return int(step_number(np.array([date]), series.step)[0])


def time_coordinate(series: Series, steps: slice) -> xr.Variable:
    """Return the time stamps of prepared data: noon of each day; months and years as they are."""
    times = series.times[steps]
    if series.step == "daily":
        noon = series.numbers[steps] + 0.5
        times = cftime.num2date(noon, "days since 1850-01-01", calendar=series.calendar)
    attributes = {"standard_name": "time", "long_name": "time", "axis": "T"}
    if series.calendar in ("standard", "proleptic_gregorian", "julian"):
        attributes["units_metadata"] = "leap_seconds: none"
    return xr.Variable("time", np.asarray(times), attributes)


def prepare_series(
    series: Series, steps: slice, grid: AnalysisGrid, computed: np.ndarray, block_mb: float
) -> xr.DataArray:
    """Return a climate series on a part of the analysis grid, lazily, block by block.

    Parameters
    ----------
    series
        The files.
    steps
        Time steps to take.
    grid
        The part of the analysis grid.
    computed
        bool, shape (lat, lon); other pixels are NaN.
    block_mb
        Largest size of a block, MiB.

    Returns
    -------
    DataArray
        float32, dimensions (time, lat, lon), inside unit.
    """
    rows, columns = series_weights(series, grid)
    length = steps.stop - steps.start
    chunks = _chunks(length, grid.shape, block_mb)

    def block(block_info: Any = None) -> np.ndarray:
        (t0, t1), (i0, i1), (j0, j1) = block_info[None]["array-location"]
        times = slice(steps.start + t0, steps.start + t1)
        wanted = np.ascontiguousarray(computed[i0:i1, j0:j1])
        return _block(
            series, times, rows.part(slice(i0, i1)), columns.part(slice(j0, j1)), wanted, block_mb
        )

    data = da.map_blocks(
        block,
        chunks=chunks,
        dtype=np.float32,
        meta=np.empty((0, 0, 0), dtype=np.float32),
        name=f"prepared-{series.variable}",  # else the whole series is hashed for one
    )
    attributes = variable_attributes(series.variable, series.step)
    attributes["comment"] = f"regridded: {_method_words(series)}; unit in the files: {series.unit}"
    return xr.DataArray(data, dims=("time", "lat", "lon"), attrs=attributes, name=series.variable)


def series_weights(series: Series, grid: AnalysisGrid) -> tuple[AxisWeights, AxisWeights]:
    """Return the weights of a series on a grid, along latitude and longitude."""
    if METHODS[series.variable] == "conservative":
        return (
            conservative_weights(series.lat, grid.lat_edges, "lat"),
            conservative_weights(series.lon, grid.lon_edges, "lon"),
        )
    return (
        bilinear_weights(series.lat, grid.lat, "lat"),
        bilinear_weights(series.lon, grid.lon, "lon"),
    )


def _method_words(series: Series) -> str:
    method = METHODS[series.variable]
    return "first-order conservative" if method == "conservative" else method


def _chunks(
    length: int, shape: tuple[int, int], block_mb: float
) -> tuple[tuple[int, ...], tuple[int, ...], tuple[int, ...]]:
    """Return blocks in whole chunks of the file, as large as `block_mb` allows."""
    steps = min(length, TIME_CHUNK)
    pixels = max(1, int(block_mb * 2**20 / 4 / steps))
    width = _whole_chunks(pixels // min(PIXEL_CHUNK, shape[0]), shape[1])
    height = _whole_chunks(pixels // width, shape[0])
    return (
        _split(length, steps),
        _split(shape[0], height),
        _split(shape[1], width),
    )


def _whole_chunks(fits: int, size: int) -> int:
    if fits >= size:
        return size
    return max(1, fits // PIXEL_CHUNK) * PIXEL_CHUNK


def _split(size: int, step: int) -> tuple[int, ...]:
    return tuple(min(step, size - start) for start in range(0, size, step))


def _block(
    series: Series,
    steps: slice,
    rows: AxisWeights,
    columns: AxisWeights,
    computed: np.ndarray,
    block_mb: float,
) -> np.ndarray:
    """Read and regrid one block; the source is read in pieces of time of bounded size."""
    result = np.full((steps.stop - steps.start, *computed.shape), np.nan, dtype=np.float32)
    lat, rows = _needed(rows, np.any(computed, axis=1)).window(series.lat.cyclic, len(series.lat))
    lon, columns = _needed(columns, np.any(computed, axis=0)).window(
        series.lon.cyclic, len(series.lon)
    )
    if len(lat) == 0 or len(lon) == 0:
        return result
    piece = max(1, int(block_mb * 2**20 / 4 / (len(lat) * len(lon))))
    for start in range(steps.start, steps.stop, piece):
        stop = min(start + piece, steps.stop)
        weighted_mean(
            series.read(slice(start, stop), lat, lon), rows.arrays, columns.arrays, None,
            computed, HALF, series.scale, series.offset,
            result[start - steps.start : stop - steps.start],
        )  # fmt: skip
    return result


def _needed(weights: AxisWeights, wanted: np.ndarray) -> AxisWeights:
    """Return weights without those of target cells that hold no wanted pixel."""
    counts = np.diff(weights.start)
    kept = np.repeat(wanted, counts)
    start = np.zeros_like(weights.start)
    start[1:] = np.cumsum(np.where(wanted, counts, 0))
    return AxisWeights(start, weights.index[kept], weights.weight[kept])
