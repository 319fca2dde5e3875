"""The effect of carbon dioxide on yields: a power of its concentration, a term of a log response.

Yield goes with ``C ** b``, which is concave for b below 1; in the response it is the term
``b ln(C / C0)``. It is uniform in space: a concentration by scenario and year.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Literal

import numpy as np
import pandas as pd
import xarray as xr
from pydantic import BaseModel, ConfigDict, Field, model_validator

from stook.constants import OBSERVED
from stook.errors import AssessmentError, InputError
from stook.randomness import generator
from stook.season.definition import Concentration
from stook.yields.response import Linear, Response

CO2 = "co2"
"""Name of the index, the term and its coefficient."""

HISTORICAL = "historical"
"""Scenario of the rows of the past, unless `simulations.historical` names another."""

_NINETY = 2 * 1.6448536269514722  # 5th to 95th percentile of a normal distribution, std. deviations


class _Strict(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class CropEffect(_Strict):
    """Yield at one concentration over that at another, in experiments without other limits."""

    ppm: tuple[float, float] = Field(description="lower and higher concentration compared, ppm")
    percent: float = Field(description="higher yield at the higher, %; 0 for none")
    low: float = Field(description="5th percentile of that, %")
    high: float = Field(description="95th percentile of that, %")
    source: str = Field(min_length=1, description="where the numbers come from")

    @model_validator(mode="after")
    def _possible(self) -> CropEffect:
        if not 0 < self.ppm[0] < self.ppm[1]:
            raise ValueError(f"ppm must be two concentrations, ascending, got {list(self.ppm)}")
        if not -100 < self.low <= self.percent <= self.high:
            raise ValueError("needs -100 < low <= percent <= high")
        if self.power(self.high) >= 1:
            raise ValueError("high must be less than in proportion to the concentration (concave)")
        return self

    def power(self, percent: float) -> float:
        """Return b of ``C ** b`` for a gain in per cent."""
        return math.log1p(percent / 100) / math.log(self.ppm[1] / self.ppm[0])

    @property
    def central(self) -> float:
        """The central b."""
        return self.power(self.percent)

    @property
    def error(self) -> float:
        """The standard deviation of b: of a normal distribution as wide, 5th to 95th percentile."""
        return (self.power(self.high) - self.power(self.low)) / _NINETY


class CarbonDioxide(_Strict):
    """Whether and how carbon dioxide acts on yields."""

    use: Literal["off", "central", "drawn"] = Field(
        description="off; the central effect in all draws; or an effect drawn for each"
    )
    file: Path = Field(description="CSV of the concentration: scenario, year, ppm")
    crops: dict[str, CropEffect] = Field(
        min_length=1, description="by crop; a crop that is left out has no effect"
    )


def effect_of(co2: CarbonDioxide | None, crop: str) -> CropEffect | None:
    """Return the effect on a crop; None if it is off, or there is none."""
    return None if co2 is None or co2.use == "off" else co2.crops.get(crop)


def with_co2(response: Response, effect: CropEffect, use: str) -> Response:
    """Return a response with the term of carbon dioxide added, last and uncorrelated.

    The estimation range is up to the higher concentration of the experiments.

    Raises
    ------
    AssessmentError
        If the link is not log, or the name is taken.
    """
    who = f"response of {response.crop}, {response.system}"
    if response.link != "log":
        raise AssessmentError(f"co2: {who} has a level link; the effect of CO2 needs a log link")
    if CO2 in response.indices or CO2 in response.terms:
        raise AssessmentError(f"co2: {who} has an index or a term co2 already; leave one out")
    size = len(response.coefficient_vector)
    covariance = np.zeros((size + 1, size + 1))
    covariance[:size, :size] = response.covariance_matrix
    covariance[size, size] = effect.error**2 if use == "drawn" else 0.0
    term = Linear(form="linear", index=CO2, coefficient=effect.central)
    lowest = math.log(1.0 / effect.ppm[0])
    return response.model_copy(
        update={
            "indices": response.indices | {CO2: Concentration(reference=effect.ppm[0])},
            "terms": response.terms | {CO2: term},
            "covariance": tuple(tuple(row) for row in covariance.tolist()),
            "standard_errors": None,
            "estimation_range": {
                **response.estimation_range,
                CO2: (lowest, math.log(effect.ppm[1] / effect.ppm[0])),
            },
        }
    )


def effect_draws(effect: CropEffect, use: str, crop: str, draws: int, seed: int) -> np.ndarray:
    """Return b of the central estimate and of every draw, float64 (draw,).

    From a stream of their own, by crop: the other coefficients are the same with and without, and
    the water systems of a crop share their draws.
    """
    error = effect.error if use == "drawn" else 0.0
    normal = generator(seed, "co2", crop).standard_normal(draws)
    return effect.central + error * np.concatenate([[0.0], normal])


def read_concentrations(path: Path) -> pd.Series:
    """Read the concentrations, ppm; index (scenario, year).

    Raises
    ------
    InputError
        If the table is missing, lacks a column, has a scenario and year twice, or a concentration
        that is not between 100 and 10,000 ppm.
    """
    try:
        frame = pd.read_csv(path, dtype={"scenario": str})
    except FileNotFoundError:
        raise InputError(f"{path}: no such file (concentration of CO2)") from None
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read as CSV ({error})") from None
    if lost := [name for name in ("scenario", "year", "ppm") if name not in frame]:
        raise InputError(f"{path}: lacks the column {', '.join(lost)}")
    year, ppm = (pd.to_numeric(frame[name], errors="coerce") for name in ("year", "ppm"))
    if not (year % 1 == 0).all():
        raise InputError(f"{path}: year must be a whole number")
    if not ppm.between(100, 10000).all():
        raise InputError(f"{path}: ppm must lie between 100 and 10000")
    index = pd.MultiIndex.from_arrays([frame["scenario"], year.astype(int)])
    if not index.is_unique:
        scenario, twice = index[index.duplicated()][0]
        raise InputError(f"{path}: {scenario} {twice} stands twice")
    return pd.Series(ppm.to_numpy(float), index=index)


def concentrations(
    table: pd.Series, scenario: str, historical: str, years: np.ndarray, path: Path
) -> np.ndarray:
    """Return the concentration of every year, ppm: that of the scenario, else the historical.

    Raises
    ------
    InputError
        If a year is in neither.
    """
    values = [
        table.get((scenario, int(year)), table.get((historical, int(year)), math.nan))
        for year in years
    ]
    if lost := [int(year) for year, ppm in zip(years, values, strict=True) if math.isnan(ppm)]:
        raise InputError(
            f"{path}: no concentration for {scenario} in {lost[0]}"
            + (f" and {len(lost) - 1} more years" if lost[1:] else "")
            + f"; give rows of {scenario} or {historical}"
        )
    return np.array(values)


def scenario_of(simulation: str, historical: str) -> str:
    """Return the scenario of a simulation by its name; `observed` has the historical one."""
    return historical if simulation == OBSERVED else simulation.split("_")[1]


def co2_index(season: xr.Dataset, ppm: np.ndarray, reference: float) -> xr.Dataset:
    """Return season indices with ln(ppm / reference) added, the same at every pixel."""
    logarithm = [math.log(value / reference) for value in ppm.tolist()]
    like = next(grid for grid in season.data_vars.values() if "year" in grid.dims)
    grid = xr.ones_like(like, dtype=np.float64) * xr.DataArray(logarithm, dims="year")
    return season.assign({CO2: grid.transpose(*like.dims)})
