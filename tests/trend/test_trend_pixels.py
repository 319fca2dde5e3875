"""The labelled trend maps: bands, chunks and the tables beside them."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from stook.trend.pixels import Domain, MapTrends, Quantity, map_trends
from stook.trend.series import TrendOptions

YEARS = np.arange(1971, 2011)
QUANTITY = Quantity("heat", "degree days above 29 degC", "degC day")
PERIODS = {"all": (1971, 2010), "late": (1981, 2010)}
SHAPE = (7, 9)


def domain() -> Domain:
    reason = np.zeros(SHAPE, dtype=np.int8)
    reason[2, :] = 1
    reason[5, 3:6] = 1
    area = np.where(reason == 0, np.linspace(1, 500, 63).reshape(SHAPE), np.nan)
    region = np.tile(np.array([0, 0, 0, 1, 1, 1, 2, -1, -1]), (7, 1))
    return Domain(reason, area, region, ["Saltmere", "Thornfold", "Lowsend", "Eastmoor"])


def heat() -> xr.DataArray:
    values = np.random.default_rng(1).standard_normal((40, *SHAPE)).cumsum(axis=0)
    return xr.DataArray(values, {"year": YEARS}, ("year", "lat", "lon"))


def trends(series: xr.DataArray, block_mb: float, method: str = "ar1") -> MapTrends:
    options = TrendOptions(seed=4, count=99, minimum_years=20, method=method)
    reason = np.zeros(SHAPE, dtype=np.int8)
    return map_trends(series, reason, QUANTITY, domain(), PERIODS, options, block_mb)


@pytest.mark.parametrize("method", ["ar1", "shuffle"])
def test_bands_and_chunks_do_not_matter(method: str) -> None:
    whole = trends(heat(), 64, method)
    lazy = heat().transpose("lat", "lon", "year").chunk({"lat": 2, "lon": 4, "year": 15})
    # 0.006 MiB: bands of two rows, one pixel a time.
    part = trends(lazy, 0.006, method)
    xr.testing.assert_identical(part.grids, whole.grids)
    pd.testing.assert_frame_equal(part.distribution, whole.distribution, check_exact=True)
    pd.testing.assert_frame_equal(part.field, whole.field, check_exact=True)


def test_distribution_is_that_of_the_map() -> None:
    found = trends(heat(), 64)
    for period in PERIODS:
        table = found.distribution[found.distribution["period"] == period]
        observed = table[table["kind"] == "observed"]
        slopes = found.grids["slope_heat"].sel(period=period).values
        there = np.isfinite(slopes)
        edges = np.append(observed["bin_low"], observed["bin_high"].iloc[-1])
        areas, _ = np.histogram(slopes[there], edges, weights=domain().area[there])
        # Areas are counted in whole units of 0.001 ha.
        np.testing.assert_allclose(observed["area_share"], areas / areas.sum(), atol=1e-7)
        assert table["area_share"].sum() == pytest.approx(2.0, abs=1e-12)


def test_field_has_the_regions_there_are() -> None:
    table = trends(heat(), 64).field
    rows = table[table["period"] == "all"].set_index("region")
    assert list(rows.index) == ["Saltmere", "Thornfold", "Lowsend", "all pixels"]
    assert list(rows["pixels"]) == [18, 15, 6, 51]
    area = np.nansum(domain().area[:, 3:6])
    assert rows.loc["Thornfold", "area_ha"] == pytest.approx(area, abs=0.01)
    # A random walk has trends by chance in most places; each randomised field has 5 %.
    np.testing.assert_allclose(rows["share_random_mean"], 0.05, atol=0.005)


def test_a_pixel_without_region_is_not_judged() -> None:
    marks = trends(heat(), 64).grids["significant_heat"].values
    there = domain().there
    np.testing.assert_array_equal(marks[:, :, 7:], -1)
    assert (marks[:, there & (domain().region >= 0)] >= 0).all()


def test_reason_of_the_series_is_kept() -> None:
    series = heat()
    series[:, 0, 0] = np.nan
    series[:, 1, 1] = np.nan
    reason = np.zeros(SHAPE, dtype=np.int8)
    reason[0, 0] = 5
    options = TrendOptions(seed=4, count=99, minimum_years=20)
    found = map_trends(series, reason, QUANTITY, domain(), PERIODS, options, 64).grids
    codes = found["reason_heat"].isel(period=0).values
    assert (codes[0, 0], codes[1, 1], codes[2, 2], codes[3, 3]) == (5, 4, 1, 0)
