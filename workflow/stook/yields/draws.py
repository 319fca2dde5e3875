"""Production of regions under every draw of the response coefficients, pixel by pixel.

A draw is the same for every pixel and year: its errors are common and do not average out. No
grid of pixel x year x draw is ever held.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from scipy import sparse

from stook.yields.exponential import exponential, fused

DRAWS_AT_ONCE = 32
"""Draws worked on together; any number gives the same values."""


class DrawTotals:
    """Production by draw, region and year, summed over pixels in the order they are added.

    The sums are the same bits however the pixels are cut into blocks, and whichever other regions
    are asked for.

    Parameters
    ----------
    coefficients
        float64, shape (draw, k): a row per draw.
    intercept
        Constant of the predictor, t/ha; it cancels under a log link.
    log_link
        True for a log link, False for a level link.
    baseline
        bool, shape (year,): years of the baseline.
    regions
        Number of regions.
    """

    def __init__(
        self,
        coefficients: np.ndarray,
        intercept: float,
        log_link: bool,
        baseline: np.ndarray,
        regions: int,
    ) -> None:
        self._coefficients = np.ascontiguousarray(coefficients.T, dtype=np.float64)
        self._intercept = float(intercept)
        self._log_link = bool(log_link)
        self._baseline = np.ascontiguousarray(baseline, dtype=np.bool_)
        self._sums = np.zeros((regions, len(baseline), coefficients.shape[0]))

    def add(
        self,
        design: np.ndarray,
        valid: np.ndarray,
        baseline_yield: np.ndarray,
        weights: np.ndarray | sparse.sparray,
    ) -> None:
        """Add the production of a block of pixels.

        Parameters
        ----------
        design
            float64, shape (pixel, year, k), from `stook.yields.response_terms.design_matrix`.
        valid
            bool, shape (pixel, year): False where a year has no value. A region that such a pixel
            counts in has no production in that year.
        baseline_yield
            float64, shape (pixel,), t/ha.
        weights
            Harvested area of the pixel inside each region, ha, shape (region, pixel), dense or
            sparse. A pixel that is to be left out has zero everywhere.
        """
        by_pixel = sparse.csr_array(sparse.coo_array(weights).T)
        by_pixel.eliminate_zeros()
        by_pixel.sort_indices()
        _add_draws(
            np.ascontiguousarray(design, dtype=np.float64),
            np.ascontiguousarray(valid, dtype=np.bool_),
            np.ascontiguousarray(baseline_yield, dtype=np.float64),
            by_pixel.indptr.astype(np.int64),
            by_pixel.indices.astype(np.int64),
            by_pixel.data.astype(np.float64),
            self._coefficients,
            self._intercept,
            self._log_link,
            self._baseline,
            self._sums,
        )

    @property
    def production(self) -> np.ndarray:
        """Production so far, t, float64, shape (draw, region, year)."""
        return np.moveaxis(self._sums, 2, 0)


def draw_totals(
    design: np.ndarray,
    valid: np.ndarray,
    coefficients: np.ndarray,
    intercept: float,
    log_link: bool,
    baseline: np.ndarray,
    baseline_yield: np.ndarray,
    weights: np.ndarray | sparse.sparray,
) -> np.ndarray:
    """Return the production of every draw, region and year, t; see `DrawTotals` for the rest.

    The yield of a pixel and year is the baseline yield times ``exp(h) / mean exp(h)`` (log link)
    or ``max(h, 0) / mean h`` (level link), the mean over the valid baseline years of the same
    pixel and draw. Where that mean is not positive, or no baseline year is valid, the regions the
    pixel counts in have no production under that draw.

    Returns
    -------
    ndarray
        float64, shape (draw, region, year).
    """
    totals = DrawTotals(coefficients, intercept, log_link, baseline, weights.shape[0])
    totals.add(design, valid, baseline_yield, weights)
    return totals.production


@njit(cache=True, nogil=True)
def _add_draws(
    design: np.ndarray,
    valid: np.ndarray,
    baseline_yield: np.ndarray,
    starts: np.ndarray,
    regions: np.ndarray,
    areas: np.ndarray,
    coefficients: np.ndarray,
    intercept: float,
    log_link: bool,
    baseline: np.ndarray,
    sums: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Add the production of pixels to `sums` (region, year, draw), pixels in order.

    `starts`, `regions` and `areas` list the regions of each pixel, as in a CSR matrix.
    `coefficients` has shape (k, draw).
    """
    pixels, years, _ = design.shape
    draws = coefficients.shape[1]
    response = np.empty((years, DRAWS_AT_ONCE))
    mean = np.empty(DRAWS_AT_ONCE)
    for pixel in range(pixels):
        if starts[pixel] == starts[pixel + 1]:
            continue
        terms = centred(design[pixel], valid[pixel], baseline, log_link)
        for first in range(0, draws, DRAWS_AT_ONCE):
            here = coefficients[:, first : first + DRAWS_AT_ONCE]
            predict(terms, here, intercept, log_link, response)
            baseline_means(response, valid[pixel], baseline, here.shape[1], mean)
            for entry in range(starts[pixel], starts[pixel + 1]):
                weight = areas[entry] * baseline_yield[pixel]
                total = sums[regions[entry], :, first : first + DRAWS_AT_ONCE]
                _add_one(response, mean, weight, valid[pixel], log_link, total)


