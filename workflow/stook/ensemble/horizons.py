"""Global warming levels as horizons: each simulation's own window of years.

A level is reached in the first 20-year period whose mean global temperature is more than the
level above the mean of 1850-1900 (IPCC AR6 WGI, Cross-Chapter Box Atlas.1 and chapter 4).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
import pandas as pd

from stook.assessment.schema import Assessment
from stook.assessment.simulations import Simulation
from stook.ensemble.kernels import SHARE_OF_YEARS
from stook.ensemble.summary import Years
from stook.errors import InputError

REFERENCE_YEARS = (1850, 1900)
"""The years that warming is counted from."""

WINDOW = 20
"""Years of a window."""

_NAMES = ("model", "scenario", "realisation")
_COLUMNS = (*_NAMES, "year", "tas")

WINDOWS = {
    **dict.fromkeys(("horizon", "simulation", *_NAMES), "str"),
    **dict.fromkeys(("level", "first", "last"), "float64"),
}
"""Columns of the windows table: first and last year, NaN if a level is not reached."""


def level_name(level: float) -> str:
    """Return the name of a warming level among the horizons.

    Examples
    --------
    >>> level_name(1.5), level_name(2.0)
    ('1.5-degC', '2-degC')
    """
    return f"{level:g}-degC"


def warming_window(years: np.ndarray, temperature: np.ndarray, level: float) -> Years | None:
    """Return the first window whose mean exceeds a level above 1850-1900.

    Parameters
    ----------
    years
        int, ascending; a window needs all its years.
    temperature
        Global mean, K or degC, shape (year).
    level
        K.

    Returns
    -------
    tuple of int or None
        First and last year; None if the level is not exceeded.
    """
    early = (years >= REFERENCE_YEARS[0]) & (years <= REFERENCE_YEARS[1])
    base = temperature[early].mean()
    for start in range(years.size - WINDOW + 1):
        if years[start + WINDOW - 1] - years[start] != WINDOW - 1:
            continue
        if temperature[start : start + WINDOW].mean() - base > level:
            return int(years[start]), int(years[start + WINDOW - 1])
    return None


def read_global_means(path: Path) -> pd.DataFrame:
    """Read the table of global mean temperatures: model, scenario, realisation, year, tas.

    Raises
    ------
    InputError
        If it is missing, lacks a column, holds a year twice, or what should be a number is none.
    """
    try:
        frame = pd.read_csv(path, dtype=dict.fromkeys(_NAMES, str))
    except FileNotFoundError:
        raise InputError(f"{path}: no such file (global mean temperatures)") from None
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read as CSV ({error})") from None
    if lost := [name for name in _COLUMNS if name not in frame]:
        raise InputError(
            f"{path}: lacks the columns {', '.join(lost)}; needs {', '.join(_COLUMNS)}"
        )
    for name in ("year", "tas"):
        numbers = pd.to_numeric(frame[name], errors="coerce")
        if numbers.isna().any():
            row = int(np.flatnonzero(numbers.isna())[0])
            raise InputError(f"{path}: {name} in line {row + 2} is no number")
        frame[name] = numbers
    frame["year"] = frame["year"].astype("int64")
    keys = [*_NAMES, "year"]
    if frame.duplicated(keys).any():
        first = frame[frame.duplicated(keys)].iloc[0]
        raise InputError(
            f"{path}: {first['model']}, {first['scenario']}, {first['realisation']} has the year "
            f"{first['year']} twice"
        )
    return frame[list(_COLUMNS)]


def level_windows(assessment: Assessment, runs: Sequence[Simulation]) -> pd.DataFrame:
    """Return the window of every warming level and simulation, columns `WINDOWS`.

    The rows of the historical scenario, if the assessment names one, go before every scenario.

    Raises
    ------
    InputError
        If the table has no rows for a simulation, or too few years of 1850-1900.
    """
    spec = assessment.ensemble.warming_levels
    rows: list[dict[str, object]] = []
    if spec is not None and runs:
        path = assessment.path(spec.file)
        table = read_global_means(path)
        for run in runs:
            years, values = _series(table, run, assessment.simulations.historical, path)
            for level in spec.levels:
                window = warming_window(years, values, level) or (np.nan, np.nan)
                rows.append(
                    {
                        "horizon": level_name(level),
                        "simulation": run.name,
                        **{name: getattr(run, name) for name in _NAMES},
                        "level": level,
                        "first": window[0],
                        "last": window[1],
                    }
                )
    return pd.DataFrame(rows, columns=list(WINDOWS)).astype(WINDOWS)


def _series(
    table: pd.DataFrame, run: Simulation, historical: str | None, path: Path
) -> tuple[np.ndarray, np.ndarray]:
    own = table[(table["model"] == run.model) & (table["realisation"] == run.realisation)]
    later = own[own["scenario"] == run.scenario]
    if later.empty:
        raise InputError(
            f"{path}: no rows for model {run.model}, scenario {run.scenario}, realisation "
            f"{run.realisation}; every simulation needs them"
        )
    past = own[(own["scenario"] == historical) & ~own["year"].isin(later["year"])]
    whole = pd.concat([past, later]).sort_values("year")
    years, values = whole["year"].to_numpy(), whole["tas"].to_numpy(dtype=np.float64)
    first, last = REFERENCE_YEARS
    known = int(((years >= first) & (years <= last)).sum())
    if known < SHARE_OF_YEARS * (last - first + 1):
        raise InputError(
            f"{path}: {run.name} has {known} years of {first}-{last}; two thirds are needed"
        )
    return years, values


def horizons_of(
    assessment: Assessment, windows: pd.DataFrame, simulation: str
) -> Mapping[str, Years]:
    """Return first and last year of a simulation's horizons: calendar windows, then levels."""
    own = windows[(windows["simulation"] == simulation) & windows["first"].notna()]
    levels = {
        str(name): (int(first), int(last))
        for name, first, last in zip(own["horizon"], own["first"], own["last"], strict=True)
    }
    return {**assessment.periods.horizons, **levels}


def horizon_names(assessment: Assessment) -> list[str]:
    """Return the names of all horizons, calendar windows first."""
    spec = assessment.ensemble.warming_levels
    levels = [level_name(level) for level in spec.levels] if spec else []
    return [*assessment.periods.horizons, *levels]
