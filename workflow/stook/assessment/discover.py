"""What the files of a folder are: simulations, reference, crop layers, polygons, responses."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import get_args

import pyogrio
import xarray as xr
from pyogrio.errors import DataLayerError, DataSourceError

from stook.assessment.documents import read_yaml
from stook.errors import StookError
from stook.grids.axes import source_axes
from stook.grids.calendars import years_of
from stook.grids.cf import find_variable, open_input
from stook.season.definition import Variable

VARIABLES = get_args(Variable)
FILE_NAME = re.compile(
    r"(?P<variable>[a-z]+)_(?P<table>[^_]+)_(?P<model>[^_]+)_(?P<scenario>[^_]+)_"
    r"(?P<realisation>r\d+(?:i\d+)?(?:p\d+)?(?:f\d+)?)(?:_(?P<grid>[a-z][^_]*))?"
    r"(?:_(?P<first>\d{4})\d*-(?P<last>\d{4})\d*)?\.nc4?"
)
"""File name of a climate model grid by the convention of CMIP6 (CMIP5: without grid label)."""

ATTRIBUTES = {
    "model": ("source_id", "model_id"),
    "scenario": ("experiment_id", "experiment"),
    "realisation": ("variant_label", "parent_experiment_rip", "realization"),
}
"""Global attributes that name a simulation, in the order they are asked."""

NETCDF = (".nc", ".nc4", ".cdf")
POLYGONS = (".gpkg", ".geojson", ".shp")
RASTERS = (".tif", ".tiff")


@dataclass
class FoundRun:
    """One model x scenario x realisation; `files` are relative paths by variable."""

    model: str
    scenario: str
    realisation: str
    files: dict[str, list[str]] = field(default_factory=dict)
    years: list[int] = field(default_factory=list)
    tables: set[str] = field(default_factory=set)


@dataclass(frozen=True)
class FoundResponse:
    """A response document: its file, crop, system and the phases of its indices."""

    file: str
    crop: str
    system: str
    phases: tuple[str, ...]


@dataclass(frozen=True)
class FoundPolygons:
    """A file of polygons and the names of their attributes."""

    file: str
    attributes: tuple[str, ...]


@dataclass
class Discovered:
    """What a folder holds; every path is relative to it.

    Attributes
    ----------
    reference
        Files by variable of climate series that belong to no simulation.
    reference_years, grid_file
        Years of the reference; a file whose grid may be the analysis grid.
    layers
        NetCDF files without time, with their variables, and GeoTIFFs.
    aside
        Files that cannot be read or hold nothing that is known.
    """

    runs: list[FoundRun] = field(default_factory=list)
    named: bool = True
    reference: dict[str, list[str]] = field(default_factory=dict)
    reference_years: list[int] = field(default_factory=list)
    grid_file: Path | None = None
    layers: list[str] = field(default_factory=list)
    polygons: list[FoundPolygons] = field(default_factory=list)
    responses: list[FoundResponse] = field(default_factory=list)
    aside: list[str] = field(default_factory=list)


def discover(folder: Path) -> Discovered:
    """Look at every file under a folder; hidden folders and results are left out."""
    found = Discovered()
    runs: dict[tuple[str, str, str], FoundRun] = {}
    coarse: Path | None = None
    for path in _files(folder):
        name = path.relative_to(folder).as_posix()
        suffix = path.suffix.lower()
        if suffix in POLYGONS:
            found.polygons += _polygons(path, name)
        elif suffix in RASTERS:
            found.layers.append(name)
        elif suffix in (".yaml", ".yml"):
            found.responses += _response(path, name)
        elif suffix in NETCDF and (
            _named_run(path, name, runs) or _opened(path, name, runs, found)
        ):
            coarse = coarse or path
    found.runs = [runs[key] for key in sorted(runs)]
    if found.grid_file is None and found.runs:
        found.grid_file = coarse
    return found


def _files(folder: Path) -> Iterator[Path]:
    for path in sorted(folder.rglob("*")):
        parts = path.relative_to(folder).parts
        hidden = any(part.startswith(".") for part in parts)
        if path.is_file() and not hidden and parts[0] != "results":
            yield path


def _named_run(path: Path, name: str, runs: dict[tuple[str, str, str], FoundRun]) -> bool:
    """Add a file whose name says what it is; tell whether it does."""
    match = FILE_NAME.fullmatch(path.name)
    if not match or match["variable"] not in VARIABLES:
        return False
    run = _run(runs, match["model"], match["scenario"], match["realisation"])
    run.files.setdefault(match["variable"], []).append(name)
    run.tables.add(match["table"])
    if match["first"]:
        run.years += [int(match["first"]), int(match["last"])]
    return True


def _opened(
    path: Path, name: str, runs: dict[tuple[str, str, str], FoundRun], found: Discovered
) -> bool:
    """Add a file by its attributes and variables; tell whether it belongs to a simulation."""
    try:
        with open_input(path) as dataset:
            variables = _variables(dataset, path)
            if not variables:
                maps = [str(key) for key in dataset.data_vars if dataset[key].ndim > 1]
                maps = [key for key in maps if not key.endswith("_bnds")]
                if "time" in dataset.dims or not maps:
                    found.aside.append(f"{name} (holds no climate variable that is used)")
                else:
                    found.layers.append(f"{name} ({', '.join(maps)})")
                return False
            years = [int(year) for year in years_of(dataset["time"].values[[0, -1]])]
            given = {key: _attribute(dataset, names) for key, names in ATTRIBUTES.items()}
            source_axes(dataset, path)
    except StookError as error:
        found.aside.append(f"{name} ({str(error).removeprefix(f'{path}: ')})")
        return False
    if given["model"] and given["scenario"]:
        found.named = False
        run = _run(runs, given["model"], given["scenario"], given["realisation"] or "r1")
        files, held = run.files, run.years
    else:
        files, held = found.reference, found.reference_years
        found.grid_file = found.grid_file or path
    for variable in variables:
        files.setdefault(variable, []).append(name)
    held += years
    return files is not found.reference


def _run(
    runs: dict[tuple[str, str, str], FoundRun], model: str, scenario: str, realisation: str
) -> FoundRun:
    key = (model, scenario, realisation)
    return runs.setdefault(key, FoundRun(*key))


def _variables(dataset: xr.Dataset, path: Path) -> list[str]:
    if "time" not in dataset.dims:
        return []
    variables = []
    for variable in VARIABLES:
        try:
            data = find_variable(dataset, variable, path)
        except StookError:
            continue
        if "time" in data.dims:
            variables.append(variable)
    return variables


def _attribute(dataset: xr.Dataset, names: tuple[str, ...]) -> str:
    """Return the first of some attributes as a name that an assessment file takes."""
    for name in names:
        if given := str(dataset.attrs.get(name, "")).strip():
            return re.sub(r"[^A-Za-z0-9.-]+", "-", given).strip("-")
    return ""


def _polygons(path: Path, name: str) -> list[FoundPolygons]:
    try:
        fields = pyogrio.read_info(path)["fields"]
    except (DataSourceError, DataLayerError):
        return []
    return [FoundPolygons(name, tuple(map(str, fields)))]


def _response(path: Path, name: str) -> list[FoundResponse]:
    """Return a YAML file as a response document, if it is one."""
    try:
        content = read_yaml(path)
    except StookError:
        return []
    if not {"crop", "system", "terms", "indices"} <= set(content):
        return []
    indices = content["indices"] if isinstance(content["indices"], dict) else {}
    phases = [
        str(index["phase"])
        for index in indices.values()
        if isinstance(index, dict) and index.get("phase", "season") != "season"
    ]
    crop, system = str(content["crop"]), str(content["system"])
    return [FoundResponse(name, crop, system, tuple(dict.fromkeys(phases)))]
