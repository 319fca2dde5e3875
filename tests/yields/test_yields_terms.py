"""Design columns of the terms, by hand."""

from __future__ import annotations

import numpy as np
import pytest
from formulaic import model_matrix
from pydantic import ValidationError
from stook.yields.response import Linear, PiecewiseLinear, Product, Quadratic, Response
from stook.yields.response_terms import design_matrix, term_columns, term_slices
from yields_inputs import invented_indices, response

X = np.array([-2.0, 0.0, 3.0, 5.0, 6.0, 10.0, 12.0, np.nan])


def value(term: Linear | Quadratic | PiecewiseLinear) -> np.ndarray:
    return np.stack(term_columns(term, {"x": X}), -1) @ np.array(term.coefficients)


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


def test_product() -> None:
    term = Product(form="product", indices=("x", "y"), coefficient=2.0)
    y = np.array([1.0, 2.0, 3.0, np.nan])
    (column,) = term_columns(term, {"x": X[:4], "y": y})
    np.testing.assert_array_equal(column, [-2, 0, 9, np.nan])


def test_columns_of_a_product_are_those_of_formulaic() -> None:
    """formulaic: `a + b + a:b`, coefficients of the three terms in this order."""
    content = response().model_dump() | {
        "terms": {
            "heat": {"form": "linear", "index": "heat", "coefficient": 1.0},
            "rain": {"form": "linear", "index": "rain", "coefficient": 1.0},
            "both": {"form": "product", "indices": ["heat", "rain"], "coefficient": 1.0},
        },
        "standard_errors": [0.1, 0.1, 0.1],
    }
    model = Response.model_validate(content)
    assert model.used_indices == ["heat", "rain"]
    assert model.coefficient_names == ["heat", "rain", "both"]
    indices = invented_indices(range(2001, 2011), (1, 2))
    frame = indices[["heat", "rain"]].stack(row=("lat", "lon", "year")).to_dataframe()
    expected = model_matrix("0 + heat + rain + heat:rain", frame.reset_index(drop=True))
    found = design_matrix(model, indices).reshape(-1, 3)
    np.testing.assert_array_equal(found, expected.to_numpy())


@pytest.mark.parametrize(
    ("names", "message"),
    [
        (["heat", "heat"], "the square of heat is quadratic"),
        (["heat", "cold"], "term both uses index cold"),
        (["heat"], "indices"),
    ],
)
def test_a_product_needs_two_indices_of_the_document(names: list[str], message: str) -> None:
    term = {"form": "product", "indices": names, "coefficient": 1.0}
    content = response().model_dump() | {"terms": {"both": term}, "standard_errors": [0.1]}
    with pytest.raises(ValidationError, match=message):
        Response.model_validate(content)


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
