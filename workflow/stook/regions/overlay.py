"""The regions laid over the analysis grid: what every stage takes the run's grid from."""

from __future__ import annotations

from itertools import pairwise

import dask
import dask.array as da
import numpy as np
import shapely
import xarray as xr

from stook.assessment.schema import Assessment
from stook.errors import InputError, Problem
from stook.grids.analysis import AnalysisGrid, analysis_grid
from stook.grids.overlay import coverage, sphere_area
from stook.regions.polygons import Regions4326, area_km2, examine_regions, read_regions

_ROWS = 10  # rows of a block, as in the files
_REGIONS = 64  # regions of a block, as in the files
_OVERLAP = 1e-6  # share of the smaller region from which an overlap is reported
_UNCOVERED = 1e-3  # share of a region outside the grid from which it is reported


def run_grid(assessment: Assessment) -> AnalysisGrid:
    """Return the grid of a run: the analysis grid, cropped to the regions of a subset.

    Raises
    ------
    InputError
        If polygons cannot be used, or no pixel lies in a region of the subset.
    """
    return crop_grid(assessment, analysis_grid(assessment), read_regions(assessment))


def crop_grid(assessment: Assessment, full: AnalysisGrid, regions: Regions4326) -> AnalysisGrid:
    """Return the rows and columns of a grid that touch the regions of a subset."""
    if not assessment.subset:
        return full
    rows, columns = np.zeros(full.shape[0], dtype=bool), np.zeros(full.shape[1], dtype=bool)
    chosen = regions.chosen(assessment.subset)
    for name, shape in zip(chosen.names, chosen.shapes, strict=True):
        touched = coverage(shape, full.lat_edges, full.lon_edges) > 0
        if not touched.any():
            raise InputError(
                f"{assessment.path(assessment.regions.file)}: region {name!r} does not touch the "
                "analysis grid; extend grid, or leave the region out"
            )
        rows |= touched.any(axis=1)
        columns |= touched.any(axis=0)
    return full.part(_span(rows), _span(columns))


def _span(touched: np.ndarray) -> slice:
    places = np.flatnonzero(touched)
    return slice(int(places[0]), int(places[-1]) + 1)


def overlay_dataset(assessment: Assessment) -> xr.Dataset:
    """Return the share of every cell inside every region, lazily, block by block.

    Returns
    -------
    Dataset
        ``coverage`` (region, lat, lon): share of the cell's area on the sphere inside the region;
        in a full run ``covered`` (lat, lon): share inside any region. Both float64, 0 to 1. In a
        run of some regions ``mostly_elsewhere`` (lat, lon) int8: 1 where a region that is not
        asked for covers most of the cell, so that its main region is that of the full run.
    """
    regions = read_regions(assessment)
    grid = crop_grid(assessment, analysis_grid(assessment), regions)
    chosen = regions.chosen(assessment.subset)
    variables: dict[str, xr.Variable] = {
        "coverage": xr.Variable(
            ("region", "lat", "lon"),
            _lazy_coverage(chosen.shapes, grid),
            {"long_name": "share of the cell's area inside the region", "units": "1"},
        )
    }
    if not assessment.subset:
        variables["covered"] = xr.Variable(
            ("lat", "lon"),
            _lazy_covered(chosen, variables["coverage"].data, grid),
            {"long_name": "share of the cell's area inside any region", "units": "1"},
        )
    else:
        variables["mostly_elsewhere"] = xr.Variable(
            ("lat", "lon"),
            _lazy_elsewhere(regions, chosen, grid),
            {
                "long_name": "whether a region that is not asked for covers most of the cell",
                "flag_values": np.array([0, 1], dtype=np.int8),
                "flag_meanings": "no yes",
            },
        )
    names = xr.Variable("region", np.array(chosen.names), {"long_name": "name of the region"})
    return xr.Dataset(variables, grid.coordinates() | {"region": names})


def _lazy_coverage(shapes: list[shapely.Geometry], grid: AnalysisGrid) -> da.Array:
    blocks = []
    for first in range(0, len(shapes), _REGIONS):
        some = shapes[first : first + _REGIONS]
        bands = [
            da.from_delayed(
                dask.delayed(_band)(some, grid.lat_edges[start : stop + 1], grid.lon_edges),
                (len(some), stop - start, grid.shape[1]),
                np.float64,
            )
            for start, stop in pairwise(_band_edges(grid.shape[0]))
        ]
        blocks.append(da.concatenate(bands, axis=1))
    return da.concatenate(blocks, axis=0)


