"""One climate variable over time: all files of a series, opened, checked and joined."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from pathlib import Path

import numpy as np
import xarray as xr

from stook.errors import InputError
from stook.grids.axes import SourceAxis, source_axes
from stook.grids.calendars import (
    TimeStep,
    check_continuous,
    join_order,
    step_number,
    time_step,
    years_of,
)
from stook.grids.cf import find_variable, open_input, open_undecoded, read_window
from stook.grids.units import linear_conversion


@dataclass(frozen=True)
class SeriesFile:
    """One file of a series.

    Attributes
    ----------
    path
        The file.
    name
        The variable's name in the file.
    time, lat, lon
        Names of the dimensions in the file.
    times
        cftime dates, shape (time,).
    unit
        As written in the file.
    conversion
        Scale and offset to the inside unit.
    axes
        Latitude and longitude.
    dataset
        The open file, times not decoded.
    """

    path: Path
    name: str
    time: str
    lat: str
    lon: str
    times: np.ndarray
    unit: str
    conversion: tuple[float, float]
    axes: tuple[SourceAxis, SourceAxis]
    dataset: xr.Dataset

    @property
    def dims(self) -> tuple[str, ...]:
        """Dimensions of the variable in the file, in their order."""
        return tuple(map(str, self.dataset[self.name].dims))


@dataclass(frozen=True)
class Series:
    """A climate variable over time on one grid, from one file or many; values stay in the files.

    Use it in a ``with`` block, which closes the files. It may be read in any thread.

    Attributes
    ----------
    variable
        CMIP name, a key of `stook.grids.units.INSIDE_UNITS`.
    files
        In the order of time.
    times
        cftime dates of all steps, ascending without gap, shape (time,).
    step
        daily, monthly or annual.
    lat, lon
        Axes of the grid, ascending.
    scale, offset
        ``inside = scale * value + offset``.
    unit
        As written in the first file.
    """

    variable: str
    files: tuple[SeriesFile, ...]
    times: np.ndarray
    step: TimeStep
    lat: SourceAxis
    lon: SourceAxis
    scale: float
    offset: float
    unit: str

    def __enter__(self) -> Series:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Close the files."""
        for file in self.files:
            file.dataset.close()

    @property
    def calendar(self) -> str:
        """The calendar, by Stook's one name for it."""
        return str(self.times[0].calendar)

    @cached_property
    def years(self) -> np.ndarray:
        """Year of each step, int64, shape (time,)."""
        return years_of(self.times)

    @cached_property
    def numbers(self) -> np.ndarray:
        """Consecutive number of each step (days, months or years), int64, shape (time,)."""
        return step_number(self.times, self.step)

    def read(
        self, steps: slice, rows: np.ndarray | None = None, columns: np.ndarray | None = None
    ) -> np.ndarray:
        """Read part of the series in the file's unit.

        Parameters
        ----------
        steps
            Time steps, with start and stop.
        rows, columns
            Positions on the ascending axes, consecutive (columns: but for the seam of a cyclic
            axis); None for all.

        Returns
        -------
        ndarray
            float32 or float64 as in the file, shape (time, lat, lon), both axes ascending.

        Raises
        ------
        InputError
            If a file cannot be read.
        """
        rows = np.arange(len(self.lat)) if rows is None else rows
        columns = np.arange(len(self.lon)) if columns is None else columns
        parts = []
        first = 0
        for file in self.files:
            last = first + len(file.times)
            start, stop = max(steps.start, first), min(steps.stop, last)
            if start < stop:
                within = slice(start - first, stop - first)
                parts.append(_read_file(file, within, rows, columns))
            first = last
        return parts[0] if len(parts) == 1 else np.concatenate(parts)

    def read_inside(
        self, steps: slice, rows: np.ndarray | None = None, columns: np.ndarray | None = None
    ) -> np.ndarray:
        """Read part of the series in the inside unit, float64; see `read`."""
        values = self.read(steps, rows, columns).astype(np.float64)
        return values * self.scale + self.offset


def open_series(files: Sequence[Path], variable: str) -> Series:
    """Open the files of one series, check that they belong together, and join them in time.

    Parameters
    ----------
    files
        In any order.
    variable
        CMIP name: tas, tasmin, tasmax, pr, rsds or hurs.

    Raises
    ------
    InputError
        Naming the file and what would be right: a file that cannot be read, no such variable, a
        grid that is not rectilinear, a unit that does not convert, an unknown calendar; files of
        different grid, unit, calendar or time step; a gap, an overlap or disorder in time.
    """
    if not files:
        raise InputError(f"{variable}: no files")
    opened: list[SeriesFile] = []
    try:
        opened += (_open_file(Path(path), variable) for path in files)
        return _joined(opened, variable)
    except InputError:
        for file in opened:
            file.dataset.close()
        raise


