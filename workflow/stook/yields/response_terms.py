"""The terms of a response as columns: what each coefficient is multiplied with."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise

import numpy as np
import xarray as xr

from stook.yields.response import PiecewiseLinear, Product, Quadratic, Response, Term


def term_columns(term: Term, series: Mapping[str, np.ndarray]) -> list[np.ndarray]:
    """Return the design columns of one term, one per coefficient, each shaped like an index.

    Linear: x. Quadratic: x and its square. Piecewise linear: the part of x in each segment, the
    first counted from zero, so that the line is continuous and passes through the origin:
    min(x, k1), then x clipped to k1..k2 less k1, and so on, last max(x - kn, 0). Product: x y. A
    missing index is missing in every column.

    Parameters
    ----------
    term
        The term.
    series
        Values by index, of one shape.
    """
    if isinstance(term, Product):
        one, other = (series[name] for name in term.indices)
        return [one * other]
    index = series[term.index]
    match term:
        case PiecewiseLinear(knots=knots):
            inner = [np.clip(index, low, high) - low for low, high in pairwise(knots)]
            last = np.maximum(index - knots[-1], 0.0)
            return [np.minimum(index, knots[0]), *inner, last]
        case Quadratic():
            return [index, index * index]
        case _:
            return [index]


def response_columns(response: Response, series: Mapping[str, np.ndarray]) -> list[np.ndarray]:
    """Return the design columns of all terms, in document order; see `term_columns`."""
    return [column for term in response.terms.values() for column in term_columns(term, series)]


def term_slices(response: Response) -> dict[str, slice]:
    """Return which coefficients, and design columns, belong to each term."""
    slices, start = {}, 0
    for name, term in response.terms.items():
        slices[name] = slice(start, start + len(term.coefficients))
        start += len(term.coefficients)
    return slices


def design_matrix(response: Response, indices: xr.Dataset) -> np.ndarray:
    """Return the design matrix of every pixel and year.

    Parameters
    ----------
    response
        The response; its coefficients, in document order, are the columns.
    indices
        Season indices with dimensions year, lat and lon, in any order, by the names the response
        uses.

    Returns
    -------
    ndarray
        float64, shape (pixel, year, k); pixels in row-major order of ascending latitude and
        longitude, as `DataArray.stack` of (lat, lon) gives. NaN where an index is missing.
    """
    series: dict[str, np.ndarray] = {}
    for name in response.used_indices:
        grid = indices[name].transpose("lat", "lon", "year").values
        series[name] = grid.astype(np.float64).reshape(-1, grid.shape[-1])
    return np.stack(response_columns(response, series), axis=-1)
