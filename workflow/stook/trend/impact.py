"""Observed impact: yields under observed weather against the same weather without its trends.

Method of Lobell, Schlenker & Costa-Roberts 2011, Science 333:616 (form from memory): the index
series of every pixel are detrended, the response gives yields under both, and the trend of their
ratio over the period is the impact.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import xarray as xr
from scipy import sparse

from stook.constants import CENTRAL_DRAW
from stook.regions.kernels import add_areas
from stook.regions.totals import SystemGrids, region_weights
from stook.trend.detrend import (
    Weather,
    detrend,
    impact_series,
    lowest_value,
    mean_of_years,
)
from stook.trend.kernels import area_sums
from stook.trend.series import TrendOptions
from stook.yields.draws import LANES, DrawTotals
from stook.yields.response import Response
from stook.yields.response_terms import response_columns


@dataclass(frozen=True)
class Setting:
    """What the impact of one system depends on besides its grids.

    Attributes
    ----------
    response
        Of the crop and system.
    coefficients
        float64, shape (draw, k), the central estimate first.
    baseline
        First and last year.
    options
        Options of the trend tests.
    block_mb
        Size of the largest arrays of a band, MiB.
    """

    response: Response
    coefficients: np.ndarray
    baseline: tuple[int, int]
    options: TrendOptions
    block_mb: float


@dataclass(frozen=True)
class Block:
    """Pixels with a yield, in row-major order, in one period.

    Attributes
    ----------
    rows
        The rows of the grid the block covers.
    used
        Flat place of each pixel in those rows.
    baseline_yield
        float64, shape (s,), t/ha.
    weather
        Their weather.
    design, valid
        (s, year, k) and (s, year): all years under observed weather, then those of the period
        under detrended weather.
    """

    rows: slice
    used: np.ndarray
    baseline_yield: np.ndarray
    weather: Weather
    design: np.ndarray
    valid: np.ndarray

    def yields(
        self, setting: Setting, axis: JointYears, draws: slice
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return yields under observed and detrended weather, t/ha, (draw, s, n)."""
        pixels = len(self.used)
        totals = axis.totals(setting, draws, pixels)
        totals.add(self.design, self.valid, self.baseline_yield, sparse.eye_array(pixels))
        return axis.split(totals.production)


