"""Correction and evaluation of a block of pixels: arrays of shape (pixel, time), no metadata."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from stook.constants import WET_DAY_MM
from stook.correct.kernels_order import BINS, DIGITS
from stook.correct.kernels_pixels import correct_pixels, make_scratch
from stook.correct.kernels_scores import CHANGES, SCORES, SEASONS, change_pixels, score_pixels
from stook.correct.kernels_values import (
    clear_sky,
    empty_dry,
    fill_dry,
    join_pair,
    limit,
    part_pair,
    split_pair,
)
from stook.correct.setup import (
    DIURNAL_RANGE,
    MEAN_TEMPERATURE,
    PAIR,
    Change,
    Part,
    Setup,
    Tables,
    quantities_of,
)
from stook.correct.windows import YEAR_DAYS, Series
from stook.grids.missing import Reason
from stook.randomness import stream_key

PROBABILITIES = np.round(np.linspace(0.0, 1.0, 21), 2)
"""Probabilities of the quantiles in the transfer file."""

MONTH_DAYS = (31, 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31)
"""Days of the months of a year of 365 days."""

SHOWN_EVERY = 6
"""Every how many windows the transfer file has one (30 days by default)."""

Values = dict[str, np.ndarray]


@dataclass(frozen=True)
class Pixels:
    """Where the pixels of a block lie: latitude (degrees) and random key, shape (pixel,)."""

    lat: np.ndarray
    keys: np.ndarray


@dataclass
class Corrected:
    """Corrected series of one group, and what is known about them.

    Attributes
    ----------
    values
        Corrected variables, shape (pixel, time).
    reason
        Reason code, int8, shape (pixel,).
    capped
        Values whose ratio was capped, by quantity, int64, shape (pixel,).
    kept
        Calibration quantiles by quantity, shape (pixel, 2, probability, window).
    """

    values: Values
    reason: np.ndarray
    capped: Values = field(default_factory=dict)
    kept: Values = field(default_factory=dict)


def shown_windows(count: int) -> np.ndarray:
    """Return the windows whose quantiles are kept in the transfer file."""
    return np.arange(0, count, SHOWN_EVERY if count > SHOWN_EVERY * 2 else 1)


def prepare_group(
    group: tuple[str, ...],
    values: Values,
    series: Series,
    source: str,
    setup: Setup,
    pixels: Pixels,
) -> Values:
    """Return what is mapped for a group of variables.

    Parameters
    ----------
    group, values
        The variables, shape (pixel, time); they are not changed.
    series, source
        Time axis, and name of the simulation or `observed`.
    """
    if _as_mean_and_range(group, setup):
        low, high = (values[name] for name in PAIR)
        mean, difference = np.empty_like(low), np.empty_like(low)
        split_pair(low, high, mean, difference)
        return {MEAN_TEMPERATURE: mean, DIURNAL_RANGE: difference}
    result = dict(values)
    if "pr" in group and (choice := setup.correct.choice("pr")).method not in ("none", "delta"):
        filled = values["pr"].copy()
        stream = stream_key(setup.seed, "trace", "pr", source)
        fill_dry(filled, series.day, stream, pixels.keys, choice.trace)
        result["pr"] = filled
    return result


def correct_group(
    group: tuple[str, ...],
    o: Values,
    f: Values,
    part: Part,
    setup: Setup,
    pixels: Pixels,
    keep: bool = False,
) -> Corrected:
    """Correct a group of variables.

    Parameters
    ----------
    group
        The variables.
    o, f
        From `prepare_group`: reference and whole simulation, shape (pixel, time).
    part
        Times to calibrate on and to correct.
    keep
        Whether to keep the calibration quantiles.

    Returns
    -------
    Corrected
        Series of the times of `part.f`.
    """
    found = Corrected({}, np.zeros(len(pixels.lat), np.int8))
    mapped: Values = {}
    for name in f:
        series = f[name] if len(part.f) == f[name].shape[1] else f[name].take(part.f, axis=1)
        if name not in part.mappings:
            mapped[name] = series
            found.reason[np.isnan(series).all(axis=1)] = int(Reason.MISSING_INPUT)
            continue
        mapped[name], reason, capped, kept = map_series(
            o[name].take(part.o, axis=1),
            f[name].take(part.h, axis=1),
            series,
            part.mappings[name],
            keep,
        )
        np.maximum(found.reason, reason, out=found.reason)
        if part.mappings[name].quantity.ratio:
            found.capped[name] = capped
        if keep:
            found.kept[name] = kept
    found.values = _to_variables(group, mapped, part, setup, pixels)
    return found


def map_series(
    o: np.ndarray, h: np.ndarray, f: np.ndarray, tables: Tables, keep: bool = False
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Map the series of one quantity.

    Parameters
    ----------
    o, h, f
        Reference and model in the calibration period, model to correct: contiguous, all float32
        or all float64, shape (pixel, time).
    tables
        From `setup.tables_of` for these time axes.
    keep
        Whether to keep calibration quantiles.

    Returns
    -------
    out, reason, capped, kept
        As in `kernels_pixels.correct_pixels`.
    """
    longest = max(o.shape[1], h.shape[1], f.shape[1])
    plans = (tables.o_plan, tables.h_plan, tables.f_plan)
    scratch = make_scratch(longest, *plans, tables.rule, f.dtype)
    shown = shown_windows(tables.f_plan.windows) if keep else np.empty(0, np.int64)
    count = len(f)
    out = np.empty_like(f)
    reason, capped = np.empty(count, np.int8), np.empty(count, np.int64)
    kept = np.empty((count, 2, len(PROBABILITIES), len(shown)), f.dtype)
    correct_pixels(
        o, h, f, *plans, tables.rule, scratch, PROBABILITIES, shown, out, reason, capped, kept
    )
    if tables.changes:
        capped[:] = 0
        for change in tables.changes:
            _change_record(o, h, f, change, out, reason, capped)
        out[reason != int(Reason.VALID)] = np.nan
    return out, reason, capped, kept


