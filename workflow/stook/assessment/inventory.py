"""What the files of a climate series hold: years, calendar, grid, and a sample of the values."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from stook.errors import InputError, Problem, StookError
from stook.grids.analysis import AnalysisGrid
from stook.grids.axes import SourceAxis
from stook.grids.units import INSIDE_UNITS
from stook.prepare.series import Series, open_series

SAMPLED_STEPS = 5
"""Steps that are read of a series, spread over it; the last of every file is read besides."""

POSSIBLE = {
    "tas": (-100.0, 70.0),
    "tasmin": (-100.0, 70.0),
    "tasmax": (-100.0, 70.0),
    "pr": (-1.0, 2500.0),
    "rsds": (-10.0, 700.0),
    "hurs": (-5.0, 150.0),
}
"""Values outside are an error; in `INSIDE_UNITS`. Wider than the records of the World
Meteorological Organization (-89.2 and 56.7 degC; 1825 mm in a day; from memory)."""

USUAL = POSSIBLE | {"pr": (-1e-3, 2500.0), "rsds": (-0.1, 700.0), "hurs": (0.0, 101.0)}
"""Values outside, but possible as numerical noise of a model, are a warning."""


@dataclass(frozen=True)
class SeriesFacts:
    """One variable of one simulation, all its files joined.

    Attributes
    ----------
    years
        First and last year that is complete; the last is before the first if there is none.
    low, high
        Smallest and largest value of the sampled steps, in the inside unit.
    """

    simulation: str
    series: Series
    years: tuple[int, int]
    low: float
    high: float

    @property
    def variable(self) -> str:
        """CMIP name."""
        return self.series.variable

    @property
    def path(self) -> Path:
        """The first file, which stands for the series in messages."""
        return self.series.files[0].path

    @property
    def grid(self) -> str:
        """Rows, columns and cell size in words."""
        lat, lon = self.series.lat, self.series.lon
        height, width = (_cell_size(axis) for axis in (lat, lon))
        return f"{len(lat)} x {len(lon)}, {height} x {width} deg"

    def covers(self, grid: AnalysisGrid) -> np.ndarray:
        """Return where pixel centres of an analysis grid lie on this grid, bool (lat, lon)."""
        south, north = self.series.lat.edges[[0, -1]]
        west, east = self.series.lon.edges[[0, -1]]
        rows = (grid.lat >= south) & (grid.lat <= north)
        columns = (grid.lon - west) % 360.0 <= east - west
        return rows[:, None] & columns[None, :]


def _cell_size(axis: SourceAxis) -> str:
    return f"{(axis.edges[-1] - axis.edges[0]) / len(axis):.4g}"


def inspect_series(
    simulation: str, variable: str, files: Sequence[Path]
) -> tuple[SeriesFacts | None, list[Problem]]:
    """Open every file of a series and look at it as a whole.

    Parameters
    ----------
    simulation
        Name of the simulation, for the facts and the messages.
    variable
        CMIP name.
    files
        The files of the series in any order.

    Returns
    -------
    SeriesFacts or None
        None if there is an error that leaves the series unusable.
    list of Problem
        Errors of every file, or those of the joined series (see `open_series`), and values
        outside physical limits.
    """
    try:
        series = open_series(files, variable)
        low, high = _sampled_range(series)
    except StookError as error:
        return None, _each_file(files, variable) or as_problems(error)
    facts = SeriesFacts(simulation, series, _whole_years(series), low, high)
    return facts, limit_problems(facts)


def as_problems(error: StookError) -> list[Problem]:
    """Return each line of an error as a problem; what stands before the first colon is `where`."""
    problems = []
    for line in str(error).splitlines():
        where, _, message = line.partition(": ")
        problems.append(Problem("error", where, message))
    return problems


def _each_file(files: Sequence[Path], variable: str) -> list[Problem]:
    """Return the errors of the files taken one by one."""
    problems: list[Problem] = []
    for path in files:
        try:
            open_series([path], variable)
        except StookError as error:
            problems += as_problems(error)
    return problems


def _whole_years(series: Series) -> tuple[int, int]:
    first, last = series.times[0], series.times[-1]
    starts = ends = True
    if series.step == "daily":
        starts = (first.month, first.day) == (1, 1)
        ends = last.month == 12 and last.day >= (30 if series.calendar == "360_day" else 31)
    elif series.step == "monthly":
        starts, ends = first.month == 1, last.month == 12
    return first.year + (not starts), last.year - (not ends)


def _sampled_range(series: Series) -> tuple[float, float]:
    """Return the range of some steps over the whole series and of the last of every file."""
    ends = np.cumsum([len(file.times) for file in series.files]) - 1
    steps = np.unique(np.concatenate([_spread(0, len(series.times) - 1), ends]))
    values = _read(series, steps)
    if not np.isfinite(values).any():
        raise InputError(
            f"{series.files[0].path}: {series.variable} has no value in any of the "
            f"{len(steps)} steps looked at"
        )
    return float(np.nanmin(values)), float(np.nanmax(values))


def _spread(first: int, last: int) -> np.ndarray:
    """Return steps at uneven distances, so that those of daily series fall in different seasons."""
    places = np.sqrt(np.linspace(0.0, 1.0, SAMPLED_STEPS))
    return np.unique(first + np.round(places * (last - first)).astype(np.int64))


def _read(series: Series, steps: np.ndarray) -> np.ndarray:
    return np.concatenate([series.read_inside(slice(step, step + 1)) for step in map(int, steps)])


def limit_problems(facts: SeriesFacts) -> list[Problem]:
    """Return a problem if the sampled values leave the physical limits."""
    unit = INSIDE_UNITS[facts.variable]
    for severity, limits in (("error", POSSIBLE), ("warning", USUAL)):
        low, high = limits[facts.variable]
        if low <= facts.low and facts.high <= high:
            continue
        word = "possible" if severity == "error" else "usual"
        message = (
            f"{facts.variable} of {facts.simulation} has values from {facts.low:.4g} to "
            f"{facts.high:.4g} {unit}; {low:g} to {high:g} {unit} is {word}; "
            f"is its unit {facts.series.unit!r} right?"
        )
        return [Problem(severity, str(facts.path), message)]  # type: ignore[arg-type]
    return []


def pair_problems(tasmin: SeriesFacts, tasmax: SeriesFacts) -> list[Problem]:
    """Return a warning if tasmin is above tasmax anywhere in some steps both series have.

    It is an error if that is so for more than one value in a hundred: the files are then likely
    exchanged.
    """
    one, two = tasmin.series, tasmax.series
    if (one.step, one.calendar) != (two.step, two.calendar):
        return []
    if not (one.lat.agrees(two.lat) and one.lon.agrees(two.lon)):
        return []
    numbers = [int(series.numbers[0]) for series in (one, two)]
    ends = [n + len(series.times) for n, series in zip(numbers, (one, two), strict=True)]
    if max(numbers) >= min(ends):
        return []
    steps = _spread(max(numbers), min(ends) - 1)
    try:
        low, high = _read(one, steps - numbers[0]), _read(two, steps - numbers[1])
    except StookError as error:
        return as_problems(error)
    above, both = np.sum(low > high), np.sum(np.isfinite(low) & np.isfinite(high))
    if above == 0:
        return []
    message = (
        f"tasmin of {tasmin.simulation} is above tasmax in {above} of {both} values looked at; "
        "a daily minimum cannot be; are the files exchanged?"
    )
    severity = "error" if above > 0.01 * both else "warning"
    return [Problem(severity, str(tasmin.path), message)]  # type: ignore[arg-type]
