"""Regridding between rectilinear grids: first-order conservative, bilinear, nearest.

Weights are separable: one set along latitude, one along longitude, each from the source cells
under one target cell alone. The kernels sum over rows and then columns in ascending order, so a
target pixel has the same bits in any part of a grid.

Conservative remapping: Jones 1999, Mon. Weather Rev. 127, 2204-2210, first order; on
latitude-longitude grids the overlap is exact, ``R**2 dlon (sin lat_high - sin lat_low)``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numba import njit

from stook.grids.axes import SourceAxis
from stook.grids.cells import sine

HALF = 0.5 - 1e-9
"""A target pixel needs this share of its weight on cells with a value."""

Method = Literal["conservative", "bilinear"]


@dataclass(frozen=True)
class AxisWeights:
    """Which source cells a target cell takes along one axis, and with which weight.

    Target cell ``i`` takes ``index[start[i]:start[i + 1]]``; none if it lies outside the source.

    Attributes
    ----------
    start
        int64, shape (target + 1,).
    index
        int64, positions on the source axis, in ascending order of place.
    weight
        float64, greater than zero, same shape as `index`.
    """

    start: np.ndarray
    index: np.ndarray
    weight: np.ndarray

    @property
    def arrays(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """What the kernels take: start, index, weight."""
        return self.start, self.index, self.weight

    def part(self, cells: slice) -> AxisWeights:
        """Return the weights of some consecutive target cells."""
        first, last = self.start[cells.start], self.start[cells.stop]
        start = self.start[cells.start : cells.stop + 1] - first
        return AxisWeights(start, self.index[first:last], self.weight[first:last])

    def window(self, cyclic: bool, size: int) -> tuple[np.ndarray, AxisWeights]:
        """Return the source positions that are needed, and weights that index into them.

        Parameters
        ----------
        cyclic
            Whether the source axis goes round the globe; positions may then pass its seam.
        size
            Length of the source axis.

        Returns
        -------
        positions
            int64, consecutive but for a step over the seam, empty if nothing is needed.
        weights
            The same weights, with `index` counted within `positions`.
        """
        if len(self.index) == 0:
            return np.empty(0, dtype=np.int64), self
        used = np.unique(self.index)
        gaps = np.diff(np.append(used, used[0] + size))
        widest = int(np.argmax(gaps))
        if cyclic and gaps[widest] > gaps[-1]:  # the widest gap lies inside: begin behind it
            first = used[widest + 1]
            count = size - int(gaps[widest]) + 1
        else:
            first, count = used[0], int(used[-1] - used[0]) + 1
        positions = (first + np.arange(count, dtype=np.int64)) % size
        place = np.full(size, -1, dtype=np.int64)
        place[positions] = np.arange(count)
        return positions, AxisWeights(self.start, place[self.index], self.weight)


def conservative_weights(
    source: SourceAxis,
    target_edges: np.ndarray,
    axis: Literal["lat", "lon"],
    share_of: Literal["target", "source"] = "target",
) -> AxisWeights:
    """Return overlaps along one axis as shares of the target cells, or of the source cells.

    Along latitude lengths are measured in the sine of latitude, which makes them areas on the
    sphere.

    Parameters
    ----------
    source
        Axis of the source grid.
    target_edges
        float64, ascending, degrees, shape (target + 1,).
    axis
        lat or lon.
    share_of
        ``target`` for means: the weights of a covered target cell sum to 1. ``source`` for
        totals: the weights of a source cell sum to 1 over the target cells that cover it.
    """
    measure = sine if axis == "lat" else np.asarray
    lengths = np.diff(measure(target_edges))
    found: list[list[tuple[int, float]]] = [[] for _ in lengths]
    for turn in _turns(source, target_edges, axis):
        edges = _aligned(source.edges + turn, target_edges, source.tolerance)
        places = measure(edges)
        target_places = measure(target_edges)
        first = np.searchsorted(edges, target_edges[:-1], side="right") - 1
        last = np.searchsorted(edges, target_edges[1:], side="left")
        for i in range(len(lengths)):
            for j in range(max(int(first[i]), 0), min(int(last[i]), len(source))):
                low = max(edges[j], target_edges[i])
                high = min(edges[j + 1], target_edges[i + 1])
                if high - low <= source.tolerance:
                    continue
                overlap = min(places[j + 1], target_places[i + 1]) - max(
                    places[j], target_places[i]
                )
                whole = lengths[i] if share_of == "target" else places[j + 1] - places[j]
                found[i].append((j, float(overlap / whole)))
    return _axis_weights(found)


def bilinear_weights(
    source: SourceAxis, target_centres: np.ndarray, axis: Literal["lat", "lon"]
) -> AxisWeights:
    """Return linear interpolation along one axis: one or two source cells a target cell.

    Between the outermost centre of the source and its outer edge the outermost value holds; a
    target centre beyond that edge takes nothing. Along a cyclic axis the last cell and the first
    are neighbours.

    Parameters
    ----------
    source
        Axis of the source grid.
    target_centres
        float64, ascending, degrees, shape (target,).
    axis
        lat or lon.
    """
    centres, count = source.centres, len(source)
    index = np.arange(count)
    if source.cyclic:
        centres = np.concatenate([[centres[-1] - 360.0], centres, [centres[0] + 360.0]])
        index = np.concatenate([[count - 1], index, [0]])
    found: list[list[tuple[int, float]]] = [[] for _ in target_centres]
    for i, place in enumerate(target_centres):
        if axis == "lon":
            turns = np.ceil((source.edges[0] - source.tolerance - place) / 360.0)
            place = place + 360.0 * turns
        if not _inside(source, place):
            continue
        upper = int(np.searchsorted(centres, place))
        for near in (upper - 1, upper):
            if 0 <= near < len(centres) and abs(centres[near] - place) <= source.tolerance:
                found[i] = [(int(index[near]), 1.0)]
        if found[i]:
            continue
        if upper == 0 or upper == len(centres):
            found[i] = [(int(index[min(upper, len(centres) - 1)]), 1.0)]
            continue
        share = float((place - centres[upper - 1]) / (centres[upper] - centres[upper - 1]))
        found[i] = [(int(index[upper - 1]), 1.0 - share), (int(index[upper]), share)]
    return _axis_weights(found)


def nearest_weights(
    source: SourceAxis, target_centres: np.ndarray, axis: Literal["lat", "lon"]
) -> AxisWeights:
    """Return the source cell that holds each target centre, weight 1, along one axis.

    A centre on an edge belongs to the cell before it, south or west. A centre outside the source
    takes nothing.

    Parameters
    ----------
    source
        Axis of the source grid.
    target_centres
        float64, ascending, degrees, shape (target,).
    axis
        lat or lon.
    """
    found: list[list[tuple[int, float]]] = [[] for _ in target_centres]
    for i, place in enumerate(target_centres):
        if axis == "lon":
            turns = np.ceil((source.edges[0] - source.tolerance - place) / 360.0)
            place = place + 360.0 * turns
        if _inside(source, place):
            cell = int(np.searchsorted(source.edges, place - source.tolerance)) - 1
            found[i] = [(min(max(cell, 0), len(source) - 1), 1.0)]
    return _axis_weights(found)


def _inside(source: SourceAxis, place: float) -> bool:
    return bool(source.edges[0] - source.tolerance <= place <= source.edges[-1] + source.tolerance)


def _turns(source: SourceAxis, target_edges: np.ndarray, axis: str) -> np.ndarray:
    """Return the whole turns of the globe by which source longitudes reach the target, rising."""
    if axis == "lat":
        return np.zeros(1)
    first = np.ceil((target_edges[0] - source.edges[-1]) / 360.0)
    last = np.floor((target_edges[-1] - source.edges[0]) / 360.0)
    return 360.0 * np.arange(first, last + 1)


def _aligned(edges: np.ndarray, target: np.ndarray, tolerance: float) -> np.ndarray:
    """Return edges in which those close to a target edge are that edge."""
    upper = np.clip(np.searchsorted(target, edges), 1, len(target) - 1)
    near = np.where(
        np.abs(edges - target[upper - 1]) <= np.abs(edges - target[upper]),
        target[upper - 1],
        target[upper],
    )
    return np.where(np.abs(edges - near) <= tolerance, near, edges)


def _axis_weights(found: list[list[tuple[int, float]]]) -> AxisWeights:
    start = np.zeros(len(found) + 1, dtype=np.int64)
    start[1:] = np.cumsum([len(cells) for cells in found])
    pairs = [pair for cells in found for pair in cells]
    index = np.array([pair[0] for pair in pairs], dtype=np.int64)
    weight = np.array([pair[1] for pair in pairs], dtype=np.float64)
    return AxisWeights(start, index, weight)


@njit(cache=True, nogil=True)
def weighted_mean(
    values: np.ndarray,
    rows: tuple[np.ndarray, np.ndarray, np.ndarray],
    columns: tuple[np.ndarray, np.ndarray, np.ndarray],
    importance: np.ndarray | None,
    wanted: np.ndarray,
    least: float,
    scale: float,
    offset: float,
    result: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Fill target pixels with weighted means of source cells, ``scale * mean + offset``.

    Missing source cells (NaN) are left out and the weights renormalised. A pixel that takes a
    single cell has exactly its value.

    Parameters
    ----------
    values
        float32 or float64, shape (time, source lat, source lon); NaN is missing.
    rows, columns
        start, index and weight of `AxisWeights` along latitude and longitude.
    importance
        float64, shape (source lat, source lon): a further weight of the source cells; or None.
    wanted
        bool, shape (target lat, target lon); pixels that are not wanted become NaN.
    least
        Weight that cells with a value must have together; less is NaN.
    scale, offset
        Unit conversion.
    result
        Filled; float32 or float64, shape (time, target lat, target lon).
    """
    steps, height, width = result.shape
    most = max(1, np.max(np.diff(rows[0])) * np.max(np.diff(columns[0])))
    place = np.empty((width, most), dtype=np.int64)
    weight = np.empty((width, most), dtype=np.float64)
    count = np.empty(width, dtype=np.int64)
    whole = np.empty(width, dtype=np.float64)
    flat = np.ascontiguousarray(values).reshape((values.shape[0], -1))
    for i in range(height):
        for j in range(width):
            count[j], whole[j] = 0, 0.0
            if wanted[i, j]:
                count[j], whole[j] = _gather(
                    i, j, rows, columns, values.shape[2], importance, place[j], weight[j]
                )
        for t in range(steps):
            line = flat[t]
            for j in range(width):
                total = 0.0
                for k in range(count[j]):
                    total += weight[j, k] * np.float64(line[place[j, k]])
                if np.isnan(total):
                    mean = _mean_of_valid(line, place[j], weight[j], count[j], least)
                elif count[j] == 0 or whole[j] < least:
                    mean = np.nan
                elif count[j] == 1:
                    mean = np.float64(line[place[j, 0]])
                else:
                    mean = total / whole[j]
                result[t, i, j] = scale * mean + offset


