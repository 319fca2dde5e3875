"""Estimating one specification: coefficients, covariance and what they explain.

The estimator is `linearmodels.panel.PanelOLS`: least squares with unit effects taken out (the
within estimator). The small-sample rule of the standard errors is stated in docs/fit.md.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from linearmodels.panel import PanelOLS
from scipy import stats

from stook.errors import InputError
from stook.fit.design import Design, check_collinearity, make_design
from stook.fit.document import Fit
from stook.fit.kernels import take_out
from stook.fit.panel import Sample
from stook.fit.resampling import bootstrap, jackknife
from stook.yields.response import Term

LEVEL = 0.95
"""Of all confidence intervals."""

FEW_CLUSTERS = 20
"""Below this many clusters a warning says that the standard errors tend to be too small."""

_SINGULAR = 1e-12


@dataclass(frozen=True)
class Estimate:
    """One specification, estimated.

    Attributes
    ----------
    coefficients
        Row per regressor that is reported (weather first, then inputs and common trends):
        coefficient, standard_error, t, low, high.
    covariance
        Of the weather coefficients, shape (k, k).
    intercept
        Puts the mean of the predictor at the mean of the response.
    degrees
        Degrees of freedom of the t distribution of the intervals.
    clusters
        How many clusters or blocks.
    r2_within, r2_weather
        Share of the variance within units explained by all regressors; share of what effects,
        trends and inputs leave that the weather explains.
    fitted, residuals
        shape (row,), in the order of the sample.
    aic, bic
        Gaussian, without constant; comparable between specifications of one sample.
    """

    name: str
    terms: dict[str, Term]
    coefficients: pd.DataFrame
    covariance: np.ndarray
    intercept: float
    degrees: float
    clusters: int
    r2_within: float
    r2_weather: float
    aic: float
    bic: float
    fitted: np.ndarray
    residuals: np.ndarray
    warnings: list[str] = field(default_factory=list)

    @property
    def weather(self) -> np.ndarray:
        """The coefficients of the terms in their order, shape (k,)."""
        count = len(self.covariance)
        return self.coefficients["coefficient"].to_numpy()[:count]


def estimate(
    fit: Fit,
    name: str,
    sample: Sample,
    inputs: bool,
    blocks: np.ndarray | None = None,
) -> Estimate:
    """Estimate one specification.

    Parameters
    ----------
    fit
        The fit document.
    name
        Of the specification.
    sample
        The rows.
    inputs
        Whether the input columns are held.
    blocks
        Spatial block of every row, for a bootstrap over space.

    Raises
    ------
    InputError
        If coefficients cannot be told apart, or their covariance is singular.
    """
    terms = fit.specifications[name]
    design = make_design(fit, terms, sample, inputs)
    check_collinearity(design, terms, sample, name)
    reported = len(design.weather) + sum(not other.startswith("year.") for other in design.others)
    slopes, covariance, fitted, clusters = _panel_ols(fit, design, sample, reported, name)
    count = len(design.weather)
    choices = fit.standard_errors
    if choices.method.startswith("bootstrap"):
        covariance, clusters = bootstrap(fit, design, sample, blocks, name, reported)
    elif choices.small_sample == "jackknife" and choices.method != "cluster-unit-year":
        check_clusters(clusters, count, name)
        key = choices.method.removeprefix("cluster-")
        covariance = jackknife(design, pd.factorize(sample.rows[key])[0], name, reported)
    check_covariance(covariance[:count, :count], clusters, name)
    table = _table([*design.weather, *design.others][:reported], slopes, covariance, clusters - 1)
    residuals = design.response - fitted
    scores = _scores(design, residuals, len(slopes))
    weather = design.regressors[:, :count] @ slopes[:count]
    mean = np.average(design.response - weather, weights=design.weights)
    warnings = []
    if clusters < FEW_CLUSTERS:
        warnings.append(
            f"specification {name}: {clusters} {cluster_word(fit)} only; "
            "standard errors tend to be too small with so few"
        )
    return Estimate(
        name, terms, table, covariance[:count, :count], float(mean), clusters - 1, clusters,
        *scores, fitted, residuals, warnings,
    )  # fmt: skip


def cluster_word(fit: Fit) -> str:
    """Return what the clusters of the standard errors are."""
    return {
        "cluster-unit": "units",
        "cluster-year": "years",
        "cluster-unit-year": "units or years",
        "bootstrap-years": "blocks of years",
        "bootstrap-space": "blocks of units",
    }[fit.standard_errors.method]


def check_clusters(clusters: int, count: int, name: str) -> None:
    """Check that there are more clusters than coefficients.

    Raises
    ------
    InputError
        If not: their covariance would be singular.
    """
    if clusters <= count:
        raise InputError(
            f"specification {name}: the covariance of its {count} coefficients is singular: "
            f"{clusters} clusters are too few; cluster otherwise, or use fewer terms"
        )


def check_covariance(covariance: np.ndarray, clusters: int, name: str) -> None:
    """Check that a covariance has full rank, and no negative eigenvalue.

    Raises
    ------
    InputError
        If it is singular.
    """
    check_clusters(clusters, len(covariance), name)
    spread = np.sqrt(np.clip(np.diag(covariance), 1e-300, None))
    scaled = covariance / np.outer(spread, spread)
    if not np.isfinite(scaled).all() or float(np.linalg.eigvalsh(scaled).min()) < _SINGULAR:
        raise InputError(
            f"specification {name}: the covariance of its {len(covariance)} coefficients is "
            "singular or not positive; cluster otherwise, or use fewer terms"
        )


def _panel_ols(
    fit: Fit, design: Design, sample: Sample, reported: int, name: str
) -> tuple[np.ndarray, np.ndarray, np.ndarray, int]:
    """Return slopes, their covariance, fitted values and the number of clusters."""
    columns = _explicit(fit, design)
    centre = np.average(columns, axis=0, weights=design.weights)
    scale = columns.std(axis=0)
    scaled = (columns - centre) / scale
    if not fit.unit_effects:
        scaled = np.column_stack([scaled, np.ones(len(scaled))])
    index = pd.MultiIndex.from_arrays([sample.rows["unit"], sample.rows["year"]])
    labels = [f"x{place}" for place in range(scaled.shape[1])]
    room = len(scaled) - scaled.shape[1] - (design.groups if fit.unit_effects else 0)
    if room <= 0:
        raise InputError(
            f"specification {name}: {len(scaled)} unit-years are too few for so many effects, "
            "trends and terms; leave something out"
        )
    model = PanelOLS(
        pd.Series(design.response, index=index, name="response"),
        pd.DataFrame(scaled, index=index, columns=labels),
        entity_effects=fit.unit_effects,
        weights=pd.Series(design.weights, index=index, name="weight"),
    )
    method = fit.standard_errors.method
    by = {"cluster-year": (False, True), "cluster-unit-year": (True, True)}
    unit, year = by.get(method, (True, False))
    counts = [sample.rows[key].nunique() for key, on in (("unit", unit), ("year", year)) if on]
    result = model.fit(
        cov_type="clustered", cluster_entity=unit, cluster_time=year, debiased=True,
        group_debias=True,
    )  # fmt: skip
    size = design.regressors.shape[1]
    slopes = result.params.to_numpy()[:size] / scale[:size]
    covariance = result.cov.to_numpy()[:reported, :reported]
    covariance = covariance / np.outer(scale[:reported], scale[:reported])
    fitted = design.response - result.resids.to_numpy()
    return slopes, covariance, fitted, min(counts)


def _explicit(fit: Fit, design: Design) -> np.ndarray:
    """Return the regressors, followed by the products of unit dummies with their own trends."""
    if not fit.trend_by_unit:
        return design.regressors
    dummies = (design.group[:, None] == np.arange(design.groups)).astype(float)
    own = [dummies * power[:, None] for power in design.basis[:, 1:].T]
    return np.column_stack([design.regressors, *own])


def _table(
    names: list[str], slopes: np.ndarray, covariance: np.ndarray, degrees: float
) -> pd.DataFrame:
    values = slopes[: len(names)]
    errors = np.sqrt(np.diag(covariance))
    reach = stats.t.ppf((1 + LEVEL) / 2, degrees) * errors
    return pd.DataFrame(
        {
            "coefficient": values,
            "standard_error": errors,
            "t": values / errors,
            "low": values - reach,
            "high": values + reach,
        },
        index=pd.Index(names, name="name"),
    )


def _scores(design: Design, residuals: np.ndarray, size: int) -> tuple[float, float, float, float]:
    """Return R2 within, partial R2 of the weather, AIC and BIC."""
    ones = np.ones((len(residuals), 1))
    own = take_out(design.response[:, None], ones, design.group, design.groups, design.weights)[
        :, 0
    ]
    left = float(design.weights @ residuals**2)
    plain = float(design.weights @ design.without_weather().residuals() ** 2)
    rows = len(residuals)
    parameters = size + design.groups * design.basis.shape[1]
    likelihood = rows * np.log(left / rows)
    return (
        1 - left / float(design.weights @ own**2),
        1 - left / plain,
        float(likelihood + 2 * parameters),
        float(likelihood + np.log(rows) * parameters),
    )
