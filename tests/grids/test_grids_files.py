"""Result files: encoding, blocks, tables, messages."""

from __future__ import annotations

from pathlib import Path

import cftime
import dask
import netCDF4
import numpy as np
import pandas as pd
import pytest
import xarray as xr
from stook.errors import ResultsError
from stook.grids.files import (
    delayed_netcdf,
    encoding,
    open_result,
    pixel_chunks,
    read_table,
    temporary_name,
    write_table,
)
from stook.grids.missing import Reason, reason_attributes


def cube(times: int = 2000, rows: int = 12, columns: int = 25) -> xr.Dataset:
    dates = cftime.num2date(np.arange(times) + 0.5, "days since 1990-01-01", calendar="360_day")
    values = np.random.default_rng(1).normal(size=(times, rows, columns)).astype("f4")
    values[0, 0, 0] = np.nan
    return xr.Dataset(
        {"tas": (("time", "lat", "lon"), values), "reason": (("lat", "lon"), values[0] > 0)},
        {"time": dates, "lat": np.arange(rows) + 0.5, "lon": np.arange(columns) + 0.5},
    ).assign(reason=lambda d: d["reason"].astype("i1"))


@pytest.mark.parametrize("codec", ["zstd", "zlib"])
def test_daily_grids_come_back_bit_for_bit(tmp_path: Path, codec: str) -> None:
    dataset = cube()
    dask.compute(delayed_netcdf(dataset.chunk(time=1825), tmp_path / "a.nc", codec))
    with open_result(tmp_path / "a.nc") as found:
        np.testing.assert_array_equal(found["tas"].values, dataset["tas"].values)
        assert (found["time"].values == dataset["time"].values).all()
    with netCDF4.Dataset(tmp_path / "a.nc") as file:
        assert file["tas"].chunking() == [1825, 10, 10]
        assert file["tas"].filters()[codec]
        assert file["time"].units == "days since 1850-01-01"
        assert file["time"].calendar == "360_day"
        assert np.isnan(file["tas"]._FillValue)
        assert "_FillValue" not in file["lat"].ncattrs()


def test_encoding_of_flags_and_bounds() -> None:
    dataset = cube(3).assign(lat_bnds=(("lat", "bnds"), np.zeros((12, 2))))
    options = encoding(dataset)
    assert options["reason"]["_FillValue"] is None
    assert options["lat_bnds"] == {"_FillValue": None}
    assert options["tas"]["chunksizes"] == (3, 10, 10)


@pytest.mark.parametrize("block_mb", [0.01, 1, 4, 1000])
def test_blocks_hold_whole_series_and_are_bounded(block_mb: float) -> None:
    dataset = cube(1825, 40, 70)
    chunks = pixel_chunks(dataset, block_mb, 1825)
    assert chunks["time"] == -1
    size = chunks["lat"] * chunks["lon"] * 1825 * 4
    assert size <= max(block_mb * 2**20, 10 * 1825 * 4)
    assert chunks["lon"] == 70 or chunks["lon"] <= 10 or chunks["lon"] % 10 == 0


def test_messages_of_result_files(tmp_path: Path) -> None:
    for opener, name in ((open_result, "a.nc"), (read_table, "a.parquet"), (read_table, "a.csv")):
        with pytest.raises(ResultsError) as caught:
            opener(tmp_path / name)
        assert str(caught.value) == f"{tmp_path}/{name}: no such file; run the stage that makes it"
        (tmp_path / name).write_bytes(b"\xff\xfe not what it should be \x00")
        with pytest.raises(ResultsError) as caught:
            opener(tmp_path / name)
        assert str(caught.value).startswith(f"{tmp_path}/{name}: cannot be read (")


def test_tables(tmp_path: Path) -> None:
    frame = pd.DataFrame({"region": ["a", "b"], "value": [1.5, np.nan]})
    for name in ("a.parquet", "a.csv"):
        write_table(frame, tmp_path / name)
        pd.testing.assert_frame_equal(read_table(tmp_path / name), frame)
    hidden = temporary_name(tmp_path / "b.csv")
    assert hidden.name.startswith(".b.csv.")
    write_table(frame, hidden)
    with pytest.raises(ValueError, match=r"a table is \.parquet or \.csv"):
        write_table(frame, tmp_path / "a.txt")


def test_every_reason_has_a_flag() -> None:
    attributes = reason_attributes()
    assert len(attributes["flag_values"]) == len(Reason)
    words = str(attributes["flag_meanings"]).split()
    assert words[Reason.VALID] == "valid"
    assert words[Reason.NO_CALENDAR] == "no_calendar"
