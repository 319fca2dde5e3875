"""Weather indices as a team writes them: definition, unit and the variables they need."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

Variable = Literal["tas", "tasmin", "tasmax", "pr", "rsds", "hurs"]
MeanVariable = Literal["tas", "tasmin", "tasmax", "diurnal-range", "pr", "rsds", "hurs"]
SEASON = "season"
"""Name of the phase that is the whole growing season."""

YEAR_ATTRIBUTES = {"long_name": "year of harvest"}
"""Attributes of the coordinate `year` of seasons and yields."""


class _Definition(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)

    phase: str = Field(SEASON, description="the growth phase the index is taken over")


class DegreeDays(_Definition):
    """Degree days above a base, with a horizontal cut-off at an optional cap (single sine)."""

    measure: Literal["degree-days"]
    base: float = Field(description="lower threshold, degC")
    cap: float | None = Field(None, description="upper threshold, degC; none means no cut-off")

    @model_validator(mode="after")
    def _ordered(self) -> DegreeDays:
        if self.cap is not None and self.cap <= self.base:
            raise ValueError(f"cap {self.cap} must be above base {self.base}")
        return self


class Mean(_Definition):
    """Mean of a variable."""

    measure: Literal["mean"]
    variable: MeanVariable


class Total(_Definition):
    """Precipitation total, in real days whatever the calendar."""

    measure: Literal["total"]
    variable: Literal["pr"] = "pr"


class DaysAbove(_Definition):
    """Number of days on which a variable exceeds a threshold (tasmin: nights)."""

    measure: Literal["days-above"]
    variable: Literal["tas", "tasmin", "tasmax", "pr"]
    threshold: float = Field(description="degC, or mm/day for pr")


class DrySpell(_Definition):
    """Longest run of days with less precipitation than a wet day has."""

    measure: Literal["longest-dry-spell"]
    wet_day: float = Field(1.0, gt=0, description="precipitation of a wet day, mm/day")


class WetDays(_Definition):
    """Number of wet days."""

    measure: Literal["wet-days"]
    wet_day: float = Field(1.0, gt=0, description="precipitation of a wet day, mm/day")


class LargestTotal(_Definition):
    """Largest precipitation total of consecutive days."""

    measure: Literal["largest-total"]
    days: int = Field(5, ge=1, le=365, description="length of the run of days")


class VapourPressureDeficit(_Definition):
    """Mean vapour pressure deficit from tasmin, tasmax and hurs (FAO-56), kPa."""

    measure: Literal["vapour-pressure-deficit"]


class Concentration(_Definition):
    """Logarithm of the year's CO2 concentration over a reference; not written in a document."""

    measure: Literal["co2"] = "co2"
    reference: float = Field(description="ppm")


IndexDefinition = Annotated[
    DegreeDays
    | Mean
    | Total
    | DaysAbove
    | DrySpell
    | WetDays
    | LargestTotal
    | VapourPressureDeficit,
    Field(discriminator="measure"),
]


def needed_variables(definition: IndexDefinition) -> tuple[Variable, ...]:
    """Return the climate variables an index is computed from.

    ``tas`` may be given itself or stand for the mean of tasmin and tasmax; see
    `stook.assessment.variables`.
    """
    match definition:
        case DegreeDays() | Mean(variable="diurnal-range"):
            return ("tasmin", "tasmax")
        case VapourPressureDeficit():
            return ("tasmin", "tasmax", "hurs")
        case Mean() | Total() | DaysAbove():
            return (definition.variable,)  # type: ignore[return-value]
        case _:
            return ("pr",)


def unit_of(definition: IndexDefinition) -> str:
    """Return the UDUNITS unit of an index."""
    match definition:
        case DegreeDays():
            return "degC day"
        case Mean(variable=variable):
            return {"pr": "mm day-1", "rsds": "W m-2", "hurs": "%"}.get(variable, "degC")
        case Total() | LargestTotal():
            return "mm"
        case VapourPressureDeficit():
            return "kPa"
        case _:
            return "day"


def describe(definition: IndexDefinition) -> str:
    """Return the index in words, for attributes and the report."""
    match definition:
        case DegreeDays(base=base, cap=None):
            text = f"degree days above {base:g} degC"
        case DegreeDays(base=base, cap=cap):
            text = f"degree days between {base:g} and {cap:g} degC"
        case Mean(variable=variable):
            text = f"mean {variable}"
        case Total():
            text = "precipitation total"
        case DaysAbove(variable=variable, threshold=threshold):
            unit = "mm day-1" if variable == "pr" else "degC"
            text = f"days with {variable} above {threshold:g} {unit}"
        case DrySpell(wet_day=wet_day):
            text = f"longest run of days below {wet_day:g} mm day-1"
        case LargestTotal(days=days):
            text = f"largest {days}-day precipitation total"
        case WetDays(wet_day=wet_day):
            text = f"days of at least {wet_day:g} mm day-1"
        case _:
            text = "mean vapour pressure deficit"
    where = "growing season" if definition.phase == SEASON else f"{definition.phase} phase"
    return f"{text}, {where}"
