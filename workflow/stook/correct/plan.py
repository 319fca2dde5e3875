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
    wrap = np.arange(2 * days.count, dtype=np.int32) % days.count
    return Calibration(days.first, days.number, wrap, days.count, int(days.sizes().max(initial=0)))


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
    stride = 2 * days.count + LANES
    columns = (years.own, years.first, years.number, days.own, days.first, days.number)
    cells, cell = np.unique(np.stack(columns, axis=1), axis=0, return_inverse=True)
    own_year, first_year, rows, own_day, first_day, number = cells.T.astype(np.int32)
    most = int(number.max(initial=1))
    lanes = -(-most // LANES) * LANES
    return Application(
        cell.astype(np.int32).ravel(),
        own_year * days.count + own_day,
        own_day.copy(),
        own_year * stride + own_day,
        first_year * stride + first_day,
        number.copy(),
        rows.copy(),
        (np.arange(lanes)[None, :] < np.arange(most + 1)[:, None]).astype(np.int32),
        days.count,
        years.count,
        stride,
    )