@dataclass(frozen=True)
class JointYears:
    """All years under observed weather, then those of the period under detrended weather.

    On one axis, so that yields under both refer to the same mean over the baseline years: that
    under observed weather.

    Attributes
    ----------
    years
        int64, all years there are.
    inside
        bool, those of the period.
    baseline
        bool, shape (axis,): the baseline years under observed weather.
    """

    years: np.ndarray
    inside: np.ndarray
    baseline: np.ndarray

    @classmethod
    def of(cls, season: xr.Dataset, setting: Setting, ends: tuple[int, int]) -> JointYears:
        """Return the axis for a period."""
        years = season["year"].values.astype(np.int64)
        inside = (years >= ends[0]) & (years <= ends[1])
        base = (years >= setting.baseline[0]) & (years <= setting.baseline[1])
        return cls(years, inside, np.concatenate([base, np.zeros(inside.sum(), dtype=bool)]))

    def split(self, joint: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return the years of the period under observed and under detrended weather."""
        count = len(self.years)
        return joint[..., :count][..., self.inside], joint[..., count:]

    def totals(self, setting: Setting, draws: slice, regions: int) -> DrawTotals:
        """Return empty totals of so many regions."""
        response = setting.response
        log_link = response.link == "log"
        chosen = setting.coefficients[draws]
        return DrawTotals(chosen, response.intercept, log_link, self.baseline, regions)


def blocks(
    grids: SystemGrids, setting: Setting, axis: JointYears, ends: tuple[int, int], draws: int
) -> Iterator[Block]:
    """Yield the pixels of a system in bands of rows.

    Parameters
    ----------
    grids
        Of ``observed``.
    setting
        Response, coefficients and options.
    axis
        The years.
    ends
        First and last year of the period.
    draws
        Draws whose yields are held of every pixel; sets the size of a band.
    """
    response = setting.response
    needed = response.used_indices
    lowest = {name: lowest_value(response.indices[name]) for name in needed}
    years, inside = axis.years, axis.inside
    held = len(axis.baseline) * (4 * setting.coefficients.shape[1] + 2 * max(draws, LANES))
    for rows in _bands(grids.season, held, setting):
        reason = grids.yields["reason"].isel(lat=rows).values.ravel()
        area = np.nan_to_num(grids.layer["area"].isel(lat=rows).values).ravel()
        used = np.flatnonzero((area > 0) & (reason == 0))
        if not used.size:
            continue
        season = grids.season[needed].isel(lat=rows).transpose("year", "lat", "lon").load()
        series = {name: _pixels(season[name], used) for name in needed}
        period = {name: values[inside] for name, values in series.items()}
        weather = detrend(period, years[inside], ends[0], lowest, setting.options)
        columns = [
            np.concatenate([one.T, other.T], axis=1)
            for one, other in zip(
                response_columns(response, series),
                response_columns(response, weather.detrended),
                strict=True,
            )
        ]
        joint = np.stack(columns, axis=-1)
        yield Block(
            rows=rows,
            used=used,
            baseline_yield=grids.layer["baseline_yield"].isel(lat=rows).values.ravel()[used],
            weather=weather,
            design=joint,
            valid=np.isfinite(joint).all(axis=2),
        )


def _bands(season: xr.Dataset, values: int, setting: Setting) -> Iterator[slice]:
    rows, width = season.sizes["lat"], season.sizes["lon"]
    lines = max(1, int(setting.block_mb * 2**20 / (8 * values * width)))
    for start in range(0, rows, lines):
        yield slice(start, min(start + lines, rows))


def _pixels(grid: xr.DataArray, used: np.ndarray) -> np.ndarray:
    values = grid.values.astype(np.float64)
    return values.reshape(len(values), -1)[:, used]


@dataclass(frozen=True)
class SystemImpact:
    """Sums over the pixels of each region, of one system and period.

    Attributes
    ----------
    regions
        Names.
    ends
        First and last year of the period.
    years
        int64, shape (n,).
    actual, detrended
        Production, t, shape (draw, region, n).
    series
        float64, shape (region, n): the impact series of the pixels (log yield) times their
        production under detrended weather, t.
    weight
        float64, shape (region,): that production, mean over the years, t.
    area, missing_area
        ha with a value and without, shape (region,).
    """

    regions: list[str]
    ends: tuple[int, int]
    years: np.ndarray
    actual: np.ndarray
    detrended: np.ndarray
    series: np.ndarray
    weight: np.ndarray
    area: np.ndarray
    missing_area: np.ndarray

    def __add__(self, other: SystemImpact) -> SystemImpact:
        """Return two systems together, over the years both have."""
        years = np.intersect1d(self.years, other.years)
        one, two = np.isin(self.years, years), np.isin(other.years, years)
        return SystemImpact(
            self.regions,
            (max(self.ends[0], other.ends[0]), min(self.ends[1], other.ends[1])),
            years,
            self.actual[..., one] + other.actual[..., two],
            self.detrended[..., one] + other.detrended[..., two],
            self.series[:, one] + other.series[:, two],
            self.weight + other.weight,
            self.area + other.area,
            self.missing_area + other.missing_area,
        )


def system_impact(
    grids: SystemGrids, overlay: xr.Dataset, setting: Setting, ends: tuple[int, int]
) -> SystemImpact:
    """Sum yields under observed and detrended weather over regions, for every draw.

    The weight of a pixel in a region is its harvested area times the share of the cell inside the
    polygon. A pixel without a yield, or with too few years, is left out.

    Parameters
    ----------
    grids
        Of ``observed``, lazy or in memory; read in bands of rows.
    overlay
        ``coverage`` and, in a full run, ``covered``.
    setting
        Response, coefficients and options.
    ends
        First and last year of the period.
    """
    axis = JointYears.of(grids.season, setting, ends)
    years = axis.years[axis.inside]
    names = region_weights(overlay)[0]
    totals = axis.totals(setting, slice(None), len(names))
    series, weight = np.zeros((len(names), len(years))), np.zeros((len(names), 1))
    area, grown = np.zeros(len(names)), _region_areas(grids, overlay)
    for block in blocks(grids, setting, axis, ends, draws=1):
        shares = region_weights(overlay.isel(lat=block.rows).load())[1].values
        harvested = grids.layer["area"].isel(lat=block.rows).values.ravel()[block.used]
        weights = shares.reshape(len(names), -1)[:, block.used] * harvested
        weights = np.where(block.weather.enough, weights, 0.0)
        add_areas(weights, block.weather.enough, area)
        totals.add(block.design, block.valid, block.baseline_yield, weights)
        _, detrended = block.yields(setting, axis, slice(CENTRAL_DRAW, CENTRAL_DRAW + 1))
        usual = mean_of_years(detrended[0].T)
        carried = impact_series(setting.response, setting.coefficients[CENTRAL_DRAW], block.weather)
        ones = np.ones((1, len(block.used)))
        for number, row in enumerate(weights):
            there = row > 0
            tonnes = row[there] * usual[there]
            area_sums(carried[:, there], tonnes, series[number])
            area_sums(ones[:, there], tonnes, weight[number])
    actual, detrended = axis.split(totals.production)
    missing = grown - area
    return SystemImpact(names, ends, years, actual, detrended, series, weight[:, 0], area, missing)


def _region_areas(grids: SystemGrids, overlay: xr.Dataset) -> np.ndarray:
    """Return the harvested area of every region, ha, pixels added in row-major order."""
    names, shares = region_weights(overlay)
    area = np.zeros(len(names))
    for row in range(grids.layer.sizes["lat"]):
        harvested = np.nan_to_num(grids.layer["area"].isel(lat=row).values)
        used = np.flatnonzero(harvested > 0)
        weights = np.ascontiguousarray(shares.isel(lat=row).values[:, used] * harvested[used])
        add_areas(weights, np.ones(used.size, dtype=bool), area)
    return area
