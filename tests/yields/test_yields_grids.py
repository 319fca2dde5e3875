"""Labelled yields: by hand, reasons, flags, blocks."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from stook.grids.missing import Reason
from stook.yields.grids import yield_grids
from stook.yields.response import Response
from yields_inputs import invented_indices, layer, response, with_product

BASELINE = (2001, 2003)


def grids(indices: xr.Dataset, model: Response, baseline: tuple[int, int] = BASELINE) -> xr.Dataset:
    return yield_grids(
        indices,
        layer(indices, 5.0),
        layer(indices, np.int8(0)),
        model,
        model.coefficient_vector,
        baseline,
    )


def one_pixel(growth: list[float], heat: list[float], rain: list[float]) -> xr.Dataset:
    indices = invented_indices(range(2001, 2001 + len(heat)), (1, 1))
    for name, values in (("growth", growth), ("heat", heat), ("rain", rain)):
        indices[name] = indices[name].dims, np.array(values, dtype=float)[:, None, None]
    return indices


def test_log_link_by_hand() -> None:
    """Heat alone changes: h = -0.004 x heat, baseline heat 0, 10, 20."""
    indices = one_pixel([1500.0] * 4, [0, 10, 20, 60], [400.0] * 4)
    found = grids(indices, response()).isel(lat=0, lon=0)
    level = np.exp(-0.004 * np.array([0, 10, 20, 60]))
    ratio = level / level[:3].mean()
    np.testing.assert_allclose(found["yield_ratio"], ratio, rtol=1e-14)
    np.testing.assert_allclose(found["yield"], 5 * ratio, rtol=1e-14)
    np.testing.assert_allclose(found["effect_heat"], [0.04, 0, -0.04, -0.2], atol=1e-14)
    np.testing.assert_allclose(found["effect_growth"], 0, atol=1e-14)
    np.testing.assert_allclose(found["effect_rain"], 0, atol=1e-14)
    assert found["effect_heat"].attrs["units"] == "1"


def test_level_link_by_hand() -> None:
    """h = 3 + 1.15 + 0.32 - 0.004 x heat = 4.47, 4.43, 4.39 in the baseline; then below zero."""
    indices = one_pixel([1500.0] * 4, [0, 10, 20, 2000], [400.0] * 4)
    found = grids(indices, response("level")).isel(lat=0, lon=0)
    h = 3 + 0.0008 * 1400 + 0.0003 * 100 + 0.0012 * 400 - 1e-6 * 400**2
    expected = np.array([h, h - 0.04, h - 0.08, 0]) / (h - 0.04)
    np.testing.assert_allclose(found["yield_ratio"], expected, rtol=1e-14)
    np.testing.assert_allclose(found["effect_heat"], [0.04, 0, -0.04, -7.96], atol=1e-13)
    assert found["effect_heat"].attrs["units"] == "t ha-1"


@pytest.mark.parametrize("link", ["log", "level"])
def test_the_mean_ratio_of_the_baseline_is_one(link: str) -> None:
    found = grids(invented_indices(range(2001, 2031), (3, 4)), response(link), (2001, 2020))
    mean = found["yield_ratio"].sel(year=slice(2001, 2020)).mean("year")
    np.testing.assert_allclose(mean, 1.0, rtol=1e-13)
    for term in ("growth", "heat", "rain"):
        effect = found[f"effect_{term}"].sel(year=slice(2001, 2020)).mean("year")
        np.testing.assert_allclose(effect, 0.0, atol=1e-13)


@pytest.mark.parametrize("link", ["log", "level"])
def test_no_climate_change_gives_no_yield_change(link: str) -> None:
    """A future that repeats the baseline's weather, in another order, has a mean ratio of one."""
    indices = invented_indices(range(2001, 2031), (2, 2))
    order = np.random.default_rng(4).permutation(30)
    later = indices.isel(year=order).assign_coords(year=np.arange(2061, 2091))
    both = xr.concat([indices, later], "year", data_vars="minimal")
    found = grids(both, response(link), (2001, 2030))["yield_ratio"]
    np.testing.assert_allclose(found.sel(year=slice(2061, 2090)).mean("year"), 1, rtol=1e-13)
    before = found.sel(year=slice(2001, 2030)).values
    after = found.sel(year=slice(2061, 2090)).values
    assert np.array_equal(before[order], after)


@pytest.mark.parametrize("model", [response(), with_product()])
def test_effects_add_up_to_the_change_of_log_yield(model: Response) -> None:
    found = grids(invented_indices(range(2001, 2031), (2, 2)), model, (2001, 2020))
    total = sum(found[f"effect_{term}"] for term in model.terms)
    log = np.log(found["yield_ratio"])
    np.testing.assert_allclose(total - total[0], log - log[0], atol=1e-12)


def test_a_product_by_hand() -> None:
    """h = -0.004 heat + 4e-6 heat rain: rain of 500 mm halves the harm of heat, 1000 mm ends it."""
    indices = one_pixel([1500.0] * 4, [0, 0, 0, 50], [500.0] * 4)
    found = grids(indices, with_product()).isel(lat=0, lon=0)
    np.testing.assert_allclose(found["effect_heat_and_rain"], [0, 0, 0, 0.1], atol=1e-15)
    np.testing.assert_allclose(found["yield_ratio"], [1, 1, 1, np.exp(-0.1)], rtol=1e-14)
    assert "heat and rain (product)" in found["effect_heat_and_rain"].attrs["long_name"]