def _change_record(
    o: np.ndarray,
    h: np.ndarray,
    f: np.ndarray,
    change: Change,
    out: np.ndarray,
    reason: np.ndarray,
    capped: np.ndarray,
) -> None:
    """Fill the times of one change with the record, changed as the simulation changes."""
    record = o.take(change.record, axis=1)
    if change.tables is not None:
        window = f.take(change.window, axis=1)
        record, why, beyond, _ = map_series(window, h, record, change.tables)
        failed = (reason == int(Reason.VALID)) & (why != int(Reason.VALID))
        reason[failed] = int(Reason.TOO_FEW_VALUES)
        capped += beyond
    out[:, change.at] = record.take(change.source, axis=1)


def _to_variables(
    group: tuple[str, ...], mapped: Values, part: Part, setup: Setup, pixels: Pixels
) -> Values:
    """Return the variables from what was mapped, within their bounds."""
    if not part.mappings:
        return mapped
    if _as_mean_and_range(group, setup):
        mean, difference = mapped[MEAN_TEMPERATURE], mapped[DIURNAL_RANGE]
        low, high = np.empty_like(mean), np.empty_like(mean)
        join_pair(mean, difference, low, high)
        return dict(zip(PAIR, (low, high), strict=True))
    if group == PAIR:
        part_pair(*(mapped[name] for name in PAIR))
    for name in mapped:
        if name not in part.mappings:
            continue
        if name == "pr":
            empty_dry(mapped[name], part.mappings[name].quantity.choice.trace)
        elif name in ("hurs", "rsds"):
            high, slot = _upper_bounds(name, setup.model.part(part.f), pixels.lat)
            limit(mapped[name], 0.0, high, slot)
    return mapped


