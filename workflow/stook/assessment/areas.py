"""Crop areas, calendars, yields and regions of an assessment, laid over each other."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from stook.assessment.crops import Layer
from stook.assessment.inventory import as_problems
from stook.assessment.schema import Assessment
from stook.assessment.variables import system_indices
from stook.errors import Problem, StookError
from stook.grids.analysis import AnalysisGrid
from stook.grids.overlay import coverage
from stook.prepare.rasters import Number, Raster, open_raster
from stook.prepare.resample import YIELD_UNIT, area_on_grid, calendar_on_grid, yield_on_grid
from stook.regions.overlay import region_problems
from stook.regions.polygons import Regions4326, read_regions

TOLERATED_SHARE = 0.01
"""A crop may lack calendar or yield on this share of its area with a warning; more is an error
(common practice, no source)."""

UNWEIGHTED = Number("", 1.0, "1")
"""Stands for the weights of baseline yields where the area cannot be read."""


@dataclass(frozen=True)
class SystemFacts:
    """One crop x water system.

    Attributes
    ----------
    hectares
        Harvested area on the analysis grid, shape (lat, lon).
    response
        Name of the response document's file.
    indices
        Names of its indices.
    """

    crop: str
    system: str
    hectares: np.ndarray
    response: str
    indices: tuple[str, ...]


def inspect_areas(
    assessment: Assessment, grid: AnalysisGrid
) -> tuple[list[SystemFacts], np.ndarray | None, list[Problem]]:
    """Lay crop layers and regions over the analysis grid.

    Returns
    -------
    list of SystemFacts
        The systems whose area could be read.
    ndarray or None
        bool (lat, lon): pixels that would be computed; None if areas or regions are not known.
    list of Problem
        Layers that cannot be read, crop area without calendar or yield, faulty polygons, and
        regions without crop.
    """
    problems: list[Problem] = []
    systems = []
    for crop, system in assessment.systems:
        facts, wrong = _inspect_system(assessment, crop, system, grid)
        problems += wrong
        systems += [facts] if facts else []
    wrong = region_problems(assessment)
    problems += wrong
    if len(systems) < len(assessment.systems) or any(p.severity == "error" for p in wrong):
        return systems, None, problems
    hectares = np.sum([one.hectares for one in systems], axis=0)
    regions = read_regions(assessment).chosen(assessment.subset)
    shares = [coverage(shape, grid.lat_edges, grid.lon_edges) for shape in regions.shapes]
    problems += _regions_without_crop(assessment, regions, shares, hectares)
    needed = hectares > 0
    if assessment.subset:
        needed &= np.any([share > 0 for share in shares], axis=0)
    return systems, needed, problems


def _inspect_system(
    assessment: Assessment, crop: str, system: str, grid: AnalysisGrid
) -> tuple[SystemFacts | None, list[Problem]]:
    layers, problems = _read_layers(assessment, crop, system, grid)
    if "area" not in layers:
        return None, problems
    hectares = layers["area"]
    spec = assessment.system(crop, system)
    name = f"{crop}, {system}"
    if hectares.sum() == 0:
        text = f"{name} has no harvested area on the analysis grid; extend grid, or leave it out"
        problems.append(Problem("error", _where(assessment, spec.area), text))
    if "calendar.planting" in layers and "calendar.maturity" in layers:
        without = np.isnan(layers["calendar.planting"]) | np.isnan(layers["calendar.maturity"])
        where = _where(assessment, spec.calendar.planting)
        problems += _without(name, "calendar", where, hectares, without)
    if "baseline_yield" in layers:
        where = _where(assessment, spec.baseline_yield)
        without = ~(layers["baseline_yield"] > 0)
        problems += _without(name, "baseline yield", where, hectares, without)
    return _facts(assessment, crop, system, hectares), problems


def _read_layers(
    assessment: Assessment, crop: str, system: str, grid: AnalysisGrid
) -> tuple[dict[str, np.ndarray], list[Problem]]:
    """Return the layers of a system that can be read, by key, and the errors of the others."""
    spec = assessment.system(crop, system)
    block_mb = assessment.store.block_mb
    wanted: dict[str, tuple[Layer, str | None, Callable[[Raster | Number], np.ndarray]]] = {
        "area": (spec.area, "ha", lambda s: area_on_grid(s, grid, block_mb)),
        "calendar.planting": (
            spec.calendar.planting, None, lambda s: calendar_on_grid(s, grid, block_mb)
        ),
        "calendar.maturity": (
            spec.calendar.maturity, None, lambda s: calendar_on_grid(s, grid, block_mb)
        ),
        "baseline_yield": (
            spec.baseline_yield, YIELD_UNIT,
            lambda s: yield_on_grid(s, grid, sources.get("area", UNWEIGHTED), block_mb),
        ),
    }  # fmt: skip
    sources: dict[str, Raster | Number] = {}
    layers: dict[str, np.ndarray] = {}
    problems: list[Problem] = []
    for key, (layer, unit, read) in wanted.items():
        try:
            if layer.file is None:
                where = f"{assessment.source}: crops.{crop}.systems.{system}.{key}"
                sources[key] = Number(where, float(layer.value or 0), layer.unit or unit)
            else:
                sources[key] = open_raster(assessment.path(layer.file), layer)
            layers[key] = read(sources[key])
        except StookError as error:
            problems += as_problems(error)
    return layers, problems


def _where(assessment: Assessment, layer: Layer) -> str:
    return str(assessment.path(layer.file) if layer.file else assessment.source)


def _facts(assessment: Assessment, crop: str, system: str, hectares: np.ndarray) -> SystemFacts:
    response = assessment.system(crop, system).response.name
    try:
        indices = tuple(system_indices(assessment, crop, system))
    except StookError:
        indices = ()
    return SystemFacts(crop, system, hectares, response, indices)


def _without(
    name: str, what: str, where: str, hectares: np.ndarray, without: np.ndarray
) -> Iterator[Problem]:
    """Yield a problem if crop area lacks a calendar or a yield."""
    lacking = without & (hectares > 0)
    if not lacking.any():
        return
    area, whole = float(hectares[lacking].sum()), float(hectares.sum())
    yield Problem(
        "error" if area > TOLERATED_SHARE * whole else "warning",
        where,
        f"{name} has crop area without {what} in {np.sum(lacking)} of {np.sum(hectares > 0)} "
        f"pixels, {area:,.0f} of {whole:,.0f} ha; fill the {what} there, or remove the area",
    )


def _regions_without_crop(
    assessment: Assessment,
    regions: Regions4326,
    shares: Sequence[np.ndarray],
    hectares: np.ndarray,
) -> Iterator[Problem]:
    path = str(assessment.path(assessment.regions.file))
    for name, share in zip(regions.names, shares, strict=True):
        if share.any() and not np.any(hectares[share > 0] > 0):
            yield Problem("warning", path, f"region {name!r} has no harvested area of any crop")
