"""The analysis grid: the regular latitude-longitude grid every result lies on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from stook.assessment.schema import Assessment, Axis
from stook.errors import AssessmentError, InputError

ROUND_DIGITS = 9


@dataclass(frozen=True)
class AnalysisGrid:
    """Pixel centres and edges, degrees; latitude ascends, longitude ascends within -180..180.

    Attributes
    ----------
    lat, lon
        Centres, shapes (lat,) and (lon,).
    lat_edges, lon_edges
        Edges, shapes (lat + 1,) and (lon + 1,).
    """

    lat: np.ndarray
    lon: np.ndarray
    lat_edges: np.ndarray
    lon_edges: np.ndarray

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns."""
        return len(self.lat), len(self.lon)

    def rows(self, tile: int, tiles: int) -> slice:
        """Return the rows of one of `tiles` bands of nearly equal height."""
        bands = np.array_split(np.arange(len(self.lat)), tiles)
        return slice(int(bands[tile][0]), int(bands[tile][-1]) + 1)

    def part(self, rows: slice, columns: slice) -> AnalysisGrid:
        """Return a rectangular part."""
        return AnalysisGrid(
            self.lat[rows],
            self.lon[columns],
            self.lat_edges[rows.start : rows.stop + 1],
            self.lon_edges[columns.start : columns.stop + 1],
        )

    def coordinates(self) -> dict[str, xr.Variable]:
        """Return CF coordinates with bounds: lat, lon, lat_bnds, lon_bnds."""
        attributes = {
            "lat": {"standard_name": "latitude", "units": "degrees_north", "axis": "Y"},
            "lon": {"standard_name": "longitude", "units": "degrees_east", "axis": "X"},
        }
        result: dict[str, xr.Variable] = {}
        for name, centres, edges in (
            ("lat", self.lat, self.lat_edges),
            ("lon", self.lon, self.lon_edges),
        ):
            bounds = np.stack([edges[:-1], edges[1:]], axis=1)
            result[name] = xr.Variable(name, centres, attributes[name] | {"bounds": f"{name}_bnds"})
            result[f"{name}_bnds"] = xr.Variable((name, "bnds"), bounds)
        return result

    @classmethod
    def from_dataset(cls, dataset: xr.Dataset) -> AnalysisGrid:
        """Return the grid of a Stook file, from its coordinates and bounds."""
        edges = {
            name: np.append(
                dataset[f"{name}_bnds"].values[:, 0], dataset[f"{name}_bnds"].values[-1, 1]
            )
            for name in ("lat", "lon")
        }
        return cls(dataset["lat"].values, dataset["lon"].values, edges["lat"], edges["lon"])


def analysis_grid(assessment: Assessment) -> AnalysisGrid:
    """Return the full analysis grid of an assessment.

    Raises
    ------
    AssessmentError
        If it reaches beyond the poles or spans more than 360 degrees, or has fewer rows than tiles.
    InputError
        If `grid.like` is not a regular latitude-longitude file.
    """
    spec = assessment.grid
    if spec.like is not None:
        lat, lon = _like(assessment)
        lat_step, lon_step = (float(np.diff(values).mean()) for values in (lat, lon))
    else:
        assert spec.lat is not None
        assert spec.lon is not None
        lat, lon = _centres(spec.lat), _centres(spec.lon)
        lat_step, lon_step = spec.lat.step, spec.lon.step
    grid = AnalysisGrid(lat, lon, _edges(lat, lat_step), _edges(lon, lon_step))
    where = f"{assessment.source}: grid"
    if grid.lat_edges[0] < -90 - 1e-6 or grid.lat_edges[-1] > 90 + 1e-6:
        raise AssessmentError(f"{where}.lat: pixel edges lie beyond a pole")
    if grid.lon_edges[0] < -180 - 1e-6 or grid.lon_edges[-1] > 180 + 1e-6:
        raise AssessmentError(f"{where}.lon: pixel edges must lie within -180 to 180")
    if spec.tiles > len(lat):
        raise AssessmentError(f"{where}.tiles: {spec.tiles} is more than the {len(lat)} rows")
    return grid


def tile_count(assessment: Assessment) -> int:
    """Return the number of tiles of a run; a region subset is one tile."""
    return 1 if assessment.subset else assessment.grid.tiles


def _centres(axis: Axis) -> np.ndarray:
    steps = round((axis.last - axis.first) / axis.step)
    return np.round(axis.first + axis.step * np.arange(steps + 1), ROUND_DIGITS)


def _edges(centres: np.ndarray, step: float) -> np.ndarray:
    first = centres[0] - step / 2
    return np.round(first + step * np.arange(len(centres) + 1), ROUND_DIGITS)


def _like(assessment: Assessment) -> tuple[np.ndarray, np.ndarray]:
    from stook.grids.cf import horizontal_axes, open_input

    assert assessment.grid.like is not None
    path = assessment.path(assessment.grid.like)
    with open_input(path) as dataset:
        lat, lon = horizontal_axes(dataset, path)
        lat_values = np.sort(lat.values.astype(float))
        lon_values = np.sort((lon.values.astype(float) + 180.0) % 360.0 - 180.0)
    for name, values in (("latitude", lat_values), ("longitude", lon_values)):
        steps = np.diff(values)
        if len(values) < 2 or not np.allclose(steps, steps.mean(), rtol=1e-3):
            raise InputError(f"{path}: {name} is not evenly spaced; give grid.lat and grid.lon")
    return np.round(lat_values, ROUND_DIGITS), np.round(lon_values, ROUND_DIGITS)
