"""The crops of the assessment file: water systems, their layers, calendars and responses."""

from __future__ import annotations

from pathlib import Path
from typing import Any, Literal

from pydantic import Field, model_validator

from stook.assessment.sections import Name, Section
from stook.season.definition import SEASON, IndexDefinition
from stook.yields.technology import ConstantTechnology, Technology


class Layer(Section):
    """A grid of one crop property: a variable of a NetCDF file, a GeoTIFF band, or one number."""

    file: Path | None = Field(None, description="NetCDF, or GeoTIFF (.tif, .tiff)")
    variable: str | None = Field(None, description="NetCDF variable; needed if there are several")
    band: int = Field(1, ge=1, description="GeoTIFF band")
    value: float | None = Field(None, description="the same number everywhere")
    unit: str | None = Field(None, description="overrides, or stands in for, the unit in the file")

    @model_validator(mode="before")
    @classmethod
    def _short_form(cls, given: Any) -> Any:
        if isinstance(given, bool):
            return given
        if isinstance(given, int | float):
            return {"value": given}
        if isinstance(given, str):
            return {"file": given}
        return given

    @model_validator(mode="after")
    def _one_way(self) -> Layer:
        if (self.file is None) == (self.value is None):
            raise ValueError("give either file or value")
        return self


class CropCalendar(Section):
    """Planting and maturity as day of year (1 to 365); maturity before planting: next year."""

    planting: Layer = Field(description="day of year of planting or sowing")
    maturity: Layer = Field(description="day of year of maturity or harvest")


class WaterSystem(Section):
    """One crop under one water supply (rainfed, irrigated, or the team's own name)."""

    area: Layer = Field(description="harvested area: ha, km2 or a fraction of the cell")
    calendar: CropCalendar = Field(description="growing season")
    phases: dict[Name, tuple[float, float]] = Field(
        default_factory=dict, description="growth phases as fractions of the season, 0 to 1"
    )
    baseline_yield: Layer = Field(description="t/ha or a convertible unit")
    response: Path = Field(description="response document, see below")
    indices: dict[str, IndexDefinition] = Field(
        default_factory=dict, description="indices wanted besides those of the response"
    )
    extrapolation: Literal["flag", "hold"] | None = Field(
        None, description="overrides that of the response document"
    )

    @model_validator(mode="after")
    def _valid_phases(self) -> WaterSystem:
        for name, (start, end) in self.phases.items():
            if name == SEASON:
                raise ValueError("phase name 'season' is the whole season already")
            if not 0 <= start < end <= 1:
                raise ValueError(f"phase {name}: needs 0 <= start < end <= 1, got {start} to {end}")
        return self


class Crop(Section):
    """One crop with its water systems."""

    systems: dict[Name, WaterSystem] = Field(min_length=1, description="by name of the system")
    technology: Technology = Field(
        ConstantTechnology(),
        description="path of yields in an unchanged climate; see docs/yields.md",
    )

    @model_validator(mode="after")
    def _reserved(self) -> Crop:
        if "all" in self.systems:
            raise ValueError("system name 'all' is the combination of the systems")
        return self