@njit(cache=True, nogil=True)
def _gather(
    i: int,
    j: int,
    rows: tuple[np.ndarray, np.ndarray, np.ndarray],
    columns: tuple[np.ndarray, np.ndarray, np.ndarray],
    width: int,
    importance: np.ndarray | None,
    place: np.ndarray,
    weight: np.ndarray,
) -> tuple[int, float]:  # pragma: no cover - compiled
    """List the source cells of a target pixel, row by row; return their number and weight."""
    count = 0
    total = 0.0
    for a in range(rows[0][i], rows[0][i + 1]):
        for b in range(columns[0][j], columns[0][j + 1]):
            share = rows[2][a] * columns[2][b]
            if importance is not None:
                share *= importance[rows[1][a], columns[1][b]]
            if share > 0.0:
                place[count] = rows[1][a] * width + columns[1][b]
                weight[count] = share
                total += share
                count += 1
    return count, total


@njit(cache=True, nogil=True)
def _mean_of_valid(
    line: np.ndarray, place: np.ndarray, weight: np.ndarray, count: int, least: float
) -> float:  # pragma: no cover - compiled
    """Return the mean of the cells that have a value; NaN if they weigh less than `least`."""
    total = 0.0
    weights = 0.0
    single = np.nan
    there = 0
    for k in range(count):
        value = np.float64(line[place[k]])
        if not np.isnan(value):
            total += weight[k] * value
            weights += weight[k]
            single = value
            there += 1
    if there == 0 or weights < least:
        return np.nan
    return single if there == 1 else total / weights


@njit(cache=True, nogil=True)
def weighted_total(
    values: np.ndarray,
    rows: tuple[np.ndarray, np.ndarray, np.ndarray],
    columns: tuple[np.ndarray, np.ndarray, np.ndarray],
    result: np.ndarray,
) -> None:  # pragma: no cover - compiled
    """Fill target pixels with the sums of the parts of source cells that lie in them.

    Parameters
    ----------
    values
        float64, shape (source lat, source lon), extensive (an area, a production); NaN counts
        as zero.
    rows, columns
        start, index and weight of `AxisWeights` as shares of the source cells.
    result
        Filled; float64, shape (target lat, target lon).
    """
    row_start, row_index, row_weight = rows
    column_start, column_index, column_weight = columns
    height, width = result.shape
    for i in range(height):
        for j in range(width):
            total = 0.0
            for a in range(row_start[i], row_start[i + 1]):
                for b in range(column_start[j], column_start[j + 1]):
                    value = values[row_index[a], column_index[b]]
                    if not np.isnan(value):
                        total += row_weight[a] * column_weight[b] * value
            result[i, j] = total
