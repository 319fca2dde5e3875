"""Invented weather for the season tests."""

from __future__ import annotations

import cftime
import numpy as np
import xarray as xr

VARIABLES = ("tasmin", "tasmax", "pr", "rsds", "hurs")


def daily_dates(first: str, count: int, calendar: str) -> np.ndarray:
    """Return consecutive dates from ``YYYY-MM-DD``."""
    year, month, day = map(int, first.split("-"))
    ordinals = np.arange(count) + cftime.date2num(
        cftime.datetime(year, month, day, 12, calendar=calendar), "days since 1850-01-01", calendar
    )
    return cftime.num2date(ordinals, "days since 1850-01-01", calendar)


def whole_years(first: int, last: int, calendar: str) -> np.ndarray:
    """Return every day of some years."""
    start = cftime.datetime(first, 1, 1, calendar=calendar)
    days = (cftime.datetime(last + 1, 1, 1, calendar=calendar) - start).days
    return daily_dates(f"{first}-01-01", days, calendar)


def monthly_dates(first: int, last: int, calendar: str) -> np.ndarray:
    """Return the middle of every month of some years."""
    return np.array(
        [
            cftime.datetime(year, month, 15, calendar=calendar)
            for year in range(first, last + 1)
            for month in range(1, 13)
        ]
    )


def weather(
    dates: np.ndarray, shape: tuple[int, int], seed: int = 4, step: str = "daily"
) -> xr.Dataset:
    """Return invented grids (time, lat, lon), float32, in the units of prepared files."""
    random = np.random.default_rng(seed)
    position = np.array([(date.dayofyr - 1) / 365 for date in dates])
    noise = random.standard_normal((len(VARIABLES), len(dates), *shape))
    mean = (12 - 11 * np.cos(2 * np.pi * (position - 0.05)))[:, None, None] + 4 * noise[0]
    half = np.maximum(5 + 1.5 * noise[1], 0.3)
    rain = np.where(noise[2] > 0.3, np.abs(noise[3]) * 8, 0.0)
    values = {
        "tasmin": mean - half,
        "tasmax": mean + half,
        "pr": rain,
        "rsds": 180 + 60 * noise[3],
        "hurs": np.clip(70 + 12 * noise[4], 5, 100),
    }
    return xr.Dataset(
        {name: (("time", "lat", "lon"), grid.astype(np.float32)) for name, grid in values.items()},
        {
            "time": ("time", dates),
            "lat": np.arange(shape[0]) * 0.5 + 44.25,
            "lon": np.arange(shape[1]) * 0.5 + 5.25,
        },
        {"time_step": step},
    )


def layer(climate: xr.Dataset, values: np.ndarray | float) -> xr.DataArray:
    """Return a layer (lat, lon) on the grid of the weather."""
    shape = (climate.sizes["lat"], climate.sizes["lon"])
    return xr.DataArray(
        np.broadcast_to(np.asarray(values, dtype=np.float64), shape).copy(),
        {"lat": climate["lat"], "lon": climate["lon"]},
        ("lat", "lon"),
    )


def no_reason(climate: xr.Dataset) -> xr.DataArray:
    """Return reasons that compute every pixel."""
    return layer(climate, 0).astype(np.int8)
