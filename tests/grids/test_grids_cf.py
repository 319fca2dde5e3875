"""Reading other people's NetCDF files."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from stook.errors import InputError
from stook.grids.cf import axis_cells, find_variable, horizontal_axes, open_input, open_undecoded


def field(attributes: dict[str, str]) -> tuple[tuple[str], np.ndarray, dict[str, str]]:
    return ("x",), np.zeros(2), attributes


def test_variables_by_name_and_by_standard_name() -> None:
    temperature = {"standard_name": "air_temperature"}
    dataset = xr.Dataset(
        {
            "t2m": field(temperature | {"cell_methods": "time: mean"}),
            "mn2t": field(temperature | {"cell_methods": "area: mean time: minimum"}),
            "mx2t": field(temperature | {"cell_methods": "time: maximum"}),
            "rain": field({"standard_name": "precipitation_flux"}),
            "hurs": field({}),
        }
    )
    found = {
        name: find_variable(dataset, name, "a.nc").name
        for name in ("tas", "tasmin", "tasmax", "pr", "hurs")
    }
    assert found == {
        "tas": "t2m", "tasmin": "mn2t", "tasmax": "mx2t", "pr": "rain", "hurs": "hurs"
    }  # fmt: skip
    with pytest.raises(InputError, match=r"a\.nc: has no variable rsds, nor one of standard name"):
        find_variable(dataset, "rsds", "a.nc")


def test_two_candidates_are_refused() -> None:
    rain = field({"standard_name": "precipitation_flux"})
    with pytest.raises(InputError) as caught:
        find_variable(xr.Dataset({"a": rain, "b": rain}), "pr", "a.nc")
    assert str(caught.value) == "a.nc: pr could be any of a, b; rename one"


def test_axes_by_standard_name_units_or_name() -> None:
    for lat, lon in (
        ({"standard_name": "latitude"}, {"standard_name": "longitude"}),
        ({"units": "degrees_north"}, {"units": "degrees_east"}),
    ):
        dataset = xr.Dataset(coords={"v": ("v", [1.0, 2.0], lat), "u": ("u", [3.0, 4.0], lon)})
        assert [axis.name for axis in horizontal_axes(dataset, "a.nc")] == ["v", "u"]
    dataset = xr.Dataset(coords={"lat": [1.0, 2.0], "lon": [3.0, 4.0]})
    assert [axis.name for axis in horizontal_axes(dataset, "a.nc")] == ["lat", "lon"]
    with pytest.raises(InputError) as caught:
        horizontal_axes(xr.Dataset(coords={"lat": [1.0]}), "a.nc")
    assert str(caught.value) == (
        "a.nc: has no longitude coordinate (standard_name longitude, units degrees_east)"
    )


def test_unstructured_grid_is_refused() -> None:
    dataset = xr.Dataset(
        coords={
            "lat": ("cell", [1.0, 2.0], {"standard_name": "latitude"}),
            "lon": ("cell", [3.0, 4.0], {"standard_name": "longitude"}),
        }
    )
    with pytest.raises(InputError) as caught:
        horizontal_axes(dataset, "a.nc")
    assert str(caught.value) == (
        "a.nc: the grid is rotated, curvilinear or unstructured (lat has dimensions (cell)); "
        "regrid it to regular latitude and longitude first"
    )


def axis_dataset(values: list[float], bounds: list[list[float]] | None) -> xr.Dataset:
    dataset = xr.Dataset(coords={"lon": ("lon", values)})
    if bounds is not None:
        dataset["lon_bnds"] = (("lon", "bnds"), bounds)
        dataset["lon"].attrs["bounds"] = "lon_bnds"
    return dataset


def test_cells_halfway_between_centres() -> None:
    dataset = axis_dataset([0.0, 1.0, 3.0], None)
    cells = axis_cells(dataset["lon"], dataset, "a.nc")
    assert cells.tolist() == [[-0.5, 0.5], [0.5, 2.0], [2.0, 4.0]]


def test_cells_from_bounds_in_either_order_and_over_the_seam() -> None:
    dataset = axis_dataset([350.0, 360.0, 370.0], [[345, 355], [365, 355], [5, 15]])
    cells = axis_cells(dataset["lon"], dataset, "a.nc")
    assert cells.tolist() == [[345, 355], [355, 365], [365, 375]]
    one = axis_dataset([10.0], [[9.0, 12.0]])
    assert axis_cells(one["lon"], one, "a.nc").tolist() == [[9.0, 12.0]]


def test_cells_that_cannot_be_known() -> None:
    dataset = axis_dataset([10.0], None)
    with pytest.raises(InputError) as caught:
        axis_cells(dataset["lon"], dataset, "a.nc")
    assert str(caught.value) == "a.nc: lon has one value and no bounds; its cell is unknown"
    for bounds in ([[0, 1], [1.5, 2.5]], [[0, 1.2], [1, 2.5]], [[0, 0], [1, 2]]):
        dataset = axis_dataset([0.0, 2.0], bounds)
        with pytest.raises(InputError, match="bounds of lon have gaps or overlaps"):
            axis_cells(dataset["lon"], dataset, "a.nc")


def write_times(path: Path, stamps: list[float], bounds: list[list[float]] | None) -> Path:
    dataset = xr.Dataset(coords={"time": ("time", stamps)})
    dataset["time"].attrs = {"units": "days since 2001-01-01", "calendar": "360_day"}
    if bounds is not None:
        dataset["time_bnds"] = (("time", "bnds"), bounds)
        dataset["time"].attrs["bounds"] = "time_bnds"
    dataset.to_netcdf(path)
    return path


def test_times_move_to_the_middle_of_their_bounds(tmp_path: Path) -> None:
    bounds = [[0.0, 30.0], [30.0, 60.0]]
    for stamps in ([0.0, 30.0], [30.0, 60.0]):
        with open_input(write_times(tmp_path / "a.nc", stamps, bounds)) as dataset:
            assert [str(time)[:10] for time in dataset["time"].values] == [
                "2001-01-16",
                "2001-02-16",
            ]
    with open_input(write_times(tmp_path / "a.nc", [0.0, 30.0], [[5, 6], [7, 8]])) as dataset:
        assert str(dataset["time"].values[0])[:10] == "2001-01-01"  # bounds that do not hold it
    with open_input(write_times(tmp_path / "a.nc", [3.0, 33.0], None)) as dataset:
        assert str(dataset["time"].values[0])[:10] == "2001-01-04"


def test_times_that_cannot_be_decoded(tmp_path: Path) -> None:
    for units, message in (
        ("fortnights", "a.nc: time has no units like 'days since 1850-01-01'"),
        ("days since the flood", "a.nc: time cannot be decoded ("),
    ):
        dataset = xr.Dataset(coords={"time": ("time", [0.0, 1.0], {"units": units})})
        dataset.to_netcdf(tmp_path / "a.nc")
        with pytest.raises(InputError) as caught:
            open_input(tmp_path / "a.nc")
        assert str(caught.value).startswith(f"{tmp_path}/{message}")


def test_files_that_cannot_be_opened(tmp_path: Path) -> None:
    with pytest.raises(InputError) as caught:
        open_undecoded(tmp_path / "a.nc")
    assert str(caught.value) == f"{tmp_path}/a.nc: no such file"
    (tmp_path / "b.nc").write_text("no NetCDF", encoding="utf-8")
    with pytest.raises(InputError) as caught:
        open_undecoded(tmp_path / "b.nc")
    assert str(caught.value).startswith(f"{tmp_path}/b.nc: not a readable NetCDF file (")