def _joined(opened: list[SeriesFile], variable: str) -> Series:
    where = f"{opened[0].path}: {variable}"
    opened = [opened[i] for i in join_order([file.times for file in opened], where)]
    first = opened[0]
    for file in opened[1:]:
        _check_alike(first, file, variable)
    times = np.concatenate([file.times for file in opened])
    step = _check_times(opened, times)
    lat, lon = first.axes
    return Series(variable, tuple(opened), times, step, lat, lon, *first.conversion, first.unit)


def _open_file(path: Path, variable: str) -> SeriesFile:
    with open_input(path) as dataset:
        found = find_variable(dataset, variable, path)
        lat, lon, lat_name, lon_name = source_axes(dataset, path)
        if "time" not in dataset.coords:
            raise InputError(f"{path}: has no time coordinate; {variable} must be a series")
        time_name = str(dataset["time"].dims[0]) if dataset["time"].dims else ""
        wanted = {time_name, lat_name, lon_name}
        _check_dimensions(found, wanted, variable, path)
        unit = str(found.attrs.get("units", ""))
        conversion = linear_conversion(unit, variable, path)
        raw = open_undecoded(path)
        dims = raw[str(found.name)].dims  # `open_input` calls the time dimension `time`
        return SeriesFile(
            path=path,
            name=str(found.name),
            time=str(dims[list(found.dims).index(time_name)]),
            lat=lat_name,
            lon=lon_name,
            times=np.atleast_1d(dataset["time"].values),
            unit=unit,
            conversion=conversion,
            axes=(lat, lon),
            dataset=raw,
        )


def _check_dimensions(found: xr.DataArray, wanted: set[str], variable: str, path: Path) -> None:
    lost = sorted(wanted - set(map(str, found.dims)))
    if lost:
        raise InputError(
            f"{path}: {variable} has dimensions ({', '.join(map(str, found.dims))}); "
            "it must have time, latitude and longitude"
        )
    for name, size in found.sizes.items():
        if str(name) not in wanted and size != 1:
            raise InputError(
                f"{path}: {variable} has {size} values along {name}; "
                "select one, so that time, latitude and longitude are left"
            )


def _check_alike(first: SeriesFile, file: SeriesFile, variable: str) -> None:
    for axis, other, name in zip(first.axes, file.axes, ("latitudes", "longitudes"), strict=True):
        if not axis.same(other):
            raise InputError(
                f"{file.path}: {variable} has other {name} than {first.path.name}; "
                "the files of a series lie on one grid"
            )
    if file.conversion != first.conversion:
        raise InputError(
            f"{file.path}: {variable} has unit {file.unit!r}, but {first.unit!r} in "
            f"{first.path.name}; the files of a series have one unit"
        )


def _check_times(files: list[SeriesFile], times: np.ndarray) -> TimeStep:
    """Check every file alone and every seam between files, so that the message names the file."""
    step = time_step(times, files[0].path)
    for file in files:
        if len(file.times) > 1:
            own = time_step(file.times, file.path)
            if own != step:
                raise InputError(
                    f"{file.path}: {own} values in a {step} series; a series has one time step"
                )
        check_continuous(file.times, step, str(file.path))
    for before, after in pairwise(files):
        seam = np.array([before.times[-1], after.times[0]])
        check_continuous(seam, step, f"{after.path}, after {before.path.name}")
    return step


def _read_file(file: SeriesFile, steps: slice, rows: np.ndarray, columns: np.ndarray) -> np.ndarray:
    variable = file.dataset.variables[file.name]
    dims = file.dims
    order = [dims.index(name) for name in (file.time, file.lat, file.lon)]
    extra = [i for i in range(len(dims)) if i not in order]
    lat, lon = file.axes
    bands = []
    for row_run, row_turn in lat.file_runs(rows):
        parts = []
        for column_run, column_turn in lon.file_runs(columns):
            window = {file.time: steps, file.lat: row_run, file.lon: column_run}
            values = read_window(variable, file.path, file.name, window)
            values = np.transpose(values, [*order, *extra])
            values = values.reshape(values.shape[:3])
            parts.append(values[:, :: -1 if row_turn else 1, :: -1 if column_turn else 1])
        bands.append(parts[0] if len(parts) == 1 else np.concatenate(parts, axis=2))
    return np.ascontiguousarray(bands[0] if len(bands) == 1 else np.concatenate(bands, axis=1))
