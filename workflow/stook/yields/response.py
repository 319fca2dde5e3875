"""Response documents: the empirical yield response of one crop and water system.

A response is the team's own (or a cited) regression of yield on weather indices. The document
carries the definition of every index it uses, since a coefficient means nothing without it.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, model_validator

from stook.season.definition import IndexDefinition

Extrapolation = Literal["flag", "hold"]
"""Beyond the estimation range: follow the response as it is, or hold its marginal effects."""

Ranges = Mapping[str, tuple[float, float]]
"""Lowest and highest value by index."""


class _Strict(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class _OfOneIndex(_Strict):
    @property
    def used(self) -> tuple[str, ...]:
        """The indices of the term."""
        return (self.index,)  # type: ignore[attr-defined]  # a field of every form


class Linear(_OfOneIndex):
    """``coefficient * index``."""

    form: Literal["linear"]
    index: str
    coefficient: float

    @property
    def coefficients(self) -> tuple[float, ...]:
        """The coefficients in the order of the design columns."""
        return (self.coefficient,)


class Quadratic(_OfOneIndex):
    """``c1 * index + c2 * index**2``."""

    form: Literal["quadratic"]
    index: str
    coefficients: tuple[float, float]


class PiecewiseLinear(_OfOneIndex):
    """A continuous line with a slope of its own below, between and above the knots."""

    form: Literal["piecewise-linear"]
    index: str
    knots: tuple[float, ...] = Field(min_length=1)
    coefficients: tuple[float, ...] = Field(description="one slope per segment: knots + 1")

    @model_validator(mode="after")
    def _consistent(self) -> PiecewiseLinear:
        if any(b <= a for a, b in zip(self.knots, self.knots[1:], strict=False)):
            raise ValueError(f"knots must increase, got {list(self.knots)}")
        if len(self.coefficients) != len(self.knots) + 1:
            raise ValueError(
                f"{len(self.knots)} knots need {len(self.knots) + 1} coefficients (slopes), "
                f"got {len(self.coefficients)}"
            )
        return self


class Product(_Strict):
    """``coefficient * index * other index``; each may have a term of its own besides."""

    form: Literal["product"]
    indices: tuple[str, str] = Field(description="the two that are multiplied")
    coefficient: float

    @model_validator(mode="after")
    def _of_two(self) -> Product:
        if self.indices[0] == self.indices[1]:
            raise ValueError(f"indices must differ; the square of {self.indices[0]} is quadratic")
        return self

    @property
    def coefficients(self) -> tuple[float, ...]:
        """The coefficients in the order of the design columns."""
        return (self.coefficient,)

    @property
    def used(self) -> tuple[str, ...]:
        """The indices of the term."""
        return self.indices


Term = Annotated[Linear | Quadratic | PiecewiseLinear | Product, Field(discriminator="form")]


class Response(_Strict):
    """One response document, validated.

    The coefficients of all terms, in document order, form one vector; `covariance` (or the
    squares of `standard_errors`) is the covariance matrix of that vector.
    """

    crop: str = Field(description="crop it was estimated for")
    system: str = Field(description="water system it was estimated for")
    link: Literal["log", "level"] = Field(
        description="log: terms add up to log yield; level: terms (plus intercept) are yield, t/ha"
    )
    intercept: float = Field(0.0, description="needed for a level link; cancels for a log link")
    indices: dict[str, IndexDefinition] = Field(
        min_length=1, description="by name: the weather indices that terms use"
    )
    terms: dict[str, Term] = Field(min_length=1, description="by name: what adds up to the yield")
    covariance: tuple[tuple[float, ...], ...] | None = Field(
        None, description="of all coefficients in the order of the document, a row each"
    )
    standard_errors: tuple[float, ...] | None = Field(
        None, description="used when no covariance is known; coefficients are then independent"
    )
    estimation_range: dict[str, tuple[float, float]] = Field(
        description="lowest and highest value of each index in the data it was estimated from"
    )
    extrapolation: Extrapolation = Field(
        "flag",
        description="beyond that range: flag follows the terms, hold keeps their marginal effect "
        "at its edge; flagged both ways",
    )
    citation: str = Field(description="where the response is published")
    note: str = Field(description="where the numbers come from")

    @model_validator(mode="after")
    def _complete(self) -> Response:
        for name in (*self.indices, *self.terms):
            if not re.fullmatch(r"[A-Za-z][A-Za-z0-9_]*", name):
                raise ValueError(f"name {name!r} must be letters, digits and '_' only")
        for name, term in self.terms.items():
            if unknown := [index for index in term.used if index not in self.indices]:
                raise ValueError(
                    f"term {name} uses index {unknown[0]}, which is not under indices "
                    f"({', '.join(self.indices)})"
                )
        if missing := sorted(set(self.used_indices) - set(self.estimation_range)):
            raise ValueError(f"estimation_range is missing for {', '.join(missing)}")
        for name, (low, high) in self.estimation_range.items():
            if high <= low:
                raise ValueError(f"estimation_range of {name}: {low} to {high} is empty")
        self._check_covariance()
        return self

    def _check_covariance(self) -> None:
        size = len(self.coefficient_vector)
        if (self.covariance is None) == (self.standard_errors is None):
            raise ValueError("give either covariance or standard_errors")
        if self.standard_errors is not None:
            if len(self.standard_errors) != size:
                raise ValueError(f"standard_errors has {len(self.standard_errors)}, needs {size}")
            if min(self.standard_errors) < 0:
                raise ValueError("standard_errors must not be negative")
        if self.covariance is not None:
            if {len(self.covariance), *map(len, self.covariance)} != {size}:
                raise ValueError(f"covariance must be {size} x {size}, one row a coefficient")
            matrix = np.array(self.covariance)
            if not np.allclose(matrix, matrix.T, rtol=1e-9, atol=0):
                raise ValueError("covariance must be symmetric")
            spread = np.sqrt(np.clip(np.diag(matrix), 1e-300, None))
            if np.linalg.eigvalsh(matrix / np.outer(spread, spread)).min() < -1e-9:
                raise ValueError("covariance must have no negative eigenvalue")

    @property
    def used_indices(self) -> list[str]:
        """The indices that some term uses, in document order."""
        used = {index for term in self.terms.values() for index in term.used}
        return [name for name in self.indices if name in used]

    @property
    def held(self) -> Ranges | None:
        """The ranges beyond which marginal effects are held; None if they are not."""
        return self.estimation_range if self.extrapolation == "hold" else None

    @property
    def coefficient_vector(self) -> np.ndarray:
        """All coefficients in document order, shape (k,)."""
        return np.array([c for term in self.terms.values() for c in term.coefficients])

    @property
    def covariance_matrix(self) -> np.ndarray:
        """Covariance of the coefficient vector, shape (k, k)."""
        if self.covariance is not None:
            return np.array(self.covariance)
        return np.diag(np.square(np.array(self.standard_errors)))

    @property
    def coefficient_names(self) -> list[str]:
        """``term`` for a single coefficient, else ``term.1``, ``term.2`` and so on."""
        names: list[str] = []
        for name, term in self.terms.items():
            count = len(term.coefficients)
            names += [name] if count == 1 else [f"{name}.{i + 1}" for i in range(count)]
        return names


def load_response(path: Path) -> Response:
    """Read and validate a response document.

    Raises
    ------
    AssessmentError
        If the file is missing, not YAML, or not a valid response; one line per fault.
    """
    from stook.assessment.documents import read_document

    return read_document(path, Response)
