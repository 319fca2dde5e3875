"""Climate series on the analysis grid, and the plain path beside it."""

from __future__ import annotations

import tempfile
from pathlib import Path

import cftime
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from prepare_inputs import climate_file, grid_of
from stook.audit.plain.prepare import PlainPixel, climate_of_pixel
from stook.errors import InputError
from stook.grids.analysis import AnalysisGrid
from stook.prepare.climate import common_steps, prepare_series, time_coordinate
from stook.prepare.series import Series, open_series

LAT, LON = np.arange(9.5, 14), np.arange(19.5, 25)
GRID = grid_of(10, 13, 20, 24, 0.5)


def noise(seed: int, *shape: int) -> np.ndarray:
    return np.random.default_rng(seed).normal(285, 8, shape).astype("f4")


def prepared(
    files: list[Path], variable: str, grid: AnalysisGrid, wanted: np.ndarray | None = None,
    block_mb: float = 64,
) -> np.ndarray:  # fmt: skip
    wanted = np.ones(grid.shape, dtype=bool) if wanted is None else wanted
    with open_series(files, variable) as series:
        whole = slice(0, len(series.times))
        return prepare_series(series, whole, grid, wanted, block_mb).values


@pytest.mark.parametrize(
    ("variable", "unit", "given_value", "expected"),
    [
        ("tas", "K", 300.0, 26.85),
        ("tasmax", "degF", 95.0, 35.0),
        ("tasmin", "degC", -3.5, -3.5),
        ("pr", "kg m-2 s-1", 1e-4, 8.64),
        ("pr", "mm day-1", 7.25, 7.25),
        ("pr", "m s-1", 1e-7, 8.64),
        ("rsds", "W m-2", 210.0, 210.0),
        ("rsds", "MJ m-2 day-1", 8.64, 100.0),
        ("hurs", "1", 0.75, 75.0),
        ("hurs", "%", 75.0, 75.0),
    ],
)
def test_units(
    tmp_path: Path, variable: str, unit: str, given_value: float, expected: float
) -> None:
    """SI definitions; pr x 86400 (CMIP6 day table: kg m-2 s-1, mm/day at 1000 kg m-3)."""
    values = np.full((2, 5, 6), given_value, dtype="f4")
    path = climate_file(tmp_path / "a.nc", variable, values, LAT, LON, unit=unit)
    found = prepared([path], variable, GRID)
    assert found.dtype == np.float32
    assert found.shape == (2, 6, 8)
    np.testing.assert_allclose(found, expected, rtol=3e-7)


@pytest.mark.parametrize("variable", ["tas", "pr"])
@pytest.mark.parametrize("form", ["plain", "descending", "eastward", "single"])
def test_same_grid_gives_the_same_bits(tmp_path: Path, variable: str, form: str) -> None:
    """Whatever the order of rows, the count of longitudes, or the rounding of coordinates."""
    grid = grid_of(10, 13, -24, -20, 0.5)
    values = np.abs(noise(1, 5, *grid.shape))
    values[2, 3, 4] = np.nan
    lat, lon, given_values = grid.lat, grid.lon, values
    match form:
        case "descending":
            lat, given_values = lat[::-1], values[:, ::-1]
        case "eastward":
            lon = lon % 360
        case "single":
            lat, lon = (lat / 3).astype("f4") * np.float32(3), lon.astype("f4")
    unit = "degC" if variable == "tas" else "mm day-1"
    path = climate_file(tmp_path / "a.nc", variable, given_values, lat, lon, unit=unit)
    np.testing.assert_array_equal(prepared([path], variable, grid), values)


def test_only_wanted_pixels_are_filled(tmp_path: Path) -> None:
    path = climate_file(tmp_path / "a.nc", "pr", noise(2, 4, 5, 6), LAT, LON)
    wanted = np.zeros(GRID.shape, dtype=bool)
    wanted[1, 2] = wanted[4, 7] = True
    part = prepared([path], "pr", GRID, wanted)
    assert (~np.isnan(part)).sum() == 8
    whole = prepared([path], "pr", GRID)
    np.testing.assert_array_equal(part[:, wanted], whole[:, wanted])
    assert np.isnan(prepared([path], "pr", GRID, np.zeros(GRID.shape, dtype=bool))).all()


def test_outside_the_source_is_missing(tmp_path: Path) -> None:
    """The source covers 10..12 N, 20..23 E; its outermost value holds to its edge, not further."""
    lat, lon = np.array([10.5, 11.5]), np.array([20.5, 21.5, 22.5])
    for variable in ("tas", "pr"):
        path = climate_file(tmp_path / f"{variable}.nc", variable, noise(3, 2, 2, 3), lat, lon)
        there = ~np.isnan(prepared([path], variable, GRID)[0])
        expected = (GRID.lat < 12)[:, None] & (GRID.lon < 23)[None, :]
        np.testing.assert_array_equal(there, expected)


