"""Partition of variance: internal variability, model, scenario, response coefficients.

Two ways side by side. The polynomial approach (Hawkins & Sutton 2009, Bull. Am. Meteorol. Soc. 90,
1095-1107; 2011, Clim. Dyn. 37, 407-418), extended by the draws of the response coefficients; and
an analysis of variance of the crossed part of the ensemble with interactions (after Yip, Ferro,
Stephenson & Hawkins 2011, J. Climate 24, 4634-4643). See docs/risk.md.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
from numba import njit

from stook.ensemble.changes import members_of
from stook.ensemble.summary import RunSummary, labelled

POLYNOMIAL, CROSSED = "polynomial", "crossed"
COMPONENTS = ("internal", "model", "scenario", "coefficients")
INTERACTION = "interaction"

PARTITION = {
    **dict.fromkeys(("crop", "system", "region", "method"), "str"),
    "year": "int64",
    "component": "str",
    **dict.fromkeys(("variance", "share"), "float64"),
}
"""Columns of the partition table; variance in per cent of the baseline mean, squared."""


@njit(cache=True, nogil=True)
def polynomial_variances(
    paths: np.ndarray,
    internal: np.ndarray,
    noise: np.ndarray,
    scenario: np.ndarray,
    model: np.ndarray,
    model_weight: np.ndarray,
) -> np.ndarray:
    """Return the variances of the polynomial approach (kernel).

    (series, simulation, draw), (series, simulation) x 2 -> (series, 4)

    Parameters
    ----------
    paths
        Smooth response of every member; NaN where a simulation has none.
    internal
        Variance of the residuals.
    noise
        Variance that the residuals put into the smooth response; taken off the spread of models
        and of scenarios.
    scenario, model
        int, of every simulation.
    model_weight
        float64, of every model.

    Returns
    -------
    ndarray
        In the order of `COMPONENTS`; NaN without a simulation.
    """
    scenarios, models = scenario.max() + 1, model_weight.size
    result = np.full((paths.shape[0], 4), np.nan)
    for series in range(paths.shape[0]):
        count = np.zeros((scenarios, models))
        mean, rough, own, spread = (
            np.zeros((scenarios, models)),
            np.zeros((scenarios, models)),
            np.zeros((scenarios, models)),
            np.zeros((scenarios, models)),
        )
        for s in range(paths.shape[1]):
            if np.isnan(paths[series, s, 0]) or np.isnan(internal[series, s]):
                continue
            middle, squares = 0.0, 0.0
            for draw in range(paths.shape[2]):
                middle += paths[series, s, draw]
            middle /= paths.shape[2]
            for draw in range(paths.shape[2]):
                squares += (paths[series, s, draw] - middle) ** 2
            c, m = scenario[s], model[s]
            count[c, m] += 1.0
            mean[c, m] += middle
            rough[c, m] += noise[series, s]
            own[c, m] += internal[series, s]
            spread[c, m] += squares / paths.shape[2]
        result[series] = _over_scenarios(count, mean, rough, own, spread, model_weight)
    return result


@njit(cache=True, nogil=True)
def _over_scenarios(
    count: np.ndarray,
    mean: np.ndarray,
    rough: np.ndarray,
    own: np.ndarray,
    spread: np.ndarray,
    model_weight: np.ndarray,
) -> np.ndarray:
    """Return the four variances from sums over realisations, (scenario, model) each."""
    found = np.zeros(4)
    centre, shaky = np.zeros(count.shape[0]), np.zeros(count.shape[0])
    there = 0
    for c in range(count.shape[0]):
        total = 0.0
        for m in range(count.shape[1]):
            total += model_weight[m] if count[c, m] > 0 else 0.0
        if total == 0.0:
            continue
        middle, between = 0.0, 0.0
        for m in range(count.shape[1]):
            if count[c, m] > 0:
                weight = model_weight[m] / total
                middle += weight * mean[c, m] / count[c, m]
                found[0] += weight * own[c, m] / count[c, m]
                found[3] += weight * spread[c, m] / count[c, m]
        for m in range(count.shape[1]):
            if count[c, m] > 0:
                weight = model_weight[m] / total
                noise = rough[c, m] / count[c, m] ** 2
                between += weight * (mean[c, m] / count[c, m] - middle) ** 2
                between -= weight * (1.0 - weight) * noise
                shaky[there] += weight * weight * noise
        found[1] += between
        centre[there] = middle
        there += 1
    if there == 0:
        return np.full(4, np.nan)
    found /= there
    grand, noise = 0.0, 0.0
    for c in range(there):
        grand += centre[c] / there
        noise += shaky[c] / there
    for c in range(there):
        found[2] += (centre[c] - grand) ** 2 / there
    found[2] -= noise * (1.0 - 1.0 / there)
    return np.maximum(found, 0.0)


@njit(cache=True, nogil=True)
def crossed_variances(cells: np.ndarray, noise: np.ndarray) -> np.ndarray:
    """Return the variances of a complete crossing (kernel).

    (series, model, scenario, draw), (series) -> (series, 4). Sums of squares over the number of
    cells, so that the parts add up to the variance of all cells when `noise` is 0.

    Parameters
    ----------
    cells
        Smooth response by model, scenario and draw; no missing value.
    noise
        Variance that the residuals put into the response of one model and scenario; its expected
        part is taken off each.

    Returns
    -------
    ndarray
        Model, scenario, coefficients, interactions of any order.
    """
    series, models, scenarios, draws = cells.shape
    result = np.empty((series, 4))
    for i in range(series):
        by_model, by_scenario, by_draw = np.zeros(models), np.zeros(scenarios), np.zeros(draws)
        grand = 0.0
        for m in range(models):
            for s in range(scenarios):
                for d in range(draws):
                    value = cells[i, m, s, d]
                    by_model[m] += value / (scenarios * draws)
                    by_scenario[s] += value / (models * draws)
                    by_draw[d] += value / (models * scenarios)
                    grand += value
        grand /= models * scenarios * draws
        whole = 0.0
        for m in range(models):
            for s in range(scenarios):
                for d in range(draws):
                    whole += (cells[i, m, s, d] - grand) ** 2
        whole /= models * scenarios * draws
        parts = np.zeros(4)
        for m in range(models):
            parts[0] += (by_model[m] - grand) ** 2 / models
        for s in range(scenarios):
            parts[1] += (by_scenario[s] - grand) ** 2 / scenarios
        for d in range(draws):
            parts[2] += (by_draw[d] - grand) ** 2 / draws
        parts[3] = whole - parts[0] - parts[1] - parts[2]
        each = noise[i] / (models * scenarios)
        parts[0] -= each * (models - 1)
        parts[1] -= each * (scenarios - 1)
        parts[3] -= each * (models - 1) * (scenarios - 1)
        result[i] = np.maximum(parts, 0.0)
    return result


def partition_table(runs: Sequence[RunSummary], model_weight: np.ndarray) -> pd.DataFrame:
    """Partition the variance of the yield of one crop and system, columns `PARTITION`.

    Parameters
    ----------
    runs
        Summaries of all simulations of all scenarios.
    model_weight
        Weight of each model, in order of first appearance among the runs.
    """
    models = list(dict.fromkeys(run.simulation.model for run in runs))
    scenarios = list(dict.fromkeys(run.simulation.scenario for run in runs))
    model = np.array([models.index(run.simulation.model) for run in runs])
    scenario = np.array([scenarios.index(run.simulation.scenario) for run in runs])
    first = runs[0]
    leads = first.leads
    paths = np.stack([members_of(np.moveaxis(run.paths, 2, 0)[None])[0] for run in runs])
    paths = np.ascontiguousarray(np.moveaxis(paths, (2, 3), (0, 1)))  # region, lead, run, draw
    shape = paths.shape
    internal = np.stack([run.internal for run in runs], axis=1)
    internal = np.repeat(internal[:, None], leads.size, axis=1)
    noise = np.stack([run.noise for run in runs], axis=2)
    flat = (shape[0] * shape[1], shape[2])
    found = polynomial_variances(
        paths.reshape(*flat, shape[3]),
        internal.reshape(flat),
        noise.reshape(flat),
        scenario,
        model,
        np.asarray(model_weight, dtype=np.float64),
    ).reshape(shape[0], shape[1], 4)
    parts = []
    for region, name in first.grown():
        parts.append(_rows(name, POLYNOMIAL, leads, found[region], COMPONENTS))
        crossed = _crossed(paths[region], noise[region], scenario, model)
        if crossed is not None:
            whole = np.concatenate([found[region, :, :1], crossed], axis=1)
            parts.append(_rows(name, CROSSED, leads, whole, (*COMPONENTS, INTERACTION)))
    return labelled(parts, PARTITION, crop=first.crop, system=first.system)


def _crossed(
    paths: np.ndarray, noise: np.ndarray, scenario: np.ndarray, model: np.ndarray
) -> np.ndarray | None:
    """Return variances of (lead, run, draw) by the crossed models; None if fewer than two.

    Models that lack a scenario at a lead time are left out at every lead time at which a
    simulation has a value; realisations are averaged.
    """
    leads, _, draws = paths.shape
    result = np.full((leads, 4), np.nan)
    known = np.isfinite(paths[:, :, 0])
    for there in np.unique(known, axis=0):
        chosen = np.flatnonzero((known == there).all(axis=1))
        present = np.unique(scenario[there])
        complete = [
            m for m in np.unique(model[there])
            if np.isin(present, scenario[there & (model == m)]).all()
        ]  # fmt: skip
        if len(complete) < 2:
            continue
        cells = np.empty((chosen.size, len(complete), present.size, draws))
        rough = np.zeros(chosen.size)
        for i, m in enumerate(complete):
            for j, s in enumerate(present):
                own = np.flatnonzero(there & (model == m) & (scenario == s))
                cells[:, i, j] = paths[chosen][:, own].mean(axis=1)
                rough += noise[chosen][:, own].sum(axis=1) / own.size**2
        rough /= len(complete) * present.size
        result[chosen] = crossed_variances(cells, rough)
    return result if np.isfinite(result).any() else None


def _rows(
    region: str, method: str, leads: np.ndarray, variances: np.ndarray, names: Sequence[str]
) -> dict[str, Any]:
    """Return the rows of a region; lead times without a value are left out."""
    there = np.isfinite(variances).all(axis=1)
    values = variances[there]
    total = values[:, 0].copy()
    for column in range(1, values.shape[1]):
        total += values[:, column]
    share = np.full(values.shape, np.nan)
    np.divide(values, total[:, None], out=share, where=total[:, None] > 0)
    years = leads[there]
    return {
        "region": region,
        "method": method,
        "year": np.repeat(years, len(names)),
        "component": np.tile(np.array(names, dtype=object), years.size),
        "variance": values.ravel(),
        "share": share.ravel(),
    }
