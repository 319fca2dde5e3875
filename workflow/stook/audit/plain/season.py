"""Season indices of one pixel and one season, written for reading: loops over days.

No code is shared with the season stage but the definitions of the indices.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import cftime
import numpy as np

from stook.season.definition import (
    SEASON,
    DaysAbove,
    DegreeDays,
    DrySpell,
    IndexDefinition,
    LargestTotal,
    Mean,
    Total,
    VapourPressureDeficit,
    WetDays,
)

_ON_EDGE = 1e-9  # days: as near as this, the middle of a day lies on the edge
_DAY_ZERO = (1, 1)


def season_index(
    definition: IndexDefinition,
    times: Sequence[cftime.datetime],
    series: Mapping[str, np.ndarray],
    planting: float,
    maturity: float,
    phases: Mapping[str, tuple[float, float]],
    year: int,
    time_step: str = "daily",
) -> float:
    """Return an index of one pixel and year of harvest; NaN where the season is not complete.

    Parameters
    ----------
    definition
        The index.
    times
        Dates of the series, without gaps.
    series
        Values by variable: tas, tasmin, tasmax (degC), pr (mm day-1), rsds (W m-2), hurs (%).
    planting, maturity
        Day of year, 1 to 365.
    phases
        Growth phases as fractions of the season.
    year
        Year of harvest.
    time_step
        ``daily``, ``monthly`` or ``annual``.
    """
    fractions = (0.0, 1.0) if definition.phase == SEASON else phases[definition.phase]
    real_days = maturity - planting + 1 + (365 if maturity < planting else 0)
    real_days *= fractions[1] - fractions[0]
    if time_step != "daily":
        return _from_steps(
            definition, times, series, planting, maturity, fractions, year, time_step, real_days
        )
    season = season_days(times, planting, maturity, year)
    chosen = [
        day
        for count, day in enumerate(season)
        if fractions[0] * len(season) - _ON_EDGE
        <= count + 0.5
        < fractions[1] * len(season) - _ON_EDGE
    ]
    if not chosen:
        return math.nan
    values = [{name: float(values[day]) for name, values in series.items()} for day in chosen]
    match definition:
        case DegreeDays(base=base, cap=cap):
            days = [degree_days(v["tasmin"], v["tasmax"], base, cap) for v in values]
            return sum(days) / len(days) * real_days
        case Total():
            return sum(v["pr"] for v in values) / len(values) * real_days
        case DaysAbove(variable=variable, threshold=threshold):
            return _share([_value(variable, v) for v in values], threshold, True) * real_days
        case WetDays(wet_day=wet_day):
            return _share([v["pr"] for v in values], wet_day, False) * real_days
        case DrySpell(wet_day=wet_day):
            return longest_dry_spell([v["pr"] for v in values], wet_day)
        case LargestTotal(days=days):
            return largest_total([v["pr"] for v in values], days)
        case _:
            return sum(_level(definition, v) for v in values) / len(values)


def season_days(
    times: Sequence[cftime.datetime], planting: float, maturity: float, year: int
) -> list[int]:
    """Return the places of a season's days in a daily series; none unless all are there."""
    calendar = times[0].calendar
    place = {(time.year, time.dayofyr): number for number, time in enumerate(times)}
    sown = year - 1 if maturity < planting else year
    days: list[int] = []
    for number in range(sown, year + 1):
        length = days_in_year(number, calendar)
        for day in range(1, length + 1):
            middle = (day - 0.5) / length
            after = number > sown or middle >= (planting - 1) / 365
            before = number < year or middle < maturity / 365
            if after and before:
                days.append(place.get((number, day), -1))
    return [] if -1 in days else days


def days_in_year(year: int, calendar: str) -> int:
    """Return the number of days of a year."""
    first = cftime.datetime(year, *_DAY_ZERO, calendar=calendar)
    return (cftime.datetime(year + 1, *_DAY_ZERO, calendar=calendar) - first).days


