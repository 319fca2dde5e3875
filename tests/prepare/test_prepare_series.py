"""Opening and joining the files of one series."""

from __future__ import annotations

from pathlib import Path

import netCDF4
import numpy as np
import pytest
import xarray as xr
from prepare_inputs import climate_file
from stook.errors import InputError
from stook.prepare.series import open_series

LAT, LON = np.array([10.5, 11.5, 12.5]), np.array([20.5, 21.5])


def numbers(steps: int, first: int = 0) -> np.ndarray:
    """Return values that tell time, row and column: 100 t + 10 row + column."""
    t, i, j = np.meshgrid(np.arange(steps) + first, np.arange(3), np.arange(2), indexing="ij")
    return (100 * t + 10 * i + j).astype("f4")


def test_files_are_joined_in_time_whatever_their_order(tmp_path: Path) -> None:
    late = climate_file(tmp_path / "a.nc", "tas", numbers(5, 31), LAT, LON, "2001-02-01")
    early = climate_file(tmp_path / "b.nc", "tas", numbers(31), LAT, LON, "2001-01-01")
    with open_series([late, early], "tas") as series:
        assert [file.path.name for file in series.files] == ["b.nc", "a.nc"]
        assert (series.step, series.calendar, series.unit) == ("daily", "standard", "K")
        assert (series.scale, series.offset) == (1.0, -273.15)
        assert len(series.times) == 36
        assert str(series.times[-1])[:10] == "2001-02-05"
        np.testing.assert_array_equal(series.years, 2001)
        np.testing.assert_array_equal(np.diff(series.numbers), 1)
        np.testing.assert_array_equal(series.read(slice(0, 36)), numbers(36))
        part = series.read(slice(29, 33), np.array([1, 2]), np.array([1]))
        np.testing.assert_array_equal(part, numbers(36)[29:33, 1:, 1:])
        inside = series.read_inside(slice(0, 1))
        np.testing.assert_array_equal(inside, numbers(1).astype(float) - 273.15)


CALENDARS = {
    "360_day": 360,
    "noleap": 365,
    "365_day": 365,
    "all_leap": 366,
    "standard": 365,
    "gregorian": 365,
    "proleptic_gregorian": 365,
    "julian": 365,
}


@pytest.mark.parametrize(("calendar", "count"), CALENDARS.items())
def test_years_of_every_calendar(tmp_path: Path, calendar: str, count: int) -> None:
    files = [
        climate_file(
            tmp_path / f"{year}.nc", "tas", numbers(count), LAT, LON, f"{year}-01-01", calendar
        )
        for year in (2001, 2002)
    ]
    with open_series(files, "tas") as series:
        assert len(series.times) == 2 * count
        assert series.years[[0, count - 1, count, -1]].tolist() == [2001, 2001, 2002, 2002]


def test_descending_latitudes_are_read_ascending(tmp_path: Path) -> None:
    path = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT[::-1], LON)
    with open_series([path], "tas") as series:
        found = series.read(slice(1, 3), np.array([0, 1]), np.array([0]))
        np.testing.assert_array_equal(found[:, :, 0], [[120, 110], [220, 210]])


def test_columns_over_the_seam(tmp_path: Path) -> None:
    values = np.arange(36, dtype="f4")[None, None, :].repeat(3, 1).repeat(2, 0)
    path = climate_file(tmp_path / "a.nc", "pr", values, LAT, np.arange(0, 360, 10.0))
    with open_series([path], "pr") as series:
        assert series.lon.cyclic
        found = series.read(slice(0, 1), np.array([1]), np.array([34, 35, 0, 1]))
        assert found.tolist() == [[[34, 35, 0, 1]]]


def test_other_order_of_dimensions_and_a_level(tmp_path: Path) -> None:
    """(longitude, height, latitude, time), as some tools write."""
    path = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    with xr.open_dataset(path, decode_times=False) as dataset:
        turned = dataset.load().expand_dims(height=[2.0])
    turned = turned.transpose("lon", "height", "lat", "time")
    turned.to_netcdf(tmp_path / "b.nc")
    with open_series([tmp_path / "b.nc"], "tas") as series:
        np.testing.assert_array_equal(series.read(slice(0, 4)), numbers(4))


def test_time_of_another_name(tmp_path: Path) -> None:
    path = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    with xr.open_dataset(path, decode_times=False) as dataset:
        dataset.load().rename(time="t").to_netcdf(tmp_path / "b.nc")
    with open_series([tmp_path / "b.nc"], "tas") as series:
        np.testing.assert_array_equal(series.read(slice(1, 3)), numbers(4)[1:3])


