"""What a fit is reported with: comparison, coefficients, inputs, response curves, residuals."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd
from scipy import stats

from stook.fit.design import Design, make_design
from stook.fit.document import Fit
from stook.fit.estimate import LEVEL, Estimate
from stook.fit.panel import Sample
from stook.fit.validation import leave_units_out, leave_years_out
from stook.season.definition import IndexDefinition, unit_of
from stook.yields.response import Term
from stook.yields.response_terms import term_columns

CURVE_POINTS = 121


def comparison(fit: Fit, estimates: Mapping[str, Estimate], sample: Sample) -> pd.DataFrame:
    """Return one row a specification: fit in the sample, and skill out of it.

    Returns
    -------
    DataFrame
        specification, coefficients, observations, units, years, r2_within, r2_weather, aic, bic;
        rmse_years, rmse_years_weather_free, skill_years (years left out), and the same for units.
    """
    rows = []
    for name, found in estimates.items():
        design = make_design(fit, fit.specifications[name], sample, inputs=bool(fit.inputs))
        by_years = leave_years_out(fit, design, sample)
        by_units = leave_units_out(fit, design, sample)
        rows.append(
            {
                "specification": name,
                "coefficients": len(found.covariance),
                "observations": len(sample.rows),
                "units": sample.rows["unit"].nunique(),
                "years": sample.rows["year"].nunique(),
                "r2_within": found.r2_within,
                "r2_weather": found.r2_weather,
                "aic": found.aic,
                "bic": found.bic,
                "rmse_years": by_years.rmse,
                "rmse_years_weather_free": by_years.rmse_weather_free,
                "skill_years": by_years.skill,
                "rmse_units": by_units.rmse,
                "rmse_units_weather_free": by_units.rmse_weather_free,
                "skill_units": by_units.skill,
            }
        )
    return pd.DataFrame(rows)


def coefficient_table(
    with_inputs: Mapping[str, Estimate], without_inputs: Mapping[str, Estimate]
) -> pd.DataFrame:
    """Return the coefficients of every specification, with input columns held and without.

    Returns
    -------
    DataFrame
        specification, inputs (held, left out, none), name, coefficient, standard_error, t, low,
        high (95 %).
    """
    parts = []
    held = "held" if without_inputs else "none"
    for label, estimates in ((held, with_inputs), ("left out", without_inputs)):
        for name, found in estimates.items():
            table = found.coefficients.reset_index()
            table.insert(0, "inputs", label)
            table.insert(0, "specification", name)
            parts.append(table)
    return pd.concat(parts, ignore_index=True)


def farmer_and_weather(fit: Fit, sample: Sample, name: str) -> dict[str, float]:
    """Return what inputs and weather explain of the yields that effects and trends leave.

    Each has its gain in explained variance averaged over both orders of entry (Lindeman, Merenda
    & Gold 1980; Groemping 2006, J. Stat. Softw. 17(1)).

    Returns
    -------
    dict
        weather, inputs, unexplained: shares that add up to 1.
    """
    terms = fit.specifications[name]
    designs = {
        "none": make_design(fit, terms, sample, inputs=False).without_weather(),
        "weather": make_design(fit, terms, sample, inputs=False),
        "inputs": make_design(fit, terms, sample, inputs=True).without_weather(),
        "both": make_design(fit, terms, sample, inputs=True),
    }
    left = {key: _squares(design) for key, design in designs.items()}
    share = {key: 1 - value / left["none"] for key, value in left.items()}
    return {
        "weather": (share["weather"] + share["both"] - share["inputs"]) / 2,
        "inputs": (share["inputs"] + share["both"] - share["weather"]) / 2,
        "unexplained": 1 - share["both"],
    }


def curves(
    found: Estimate, sample: Sample, definitions: Mapping[str, IndexDefinition], link: str
) -> pd.DataFrame:
    """Return the response to every term over the range of its index, with 95 % bands.

    The effect is counted from the mean of the index in the panel; its band is of that difference.
    A product has a curve for either index, the other at its mean.

    Returns
    -------
    DataFrame
        term, index, index_unit, value, effect, low, high, effect_unit: per cent of yield for a
        log link, t/ha for a level link.
    """
    reach = stats.t.ppf((1 + LEVEL) / 2, found.degrees)
    parts, start = [], 0
    for name, term in found.terms.items():
        part = slice(start, start + len(term.coefficients))
        start = part.stop
        means = {
            index: np.average(sample.indices[index], weights=sample.rows["weight"])
            for index in term.used
        }
        for index in term.used:
            values = np.unique([*np.linspace(*sample.ranges[index], CURVE_POINTS), means[index]])
            columns = _from_means(term, index, values, means)
            effect = columns @ found.weather[part]
            variance = np.einsum("ij,jk,ik->i", columns, found.covariance[part, part], columns)
            band = reach * np.sqrt(variance)
            shown = np.column_stack([effect, effect - band, effect + band])
            if link == "log":
                shown = 100 * np.expm1(shown)
            table = pd.DataFrame(shown, columns=["effect", "low", "high"])
            table.insert(0, "value", values)
            table.insert(0, "index_unit", unit_of(definitions[index]))
            table.insert(0, "index", index)
            table.insert(0, "term", name)
            parts.append(table.assign(effect_unit="%" if link == "log" else "t/ha"))
    return pd.concat(parts, ignore_index=True)


def _from_means(
    term: Term, index: str, values: np.ndarray, means: Mapping[str, float]
) -> np.ndarray:
    """Return the columns of a term at values of one index, less those at the means; (value, k)."""
    level = {name: np.full(len(values), mean) for name, mean in means.items()}
    moved, still = term_columns(term, level | {index: values}), term_columns(term, level)
    return np.column_stack(moved) - np.column_stack(still)


def residual_table(found: Estimate, sample: Sample) -> pd.DataFrame:
    """Return unit, year, response, fitted and residual of every row, in the unit of the link."""
    table = sample.rows[["unit", "year", "response"]].copy()
    return table.assign(fitted=found.fitted, residual=found.residuals)


def sample_table(sample: Sample) -> pd.DataFrame:
    """Return the rows as estimated: yields, inputs and weather columns by unit and year."""
    return pd.concat([sample.rows, sample.weather], axis=1)


def _squares(design: Design) -> float:
    return float(design.weights @ design.residuals() ** 2)
