"""Production of regions under every draw of the response coefficients, pixel by pixel.

A draw is the same for every pixel and year: its errors are common and do not average out. No
grid of pixel x year x draw is ever held.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from scipy import sparse

from stook.yields.exponential import fused
from stook.yields.kernels import TERMS_AT_ONCE, baseline_means, centre, padded, predict

DRAWS_AT_ONCE = 128
"""Most draws worked on together; any number gives the same values."""

LANES = 8
"""Draws of a block are padded to a multiple of this, for vector instructions."""


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
        self._draws, size = coefficients.shape
        blocks = -(-self._draws // DRAWS_AT_ONCE)
        width = padded(-(-self._draws // blocks), LANES)
        filled = np.zeros((blocks * width, padded(size, TERMS_AT_ONCE)))
        filled[: self._draws, :size] = coefficients
        by_block = filled.reshape(blocks, width, -1).transpose(0, 2, 1)
        self._coefficients = np.ascontiguousarray(by_block)
        self._intercept = float(intercept)
        self._log_link = bool(log_link)
        self._baseline = np.ascontiguousarray(baseline, dtype=np.bool_)
        self._sums = np.zeros((regions, blocks, len(baseline), width))

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
        regions, blocks, years, width = self._sums.shape
        by_draw = self._sums.transpose(1, 3, 0, 2).reshape(blocks * width, regions, years)
        return by_draw[: self._draws]


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
    """Add the production of pixels to `sums` (region, block, year, draw), pixels in order.

    `starts`, `regions` and `areas` list the regions of each pixel, as in a CSR matrix.
    `coefficients` has shape (block, k, draw), k padded.
    """
    pixels, years, _ = design.shape
    blocks, columns, draws = coefficients.shape
    response = np.empty((years, draws))
    mean = np.empty(draws)
    terms = np.zeros((years, columns))
    for pixel in range(pixels):
        if starts[pixel] == starts[pixel + 1]:
            continue
        centre(design[pixel], valid[pixel], baseline, log_link, terms)
        for block in range(blocks):
            predict(terms, coefficients[block], intercept, log_link, response)
            baseline_means(response, valid[pixel], baseline, mean)
            for entry in range(starts[pixel], starts[pixel + 1]):
                weight = areas[entry] * baseline_yield[pixel]
                total = sums[regions[entry], block]
                _add_one(response, weight / mean, valid[pixel], log_link, total)


@njit(cache=True, nogil=True)
def _add_one(
    response: np.ndarray,
    scale: np.ndarray,
    valid: np.ndarray,
    log_link: bool,
    total: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Add ``scale * response`` of one pixel to `total` (year, draw)."""
    years, draws = total.shape
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
