"""Region polygons: read, brought to longitude and latitude, and examined."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

import geopandas as gpd
import numpy as np
import pyogrio
import shapely
from pyogrio.errors import DataLayerError, DataSourceError
from shapely.errors import ShapelyError

from stook.assessment.schema import Assessment, Regions
from stook.constants import EARTH_RADIUS_KM, OUTSIDE
from stook.errors import InputError, Problem, raise_problems

EPSG = 4326
"""Longitude and latitude on WGS 84, degrees: what polygons are brought to."""

EDGE_METRES = 2000.0
"""An edge of a projected polygon is cut to at most this length before it is brought to longitude
and latitude, where edges are straight again: the error is below 0.2 m up to latitude 60."""

_MOST_NAMES = 12


@dataclass(frozen=True)
class Regions4326:
    """Regions in the order of their file.

    Attributes
    ----------
    names
        One per region.
    shapes
        shapely Polygon or MultiPolygon, longitude within -180..180 and latitude, degrees.
    """

    names: list[str]
    shapes: list[shapely.Geometry]

    def chosen(self, names: list[str]) -> Regions4326:
        """Keep the regions named, in the order of the file; all if none is named."""
        kept = [i for i, name in enumerate(self.names) if not names or name in names]
        return Regions4326([self.names[i] for i in kept], [self.shapes[i] for i in kept])


def read_regions(assessment: Assessment) -> Regions4326:
    """Read the region polygons of an assessment, those of `regions.only`.

    Raises
    ------
    InputError
        One line per fault; see `examine_regions`.
    """
    regions, problems = examine_regions(assessment)
    raise_problems(problems, InputError)
    assert regions is not None
    return regions


def examine_regions(assessment: Assessment) -> tuple[Regions4326 | None, list[Problem]]:
    """Read the region polygons and list what is wrong with them.

    A polygon of any coordinate reference system is brought to EPSG:4326. Longitudes may count
    from 0 to 360 or beyond; a polygon across the antimeridian may be split there or not. An edge
    that spans more than 180 degrees of longitude is taken the short way round, unless it spans
    360 or lies at a pole.

    Returns
    -------
    regions
        None if there is an error.
    problems
        Errors: file, layer or attribute missing, no coordinate reference system, no polygon, empty
        or invalid polygon, name missing or twice, names of `regions.only` or `--region` unknown.
        Warning: an edge taken the short way round.
    """
    spec = assessment.regions
    path = assessment.path(spec.file)
    try:
        frame = _read(path, spec)
    except InputError as error:
        where, _, message = str(error).removeprefix(str(path)).partition(": ")
        return None, [Problem("error", f"{path}{where}", message)]
    names = ["" if _missing(name) else str(name) for name in frame[spec.name]]
    problems = [Problem("error", str(path), text) for text in _bad_names(names, spec, assessment)]
    if problems:
        return None, problems
    kept = [i for i, name in enumerate(names) if spec.only is None or name in spec.only]
    names = [names[i] for i in kept]
    shapes = []
    projected = _in_degrees(frame.geometry.iloc[kept])
    for name, own, geometry in zip(names, frame.geometry.iloc[kept], projected, strict=True):
        shape, wrapped = unwrap(geometry)
        fault = _fault(own, shape)
        if fault:
            problems.append(Problem("error", str(path), f"region {name!r} {fault}"))
            continue
        if wrapped and frame.crs.is_geographic:
            text = "has an edge over 180 degrees of longitude long; it is taken the short way round"
            problems.append(Problem("warning", str(path), f"region {name!r} {text}"))
        shapes.append(within_180(shape))
    if any(problem.severity == "error" for problem in problems):
        return None, problems
    return Regions4326(names, shapes), problems


def _read(path: Path, spec: Regions) -> gpd.GeoDataFrame:
    if not path.exists():
        raise InputError(f"{path}: no such file; regions.file must be polygons")
    try:
        layers = [str(name) for name in pyogrio.list_layers(path)[:, 0]]
        if spec.layer is not None and spec.layer not in layers:
            raise InputError(
                f"{path}: has no layer {spec.layer!r} (regions.layer); it has {_listed(layers)}"
            )
        if spec.layer is None and len(layers) > 1:
            raise InputError(f"{path}: has the layers {_listed(layers)}; name one in regions.layer")
        columns = [str(name) for name in pyogrio.read_info(path, layer=spec.layer)["fields"]]
        if spec.name not in columns:
            raise InputError(
                f"{path}: has no attribute {spec.name!r} (regions.name); it has {_listed(columns)}"
            )
        frame = gpd.read_file(path, layer=spec.layer, columns=[spec.name], force_2d=True)
    except (DataSourceError, DataLayerError, ShapelyError, OSError, ValueError) as error:
        reason = " ".join(str(error).split())[:120]
        raise InputError(f"{path}: region polygons cannot be read ({reason})") from None
    if not isinstance(frame, gpd.GeoDataFrame) or frame.empty:
        raise InputError(f"{path}: holds no polygon")
    if frame.crs is None:
        raise InputError(f"{path}: has no coordinate reference system; set one, such as EPSG:4326")
    return frame


def _missing(name: object) -> bool:
    return name is None or name != name or not str(name).strip()


def _listed(names: list[str]) -> str:
    shown = ", ".join(names[:_MOST_NAMES]) or "none"
    return shown if len(names) <= _MOST_NAMES else f"{shown} and {len(names) - _MOST_NAMES} more"


def _bad_names(names: list[str], spec: Regions, assessment: Assessment) -> list[str]:
    """Return what is wrong with the names, and with the names asked for."""
    faults = []
    if unnamed := names.count(""):
        faults.append(f"{unnamed} of {len(names)} polygons have no {spec.name!r}; name every one")
    if twice := sorted({name for name in names if name and names.count(name) > 1}):
        faults.append(
            f"region {_listed([repr(name) for name in twice])} stands twice in {spec.name!r}; "
            "dissolve its polygons into one, or choose another attribute"
        )
    if OUTSIDE in names:
        faults.append(f"a region is named {OUTSIDE!r}, which stands for the rest; rename it")
    chosen = names if spec.only is None else [name for name in names if name in spec.only]
    for key, wanted, there in (
        ("regions.only", spec.only or [], names),
        ("--region", assessment.subset, chosen),
    ):
        if lost := [name for name in wanted if name not in there]:
            faults.append(
                f"{key}: no region {_listed([repr(name) for name in lost])}; "
                f"there are {_listed(there)}"
            )
    if spec.only is not None and not spec.only:
        faults.append("regions.only: is empty; name the regions, or leave it out for all")
    return faults


def _in_degrees(shapes: gpd.GeoSeries) -> list[shapely.Geometry | None]:
    """Return shapes in longitude and latitude; edges of projected ones are cut short before."""
    if shapes.crs.is_projected:
        metres = shapes.crs.axis_info[0].unit_conversion_factor
        present = [shape is not None and not shape.is_empty for shape in shapes]
        shapes = shapes.copy()
        shapes[present] = shapes[present].segmentize(EDGE_METRES / metres)
    return list(shapes.to_crs(EPSG))


def _fault(own: shapely.Geometry | None, shape: shapely.Geometry | None) -> str | None:
    """Say what is wrong with a polygon as it stands in the file, and in degrees."""
    if own is None or own.is_empty or shape is None:
        return "has no polygon; give it one, or remove it"
    if own.geom_type not in ("Polygon", "MultiPolygon"):
        return f"is a {own.geom_type}; a region must be a Polygon or MultiPolygon"
    if not np.isfinite(shapely.get_coordinates(shape)).all():
        return "has points that its coordinate reference system cannot bring to degrees"
    _, south, _, north = shape.bounds
    if south < -90 - 1e-9 or north > 90 + 1e-9:
        return f"reaches latitude {south if south < -90 else north:g}; is the order of axes right?"
    if not own.is_valid and not shape.is_valid:
        reason = shapely.is_valid_reason(own)
        return f"is not a valid polygon ({reason}); repair it in a GIS program"
    if not shape.is_valid:
        reason = shapely.is_valid_reason(shape)
        return f"is not a valid polygon in longitude and latitude ({reason}); repair it there"
    return None


def unwrap(shape: shapely.Geometry | None) -> tuple[shapely.Geometry | None, bool]:
    """Return a polygon without jumps in longitude, and whether there was one.

    A ring that has jumped returns 360 degrees from where it began if it runs round a pole; it is
    then closed along that pole.
    """
    if shape is None or shape.geom_type not in ("Polygon", "MultiPolygon"):
        return shape, False
    points = shapely.get_coordinates(shape)
    if len(points) < 2 or not np.isfinite(points).all():
        return shape, False
    parts, wrapped = [], False
    for part in shapely.get_parts(shape):
        rings = [_unwrap_ring(shapely.get_coordinates(ring)) for ring in shapely.get_rings(part)]
        wrapped |= any(jumped for _, jumped in rings)
        if not any(jumped for _, jumped in rings):
            parts.append(part)
            continue
        outer = rings[0][0]
        holes = []
        for hole, _ in rings[1:]:
            away = round((outer[:, 0].mean() - hole[:, 0].mean()) / 360.0) * 360.0
            holes.append(hole + np.array([away, 0.0]))
        parts.append(shapely.Polygon(outer, holes))
    if not wrapped:
        return shape, False
    return (parts[0] if len(parts) == 1 else shapely.MultiPolygon(parts)), True


def _unwrap_ring(points: np.ndarray) -> tuple[np.ndarray, bool]:
    steps = np.diff(points[:, 0])
    at_pole = (np.abs(points[1:, 1]) >= 90.0) & (np.abs(points[:-1, 1]) >= 90.0)
    whole = np.abs(np.abs(steps) - 360.0) < 1e-9
    jumps = np.where((np.abs(steps) > 180.0) & ~at_pole & ~whole, -360.0 * np.sign(steps), 0.0)
    if not jumps.any():
        return points, False
    turned = points.copy()
    turned[1:, 0] += np.cumsum(jumps)
    if abs(turned[-1, 0] - turned[0, 0]) > 180.0:
        pole = math.copysign(90.0, points[:, 1].mean())
        ends = np.array([[turned[-1, 0], pole], [turned[0, 0], pole], turned[0]])
        turned = np.concatenate([turned, ends])
    return turned, True


def within_180(shape: shapely.Geometry) -> shapely.Geometry:
    """Return a polygon with every longitude within -180..180, cut at the antimeridian if needed."""
    west, _, east, _ = shape.bounds
    if west >= -180.0 and east <= 180.0:
        return shape
    pieces: list[shapely.Geometry] = []
    for turn in range(math.floor((west + 180) / 360), math.ceil((east - 180) / 360) + 1):
        middle = 360.0 * turn
        window = shapely.box(middle - 180.0, -90.0, middle + 180.0, 90.0)
        cut = shapely.intersection(shape, window)
        moved = shapely.transform(cut, lambda p, middle=middle: p - np.array([middle, 0.0]))
        pieces += [p for p in shapely.get_parts(moved) if p.geom_type == "Polygon"]
    if len(pieces) == 1:
        return pieces[0]
    # Pieces of several turns may touch or overlap; one polygon must not count an area twice.
    return shapely.union_all(pieces)


def area_km2(steradians: float) -> float:
    """Return an area on the unit sphere as km2 on the Earth."""
    return steradians * EARTH_RADIUS_KM**2
