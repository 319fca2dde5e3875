"""Array kernels of the yields stage: the predictor, its baseline mean, the yield ratio."""

from __future__ import annotations

import numpy as np
from numba import njit

from stook.grids.missing import Reason
from stook.yields.exponential import exponential, fused

TERMS_AT_ONCE = 4
"""Terms added in one go; the design is padded with zeros to a multiple."""

_VALID = int(Reason.VALID)
_TOO_FEW = int(Reason.TOO_FEW_VALUES)
_NOT_POSITIVE = int(Reason.BASELINE_NOT_POSITIVE)


def padded(size: int, multiple: int) -> int:
    """Return the least multiple that is not below a size."""
    return -(-size // multiple) * multiple


@njit(cache=True, nogil=True)
def yield_ratios(
    design: np.ndarray,
    valid: np.ndarray,
    baseline: np.ndarray,
    coefficients: np.ndarray,
    intercept: float,
    log_link: bool,
    fewest: int,
) -> tuple[np.ndarray, np.ndarray]:  # pragma: no cover - compiled
    """Return the yield of every pixel and year as a ratio of its baseline mean.

    Parameters
    ----------
    design
        float64, shape (pixel, year, k), k not padded.
    valid
        bool, shape (pixel, year): years in which every index has a value.
    baseline
        bool, shape (year,).
    coefficients
        float64, shape (k, 1), padded to a multiple of `TERMS_AT_ONCE`.
    intercept
        Constant of the predictor.
    log_link
        True for ``exp(h) / mean exp(h)``, False for ``max(h, 0) / mean h``.
    fewest
        Baseline years that need a value.

    Returns
    -------
    ratio
        float64, shape (pixel, year); NaN where missing.
    reason
        int8, shape (pixel,): valid, too few values, or baseline not positive.
    """
    pixels, years, _ = design.shape
    ratio = np.full((pixels, years), np.nan)
    reason = np.full(pixels, _VALID, np.int8)
    response, mean = np.empty((years, 1)), np.empty(1)
    terms = np.zeros((years, coefficients.shape[0]))
    for pixel in range(pixels):
        count = 0
        for year in range(years):
            count += baseline[year] & valid[pixel, year]
        if count < fewest:
            reason[pixel] = _TOO_FEW
            continue
        centre(design[pixel], valid[pixel], baseline, log_link, terms)
        predict(terms, coefficients, intercept, log_link, response)
        baseline_means(response, valid[pixel], baseline, mean)
        if np.isnan(mean[0]):
            reason[pixel] = _NOT_POSITIVE
            continue
        for year in range(years):
            if valid[pixel, year]:
                ratio[pixel, year] = max(response[year, 0], 0.0) / mean[0]
    return ratio, reason


@njit(cache=True, nogil=True)
def term_effects(
    design: np.ndarray,
    valid: np.ndarray,
    baseline: np.ndarray,
    coefficients: np.ndarray,
    starts: np.ndarray,
) -> np.ndarray:  # pragma: no cover - compiled
    """Return each term of the predictor less its baseline mean.

    Parameters
    ----------
    design, valid, baseline
        As in `yield_ratios`.
    coefficients
        float64, shape (k,).
    starts
        int64, shape (term + 1,): first design column of each term, and the end of the last.

    Returns
    -------
    ndarray
        float64, shape (term, pixel, year); NaN where missing.
    """
    pixels, years, size = design.shape
    count = starts.size - 1
    effects = np.full((count, pixels, years), np.nan)
    terms = np.empty((years, size))
    for pixel in range(pixels):
        centre(design[pixel], valid[pixel], baseline, True, terms)
        for term in range(count):
            for year in range(years):
                if valid[pixel, year]:
                    total = 0.0
                    for column in range(starts[term], starts[term + 1]):
                        total = fused(coefficients[column], terms[year, column], total)
                    effects[term, pixel, year] = total
    return effects


@njit(cache=True, nogil=True)
def centre(
    design: np.ndarray, valid: np.ndarray, baseline: np.ndarray, log_link: bool, terms: np.ndarray
) -> None:  # pragma: no cover - compiled
    """Fill `terms` (year, padded k) with the design of one pixel (year, k).

    Under a log link the baseline mean of every column is taken out: a constant cancels there, and
    the exponential stays near one.
    """
    years, size = design.shape
    for column in range(size):
        middle = 0.0
        if log_link:
            total, count = 0.0, 0
            for year in range(years):
                if baseline[year] and valid[year]:
                    total += design[year, column]
                    count += 1
            middle = total / count if count else np.nan
        for year in range(years):
            terms[year, column] = design[year, column] - middle


@njit(cache=True, nogil=True)
def predict(
    terms: np.ndarray,
    coefficients: np.ndarray,
    intercept: float,
    log_link: bool,
    response: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Fill `response` (year, draw) with exp(h) or h.

    `terms` (year, k) and `coefficients` (k, draw) are padded with zeros to a multiple of
    `TERMS_AT_ONCE`; the terms are added one after the other.
    """
    size, draws = coefficients.shape
    last = size - TERMS_AT_ONCE
    for year in range(terms.shape[0]):
        response[year, :] = 0.0 if log_link else intercept
        for k in range(0, last + 1, TERMS_AT_ONCE):
            x0, x1 = terms[year, k], terms[year, k + 1]
            x2, x3 = terms[year, k + 2], terms[year, k + 3]
            if log_link and k == last:
                for draw in range(draws):
                    h = fused(coefficients[k, draw], x0, response[year, draw])
                    h = fused(coefficients[k + 1, draw], x1, h)
                    h = fused(coefficients[k + 2, draw], x2, h)
                    h = fused(coefficients[k + 3, draw], x3, h)
                    response[year, draw] = exponential(h)
            else:
                for draw in range(draws):
                    h = fused(coefficients[k, draw], x0, response[year, draw])
                    h = fused(coefficients[k + 1, draw], x1, h)
                    h = fused(coefficients[k + 2, draw], x2, h)
                    h = fused(coefficients[k + 3, draw], x3, h)
                    response[year, draw] = h


@njit(cache=True, nogil=True)
def baseline_means(
    response: np.ndarray, valid: np.ndarray, baseline: np.ndarray, mean: np.ndarray
) -> None:  # pragma: no cover - compiled
    """Fill `mean` (draw) with the mean over valid baseline years; NaN unless positive."""
    draws = mean.size
    mean[:] = 0.0
    count = 0
    for year in range(valid.size):
        if baseline[year] and valid[year]:
            count += 1
            for draw in range(draws):
                mean[draw] += response[year, draw]
    for draw in range(draws):
        mean[draw] = mean[draw] / count if count and mean[draw] > 0.0 else np.nan
