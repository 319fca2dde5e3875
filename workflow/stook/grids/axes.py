"""The latitude and longitude axes of other people's grids, brought into one order."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from stook.errors import InputError
from stook.grids.cf import axis_cells, horizontal_axes

ALIGNED = 1e-6
"""Edges and centres closer than this share of a cell are the same."""


@dataclass(frozen=True)
class SourceAxis:
    """One axis of a rectilinear grid, ascending whatever its order in the file.

    Attributes
    ----------
    centres
        float64, degrees, shape (n,), ascending; longitudes are unwrapped and may leave -180..180.
    edges
        float64, degrees, shape (n + 1,), ascending; latitudes end at the poles.
    descending
        Whether the file holds the axis from high to low.
    cyclic
        Whether the axis goes once round the globe.
    tolerance
        Degrees; places closer than this are the same (coordinates are rounded in files).
    """

    centres: np.ndarray
    edges: np.ndarray
    descending: bool
    cyclic: bool
    tolerance: float

    def __len__(self) -> int:
        return len(self.centres)

    def same(self, other: SourceAxis) -> bool:
        """Return whether two axes have the same cells in the same order."""
        return (
            len(self) == len(other) and self.descending == other.descending and self.agrees(other)
        )

    def agrees(self, other: SourceAxis) -> bool:
        """Return whether two axes have the same cells, in whatever order the files hold them."""
        if len(self) != len(other):
            return False
        distance = max(
            np.abs(self.centres - other.centres).max(), np.abs(self.edges - other.edges).max()
        )
        return bool(distance <= max(self.tolerance, other.tolerance))

    def file_runs(self, indices: np.ndarray) -> list[tuple[slice, bool]]:
        """Return the slices of the file that hold some cells of the axis.

        Parameters
        ----------
        indices
            Ascending positions on the axis, consecutive but for one step over the seam of a
            cyclic axis.

        Returns
        -------
        list of (slice, bool)
            In the order of `indices`; true where the slice must be turned round after reading.
        """
        breaks = np.flatnonzero(np.diff(indices) != 1) + 1
        runs = []
        for run in np.split(indices, breaks):
            low, high = int(run[0]), int(run[-1]) + 1
            if self.descending:
                low, high = len(self) - high, len(self) - low
            runs.append((slice(low, high), self.descending))
        return runs


def source_axes(dataset: xr.Dataset, path: Path | str) -> tuple[SourceAxis, SourceAxis, str, str]:
    """Return latitude and longitude axes of a file, and the names of their dimensions.

    Raises
    ------
    InputError
        If the grid is not rectilinear, an axis runs back and forth, latitudes leave -90..90, or
        longitudes go more than once round the globe.
    """
    lat, lon = horizontal_axes(dataset, path)
    return (
        _axis(lat, dataset, path, period=None),
        _axis(lon, dataset, path, period=360.0),
        str(lat.dims[0]),
        str(lon.dims[0]),
    )


def axis_of_edges(edges: np.ndarray, descending: bool, period: float | None) -> SourceAxis:
    """Return an axis from its ascending edges, float64 degrees; centres lie halfway."""
    centres = (edges[:-1] + edges[1:]) / 2
    width = float(np.diff(edges).min())
    span = float(edges[-1] - edges[0])
    cyclic = period is not None and abs(span - period) <= 1e-3 * width
    return SourceAxis(centres, edges, descending, cyclic, ALIGNED * width)


def _axis(
    axis: xr.DataArray, dataset: xr.Dataset, path: Path | str, period: float | None
) -> SourceAxis:
    centres = axis.values.astype(np.float64)
    if not np.isfinite(centres).all():
        raise InputError(f"{path}: {axis.name} holds missing values; every cell needs a place")
    if period is not None:
        centres = np.unwrap(centres, period=period)
        centres = centres - period * np.floor((centres.min() + 180.0) / period)
    steps = np.diff(centres)
    if not (np.all(steps > 0) or np.all(steps < 0)):
        raise InputError(f"{path}: {axis.name} does not run in one direction; sort the file by it")
    if period is None and np.abs(centres).max() > 90.0:
        raise InputError(f"{path}: {axis.name} leaves -90 to 90 degrees")
    descending = len(centres) > 1 and bool(steps[0] < 0)
    cells = axis_cells(axis.copy(data=centres), dataset, path)
    if descending:
        centres, cells = centres[::-1].copy(), cells[::-1]
    edges = np.append(cells[:, 0], cells[-1, 1])
    if period is None:
        edges = np.clip(edges, -90.0, 90.0)
    made = axis_of_edges(edges, descending, period)
    if period is not None and not made.cyclic and edges[-1] - edges[0] > period:
        raise InputError(
            f"{path}: {axis.name} goes more than once round the globe; drop the repeated columns"
        )
    tolerance = made.tolerance
    bounds = dataset.variables.get(str(axis.attrs.get("bounds", "")), axis)
    if min(axis.dtype.itemsize, bounds.dtype.itemsize) < 8:
        largest = np.float32(np.abs(axis.values).max())
        tolerance = max(tolerance, 2 * float(np.spacing(largest)))
    return SourceAxis(centres, edges, descending, made.cyclic, tolerance)
