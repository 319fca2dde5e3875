"""Estimating one specification: coefficients, covariance and what they explain.

The estimator is `linearmodels.panel.PanelOLS`: least squares with unit effects taken out (the
within estimator). The small-sample rule of the standard errors is stated in docs/fit.md.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from linearmodels.panel import PanelOLS
from scipy import stats

from stook.errors import InputError
from stook.fit.document import Fit
from stook.fit.kernels import take_out, within_fit
from stook.fit.panel import Sample, column_names, listed
from stook.randomness import generator
from stook.yields.response import Term

LEVEL = 0.95
"""Of all confidence intervals."""

FEW_CLUSTERS = 20
"""Below this many clusters a warning says that the standard errors tend to be too small."""

_DEPENDENT = 1e-7
_SINGULAR = 1e-12
_MOST_FAILED = 0.1


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
        names = np.unique(rows["year"])[1:]
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
    if blocks is not None or fit.standard_errors.method == "bootstrap-years":
        covariance, clusters = bootstrap(fit, design, sample, blocks, name, reported)
    count = len(design.weather)
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
        low, high = sample.ranges[term.index]
        if outside := [f"{k:g}" for k in getattr(term, "knots", ()) if not low < k < high]:
            raise InputError(
                f"specification {name}: knot {', '.join(outside)} of term {term_name} lies outside "
                f"the data ({term.index} is {low:g} to {high:g}); move it inside, or leave it out"
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


def check_covariance(covariance: np.ndarray, clusters: int, name: str) -> None:
    """Check that a covariance has full rank.

    Raises
    ------
    InputError
        If it is singular: more coefficients than clusters can tell apart.
    """
    spread = np.sqrt(np.clip(np.diag(covariance), 1e-300, None))
    smallest = float(np.linalg.eigvalsh(covariance / np.outer(spread, spread)).min())
    if not np.isfinite(covariance).all() or smallest < _SINGULAR:
        raise InputError(
            f"specification {name}: the covariance of its {len(covariance)} coefficients is "
            f"singular: {clusters} clusters are too few; cluster otherwise, or use fewer terms"
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
    # The year effects hold the trend of one unit.
    first = 1 if fit.year_effects else 0
    dummies = (design.group[:, None] == np.arange(first, design.groups)).astype(float)
    own = [dummies * power[:, None] for power in design.basis[:, 1:].T]
    return np.column_stack([design.regressors, *own])


def bootstrap(
    fit: Fit,
    design: Design,
    sample: Sample,
    blocks: np.ndarray | None,
    name: str,
    reported: int,
) -> tuple[np.ndarray, int]:
    """Return the covariance over refits to resampled blocks, and the number of blocks.

    Whole blocks of rows are drawn with replacement: years, with all their units; or blocks of
    units, with all their years. A row drawn twice counts twice.

    Raises
    ------
    InputError
        If more than a tenth of the replications cannot tell the coefficients apart.
    """
    choices = fit.standard_errors
    random = generator(fit.seed, "fit", name, choices.method)
    if blocks is None:
        member, count = pd.factorize(sample.rows["year"], sort=True)[0], None
    else:
        member, count = pd.factorize(blocks, sort=True)[0], 1
    units = int(member.max()) + 1
    length = min(count or choices.block_years, units)
    number = -(-units // length)
    size = design.regressors.shape[1]
    slopes = []
    for _ in range(choices.replications):
        starts = random.integers(0, units - length + 1, number)
        drawn = (starts[:, None] + np.arange(length)).ravel()[:units]
        times = np.bincount(drawn, minlength=units)[member]
        found, _, rank = design.solve(design.weights * times)
        if rank == size or _determined(design, times, reported):
            slopes.append(found[:reported])
    if len(slopes) < (1 - _MOST_FAILED) * choices.replications:
        raise InputError(
            f"specification {name}: perfect collinearity in "
            f"{choices.replications - len(slopes)} of {choices.replications} bootstrap samples; "
            f"use fewer terms, or {'smaller blocks' if length > 1 else 'another covariance'}"
        )
    return np.atleast_2d(np.cov(np.array(slopes).T)), number


def _determined(design: Design, times: np.ndarray, reported: int) -> bool:
    """Return whether the reported slopes are determined, though others (year effects) are not."""
    kept = times > 0
    used = design.regressors[kept]
    left = take_out(
        used, design.basis[kept], design.group[kept], design.groups, design.weights[kept]
    )
    lengths = np.linalg.norm(left, axis=0)
    there = lengths > 1e-9 * np.maximum(np.linalg.norm(used, axis=0), 1e-300)
    if not there[:reported].all():
        return False
    left = left[:, there] / lengths[there]
    rank = np.linalg.matrix_rank(left, tol=1e-9)
    rest = left[:, reported:]
    other = np.linalg.matrix_rank(rest, tol=1e-9) if rest.size else 0
    return bool(rank - other == reported)


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
