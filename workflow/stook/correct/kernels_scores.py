"""Statistics of a series against another, by season (plain arrays, compiled).

A series is sorted once and dealt to its seasons in ascending order; quantiles and distances of
distributions are read from the sorted seasons.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from stook.correct.kernels_order import PLACE, sort_places
from stook.correct.kernels_windows import value_at

SEASONS = ("DJF", "MAM", "JJA", "SON", "all")
ALL = len(SEASONS) - 1
SCORES = ("mean_bias", "p05_bias", "p95_bias", "wet_day_bias", "cdf_distance")
CHANGES = ("mean_change", "p05_change", "p95_change")
LOW, HIGH = 0.05, 0.95
FEWEST = 10
"""Values that a season needs for a statistic."""


@njit(cache=True, nogil=True)
def deal_to_seasons(values, season, sorting, seasons, sizes):
    """Fill the seasons with the values of a series, ascending.

    Parameters
    ----------
    values
        Shape (time,); NaN is left out.
    season
        0..3, or -1 for a value that belongs to the whole year only; int8, shape (time,).
    sorting
        Scratch of `sort_places`.
    seasons
        Filled, float64, shape (5, time + 1); after the last value it is repeated once.
    sizes
        Filled, int64, shape (5,).
    """
    count = sort_places(values, *sorting)
    packed = sorting[1]
    sizes[:] = 0
    for i in range(count):
        place = packed[i] & PLACE
        value = float(values[place])
        number = season[place]
        if number >= 0:
            seasons[number, sizes[number]] = value
            sizes[number] += 1
        seasons[ALL, i] = value
    sizes[ALL] = count
    for number in range(ALL + 1):
        if sizes[number]:
            seasons[number, sizes[number]] = seasons[number, sizes[number] - 1]


@njit(cache=True, nogil=True)
def score_pixels(o, raw, corrected, o_season, season, wet_day, sorting, out):
    """Compare a model, raw and corrected, with the reference.

    Parameters
    ----------
    o
        Reference, shape (pixel, o time).
    raw, corrected
        Model before and after correction, shape (pixel, time).
    o_season, season
        Season of each time, see `deal_to_seasons`.
    wet_day
        A value from which a day is wet; NaN for variables without wet days.
    sorting
        Scratch of `sort_places`, for the longer of the series.
    out
        Filled: shape (pixel, 2, score, 5), raw before corrected; NaN where a season has too few
        values of either.
    """
    length = max(o.shape[1], raw.shape[1]) + 1
    reference = np.empty((ALL + 1, length))
    model = np.empty((ALL + 1, length))
    o_sizes = np.empty(ALL + 1, np.int64)
    sizes = np.empty(ALL + 1, np.int64)
    out[:] = math.nan
    for pixel in range(o.shape[0]):
        deal_to_seasons(o[pixel], o_season, sorting, reference, o_sizes)
        if o_sizes[ALL] == 0:
            continue
        for stage in range(2):
            values = raw[pixel] if stage == 0 else corrected[pixel]
            deal_to_seasons(values, season, sorting, model, sizes)
            for number in range(ALL + 1):
                n, m = o_sizes[number], sizes[number]
                if n >= FEWEST and m >= FEWEST:
                    found = out[pixel, stage, :, number]
                    _compare(reference[number], n, model[number], m, wet_day, found)


@njit(cache=True, nogil=True)
def _compare(o, n, x, m, wet_day, out):
    out[0] = mean_of(x, m) - mean_of(o, n)
    out[1] = value_at(x, m, LOW * m + 0.5) - value_at(o, n, LOW * n + 0.5)
    out[2] = value_at(x, m, HIGH * m + 0.5) - value_at(o, n, HIGH * n + 0.5)
    if wet_day == wet_day:
        out[3] = 100.0 * (_share_from(x, m, wet_day) - _share_from(o, n, wet_day))
    out[4] = _distance(o, n, x, m)


@njit(cache=True, nogil=True)
def mean_of(values, size):
    """Return the mean of the first `size` values."""
    total = 0.0
    for i in range(size):
        total += values[i]
    return total / size


@njit(cache=True, nogil=True)
def _share_from(values, size, threshold):
    below = np.searchsorted(values[:size], threshold)
    return (size - below) / size


@njit(cache=True, nogil=True)
def _distance(a, n, b, m):
    """Return the largest distance of two empirical distributions (Kolmogorov-Smirnov)."""
    per_a, per_b = 1.0 / n, 1.0 / m
    i = j = np.uint32(0)
    largest = 0.0
    last = -math.inf
    while i < n and j < m:
        first, second = a[i], b[j]
        lower = min(first, second)
        apart = abs(i * per_a - j * per_b) if lower > last else 0.0  # not between equal values
        largest = max(largest, apart)
        last = lower
        i += np.uint32(first <= second)
        j += np.uint32(second <= first)
    while i < n and a[i] == last:
        i += np.uint32(1)
    while j < m and b[j] == last:
        j += np.uint32(1)
    return max(largest, abs(i * per_a - j * per_b))


@njit(cache=True, nogil=True)
def change_pixels(raw, corrected, season, starts, ends, percent, sorting, out):
    """Return how mean, 5th and 95th percentile change between periods, raw and corrected.

    Parameters
    ----------
    raw, corrected
        Model before and after correction, shape (pixel, time).
    season
        Season of each time, see `deal_to_seasons`.
    starts, ends
        First time of each period, and of what follows it; the first period is the one that
        change is counted from; int64, shape (period,).
    percent
        Change as a percentage of the first period, or as a difference.
    sorting
        Scratch of `sort_places`.
    out
        Filled: shape (pixel, 2, period - 1, 3, 5); NaN where a season has too few values, or
        where the percentage has no base above zero.
    """
    dealt = np.empty((ALL + 1, raw.shape[1] + 1))
    sizes = np.empty(ALL + 1, np.int64)
    base = np.empty((len(CHANGES), ALL + 1))
    now = np.empty((len(CHANGES), ALL + 1))
    out[:] = math.nan
    for pixel in range(raw.shape[0]):
        for stage in range(2):
            values = raw[pixel] if stage == 0 else corrected[pixel]
            for period in range(starts.size):
                start, end = starts[period], ends[period]
                deal_to_seasons(values[start:end], season[start:end], sorting, dealt, sizes)
                _summarise(dealt, sizes, base if period == 0 else now)
                if period > 0:
                    _subtract(now, base, percent, out[pixel, stage, period - 1])


@njit(cache=True, nogil=True)
def _summarise(dealt, sizes, found):
    for number in range(ALL + 1):
        size = sizes[number]
        if size < FEWEST:
            found[:, number] = math.nan
            continue
        found[0, number] = mean_of(dealt[number], size)
        found[1, number] = value_at(dealt[number], size, LOW * size + 0.5)
        found[2, number] = value_at(dealt[number], size, HIGH * size + 0.5)


@njit(cache=True, nogil=True)
def _subtract(now, base, percent, out):
    for kind in range(now.shape[0]):
        for number in range(now.shape[1]):
            if not percent:
                out[kind, number] = now[kind, number] - base[kind, number]
            elif base[kind, number] > 0.0:
                out[kind, number] = 100.0 * (now[kind, number] / base[kind, number] - 1.0)
