"""The correction of one pixel, written for reading: loops and sorts, no code of the kernels.

Only the random numbers are the same (`stook.randomness`). Times are given as plain arrays: year,
month, position in the year (0..1) and number of the day.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from stook.assessment.schema import VariableCorrection
from stook.randomness import mix, pixel_keys, stream_key, unit_interval

_YEAR = 365.0


@dataclass(frozen=True)
class PlainTimes:
    """Times of a series; all arrays have shape (time,)."""

    year: np.ndarray
    month: np.ndarray
    position: np.ndarray
    day: np.ndarray
    step: str = "daily"

    def part(self, chosen: np.ndarray) -> PlainTimes:
        """Return the chosen times."""
        return PlainTimes(
            self.year[chosen],
            self.month[chosen],
            self.position[chosen],
            self.day[chosen],
            self.step,
        )


class PlainSeries(NamedTuple):
    """A series and its times."""

    values: np.ndarray
    times: PlainTimes


def correct_series(
    o: PlainSeries,
    h: PlainSeries,
    f: PlainSeries,
    choice: VariableCorrection,
    ratio: bool,
    trace: float = 0.0,
) -> np.ndarray:
    """Correct one series; all NaN if a window has too few values.

    Parameters
    ----------
    o, h
        Reference and model in the calibration period.
    f
        Model to correct.
    choice
        Options of the assessment file.
    ratio
        Ratio or additive.
    trace
        Amount below which a value is dry, 0 where nothing is dry.
    """
    if choice.method == "delta":
        return changed_record(o, h, f, choice, ratio)
    result = np.full(len(f.values), np.nan)
    least = fewest(f.times, choice)
    own = np.array([own_window(f.times, i, choice) for i in range(len(result))])
    span = range(int(f.times.year.min()), int(f.times.year.max()) + 1)
    anchor = int(h.times.year.min())
    years_of = {year: moving_years(year, span, anchor, choice) for year in span}
    label = np.array([str(years_of[int(year)]) for year in f.times.year])
    for window in range(window_count(f.times, choice)):
        so, sh = (sorted_window(series, window, choice) for series in (o, h))
        if len(so) < least or len(sh) < least:
            return np.full(len(result), np.nan)
        if choice.nodes != "all" and choice.method != "mean":
            so, sh = (thin(values, choice.nodes) for values in (so, sh))
        inside = in_window(f.times, window, choice) & ~np.isnan(f.values)
        for years in sorted(set(years_of.values())):
            mine = (own == window) & (label == str(years)) & ~np.isnan(f.values)
            if not mine.any():
                continue
            chosen = inside & (f.times.year >= years[0]) & (f.times.year <= years[1])
            sf = np.sort(f.values[chosen])
            if choice.method == "quantile-delta" and len(sf) < least:
                return np.full(len(result), np.nan)
            for i in np.flatnonzero(mine):
                result[i] = mapped(float(f.values[i]), so, sh, sf, choice, ratio, trace)
    return result


def fewest(times: PlainTimes, choice: VariableCorrection) -> int:
    """Return how many values a window needs."""
    least = choice.minimum_values
    if times.step == "daily":
        return least
    return max(10, math.ceil(least / {"monthly": 30, "annual": 365}[times.step]))


def changed_record(
    o: PlainSeries, h: PlainSeries, f: PlainSeries, choice: VariableCorrection, ratio: bool
) -> np.ndarray:
    """Return the record, its years again and again, changed as the mean of the model changes."""
    result = np.full(len(f.values), np.nan)
    missing = result.copy()
    least = fewest(f.times, choice)
    windows = range(window_count(f.times, choice))
    before = [sorted_window(h, window, choice) for window in windows]
    record = [sorted_window(o, window, choice) for window in windows]
    if min(len(values) for values in before + record) < least:
        return missing
    span = range(int(f.times.year.min()), int(f.times.year.max()) + 1)
    record_years = sorted(set(o.times.year.tolist()))
    steps: dict[tuple[int, int], list[float]] = {}
    for i, year in enumerate(f.times.year.tolist()):
        standing = record_years[(year - record_years[0]) % len(record_years)]
        places = np.flatnonzero(o.times.year == standing)
        j = places[np.argmin(np.abs(o.times.position[places] - f.times.position[i]))]
        if year in h.times.year:
            result[i] = o.values[j]
            continue
        years = moving_years(year, span, int(h.times.year.min()), choice)
        if years not in steps:
            inside = (f.times.year >= years[0]) & (f.times.year <= years[1])
            around = PlainSeries(f.values[inside], f.times.part(inside))
            after = [sorted_window(around, window, choice) for window in windows]
            if min(len(values) for values in after) < least:
                return missing
            steps[years] = []
            for late, then in zip(after, before, strict=True):
                a, b = (float(np.mean(values, dtype=np.float64)) for values in (late, then))
                steps[years].append(change(a, b, choice.ratio_cap) if ratio else a - b)
        step = steps[years][own_window(o.times, int(j), choice)]
        result[i] = o.values[j] * step if ratio else o.values[j] + step
    return result


def mapped(
    x: float,
    so: np.ndarray,
    sh: np.ndarray,
    sf: np.ndarray,
    choice: VariableCorrection,
    ratio: bool,
    trace: float,
) -> float:
    """Correct one value, given the sorted windows of o, h and f."""
    if choice.method == "mean":
        o, h = float(np.mean(so, dtype=np.float64)), float(np.mean(sh, dtype=np.float64))
        return x * change(o, h, choice.ratio_cap) if ratio else x + o - h
    if choice.method == "quantile":
        o = float(quantile(so, probability(x, sh)))
        end = float(min(max(x, sh[0]), sh[-1]))
        if end == x:
            return o
        if ratio and end >= trace:
            return x * change(o, end, choice.ratio_cap)
        return x + o - end
    t = probability(x, sf)
    o, h = float(quantile(so, t)), float(quantile(sh, t))
    if not ratio:
        return x + o - h
    if h < trace:
        return o if x < trace else o + x - h
    return o if o < trace else o * change(x, h, choice.ratio_cap)


def change(value: float, base: float, cap: float) -> float:
    """Return the capped ratio; with a base of zero 1 for zero and else the cap."""
    if base <= 0:
        return cap if value > 0 else 1.0
    return min(value / base, cap)


def probability(x: float, ordered: np.ndarray) -> float:
    """Return the Hazen probability of a value: middle rank of its equals, or between neighbours."""
    below = int(np.searchsorted(ordered, x, side="left"))
    upto = int(np.searchsorted(ordered, x, side="right"))
    n = len(ordered)
    if upto > below:
        rank = (below + 1 + upto) / 2
    elif below in (0, n):
        rank = min(max(below, 1), n)
    else:
        low, high = float(ordered[below - 1]), float(ordered[below])
        rank = below + (x - low) / (high - low)
    return (rank - 0.5) / n


def quantile(ordered: np.ndarray, p: float) -> float:
    """Return the quantile at Hazen positions, constant beyond the ends."""
    return float(np.quantile(ordered.astype(np.float64), p, method="hazen"))


def thin(ordered: np.ndarray, nodes: int) -> np.ndarray:
    """Return that many quantiles of a window, in its own precision, if it has more values."""
    if len(ordered) <= nodes:
        return ordered
    kept = [quantile(ordered, (j + 0.5) / nodes) for j in range(nodes)]
    return np.array(kept, dtype=ordered.dtype)


# Windows


def window_count(times: PlainTimes, choice: VariableCorrection) -> int:
    """Return the number of windows of the year."""
    if times.step == "monthly":
        return 12
    return 1 if times.step == "annual" else max(1, round(_YEAR / choice.step_days))


def own_window(times: PlainTimes, i: int, choice: VariableCorrection) -> int:
    """Return the window a value is corrected with."""
    if times.step == "monthly":
        return int(times.month[i]) - 1
    count = window_count(times, choice)
    return min(math.floor(round(float(times.position[i]) * count, 9)), count - 1)


def in_window(times: PlainTimes, window: int, choice: VariableCorrection) -> np.ndarray:
    """Return which values lie in a window of days."""
    if times.step == "monthly":
        return times.month == window + 1
    count = window_count(times, choice)
    spacing = _YEAR / count
    width = min(max(choice.window_days, spacing), _YEAR)
    start = (window + 0.5) * spacing - width / 2
    if times.step == "annual" or width == _YEAR:
        return np.ones(len(times.year), dtype=bool)
    behind_start = np.round((times.position * _YEAR - start) % _YEAR, 9)
    return (behind_start < round(width, 9)) | (behind_start == _YEAR)


def sorted_window(series: PlainSeries, window: int, choice: VariableCorrection) -> np.ndarray:
    """Return the values of a window of days, ascending."""
    inside = in_window(series.times, window, choice) & ~np.isnan(series.values)
    return np.sort(series.values[inside])


def moving_years(
    year: int, span: range, anchor: int, choice: VariableCorrection
) -> tuple[int, int]:
    """Return first and last year of the window whose distribution a year is ranked in."""
    width = max(choice.cdf_years, choice.cdf_step_years)
    block = anchor + (year - anchor) // choice.cdf_step_years * choice.cdf_step_years
    start = block - (width - choice.cdf_step_years) // 2
    end = min(start + width - 1, span[-1])
    start = max(start, span[0])
    least = math.ceil(2 * width / 3)
    if end - start + 1 < least:  # at an end of the series
        if end == span[-1]:
            start = max(span[-1] - least + 1, span[0])
        else:
            end = min(span[0] + least - 1, span[-1])
    return start, end


# Values before and after the mapping


def fill_dry(
    values: np.ndarray,
    days: np.ndarray,
    lat: float,
    lon: float,
    seed: int,
    source: str,
    trace: float,
) -> np.ndarray:
    """Return daily precipitation with uniform noise for what is below the trace."""
    with np.errstate(over="ignore"):
        pixel = pixel_keys(np.array([lat]), np.array([lon]))[0]
        key = np.uint64(mix(stream_key(seed, "trace", "pr", source), pixel))
        result = values.copy()
        for i in np.flatnonzero(values < trace):
            noise = trace * unit_interval(np.uint64(mix(key, np.uint64(int(days[i])))))
            result[i] = min(noise, trace * (1 - 1e-6))
    return result


def mean_and_range(low: np.ndarray, high: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return mean and range of daily minimum and maximum, in their precision."""
    a, b = low.astype(np.float64), high.astype(np.float64)
    return ((a + b) / 2).astype(low.dtype), np.maximum(b - a, 0).astype(low.dtype)


def clear_sky(lat: float, day: float) -> float:
    """Return clear-sky radiation at sea level on a day of the year, W m-2 (FAO-56 eq. 21, 37)."""
    phi, j = math.radians(lat), 2 * math.pi * day / 365
    delta = 0.409 * math.sin(j - 1.39)
    ws = math.acos(max(-1.0, min(1.0, -math.tan(phi) * math.tan(delta))))
    parts = ws * math.sin(phi) * math.sin(delta) + math.cos(phi) * math.cos(delta) * math.sin(ws)
    ra = 24 * 60 / math.pi * 0.0820 * (1 + 0.033 * math.cos(j)) * parts
    return max(0.75 * ra, 0.0) / 0.0864