@njit(cache=True, nogil=True)
def centred(
    design: np.ndarray, valid: np.ndarray, baseline: np.ndarray, log_link: bool
) -> np.ndarray:  # pragma: no cover - compiled
    """Return the design of one pixel, (year, k); under a log link less its baseline mean.

    A constant cancels under a log link; taking it out keeps the exponential near one.
    """
    years, size = design.shape
    result = design.copy()
    if not log_link:
        return result
    for column in range(size):
        total, count = 0.0, 0
        for year in range(years):
            if baseline[year] and valid[year]:
                total += design[year, column]
                count += 1
        middle = total / count if count else np.nan
        for year in range(years):
            result[year, column] -= middle
    return result


@njit(cache=True, nogil=True)
def predict(
    terms: np.ndarray,
    coefficients: np.ndarray,
    intercept: float,
    log_link: bool,
    response: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Fill `response` (year, draw) with exp(h) or h; terms (year, k), coefficients (k, draw)."""
    size, draws = coefficients.shape
    for year in range(terms.shape[0]):
        for draw in range(draws):
            response[year, draw] = 0.0 if log_link else intercept
        for column in range(size):
            value = terms[year, column]
            for draw in range(draws):
                response[year, draw] = fused(
                    coefficients[column, draw], value, response[year, draw]
                )
        if log_link:
            for draw in range(draws):
                response[year, draw] = exponential(response[year, draw])


@njit(cache=True, nogil=True)
def baseline_means(
    response: np.ndarray, valid: np.ndarray, baseline: np.ndarray, draws: int, mean: np.ndarray
) -> None:  # pragma: no cover - compiled
    """Fill `mean` (draw) with the mean over valid baseline years; NaN unless positive."""
    mean[:] = 0.0
    count = 0
    for year in range(valid.size):
        if baseline[year] and valid[year]:
            count += 1
            for draw in range(draws):
                mean[draw] += response[year, draw]
    for draw in range(draws):
        mean[draw] = mean[draw] / count if count and mean[draw] > 0.0 else np.nan


@njit(cache=True, nogil=True)
def _add_one(
    response: np.ndarray,
    mean: np.ndarray,
    weight: float,
    valid: np.ndarray,
    log_link: bool,
    total: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Add ``weight * response / mean`` of one pixel to `total` (year, draw)."""
    years, draws = total.shape
    scale = np.empty(draws)
    for draw in range(draws):
        scale[draw] = weight / mean[draw]
    for year in range(years):
        if not valid[year]:
            total[year, :] = np.nan
        elif log_link:
            for draw in range(draws):
                total[year, draw] = fused(scale[draw], response[year, draw], total[year, draw])
        else:
            for draw in range(draws):
                positive = max(response[year, draw], 0.0)
                total[year, draw] = fused(scale[draw], positive, total[year, draw])
