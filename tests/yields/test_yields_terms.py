"""Design columns of the terms, by hand."""

from __future__ import annotations

import numpy as np
from stook.yields.response import Linear, PiecewiseLinear, Quadratic
from stook.yields.response_terms import design_matrix, term_columns, term_slices
from yields_inputs import invented_indices, response

X = np.array([-2.0, 0.0, 3.0, 5.0, 6.0, 10.0, 12.0, np.nan])


def value(term: Linear | Quadratic | PiecewiseLinear) -> np.ndarray:
    return np.stack(term_columns(term, X), -1) @ np.array(term.coefficients)


def test_linear() -> None:
    term = Linear(form="linear", index="x", coefficient=2.0)
    np.testing.assert_array_equal(value(term), [-4, 0, 6, 10, 12, 20, 24, np.nan])


def test_quadratic() -> None:
    term = Quadratic(form="quadratic", index="x", coefficients=(1.0, -0.5))
    np.testing.assert_array_equal(value(term), [-4, 0, -1.5, -7.5, -12, -40, -60, np.nan])


def test_piecewise_linear_with_one_knot() -> None:
    term = PiecewiseLinear(form="piecewise-linear", index="x", knots=(5.0,), coefficients=(2, -1))
    np.testing.assert_array_equal(value(term), [-4, 0, 6, 10, 9, 5, 3, np.nan])


def test_piecewise_linear_with_two_knots() -> None:
    term = PiecewiseLinear(
        form="piecewise-linear", index="x", knots=(3.0, 6.0), coefficients=(1, 0.5, -2)
    )
    np.testing.assert_array_equal(value(term), [-2, 0, 3, 4, 4.5, -3.5, -7.5, np.nan])


def test_columns_stand_in_document_order_and_pixels_row_by_row() -> None:
    indices = invented_indices(range(2001, 2004), (2, 3))
    model = response()
    design = design_matrix(model, indices.transpose("lon", "year", "lat"))
    assert design.shape == (6, 3, 6)
    assert term_slices(model) == {"growth": slice(0, 3), "heat": slice(3, 4), "rain": slice(4, 6)}
    np.testing.assert_array_equal(design[4, :, 3], indices["heat"].values[:, 1, 1])
    np.testing.assert_array_equal(design[2, :, 5], indices["rain"].values[:, 0, 2] ** 2)
    np.testing.assert_allclose(
        design[..., :3].sum(-1),
        indices["growth"].transpose("lat", "lon", "year").values.reshape(6, 3),
    )
