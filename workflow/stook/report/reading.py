"""Reading the results of the other stages for the report (files in, frames out)."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.simulations import Simulation
from stook.constants import CENTRAL_DRAW
from stook.errors import ResultsError
from stook.grids.analysis import tile_count
from stook.grids.files import open_result, read_table
from stook.report.assumptions import Responses

EFFECT = "effect_"


@dataclass(frozen=True)
class Warnings:
    """What `check` found before the run; `known` is False when it left no list."""

    known: bool
    entries: list[dict[str, str]]


def read_warnings(root: Path) -> Warnings:
    """Read the findings of `check` from the results folder.

    Raises
    ------
    ResultsError
        If the list is there but cannot be read.
    """
    path = root / "check.json"
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
        entries = [{key: str(e[key]) for key in ("severity", "where", "message")} for e in content]
    except FileNotFoundError:
        return Warnings(False, [])
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise ResultsError(f"{path}: cannot be read ({error}); run stook check again") from None
    return Warnings(True, entries)


def central_totals(path: Path) -> pd.DataFrame:
    """Read the central rows of one totals table."""
    try:
        return pd.read_parquet(path, filters=[("draw", "==", CENTRAL_DRAW)])
    except FileNotFoundError:
        return read_table(path)  # raises the message of every missing result
    except (OSError, ValueError) as error:
        raise ResultsError(f"{path}: cannot be read ({error}); delete it and run again") from None


def season_paths(assessment: Assessment, simulation: str, crop: str, system: str) -> list[Path]:
    """Return the season files of one simulation, crop and system, all tiles."""
    layout = Layout.of(assessment)
    tiles = range(tile_count(assessment))
    return [layout.season(simulation, crop, system, tile) for tile in tiles]


def area_means(
    assessment: Assessment, simulations: Sequence[Simulation], kind: str, responses: Responses
) -> pd.DataFrame:
    """Average every season index, or every effect, over the harvested area, year by year.

    Parameters
    ----------
    simulations
        The simulations to read.
    kind
        ``index`` or ``effect``.
    responses
        The responses by (crop, system); the link decides the unit of an effect.

    Returns
    -------
    DataFrame
        simulation, scenario, crop, system, quantity, unit, year, value. A year in which a valid
        pixel has no value has none.
    """
    layout = Layout.of(assessment)
    parts = []
    with open_result(layout.layers) as layers:
        for simulation in simulations:
            for crop, system in assessment.systems:
                area = layers["area"].sel(crop_system=f"{crop}_{system}").load()
                if kind == "index":
                    paths = season_paths(assessment, simulation.name, crop, system)
                else:
                    paths = [layout.yields(simulation.name, crop, system)]
                unit = "1" if responses[crop, system].link == "log" else "t ha-1"
                means = _means(paths, kind, area, unit, assessment.store.block_mb)
                names = {"simulation": simulation.name, "scenario": simulation.scenario}
                parts.append(means.assign(**names, crop=crop, system=system))
    columns = ["simulation", "scenario", "crop", "system", "quantity", "unit", "year", "value"]
    return pd.concat(parts, ignore_index=True)[columns] if parts else pd.DataFrame(columns=columns)


def _means(
    paths: Sequence[Path], kind: str, area: xr.DataArray, unit: str, block_mb: float
) -> pd.DataFrame:
    sums: dict[str, xr.DataArray] = {}
    units: dict[str, str] = {}
    total = 0.0
    for path in paths:
        with open_result(path) as dataset:
            here = area.sel(lat=dataset["lat"]).where(dataset["reason"].load() == 0, 0.0)
            total += float(here.sum())
            row = 8 * dataset.sizes["year"] * dataset.sizes["lon"]
            lines = max(1, int(block_mb * 2**20 / row))
            for name in _quantities(dataset, kind):
                quantity = name.removeprefix(EFFECT) if kind == "effect" else name
                units[quantity] = (
                    unit if kind == "effect" else str(dataset[name].attrs.get("units", ""))
                )
                part = _weighted_sum(dataset[name], here, lines)
                sums[quantity] = sums[quantity] + part if quantity in sums else part
    frames = [
        (value / total if total else value * np.nan)
        .to_dataframe(name="value")
        .reset_index()
        .assign(quantity=quantity, unit=units[quantity])
        for quantity, value in sums.items()
    ]
    columns = ["quantity", "unit", "year", "value"]
    return pd.concat(frames)[columns] if frames else pd.DataFrame(columns=columns)


def _quantities(dataset: xr.Dataset, kind: str) -> list[str]:
    names = [str(name) for name, v in dataset.data_vars.items() if v.dims == ("year", "lat", "lon")]
    return [name for name in names if name.startswith(EFFECT) == (kind == "effect")]


def _weighted_sum(values: xr.DataArray, weights: xr.DataArray, lines: int) -> xr.DataArray:
    """Sum values times weights over the grid, some rows at a time; NaN where one is missing."""
    total: Any = 0.0
    for start in range(0, values.sizes["lat"], lines):
        rows = slice(start, start + lines)
        weight = weights.isel(lat=rows)
        product = xr.where(weight > 0, values.isel(lat=rows).load() * weight, 0.0)
        total = total + product.sum(("lat", "lon"), skipna=False)
    return total.drop_vars([n for n in total.coords if n != "year"])


def significant_shares(path: Path, area: xr.DataArray) -> dict[tuple[str, str], float]:
    """Return by (quantity, period) the share of tested crop area with a significant trend."""
    result = {}
    with open_result(path) as dataset:
        for name in dataset.data_vars:
            quantity = str(name).removeprefix("significant_")
            if quantity == name:
                continue
            for period in dataset["period"].values:
                marks = dataset[name].sel(period=period).values
                tested = float(area.values[marks >= 0].sum())
                found = float(area.values[marks == 1].sum())
                result[quantity, str(period)] = found / tested if tested else np.nan
    return result


def ensemble_grids(
    assessment: Assessment, crop: str, scenarios: Sequence[str]
) -> Mapping[tuple[str, str], xr.Dataset]:
    """Return the ensemble pixels of a crop by (system, scenario), loaded.

    With them the class ``robustness`` of every change, if it was computed.
    """
    layout = Layout.of(assessment)
    result = {}
    for system in assessment.crops[crop].systems:
        for scenario in scenarios:
            with open_result(layout.ensemble_pixels(crop, system, scenario)) as dataset:
                pixels = dataset.load()
            path = layout.robustness_pixels(crop, system, scenario)
            if path.exists():
                with open_result(path) as dataset:
                    chosen = dataset["robustness"].sel(horizon=pixels["horizon"].values)
                    pixels = pixels.assign(robustness=chosen.load())
            result[system, scenario] = pixels
    return result