def test_flags_say_which_index_is_outside_its_range() -> None:
    indices = one_pixel(
        [1500, 1500, 1500, 1299, 1300, 1701],
        [0, 10, 20, 60, 60.1, 70],
        [400, 400, 400, 700, 199, 701],
    )
    found = grids(indices, response())["extrapolated"]
    assert found.dtype == np.int16
    np.testing.assert_array_equal(found.squeeze(), [0, 0, 0, 1, 2 + 4, 1 + 2 + 4])
    np.testing.assert_array_equal(found.attrs["flag_masks"], [1, 2, 4])
    assert found.attrs["flag_meanings"] == "growth_outside heat_outside rain_outside"


def test_held_marginal_effects_by_hand() -> None:
    """Rain beyond 700 mm: slope 0.0012 - 2e-6 x 700 = -0.0002 a mm; the flags stay."""
    indices = one_pixel([1500.0] * 5, [0.0] * 5, [700, 700, 700, 800, 600])
    flag, hold = (
        grids(indices, response(extrapolation=how)).isel(lat=0, lon=0) for how in ("flag", "hold")
    )
    np.testing.assert_allclose(hold["effect_rain"], [0, 0, 0, -0.02, 0.01], atol=1e-15)
    np.testing.assert_allclose(flag["effect_rain"], [0, 0, 0, -0.03, 0.01], atol=1e-15)
    np.testing.assert_array_equal(hold["extrapolated"], flag["extrapolated"])
    assert "held" in hold["extrapolated"].attrs["comment"]
    for name in ("yield_ratio", "yield", *(f"effect_{term}" for term in response().terms)):
        inside = [0, 1, 2, 4]
        assert flag[name].values[inside].tobytes() == hold[name].values[inside].tobytes()


def test_an_index_no_term_uses_is_neither_needed_nor_flagged() -> None:
    content = response().model_dump()
    model = Response.model_validate(
        content | {"indices": {"extra": {"measure": "total"}} | content["indices"]}
    )
    found = grids(one_pixel([1500.0] * 3, [0, 10, 61], [400.0] * 3), model)
    np.testing.assert_array_equal(found["extrapolated"].squeeze(), [0, 0, 4])


def test_reasons() -> None:
    indices = invented_indices(range(2001, 2011), (2, 4))
    indices["heat"][:4, 0, 1] = np.nan  # 6 of 10 baseline years
    indices["heat"][:3, 0, 2] = np.nan  # 7 of 10
    indices["rain"][:, 0, 3] = np.nan
    indices["reason"][0, 3] = int(Reason.MISSING_INPUT)
    indices["growth"][:, 1, 0] = np.nan
    indices["reason"][1, 0] = int(Reason.INCOMPLETE_SEASON)
    indices["heat"][:, 1, 1] = 5000.0
    reason = layer(indices, np.int8(0))
    reason[1, 2] = int(Reason.OUTSIDE_CROP_AREA)
    reason[1, 3] = int(Reason.NO_BASELINE_YIELD)
    model = response("level")
    found = yield_grids(
        indices, layer(indices, 5.0), reason, model, model.coefficient_vector, (2001, 2010)
    )
    expected = [
        [Reason.VALID, Reason.TOO_FEW_VALUES, Reason.VALID, Reason.MISSING_INPUT],
        [
            Reason.INCOMPLETE_SEASON,
            Reason.BASELINE_NOT_POSITIVE,
            Reason.OUTSIDE_CROP_AREA,
            Reason.NO_BASELINE_YIELD,
        ],
    ]
    np.testing.assert_array_equal(found["reason"], expected)
    missing = found["reason"].values != 0
    for name in ("yield_ratio", "yield", "effect_growth", "effect_heat", "effect_rain"):
        assert np.isnan(found[name].values[:, missing]).all()
        np.testing.assert_array_equal(
            np.isnan(found[name].values[:, 0, 2]), [True] * 3 + [False] * 7
        )
    assert (found["extrapolated"].values[:, missing] == 0).all()


def test_too_few_baseline_years_in_the_file() -> None:
    """The baseline is 2001 to 2030; a file that begins in 2012 has 19 of its 30 years."""
    for first, reason in ((2012, Reason.TOO_FEW_VALUES), (2011, Reason.VALID)):
        found = grids(invented_indices(range(first, 2051), (1, 1)), response(), (2001, 2030))
        assert int(found["reason"].squeeze()) == reason


@pytest.mark.parametrize("link", ["log", "level"])
def test_a_pixel_has_the_same_bits_in_any_block(link: str) -> None:
    indices = invented_indices(range(2001, 2041), (5, 7))
    indices["heat"][3, 2, 2] = np.nan
    model = response(link)
    whole = grids(indices, model, (2001, 2020))
    lazy = grids(indices.chunk({"year": -1, "lat": 2, "lon": 3}), model, (2001, 2020))
    assert lazy["yield"].chunks is not None
    xr.testing.assert_identical(lazy.compute(), whole)
    for row, column in ((0, 0), (2, 2), (4, 6)):
        at = {"lat": slice(row, row + 1), "lon": slice(column, column + 1)}
        xr.testing.assert_identical(grids(indices.isel(at), model, (2001, 2020)), whole.isel(at))