def _lazy_covered(regions: Regions4326, shares: da.Array, grid: AnalysisGrid) -> da.Array:
    """Return the share of cells inside any region: the sum, or of the union if some overlap."""
    if not overlapping(regions):
        return da.minimum(shares.sum(axis=0), 1.0)
    together = shapely.union_all(regions.shapes)
    return _lazy_coverage([together], grid)[0]


def _lazy_elsewhere(regions: Regions4326, chosen: Regions4326, grid: AnalysisGrid) -> da.Array:
    """Return where the region with most coverage, the first of equals, is not a chosen one."""
    shares = _lazy_coverage(regions.shapes, grid)
    other = ~np.isin(regions.names, chosen.names)
    main = da.argmax(shares, axis=0)
    elsewhere = main.map_blocks(lambda block: other[block], dtype=bool)
    return (elsewhere & (shares.max(axis=0) > 0)).astype(np.int8)


def _band_edges(rows: int) -> list[int]:
    return [*range(0, rows, _ROWS), rows]


def _band(
    shapes: list[shapely.Geometry], lat_edges: np.ndarray, lon_edges: np.ndarray
) -> np.ndarray:
    return np.stack([coverage(shape, lat_edges, lon_edges) for shape in shapes])


def overlapping(regions: Regions4326) -> list[tuple[str, str, float]]:
    """Return the pairs of regions that overlap, and the area they share, km2.

    An overlap of less than a millionth of the smaller region is rounding along their border.
    """
    tree = shapely.STRtree(regions.shapes)
    left, right = tree.query(regions.shapes, predicate="intersects")
    found = []
    for i, j in zip(left.tolist(), right.tolist(), strict=True):
        if i >= j:
            continue
        common = shapely.intersection(regions.shapes[i], regions.shapes[j])
        parts = [p for p in shapely.get_parts(common) if p.geom_type == "Polygon" and p.area > 0]
        shared = sum(sphere_area(part) for part in parts)
        smaller = min(sphere_area(regions.shapes[i]), sphere_area(regions.shapes[j]))
        if shared > _OVERLAP * smaller:
            found.append((regions.names[i], regions.names[j], area_km2(shared)))
    return sorted(found)


def region_problems(assessment: Assessment) -> list[Problem]:
    """Return what is wrong with the region polygons and how they lie on the analysis grid.

    Errors are those of `stook.regions.polygons.examine_regions`, and a region off the grid, of
    those asked for. Warnings: regions that overlap, or that reach beyond the grid.

    Raises
    ------
    StookError
        If the analysis grid itself is not possible.
    """
    regions, problems = examine_regions(assessment)
    if regions is None:
        return problems
    path = str(assessment.path(assessment.regions.file))
    for one, other, area in overlapping(regions):
        text = (
            f"regions {one!r} and {other!r} overlap by {area:,.3g} km2; "
            "what lies there counts in both"
        )
        problems.append(Problem("warning", path, text))
    full = analysis_grid(assessment)
    uncovered = [_uncovered(shape, full) for shape in regions.shapes]
    for name, share in zip(regions.names, uncovered, strict=True):
        if share >= 1 - 1e-9:
            fatal = not assessment.subset or name in assessment.subset
            text = (
                f"region {name!r} lies off the analysis grid; "
                "extend grid, or leave it out with regions.only"
            )
            problems.append(Problem("error" if fatal else "warning", path, text))
        elif share > _UNCOVERED:
            text = f"{100 * share:.3g} % of region {name!r} lies off the analysis grid"
            problems.append(Problem("warning", path, f"{text} and is left out"))
    return problems


def _uncovered(shape: shapely.Geometry, grid: AnalysisGrid) -> float:
    """Return the share of a polygon's area that lies outside a grid."""
    whole = sphere_area(shape)
    lat, lon = grid.lat_edges[[0, -1]], grid.lon_edges[[0, -1]]
    cell = (np.sin(np.deg2rad(lat[1])) - np.sin(np.deg2rad(lat[0]))) * np.deg2rad(lon[1] - lon[0])
    return float(1 - coverage(shape, lat, lon)[0, 0] * cell / whole)
