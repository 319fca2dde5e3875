"""The fit document: what is estimated, from which files, and how.

The reference of every key, with defaults, is docs/fit.md.
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, model_validator

from stook.assessment.documents import read_document
from stook.assessment.sections import Name, Section, Years
from stook.season.definition import IndexDefinition
from stook.yields.response import Term

Trend = Literal["none", "linear", "quadratic", "linear-by-unit", "quadratic-by-unit"]
Standard = Literal[
    "cluster-unit", "cluster-year", "cluster-unit-year", "bootstrap-years", "bootstrap-space"
]


def _without_coefficients(given: Any) -> Any:
    """Complete a term with zeros, so that it is the term of a response document."""
    if not isinstance(given, dict):
        return given
    if written := sorted({"coefficient", "coefficients"} & set(given)):
        raise ValueError(f"{written[0]} is what the fit estimates; leave it out")
    match given.get("form"):
        case "quadratic":
            return given | {"coefficients": [0.0, 0.0]}
        case "piecewise-linear":
            knots = given.get("knots")
            count = len(knots) if isinstance(knots, list) else 0
            return given | {"coefficients": [0.0] * (count + 1)}
        case _:
            return given | {"coefficient": 0.0}


CandidateTerm = Annotated[Term, BeforeValidator(_without_coefficients)]
Column = Literal["unit", "year", "yield", "area", "block"]
Terms = Annotated[dict[str, CandidateTerm], Field(min_length=1)]
"""Terms by name, with coefficients of zero."""


class Weather(Section):
    """Where the season indices come from: an assessment that was run, or a table."""

    assessment: Path | None = Field(None, description="its observed season indices are used")
    table: Path | None = Field(None, description="CSV with unit, year and a column an index")
    indices: dict[str, IndexDefinition] = Field(
        default_factory=dict, description="definition of every index of the table"
    )

    @model_validator(mode="after")
    def _one_way(self) -> Weather:
        if (self.assessment is None) == (self.table is None):
            raise ValueError("give either assessment or table")
        if self.table is not None and not self.indices:
            raise ValueError("indices is required with a table: the definition of every index")
        if self.assessment is not None and self.indices:
            raise ValueError("indices belongs to a table; an assessment defines its own")
        return self


class StandardErrors(Section):
    """How the covariance of the coefficients is estimated."""

    method: Standard = "cluster-unit"
    small_sample: Literal["jackknife", "factor"] = Field(
        "jackknife", description="of cluster-unit and cluster-year; cluster-unit-year: factor"
    )
    replications: int = Field(500, ge=50, le=100000, description="of a bootstrap")
    block_years: int = Field(1, ge=1, description="consecutive years of a block, bootstrap-years")
    block_degrees: float = Field(
        1.0, gt=0, description="side of a block, degrees, bootstrap-space with an assessment"
    )


class CrossValidation(Section):
    """What is left out at a time."""

    years: int = Field(1, ge=1, description="consecutive years left out at a time")
    unit_groups: int = Field(10, ge=2, description="groups of units, one left out at a time")


class Fit(Section):
    """One fit document, validated; paths are relative to the file."""

    crop: Name
    system: Name
    panel: Path
    columns: dict[Column, str] = Field(
        default_factory=dict, description="what a column of the panel is called, if not so"
    )
    years: Years | None = Field(None, description="use these years of the panel only")
    inputs: dict[str, Literal["log", "level"]] = Field(
        default_factory=dict, description="input columns of the panel, and how each enters"
    )
    response_holds_inputs: bool = Field(
        True, description="whether the response written is the one with inputs held"
    )
    weather: Weather
    link: Literal["log", "level"] = "log"
    unit_effects: bool = True
    year_effects: bool = False
    trend: Trend = "linear"
    weight: Literal["none", "area"] = "none"
    specifications: dict[Name, Terms] = Field(min_length=1)
    choose: Name | None = Field(
        None, description="specification written; default: most skill for years left out"
    )
    standard_errors: StandardErrors = StandardErrors()
    cross_validation: CrossValidation = CrossValidation()
    seed: int = Field(1, ge=0)
    citation: str = Field(min_length=1)
    output: Path = Field(description="folder the results go to")

    @model_validator(mode="after")
    def _possible(self) -> Fit:
        if self.choose is not None and self.choose not in self.specifications:
            known = ", ".join(self.specifications)
            raise ValueError(f"choose: no specification {self.choose}; there are {known}")
        if self.year_effects and self.trend in ("linear", "quadratic"):
            raise ValueError(
                "year_effects hold every common trend already; trend must be none or by unit"
            )
        if not self.unit_effects and self.trend.endswith("by-unit"):
            raise ValueError(f"trend {self.trend} needs unit_effects: true")
        return self

    def column(self, name: Column) -> str:
        """Return what a column is called in the panel."""
        return self.columns.get(name, name)

    @property
    def trend_degree(self) -> int:
        """0 without a trend, 1 linear, 2 quadratic."""
        return {"none": 0, "linear": 1, "quadratic": 2}[self.trend.removesuffix("-by-unit")]

    @property
    def trend_by_unit(self) -> bool:
        """Whether every unit has a trend of its own."""
        return self.trend.endswith("by-unit")

    @property
    def index_names(self) -> list[str]:
        """Every index some specification uses."""
        terms = [term for given in self.specifications.values() for term in given.values()]
        return list(dict.fromkeys(index for term in terms for index in term.used))


def load_fit(path: Path) -> Fit:
    """Read and validate a fit document.

    Raises
    ------
    AssessmentError
        If the file is missing, not YAML, or not a valid fit document; one line per fault.
    """
    return read_document(path, Fit)
