"""The weather of pixels without its trends, and the series that carries the impact of the trends.

All arrays are (year, pixel); a pixel depends on nothing but its own series.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from stook.season.definition import IndexDefinition, Mean
from stook.trend import kernels
from stook.trend.impact_kernels import logarithmic_mean
from stook.trend.series import TrendOptions, same_years
from stook.yields.response import Product, Ranges, Response, Term
from stook.yields.response_terms import response_columns, term_columns, term_slices


@dataclass(frozen=True)
class Weather:
    """Season indices of s pixels over n years, as they were and without their trends.

    Attributes
    ----------
    years
        int64, shape (n,).
    actual, detrended
        float64, shape (n, s), by index; NaN in a year in which any index is missing, and in all
        years of a pixel with too few.
    slopes
        float64, shape (s,), by index, unit of the index per year.
    groups
        Pixels with the same years: row mask and columns.
    """

    years: np.ndarray
    actual: dict[str, np.ndarray]
    detrended: dict[str, np.ndarray]
    slopes: dict[str, np.ndarray]
    groups: list[tuple[np.ndarray, np.ndarray]]

    @property
    def enough(self) -> np.ndarray:
        """Return which pixels have enough years, bool (s,)."""
        result = np.zeros(next(iter(self.slopes.values())).shape, dtype=bool)
        for _, columns in self.groups:
            result[columns] = True
        return result

    @property
    def valid(self) -> np.ndarray:
        """Return which years of which pixels are there, bool (n, s)."""
        return np.isfinite(next(iter(self.actual.values())))

    def trends(self, values: np.ndarray) -> np.ndarray:
        """Return least-squares slopes over the years of each pixel, ``(n, s) -> (s)``, per year."""
        result = np.full(values.shape[1], np.nan)
        for rows, columns in self.groups:
            positions = self.years[rows].astype(np.float64)
            result[columns], _ = kernels.linear_fit(values[np.ix_(rows, columns)], positions)
        return result


def lowest_value(definition: IndexDefinition) -> float:
    """Return the lowest value an index can have: none for a temperature, 0 for all others."""
    if isinstance(definition, Mean) and definition.variable in ("tas", "tasmin", "tasmax"):
        return -np.inf
    return 0.0


def detrend(
    series: Mapping[str, np.ndarray],
    years: np.ndarray,
    first_year: int,
    lowest: Mapping[str, float],
    options: TrendOptions,
) -> Weather:
    """Take the least-squares trend out of every index of every pixel.

    The level of the first year is kept: ``x - slope (year - first_year)``, held at the lowest
    value the index can have.

    Parameters
    ----------
    series
        float64, shape (n, s), by index; NaN is missing.
    years
        int, shape (n,), increasing.
    first_year
        Year whose fitted level is kept: the first of the period.
    lowest
        Lowest value by index, see `lowest_value`.
    options
        A pixel needs as many years as a trend does (`stook.trend.series.series_trends`).
    """
    there = np.logical_and.reduce([np.isfinite(values) for values in series.values()])
    marks = np.where(there, 0.0, np.nan)
    groups = [(rows, columns) for rows, columns, _ in same_years(marks, years, options)]
    enough = np.zeros(marks.shape, dtype=bool)
    for rows, columns in groups:
        enough[np.ix_(rows, columns)] = True
    actual = {name: np.where(enough, values, np.nan) for name, values in series.items()}
    weather = Weather(np.asarray(years, dtype=np.int64), actual, {}, {}, groups)
    passed = (weather.years - first_year).astype(np.float64)[:, None]
    for name, values in actual.items():
        weather.slopes[name] = weather.trends(values)
        level = values - passed * weather.slopes[name]
        weather.detrended[name] = np.maximum(level, lowest[name])
    return weather


def index_changes(
    term: Term,
    actual: Mapping[str, np.ndarray],
    detrended: Mapping[str, np.ndarray],
    held: Ranges | None,
) -> dict[str, list[np.ndarray]]:
    """Return what each index of a term does to its design columns, actual less detrended.

    That of a product is split between its two indices: each changes alone, with the other as it
    was and without its trend, and the mean of both counts (Shapley 1953, as in Shorrocks 2013, J.
    Econ. Inequal. 11, 99-126). The parts add up to the change of the column.
    """
    if not isinstance(term, Product):
        pair = (term_columns(term, side, held) for side in (actual, detrended))
        return {term.index: [one - other for one, other in zip(*pair, strict=True)]}
    parts = {}
    for own, other in (term.indices, term.indices[::-1]):
        changed = []
        for side in (actual, detrended):
            after = term_columns(term, {own: actual[own], other: side[other]}, held)
            before = term_columns(term, {own: detrended[own], other: side[other]}, held)
            changed.append(after[0] - before[0])
        parts[own] = [0.5 * (changed[0] + changed[1])]
    return parts


def impact_series(response: Response, coefficients: np.ndarray, weather: Weather) -> np.ndarray:
    """Return the series whose trend is the impact of the weather's trends; (n, s), log yield.

    The sum over the indices of sensitivity times index. The sensitivity of a pixel to an index is
    the trend of the difference that its terms make to log yield, between actual and detrended
    weather (`index_changes`), over the trend of the index. The least-squares slope of the sum is
    thus the slope of the log ratio of the two yields. Under a level link a yield may be zero; the
    difference of such a year is counted relative to the mean yield. A pixel with too few years is
    NaN.

    Parameters
    ----------
    response
        Of the crop and system.
    coefficients
        float64, shape (k,).
    weather
        The pixels.
    """
    shape = weather.valid.shape
    sides = (weather.actual, weather.detrended)
    scale = np.ones(shape)
    if response.link == "level":
        levels = [np.full(shape, response.intercept), np.full(shape, response.intercept)]
        for level, side in zip(levels, sides, strict=True):
            for coefficient, column in zip(
                coefficients, response_columns(response, side), strict=True
            ):
                level += coefficient * column
        scale = logarithmic_mean(*levels)
        usual = mean_of_years(np.maximum(levels[1], 0.0))
        scale = np.where(np.isnan(scale), np.where(usual > 0, usual, 1.0), scale)
    changes = {name: np.zeros(slopes.shape) for name, slopes in weather.slopes.items()}
    slices = term_slices(response)
    for name, term in response.terms.items():
        own = coefficients[slices[name]]
        for index, columns in index_changes(term, *sides, response.held).items():
            for coefficient, column in zip(own, columns, strict=True):
                changes[index] += coefficient * weather.trends(column / scale)
    result = np.zeros(shape)
    for name, change in changes.items():
        slopes = weather.slopes[name]
        sensitivity = np.where(slopes != 0, change / np.where(slopes != 0, slopes, 1.0), 0.0)
        result += sensitivity * weather.actual[name]
    return np.where(weather.valid, result, np.nan)


def mean_of_years(values: np.ndarray) -> np.ndarray:
    """Return the mean of the years there are, added in order; ``(n, s) -> (s)``, NaN for none."""
    total = np.zeros(values.shape[1])
    count = np.zeros(values.shape[1])
    for year in values:
        there = np.isfinite(year)
        total += np.where(there, year, 0.0)
        count += there
    return np.where(count > 0, total / np.maximum(count, 1.0), np.nan)
