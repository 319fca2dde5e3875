"""Time axes and series for the tests of the correction, and the kernels called on one pixel."""

from __future__ import annotations

from typing import Any

import numpy as np
from stook.assessment.schema import VariableCorrection
from stook.audit.plain.correct import PlainSeries, PlainTimes
from stook.correct.block import map_series
from stook.correct.setup import Quantity, tables_of
from stook.correct.windows import Series

CALENDARS = ("standard", "noleap", "360_day", "all_leap")
WHOLE_YEAR = {"window_days": 365, "step_days": 31}
"""One distribution for all days."""


def year_length(year: int, calendar: str) -> int:
    """Return the days of a year."""
    leap = year % 4 == 0 and (year % 100 != 0 or year % 400 == 0)
    return {"noleap": 365, "360_day": 360, "all_leap": 366}.get(calendar, 366 if leap else 365)


def days(first: int, last: int, calendar: str = "noleap") -> Series:
    """Return the time axis of daily values of whole years."""
    lengths = [year_length(year, calendar) for year in range(first, last + 1)]
    year = np.repeat(np.arange(first, last + 1), lengths)
    position = np.concatenate([(np.arange(n) + 0.5) / n for n in lengths])
    month = np.minimum((position * 12).astype(np.int64) + 1, 12)
    return Series(year, month, position, np.arange(len(year)) + 50000, "daily")


def months(first: int, last: int) -> Series:
    """Return the time axis of monthly values of whole years."""
    year = np.repeat(np.arange(first, last + 1), 12)
    month = np.tile(np.arange(1, 13), last - first + 1)
    return Series(year, month, (month - 0.5) / 12, year * 12 + month - 1, "monthly")


def annual(first: int, last: int) -> Series:
    """Return the time axis of annual values."""
    year = np.arange(first, last + 1)
    return Series(year, np.full(len(year), 7), np.full(len(year), 0.5), year, "annual")


def correct(
    o: np.ndarray,
    h: np.ndarray,
    f: np.ndarray,
    axes: tuple[Series, Series, Series],
    ratio: bool = False,
    trace: float = 0.0,
    **choice: Any,
) -> tuple[np.ndarray, int, int]:
    """Correct one pixel by the kernels; returns series, reason code and number of capped ratios."""
    quantity = Quantity("tas", VariableCorrection(**choice), ratio, trace)
    arrays = [np.ascontiguousarray(values)[None, :] for values in (o, h, f)]
    out, reason, capped, _ = map_series(*arrays, tables_of(quantity, *axes))
    return out[0], int(reason[0]), int(capped[0])


def plain(values: np.ndarray, axis: Series) -> PlainSeries:
    """Return a series for the plain path."""
    return PlainSeries(
        values, PlainTimes(axis.year, axis.month, axis.position, axis.day, axis.step)
    )
