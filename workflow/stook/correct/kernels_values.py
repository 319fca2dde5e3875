"""What is done to single values before and after the mapping (plain arrays, compiled)."""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from stook.randomness import mix, unit_interval

_BELOW_TRACE = 1.0 - 1e-6
_SOLAR_CONSTANT = 0.0820  # MJ m-2 min-1
_SECONDS = 86400.0


@njit(cache=True, nogil=True)
def fill_dry(values, day, stream, keys, trace):
    """Replace values below the trace by uniform noise between 0 and the trace, in place.

    Parameters
    ----------
    values
        Shape (pixel, time); NaN stays.
    day
        Number of each step, int64, shape (time,).
    stream
        Key of the variable and simulation, uint64.
    keys
        Key of each pixel, uint64, shape (pixel,).
    trace
        In the unit of the values.
    """
    for pixel in range(values.shape[0]):
        key = mix(stream, keys[pixel])
        row = values[pixel]
        for time in range(day.size):
            if row[time] < trace:
                u = unit_interval(mix(key, np.uint64(day[time])))
                row[time] = min(trace * u, trace * _BELOW_TRACE)


@njit(cache=True, nogil=True)
def empty_dry(values, trace):
    """Set values below the trace to zero, in place."""
    for pixel in range(values.shape[0]):
        row = values[pixel]
        for time in range(row.size):
            if row[time] < trace:
                row[time] = 0.0


@njit(cache=True, nogil=True)
def limit(values, low, high, slot):
    """Hold values within bounds, in place.

    Parameters
    ----------
    values
        Shape (pixel, time); NaN stays.
    low
        Lower bound.
    high
        Upper bounds, shape (pixel, slot).
    slot
        Slot of each time, int64, shape (time,).
    """
    for pixel in range(values.shape[0]):
        row = values[pixel]
        for time in range(row.size):
            if row[time] < low:
                row[time] = low
            elif row[time] > high[pixel, slot[time]]:
                row[time] = high[pixel, slot[time]]


@njit(cache=True, nogil=True)
def clear_sky(lat, day):
    """Return clear-sky radiation at sea level, FAO-56 eq. 21 and 37 (Allen et al. 1998).

    Parameters
    ----------
    lat
        Degrees, shape (pixel,).
    day
        Day of a year of 365 days, from 1, float64, shape (slot,).

    Returns
    -------
    ndarray
        ``0.75 Ra``, W m-2 (mean of the day), float64, shape (pixel, slot).
    """
    result = np.empty((lat.size, day.size))
    for slot in range(day.size):
        angle = 2.0 * math.pi * day[slot] / 365.0
        distance = 1.0 + 0.033 * math.cos(angle)
        declination = 0.409 * math.sin(angle - 1.39)
        for pixel in range(lat.size):
            phi = math.radians(lat[pixel])
            sunset = math.acos(min(max(-math.tan(phi) * math.tan(declination), -1.0), 1.0))
            above = sunset * math.sin(phi) * math.sin(declination)
            above += math.cos(phi) * math.cos(declination) * math.sin(sunset)
            ra = 1440.0 / math.pi * _SOLAR_CONSTANT * distance * above
            result[pixel, slot] = max(0.75 * ra, 0.0) * 1e6 / _SECONDS
    return result


@njit(cache=True, nogil=True)
def split_pair(low, high, mean, difference):
    """Fill mean and range of a pair of minimum and maximum; a negative range becomes zero.

    All arrays have one shape (pixel, time); where either is missing both results are.
    """
    for pixel in range(low.shape[0]):
        for time in range(low.shape[1]):
            a, b = float(low[pixel, time]), float(high[pixel, time])
            mean[pixel, time] = 0.5 * (a + b)
            gap = b - a
            difference[pixel, time] = 0.0 if gap < 0.0 else gap


@njit(cache=True, nogil=True)
def join_pair(mean, difference, low, high):
    """Fill minimum and maximum from mean and range; the range is never below zero."""
    for pixel in range(low.shape[0]):
        for time in range(low.shape[1]):
            half = 0.5 * float(difference[pixel, time])
            if half < 0.0:
                half = 0.0
            middle = float(mean[pixel, time])
            low[pixel, time] = middle - half
            high[pixel, time] = middle + half


@njit(cache=True, nogil=True)
def part_pair(low, high):
    """Set minimum and maximum to their mean where the minimum is above the maximum, in place."""
    for pixel in range(low.shape[0]):
        for time in range(low.shape[1]):
            if low[pixel, time] > high[pixel, time]:
                middle = 0.5 * (float(low[pixel, time]) + float(high[pixel, time]))
                low[pixel, time] = middle
                high[pixel, time] = middle
