"""Array kernels of the season stage: one pass over the days of every season of a block of pixels.

All take series ``(time, pixel)`` and the first day and the end of every season as indices into
time, ``(year, pixel)``, the end not included. A season whose first day is below zero or whose end
lies beyond the series is incomplete and has no value; so has one with a missing (NaN) day. Sums
run over the days in order. Nothing mixes pixels, so that a pixel has the same value in any block.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from stook.season.sine import part_above
from stook.yields.exponential import exponential

BUFFER = 4096
"""Days that cross a threshold are collected to this number before their sines are worked out."""


@njit(cache=True, nogil=True)
def season_sums(
    series: np.ndarray, first: np.ndarray, end: np.ndarray
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the sum of a series over every season, float64 (year, pixel)."""
    years, pixels = first.shape
    sums = np.zeros((years, pixels))
    for year in range(years):
        low, high = _span(first[year], end[year], series.shape[0])
        for day in range(low, high):
            for pixel in range(pixels):
                inside = (first[year, pixel] <= day) & (day < end[year, pixel])
                sums[year, pixel] += series[day, pixel] if inside else 0.0
    _blank(sums, first, end, series.shape[0])
    return sums


@njit(cache=True, nogil=True)
def season_degree_days(
    low: np.ndarray,
    high: np.ndarray,
    first: np.ndarray,
    end: np.ndarray,
    base: float,
    cap: float,
) -> np.ndarray:  # pragma: no cover - compiled
    """Return degree days above a base and below a cap summed over every season.

    `low` and `high` are tasmin and tasmax, degC; a cap of infinity is no cap. Where both lie on one
    side of a threshold, the day counts nothing or its mean less the threshold. The other days are
    collected, and their sines (`stook.season.sine`) worked out together. Returns float64 (year,
    pixel).
    """
    years, pixels = first.shape
    sums, parts = np.zeros((years, pixels)), np.zeros(2 * years * pixels)
    # Of each day collected: mean less threshold, half the range, and its season; the seasons are
    # counted on for days that cross the cap.
    size = BUFFER + 2 * pixels + 1
    excess, half, season = np.empty(size), np.empty(size), np.empty(size, np.int64)
    crosses, found = np.zeros(pixels, np.int64), np.empty(pixels, np.int64)
    count = 0
    for year in range(years):
        start, stop = _span(first[year], end[year], low.shape[0])
        for day in range(start, stop):
            _add_whole_days(low, high, first, end, day, year, base, cap, sums, crosses)
            several = 0
            for pixel in range(pixels):
                found[several] = pixel
                several += 1 if crosses[pixel] > 0 else 0
            for i in range(several):
                pixel = found[i]
                cold, warm = np.float64(low[day, pixel]), np.float64(high[day, pixel])
                mean, number = 0.5 * (cold + warm), year * pixels + pixel
                excess[count], half[count], season[count] = mean - base, 0.5 * (warm - cold), number
                count += crosses[pixel] & 1
                excess[count], half[count] = mean - cap, 0.5 * (warm - cold)
                season[count] = years * pixels + number
                count += crosses[pixel] >> 1
            if count > BUFFER:
                _add_parts(excess[:count], half, season, parts)
                count = 0
    _add_parts(excess[:count], half, season, parts)
    both = parts.reshape(2, years, pixels)
    sums += both[0] - both[1]
    _blank(sums, first, end, low.shape[0])
    return sums


