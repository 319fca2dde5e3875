"""Files in and out of a fit; nothing else here reads or writes."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable, Mapping
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.assessment.variables import system_indices
from stook.audit.ledger import sha256
from stook.constants import OBSERVED
from stook.errors import InputError, ResultsError, StookError
from stook.fit.document import Fit, load_fit
from stook.fit.estimate import Estimate, estimate
from stook.fit.figures import curve_figure, residual_figure
from stook.fit.panel import (
    Sample,
    UnitWeather,
    listed,
    make_sample,
    read_panel,
    table_weather,
)
from stook.fit.tables import (
    coefficient_table,
    comparison,
    curves,
    farmer_and_weather,
    residual_table,
    sample_table,
)
from stook.fit.weather import WeatherSums
from stook.fit.writing import response_document, response_text
from stook.grids.analysis import tile_count
from stook.grids.files import open_result, temporary_name
from stook.regions.polygons import read_regions
from stook.season.definition import IndexDefinition
from stook.yields.response import Response, Term


@dataclass(frozen=True)
class Fitted:
    """All that a fit found.

    Attributes
    ----------
    estimates
        By specification; inputs held, if there are any.
    without_inputs
        The same with the inputs left out; empty without inputs.
    comparison
        See `stook.fit.tables.comparison`.
    chosen
        The specification written.
    response
        The document written.
    shares
        Of inputs and weather; empty without inputs.
    files
        Everything written; the response document is the first.
    """

    fit: Fit
    sample: Sample
    estimates: dict[str, Estimate]
    without_inputs: dict[str, Estimate]
    comparison: pd.DataFrame
    chosen: str
    response: Response
    shares: dict[str, float]
    files: list[Path]
    warnings: list[str]


def run_fit(path: Path) -> Fitted:
    """Estimate the response a fit document asks for, and write everything about it.

    Raises
    ------
    StookError
        One line a fault: of the document, the panel, the weather, or what cannot be estimated.
    """
    fit = load_fit(path)
    panel_path = _beside(path, fit.panel)
    panel = read_panel(panel_path, fit)
    weather, definitions, digests = _weather(path, fit, panel, panel_path)
    sample = make_sample(panel, weather, fit, panel_path)
    try:
        return _fit(path, fit, sample, definitions, {"panel": sha256(panel_path)} | digests)
    except StookError as error:
        if str(error).startswith("specification"):
            raise type(error)(f"{path}: {error}") from None
        raise


def _fit(
    path: Path,
    fit: Fit,
    sample: Sample,
    definitions: dict[str, IndexDefinition],
    digests: dict[str, str],
) -> Fitted:
    blocks = sample.rows["block"].to_numpy() if "block" in sample.rows else None
    held = bool(fit.inputs)
    found = {name: estimate(fit, name, sample, held, blocks) for name in fit.specifications}
    plain = {
        name: estimate(fit, name, sample, False, blocks)
        for name in (fit.specifications if held else ())
    }
    table = comparison(fit, found, sample)
    chosen = fit.choose or str(table["specification"][int(table["skill_years"].argmax())])
    table.insert(1, "written", table["specification"] == chosen)
    written = plain[chosen] if held and not fit.response_holds_inputs else found[chosen]
    response = response_document(fit, written, sample, definitions, digests)
    shares = farmer_and_weather(fit, sample, chosen) if held else {}
    drawn = curves(written, sample, definitions, fit.link)
    left = residual_table(written, sample)
    title = f"{fit.crop}, {fit.system}: specification {chosen}"
    folder = _beside(path, fit.output)
    tables = {
        "specifications.csv": table,
        "coefficients.csv": coefficient_table(found, plain),
        "curves.csv": drawn,
        "residuals.csv": left,
        "sample.csv": sample_table(sample),
    }
    if shares:
        tables["shares.csv"] = pd.DataFrame({"part": list(shares), "share": list(shares.values())})
    writers = {f"{fit.crop}_{fit.system}.yaml": _text(response_text(response))}
    writers |= {name: _csv(frame) for name, frame in tables.items()}
    writers["curves.png"] = _bytes(curve_figure(drawn, sample, title).png())
    writers["residuals.png"] = _bytes(residual_figure(left, fit.link).png())
    files = write_all(folder, writers)
    warnings = [line for one in (*found.values(), *plain.values()) for line in one.warnings]
    return Fitted(
        fit, sample, found, plain, table, chosen, response, shares, files,
        list(dict.fromkeys(warnings)),
    )  # fmt: skip


def write_all(folder: Path, writers: Mapping[str, Callable[[Path], object]]) -> list[Path]:
    """Write files under temporary names and rename them when all are complete.

    Raises
    ------
    ResultsError
        If the folder cannot be written.
    """
    paths = [folder / name for name in writers]
    try:
        folder.mkdir(parents=True, exist_ok=True)
        try:
            for path, write in zip(paths, writers.values(), strict=True):
                write(temporary_name(path))
            for path in paths:
                temporary_name(path).replace(path)
        finally:
            for path in paths:
                temporary_name(path).unlink(missing_ok=True)
    except OSError as error:
        raise ResultsError(f"{folder}: cannot be written ({error.strerror})") from None
    return paths


def _text(text: str) -> Callable[[Path], object]:
    return lambda path: path.write_text(text, encoding="utf-8")


def _bytes(content: bytes) -> Callable[[Path], object]:
    return lambda path: path.write_bytes(content)


def _csv(frame: pd.DataFrame) -> Callable[[Path], object]:
    return lambda path: frame.to_csv(path, index=False)


def _weather(
    path: Path, fit: Fit, panel: pd.DataFrame, panel_path: Path
) -> tuple[UnitWeather, dict[str, IndexDefinition], dict[str, str]]:
    """Return the weather of the units, the definitions of its indices, and its digests."""
    terms = _terms(fit)
    if fit.weather.table is not None:
        table = _beside(path, fit.weather.table)
        weather = table_weather(table, fit, terms)
        return weather, dict(fit.weather.indices), {"season indices": sha256(table)}
    assert fit.weather.assessment is not None
    file = _beside(path, fit.weather.assessment)
    assessment = load_assessment(file)
    if (fit.crop, fit.system) not in assessment.systems:
        known = ", ".join(f"{crop} {system}" for crop, system in assessment.systems)
        raise InputError(f"{file}: has no {fit.crop} {fit.system}; it has {known}")
    definitions = system_indices(assessment, fit.crop, fit.system)
    if unknown := [name for name in fit.index_names if name not in definitions]:
        raise InputError(
            f"{path}: index {listed(unknown)} is not available: {file} computes "
            f"{', '.join(definitions)} for {fit.crop} {fit.system}; add it under its indices"
        )
    units = list(dict.fromkeys(panel["unit"]))
    regions = read_regions(assessment)
    if strange := [unit for unit in units if unit not in regions.names]:
        where = assessment.path(assessment.regions.file)
        raise InputError(f"{panel_path}: unit {listed(strange)} is not a region of {where}")
    weather = _pixel_weather(assessment, fit, units, panel, terms)
    digest = {"observed season indices": files_digest(_season_files(assessment, fit))}
    if fit.standard_errors.method == "bootstrap-space":
        side = fit.standard_errors.block_degrees
        points = dict(zip(regions.names, regions.shapes, strict=True))
        panel["block"] = [_block(points[unit].representative_point(), side) for unit in panel.unit]
    return weather, definitions, digest


def _beside(path: Path, given: Path) -> Path:
    """Return a path of the document, relative to its folder, without ``..`` in it."""
    return Path(os.path.normpath(path.parent / given))


def _block(point: object, side: float) -> str:
    """Return the name of the square of a grid of blocks that a point lies in."""
    x, y = point.x, point.y  # type: ignore[attr-defined]
    return f"{int(np.floor(y / side))} {int(np.floor(x / side))}"


def _terms(fit: Fit) -> list[Term]:
    return [term for given in fit.specifications.values() for term in given.values()]


def _season_files(assessment: Assessment, fit: Fit) -> list[Path]:
    layout = Layout.of(assessment)
    tiles = range(tile_count(assessment))
    return [layout.season(OBSERVED, fit.crop, fit.system, tile) for tile in tiles]


def _pixel_weather(
    assessment: Assessment, fit: Fit, units: list[str], panel: pd.DataFrame, terms: list[Term]
) -> UnitWeather:
    """Average the terms over the pixels of every unit, by harvested area."""
    layout = Layout.of(assessment)
    with ExitStack() as stack:
        layers = stack.enter_context(open_result(layout.layers))
        overlay = stack.enter_context(open_result(layout.overlay))
        files = [stack.enter_context(open_result(p)) for p in _season_files(assessment, fit)]
        there = [int(year) for year in files[0]["year"].values]
        years = np.array(sorted(set(there) & set(panel["year"])))
        if not years.size:
            raise InputError(
                f"{assessment.source}: no observed season indices in the years of the panel "
                f"({panel['year'].min()} to {panel['year'].max()}); "
                f"there are {min(there)} to {max(there)}"
            )
        sums = WeatherSums(units, terms, years, assessment.store.block_mb)
        area = layers["area"].sel(crop_system=f"{fit.crop}_{fit.system}")
        coverage = overlay["coverage"].sel(region=units)
        for season in files:
            where = {"lat": season["lat"], "lon": season["lon"]}
            sums.add(season, coverage.sel(where), area.sel(where))
        if bare := [unit for unit, hectares in zip(units, sums.area, strict=True) if hectares <= 0]:
            raise InputError(
                f"{layout.layers}: no area of {fit.crop} {fit.system} with season indices in "
                f"unit {listed(bare)}; leave the unit out of the panel"
            )
        return sums.result()


def files_digest(paths: list[Path]) -> str:
    """Return the SHA-256 of one file, or of the list of digests of several."""
    digests = [sha256(path) for path in paths]
    if len(digests) == 1:
        return digests[0]
    return hashlib.sha256("\n".join(digests).encode()).hexdigest()
