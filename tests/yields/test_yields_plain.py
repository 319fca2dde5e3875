"""Yield grids against the plain path, on random responses and indices."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from stook.audit.plain.yields import yields_of_pixel
from stook.yields.grids import yield_grids
from stook.yields.response import Response
from yields_inputs import COMMON, invented_indices, layer

YEARS = range(2001, 2025)
BASELINE = (2001, 2012)
SCALE = {"growth": 1500.0, "heat": 40.0, "rain": 450.0}


def terms() -> st.SearchStrategy[dict[str, Any]]:
    """One to four terms; every coefficient moves the predictor by up to about one."""
    size = st.floats(-1, 1, allow_nan=False, width=32)

    def of(index: str) -> st.SearchStrategy[dict[str, Any]]:
        scale = SCALE[index]
        linear = st.builds(
            lambda c: {"form": "linear", "index": index, "coefficient": c / scale}, size
        )
        quadratic = st.builds(
            lambda a, b: {
                "form": "quadratic",
                "index": index,
                "coefficients": [a / scale, b / scale**2],
            },
            size,
            size,
        )
        piecewise = st.builds(
            lambda count, slopes: {
                "form": "piecewise-linear",
                "index": index,
                "knots": [scale * (0.7 + 0.2 * k) for k in range(count)],
                "coefficients": [slope / scale for slope in slopes[: count + 1]],
            },
            st.integers(1, 3),
            st.lists(size, min_size=4, max_size=4),
        )
        return st.one_of(linear, quadratic, piecewise)

    product = st.builds(
        lambda pair, c: {
            "form": "product",
            "indices": list(pair),
            "coefficient": c / (SCALE[pair[0]] * SCALE[pair[1]]),
        },
        st.permutations(list(SCALE)).map(lambda names: names[:2]),
        size,
    )
    one = st.one_of(st.sampled_from(list(SCALE)).flatmap(of), product)
    return st.lists(one, min_size=1, max_size=4).map(
        lambda given_: {f"term{n}": term for n, term in enumerate(given_)}
    )


@settings(max_examples=40, deadline=None, derandomize=True)
@given(
    link=st.sampled_from(["log", "level"]),
    wanted=terms(),
    intercept=st.sampled_from([0.0, 1.0, 4.0]),
    missing=st.lists(st.integers(0, len(YEARS) - 1), max_size=6),
    seed=st.integers(0, 99),
    extrapolation=st.sampled_from(["flag", "hold"]),
)
def test_same_as_the_plain_path(
    link: str,
    wanted: dict[str, Any],
    intercept: float,
    missing: list[int],
    seed: int,
    extrapolation: str,
) -> None:
    count = sum(len(term.get("coefficients", [0])) for term in wanted.values())
    changes = {
        "link": link,
        "intercept": intercept,
        "terms": wanted,
        "extrapolation": extrapolation,
        "standard_errors": [0.1] * count,
    }
    model = Response.model_validate(COMMON | changes)
    indices = invented_indices(YEARS, (1, 2), seed)
    for year in missing:
        indices["heat"][year, 0, 1] = np.nan
    coefficients = model.coefficient_vector
    found = yield_grids(
        indices, layer(indices, 4.2), layer(indices, np.int8(0)), model, coefficients, BASELINE
    )
    for column in range(2):
        series = {
            name: dict(zip(YEARS, indices[name].values[:, 0, column].tolist(), strict=True))
            for name in model.indices
        }
        plain = yields_of_pixel(model, coefficients.tolist(), series, BASELINE, 4.2)
        here = found.isel(lat=0, lon=column)
        assert (int(here["reason"]) == 0) == bool(plain.ratio)
        pairs = {"yield_ratio": plain.ratio, "yield": plain.yields}
        pairs |= {f"effect_{name}": plain.effects.get(name, {}) for name in model.terms}
        for name, values in pairs.items():
            expected = [values.get(year, np.nan) for year in YEARS]
            np.testing.assert_allclose(here[name], expected, rtol=1e-10, atol=1e-12)
        names = list(model.indices)
        bits = [sum(1 << names.index(n) for n in plain.outside.get(year, [])) for year in YEARS]
        np.testing.assert_array_equal(here["extrapolated"], bits)