def test_packed_values_and_missing_values(tmp_path: Path) -> None:
    values = numbers(2)
    values[0, 0, 0] = np.nan
    path = climate_file(tmp_path / "a.nc", "tas", values, LAT, LON)
    with xr.open_dataset(path, decode_times=False) as dataset:
        packed = {"dtype": "i2", "scale_factor": 0.5, "add_offset": 10.0, "_FillValue": -999}
        dataset.load().to_netcdf(tmp_path / "b.nc", encoding={"tas": packed})
    with open_series([tmp_path / "b.nc"], "tas") as series:
        np.testing.assert_array_equal(series.read(slice(0, 2)), values)


def test_monthly_means_stamped_at_the_end_belong_to_their_month(tmp_path: Path) -> None:
    ends = np.cumsum([31, 28, 31, 30])
    path = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    with xr.open_dataset(path, decode_times=False) as dataset:
        dataset = dataset.load().assign_coords(time=("time", ends.astype(float)))
    bounds = np.stack([np.append(0, ends[:-1]), ends], axis=1)
    dataset["time_bnds"] = (("time", "bnds"), bounds.astype(float))
    dataset["time"].attrs = {"units": "days since 2001-01-01", "bounds": "time_bnds"}
    dataset.to_netcdf(tmp_path / "b.nc")
    with open_series([tmp_path / "b.nc"], "tas") as series:
        assert series.step == "monthly"
        assert [time.month for time in series.times] == [1, 2, 3, 4]


def test_annual_means(tmp_path: Path) -> None:
    path = climate_file(
        tmp_path / "a.nc", "tas", numbers(3), LAT, LON,
        calendar="360_day", times=np.array([180.0, 540.0, 900.0]),
    )  # fmt: skip
    with open_series([path], "tas") as series:
        assert series.step == "annual"
        assert series.years.tolist() == [1850, 1851, 1852]


def _fails(files: list[Path], variable: str = "tas") -> str:
    with pytest.raises(InputError) as caught:
        open_series(files, variable)
    text = str(caught.value)
    assert "\n" not in text
    return text


def test_gap_between_files(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(31), LAT, LON, "2001-01-01")
    b = climate_file(tmp_path / "b.nc", "tas", numbers(5), LAT, LON, "2001-02-03")
    assert _fails([a, b]) == (
        f"{b}, after a.nc: gap between 2001-01-31 and 2001-02-03; a daily series needs every step"
    )


def test_overlap_between_files(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(31), LAT, LON, "2001-01-01")
    b = climate_file(tmp_path / "b.nc", "tas", numbers(5), LAT, LON, "2001-01-20")
    assert _fails([a, b]) == (
        f"{b}, after a.nc: 2001-01-20 follows 2001-01-31; files overlap or times run backwards"
    )
    assert _fails([a, a]) == (
        f"{a}, after a.nc: 2001-01-01 follows 2001-01-31; files overlap or times run backwards"
    )


def test_duplicate_and_disorder_inside_a_file(tmp_path: Path) -> None:
    times = np.array([0.5, 1.5, 1.5, 2.5])
    a = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON, times=times)
    assert _fails([a]) == f"{a}: 1850-01-02 stands twice; every step may stand once"
    times = np.array([0.5, 1.5, 2.5, 1.5, 2.5, 3.5])
    b = climate_file(tmp_path / "b.nc", "tas", numbers(6), LAT, LON, times=times)
    assert _fails([b]) == (
        f"{b}: 1850-01-02 follows 1850-01-03; files overlap or times run backwards"
    )


def test_six_hourly_values(tmp_path: Path) -> None:
    times = np.arange(8) / 4
    a = climate_file(tmp_path / "a.nc", "tas", numbers(8), LAT, LON, times=times)
    assert _fails([a]) == (f"{a}: time step of 0.25 days; daily, monthly or annual values are read")


def test_monthly_file_in_a_daily_series(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(59), LAT, LON, "1850-01-01")
    times = np.array([74.0, 105.0, 135.0])
    b = climate_file(tmp_path / "b.nc", "tas", numbers(3), LAT, LON, times=times)
    assert _fails([a, b]) == f"{b}: monthly values in a daily series; a series has one time step"


