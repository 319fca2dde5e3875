"""The prepare stage for one pixel, written for reading: plain loops, no code of the kernels.

A pixel is a latitude-longitude box. Every source cell of the grid is looked at in turn.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import cftime
import netCDF4
import numpy as np
from cf_units import Unit

RADIUS_KM = 6371.0
_FLUXES = ("pr", "rsds")
_NEAR = 1e-6  # share of a cell within which two places are one


@dataclass(frozen=True)
class PlainPixel:
    """Edges of a pixel, degrees."""

    south: float
    north: float
    west: float
    east: float


@dataclass(frozen=True)
class PlainGrid:
    """Cells of a source grid in the order of the file: centres (n,) and bounds (n, 2), degrees."""

    lat: np.ndarray
    lat_bounds: np.ndarray
    lon: np.ndarray
    lon_bounds: np.ndarray


def climate_of_pixel(
    files: Sequence[Path], variable: str, pixel: PlainPixel
) -> tuple[list[tuple[int, int, int]], np.ndarray]:
    """Return the dates and values of one climate variable at one pixel.

    Parameters
    ----------
    files
        All files of the series, in any order.
    variable
        CMIP name. A file without a variable of that name holds one gridded variable, which is it.
    pixel
        The pixel.

    Returns
    -------
    dates
        (year, month, day) of each step, in order.
    values
        float64, the inside unit, NaN where missing.
    """
    steps: list[tuple[tuple[int, int, int], float]] = []
    for path in files:
        with netCDF4.Dataset(path) as file:
            gridded = [name for name, data in file.variables.items() if data.ndim > 2]
            data = file[variable if variable in file.variables else gridded[0]]
            time_name = next(n for n in data.dimensions if "since" in _units(file, n))
            lat_name = next(n for n in data.dimensions if _units(file, n).endswith("north"))
            lon_name = next(n for n in data.dimensions if _units(file, n).endswith("east"))
            grid = _grid(file, lat_name, lon_name)
            order = [data.dimensions.index(n) for n in (time_name, lat_name, lon_name)]
            weights = pixel_weights(grid, pixel, "overlap" if variable in _FLUXES else "linear")
            values = _mean(data, order, weights)
            values = to_inside_unit(values, data.units, variable)
            steps += list(zip(_dates(file, time_name), values, strict=True))
    steps.sort(key=lambda step: step[0])
    return [date for date, _ in steps], np.array([value for _, value in steps])


def to_inside_unit(values: np.ndarray, unit: str, variable: str) -> np.ndarray:
    """Return values in degC, mm day-1, W m-2 or %."""
    match variable, unit:
        case (("tas" | "tasmin" | "tasmax"), ("K" | "kelvin")):
            return values - 273.15
        case (("tas" | "tasmin" | "tasmax"), ("degF" | "F")):
            return (values - 32) / 1.8
        case (("tas" | "tasmin" | "tasmax"), ("degC" | "C" | "celsius")):
            return values
        case "pr", "kg m-2 s-1":
            return values * 86400
        case "pr", ("mm day-1" | "mm/day" | "kg m-2 day-1"):
            return values
        case "hurs", "1":
            return values * 100
    target = {"pr": "mm day-1", "rsds": "W m-2", "hurs": "%"}.get(variable, "degC")
    return np.asarray(Unit(unit).convert(values, target))


def pixel_weights(grid: PlainGrid, pixel: PlainPixel, method: str) -> dict[tuple[int, int], float]:
    """Return the weight of every source cell that a pixel takes, by (row, column) in the file.

    Parameters
    ----------
    grid
        The source grid.
    pixel
        The pixel.
    method
        ``overlap``: overlap area over pixel area; ``linear``: bilinear at the pixel's centre.
    """
    if method == "overlap":
        return _overlaps(grid, pixel)
    rows = _linear((pixel.south + pixel.north) / 2, grid.lat, grid.lat_bounds, turn=0)
    columns = _linear((pixel.west + pixel.east) / 2, grid.lon, grid.lon_bounds, turn=360)
    return {(i, j): rows[i] * columns[j] for i in rows for j in columns}


def area_of_pixel(hectares: np.ndarray, grid: PlainGrid, pixel: PlainPixel) -> float:
    """Return the crop area of a pixel: of each source cell the part that lies in the pixel, ha."""
    total = 0.0
    for (i, j), share in _overlaps(grid, pixel).items():
        overlap = share * cell_km2(pixel)
        if not math.isnan(hectares[i, j]):
            total += hectares[i, j] * overlap / cell_km2(_cell(grid, i, j))
    return total


def yield_of_pixel(
    yields: np.ndarray, hectares: np.ndarray | None, grid: PlainGrid, pixel: PlainPixel
) -> float:
    """Return the mean yield under a pixel, weighted by crop area if given, else by overlap."""
    total = weights = 0.0
    for (i, j), share in _overlaps(grid, pixel).items():
        weight = share
        if hectares is not None:
            area = 0.0 if math.isnan(hectares[i, j]) else hectares[i, j]
            weight = share * cell_km2(pixel) / cell_km2(_cell(grid, i, j)) * area
        if weight > 0 and not math.isnan(yields[i, j]) and yields[i, j] > 0:
            total += weight * yields[i, j]
            weights += weight
    return total / weights if weights > 0 else math.nan


def cell_km2(cell: PlainPixel) -> float:
    """Return the area of a latitude-longitude box on the sphere, km2."""
    height = math.sin(math.radians(cell.north)) - math.sin(math.radians(cell.south))
    return RADIUS_KM**2 * height * math.radians(cell.east - cell.west)


def _overlaps(grid: PlainGrid, pixel: PlainPixel) -> dict[tuple[int, int], float]:
    found: dict[tuple[int, int], float] = {}
    for i in range(len(grid.lat)):
        for j in range(len(grid.lon)):
            cell = _cell(grid, i, j)
            south, north = max(cell.south, pixel.south), min(cell.north, pixel.north)
            for turn in (-720, -360, 0, 360, 720):
                west, east = max(cell.west + turn, pixel.west), min(cell.east + turn, pixel.east)
                near = _NEAR * (cell.east - cell.west)
                if north - south > near and east - west > near:
                    share = cell_km2(PlainPixel(south, north, west, east)) / cell_km2(pixel)
                    found[i, j] = found.get((i, j), 0.0) + share
    return found


def _cell(grid: PlainGrid, i: int, j: int) -> PlainPixel:
    south, north = sorted(grid.lat_bounds[i])
    west, east = sorted(grid.lon_bounds[j])
    return PlainPixel(max(south, -90.0), min(north, 90.0), west, east)


def _linear(place: float, centres: np.ndarray, bounds: np.ndarray, turn: float) -> dict[int, float]:
    """Return the one or two cells beside a place, with their weights; none outside the grid."""
    if turn:
        low = min(min(pair) for pair in bounds)
        while place < low - _NEAR * abs(bounds[0][1] - bounds[0][0]):
            place += turn
        while place - turn >= low:
            place -= turn
    near = _NEAR * abs(bounds[0][1] - bounds[0][0])
    spots = [(float(centre), i) for i, centre in enumerate(centres)]
    span = max(max(pair) for pair in bounds) - min(min(pair) for pair in bounds)
    if turn and abs(span - turn) < 1e-3:  # round the globe: the ends are neighbours
        spots += [(centre - turn, i) for centre, i in spots] + [(c + turn, i) for c, i in spots]
    elif not min(map(min, bounds)) - near <= place <= max(map(max, bounds)) + near:
        return {}
    below = [spot for spot in spots if spot[0] <= place]
    above = [spot for spot in spots if spot[0] > place]
    if not below:
        return {min(above)[1]: 1.0}
    if not above:
        return {max(below)[1]: 1.0}
    (left, i), (right, j) = max(below), min(above)
    if place - left <= near:
        return {i: 1.0}
    if right - place <= near:
        return {j: 1.0}
    return {i: (right - place) / (right - left), j: (place - left) / (right - left)}


def _mean(
    data: netCDF4.Variable, order: list[int], weights: dict[tuple[int, int], float]
) -> np.ndarray:
    """Return the weighted mean of the cells with a value, NaN below half of the weight."""
    steps = data.shape[order[0]]
    total, there = np.zeros(steps), np.zeros(steps)
    for (i, j), weight in weights.items():
        place: list[int | slice] = [0] * data.ndim
        place[order[0]], place[order[1]], place[order[2]] = slice(None), i, j
        series = np.ma.filled(np.ma.asarray(data[tuple(place)]).astype(float), np.nan)
        valid = ~np.isnan(series)
        total[valid] += weight * series[valid]
        there[valid] += weight
    mean = np.full(steps, np.nan)
    enough = (there >= 0.5 - 1e-9) & (there > 0)
    mean[enough] = total[enough] / there[enough]
    return mean


def _grid(file: netCDF4.Dataset, lat_name: str, lon_name: str) -> PlainGrid:
    found = []
    for name in (lat_name, lon_name):
        centres = np.asarray(file[name][:], dtype=float)
        bounds_name = getattr(file[name], "bounds", None)
        if bounds_name in file.variables:
            bounds = np.asarray(file[bounds_name][:], dtype=float)
        else:
            half = np.abs(np.diff(centres)) / 2
            before, after = np.append(half[0], half), np.append(half, half[-1])
            bounds = np.stack([centres - before, centres + after], axis=1)
            if centres[1] < centres[0]:
                bounds = np.stack([centres - after, centres + before], axis=1)
        found += [centres, bounds]
    return PlainGrid(*found)


def _units(file: netCDF4.Dataset, name: str) -> str:
    return str(getattr(file.variables.get(name), "units", "")).lower()


def _dates(file: netCDF4.Dataset, name: str) -> list[tuple[int, int, int]]:
    time = file[name]
    stamps = np.asarray(time[:], dtype=float)
    bounds = getattr(time, "bounds", None)
    if bounds in file.variables:
        low, high = np.asarray(file[bounds][:], dtype=float).T
        if np.all((low < high) & (low <= stamps) & (stamps <= high)):
            stamps = (low + high) / 2
    calendar = getattr(time, "calendar", "standard")
    dates = [cftime.num2date(stamp, time.units, calendar) for stamp in stamps]
    return [(date.year, date.month, date.day) for date in dates]
