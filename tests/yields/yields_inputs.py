"""Invented responses and season indices for the yields tests."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from stook.yields.response import Response

COMMON: dict[str, Any] = {
    "crop": "maize",
    "system": "rainfed",
    "indices": {
        "growth": {"measure": "degree-days", "base": 10, "cap": 30},
        "heat": {"measure": "degree-days", "base": 30},
        "rain": {"measure": "total"},
    },
    "terms": {
        "growth": {
            "form": "piecewise-linear",
            "index": "growth",
            "knots": [1400.0, 1600.0],
            "coefficients": [0.0008, 0.0003, -0.0002],
        },
        "heat": {"form": "linear", "index": "heat", "coefficient": -0.004},
        "rain": {"form": "quadratic", "index": "rain", "coefficients": [0.0012, -1.0e-6]},
    },
    "estimation_range": {"growth": [1300, 1700], "heat": [0, 60], "rain": [200, 700]},
    "standard_errors": [0.0001, 0.0001, 0.0001, 0.0006, 0.0003, 3e-7],
    "citation": "invented",
    "note": "invented",
}


def response(link: str = "log", **changes: Any) -> Response:
    """Return an invented response of six coefficients."""
    intercept = 3.0 if link == "level" else 0.0
    return Response.model_validate(COMMON | {"link": link, "intercept": intercept} | changes)


def with_product(link: str = "log", **changes: Any) -> Response:
    """Return the invented response with less harm from heat where there is more rain."""
    size = 1.0 if link == "log" else 3.0
    term = {"form": "product", "indices": ["heat", "rain"], "coefficient": 4e-6 * size}
    terms = COMMON["terms"] | {"heat_and_rain": term}
    errors = [*COMMON["standard_errors"], 1e-6]
    return response(link, terms=terms, standard_errors=errors, **changes)


def invented_indices(years: range, shape: tuple[int, int], seed: int = 6) -> xr.Dataset:
    """Return season indices (year, lat, lon) and reasons (lat, lon), all valid."""
    random = np.random.default_rng(seed)
    size = (len(years), *shape)
    step = (np.arange(len(years)) / 50)[:, None, None]
    values = {
        "growth": 1500 + 120 * step + 90 * random.standard_normal(size),
        "heat": np.maximum(25 + 15 * step + 20 * random.standard_normal(size), 0),
        "rain": 450 + 110 * random.standard_normal(size),
    }
    maps = ("lat", "lon")
    return xr.Dataset(
        {name: (("year", *maps), grid) for name, grid in values.items()}
        | {"reason": (maps, np.zeros(shape, np.int8))},
        {
            "year": list(years),
            "lat": np.arange(shape[0]) * 0.5 + 44.25,
            "lon": np.arange(shape[1]) * 0.5 + 5.25,
        },
    )


def layer(indices: xr.Dataset, values: Any) -> xr.DataArray:
    """Return a layer (lat, lon) on the grid of the indices."""
    like = indices["reason"]
    grid = np.broadcast_to(np.asarray(values), like.shape).copy()
    return xr.DataArray(grid, like.coords, like.dims)