def test_other_calendar(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    b = climate_file(tmp_path / "b.nc", "tas", numbers(4), LAT, LON, "2001-01-05", "noleap")
    assert _fails([a, b]) == f"{a}: tas: files have different calendars: noleap, standard"


def test_other_grid(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    b = climate_file(tmp_path / "b.nc", "tas", numbers(4), LAT + 0.5, LON, "2001-01-05")
    assert _fails([a, b]) == (
        f"{b}: tas has other latitudes than a.nc; the files of a series lie on one grid"
    )


def test_other_unit(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    b = climate_file(tmp_path / "b.nc", "tas", numbers(4), LAT, LON, "2001-01-05", unit="degC")
    assert _fails([a, b]) == (
        f"{b}: tas has unit 'degC', but 'K' in a.nc; the files of a series have one unit"
    )


def test_unit_that_does_not_convert(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON, unit="mm")
    assert _fails([a]) == f"{a}: tas has unit 'mm', not convertible to degC"


def test_unknown_calendar(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    with netCDF4.Dataset(a, "a") as file:
        file["time"].calendar = "lunar"
    assert _fails([a]).startswith(f"{a}: calendar 'lunar' is not known; valid: standard, ")


def test_missing_variable(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    assert _fails([a], "pr") == (
        f"{a}: has no variable pr, nor one of standard name precipitation_flux or "
        "lwe_precipitation_rate with fitting cell methods; it holds tas"
    )


def test_missing_file(tmp_path: Path) -> None:
    assert _fails([tmp_path / "a.nc"]) == f"{tmp_path}/a.nc: no such file"


def test_file_cut_short(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(400), LAT, LON)
    content = a.read_bytes()
    a.write_bytes(content[: len(content) // 2])
    assert _fails([a]).startswith(f"{a}: not a readable NetCDF file (")


def test_file_damaged_inside(tmp_path: Path) -> None:
    """The header is whole; a compressed block is not."""
    noise = np.random.default_rng(1).normal(size=(400, 20, 30)).astype("f4")
    lat, lon = np.arange(20.0), np.arange(30.0)
    a = climate_file(tmp_path / "a.nc", "tas", noise, lat, lon)
    with xr.open_dataset(a, decode_times=False) as dataset:
        packed = {"zlib": True, "fletcher32": True, "chunksizes": (400, 20, 30)}
        dataset.load().to_netcdf(tmp_path / "b.nc", encoding={"tas": packed})
    b = tmp_path / "b.nc"
    content = bytearray(b.read_bytes())
    middle = len(content) // 2
    content[middle : middle + 64] = bytes(64)
    b.write_bytes(content)
    with open_series([b], "tas") as series, pytest.raises(InputError) as caught:
        series.read(slice(0, 10))
    assert str(caught.value).startswith(f"{b}: tas cannot be read (")


def test_curvilinear_grid(tmp_path: Path) -> None:
    two = np.add.outer(LAT, 0.1 * np.arange(2))
    dataset = xr.Dataset(
        {"tas": (("time", "y", "x"), numbers(4), {"units": "K", "coordinates": "lat lon"})},
        {
            "lat": (("y", "x"), two, {"units": "degrees_north", "standard_name": "latitude"}),
            "lon": (("y", "x"), two, {"units": "degrees_east", "standard_name": "longitude"}),
            "time": ("time", np.arange(4.0), {"units": "days since 2001-01-01"}),
        },
    )
    del dataset["tas"].attrs["coordinates"]
    dataset.to_netcdf(tmp_path / "a.nc")
    assert _fails([tmp_path / "a.nc"]) == (
        f"{tmp_path}/a.nc: the grid is rotated, curvilinear or unstructured (lat has dimensions "
        "(y, x)); regrid it to regular latitude and longitude first"
    )


def test_several_levels(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    with xr.open_dataset(a, decode_times=False) as dataset:
        dataset.load().expand_dims(plev=[1.0, 2.0]).to_netcdf(tmp_path / "b.nc")
    assert _fails([tmp_path / "b.nc"]) == (
        f"{tmp_path}/b.nc: tas has 2 values along plev; "
        "select one, so that time, latitude and longitude are left"
    )


def test_map_without_time(tmp_path: Path) -> None:
    a = climate_file(tmp_path / "a.nc", "tas", numbers(4), LAT, LON)
    with xr.open_dataset(a, decode_times=False) as dataset:
        dataset.load().isel(time=0, drop=True).to_netcdf(tmp_path / "b.nc")
    assert _fails([tmp_path / "b.nc"]) == (
        f"{tmp_path}/b.nc: has no time coordinate; tas must be a series"
    )


def test_no_files() -> None:
    assert _fails([]) == "tas: no files"
