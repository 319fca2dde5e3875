"""Axes of other people's grids."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from stook.errors import InputError
from stook.grids.axes import axis_of_edges, source_axes


def dataset(lat: np.ndarray, lon: np.ndarray) -> xr.Dataset:
    return xr.Dataset(
        coords={
            "latitude": ("latitude", lat, {"units": "degrees_north"}),
            "longitude": ("longitude", lon, {"units": "degrees_east"}),
        }
    )


def test_descending_latitudes_are_turned() -> None:
    lat, lon, lat_name, lon_name = source_axes(
        dataset(np.array([60.0, 50.0, 40.0]), np.array([0.0, 10.0])), "a.nc"
    )
    assert (lat_name, lon_name) == ("latitude", "longitude")
    assert lat.descending
    assert not lon.descending
    assert lat.centres.tolist() == [40.0, 50.0, 60.0]
    assert lat.edges.tolist() == [35.0, 45.0, 55.0, 65.0]
    assert lat.file_runs(np.array([0, 1])) == [(slice(1, 3), True)]
    assert lon.file_runs(np.array([1])) == [(slice(1, 2), False)]


def test_latitudes_end_at_the_poles() -> None:
    lat, _, _, _ = source_axes(dataset(np.linspace(-90, 90, 19), np.array([0.0, 1.0])), "a.nc")
    assert lat.edges[[0, 1, -2, -1]].tolist() == [-90.0, -85.0, 85.0, 90.0]


def test_longitudes_with_a_jump_are_unwrapped() -> None:
    _, lon, _, _ = source_axes(
        dataset(np.array([0.0, 1.0]), np.array([350.0, 355.0, 0.0, 5.0])), "a.nc"
    )
    assert lon.centres.tolist() == [-10.0, -5.0, 0.0, 5.0]
    assert not lon.cyclic


@pytest.mark.parametrize("first", [0.0, -180.0, 1.25])
def test_whole_globe_is_cyclic(first: float) -> None:
    lon_values = first + 2.5 * np.arange(144)
    _, lon, _, _ = source_axes(dataset(np.array([0.0, 1.0]), lon_values), "a.nc")
    assert lon.cyclic
    assert lon.file_runs(np.array([142, 143, 0])) == [
        (slice(142, 144), False),
        (slice(0, 1), False),
    ]


def test_repeated_column_is_refused() -> None:
    with pytest.raises(InputError) as caught:
        source_axes(dataset(np.array([0.0, 1.0]), np.linspace(0, 360, 37)), "a.nc")
    assert str(caught.value) == (
        "a.nc: longitude goes more than once round the globe; drop the repeated columns"
    )


def test_axis_that_runs_back_and_forth_is_refused() -> None:
    with pytest.raises(InputError) as caught:
        source_axes(dataset(np.array([0.0, 2.0, 1.0]), np.array([0.0, 1.0])), "a.nc")
    assert str(caught.value) == (
        "a.nc: latitude does not run in one direction; sort the file by it"
    )


def test_missing_and_impossible_places_are_refused() -> None:
    with pytest.raises(InputError, match="every cell needs a place"):
        source_axes(dataset(np.array([0.0, np.nan]), np.array([0.0, 1.0])), "a.nc")
    with pytest.raises(InputError, match="latitude leaves -90 to 90 degrees"):
        source_axes(dataset(np.array([0.0, 100.0]), np.array([0.0, 1.0])), "a.nc")


def test_float32_axes_have_the_tolerance_of_their_digits() -> None:
    exact = np.arange(280.0416667, 282, 1 / 12)
    single = dataset(np.array([0.0, 1.0]), exact.astype(np.float32))
    double = dataset(np.array([0.0, 1.0]), exact)
    lon_single, lon_double = source_axes(single, "a.nc")[1], source_axes(double, "a.nc")[1]
    assert lon_double.tolerance < 1e-6 < lon_single.tolerance < 1e-4
    assert lon_single.same(lon_double)
    bounds = np.stack([exact - 1 / 24, exact + 1 / 24], axis=1).astype(np.float32)
    double["longitude_bnds"] = (("longitude", "bnds"), bounds)
    double["longitude"].attrs["bounds"] = "longitude_bnds"
    lon_bounded = source_axes(double, "a.nc")[1]
    assert lon_bounded.tolerance == lon_single.tolerance
    assert lon_bounded.same(lon_double)


def test_same_cells() -> None:
    up = axis_of_edges(np.array([0.0, 1.0, 2.0]), False, None)
    down = axis_of_edges(np.array([0.0, 1.0, 2.0]), True, None)
    other = axis_of_edges(np.array([0.0, 1.1, 2.0]), False, None)
    longer = axis_of_edges(np.array([0.0, 1.0, 2.0, 3.0]), False, None)
    assert up.agrees(down)
    assert not up.same(down)
    assert not up.agrees(other)
    assert not up.agrees(longer)
