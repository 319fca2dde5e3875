"""Season indices of the true weather, computed without the program under test.

Whole arrays, one season after the other; shares no code with the season stage, so that the truth
is not what the program says it is.
"""

from __future__ import annotations

import numpy as np
from stook.season.definition import (
    DaysAbove,
    DegreeDays,
    DrySpell,
    IndexDefinition,
    Mean,
    Total,
    VapourPressureDeficit,
)

Weather = dict[str, np.ndarray]


def season_days(planting: float, maturity: float, length: int) -> range:
    """Return the days of a season, counted from 1 January (0) of the year of planting.

    Parameters
    ----------
    planting, maturity
        Days of the year of the real calendar, 1 to 365, both in the season; maturity before
        planting is in the next year.
    length
        Days of a year of the calendar.
    """
    last = maturity if maturity > planting else maturity + 365
    return range(round((planting - 1) * length / 365), round(last * length / 365))


def phase_days(season: range, phase: tuple[float, float]) -> range:
    """Return the days of a growth phase given as fractions of its season."""
    return season[round(phase[0] * len(season)) : round(phase[1] * len(season))]


def season_index(weather: Weather, definition: IndexDefinition, real_days: float) -> np.ndarray:
    """Return an index over the days given, shape (time, ...) -> (...).

    Parameters
    ----------
    weather
        tasmin, tasmax (degC), pr (mm/day), hurs (%) of the days of one season or phase.
    definition
        The index.
    real_days
        Length of the season or phase in real days; sums are daily means times this.
    """
    low, high = weather["tasmin"], weather["tasmax"]
    match definition:
        case DegreeDays(base=base, cap=cap):
            daily = degree_days(low, high, base)
            if cap is not None:
                daily = daily - degree_days(low, high, cap)
            return daily.mean(axis=0) * real_days
        case Mean(variable="diurnal-range"):
            return (high - low).mean(axis=0)
        case Mean(variable="tas"):
            return (high + low).mean(axis=0) / 2
        case Mean(variable=variable):
            return weather[variable].mean(axis=0)
        case Total():
            return weather["pr"].mean(axis=0) * real_days
        case DaysAbove(variable=variable, threshold=threshold):
            return (weather[variable] > threshold).mean(axis=0) * real_days
        case DrySpell(wet_day=wet_day):
            return longest_run(weather["pr"] < wet_day)
        case VapourPressureDeficit():
            saturation = (_saturation(low) + _saturation(high)) / 2
            return (saturation * (1 - weather["hurs"] / 100)).mean(axis=0)
        case _:
            raise ValueError(f"no truth for {definition}")


def degree_days(low: np.ndarray, high: np.ndarray, threshold: float) -> np.ndarray:
    """Return degree days above a threshold of a single sine (Baskerville & Emin 1969)."""
    mean, half = (high + low) / 2, np.maximum((high - low) / 2, 1e-6)
    angle = np.arcsin(np.clip((threshold - mean) / half, -1, 1))
    return ((mean - threshold) * (np.pi / 2 - angle) + half * np.cos(angle)) / np.pi


def longest_run(dry: np.ndarray) -> np.ndarray:
    """Return the longest run of True along the first axis."""
    longest = run = np.zeros(dry.shape[1:])
    for today in dry:
        run = np.where(today, run + 1, 0)
        longest = np.maximum(longest, run)
    return longest


def _saturation(temperature: np.ndarray) -> np.ndarray:
    """Return saturation vapour pressure, kPa (FAO-56, equation 11)."""
    return 0.6108 * np.exp(17.27 * temperature / (temperature + 237.3))
