"""Correction of a block of pixels, one after the other, in scratch arrays made once."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numba import njit

from stook.correct.kernels_map import (
    TOO_FEW,
    VALID,
    enough,
    quantile,
    quantile_delta,
    shift_mean,
)
from stook.correct.kernels_order import BINS, DIGITS, sort_places
from stook.correct.kernels_windows import (
    Application,
    Calibration,
    deal_to_windows,
    thin_windows,
    value_at,
)
from stook.grids.missing import Reason

QUANTILE_DELTA, QUANTILE, MEAN = 0, 1, 2
METHODS = {"quantile-delta": QUANTILE_DELTA, "quantile": QUANTILE, "mean": MEAN, "delta": MEAN}
"""Code of each method; `delta` shifts the mean of the record (see `setup.Change`)."""

_MISSING = int(Reason.MISSING_INPUT)


class Scratch(NamedTuple):
    """Arrays that every pixel of a block uses again."""

    narrow: np.ndarray
    packed: np.ndarray
    spare: np.ndarray
    bins: np.ndarray
    o_windows: np.ndarray
    o_sizes: np.ndarray
    h_windows: np.ndarray
    h_sizes: np.ndarray
    nodes: np.ndarray
    counts: np.ndarray
    ranks: np.ndarray
    sizes: np.ndarray
    o_scale: np.ndarray
    h_scale: np.ndarray


class Rule(NamedTuple):
    """How to map.

    Attributes
    ----------
    method
        Code of `METHODS`.
    ratio, cap
        Ratio or additive; largest ratio.
    trace
        Amount below which a value is dry; 0 where nothing is dry.
    minimum
        Values that a window needs.
    nodes
        Quantiles kept of each calibration window; 0 for all.
    """

    method: int
    ratio: bool
    cap: float
    trace: float
    minimum: int
    nodes: int


def make_scratch(
    length: int, o: Calibration, h: Calibration, f: Application, rule: Rule, dtype: np.dtype
) -> Scratch:
    """Return scratch arrays for series of up to `length` values."""
    slots = f.windows * f.years
    return Scratch(
        np.empty(length, np.float32),
        np.empty(length, np.uint64),
        np.empty(length, np.uint64),
        np.empty((DIGITS, BINS), np.int64),
        np.empty((o.windows, o.largest + 1), dtype),
        np.empty(o.windows, np.int64),
        np.empty((h.windows, h.largest + 1), dtype),
        np.empty(h.windows, np.int64),
        np.empty(rule.nodes, dtype),
        np.empty(f.rows * f.stride, np.int32),
        np.empty(len(f.cell), np.int32),
        np.empty(slots, np.int64),
        np.empty(slots, np.float64),
        np.empty(slots, np.float64),
    )


@njit(cache=True, nogil=True)
def correct_pixels(
    o, h, f, o_plan, h_plan, f_plan, rule, scratch, probabilities, shown, out, reason, capped, kept
):
    """Correct the series of a block of pixels.

    Parameters
    ----------
    o, h
        Reference and model in the calibration period, shapes (pixel, o time), (pixel, h time).
    f
        Model to correct, shape (pixel, time); float32 or float64 as o and h.
    o_plan, h_plan, f_plan
        Windows of o and h (`Calibration`) and of f (`Application`).
    rule, scratch
        `Rule` and `Scratch`.
    probabilities, shown
        Probabilities and windows whose calibration quantiles are kept; may be empty.
    out
        Filled: corrected values, shape (pixel, time); NaN where f is, or where a reason is given.
    reason, capped
        Filled: reason code, int8, and number of values with a capped ratio, int64, shape (pixel,).
    kept
        Filled: quantiles of o and of h, shape (pixel, 2, probability, shown window).
    """
    work = (scratch.counts, scratch.ranks, scratch.sizes, scratch.o_scale, scratch.h_scale)
    for pixel in range(f.shape[0]):
        capped[pixel] = 0
        kept[pixel] = math.nan
        reason[pixel] = _calibrate(o[pixel], h[pixel], o_plan, h_plan, rule, scratch)
        if reason[pixel] == VALID:
            _keep(scratch, probabilities, shown, kept[pixel])
            reason[pixel], capped[pixel] = _apply(f[pixel], f_plan, rule, scratch, work, out[pixel])
        if reason[pixel] != VALID:
            out[pixel] = math.nan


@njit(cache=True, nogil=True)
def _calibrate(o, h, o_plan, h_plan, rule, scratch):
    """Fill the calibration windows of one pixel; return the reason why they cannot be used."""
    sorting = (scratch.narrow, scratch.packed, scratch.spare, scratch.bins)
    count = sort_places(o, *sorting)
    if count == 0:
        return _MISSING
    deal_to_windows(o, scratch.packed, count, o_plan, scratch.o_windows, scratch.o_sizes)
    if not enough(scratch.o_sizes, rule.minimum):
        return TOO_FEW
    count = sort_places(h, *sorting)
    if count == 0:
        return _MISSING
    deal_to_windows(h, scratch.packed, count, h_plan, scratch.h_windows, scratch.h_sizes)
    if not enough(scratch.h_sizes, rule.minimum):
        return TOO_FEW
    if rule.nodes > 0 and rule.method != MEAN:
        thin_windows(scratch.o_windows, scratch.o_sizes, rule.nodes, scratch.nodes)
        thin_windows(scratch.h_windows, scratch.h_sizes, rule.nodes, scratch.nodes)
    return VALID


@njit(cache=True, nogil=True)
def _apply(f, f_plan, rule, scratch, work, out):
    """Correct one series; return its reason code and the number of capped ratios."""
    o, o_sizes = scratch.o_windows, scratch.o_sizes
    h, h_sizes = scratch.h_windows, scratch.h_sizes
    if rule.method == MEAN:
        return VALID, shift_mean(f, f_plan, o, o_sizes, h, h_sizes, rule, out)
    packed = scratch.packed
    count = sort_places(f, scratch.narrow, packed, scratch.spare, scratch.bins)
    if count == 0:
        return _MISSING, 0
    if rule.method == QUANTILE:
        return VALID, quantile(f, packed, count, f_plan, o, o_sizes, h, h_sizes, rule, out)
    return quantile_delta(f, packed, count, f_plan, o, o_sizes, h, h_sizes, rule, work, out)


@njit(cache=True, nogil=True)
def _keep(scratch, probabilities, shown, kept):
    """Read the quantiles of the calibration windows that go to the transfer file."""
    for at in range(shown.size):
        window = shown[at]
        for number in range(probabilities.size):
            p = probabilities[number]
            size = scratch.o_sizes[window]
            kept[0, number, at] = value_at(scratch.o_windows[window], size, p * size + 0.5)
            size = scratch.h_sizes[window]
            kept[1, number, at] = value_at(scratch.h_windows[window], size, p * size + 0.5)