@njit(cache=True, nogil=True)
def _add_whole_days(
    low: np.ndarray,
    high: np.ndarray,
    first: np.ndarray,
    end: np.ndarray,
    day: int,
    year: int,
    base: float,
    cap: float,
    sums: np.ndarray,
    crosses: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Add what lies above a threshold all day; mark the pixels that cross base (1) and cap (2).

    A missing value makes the sum missing.
    """
    for pixel in range(crosses.size):
        cold, warm = np.float64(low[day, pixel]), np.float64(high[day, pixel])
        mean = 0.5 * (cold + warm)
        inside = (first[year, pixel] <= day) & (day < end[year, pixel])
        mark = 1 if (cold < base) & (warm > base) else 0
        mark += 2 if (cold < cap) & (warm > cap) else 0
        crosses[pixel] = mark if inside else 0
        above = mean - base if cold >= base else 0.0
        cut = mean - cap if cold >= cap else 0.0
        sums[year, pixel] += above - cut + 0.0 * mean if inside else 0.0


@njit(cache=True, nogil=True, error_model="numpy")
def _add_parts(
    excess: np.ndarray, half: np.ndarray, season: np.ndarray, parts: np.ndarray
) -> None:  # pragma: no cover - compiled
    """Add the degree days of collected days to the sums of their seasons, in order."""
    for i in range(excess.size):
        half[i] = part_above(excess[i], half[i])
    for i in range(excess.size):
        parts[season[i]] += half[i]


@njit(cache=True, nogil=True)
def season_counts(
    low: np.ndarray, high: np.ndarray, first: np.ndarray, end: np.ndarray, threshold: float
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the days of every season on which the mean of two series exceeds a threshold.

    Give the same series twice to count the days of one. Returns float64 (year, pixel).
    """
    years, pixels = first.shape
    counts = np.zeros((years, pixels))
    for year in range(years):
        start, stop = _span(first[year], end[year], low.shape[0])
        for day in range(start, stop):
            for pixel in range(pixels):
                inside = (first[year, pixel] <= day) & (day < end[year, pixel])
                value = 0.5 * (np.float64(low[day, pixel]) + np.float64(high[day, pixel]))
                one = 1.0 if value > threshold else 0.0
                one = one if value == value else np.nan
                counts[year, pixel] += one if inside else 0.0
    _blank(counts, first, end, low.shape[0])
    return counts


@njit(cache=True, nogil=True)
def season_dry_spells(
    rain: np.ndarray, first: np.ndarray, end: np.ndarray, wet_day: float
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the longest run of days below `wet_day` in every season, float64 (year, pixel).

    A run is cut off at both ends of the season.
    """
    years, pixels = first.shape
    longest = np.zeros((years, pixels))
    run = np.empty(pixels)
    for year in range(years):
        start, stop = _span(first[year], end[year], rain.shape[0])
        run[:] = 0.0
        for day in range(start, stop):
            for pixel in range(pixels):
                inside = (first[year, pixel] <= day) & (day < end[year, pixel])
                value = np.float64(rain[day, pixel])
                run[pixel] = run[pixel] + 1.0 if inside & (value < wet_day) else 0.0
                best = max(longest[year, pixel], run[pixel])
                # A missing value stays: no comparison with it is true.
                best = best if longest[year, pixel] == longest[year, pixel] else np.nan
                longest[year, pixel] = np.nan if inside & (value != value) else best
    _blank(longest, first, end, rain.shape[0])
    return longest


@njit(cache=True, nogil=True)
def season_largest_totals(
    rain: np.ndarray, first: np.ndarray, end: np.ndarray, length: int
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the largest sum of `length` consecutive days of every season, float64 (year, pixel).

    All days of a run lie in the season; one that is shorter than a run has no value. Each run is
    summed by itself, in the order of its days.
    """
    years, pixels = first.shape
    largest = np.zeros((years, pixels))
    total = np.empty(pixels)
    for year in range(years):
        start, stop = _span(first[year], end[year], rain.shape[0])
        for day in range(start + length - 1, stop):
            total[:] = 0.0
            for one in range(day - length + 1, day + 1):
                for pixel in range(pixels):
                    total[pixel] += rain[one, pixel]
            for pixel in range(pixels):
                inside = (first[year, pixel] <= day - length + 1) & (day < end[year, pixel])
                best = largest[year, pixel]
                # A missing value stays: no comparison with it is false.
                larger = inside & (best == best) & (not total[pixel] <= best)
                largest[year, pixel] = total[pixel] if larger else best
        for pixel in range(pixels):
            if end[year, pixel] - first[year, pixel] < length:
                largest[year, pixel] = np.nan
    _blank(largest, first, end, rain.shape[0])
    return largest


@njit(cache=True, nogil=True, error_model="numpy")
def season_vapour_pressure_deficits(
    low: np.ndarray, high: np.ndarray, humidity: np.ndarray, first: np.ndarray, end: np.ndarray
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the sum of the daily vapour pressure deficit over every season, kPa day.

    `low` and `high` are tasmin and tasmax, degC, `humidity` the daily mean, %. Returns float64
    (year, pixel).
    """
    years, pixels = first.shape
    sums = np.zeros((years, pixels))
    for year in range(years):
        start, stop = _span(first[year], end[year], low.shape[0])
        for day in range(start, stop):
            for pixel in range(pixels):
                inside = (first[year, pixel] <= day) & (day < end[year, pixel])
                cold, warm = np.float64(low[day, pixel]), np.float64(high[day, pixel])
                deficit = vapour_pressure_deficit(cold, warm, np.float64(humidity[day, pixel]))
                sums[year, pixel] += deficit if inside else 0.0
    _blank(sums, first, end, low.shape[0])
    return sums


@njit(cache=True, nogil=True, error_model="numpy")
def step_deficits(
    low: np.ndarray, high: np.ndarray, humidity: np.ndarray
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the vapour pressure deficit of every time step, kPa, float64 (time, pixel)."""
    steps, pixels = low.shape
    deficits = np.empty((steps, pixels))
    for step in range(steps):
        for pixel in range(pixels):
            deficits[step, pixel] = vapour_pressure_deficit(
                np.float64(low[step, pixel]),
                np.float64(high[step, pixel]),
                np.float64(humidity[step, pixel]),
            )
    return deficits


@njit(cache=True, nogil=True, inline="always")
def saturation_pressure(temperature: float) -> float:  # pragma: no cover - compiled
    """Return the saturation vapour pressure, kPa, at a temperature in degC (scalar kernel).

    Allen, Pereira, Raes & Smith 1998, FAO Irrigation and Drainage Paper 56, equation 11.
    """
    return 0.6108 * exponential(17.27 * temperature / (temperature + 237.3))


@njit(cache=True, nogil=True, inline="always")
def vapour_pressure_deficit(
    low: float, high: float, humidity: float
) -> float:  # pragma: no cover - compiled
    """Return the vapour pressure deficit, kPa (scalar kernel; FAO-56 equations 12 and 19)."""
    saturation = 0.5 * (saturation_pressure(low) + saturation_pressure(high))
    return saturation * (1.0 - 0.01 * humidity)


@njit(cache=True, nogil=True)
def interval_means(
    series: np.ndarray, edges: np.ndarray, begin: np.ndarray, end: np.ndarray
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the mean of a monthly or annual series over intervals, weighted by overlap.

    Parameters
    ----------
    series
        Shape (time, pixel).
    edges
        Edges of the time steps, days, float64, shape (time + 1,).
    begin, end
        Begin and end of every season on the same scale, float64, shape (year, pixel).

    Returns
    -------
    ndarray
        float64, shape (year, pixel); missing where the steps do not cover the interval, or one
        that overlaps it is missing.
    """
    years, pixels = begin.shape
    means = np.full((years, pixels), np.nan)
    for pixel in range(pixels):
        step = 0
        for year in range(years):
            low, high = begin[year, pixel], end[year, pixel]
            if not (edges[0] <= low and low < high and high <= edges[-1]):
                continue
            while edges[step] > low:
                step -= 1
            while edges[step + 1] <= low:
                step += 1
            total, last = 0.0, step
            while last < series.shape[0] and edges[last] < high:
                part = min(edges[last + 1], high) - max(edges[last], low)
                total += series[last, pixel] * part
                last += 1
            means[year, pixel] = total / (high - low)
    return means


@njit(cache=True, nogil=True)
def _span(
    first: np.ndarray, end: np.ndarray, length: int
) -> tuple[int, int]:  # pragma: no cover - compiled
    """Return the first day of all complete seasons of a year and their end."""
    low, high = length, 0
    for pixel in range(first.size):
        if first[pixel] >= 0 and first[pixel] < end[pixel] and end[pixel] <= length:
            low = min(low, first[pixel])
            high = max(high, end[pixel])
    return low, high


@njit(cache=True, nogil=True)
def _blank(
    values: np.ndarray, first: np.ndarray, end: np.ndarray, length: int
) -> None:  # pragma: no cover - compiled
    """Blank the values of incomplete seasons."""
    years, pixels = first.shape
    for year in range(years):
        for pixel in range(pixels):
            begin, stop = first[year, pixel], end[year, pixel]
            if begin < 0 or stop > length or begin >= stop:
                values[year, pixel] = np.nan