def degree_days(low: float, high: float, base: float, cap: float | None = None) -> float:
    """Return degree days of one day, degC day, above a base and below a cap (single sine).

    Baskerville & Emin 1969, Ecology 50, 514-517; a horizontal cut-off takes away the degree days
    above the cap.
    """
    if cap is not None:
        return degree_days(low, high, base) - degree_days(low, high, cap)
    if math.isnan(low) or math.isnan(high):
        return math.nan
    mean, half = (high + low) / 2, (high - low) / 2
    if high <= base:
        return 0.0
    if low >= base:
        return mean - base
    angle = math.asin((base - mean) / half)
    return ((mean - base) * (math.pi / 2 - angle) + half * math.cos(angle)) / math.pi


def vapour_pressure_deficit(low: float, high: float, humidity: float) -> float:
    """Return the vapour pressure deficit, kPa, from tasmin, tasmax (degC) and hurs (%).

    FAO Irrigation and Drainage Paper 56, equations 11, 12 and 19.
    """
    saturation = [0.6108 * math.exp(17.27 * t / (t + 237.3)) for t in (low, high)]
    mean = sum(saturation) / 2
    return mean - mean * humidity / 100


def longest_dry_spell(rain: Sequence[float], wet_day: float) -> float:
    """Return the longest run of days with less than `wet_day`; NaN if a day is missing."""
    if any(math.isnan(value) for value in rain):
        return math.nan
    text = "".join("d" if value < wet_day else "w" for value in rain)
    return float(max(len(run) for run in text.split("w")))


def largest_total(rain: Sequence[float], days: int) -> float:
    """Return the largest total of so many consecutive days; NaN if a day is missing, or too few."""
    if len(rain) < days or any(math.isnan(value) for value in rain):
        return math.nan
    return max(sum(rain[start : start + days]) for start in range(len(rain) - days + 1))


def _share(values: Sequence[float], threshold: float, strictly: bool) -> float:
    if any(math.isnan(value) for value in values):
        return math.nan
    return sum(v > threshold or (v == threshold and not strictly) for v in values) / len(values)


def _value(variable: str, values: Mapping[str, float]) -> float:
    if variable == "diurnal-range":
        return values["tasmax"] - values["tasmin"]
    if variable == "tas" and "tas" not in values:
        return (values["tasmin"] + values["tasmax"]) / 2
    return values[variable]


def _level(definition: IndexDefinition, values: Mapping[str, float]) -> float:
    """Return the value of one time step of an index that is a mean."""
    match definition:
        case Mean(variable=variable):
            return _value(variable, values)
        case VapourPressureDeficit():
            return vapour_pressure_deficit(values["tasmin"], values["tasmax"], values["hurs"])
        case _:
            raise ValueError(f"{definition.measure} needs daily values")


def _from_steps(
    definition: IndexDefinition,
    times: Sequence[cftime.datetime],
    series: Mapping[str, np.ndarray],
    planting: float,
    maturity: float,
    fractions: tuple[float, float],
    year: int,
    time_step: str,
    real_days: float,
) -> float:
    """Average months or years over a season, by the days they share with it."""
    calendar = times[0].calendar
    sown = year - 1 if maturity < planting else year
    zero = cftime.datetime(sown, *_DAY_ZERO, calendar=calendar)
    sowing = (planting - 1) * days_in_year(sown, calendar) / 365
    harvest: float = (year - sown) * days_in_year(sown, calendar)
    harvest += maturity * days_in_year(year, calendar) / 365
    begin, end = (sowing + fraction * (harvest - sowing) for fraction in fractions)
    total = shared = season = 0.0
    for number, time in enumerate(times):
        if time_step == "monthly":
            first = cftime.datetime(time.year, time.month, 1, calendar=calendar)
            after = (time.year, time.month + 1) if time.month < 12 else (time.year + 1, 1)
            last = cftime.datetime(*after, 1, calendar=calendar)
        else:
            first = cftime.datetime(time.year, *_DAY_ZERO, calendar=calendar)
            last = cftime.datetime(time.year + 1, *_DAY_ZERO, calendar=calendar)
        season += max(min((last - zero).days, harvest) - max((first - zero).days, sowing), 0)
        days = min((last - zero).days, end) - max((first - zero).days, begin)
        if days > 0:
            values = {name: float(one[number]) for name, one in series.items()}
            wanted = values["pr"] if isinstance(definition, Total) else _level(definition, values)
            total += wanted * days
            shared += days
    if abs(season - (harvest - sowing)) > 1e-6:
        return math.nan
    return total / shared * (real_days if isinstance(definition, Total) else 1.0)
