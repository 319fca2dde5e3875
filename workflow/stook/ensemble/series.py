"""Regional totals of many simulations as arrays, and the weights of their models."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from stook.assessment.simulations import Simulation
from stook.constants import CENTRAL_DRAW
from stook.errors import AssessmentError, ResultsError
from stook.yields.technology import TECHNOLOGY

_COLUMNS = [
    *("region", "system", "year", "draw", "production_t", "area_ha", "extrapolated_share"),
    "missing_area_ha",
]


@dataclass(frozen=True)
class SystemSeries:
    """Totals of one simulation, crop and system.

    Attributes
    ----------
    regions
        Names, in the order of the table.
    years
        int64, ascending, shape (year,).
    production
        t, at the technology of the baseline, shape (draw, region, year), draw 0 the central
        estimate; NaN where there is none.
    area, missing_area
        ha with and without a yield, shape (region,).
    extrapolated
        Share of the area outside an estimation range, shape (region, year).
    """

    regions: list[str]
    years: np.ndarray
    production: np.ndarray
    area: np.ndarray
    missing_area: np.ndarray
    extrapolated: np.ndarray


def read_series(path: Path) -> dict[str, SystemSeries]:
    """Read a totals table, by system.

    Raises
    ------
    ResultsError
        If it is missing or cannot be read.
    """
    try:
        there = pq.read_schema(path).names
        columns = _COLUMNS + [TECHNOLOGY] * (TECHNOLOGY in there)
        table = pq.read_table(path, columns=columns, read_dictionary=["region", "system"])
    except FileNotFoundError:
        raise ResultsError(f"{path}: no such file; run the stage that makes it") from None
    except (OSError, ValueError, KeyError) as error:
        raise ResultsError(f"{path}: cannot be read ({error}); delete it and run again") from None
    table = table.unify_dictionaries().combine_chunks()
    return _by_system(table)


def series_of(frame: pd.DataFrame) -> dict[str, SystemSeries]:
    """Return the series of a totals table that is in memory; see `read_series`."""
    columns = _COLUMNS + [TECHNOLOGY] * (TECHNOLOGY in frame)
    table = pa.Table.from_pandas(frame[columns], preserve_index=False)
    for name in ("region", "system"):
        place = table.schema.get_field_index(name)
        table = table.set_column(place, name, table[name].dictionary_encode())
    return _by_system(table.unify_dictionaries().combine_chunks())


def _by_system(table: pa.Table) -> dict[str, SystemSeries]:
    regions, region_names = _codes(table["region"])
    systems, system_names = _codes(table["system"])
    columns = {name: table[name].to_numpy() for name in table.column_names[2:]}
    if TECHNOLOGY in columns:
        columns["production_t"] = columns["production_t"] / columns[TECHNOLOGY]
    result = {}
    for number, system in enumerate(system_names):
        chosen = slice(None) if len(system_names) == 1 else systems == number
        own = {name: column[chosen] for name, column in columns.items()}
        result[system] = _arrays(own, regions[chosen], region_names)
    return result


def _codes(column: pa.ChunkedArray) -> tuple[np.ndarray, list[str]]:
    """Return a dictionary column as codes and names, numbered in order of appearance."""
    whole = column.combine_chunks()
    whole = whole.chunk(0) if isinstance(whole, pa.ChunkedArray) else whole
    return whole.indices.to_numpy(), [str(name) for name in whole.dictionary.to_pylist()]


def _arrays(
    columns: Mapping[str, np.ndarray], region: np.ndarray, names: list[str]
) -> SystemSeries:
    first = int(columns["year"].min())
    place = columns["year"] - first
    years = np.flatnonzero(np.bincount(place))
    position = np.zeros(years[-1] + 1, dtype=np.int64)
    position[years] = np.arange(years.size)
    year = position[place]
    shape = (int(columns["draw"].max()) + 1, len(names), years.size)
    if _in_order(shape, columns["draw"], region, year):
        production = columns["production_t"].reshape(shape)
    else:
        production = np.full(shape, np.nan)
        production[columns["draw"], region, year] = columns["production_t"]
    central = columns["draw"] == CENTRAL_DRAW
    extrapolated = np.full((len(names), years.size), np.nan)
    extrapolated[region[central], year[central]] = columns["extrapolated_share"][central]
    areas = {}
    for name in ("area_ha", "missing_area_ha"):
        areas[name] = np.zeros(len(names))
        areas[name][region[central]] = columns[name][central]
    return SystemSeries(
        names,
        years + first,
        production,
        areas["area_ha"],
        areas["missing_area_ha"],
        extrapolated,
    )


def _in_order(shape: tuple[int, int, int], *places: np.ndarray) -> bool:
    """Tell whether rows lie as an array of a shape does, without copying them about."""
    if places[0].size != np.prod(shape):
        return False
    axes = np.ogrid[tuple(slice(size) for size in shape)]
    return all((p.reshape(shape) == axis).all() for p, axis in zip(places, axes, strict=True))


@dataclass(frozen=True)
class Models:
    """The models behind a list of simulations.

    Attributes
    ----------
    number
        int64, number of each simulation's model, shape (simulation,).
    weight
        float64, weight of each model, shape (model,).
    """

    number: np.ndarray
    weight: np.ndarray

    @classmethod
    def of(
        cls,
        simulations: Sequence[Simulation],
        weights: Mapping[str, float] | None,
        source: Path,
    ) -> Models:
        """Number the models of simulations and weigh them, equally unless weights are given.

        Raises
        ------
        AssessmentError
            If weights are given and a model has none, or one is negative, or all are zero.
        """
        names = list(dict.fromkeys(simulation.model for simulation in simulations))
        number = np.array([names.index(s.model) for s in simulations], dtype=np.int64)
        if weights is None:
            return cls(number, np.ones(len(names)))
        where = f"{source}: ensemble.weights"
        if lost := [name for name in names if name not in weights]:
            raise AssessmentError(f"{where}: no weight for {', '.join(lost)}; name every model")
        values = np.array([float(weights[name]) for name in names])
        if not np.isfinite(values).all() or (values < 0).any():
            raise AssessmentError(f"{where}: weights must not be negative")
        if not (values > 0).any():
            raise AssessmentError(f"{where}: at least one model must have a weight above 0")
        return cls(number, values)
