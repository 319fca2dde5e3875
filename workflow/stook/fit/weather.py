"""The weather of units from the season indices of pixels: area-weighted, term by term."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
import xarray as xr

from stook.fit.kernels import add_weighted
from stook.fit.panel import UnitWeather, design_columns
from stook.yields.response import Term


@dataclass
class WeatherSums:
    """Area-weighted sums over the pixels of units, band of rows by band of rows.

    The terms are formed at every pixel and then averaged, since that is how a response is
    applied: the mean of a square is not the square of a mean.

    Parameters
    ----------
    units
        Names of the regions.
    terms
        All terms of all specifications.
    years
        Years of the sums; every file has them.
    block_mb
        Size of the values held at a time, MiB.
    """

    units: list[str]
    terms: list[Term]
    years: np.ndarray
    block_mb: float
    area: np.ndarray = field(init=False)
    total: np.ndarray | None = field(init=False, default=None)
    ranges: dict[str, tuple[float, float]] = field(init=False)

    def __post_init__(self) -> None:
        """Begin with nothing."""
        self.area = np.zeros(len(self.units))
        self.names = list(dict.fromkeys(index for term in self.terms for index in term.used))
        self.ranges = dict.fromkeys(self.names, (np.inf, -np.inf))

    def add(self, season: xr.Dataset, coverage: xr.DataArray, area: xr.DataArray) -> None:
        """Add the pixels of one file.

        Parameters
        ----------
        season
            Season indices (year, lat, lon).
        coverage
            Share of every cell inside every unit (region, lat, lon), units in their order.
        area
            Harvested area (lat, lon), ha.
        """
        for rows in self._bands(season):
            self._add_band(season.isel(lat=rows), coverage.isel(lat=rows), area.isel(lat=rows))

    def result(self) -> UnitWeather:
        """Return the means of the units; a unit of no area has none."""
        if self.total is None:
            raise ValueError("no pixel was added")
        size = len(self.names)
        with np.errstate(invalid="ignore"):
            mean = self.total / self.area[:, None, None]
        index = pd.MultiIndex.from_product([self.units, self.years], names=["unit", "year"])
        flat = pd.DataFrame(mean.reshape(-1, mean.shape[-1]), index=index)
        held = flat[np.repeat(self.area > 0, len(self.years))]
        indices = held.iloc[:, :size].set_axis(self.names, axis=1)
        columns = held.iloc[:, size:].set_axis(self._columns, axis=1)
        return UnitWeather(columns, indices, self.ranges)

    def _bands(self, season: xr.Dataset) -> Iterator[slice]:
        columns = len(self.names) + 3 * len(self.terms)
        line = 8 * columns * len(self.years) * season.sizes["lon"]
        lines = max(1, int(self.block_mb * 2**20 / max(1, line)))
        for start in range(0, season.sizes["lat"], lines):
            yield slice(start, min(start + lines, season.sizes["lat"]))

    def _add_band(self, season: xr.Dataset, coverage: xr.DataArray, area: xr.DataArray) -> None:
        harvested = np.nan_to_num(area.transpose("lat", "lon").values).ravel()
        shares = coverage.transpose("region", "lat", "lon").values.reshape(len(self.units), -1)
        weights = shares * harvested
        part = season[self.names].sel(year=self.years).transpose("lat", "lon", "year").load()
        indices = {
            name: part[name].values.astype(np.float64).reshape(len(harvested), -1)
            for name in self.names
        }
        columns = design_columns(self.terms, indices)
        self._columns = list(columns)
        values = np.stack([*indices.values(), *columns.values()], axis=-1)
        used = (weights > 0).any(axis=0) & np.isfinite(values).all(axis=2).any(axis=1)
        if self.total is None:
            self.total = np.zeros((len(self.units), len(self.years), values.shape[2]))
        weights = np.where(used, weights, 0.0)
        add_weighted(weights, values, self.total)
        for pixel in range(len(used)):
            self.area += weights[:, pixel]
        for place, name in enumerate(self.names):
            seen = values[used, :, place]
            seen = seen[np.isfinite(seen)]
            if seen.size:
                low, high = self.ranges[name]
                self.ranges[name] = (min(low, float(seen.min())), max(high, float(seen.max())))
