"""From the grids of crop data to the analysis grid: area, calendar, baseline yield.

Area is extensive: a source cell is shared out among the pixels by the part of it that lies in
each, so totals are kept. Yield is intensive: the mean over the source cells under a pixel,
weighted by crop area where that is known on the same grid, else by overlap. A calendar is that of
the source cell at the pixel's centre.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from cf_units import Unit

from stook.errors import InputError
from stook.grids.analysis import AnalysisGrid
from stook.grids.cells import cell_areas
from stook.grids.regrid import (
    AxisWeights,
    conservative_weights,
    nearest_weights,
    weighted_mean,
    weighted_total,
)
from stook.prepare.rasters import Number, Raster

HECTARES_PER_KM2 = 100.0
YIELD_UNIT = "t ha-1"
LAST_DAY = 365


@dataclass(frozen=True)
class AreaUnit:
    """How values of an area layer become hectares.

    Attributes
    ----------
    factor
        Hectares, or share of the cell, per unit of value.
    share
        Whether values are shares of the cell.
    """

    factor: float
    share: bool

    def hectares(self, values: np.ndarray, cells: np.ndarray) -> np.ndarray:
        """Return hectares from values and the areas of their cells in km2."""
        scaled = values if self.factor == 1.0 else values * self.factor
        return scaled * (cells * HECTARES_PER_KM2) if self.share else scaled


def area_unit(unit: str | None, where: str) -> AreaUnit:
    """Return how a unit of crop area is read: ha, km2, m2, or a share of the cell (1, %).

    Raises
    ------
    InputError
        If there is no unit or it is neither an area nor a share.
    """
    given = _unit(unit, where, "ha, km2, or 1 or % for a share of the cell")
    if given.is_convertible("ha"):
        return AreaUnit(float(given.convert(1.0, "ha")), share=False)
    if given.is_convertible("1"):
        return AreaUnit(float(given.convert(1.0, "1")), share=True)
    raise InputError(f"{where}: unit {unit!r} is neither an area (ha, km2) nor a share (1, %)")


def yield_factor(unit: str | None, where: str) -> float:
    """Return what turns a unit of yield into t ha-1.

    Raises
    ------
    InputError
        If there is no unit or it does not convert.
    """
    given = _unit(unit, where, YIELD_UNIT)
    if not given.is_convertible(YIELD_UNIT):
        raise InputError(f"{where}: unit {unit!r} is not convertible to {YIELD_UNIT}")
    return float(given.convert(1.0, YIELD_UNIT))


def _unit(unit: str | None, where: str, valid: str) -> Unit:
    if unit is None or not unit.strip():
        raise InputError(f"{where}: has no unit; give `unit` in the assessment: {valid}")
    try:
        return Unit(unit)
    except ValueError:
        raise InputError(f"{where}: unit {unit!r} is not known; give {valid}") from None


def area_on_grid(raster: Raster | Number, grid: AnalysisGrid, block_mb: float) -> np.ndarray:
    """Return harvested area per pixel in ha; what lies inside the grid is kept in total.

    Parameters
    ----------
    raster
        Area, or share of the cell; a missing value is no crop. A number is the area, or the
        share, of every pixel.
    grid
        The whole analysis grid.
    block_mb
        Size of the parts of the raster that are read at once, MiB.

    Returns
    -------
    ndarray
        float64, shape (lat, lon).

    Raises
    ------
    InputError
        If an area is negative or infinite, or the unit is no area.
    """
    unit = area_unit(raster.unit, raster.where)
    if isinstance(raster, Number):
        value = _checked(np.full(grid.shape, raster.value), raster.where, "an area")
        return unit.hectares(value, cell_areas(grid.lat_edges, grid.lon_edges))
    rows = conservative_weights(raster.lat, grid.lat_edges, "lat", share_of="source")
    columns = conservative_weights(raster.lon, grid.lon_edges, "lon", share_of="source")
    result = np.zeros(grid.shape)
    for part in _parts(raster, rows, columns, block_mb):
        hectares = _read_hectares(raster, unit, part)
        weighted_total(hectares, part.rows.arrays, part.columns.arrays, result[part.pixels])
    return result


def yield_on_grid(
    raster: Raster | Number, grid: AnalysisGrid, area: Raster | Number, block_mb: float
) -> np.ndarray:
    """Return baseline yield per pixel in t ha-1; NaN where no source cell under it has one.

    Parameters
    ----------
    raster
        Yield; a missing value or zero is no yield.
    grid
        The whole analysis grid.
    area
        Harvested area of the same crop; it weights the yields if it lies on the same grid.
    block_mb
        Size of the parts of the raster that are read at once, MiB.

    Returns
    -------
    ndarray
        float64, shape (lat, lon).

    Raises
    ------
    InputError
        If a yield is negative or infinite, or the unit is no yield.
    """
    factor = yield_factor(raster.unit, raster.where)
    if isinstance(raster, Number):
        value = _checked(np.full(grid.shape, raster.value), raster.where, "a yield")
        return np.where(value == 0, np.nan, value * factor)
    rows = conservative_weights(raster.lat, grid.lat_edges, "lat")
    columns = conservative_weights(raster.lon, grid.lon_edges, "lon")
    unit = None
    if isinstance(area, Raster) and raster.same_grid(area):
        unit = area_unit(area.unit, area.where)
    result = np.full((1, *grid.shape), np.nan)
    wanted = np.ones(grid.shape, dtype=bool)
    for part in _parts(raster, rows, columns, block_mb):
        values = _checked(_read(raster, part), raster.where, "a yield")
        values[values == 0] = np.nan
        importance = None
        if isinstance(area, Raster) and unit is not None:
            importance = _read_density(area, unit, part)
        weighted_mean(
            values[None], part.rows.arrays, part.columns.arrays, importance,
            wanted[part.pixels], 0.0, factor, 0.0, result[:, part.pixels[0], part.pixels[1]],
        )  # fmt: skip
    return result[0]


def calendar_on_grid(raster: Raster | Number, grid: AnalysisGrid, block_mb: float) -> np.ndarray:
    """Return the day of year of the source cell at each pixel's centre; NaN where there is none.

    Parameters
    ----------
    raster
        Day of year, 1 to 366; a missing value or zero is no date, 366 is read as 365.
    grid
        The whole analysis grid.
    block_mb
        Size of the parts of the raster that are read at once, MiB.

    Returns
    -------
    ndarray
        float64, shape (lat, lon).

    Raises
    ------
    InputError
        If a day lies outside 1 to 366.
    """
    if isinstance(raster, Number):
        return _days(np.full(grid.shape, raster.value), raster.where)
    rows = nearest_weights(raster.lat, grid.lat, "lat")
    columns = nearest_weights(raster.lon, grid.lon, "lon")
    result = np.full((1, *grid.shape), np.nan)
    wanted = np.ones(grid.shape, dtype=bool)
    for part in _parts(raster, rows, columns, block_mb):
        days = _days(_read(raster, part), raster.where)
        weighted_mean(
            days[None], part.rows.arrays, part.columns.arrays, None,
            wanted[part.pixels], 0.0, 1.0, 0.0, result[:, part.pixels[0], part.pixels[1]],
        )  # fmt: skip
    return result[0]


@dataclass(frozen=True)
class _Part:
    """A band of pixels and the window of a raster under it."""

    pixels: tuple[slice, slice]
    lat: np.ndarray
    lon: np.ndarray
    rows: AxisWeights
    columns: AxisWeights


def _parts(
    raster: Raster, rows: AxisWeights, columns: AxisWeights, block_mb: float
) -> Iterator[_Part]:
    """Yield bands of pixel rows, each with a window of the raster of bounded size."""
    lon, columns = columns.window(raster.lon.cyclic, len(raster.lon))
    height = len(rows.start) - 1
    most = max(1, int(block_mb * 2**20 / 8 / max(1, len(lon))))
    start = 0
    while start < height:
        stop = start + 1
        while stop < height and _reach(rows, start, stop + 1) <= most:
            stop += 1
        band = slice(start, stop)
        lat, band_rows = rows.part(band).window(False, len(raster.lat))
        if len(lat) and len(lon):
            yield _Part((band, slice(0, len(columns.start) - 1)), lat, lon, band_rows, columns)
        start = stop


def _reach(rows: AxisWeights, start: int, stop: int) -> int:
    """Return how many source rows the window of some pixel rows spans."""
    index = rows.index[rows.start[start] : rows.start[stop]]
    return int(index[-1] - index[0]) + 1 if len(index) else 0


def _days(values: np.ndarray, where: str) -> np.ndarray:
    values = np.where(values == 0, np.nan, values)
    if np.any((values < 1) | (values >= LAST_DAY + 2)):
        raise InputError(f"{where}: holds days outside 1 to 366; give days of the year")
    return np.minimum(values, float(LAST_DAY))


def _checked(values: np.ndarray, where: str, what: str) -> np.ndarray:
    if np.any(values < 0) or np.any(np.isinf(values)):
        raise InputError(
            f"{where}: holds negative or infinite values where {what} is expected; "
            "declare the missing value in the file"
        )
    return values


def _read(raster: Raster, part: _Part) -> np.ndarray:
    rows = slice(int(part.lat[0]), int(part.lat[-1]) + 1)
    runs = np.split(part.lon, np.flatnonzero(np.diff(part.lon) != 1) + 1)
    parts = [raster.read(rows, slice(int(run[0]), int(run[-1]) + 1)) for run in runs]
    return np.ascontiguousarray(np.concatenate(parts, axis=1))


def _read_hectares(raster: Raster, unit: AreaUnit, part: _Part) -> np.ndarray:
    values = _checked(_read(raster, part), raster.where, "an area")
    return unit.hectares(values, _cells(raster, part))


def _read_density(raster: Raster, unit: AreaUnit, part: _Part) -> np.ndarray:
    """Return crop area per area of the cell: an overlap times it is the crop area in it."""
    return np.nan_to_num(_read_hectares(raster, unit, part)) / _cells(raster, part)


def _cells(raster: Raster, part: _Part) -> np.ndarray:
    """Return the areas of the cells of a window, km2."""
    edges = raster.lat.edges[part.lat[0] : part.lat[-1] + 2]
    heights = cell_areas(edges, np.array([0.0, 1.0]))[:, 0]
    widths = np.diff(raster.lon.edges)[part.lon]
    return heights[:, None] * widths[None, :]
