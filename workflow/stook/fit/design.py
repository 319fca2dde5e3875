"""The numbers of one regression, and whether they can be told apart."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from stook.errors import InputError
from stook.fit.document import Fit
from stook.fit.kernels import take_out, within_fit
from stook.fit.panel import Sample, column_names, listed
from stook.yields.response import Term

_DEPENDENT = 1e-7


@dataclass(frozen=True)
class Design:
    """The numbers of one regression; see `stook.fit.kernels.within_fit`.

    Attributes
    ----------
    weather, others
        Names of the coefficients of interest, and of inputs, common trends and year effects.
    regressors
        shape (row, k): weather first, then the others.
    """

    response: np.ndarray
    weather: list[str]
    others: list[str]
    regressors: np.ndarray
    basis: np.ndarray
    group: np.ndarray
    groups: int
    weights: np.ndarray

    def without_weather(self) -> Design:
        """Return the same regression without weather."""
        count = len(self.weather)
        return Design(
            self.response, [], self.others, self.regressors[:, count:],
            self.basis, self.group, self.groups, self.weights,
        )  # fmt: skip

    def residuals(self) -> np.ndarray:
        """Return the residuals of least squares, shape (row,)."""
        slopes, effects, _ = self.solve(self.weights)
        return self.response - self.predict(slopes, effects)

    def solve(self, weights: np.ndarray) -> tuple[np.ndarray, np.ndarray, int]:
        """Return slopes, effects and rank with other weights; 0 leaves a row out."""
        return within_fit(
            self.response, self.regressors, self.basis, self.group, self.groups, weights
        )

    def predict(self, slopes: np.ndarray, effects: np.ndarray) -> np.ndarray:
        """Return the predictions, shape (row,)."""
        own = np.einsum("rq,rq->r", self.basis, effects[self.group])
        predicted: np.ndarray = self.regressors @ slopes + own
        return predicted


def coefficient_names(terms: Mapping[str, Term]) -> list[str]:
    """Name coefficients as a response document does: ``term``, or ``term.1``, ``term.2``."""
    names: list[str] = []
    for name, term in terms.items():
        count = len(term.coefficients)
        names += [name] if count == 1 else [f"{name}.{place + 1}" for place in range(count)]
    return names


def weather_columns(terms: Mapping[str, Term], sample: Sample) -> np.ndarray:
    """Return the design columns of the terms, shape (row, k)."""
    names = [name for term in terms.values() for name in column_names(term)]
    return sample.weather[names].to_numpy(dtype=np.float64)


def make_design(fit: Fit, terms: Mapping[str, Term], sample: Sample, inputs: bool) -> Design:
    """Return the regression of the yields of a sample on terms, effects and trends.

    Parameters
    ----------
    fit
        Effects, trends and input columns.
    terms
        May be empty: the weather-free model.
    sample
        The rows.
    inputs
        Whether the input columns are held.
    """
    rows = sample.rows
    year = rows["year"].to_numpy(dtype=float)
    middle, half = (year.max() + year.min()) / 2, (year.max() - year.min()) / 2
    time = (year - middle) / half
    powers = [time**degree for degree in range(1, fit.trend_degree + 1)]
    parts: dict[str, np.ndarray] = {}
    if inputs:
        parts |= {name: rows[name].to_numpy(dtype=float) for name in fit.inputs}
    if not fit.trend_by_unit:
        # The powers of years from the middle year, for coefficients per year and per year squared.
        parts |= {f"trend.{n + 1}": (year - middle) ** (n + 1) for n in range(len(powers))}
    if fit.year_effects:
        # Every other year effect is made up of unit effects, unit trends and these.
        spanned = 1 + (fit.trend_degree if fit.trend_by_unit else 0)
        names = np.unique(rows["year"])[spanned:]
        parts |= {f"year.{name}": (rows["year"] == name).to_numpy(float) for name in names}
    own = [np.ones(len(rows)), *(powers if fit.trend_by_unit else ())]
    group, units = pd.factorize(rows["unit"])
    if not fit.unit_effects:
        group, units = np.zeros(len(rows), dtype=int), units[:1]
    weather = weather_columns(terms, sample) if terms else np.empty((len(rows), 0))
    return Design(
        rows["response"].to_numpy(dtype=float),
        coefficient_names(terms),
        list(parts),
        np.column_stack([weather, *parts.values()]) if parts else weather,
        np.column_stack(own),
        group,
        len(units),
        rows["weight"].to_numpy(dtype=float),
    )


def check_collinearity(
    design: Design, terms: Mapping[str, Term], sample: Sample, name: str
) -> None:
    """Check that effects, trends and the other columns do not make up a column.

    Raises
    ------
    InputError
        Naming the first coefficients that cannot be estimated, and knots outside the data.
    """
    for term_name, term in terms.items():
        low, high = sample.ranges[term.used[0]]
        if outside := [f"{k:g}" for k in getattr(term, "knots", ()) if not low < k < high]:
            raise InputError(
                f"specification {name}: knot {', '.join(outside)} of term {term_name} lies outside "
                f"the data ({term.used[0]} is {low:g} to {high:g}); move it inside, or leave it out"
            )
    names = [*design.weather, *design.others]
    root = np.sqrt(design.weights)[:, None]
    left = root * take_out(
        design.regressors, design.basis, design.group, design.groups, design.weights
    )
    before = np.linalg.norm(root * design.regressors, axis=0)
    order = [*range(len(design.weather), len(names)), *range(len(design.weather))]
    found: list[np.ndarray] = []
    lost = []
    for column in order:  # Gram-Schmidt, twice for accuracy; weather last, so that it is named
        rest = left[:, column].copy()
        for _ in range(2):
            for direction in found:
                rest -= direction * (direction @ rest)
        length = np.linalg.norm(rest)
        if length <= _DEPENDENT * max(before[column], 1e-300):
            lost.append(names[column])
        else:
            found.append(rest / length)
    if lost:
        raise InputError(
            f"specification {name}: perfect collinearity: {listed(lost)} cannot be told apart "
            "from the effects, trends and other terms in this panel; leave something out"
        )
