"""Where in a series each season lies: planting and maturity as positions in the year.

Day of year d of planting or maturity is counted in a year of 365 days. A season begins at
(planting - 1) / 365 of its year and ends at maturity / 365, so that calendars of other lengths
align; a day belongs to it if the middle of the day lies inside. A season whose maturity lies
before its planting ends in the next year. The year of a season is the year of its harvest.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import cftime
import numpy as np

from stook.grids.calendars import TimeStep, check_continuous, year_lengths, years_of

NOMINAL_YEAR = 365.0
"""Days of the year that planting and maturity are counted in."""

_EDGE = 1e-9  # days; a middle of a day this close to the edge of a season or phase lies on it


@dataclass(frozen=True)
class SeriesTime:
    """The time axis of a series as numbers.

    Attributes
    ----------
    years
        Every calendar year the series touches, int64 (year,).
    starts, lengths
        First day of each of these years and of the one before the first, counted from the first
        day of the series (daily) or of its first year, and its days; float64 (year + 1,).
    edges
        Edges of the time steps on the same scale, float64 (time + 1,).
    daily
        Whether the steps are days.
    """

    years: np.ndarray
    starts: np.ndarray
    lengths: np.ndarray
    edges: np.ndarray
    daily: bool

    @classmethod
    def of(cls, times: np.ndarray, step: TimeStep, path: Path | str) -> SeriesTime:
        """Return the axis of cftime dates.

        Raises
        ------
        InputError
            If a step is missing, doubled or out of order.
        """
        check_continuous(times, step, str(path))
        calendar = str(times[0].calendar)
        inside = years_of(times)
        years = np.arange(inside[0], inside[-1] + 1)
        lengths = year_lengths(np.append(years[0] - 1, years), calendar).astype(np.float64)
        starts = np.concatenate([[-lengths[0]], np.cumsum(np.append(0.0, lengths[1:-1]))])
        if step == "daily":
            starts = starts - (times[0].dayofyr - 1)
            edges = np.arange(len(times) + 1.0)
        elif step == "monthly":
            edges = _month_edges(times, starts[1:], years, calendar)
        else:
            edges = np.append(starts[1:], starts[-1] + lengths[-1])
        return cls(years, starts, lengths, edges, step == "daily")


def _month_edges(
    times: np.ndarray, starts: np.ndarray, years: np.ndarray, calendar: str
) -> np.ndarray:
    """Return the first day of every month and the end of the last, days."""
    last = times[-1].year * 12 + times[-1].month  # the month after the last
    months = [*(time.year * 12 + time.month - 1 for time in times), last]
    edges = []
    for month in months:
        year, number = divmod(month, 12)
        day = cftime.datetime(year, number + 1, 1, calendar=calendar).dayofyr - 1
        known = year - years[0] < len(starts)
        start = starts[year - years[0]] if known else starts[-1] + _length(year - 1, calendar)
        edges.append(start + day)
    return np.array(edges, dtype=np.float64)


def _length(year: int, calendar: str) -> int:
    return int(year_lengths(np.array([year]), calendar)[0])


@dataclass(frozen=True)
class Seasons:
    """The seasons of some pixels in every year of a series.

    Attributes
    ----------
    begin, end
        Begin and end on the scale of `SeriesTime`, float64 (year, pixel); NaN where the series
        does not cover the season.
    nominal
        Length in real days, float64 (pixel,).
    """

    begin: np.ndarray
    end: np.ndarray
    nominal: np.ndarray

    @classmethod
    def of(cls, time: SeriesTime, planting: np.ndarray, maturity: np.ndarray) -> Seasons:
        """Return the seasons of pixels with the given days of year, shape (pixel,)."""
        crossing = (maturity < planting).astype(np.int64)
        number = np.arange(1, len(time.years) + 1)[:, None]
        sown = number - crossing
        begin = time.starts[sown] + (planting - 1.0) * time.lengths[sown] / NOMINAL_YEAR
        end = time.starts[number] + maturity * time.lengths[number] / NOMINAL_YEAR
        if time.daily:
            begin, end = first_middle(begin), first_middle(end)
        covered = (begin >= time.edges[0]) & (end <= time.edges[-1])
        nominal = maturity - planting + 1.0 + NOMINAL_YEAR * crossing
        return cls(np.where(covered, begin, np.nan), np.where(covered, end, np.nan), nominal)

    def phase(self, fractions: tuple[float, float], daily: bool) -> Seasons:
        """Return a phase, given as fractions of the season.

        In a daily series it is whole days; one too short to hold the middle of a day is missing.
        """
        length = self.end - self.begin
        begin, end = (self.begin + fraction * length for fraction in fractions)
        if daily:
            begin, end = first_middle(begin), first_middle(end)
        known = begin < end
        nominal = self.nominal * (fractions[1] - fractions[0])
        return Seasons(np.where(known, begin, np.nan), np.where(known, end, np.nan), nominal)

    def days(self) -> tuple[np.ndarray, np.ndarray]:
        """Return the first day and the end as whole numbers, int64; -1 where not covered."""
        known = ~np.isnan(self.begin)
        return tuple(np.where(known, side, -1).astype(np.int64) for side in (self.begin, self.end))  # type: ignore[return-value]


def first_middle(edge: np.ndarray) -> np.ndarray:
    """Return the first whole day whose middle lies at or after an edge."""
    return np.ceil(edge - 0.5 - _EDGE)
