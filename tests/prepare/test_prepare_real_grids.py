"""Real grids and a real record (see docs/real-input.md) against scipy and plain arithmetic."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import iris_sample_data
import numpy as np
import xarray as xr
from prepare_inputs import grid_of
from scipy.interpolate import RegularGridInterpolator
from stook.prepare.climate import common_steps, prepare_series, time_coordinate
from stook.prepare.series import open_series

REAL_INPUT = Path(__file__).parents[1] / "real_input"


def test_climate_model_over_north_america() -> None:
    """Annual means, 360-day calendar, longitudes 225..315; bilinear as scipy has it."""
    path = Path(iris_sample_data.path) / "A1B_north_america.nc"
    grid = grid_of(20, 50, -125, -70, 2.5)
    with open_series([path], "tas") as series:
        assert (series.calendar, series.step, len(series.times)) == ("360_day", "annual", 240)
        steps = common_steps([series], (1961, 1990))[0]
        wanted = np.ones(grid.shape, dtype=bool)
        found = prepare_series(series, steps, grid, wanted, 1).values
        years = [time.year for time in time_coordinate(series, steps).values]
    assert years == list(range(1961, 1991))
    with xr.open_dataset(path, decode_times=False) as dataset:
        field = dataset["air_temperature"].load()
    places = tuple(np.meshgrid(grid.lat, grid.lon + 360, indexing="ij"))
    for year in (1961, 1990):
        values = field.values[year - 1860].astype(float)
        axes = field["latitude"].values.astype(float), field["longitude"].values.astype(float)
        expected = RegularGridInterpolator(axes, values)(places) - 273.15
        np.testing.assert_allclose(found[year - 1961], expected, rtol=0, atol=1e-4)


def test_station_record(tmp_path: Path) -> None:
    """One cell, degrees Fahrenheit, missing days."""
    specification = importlib.util.spec_from_file_location("station", REAL_INPUT / "station.py")
    assert specification is not None
    assert specification.loader is not None
    station = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(station)
    record = station.station_dataset()
    record.to_netcdf(tmp_path / "station.nc")
    grid = grid_of(34.5, 35, -83, -82.5, 0.5)
    with open_series([tmp_path / "station.nc"], "tasmax") as series:
        whole = slice(0, len(series.times))
        found = prepare_series(series, whole, grid, np.ones((1, 1), dtype=bool), 1).values
    fahrenheit = record["tasmax"].values
    assert np.isnan(fahrenheit).sum() > 50
    np.testing.assert_allclose(found, (fahrenheit - 32) * 5 / 9, rtol=0, atol=5e-6)
