"""The assessment file: everything a run depends on, as pydantic models.

The reference of every key, with defaults, is docs/assessment-file.md.
"""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field, model_validator

from stook.assessment.crops import Crop, WaterSystem
from stook.assessment.sections import Name, Section, Years
from stook.season.definition import Variable
from stook.yields.co2 import CarbonDioxide


class Axis(Section):
    """Pixel centres from first to last, evenly spaced, degrees."""

    first: float = Field(description="centre of the first pixel")
    last: float = Field(description="centre of the last pixel, a whole number of steps further")
    step: float = Field(gt=0, description="size of a pixel")

    @model_validator(mode="after")
    def _whole_steps(self) -> Axis:
        steps = (self.last - self.first) / self.step
        if self.last < self.first or abs(steps - round(steps)) > 1e-6:
            raise ValueError("last must lie a whole number of steps above first")
        return self


class Grid(Section):
    """The analysis grid: axes, or the grid of a file."""

    lat: Axis | None = Field(None, description="latitudes, southern first")
    lon: Axis | None = Field(None, description="longitudes within -180 to 180, western first")
    like: Path | None = Field(None, description="NetCDF file whose latitude and longitude to use")
    tiles: int = Field(
        1, ge=1, le=1000, description="bands of rows the heavy stages are split into"
    )

    @model_validator(mode="after")
    def _one_way(self) -> Grid:
        if (self.like is None) == (self.lat is None or self.lon is None):
            raise ValueError("give either lat and lon, or like")
        return self


class Periods(Section):
    """Calendar windows, first and last year included."""

    baseline: Years = Field(description="what changes are measured against")
    horizons: dict[Name, Years] = Field(
        default_factory=dict, description="future periods by name; without any, no change is stated"
    )
    span: Years | None = Field(None, description="years to compute; default: all in the files")


Files = dict[Variable, list[str]]
"""Per variable, the files or file patterns (``*``, ``?``) of one series."""


class Reference(Section):
    """The reference data the correction is calibrated on, and the pseudo-simulation observed."""

    name: str = Field(description="name of the record, as the report shows it")
    files: Files = Field(min_length=1, description="by variable: files or patterns (`*`, `?`)")


class Run(Section):
    """One simulation with explicit files, historical and scenario part together."""

    model: Name = Field(description="name of the climate model")
    scenario: Name = Field(description="name of the scenario")
    realisation: Name = Field(description="name of the realisation, such as r1")
    files: Files = Field(
        min_length=1, description="by variable: all files of the series, the historical ones too"
    )


class Simulations(Section):
    """The ensemble: a file pattern with named fields, or explicit runs.

    The pattern holds ``{variable}``, ``{model}``, ``{scenario}``, ``{realisation}``; other
    parts may use ``*``.
    """

    pattern: str | None = Field(
        None,
        description="such as climate/{model}/{variable}_day_{model}_{scenario}_{realisation}_*.nc",
    )
    historical: Name | None = Field(
        None, description="scenario name of the historical part, joined before every scenario"
    )
    models: list[Name] | None = Field(None, description="keep these models only")
    scenarios: list[Name] | None = Field(None, description="keep these scenarios only")
    runs: list[Run] = Field(
        default_factory=list, description="instead of a pattern: explicit files"
    )

    @model_validator(mode="after")
    def _one_way(self) -> Simulations:
        if self.pattern is not None:
            fields = ("{variable}", "{model}", "{scenario}", "{realisation}")
            if missing := [field for field in fields if field not in self.pattern]:
                raise ValueError(f"pattern lacks {', '.join(missing)}")
        if self.pattern is not None and self.runs:
            raise ValueError("give either pattern or runs")
        return self


Method = Literal["quantile-delta", "quantile", "delta", "mean", "none"]


