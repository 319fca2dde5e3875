"""The panel: yields by unit and year, checked, and joined with the weather of the units."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from stook.errors import InputError
from stook.fit.document import Column, Fit
from stook.yields.response import Term
from stook.yields.response_terms import term_columns

FEWEST_YEARS = 5
"""Years a panel must have."""

_SHOWN = 5


@dataclass(frozen=True)
class UnitWeather:
    """The weather of the units, ready to be regressed on.

    Attributes
    ----------
    columns
        Row index (unit, year); one column per `column_names` of every term asked for.
    indices
        Mean of every index, row index (unit, year).
    ranges
        Lowest and highest value of every index in the data, over pixels if there are pixels.
    """

    columns: pd.DataFrame
    indices: pd.DataFrame
    ranges: dict[str, tuple[float, float]]


@dataclass(frozen=True)
class Sample:
    """The rows every specification is estimated from, sorted by unit and year.

    Attributes
    ----------
    rows
        unit, year, response (log yield or yield, t/ha), weight, inputs as they enter, block if
        there is one.
    weather
        The columns of every term, in the order of `rows`.
    indices, ranges
        See `UnitWeather`; indices in the order of `rows`.
    dropped
        Unit-years left out, by why.
    """

    rows: pd.DataFrame
    weather: pd.DataFrame
    indices: pd.DataFrame
    ranges: dict[str, tuple[float, float]]
    dropped: dict[str, int]


def column_names(term: Term) -> list[str]:
    """Return a name for every design column of a term; equal columns have equal names."""
    shape = [term.form, *term.used, *(f"{knot:g}" for knot in getattr(term, "knots", ()))]
    return [" ".join((*shape, str(place + 1))) for place in range(len(term.coefficients))]


def design_columns(terms: list[Term], indices: Mapping[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Return the design columns of terms by name, each shaped like the indices."""
    return {
        name: values
        for term in terms
        for name, values in zip(column_names(term), term_columns(term, indices), strict=True)
    }


def read_panel(path: Path, fit: Fit) -> pd.DataFrame:
    """Read and check a yield panel.

    Returns
    -------
    DataFrame
        unit (str), year (int), yield, area or block if they are used, input columns; sorted by
        unit and year; values may be missing.

    Raises
    ------
    InputError
        If the file, a column or a value is not as it must be, or a unit-year stands twice.
    """
    frame = _read_csv(path)
    wanted: dict[str, Column] = {fit.column(name): name for name in ("unit", "year", "yield")}
    if fit.weight == "area":
        wanted[fit.column("area")] = "area"
    if fit.standard_errors.method == "bootstrap-space" and fit.weather.assessment is None:
        wanted[fit.column("block")] = "block"
    _need_columns(frame, [*wanted, *fit.inputs], path)
    frame = frame[[*wanted, *fit.inputs]].rename(columns=wanted)
    numbers = [name for name in frame.columns if name not in ("unit", "block")]
    frame = keyed(_numeric(frame, numbers, path), path)
    if fit.years is not None:
        frame = frame[frame["year"].between(*fit.years)]
    return frame.reset_index(drop=True)


def keyed(frame: pd.DataFrame, path: Path) -> pd.DataFrame:
    """Return a table sorted by unit (str) and year (int), each unit-year once."""
    if frame[["unit", "year"]].isna().any(axis=None):
        row = int(np.flatnonzero(frame[["unit", "year"]].isna().any(axis=1))[0])
        raise InputError(f"{path}: line {row + 2} has no unit or no year; give every row both")
    if (wrong := frame["year"] % 1 != 0).any():
        given = frame.loc[wrong, "year"].iloc[0]
        raise InputError(f"{path}: year {given:g} is not a whole number")
    frame = frame.assign(unit=frame["unit"].astype(str), year=frame["year"].astype(int))
    if (twice := frame.duplicated(["unit", "year"])).any():
        names = [f"{unit} {year}" for unit, year in frame.loc[twice, ["unit", "year"]].to_numpy()]
        raise InputError(
            f"{path}: {listed(names)} stand{'s' if len(names) == 1 else ''} twice; "
            "a unit has one row a year"
        )
    return frame.sort_values(["unit", "year"], ignore_index=True)


def table_weather(path: Path, fit: Fit, terms: list[Term]) -> UnitWeather:
    """Return the weather of the units from a table with a row a unit and year.

    Raises
    ------
    InputError
        If an index is not available, or the table is not as it must be.
    """
    names = fit.index_names
    defined = fit.weather.indices
    if unknown := [name for name in names if name not in defined]:
        raise InputError(
            f"{path}: index {listed(unknown)} has no definition; "
            f"weather.indices has {', '.join(defined)}"
        )
    frame = _read_csv(path)
    _need_columns(frame, ["unit", "year", *names], path)
    frame = keyed(_numeric(frame[["unit", "year", *names]], ["year", *names], path), path)
    indices = frame.set_index(["unit", "year"])
    columns = design_columns(terms, {name: indices[name].to_numpy(float) for name in names})
    return UnitWeather(pd.DataFrame(columns, index=indices.index), indices, {})


