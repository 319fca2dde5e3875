"""Calendars: position in the year, time steps, and joining the files of a series.

Native calendars are kept; no day is invented. Days of different calendars are matched by their
position in the year, a fraction between 0 and 1.
"""

from __future__ import annotations

from pathlib import Path
from typing import Literal

import cftime
import numpy as np

from stook.errors import InputError

TimeStep = Literal["daily", "monthly", "annual"]
CALENDARS = {
    "standard": "standard",
    "gregorian": "standard",
    "proleptic_gregorian": "proleptic_gregorian",
    "julian": "julian",
    "noleap": "noleap",
    "no_leap": "noleap",
    "365_day": "noleap",
    "all_leap": "all_leap",
    "366_day": "all_leap",
    "360_day": "360_day",
}
"""Calendar names that are read (CF 1.13, section 4.4.1; ``no_leap`` too) and their meaning."""


_STAMP_ERROR = 1e-3  # days; a stamp a moment before midnight, from rounding, is the next day


def calendar_name(given: str, path: Path | str) -> str:
    """Return the one name Stook uses for a calendar.

    Raises
    ------
    InputError
        If it is none of CF's calendars.
    """
    try:
        return CALENDARS[given.lower()]
    except KeyError:
        raise InputError(
            f"{path}: calendar {given!r} is not known; valid: {', '.join(CALENDARS)}"
        ) from None


def years_of(times: np.ndarray) -> np.ndarray:
    """Return the year of each cftime date, int64, same shape."""
    return np.array([time.year for time in times], dtype=np.int64)


def year_lengths(years: np.ndarray, calendar: str) -> np.ndarray:
    """Return the number of days of each year in a calendar, int64, same shape."""
    unique, inverse = np.unique(np.asarray(years), return_inverse=True)
    lengths = [
        (
            cftime.datetime(int(year), 12, 30 if calendar == "360_day" else 31, calendar=calendar)
        ).dayofyr
        for year in unique
    ]
    return np.array(lengths, dtype=np.int64)[inverse].reshape(np.shape(years))


def year_fraction(times: np.ndarray, calendar: str) -> np.ndarray:
    """Return the position of each day in its year: (day of year - 0.5) / days in the year.

    Parameters
    ----------
    times
        cftime dates, shape (time,).
    calendar
        Their calendar.

    Returns
    -------
    ndarray
        float64 in (0, 1), shape (time,).
    """
    days = np.array([time.dayofyr for time in times], dtype=np.float64)
    return (days - 0.5) / year_lengths(years_of(times), calendar)


def time_step(times: np.ndarray, path: Path | str) -> TimeStep:
    """Return whether times are daily, monthly or annual, from their median spacing.

    Raises
    ------
    InputError
        If they are something else. A single time counts as annual.
    """
    if len(times) < 2:
        return "annual"
    days = _ordinals(times)
    spacing = float(np.median(np.diff(days)))
    if abs(spacing - 1) < 0.1:
        return "daily"
    if 27 <= spacing <= 32:
        return "monthly"
    if 354 <= spacing <= 367:
        return "annual"
    raise InputError(
        f"{path}: time step of {spacing:g} days; daily, monthly or annual values are read"
    )


def step_number(times: np.ndarray, step: TimeStep) -> np.ndarray:
    """Return consecutive integers for consecutive steps: days, months or years, int64."""
    if step == "daily":
        return np.floor(_ordinals(times) + _STAMP_ERROR).astype(np.int64)
    if step == "monthly":
        return np.array([time.year * 12 + time.month - 1 for time in times], dtype=np.int64)
    return years_of(times)


def check_continuous(times: np.ndarray, step: TimeStep, where: str) -> None:
    """Check that times follow each other without gap, duplicate or disorder.

    Raises
    ------
    InputError
        Naming the first date that breaks the order.
    """
    steps = np.diff(step_number(times, step))
    bad = np.flatnonzero(steps != 1)
    if len(bad) == 0:
        return
    before, after = (str(times[i])[:10] for i in (bad[0], bad[0] + 1))
    if steps[bad[0]] == 0:
        raise InputError(f"{where}: {after} stands twice; every step may stand once")
    if steps[bad[0]] < 0:
        raise InputError(f"{where}: {after} follows {before}; files overlap or times run backwards")
    raise InputError(f"{where}: gap between {before} and {after}; a {step} series needs every step")


def join_order(starts: list[np.ndarray], where: str) -> list[int]:
    """Return the order in which the files of one series follow each other in time.

    Parameters
    ----------
    starts
        cftime dates of each file, any order.
    where
        What the series is, for messages.

    Raises
    ------
    InputError
        If calendars differ between the files, or a file has no time step.
    """
    if any(len(times) == 0 for times in starts):
        raise InputError(f"{where}: a file has no time step")
    calendars = {times[0].calendar for times in starts}
    if len(calendars) > 1:
        raise InputError(f"{where}: files have different calendars: {', '.join(sorted(calendars))}")
    return sorted(range(len(starts)), key=lambda i: starts[i][0])


def _ordinals(times: np.ndarray) -> np.ndarray:
    """Return days since 1850 in the dates' own calendar, float64.

    Only the first day of each year goes through cftime's conversion (ten times faster). In 1582
    cftime's day of the year does not know of the ten days the Gregorian reform left out.
    """
    calendar = times[0].calendar
    years, inverse = np.unique(years_of(times), return_inverse=True)
    if 1582 in years:
        return _days_since_1850(times, calendar)
    starts = [cftime.datetime(int(year), 1, 1, calendar=calendar) for year in years]
    seconds = [
        (t.dayofyr - 1) * 86400 + t.hour * 3600 + t.minute * 60 + t.second + t.microsecond * 1e-6
        for t in times
    ]
    return _days_since_1850(starts, calendar)[inverse] + np.array(seconds) / 86400


def _days_since_1850(times: np.ndarray | list[cftime.datetime], calendar: str) -> np.ndarray:
    return np.asarray(
        cftime.date2num(times, "days since 1850-01-01", calendar=calendar), dtype=np.float64
    )
