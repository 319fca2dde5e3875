"""Cross-validation of a specification against the same model without weather."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from stook.fit.design import Design
from stook.fit.document import Fit
from stook.fit.kernels import take_out
from stook.fit.panel import Sample
from stook.randomness import generator


@dataclass(frozen=True)
class Skill:
    """How well left-out yields are predicted, in the unit of the response.

    Attributes
    ----------
    rmse, rmse_weather_free
        Root mean square error with and without weather.
    skill
        1 - (rmse / rmse_weather_free)^2: 1 is perfect, 0 no better than without weather.
    """

    rmse: float
    rmse_weather_free: float

    @property
    def skill(self) -> float:
        """Skill score against the weather-free model."""
        return 1 - (self.rmse / self.rmse_weather_free) ** 2


def year_folds(fit: Fit, sample: Sample) -> np.ndarray:
    """Return the fold of every row: consecutive years together, shape (row,)."""
    order = pd.factorize(sample.rows["year"], sort=True)[0]
    folds: np.ndarray = order // fit.cross_validation.years
    return folds


def unit_folds(fit: Fit, sample: Sample) -> np.ndarray:
    """Return the fold of every row: groups of units of about one size, drawn by the seed."""
    member, units = pd.factorize(sample.rows["unit"], sort=True)
    count = min(len(units), fit.cross_validation.unit_groups)
    drawn = generator(fit.seed, "fit", "unit groups").permutation(len(units))
    folds: np.ndarray = (drawn % count)[member]
    return folds


def leave_years_out(fit: Fit, design: Design, sample: Sample) -> Skill:
    """Predict every block of years from the others.

    The effect of a year cannot be known before the year: with year effects, errors are counted
    from their mean over the units of the year.
    """
    folds = year_folds(fit, sample)
    member, years = pd.factorize(sample.rows["year"])
    errors = [_errors(one, folds) for one in (design, design.without_weather())]
    if fit.year_effects:
        ones = np.ones((len(folds), 1))
        errors = [
            take_out(error[:, None], ones, member, len(years), design.weights)[:, 0]
            for error in errors
        ]
    return _skill(errors, design.weights)


def leave_units_out(fit: Fit, design: Design, sample: Sample) -> Skill:
    """Predict every group of units from the others.

    The effect and trend of a unit's own cannot be known from other units: with unit effects,
    errors are counted from their own regression on the unit's mean (and trend).
    """
    folds = unit_folds(fit, sample)
    errors = [_errors(one, folds) for one in (design, design.without_weather())]
    if fit.unit_effects:
        errors = [
            take_out(error[:, None], design.basis, design.group, design.groups, design.weights)[
                :, 0
            ]
            for error in errors
        ]
    return _skill(errors, design.weights)


def _errors(design: Design, folds: np.ndarray) -> np.ndarray:
    """Return the error of every row, predicted by a fit to the rows of the other folds."""
    errors = np.empty(len(folds))
    for fold in range(int(folds.max()) + 1):
        out = folds == fold
        rest = replace(
            design,
            response=design.response[~out],
            regressors=design.regressors[~out],
            basis=design.basis[~out],
            group=design.group[~out],
            weights=design.weights[~out],
        )
        slopes, effects, _ = rest.solve(rest.weights)
        errors[out] = (design.response - design.predict(slopes, effects))[out]
    return errors


def _skill(errors: list[np.ndarray], weights: np.ndarray) -> Skill:
    with_weather, without = (
        float(np.sqrt(np.average(error**2, weights=weights))) for error in errors
    )
    return Skill(with_weather, without)