class VariableCorrection(Section):
    """Choices of the correction of one variable; those left out come from `correct.all`."""

    method: Method = Field("quantile-delta", description="see docs/correct.md")
    kind: Literal["additive", "ratio"] | None = Field(
        None, description="default: ratio for pr, additive otherwise"
    )
    window_days: int = Field(31, ge=1, le=365, description="days of the moving window")
    step_days: int = Field(5, ge=1, le=31, description="days between the centres of windows")
    cdf_years: int = Field(
        30, ge=5, description="years of the moving window of quantile-delta and delta"
    )
    cdf_step_years: int = Field(10, ge=1, description="years by which that window moves on")
    nodes: int | Literal["all"] = Field("all", description="quantiles kept of each calibration CDF")
    ratio_cap: float = Field(10.0, gt=1, description="largest factor of a ratio correction")
    trace: float = Field(0.05, gt=0, description="pr: below this a day is dry, mm/day")
    minimum_values: int = Field(100, ge=10, description="values a window needs")


class Correct(Section):
    """The correct stage."""

    calibration: Years | None = Field(None, description="default: the baseline")
    temperature_pair: Literal["mean-and-range", "separate"] = Field(
        "mean-and-range", description="tasmin and tasmax as mean and range, or each by itself"
    )
    all: VariableCorrection = Field(VariableCorrection(), description="choices for all variables")
    variables: dict[Variable, dict[str, Any]] = Field(
        default_factory=dict, description="by variable: keys of `all` that differ"
    )

    @model_validator(mode="after")
    def _valid_overrides(self) -> Correct:
        for variable in self.variables:
            self.choice(variable)
        paired = self.temperature_pair == "mean-and-range"
        if paired and self.choice("tasmin") != self.choice("tasmax"):
            raise ValueError(
                "tasmin and tasmax need the same choices, unless temperature_pair is separate"
            )
        return self

    def choice(self, variable: str) -> VariableCorrection:
        """Return the choices for one variable, its own over those for all."""
        own = self.variables.get(variable, {})  # type: ignore[call-overload]
        merged = VariableCorrection.model_validate(self.all.model_dump() | own)
        if merged.kind is None:
            kind = "ratio" if variable == "pr" else "additive"
            merged = merged.model_copy(update={"kind": kind})
        return merged


class Regions(Section):
    """The region polygons."""

    file: Path = Field(description="GeoPackage, GeoJSON or shapefile")
    layer: str | None = Field(None, description="layer of the file; needed if there are several")
    name: str = Field("name", description="attribute that holds the region's name")
    only: list[str] | None = Field(None, description="keep these regions of the file only")


class WarmingLevels(Section):
    """Global warming levels as horizons, each simulation with its own 20-year window."""

    file: Path = Field(
        description="CSV with the global mean temperature of every simulation: "
        "model, scenario, realisation, year, tas"
    )
    levels: list[Annotated[float, Field(gt=0, le=10)]] = Field(
        default_factory=lambda: [1.5, 2.0, 3.0, 4.0],
        min_length=1,
        description="K above the mean of 1850-1900",
    )


class Ensemble(Section):
    """The ensemble stage."""

    draws: int = Field(200, ge=0, le=10000, description="draws of the response coefficients")
    weights: dict[Name, float] | None = Field(None, description="model weights; default: equal")
    warming_levels: WarmingLevels | None = Field(
        None, description="horizons by global warming level, besides those of periods"
    )
    classes: list[float] = Field(
        default_factory=lambda: [-25.0, -10.0, -5.0, 0.0, 5.0, 10.0, 25.0],
        min_length=1,
        description="bounds of the classes of yield change, %, ascending",
    )
    class_years: int = Field(
        20, ge=10, le=50, description="years of the successive periods of the class bars"
    )
    partition_years: int = Field(
        10,
        ge=1,
        le=30,
        description="years of the running mean whose variance counts as internal variability",
    )
    shortfall: float = Field(
        25.0, gt=0, lt=100, description="a year this far below the expected path fails, %"
    )

    @model_validator(mode="after")
    def _ascending(self) -> Ensemble:
        if any(b <= a for a, b in pairwise(self.classes)):
            raise ValueError("classes must ascend")
        return self


class EnergyContent(Section):
    """Energy of a crop as it is weighed in its yield."""

    kcal: float = Field(gt=0, lt=1000, description="kcal per 100 g")
    basis: str = Field(min_length=1, description="product and source, such as: rice, milled; ...")


