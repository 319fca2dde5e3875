"""The observed impact written for reading: one pixel or one region, plain loops.

Shares no code with the kernels. The p-value is that of the series returned, by
`stook.audit.plain.trend.trend_of_series`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from stook.audit.plain.yields import term_value
from stook.yields.response import Response


@dataclass(frozen=True)
class PlainPixel:
    """One pixel: yields of all years of a period, t/ha, and the series that is tested."""

    actual: np.ndarray
    detrended: np.ndarray
    series: np.ndarray


def pixel_impact(
    response: Response,
    coefficients: np.ndarray,
    indices: dict[str, np.ndarray],
    years: np.ndarray,
    baseline: tuple[int, int],
    period: tuple[int, int],
    baseline_yield: float,
) -> PlainPixel:
    """Return the yields of one pixel under observed and under detrended weather.

    Parameters
    ----------
    response
        Of the crop and system.
    coefficients
        shape (k,), one draw.
    indices
        Series of all years by index; NaN is missing.
    years
        int, shape (n,).
    baseline, period
        First and last year.
    baseline_yield
        t/ha.
    """
    used = {name for term in response.terms.values() for name in term.used}
    there = np.array(
        [all(np.isfinite(indices[name][t]) for name in used) for t in range(len(years))]
    )
    inside = (years >= period[0]) & (years <= period[1])
    fitted = inside & there
    detrended, slopes = {}, {}
    for name in used:
        slopes[name] = np.polyfit(years[fitted] - years[0], indices[name][fitted], 1)[0]
        level = indices[name] - slopes[name] * (years - period[0])
        detrended[name] = level if _may_be_negative(response, name) else np.clip(level, 0, None)
    h_actual = [_predictor(response, coefficients, indices, t) for t in range(len(years))]
    h_detrended = [_predictor(response, coefficients, detrended, t) for t in range(len(years))]
    if response.link == "log":
        both = np.exp(h_actual), np.exp(h_detrended)
    else:
        both = np.array(h_actual), np.array(h_detrended)
    base = there & (years >= baseline[0]) & (years <= baseline[1])
    mean = np.mean(both[0][base])
    actual, other = (baseline_yield * np.clip(values, 0, None) / mean for values in both)
    series = np.zeros(len(years))
    for name in used:
        # What this index does to log yield, trend over trend.
        effect = np.zeros(len(years))
        for t in np.flatnonzero(fitted).tolist():
            effect[t] = _of_index(response, coefficients, indices, detrended, name, t)
            if response.link == "level":
                one, two = both[0][t], both[1][t]
                effect[t] /= one if one == two else (one - two) / np.log(one / two)
        trend = np.polyfit(years[fitted] - years[0], effect[fitted], 1)[0]
        series += (trend / slopes[name] if slopes[name] != 0 else 0.0) * indices[name]
    series[~there] = np.nan
    return PlainPixel(actual[inside], other[inside], series[inside])


def impact_of(
    actual: np.ndarray, detrended: np.ndarray, years: np.ndarray, period: tuple[int, int]
) -> float:
    """Return the impact over the period, per cent, from yields or production of its years."""
    there = np.isfinite(actual) & np.isfinite(detrended)
    ratio = np.log(actual[there] / detrended[there])
    slope = np.polyfit(years[there] - years[0], ratio, 1)[0]
    return float(100 * (np.exp(slope * (period[1] - period[0])) - 1))


def _may_be_negative(response: Response, name: str) -> bool:
    """Only a mean temperature may be."""
    definition = response.indices[name]
    return definition.measure == "mean" and definition.variable in ("tas", "tasmin", "tasmax")


def _predictor(
    response: Response, coefficients: np.ndarray, indices: dict[str, np.ndarray], t: int
) -> float:
    total, place = response.intercept, 0
    for term in response.terms.values():
        own = coefficients[place : place + len(term.coefficients)].tolist()
        place += len(term.coefficients)
        total += term_value(response, term, own, [indices[name][t] for name in term.used])
    return total


def _of_index(
    response: Response,
    coefficients: np.ndarray,
    actual: dict[str, np.ndarray],
    detrended: dict[str, np.ndarray],
    name: str,
    t: int,
) -> float:
    """Add up what one index alone changes in the terms that use it."""
    total, place = 0.0, 0
    for term in response.terms.values():
        own = coefficients[place : place + len(term.coefficients)].tolist()
        place += len(term.coefficients)
        if name not in term.used:
            continue
        changes = []
        for other in (actual, detrended):  # the other index of a product, either way
            one, two = (
                [(side if index == name else other)[index][t] for index in term.used]
                for side in (actual, detrended)
            )
            changes.append(
                term_value(response, term, own, one) - term_value(response, term, own, two)
            )
        total += sum(changes) / 2
    return total