@pytest.mark.parametrize("variable", ["hurs", "rsds"])
def test_blocks_and_parts_have_the_bits_of_the_whole(tmp_path: Path, variable: str) -> None:
    grid = grid_of(-6, 6, -11, 11, 0.5)
    values = noise(4, 300, 15, 30)
    values[np.random.default_rng(5).random(values.shape) < 0.1] = np.nan
    lat, lon = np.linspace(-7, 7, 15)[::-1], np.arange(0, 360, 12.0)
    files = [
        climate_file(tmp_path / "a.nc", variable, values[:120], lat, lon, "2001-01-01", "360_day"),
        climate_file(tmp_path / "b.nc", variable, values[120:], lat, lon, "2001-05-01", "360_day"),
    ]
    whole = prepared(files, variable, grid)
    assert np.isfinite(whole).mean() > 0.5
    np.testing.assert_array_equal(prepared(files, variable, grid, block_mb=0.05), whole)
    for rows, columns in ((slice(3, 9), slice(0, 44)), (slice(23, 24), slice(20, 25))):
        part = prepared(files, variable, grid.part(rows, columns))
        np.testing.assert_array_equal(part, whole[:, rows, columns])


def test_blocks_are_bounded_and_whole_chunks_of_the_file(tmp_path: Path) -> None:
    path = climate_file(tmp_path / "a.nc", "tas", noise(6, 4000, 5, 6), LAT, LON)
    grid = grid_of(0, 40, 0, 60, 0.5)
    with open_series([path], "tas") as series:
        for block_mb in (1, 4, 1000):
            wanted = np.zeros(grid.shape, dtype=bool)
            data = prepare_series(series, slice(0, 4000), grid, wanted, block_mb).data
            largest = np.prod([max(sizes) for sizes in data.chunks])
            assert largest <= max(block_mb * 2**20 / 4, 1825 * 100)
            assert data.chunks[0] == (1825, 1825, 350)
            for sizes in data.chunks[1:]:
                assert all(size % 10 == 0 for size in sizes[:-1])


def test_attributes(tmp_path: Path) -> None:
    path = climate_file(tmp_path / "a.nc", "tasmin", noise(7, 2, 5, 6), LAT, LON)
    with open_series([path], "tasmin") as series:
        data = prepare_series(series, slice(0, 2), GRID, np.ones(GRID.shape, dtype=bool), 1)
        assert data.attrs == {
            "standard_name": "air_temperature",
            "long_name": "daily minimum near-surface air temperature",
            "units": "degC",
            "cell_methods": "time: minimum",
            "units_metadata": "temperature: on_scale",
            "comment": "regridded: bilinear; unit in the files: K",
        }


def opened(
    folder: Path, variable: str, first: str, count: int, calendar: str = "standard",
    times: np.ndarray | None = None,
) -> Series:  # fmt: skip
    path = folder / f"{variable}_{first}_{count}_{calendar}.nc"
    values = noise(8, count, 5, 6)
    return open_series(
        [climate_file(path, variable, values, LAT, LON, first, calendar, times=times)], variable
    )


def test_common_time(tmp_path: Path) -> None:
    with (
        opened(tmp_path, "tas", "2001-01-01", 900) as tas,
        opened(tmp_path, "pr", "2001-03-02", 1000) as pr,
    ):
        assert common_steps([tas, pr], None) == [slice(60, 900), slice(0, 840)]
        assert common_steps([tas, pr], (2002, 2002)) == [slice(365, 730), slice(305, 670)]
        assert common_steps([tas], (2001, 2002)) == [slice(0, 730)]
        with pytest.raises(InputError) as caught:
            common_steps([tas, pr], (2001, 2002))
        assert str(caught.value) == (
            f"{pr.files[0].path}: pr holds 2001-03-02 to 2003-11-26, not the whole of periods.span "
            "2001 to 2002"
        )


def test_a_record_gives_the_part_of_the_span_it_has(tmp_path: Path) -> None:
    with opened(tmp_path, "tas", "2001-01-01", 730) as tas:
        assert common_steps([tas], (2002, 2100), whole=False) == [slice(365, 730)]
        with pytest.raises(InputError, match="not the whole of periods"):
            common_steps([tas], (2050, 2100), whole=False)


def test_span_in_the_calendar_of_360_days(tmp_path: Path) -> None:
    with opened(tmp_path, "tas", "2001-01-01", 720, "360_day") as tas:
        assert common_steps([tas], (2001, 2002)) == [slice(0, 720)]
        with pytest.raises(InputError, match="not the whole of periods"):
            common_steps([tas], (2001, 2003))