class Supply(Section):
    """From production to people supplied."""

    energy: dict[Name, EnergyContent] = Field(
        default_factory=dict, description="by crop; default: FAO 2001 for crops of known name"
    )
    kcal_per_day: float = Field(2000.0, gt=0, description="kcal a person needs a day")
    population: Path | None = Field(
        None, description="CSV with the people of each region: region, population"
    )


class Trend(Section):
    """The trend stage."""

    periods: dict[Name, Years] = Field(
        default_factory=dict, description="default: the whole of each simulation"
    )
    method: Literal["ar1", "shuffle", "blocks", "phases"] = Field(
        "ar1", description="test that headlines are drawn from"
    )
    randomisations: int = Field(999, ge=99, le=100000, description="randomised series per test")
    level: float = Field(0.05, gt=0, lt=0.5, description="level of significance")
    minimum_years: int = Field(20, ge=10, description="years a trend needs")


class Store(Section):
    """How grids are written."""

    daily_codec: Literal["zstd", "zlib"] = Field(
        "zstd", description="codec of daily grids; zlib opens in programs without a filter plugin"
    )
    block_mb: int = Field(64, ge=1, description="size of the chunks a job works on")


class Assessment(Section):
    """A whole assessment, validated. `folder` is where its file lies; paths are relative to it."""

    title: str = Field(description="one line that says what is assessed")
    name: Name = Field(description="name of the folder under `results`")
    seed: int = Field(ge=0, description="seed of everything random")
    results: Path = Field(Path("results"), description="folder of all results")
    grid: Grid = Field(description="the grid every result lies on")
    periods: Periods = Field(description="baseline and horizons")
    reference: Reference | None = Field(
        None, description="the observed record; needed unless nothing is corrected"
    )
    simulations: Simulations = Field(Simulations(), description="the climate models' output")
    correct: Correct = Field(Correct(), description="how simulations are corrected")
    crops: dict[Name, Crop] = Field(min_length=1, description="by name of the crop")
    co2: CarbonDioxide | None = Field(
        None, description="effect of CO2 on yields, see docs/yields.md; default: none"
    )
    regions: Regions = Field(description="where totals are taken")
    ensemble: Ensemble = Field(Ensemble(), description="how members are put together")
    supply: Supply = Field(Supply(), description="from production to people supplied")
    trend: Trend = Field(Trend(), description="how trends are tested")
    store: Store = Field(Store(), description="how grids are written")
    subset: list[str] = Field(
        default_factory=list, description="set by --region: compute these regions only"
    )
    source: Path = Field(Path("assessment.yaml"), description="set on loading: the file itself")

    @model_validator(mode="after")
    def _possible(self) -> Assessment:
        choices = [
            self.correct.choice(name) for name in ("tas", "tasmin", "tasmax", "pr", "rsds", "hurs")
        ]
        if self.reference is None and any(choice.method != "none" for choice in choices):
            raise ValueError(
                "reference is required, unless correct.all.method is none for every variable"
            )
        if self.co2 and (unknown := sorted(set(self.co2.crops) - set(self.crops))):
            raise ValueError(f"co2.crops: {', '.join(unknown)} is no crop of the assessment")
        if unknown := sorted(set(self.supply.energy) - set(self.crops)):
            raise ValueError(f"supply.energy: {', '.join(unknown)} is no crop of the assessment")
        if self.reference is None and not (self.simulations.pattern or self.simulations.runs):
            raise ValueError("give simulations, a reference, or both")
        return self

    @property
    def folder(self) -> Path:
        """Folder of the assessment file."""
        return self.source.parent

    def path(self, given: Path | str) -> Path:
        """Return a path of the file as an absolute path."""
        return (self.folder / given).resolve()

    @property
    def systems(self) -> list[tuple[str, str]]:
        """All (crop, system) pairs in the order of the file."""
        return [(crop, system) for crop, spec in self.crops.items() for system in spec.systems]

    def system(self, crop: str, system: str) -> WaterSystem:
        """Return one crop x water system."""
        return self.crops[crop].systems[system]
