"""Design columns of the terms, by hand."""

from __future__ import annotations

import numpy as np
import pytest
from formulaic import model_matrix
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError
from scipy.optimize import approx_fprime
from stook.yields.response import Linear, PiecewiseLinear, Product, Quadratic, Response
from stook.yields.response_terms import design_matrix, response_columns, term_columns, term_slices
from yields_inputs import invented_indices, response, with_product

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


RANGES = {"x": (2.0, 8.0), "y": (1.0, 3.0)}


def test_held_quadratic_goes_on_along_its_tangent() -> None:
    """x - x**2 / 2 has the slope 1 - x: -1 at 2, -7 at 8."""
    term = Quadratic(form="quadratic", index="x", coefficients=(1.0, -0.5))
    columns = term_columns(term, {"x": np.array([-1.0, 2, 5, 8, 10, np.nan])}, RANGES)
    found = columns[0] - 0.5 * columns[1]
    np.testing.assert_allclose(found, [3.0, 0, -7.5, -24, -38, np.nan], rtol=1e-15)


@pytest.mark.parametrize(
    ("knots", "slopes", "expected"),
    [
        ((5.0,), (2.0, -1.0), [-2, 4, 10, 7, 5]),  # one inside: both slopes go on
        ((2.0, 8.0), (9.0, 1.0, 5.0), [15, 18, 21, 24, 26]),  # on the edges: the slope inside
        ((0.0, 9.0), (9.0, 1.0, 5.0), [-1, 2, 5, 8, 10]),  # beyond the range: not reached
        ((-3.0, 1.0, 4.0), (9.0, 5.0, 2.0, 1.0), [-11, -5, 0, 3, 5]),
    ],
)
def test_held_piecewise_linear(knots, slopes, expected) -> None:
    """At -1, 2, 5, 8 and 10, range 2 to 8."""
    term = PiecewiseLinear(form="piecewise-linear", index="x", knots=knots, coefficients=slopes)
    columns = term_columns(term, {"x": np.array([-1.0, 2, 5, 8, 10])}, RANGES)
    np.testing.assert_allclose(np.stack(columns, -1) @ np.array(slopes), expected, rtol=1e-15)


def test_held_product_goes_on_along_its_tangent_plane() -> None:
    term = Product(form="product", indices=("x", "y"), coefficient=1.0)
    x, y = np.array([4.0, 10, 10, 1, 4]), np.array([2.0, 2, 5, 0, 0])
    (column,) = term_columns(term, {"x": x, "y": y}, RANGES)
    # Both beyond: 8 * 3 + 2 * 3 + 8 * 2 = 46; 2 * 1 - 1 * 1 - 2 * 1 = -1; else x y.
    np.testing.assert_allclose(column, [8, 20, 46, -1, 0], rtol=1e-15)


@pytest.mark.parametrize("edge", ["low", "high"])
def test_held_effects_are_continuous_and_as_steep_as_at_the_edge(edge: str) -> None:
    """scipy: the slope just inside the range by approx_fprime."""
    model = with_product(extrapolation="hold")
    side = 0 if edge == "low" else 1
    sign = 2 * side - 1
    middle = {name: sum(model.estimation_range[name]) / 2 for name in model.indices}

    def h(values: np.ndarray) -> float:
        series = {n: np.array([v]) for n, v in zip(middle, values, strict=True)}
        columns = np.stack(response_columns(model, series), -1)
        return float((columns @ model.coefficient_vector)[0])

    for place, name in enumerate(middle):
        at = np.array(list(middle.values()))
        at[place] = model.estimation_range[name][side]
        out = np.eye(3)[place] * sign
        slope = approx_fprime(at - 1e-3 * out, h, 1e-4)[place]
        assert h(at + 50 * out) - h(at) == pytest.approx(50 * sign * slope, rel=1e-4)


@settings(max_examples=30, deadline=None, derandomize=True)
@given(
    values=st.lists(st.floats(0, 1), min_size=9, max_size=9),
    link=st.sampled_from(["log", "level"]),
)
def test_inside_the_range_hold_is_flag_bit_for_bit(values: list[float], link: str) -> None:
    model = with_product(link)
    hold = model.model_copy(update={"extrapolation": "hold"})
    share = np.array(values).reshape(3, 3)
    series = {
        name: low + share[k] * (high - low)
        for k, (name, (low, high)) in enumerate(model.estimation_range.items())
    }
    series = {name: np.clip(x, *model.estimation_range[name]) for name, x in series.items()}
    for one, other in zip(
        response_columns(model, series), response_columns(hold, series), strict=True
    ):
        assert one.tobytes() == other.tobytes()


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