def test_span_of_annual_means(tmp_path: Path) -> None:
    times = 180.0 + 360 * np.arange(5)
    with opened(tmp_path, "tas", "1850-01-01", 5, "360_day", times) as tas:
        assert tas.step == "annual"
        assert common_steps([tas], (1851, 1854)) == [slice(1, 5)]
        stamps = time_coordinate(tas, slice(1, 3))
        assert [str(time)[:10] for time in stamps.values] == ["1851-07-01", "1852-07-01"]


def test_no_common_time(tmp_path: Path) -> None:
    with (
        opened(tmp_path, "tas", "2001-01-01", 10) as tas,
        opened(tmp_path, "pr", "2002-01-01", 10) as pr,
        pytest.raises(InputError) as caught,
    ):
        common_steps([tas, pr], None)
    assert str(caught.value) == (
        f"{tas.files[0].path}: variables share no time: tas 2001-01-01 to 2001-01-10; "
        "pr 2002-01-01 to 2002-01-10"
    )


def test_calendars_and_steps_of_variables_must_agree(tmp_path: Path) -> None:
    monthly = np.array([15.0, 46.0, 74.0])
    with (
        opened(tmp_path, "tas", "2001-01-01", 10) as tas,
        opened(tmp_path, "pr", "2001-01-01", 10, "noleap") as pr,
        opened(tmp_path, "hurs", "1850-01-01", 3, times=monthly) as hurs,
    ):
        for other, word in ((pr, "noleap, but tas is standard"), (hurs, "monthly, but tas is")):
            with pytest.raises(InputError) as caught:
                common_steps([tas, other], None)
            assert f"{other.variable} is {word}" in str(caught.value)


def test_days_are_stamped_at_noon(tmp_path: Path) -> None:
    times = np.array([0.0, 1.0, 2.0])  # midnight, the beginning of each day
    with opened(tmp_path, "tas", "1850-01-01", 3, times=times) as tas:
        found = time_coordinate(tas, slice(1, 3))
        assert found.values[0] == cftime.datetime(1850, 1, 2, 12, calendar="standard")
        assert found.attrs["units_metadata"] == "leap_seconds: none"
    with opened(tmp_path, "tas", "1850-02-29", 3, "360_day") as tas:
        found = time_coordinate(tas, slice(0, 3))
        assert [str(time) for time in found.values] == [
            "1850-02-29 12:00:00",
            "1850-02-30 12:00:00",
            "1850-03-01 12:00:00",
        ]
        assert "units_metadata" not in found.attrs


@settings(max_examples=12, derandomize=True, deadline=None, database=None)
@given(
    variable=st.sampled_from(["tas", "pr", "hurs", "rsds"]),
    unit_and_calendar=st.sampled_from([0, 1]),
    rows=st.integers(2, 6),
    columns=st.integers(2, 7),
    globe=st.booleans(),
    descending=st.booleans(),
    seed=st.integers(0, 10_000),
)
def test_same_as_the_plain_path(
    variable: str,
    unit_and_calendar: int,
    rows: int,
    columns: int,
    globe: bool,
    descending: bool,
    seed: int,
) -> None:
    random = np.random.default_rng(seed)
    lat = np.linspace(-70, 70, rows) + random.uniform(-2, 2, rows) * (not globe)
    lat = lat[::-1] if descending else lat
    lon = np.arange(columns) * 360 / columns if globe else np.linspace(-50, 60, columns)
    values = random.gamma(2.0, 10.0, (20, rows, columns))
    values[random.random(values.shape) < 0.25] = np.nan
    units = {
        "tas": ("K", "degF"),
        "pr": ("kg m-2 s-1", "mm day-1"),
        "hurs": ("%", "1"),
        "rsds": ("W m-2", "MJ m-2 day-1"),
    }
    options = {
        "unit": units[variable][unit_and_calendar],
        "calendar": ("standard", "360_day")[unit_and_calendar],
    }
    grid = grid_of(-60, 60, -150, 150, 15)
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        files = [
            climate_file(folder / "b.nc", variable, values[12:], lat, lon, "2001-02-13", **options),
            climate_file(folder / "a.nc", variable, values[:12], lat, lon, "2001-02-01", **options),
        ]
        found = prepared(files, variable, grid)
        for _ in range(6):
            i, j = random.integers(grid.shape[0]), random.integers(grid.shape[1])
            pixel = PlainPixel(*grid.lat_edges[i : i + 2], *grid.lon_edges[j : j + 2])
            dates, plain = climate_of_pixel(files, variable, pixel)
            assert dates == [(2001, 2, day) for day in range(1, 21)]
            np.testing.assert_allclose(found[:, i, j], plain, rtol=3e-7, atol=1e-5)