def make_sample(panel: pd.DataFrame, weather: UnitWeather, fit: Fit, path: Path) -> Sample:
    """Join panel and weather; every specification is estimated from the same rows.

    Raises
    ------
    InputError
        If yields or inputs cannot be taken the logarithm of, a unit has no weather, or years are
        too few.
    """
    lacking = sorted(set(panel["unit"]) - set(weather.columns.index.get_level_values("unit")))
    if lacking:
        raise InputError(f"{path}: no season indices for unit {listed(lacking)}")
    place = pd.MultiIndex.from_frame(panel[["unit", "year"]])
    columns = weather.columns.reindex(place)
    own = [name for name in ("yield", "area", *fit.inputs) if name in panel]
    no_value = panel[own].isna().any(axis=1).to_numpy()
    no_weather = ~np.isfinite(columns.to_numpy()).all(axis=1)
    kept = ~no_value & ~no_weather
    dropped = {
        "yield, area or input missing": int(no_value.sum()),
        "season index missing": int((no_weather & ~no_value).sum()),
    }
    rows = panel[kept].reset_index(drop=True)
    _enough_years(rows, fit, path)
    rows["response"] = _linked(rows, "yield", fit.link, path)
    for name, how in fit.inputs.items():
        rows[name] = _linked(rows, name, how, path)
    rows["weight"] = _weights(rows, path) if fit.weight == "area" else 1.0
    indices = weather.indices.reindex(place)[kept].reset_index(drop=True)
    ranges = weather.ranges or {
        str(name): (float(indices[name].min()), float(indices[name].max())) for name in indices
    }
    return Sample(rows, columns[kept].reset_index(drop=True), indices, ranges, dropped)


def listed(names: list[str]) -> str:
    """Return the first names of a list, and how many more there are."""
    shown = ", ".join(names[:_SHOWN])
    return shown if len(names) <= _SHOWN else f"{shown} and {len(names) - _SHOWN} more"


def _read_csv(path: Path) -> pd.DataFrame:
    try:
        return pd.read_csv(path)
    except FileNotFoundError:
        raise InputError(f"{path}: no such file") from None
    except (OSError, ValueError) as error:
        reason = " ".join(str(error).split())
        raise InputError(f"{path}: cannot be read as CSV ({reason})") from None


def _need_columns(frame: pd.DataFrame, names: list[str], path: Path) -> None:
    if missing := [name for name in names if name not in frame]:
        there = ", ".join(map(str, frame.columns))
        raise InputError(f"{path}: has no column {listed(missing)}; it has {there}")


def _numeric(frame: pd.DataFrame, names: list[str], path: Path) -> pd.DataFrame:
    frame = frame.copy()
    for name in names:
        numbers = pd.to_numeric(frame[name], errors="coerce").astype(float)
        if (wrong := (numbers.isna() & frame[name].notna()) | np.isinf(numbers)).any():
            row = int(np.flatnonzero(wrong)[0])
            given = frame[name].iloc[row]
            raise InputError(f"{path}: line {row + 2}: {name} is {given!r}; must be a number")
        frame[name] = numbers
    return frame


def _linked(rows: pd.DataFrame, name: str, how: str, path: Path) -> pd.Series:
    if how == "level":
        return rows[name]
    if (wrong := rows[name] <= 0).any():
        unit, year, value = rows.loc[wrong, ["unit", "year", name]].iloc[0]
        remedy = "link: level" if name == "yield" else f"inputs.{name}: level"
        raise InputError(
            f"{path}: {name} of {unit} {year} is {value:g} ({int(wrong.sum())} such rows); "
            f"a logarithm needs values above 0: mend the rows, or use {remedy}"
        )
    return np.log(rows[name])


def _weights(rows: pd.DataFrame, path: Path) -> pd.Series:
    if (wrong := rows["area"] <= 0).any():
        unit, year, value = rows.loc[wrong, ["unit", "year", "area"]].iloc[0]
        raise InputError(f"{path}: area of {unit} {year} is {value:g}; a weight must be above 0")
    return rows["area"] / rows["area"].mean()


def _enough_years(rows: pd.DataFrame, fit: Fit, path: Path) -> None:
    years = rows["year"].nunique()
    if years < FEWEST_YEARS:
        raise InputError(
            f"{path}: {years} years with yield and weather; a fit needs {FEWEST_YEARS} or more"
        )
    if fit.unit_effects:
        own = 1 + (fit.trend_degree if fit.trend_by_unit else 0)
        counts = rows.groupby("unit")["year"].size()
        if few := [str(unit) for unit in counts.index[counts <= own]]:
            raise InputError(
                f"{path}: unit {listed(few)} has too few years; an effect and trend of its own "
                f"need {own + 1} or more"
            )
    if rows["unit"].nunique() < 2:
        raise InputError(f"{path}: only one unit; a panel needs two or more")
