"""Ascending order of a series, by radix sort (plain arrays, compiled).

A float is turned into an unsigned integer that sorts the same way: all bits flipped for negative
numbers, the sign bit for others. Integer and place are packed into 64 bits and sorted from the
lowest digit up (Knuth 1998, The Art of Computer Programming 3, section 5.2.5). The cost per value
does not grow with the length of the series.
"""

from __future__ import annotations

import numpy as np
from numba import njit

DIGIT = 11
DIGITS = 3
PLACE = np.uint64(0xFFFFFFFF)
"""Mask of the place in a packed item."""
KEY = np.uint64(32)
"""Shift that leaves the key of a packed item."""
BINS = 1 << DIGIT


@njit(cache=True, nogil=True)
def sort_places(values, narrow, packed, spare, bins):
    """Sort the places of the values that are not NaN by value; equal values keep their order.

    Parameters
    ----------
    values
        float32 or float64, shape (n,).
    narrow
        Scratch, float32, shape (n,) or longer.
    packed, spare
        Scratch, uint64, shape (n,) or longer. Sorted places are the low 32 bits of `packed`.
    bins
        Scratch, int64, shape (3, 2048).

    Returns
    -------
    int
        How many values there are.
    """
    bits = narrow.view(np.uint32)
    bins[:] = 0
    count = 0
    for place in range(values.size):
        value = values[place]
        if value != value:
            continue
        narrow[count] = value + values.dtype.type(0.0)  # -0.0 becomes 0.0
        raw = bits[count]
        key = raw ^ np.uint32(0xFFFFFFFF) if raw >> np.uint32(31) else raw ^ np.uint32(0x80000000)
        bins[0, key & np.uint32(BINS - 1)] += 1
        bins[1, (key >> np.uint32(DIGIT)) & np.uint32(BINS - 1)] += 1
        bins[2, key >> np.uint32(2 * DIGIT)] += 1
        spare[count] = (np.uint64(key) << KEY) | np.uint64(place)
        count += 1
    for digit in range(DIGITS):
        _to_starts(bins[digit])
    _deal(spare, packed, count, bins[0], np.uint64(32))
    _deal(packed, spare, count, bins[1], np.uint64(32 + DIGIT))
    _deal(spare, packed, count, bins[2], np.uint64(32 + 2 * DIGIT))
    if values.itemsize > 4:
        _order_within_keys(values, packed, count)
    return count


@njit(cache=True, nogil=True)
def _to_starts(bins):
    total = 0
    for number in range(bins.size):
        size = bins[number]
        bins[number] = total
        total += size


@njit(cache=True, nogil=True)
def _deal(source, target, count, starts, shift):
    for i in range(count):
        item = source[i]
        digit = (item >> shift) & np.uint64(BINS - 1)
        target[starts[digit]] = item
        starts[digit] += 1


@njit(cache=True, nogil=True)
def _order_within_keys(values, packed, count):
    """Sort float64 values that are equal as float32."""
    start = 0
    while start < count:
        key = packed[start] >> KEY
        end = start + 1
        rising = True
        while end < count and packed[end] >> KEY == key:
            if values[packed[end] & PLACE] < values[packed[end - 1] & PLACE]:
                rising = False
            end += 1
        if not rising:
            inside = np.empty(end - start, values.dtype)
            for i in range(start, end):
                inside[i - start] = values[packed[i] & PLACE]
            group = packed[start:end].copy()
            order = np.argsort(inside, kind="mergesort")
            for i in range(start, end):
                packed[i] = group[order[i - start]]
        start = end