def _upper_bounds(name: str, series: Series, lat: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return upper bounds, shape (pixel, slot), and the slot of each time."""
    if name == "hurs":
        return np.full((len(lat), 1), 100.0), np.zeros(len(series), np.int64)
    if series.step == "daily":
        places, slot = np.unique(series.position, return_inverse=True)
        return clear_sky(lat, places * YEAR_DAYS + 0.5), slot.astype(np.int64)
    days = np.arange(1.0, YEAR_DAYS + 1.0)
    daily = clear_sky(lat, days)
    if series.step == "annual":
        return daily.mean(axis=1, keepdims=True), np.zeros(len(series), np.int64)
    month = np.repeat(np.arange(12), MONTH_DAYS)
    monthly = np.stack([daily[:, month == number].mean(axis=1) for number in range(12)], axis=1)
    return monthly, series.month - 1


def _as_mean_and_range(group: tuple[str, ...], setup: Setup) -> bool:
    quantities = quantities_of(group, setup.correct)
    return any(quantity.name == MEAN_TEMPERATURE for quantity in quantities)


def evaluate_group(
    group: tuple[str, ...],
    raw: tuple[Values, Values],
    prepared: tuple[Values, Values],
    setup: Setup,
    pixels: Pixels,
) -> Values:
    """Evaluate on the half of the calibration period that was not calibrated on, and the reverse.

    Parameters
    ----------
    group
        The variables.
    raw
        Reference and simulation as prepared, shape (pixel, time).
    prepared
        The same from `prepare_group`.

    Returns
    -------
    dict
        By variable, shape (pixel, sample, 2, score, season), see `kernels_scores.SCORES`.
    """
    assert setup.reference is not None
    count = len(pixels.lat)
    shape = (count, len(setup.samples), 2, len(SCORES), len(SEASONS))
    result = {name: np.empty(shape) for name in group}
    o, f = raw
    o_season, f_season = season_numbers(setup.reference), season_numbers(setup.model)
    for number, sample in enumerate(setup.samples):
        times = sample.part.f
        corrected = correct_group(group, *prepared, sample.part, setup, pixels)
        for name in group:
            scores = np.empty((count, *shape[2:]))
            reference, model = o[name].take(sample.o, axis=1), f[name].take(times, axis=1)
            if name == "pr":
                for values in (reference, model):
                    empty_dry(values, setup.correct.choice("pr").trace)
            score_pixels(
                reference,
                model,
                corrected.values[name],
                o_season[sample.o],
                f_season[times],
                WET_DAY_MM if name == "pr" else np.nan,
                _sorting(max(len(sample.o), len(times))),
                scores,
            )
            scores[corrected.reason != int(Reason.VALID)] = np.nan
            result[name][:, number] = scores
    return result


def changes_of(raw: np.ndarray, corrected: np.ndarray, name: str, setup: Setup) -> np.ndarray:
    """Return the simulated change of each horizon, before and after correction.

    Parameters
    ----------
    raw, corrected
        Shape (pixel, time).
    name
        The variable; changes of pr are percentages.

    Returns
    -------
    ndarray
        Shape (pixel, 2, horizon, change, season), see `kernels_scores.CHANGES`.
    """
    shape = (len(raw), 2, len(setup.periods) - 1, len(CHANGES), len(SEASONS))
    result = np.empty(shape)
    starts = np.array([period.start for period in setup.periods], dtype=np.int64)
    ends = np.array([period.end for period in setup.periods], dtype=np.int64)
    longest = int((ends - starts).max())
    season = season_numbers(setup.model)
    change_pixels(raw, corrected, season, starts, ends, name == "pr", _sorting(longest), result)
    return result


def season_numbers(series: Series) -> np.ndarray:
    """Return 0..3 for DJF, MAM, JJA, SON; -1 for annual values; int8, shape (time,)."""
    if series.step == "annual":
        return np.full(len(series), -1, np.int8)
    return (series.month % 12 // 3).astype(np.int8)


def _sorting(length: int) -> tuple[np.ndarray, ...]:
    return (
        np.empty(length, np.float32),
        np.empty(length, np.uint64),
        np.empty(length, np.uint64),
        np.empty((DIGITS, BINS), np.int64),
    )
