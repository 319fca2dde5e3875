"""Windows of the correction: which values belong together, by position in the year and by year.

Arrays only. Days of calendars of different length are matched by their position in the year,
``(day of year - 0.5) / days in the year``, so that day 180 of a 360-day year and day 183 of a
standard year meet in the same window.

The year is cut into equal steps (73 steps of 5 days by default). Around each step lies a window
(31 days by default, centred on the step); a value is corrected with the window of its own step.
A value belongs to several neighbouring windows, which run on past the end of the year.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

YEAR_DAYS = 365.0
"""Days that `window_days` and `step_days` are counted in: parts of a year of 365 days."""

DAYS_PER_STEP = {"daily": 1, "monthly": 30, "annual": 365}
"""Days that one value stands for."""

FEWEST_VALUES = 10
"""A window of monthly or annual values never needs fewer values than this."""

TimeStep = Literal["daily", "monthly", "annual"]


@dataclass(frozen=True)
class Series:
    """The time axis of a series, as numbers.

    Attributes
    ----------
    year
        int64, shape (time,).
    month
        Calendar month 1..12, int64, shape (time,).
    position
        Position in the year, 0..1, float64, shape (time,).
    day
        Number of the step (days since 1850 for daily values) in the series' own calendar, int64,
        shape (time,).
    step
        Time step of the series.
    """

    year: np.ndarray
    month: np.ndarray
    position: np.ndarray
    day: np.ndarray
    step: TimeStep

    def part(self, chosen: np.ndarray) -> Series:
        """Return the chosen times (a boolean mask or indices)."""
        return Series(
            self.year[chosen],
            self.month[chosen],
            self.position[chosen],
            self.day[chosen],
            self.step,
        )

    def years(self, first: int, last: int) -> np.ndarray:
        """Return the mask of the times from the first to the last year, both included."""
        return (self.year >= first) & (self.year <= last)

    def __len__(self) -> int:
        return len(self.year)


@dataclass(frozen=True)
class Membership:
    """Which windows of a circle, or of a line, each value belongs to.

    Attributes
    ----------
    own
        Window whose correction the value gets, int32, shape (time,).
    first, number
        The value belongs to windows ``first .. first + number - 1`` (modulo `count` on a circle),
        int32, shape (time,).
    count
        Number of windows.
    """

    own: np.ndarray
    first: np.ndarray
    number: np.ndarray
    count: int

    def sizes(self) -> np.ndarray:
        """Return how many values each window holds, int64, shape (count,)."""
        line = np.zeros(2 * self.count + 1, dtype=np.int64)
        np.add.at(line, self.first, 1)
        np.add.at(line, self.first + self.number, -1)
        inside = np.cumsum(line)[:-1]
        return inside[: self.count] + inside[self.count :]


def day_windows(series: Series, window_days: float, step_days: float) -> Membership:
    """Return the day-of-year windows of a series.

    Parameters
    ----------
    series
        Its time axis. Monthly values have one window per calendar month and annual values one
        window for all, whatever the widths asked for.
    window_days, step_days
        Width and spacing of the windows, in days of a year of 365; the number of windows is the
        nearest whole number of steps in the year. A window is never narrower than its step.

    Returns
    -------
    Membership
        Windows of a circle, half-open: a value at ``start <= position < end`` is inside.
    """
    if series.step == "annual":
        nothing = np.zeros(len(series), dtype=np.int32)
        return Membership(nothing, nothing, nothing + 1, 1)
    if series.step == "monthly":
        own = (series.month - 1).astype(np.int32)
        return Membership(own, own, np.ones_like(own), 12)
    count = max(1, round(YEAR_DAYS / step_days))
    spacing = YEAR_DAYS / count
    width = min(max(float(window_days), spacing), YEAR_DAYS)
    place = series.position * YEAR_DAYS
    own = np.minimum(_floor(place / spacing), count - 1)
    # window w starts at (w + 1/2) * spacing - width / 2
    behind = (width - spacing) / 2
    last = np.maximum(_floor((place + behind) / spacing), own)
    first = np.minimum(_floor((place - spacing - behind) / spacing) + 1, own)
    number = np.minimum(last - first + 1, count)
    return Membership(
        own.astype(np.int32), (first % count).astype(np.int32), number.astype(np.int32), count
    )


def _floor(numbers: np.ndarray) -> np.ndarray:
    """Return the whole part; a number a rounding error below a whole one is that whole one."""
    return np.floor(np.round(numbers, 9)).astype(np.int64)


def year_windows(series: Series, anchor: int, width: int, step: int) -> Membership:
    """Return the moving windows of years of a series.

    Years are cut into blocks of `step` years counted from `anchor`. The window of a block has
    `width` years centred on it. At the ends of the series it is cut off, so that a block in a
    changing climate stays near the middle of its window, but it keeps two thirds of its width if
    the series has them.

    Parameters
    ----------
    series
        Its time axis.
    anchor
        A year in which a block starts (the first year of calibration).
    width, step
        Years of a window and of a block; a window is never shorter than its block.

    Returns
    -------
    Membership
        Windows of a line; equal windows are counted once.
    """
    width = max(width, step)
    low, high = int(series.year.min()), int(series.year.max())
    years = np.arange(low, high + 1)
    least = -(-2 * width // 3)
    centred = anchor + (years - anchor) // step * step - (width - step) // 2
    starts = np.clip(np.maximum(centred, low), low, max(high - least + 1, low))
    ends = np.clip(np.minimum(centred + width - 1, high), min(low + least - 1, high), high)
    windows, own = np.unique(np.stack([starts, ends], axis=1), axis=0, return_inverse=True)
    own = own.ravel()
    first = np.searchsorted(windows[:, 1], years, side="left")
    last = np.searchsorted(windows[:, 0], years, side="right") - 1
    index = series.year - low
    return Membership(
        own[index].astype(np.int32),
        first[index].astype(np.int32),
        (last - first + 1)[index].astype(np.int32),
        len(windows),
    )


def record_times(record: Series, series: Series) -> np.ndarray:
    """Return, for every time of a series, the time of the record that stands for it.

    The years of the record follow each other again and again, its first year standing for its own;
    within the year it is the nearest position, the earlier of two.

    Parameters
    ----------
    record, series
        Time axes of the same time step.

    Returns
    -------
    ndarray
        Indices of the record, int64, shape (time,).
    """
    years = np.unique(record.year)
    chosen = years[(series.year - years[0]) % len(years)]
    result = np.empty(len(series), dtype=np.int64)
    for year in np.unique(chosen):
        places = np.flatnonzero(record.year == year)
        at = np.flatnonzero(chosen == year)
        position, wanted = record.position[places], series.position[at]
        above = np.clip(np.searchsorted(position, wanted), 1, max(len(places) - 1, 1))
        above = np.minimum(above, len(places) - 1)
        below = np.maximum(above - 1, 0)
        nearer = np.abs(wanted - position[below]) <= np.abs(wanted - position[above])
        result[at] = places[np.where(nearer, below, above)]
    return result


def minimum_count(minimum_values: int, step: TimeStep) -> int:
    """Return how many values a window needs: `minimum_values` counts days.

    A monthly value stands for 30 days and an annual one for 365, but at least 10 values are needed.
    """
    if step == "daily":
        return minimum_values
    return max(FEWEST_VALUES, -(-minimum_values // DAYS_PER_STEP[step]))
