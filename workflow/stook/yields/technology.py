"""Technology: how yields would rise in an unchanged climate, a factor by year, by crop.

The factor is 1 in every year up to the last of the baseline, so that the baseline stands as
observed, and is kept apart from climate: the yield ratio, the effects and every change in percent
are against the same technology.
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

import numpy as np
import pandas as pd
import xarray as xr
from pydantic import BaseModel, ConfigDict, Field

from stook.errors import InputError

TECHNOLOGY = "technology"
"""Name of the factor in grids and tables; they are without it where technology is constant."""

Growth = Annotated[float, Field(ge=0, le=10)]


class _Path(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class ConstantTechnology(_Path):
    """The technology of the baseline throughout."""

    form: Literal["constant"] = Field("constant", description="the default")


class LinearTechnology(_Path):
    """As much more every year after the baseline."""

    form: Literal["linear"] = Field(description="without end")
    rate: Growth = Field(description="% of the baseline yield per year")


class LevellingTechnology(_Path):
    """More every year after the baseline, ever less so, up to a ceiling."""

    form: Literal["levelling-off"] = Field(description="exponential approach to the ceiling")
    rate: Growth = Field(description="in the first year, % of the baseline yield per year")
    ceiling: float = Field(gt=100, le=1000, description="% of the baseline yield")


class TableTechnology(_Path):
    """Factors from a table, on a line between its years."""

    form: Literal["table"] = Field(description="the team's own path")
    file: Path = Field(description="CSV: year, factor; 1 in years of the baseline")


Technology = Annotated[
    ConstantTechnology | LinearTechnology | LevellingTechnology | TableTechnology,
    Field(discriminator="form"),
]


def technology_factors(
    technology: Technology, years: np.ndarray, last: int, folder: Path
) -> pd.Series | None:
    """Return the factor of every year; None if it is constant.

    With n the years since the last of the baseline: linear ``1 + rate n``; levelling off
    ``1 + (c - 1) (1 - exp(-rate n / (c - 1)))``, c the ceiling, which starts with the slope
    ``rate`` (the exponential approach to a limit, Mitscherlich's curve; a choice of this program).

    Parameters
    ----------
    technology
        Of the crop.
    years
        int, any.
    last
        Last year of the baseline.
    folder
        What the path of a table is relative to.

    Returns
    -------
    Series
        float64, index year.

    Raises
    ------
    InputError
        If a table is not as it must be, or does not reach the last of the years.
    """
    since = [max(0, int(year) - last) for year in years]
    match technology:
        case LinearTechnology(rate=rate):
            values = [1.0 + rate / 100 * n for n in since]
        case LevellingTechnology(rate=rate, ceiling=ceiling):
            room = ceiling / 100 - 1.0
            values = [1.0 - room * float(np.expm1(-rate / 100 * n / room)) for n in since]
        case TableTechnology(file=file):
            path = (folder / file).resolve()
            given = read_technology(path, last)
            end = int(given.index.max())
            if max(years) > end:
                raise InputError(f"{path}: ends in {end}; years to {max(years)} are needed")
            known, at = given.index.to_numpy(), given.to_numpy()
            values = [float(np.interp(max(last, int(year)), known, at)) for year in years]
        case _:
            return None
    return pd.Series(values, index=pd.Index(years, name="year"), name=TECHNOLOGY)


def read_technology(path: Path, last: int) -> pd.Series:
    """Read the factors of a table from the last year of the baseline on; that year is 1.

    Raises
    ------
    InputError
        If the table is missing, lacks a column, has a year twice or a factor that is no number
        above 0, or one other than 1 in a year of the baseline or before.
    """
    try:
        frame = pd.read_csv(path)
    except FileNotFoundError:
        raise InputError(f"{path}: no such file (technology)") from None
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read as CSV ({error})") from None
    if lost := [name for name in ("year", "factor") if name not in frame]:
        raise InputError(f"{path}: lacks the column {', '.join(lost)}; it needs year and factor")
    year, factor = (pd.to_numeric(frame[name], errors="coerce") for name in ("year", "factor"))
    if not (year % 1 == 0).all() or not year.is_unique:
        raise InputError(f"{path}: year must be a whole number, and every year stand once")
    if not ((factor > 0) & np.isfinite(factor)).all():
        raise InputError(f"{path}: factor must be a number above 0")
    if (factor[year <= last] != 1).any():
        raise InputError(f"{path}: factor must be 1 up to {last}, the end of the baseline")
    given = pd.Series(factor.to_numpy(float), index=year.astype(int)).sort_index()
    given = given[given.index > last]
    return pd.concat([pd.Series([1.0], index=[last]), given])


def climate_yield(yields: xr.Dataset) -> xr.DataArray:
    """Return yields at the technology of the baseline: what climate alone makes of them."""
    grid = yields["yield"]
    if TECHNOLOGY not in yields:
        return grid
    return grid.copy(data=(grid / yields[TECHNOLOGY]).transpose(*grid.dims).data)


def describe_technology(technology: Technology) -> str:
    """Return a technology path in words, for the report."""
    match technology:
        case LinearTechnology(rate=rate):
            return f"{rate:g} % of the baseline yield more every year after the baseline"
        case LevellingTechnology(rate=rate, ceiling=ceiling):
            return (
                f"{rate:g} % of the baseline yield more in the first year after the baseline, "
                f"levelling off at {ceiling:g} %"
            )
        case TableTechnology(file=file):
            return f"factors of {file.name}"
        case _:
            return "constant"
