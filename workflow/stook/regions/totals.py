"""Production, area and flags by region, system, year and draw."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
import xarray as xr

from stook.constants import CENTRAL_DRAW, OUTSIDE
from stook.grids.files import PIXEL_CHUNK
from stook.regions.kernels import add_areas, add_flagged
from stook.yields.draws import DrawTotals
from stook.yields.response import Response
from stook.yields.response_terms import design_matrix
from stook.yields.technology import TECHNOLOGY

COMBINED = "all"
"""System name of the combination of the water systems of a crop."""

COLUMNS = [
    *("region", "system", "year", "draw", "production_t", "area_ha", "extrapolated_share"),
    "missing_area_ha",
]


@dataclass(frozen=True)
class SystemGrids:
    """The grids of one crop, water system and simulation; same lat and lon in all three.

    Attributes
    ----------
    season
        Season indices, dimensions (year, lat, lon).
    yields
        ``reason`` (lat, lon) and ``extrapolated`` (year, lat, lon).
    layer
        ``area`` (ha) and ``baseline_yield`` (t ha-1), dimensions (lat, lon).
    """

    season: xr.Dataset
    yields: xr.Dataset
    layer: xr.Dataset


@dataclass(frozen=True)
class Totals:
    """Totals of one system.

    Attributes
    ----------
    regions
        Names; the last is `OUTSIDE` in a full run.
    years
        int, shape (year,).
    production
        t, shape (draw, region, year); NaN where a pixel of the region has no value in that year.
    area, missing_area
        ha with a value and without, shape (region,).
    flagged_area
        ha with an index outside its estimation range, shape (region, year).
    """

    regions: list[str]
    years: np.ndarray
    production: np.ndarray
    area: np.ndarray
    missing_area: np.ndarray
    flagged_area: np.ndarray

    def __add__(self, other: Totals) -> Totals:
        """Return two systems together."""
        if not np.array_equal(self.years, other.years):
            return _common(self, other)
        return Totals(
            self.regions,
            self.years,
            self.production + other.production,
            self.area + other.area,
            self.missing_area + other.missing_area,
            self.flagged_area + other.flagged_area,
        )


def _common(one: Totals, other: Totals) -> Totals:
    """Add two systems over the years both have; the first season of one may lie a year later."""
    years = np.intersect1d(one.years, other.years)
    kept = []
    for totals in (one, other):
        there = np.isin(totals.years, years)
        production, flagged = totals.production[..., there], totals.flagged_area[:, there]
        kept.append(
            Totals(totals.regions, years, production, totals.area, totals.missing_area, flagged)
        )
    return kept[0] + kept[1]


def region_weights(overlay: xr.Dataset) -> tuple[list[str], xr.DataArray]:
    """Return the regions, and the share of every cell in each: (region, lat, lon).

    What no region covers is a region of its own, `OUTSIDE`, if the overlay says how much of each
    cell any region covers (that of a full run does).
    """
    names = [str(name) for name in overlay["region"].values]
    shares = overlay["coverage"]
    if "covered" not in overlay:
        return names, shares
    rest = (1.0 - overlay["covered"]).expand_dims(region=[OUTSIDE])
    return [*names, OUTSIDE], xr.concat([shares, rest], "region")


def system_totals(
    grids: SystemGrids,
    overlay: xr.Dataset,
    response: Response,
    coefficients: np.ndarray,
    baseline: tuple[int, int],
    block_mb: float,
) -> Totals:
    """Sum the production of one system over regions, for every draw.

    The weight of a pixel in a region is its harvested area times the share of the cell inside the
    polygon. A pixel without a yield (reason not 0) is left out of production and area, and its
    area is given apart.

    Parameters
    ----------
    grids
        Lazy or in memory; read in bands of rows.
    overlay
        ``coverage`` and, in a full run, ``covered``.
    response
        Of this crop and system.
    coefficients
        shape (draw, k), the central estimate first.
    baseline
        First and last year.
    block_mb
        Size of the index values of a band, MiB.
    """
    years = grids.season["year"].values
    names = region_weights(overlay)[0]
    inside = (years >= baseline[0]) & (years <= baseline[1])
    sums = DrawTotals(coefficients, response.intercept, response.link == "log", inside, len(names))
    area, missing = np.zeros(len(names)), np.zeros(len(names))
    flagged = np.zeros((len(names), len(years)))
    for rows in _bands(grids.season, response, coefficients.shape[1], block_mb):
        layer = grids.layer.isel(lat=rows).load()
        shares = region_weights(overlay.isel(lat=rows).load())[1].values
        harvested = np.nan_to_num(layer["area"].values).ravel()
        used = np.flatnonzero(harvested > 0)
        if not used.size:
            continue
        weights = np.ascontiguousarray(shares.reshape(len(names), -1)[:, used] * harvested[used])
        reason = grids.yields["reason"].isel(lat=rows).values.ravel()[used]
        add_areas(weights, reason == 0, area)
        add_areas(weights, reason != 0, missing)
        weights[:, reason != 0] = 0.0
        if not weights.any():
            continue
        season = grids.season[response.used_indices].isel(lat=rows).load()
        design = design_matrix(response, season)[used]
        valid = np.isfinite(design).all(axis=2)
        sums.add(design, valid, layer["baseline_yield"].values.ravel()[used], weights)
        marks = grids.yields["extrapolated"].isel(lat=rows).transpose("lat", "lon", "year")
        add_flagged(weights, marks.values.reshape(-1, len(years))[used] != 0, flagged)
    return Totals(names, years, sums.production, area, missing, flagged)


def _bands(
    season: xr.Dataset, response: Response, columns: int, block_mb: float
) -> Iterator[slice]:
    """Return bands of rows whose index values and design columns fit a block."""
    rows, width = season.sizes["lat"], season.sizes["lon"]
    values = (len(response.indices) + columns) * season.sizes["year"]
    lines = max(1, int(block_mb * 2**20 / (8 * values * width)))
    if lines > PIXEL_CHUNK:
        lines -= lines % PIXEL_CHUNK  # whole chunks of the files
    for start in range(0, rows, lines):
        yield slice(start, min(start + lines, rows))


def totals_table(
    systems: Mapping[str, Totals], technology: pd.Series | None = None
) -> pd.DataFrame:
    """Return the totals of a crop as a table.

    Parameters
    ----------
    systems
        By name, in the order of the assessment; of more than one, the combination `COMBINED`
        follows.
    technology
        Factor of the production by year; none where it is constant.

    Returns
    -------
    DataFrame
        Columns `COLUMNS`, and the technology factor if there is one; sorted by draw (0 is
        central), system, region, year. A share of no area is NaN, and so is that of a year without
        production.
    """
    parts = dict(systems)
    if len(parts) > 1:
        first, *others = parts.values()
        for other in others:
            first = first + other
        parts[COMBINED] = first
    production = np.concatenate(
        [totals.production.reshape(len(totals.production), -1) for totals in parts.values()], axis=1
    )
    draws, size = production.shape
    cells = pd.concat([_cells(totals, system) for system, totals in parts.items()])
    table = cells.take(np.tile(np.arange(size), draws)).reset_index(drop=True)
    table["draw"] = np.repeat(np.arange(draws, dtype=np.int64), size)
    table["production_t"] = production.ravel()
    table = table[COLUMNS]
    if technology is not None:
        table[TECHNOLOGY] = technology.loc[table["year"]].to_numpy()
        table["production_t"] *= table[TECHNOLOGY]
    return table


def _cells(totals: Totals, system: str) -> pd.DataFrame:
    """Return what is the same for every draw, a row for each region and year."""
    regions, years = totals.flagged_area.shape
    area = np.repeat(totals.area, years)
    known = np.isfinite(totals.production[CENTRAL_DRAW].ravel()) & (area > 0)
    share = np.full(regions * years, np.nan)
    np.divide(totals.flagged_area.ravel(), area, out=share, where=known)
    return pd.DataFrame(
        {
            "region": pd.Series(np.repeat(totals.regions, years), dtype="str"),
            "system": pd.Series([system], dtype="str").repeat(regions * years).to_numpy(),
            "year": np.tile(totals.years.astype(np.int64), regions),
            "area_ha": area,
            "extrapolated_share": np.minimum(share, 1.0),
            "missing_area_ha": np.repeat(totals.missing_area, years),
        }
    )
