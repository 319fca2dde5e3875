"""Empirical distributions of day-of-year windows, and ranks within them (plain arrays, compiled).

A series is sorted once, the whole of it. Its values are then dealt out in ascending order: each
goes to the end of every window it belongs to, so all windows fill up sorted. In the same way the
rank of a value among the values of its own window is the number that the window has been dealt
so far. Neither needs a comparison. See docs/correct.md for the cost and the proof.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from stook.correct.kernels_order import KEY, PLACE

LANES = 8
"""Counts are raised in groups of this many, which compiles to one vector instruction."""


class Calibration(NamedTuple):
    """Which windows each value of a calibration series belongs to.

    Attributes
    ----------
    first, number
        It belongs to windows ``first .. first + number - 1`` on a circle, int32, shape (time,).
    windows, largest
        Number of windows, and of values in the largest.
    """

    first: np.ndarray
    number: np.ndarray
    windows: int
    largest: int


class Application(NamedTuple):
    """Which windows of days and years each value of a series to correct belongs to.

    A slot is a window of days and a window of years, ``slot = years * windows + days``. Years that
    lie in the same windows of years form a block. Values of the same windows of days and the same
    block share a cell. The table of counts has a row a block and a column a window of days, with a
    margin on either side.

    Attributes
    ----------
    cell
        Cell of each value, int32, shape (time,).
    cells
        What is the same for all values of a cell, int32, shape (cell, 8): slot whose distribution
        they are ranked in; window of days of that slot; where the counts of the cell's windows
        start in the table of counts; number of these windows; where the counts of the slot start;
        1 if the windows run past the last; number of blocks of the slot; 0.
    blocks
        Number of blocks that each window of years consists of, int32, shape (years,).
    starts
        Its first block, int32, shape (years,).
    windows, years, rows
        Number of windows of days, of windows of years, and of blocks.
    stride, lanes
        Length of a row of the table of counts, and of either margin.
    """

    cell: np.ndarray
    cells: np.ndarray
    blocks: np.ndarray
    starts: np.ndarray
    windows: int
    years: int
    rows: int
    stride: int
    lanes: int


@njit(cache=True, nogil=True)
def deal_to_windows(values, packed, count, plan, windows, sizes):
    """Fill the windows of a calibration series with its values in ascending order.

    Parameters
    ----------
    values
        The series, shape (time,).
    packed, count
        From `sort_places`.
    plan
        Its `Calibration`.
    windows
        Filled: shape (windows, largest + 1); after the last value it is repeated once.
    sizes
        Filled: number of values in each window, int64, shape (windows,).
    """
    sizes[:] = 0
    for i in range(count):
        place = packed[i] & PLACE
        value = values[place]
        first = plan.first[place]
        for number in range(first, first + plan.number[place]):
            window = np.uint32(number if number < plan.windows else number - plan.windows)
            size = np.uint32(sizes[window])
            windows[window, size] = value
            sizes[window] = size + np.uint32(1)
    for number in range(plan.windows):
        if sizes[number]:
            windows[number, sizes[number]] = windows[number, sizes[number] - 1]


@njit(cache=True, nogil=True, inline="always")
def value_at(window, size, position):
    """Return the quantile at a Hazen position of a sorted window (1 is the lowest value).

    Linear between values, constant beyond the ends; `window` holds its last value twice.
    """
    place = min(max(position, 1.0), float(size))
    below = np.uint32(place)
    low = float(window[below - np.uint32(1)])
    return low + (place - below) * (float(window[below]) - low)


@njit(cache=True, nogil=True)
def thin_windows(windows, sizes, nodes, scratch):
    """Reduce every window to its quantiles at probabilities ``(j - 0.5) / nodes``, in place.

    A window that has no more values than nodes stays as it is. `scratch` has shape (nodes,).
    """
    for window in range(sizes.size):
        size = sizes[window]
        if size <= nodes:
            continue
        row = windows[window]
        for node in range(nodes):
            position = (node + 0.5) / nodes * size + 0.5
            scratch[node] = value_at(row, size, position)
        row[:nodes] = scratch[:nodes]
        row[nodes] = scratch[nodes - 1]
        sizes[window] = nodes


@njit(cache=True, nogil=True)
def rank_in_windows(values, packed, count, plan, counts, ranks):
    """Rank every value among the values of its own slot; equal values share their middle rank.

    Parameters
    ----------
    values
        The series, shape (time,).
    packed, count
        From `sort_places`.
    plan
        Its `Application`.
    counts
        Table of counts, int32, shape (rows * stride,); left with the totals.
    ranks
        Filled where there is a value: twice the rank, int32, shape (time,).
    """
    counts[:] = 0
    i = 0
    while i < count:
        place = packed[i] & PLACE
        end = i + 1
        key = packed[i] >> KEY
        while end < count and packed[end] >> KEY == key:
            if values[packed[end] & PLACE] != values[place]:
                break
            end += 1
        if end == i + 1:
            cell = np.uint32(plan.cell[place])
            ranks[place] = 2 * _read(counts, plan, cell) + 2
            _raise(counts, plan, cell)
        else:
            for j in range(i, end):
                other = packed[j] & PLACE
                ranks[other] = _read(counts, plan, plan.cell[other])
            for j in range(i, end):
                _raise(counts, plan, plan.cell[packed[j] & PLACE])
            for j in range(i, end):
                other = packed[j] & PLACE
                ranks[other] += _read(counts, plan, plan.cell[other]) + 1
        i = end


@njit(cache=True, nogil=True, inline="always")
def _read(counts, plan, cell):
    at = np.uint64(plan.cells[cell, 4])
    blocks = plan.cells[cell, 6]
    stride = np.uint64(plan.stride)
    total = counts[at]
    if blocks > 1:  # most often three: written out, faster than a loop
        total += counts[at + stride]
    if blocks > 2:
        total += counts[at + stride + stride]
    for block in range(3, blocks):
        total += counts[at + np.uint64(block) * stride]
    return total


@njit(cache=True, nogil=True, inline="always")
def _raise(counts, plan, cell):
    start = np.uint64(plan.cells[cell, 2])
    number = plan.cells[cell, 3]
    _raise_from(counts, plan.lanes, start, number)
    if plan.cells[cell, 5]:
        _raise_from(counts, plan.lanes, start - np.uint64(plan.windows), number)


@njit(cache=True, nogil=True, inline="always")
def _raise_from(counts, lanes, start, number):
    for lane in range(LANES):
        counts[start + np.uint64(lane)] += np.int32(lane < number)
    for lane in range(LANES, lanes):
        counts[start + np.uint64(lane)] += np.int32(lane < number)


@njit(cache=True, nogil=True)
def slot_sizes(counts, plan, sizes):
    """Read the number of values of every slot from the table of counts, int64, shape (slots,)."""
    for years in range(plan.years):
        for window in range(plan.windows):
            total = 0
            for row in range(plan.starts[years], plan.starts[years] + plan.blocks[years]):
                total += counts[row * plan.stride + plan.lanes + window]
            sizes[years * plan.windows + window] = total
