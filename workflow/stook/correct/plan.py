"""From time axes and choices to the tables the kernels work with."""

from __future__ import annotations

import numpy as np
import xarray as xr

from stook.assessment.schema import VariableCorrection
from stook.correct.kernels_pixels import METHODS, Rule
from stook.correct.kernels_windows import LANES, Application, Calibration
from stook.correct.windows import Series, TimeStep, day_windows, minimum_count, year_windows
from stook.grids.calendars import step_number, year_fraction, years_of


def series_of(time: xr.DataArray, step: TimeStep) -> Series:
    """Return the time axis of a series as numbers, from cftime dates of shape (time,)."""
    dates = time.values
    return Series(
        years_of(dates),
        np.array([date.month for date in dates], dtype=np.int64),
        year_fraction(dates, dates[0].calendar),
        step_number(dates, step),
        step,
    )


def rule_of(choice: VariableCorrection, ratio: bool, trace: float, step: TimeStep) -> Rule:
    """Return how the kernels map, from the choices of the assessment file."""
    return Rule(
        METHODS[choice.method],
        ratio,
        choice.ratio_cap,
        trace,
        minimum_count(choice.minimum_values, step),
        0 if choice.nodes == "all" else choice.nodes,
    )


def calibration_plan(series: Series, choice: VariableCorrection) -> Calibration:
    """Return the windows of a calibration series."""
    days = day_windows(series, choice.window_days, choice.step_days)
    return Calibration(days.first, days.number, days.count, int(days.sizes().max(initial=0)))


def application_plan(series: Series, choice: VariableCorrection, anchor: int) -> Application:
    """Return the windows of a series to correct.

    Parameters
    ----------
    series
        Its time axis.
    choice
        The windows of days and, for quantile-delta, of years.
    anchor
        A year in which a block of years starts.
    """
    days = day_windows(series, choice.window_days, choice.step_days)
    years = year_windows(series, anchor, choice.cdf_years, choice.cdf_step_years)
    spans, block = np.unique(
        np.stack([years.first, years.number], axis=1), axis=0, return_inverse=True
    )
    starts, blocks = _blocks_of_windows(spans, years.count)
    columns = (days.own, days.first, days.number, years.own, block.ravel())
    kinds, cell = np.unique(np.stack(columns, axis=1), axis=0, return_inverse=True)
    own, first, number, own_years, row = kinds.T
    most = int(number.max(initial=1))
    lanes = -(-most // LANES) * LANES
    stride = days.count + 2 * lanes
    cells = np.zeros((len(kinds), 8), dtype=np.int32)
    cells[:, 0] = own_years * days.count + own
    cells[:, 1] = own
    cells[:, 2] = row * stride + lanes + first
    cells[:, 3] = number
    cells[:, 4] = starts[own_years] * stride + lanes + own
    cells[:, 5] = first + number > days.count
    cells[:, 6] = blocks[own_years]
    return Application(
        cell.astype(np.int32).ravel(),
        cells,
        blocks,
        starts,
        days.count,
        years.count,
        len(spans),
        stride,
        lanes,
    )


def _blocks_of_windows(spans: np.ndarray, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Return first block and number of blocks of every window of years, int32, shape (count,).

    `spans` holds, by block in order of time, its first window and its number of windows.
    """
    windows = np.arange(count)[:, None]
    inside = (spans[None, :, 0] <= windows) & (windows < spans[None, :, 0] + spans[None, :, 1])
    return inside.argmax(axis=1).astype(np.int32), inside.sum(axis=1).astype(np.int32)
