"""The climate models of the invented world: grids, calendars, units, biases and changes."""

from __future__ import annotations

from dataclasses import dataclass, field

import cftime
import numpy as np

from demo_grids.domain import Domain
from demo_grids.weather import Bias, Change

REALISATION = "r1i1p1f1"
CMIP_UNITS = {"tasmin": "K", "tasmax": "K", "pr": "kg m-2 s-1", "hurs": "%"}
PLAIN_UNITS = {"tasmin": "degC", "tasmax": "degC", "pr": "mm day-1", "hurs": "%"}


@dataclass(frozen=True)
class Model:
    """One model: how it writes its files, how it is wrong, and how it answers to warming.

    Attributes
    ----------
    calendar
        CF calendar of its files.
    lat_step, lon_step
        Grid steps, degrees.
    file_years
        Years in one file; files end at round years. None: one file for each scenario.
    descending, eastward
        Latitudes run from north to south; longitudes run from 0 to 360.
    axis_names
        Names of the horizontal coordinates.
    units
        Units its files are written in.
    bias, change
        Its bias and its change signal.
    """

    name: str
    calendar: str
    lat_step: float
    lon_step: float
    file_years: int | None
    bias: Bias
    change: Change
    descending: bool = False
    eastward: bool = False
    axis_names: tuple[str, str] = ("lat", "lon")
    units: dict[str, str] = field(default_factory=lambda: dict(CMIP_UNITS))

    def axes(self, domain: Domain) -> tuple[np.ndarray, np.ndarray]:
        """Return the model's cell centres around the world, ascending, -180..180, degrees."""
        return (
            _centres(-90.0, self.lat_step, domain.south, domain.height),
            _centres(-180.0, self.lon_step, domain.west, domain.width),
        )


def _centres(origin: float, step: float, start: float, length: float) -> np.ndarray:
    """Return centres of the cells of a global axis that reach one cell beyond a window."""
    first = np.floor((start - origin) / step) - 1
    last = np.ceil((start + length - origin) / step)
    return np.round(origin + step * (np.arange(first, last + 1) + 0.5), 9)


MODELS = {
    model.name: model
    for model in (
        Model(
            name="ALDER-ESM",
            calendar="standard",
            lat_step=0.9375,
            lon_step=1.25,
            file_years=10,
            bias=Bias(
                temperature=1.6,
                east=0.8,
                north=-0.6,
                seasonal=0.7,
                peak=0.55,
                anomaly=1.15,
                diurnal=0.88,
                wet_share=0.12,
                rain=0.18,
                rain_seasonal=-0.10,
                rain_shape=0.65,
                humidity=0.20,
            ),
            change=Change(sensitivity=0.82, rain_summer=-0.025, rain_winter=0.030),
        ),
        Model(
            name="ROWAN-CM",
            calendar="noleap",
            lat_step=1.25,
            lon_step=1.875,
            file_years=None,
            bias=Bias(
                temperature=-2.1,
                east=-0.5,
                north=0.9,
                seasonal=0.5,
                peak=0.10,
                anomaly=0.88,
                diurnal=1.10,
                wet_share=-0.08,
                rain=-0.15,
                rain_seasonal=0.08,
                rain_shape=0.85,
                humidity=-0.25,
            ),
            change=Change(sensitivity=1.00, rain_summer=-0.045, rain_winter=0.015),
        ),
        Model(
            name="SEDGE-LR",
            calendar="360_day",
            lat_step=2.0,
            lon_step=2.5,
            file_years=50,
            bias=Bias(
                temperature=0.9,
                east=-1.2,
                north=1.0,
                seasonal=1.1,
                peak=0.62,
                anomaly=0.95,
                diurnal=0.80,
                wet_share=0.22,
                rain=0.30,
                rain_seasonal=0.12,
                rain_shape=0.60,
                humidity=0.10,
            ),
            change=Change(sensitivity=1.18, rain_summer=-0.050, rain_winter=0.015),
            descending=True,
            eastward=True,
            axis_names=("latitude", "longitude"),
            units={"tasmin": "degC", "tasmax": "degC", "pr": "mm day-1", "hurs": "1"},
        ),
    )
}


@dataclass(frozen=True)
class TimeAxis:
    """Daily time steps of whole years in one calendar.

    Attributes
    ----------
    years
        First and last year.
    calendar
        CF calendar.
    year, day
        Year and day of the year (from 0) of every step, shape (time,).
    """

    years: tuple[int, int]
    calendar: str
    year: np.ndarray
    day: np.ndarray

    @classmethod
    def of(cls, years: tuple[int, int], calendar: str) -> TimeAxis:
        """Return the axis from the first day of the first year to the last day of the last."""
        lengths = [days_in_year(year, calendar) for year in range(years[0], years[1] + 1)]
        year = np.repeat(np.arange(years[0], years[1] + 1), lengths)
        day = np.concatenate([np.arange(length) for length in lengths])
        return cls(years, calendar, year, day)

    @property
    def fractions(self) -> np.ndarray:
        """Fraction of the year of each row of a table of days (366 rows for leap calendars)."""
        rows = int(self.day.max()) + 1 if self.calendar == "360_day" else 366
        length = {"360_day": 360.0, "noleap": 365.0}.get(self.calendar, 365.25)
        return (np.arange(rows) + 0.5) / length

    @property
    def fractional_year(self) -> np.ndarray:
        """Time in years, shape (time,)."""
        return self.year + self.fractions[self.day]

    def start(self) -> float:
        """Return days from 1850-01-01 to the first step's midnight, in the calendar."""
        first = cftime.datetime(self.years[0], 1, 1, calendar=self.calendar)
        return float(cftime.date2num(first, "days since 1850-01-01", calendar=self.calendar))


def days_in_year(year: int, calendar: str) -> int:
    """Return the number of days of a year in a calendar."""
    if calendar == "360_day":
        return 360
    leap = year % 4 == 0 and (year % 100 != 0 or year % 400 == 0)
    return 366 if leap and calendar == "standard" else 365
