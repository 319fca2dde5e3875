"""The terms of a response as columns: what each coefficient is multiplied with."""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Mapping, Sequence
from itertools import pairwise

import numpy as np
import xarray as xr

from stook.yields.response import (
    Linear,
    PiecewiseLinear,
    Product,
    Quadratic,
    Ranges,
    Response,
    Term,
)


def term_columns(
    term: Term, series: Mapping[str, np.ndarray], held: Ranges | None = None
) -> list[np.ndarray]:
    """Return the design columns of one term, one per coefficient, each shaped like an index.

    Linear: x. Quadratic: x and its square. Piecewise linear: the part of x in each segment, the
    first counted from zero, so that the line is continuous and passes through the origin:
    min(x, k1), then x clipped to k1..k2 less k1, and so on, last max(x - kn, 0). Product: x y. A
    missing index is missing in every column.

    With `held` ranges, a column beyond them is its tangent (of a product: tangent plane) at the
    nearest point of the range, so that the marginal effect of the index stays what it is there.
    Inside the range not a bit changes.

    Parameters
    ----------
    term
        The term.
    series
        Values by index, of one shape.
    held
        Ranges by index, or None.
    """
    if isinstance(term, Product):
        return [_product(term, series, held)]
    index = series[term.index]
    if held and not isinstance(term, Linear):
        return _held(term, index, *held[term.index])
    match term:
        case PiecewiseLinear(knots=knots):
            return _segments(index, knots)
        case Quadratic():
            return [index, index * index]
        case _:
            return [index]


def _held(
    term: Quadratic | PiecewiseLinear, index: np.ndarray, low: float, high: float
) -> list[np.ndarray]:
    edge = np.clip(index, low, high)
    if isinstance(term, Quadratic):
        tangent = edge * (2.0 * index - edge)
        return [index, np.where(index == edge, index * index, tangent)]
    columns, beyond = _segments(edge, term.knots), index - edge
    # An edge on a knot has the slope of the segment inside the range.
    first, last = bisect_right(term.knots, low), bisect_left(term.knots, high)
    columns[first] = columns[first] + np.minimum(beyond, 0.0)
    columns[last] = columns[last] + np.maximum(beyond, 0.0)
    return columns


def _segments(index: np.ndarray, knots: Sequence[float]) -> list[np.ndarray]:
    inner = [np.clip(index, low, high) - low for low, high in pairwise(knots)]
    return [np.minimum(index, knots[0]), *inner, np.maximum(index - knots[-1], 0.0)]


def _product(term: Product, series: Mapping[str, np.ndarray], held: Ranges | None) -> np.ndarray:
    one, other = (series[name] for name in term.indices)
    whole: np.ndarray = one * other
    if not held:
        return whole
    first, second = (np.clip(series[name], *held[name]) for name in term.indices)
    inside = (one == first) & (other == second)
    plane = first * second + (one - first) * second + first * (other - second)
    return np.where(inside, whole, plane)


def response_columns(response: Response, series: Mapping[str, np.ndarray]) -> list[np.ndarray]:
    """Return the design columns of all terms, in document order; see `term_columns`."""
    return [
        column
        for term in response.terms.values()
        for column in term_columns(term, series, response.held)
    ]


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
