"""Correction of one series by its windows (plain arrays, compiled).

Notation of docs/correct.md: o the reference and h the model in the calibration period, f the series
to correct. Windows of o and h are filled by `kernels_windows.deal_to_windows`. A value that is
NaN stays NaN.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from stook.correct.kernels_order import PLACE
from stook.correct.kernels_windows import rank_in_windows, slot_sizes, value_at
from stook.grids.missing import Reason

VALID = int(Reason.VALID)
TOO_FEW = int(Reason.TOO_FEW_VALUES)


@njit(cache=True, nogil=True, inline="always")
def relative(value, base, cap):
    """Return ``value / base``, at most `cap`; with a base of zero, 1 for zero and else the cap."""
    if base > 0.0:
        return min(value / base, cap)
    return cap if value > 0.0 else 1.0


@njit(cache=True, nogil=True, inline="always")
def scaled(o, h, value, cap, trace):
    """Return o changed as the model changes from h to a value, and whether the cap bit.

    It is ``o * min(value / h, cap)``. Below the trace is dry, and an amount has no relative change
    from or of nothing: where o is dry and h is wet it is o; where h is dry it is o for a dry value
    and ``o + value - h`` for a wet one. A trace of zero means none of this.
    """
    if h < trace:
        return (o if value < trace else o + (value - h)), False
    if o < trace:
        return o, False
    factor = relative(value, h, cap)
    return o * factor, factor == cap


@njit(cache=True, nogil=True)
def enough(sizes, minimum):
    """Tell whether every window has the least number of values."""
    return sizes.min() >= minimum


@njit(cache=True, nogil=True)
def quantile_delta(f, packed, count, plan, o_windows, o_sizes, h_windows, h_sizes, rule, work, out):
    """Correct by quantile delta mapping (Cannon, Sobie & Murdock 2015, J. Climate 28, 6938).

    ``t`` is the Hazen probability of a value in its own slot of f. Additive:
    ``F_o^-1(t) + x - F_h^-1(t)``; ratio: `scaled`.

    Parameters
    ----------
    f
        Series to correct, shape (time,).
    packed, count
        From `sort_places` of f.
    plan
        Its `Application`.
    o_windows, o_sizes, h_windows, h_sizes
        Calibration windows.
    rule
        `Rule`.
    work
        Scratch: (counts, ranks, slot sizes, o scale, h scale), see `kernels_pixels.Scratch`.
    out
        Filled, shape (time,).

    Returns
    -------
    reason, capped
        Reason code and number of values whose ratio was capped.
    """
    counts, ranks, sizes, o_scale, h_scale = work
    rank_in_windows(f, packed, count, plan, counts, ranks)
    slot_sizes(counts, plan, sizes)
    for number in range(sizes.size):
        if sizes[number]:
            days = number % plan.windows
            o_scale[number] = o_sizes[days] / sizes[number]
            h_scale[number] = h_sizes[days] / sizes[number]
    capped = 0
    for time in range(f.size):
        value = float(f[time])
        if value != value:
            out[time] = math.nan
            continue
        cell = np.uint32(plan.cell[time])
        slot = np.uint32(plan.cells[cell, 0])
        if sizes[slot] < rule.minimum:
            return TOO_FEW, 0
        window = np.uint32(plan.cells[cell, 1])
        step = 0.5 * ranks[time] - 0.5
        o = value_at(o_windows[window], o_sizes[window], step * o_scale[slot] + 0.5)
        h = value_at(h_windows[window], h_sizes[window], step * h_scale[slot] + 0.5)
        if rule.ratio:
            mapped, beyond = scaled(o, h, value, rule.cap, rule.trace)
            out[time] = mapped
            capped += beyond
        else:
            out[time] = o + (value - h)
    return VALID, capped


@njit(cache=True, nogil=True)
def quantile(f, packed, count, plan, o_windows, o_sizes, h_windows, h_sizes, rule, out):
    """Correct by quantile mapping, ``F_o^-1(F_h(x))``.

    F_h(x) is the Hazen probability of the middle rank of x among equal values of h, or linear
    between the neighbours of x. Below and above all values of h the correction of the end is kept
    (Boe et al. 2007, Int. J. Climatol. 27, 1643): as a factor for a ratio, unless h is dry there,
    and else as a difference.
    Parameters and returns as in `quantile_delta`.
    """
    upto = np.zeros(plan.windows, np.int64)
    below = np.zeros(plan.windows, np.int64)
    out[:] = math.nan
    capped = 0
    for i in range(count):
        time = packed[i] & PLACE
        value = float(f[time])
        window = plan.cells[plan.cell[time], 1]
        row = h_windows[window]
        size = h_sizes[window]
        low = below[window]
        while low < size and row[low] < value:
            low += 1
        high = max(upto[window], low)
        while high < size and row[high] <= value:
            high += 1
        below[window] = low
        upto[window] = high
        if high > low:
            position = 0.5 * (low + 1 + high)
        elif low == 0:
            position = 1.0
        elif low == size:
            position = float(size)
        else:
            step = (value - row[low - 1]) / (float(row[low]) - row[low - 1])
            position = low + step
        target = (position - 0.5) * (o_sizes[window] / size) + 0.5
        mapped = value_at(o_windows[window], o_sizes[window], target)
        if high == low and (low == 0 or low == size):
            end = float(row[0]) if low == 0 else float(row[size - 1])
            if rule.ratio and end >= rule.trace:
                factor = relative(mapped, end, rule.cap)
                capped += factor == rule.cap
                mapped = value * factor
            else:
                mapped = value + (mapped - end)
        out[time] = mapped
    return capped


@njit(cache=True, nogil=True)
def shift_mean(f, plan, o_windows, o_sizes, h_windows, h_sizes, rule, out):
    """Correct by the difference, or the capped ratio, of the window means of o and h.

    Parameters and returns as in `quantile_delta`.
    """
    steps = np.empty(plan.windows)
    for window in range(plan.windows):
        o = _mean(o_windows[window], o_sizes[window])
        h = _mean(h_windows[window], h_sizes[window])
        steps[window] = relative(o, h, rule.cap) if rule.ratio else o - h
    capped = 0
    for time in range(f.size):
        step = steps[plan.cells[plan.cell[time], 1]]
        if rule.ratio:
            capped += step == rule.cap and f[time] == f[time]
            out[time] = f[time] * step
        else:
            out[time] = f[time] + step
    return capped


@njit(cache=True, nogil=True)
def _mean(window, size):
    total = 0.0
    for i in range(size):
        total += float(window[i])
    return total / size
