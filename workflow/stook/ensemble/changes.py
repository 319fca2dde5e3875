"""From regional totals to one statement per region, crop, system, scenario and horizon."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from pandas.api.types import union_categoricals

from stook.assessment.simulations import Simulation
from stook.constants import CENTRAL_DRAW
from stook.ensemble.kernels import member_statistics, period_means, simulation_weights
from stook.ensemble.likelihood import direction
from stook.ensemble.series import Models, SystemSeries

SHARES = np.array([0.05, 0.17, 0.50, 0.83, 0.95])
_NONE = np.empty(0)
SPREAD = [f"p{100 * share:02.0f}" for share in SHARES]

_KEYS = {"crop": "str", "system": "str", "region": "str"}
CHANGES = {
    **_KEYS,
    **dict.fromkeys(("scenario", "horizon"), "str"),
    **dict.fromkeys(("members", "simulations", "models"), "int64"),
    **{f"change_{name}": "float64" for name in ("mean", *SPREAD)},
    **{f"central_{name}": "float64" for name in ("mean", *SPREAD)},
    **dict.fromkeys(("share_decrease", "agreement"), "float64"),
    **dict.fromkeys(("likelihood", "likelihood_of"), "str"),
    **dict.fromkeys(("baseline_production_t", "horizon_production_t", "area_ha"), "float64"),
    "extrapolated_share": "float64",
}
"""Columns of the changes table and their types; changes in per cent, shares 0 to 1."""

MEMBERS = {
    **_KEYS,
    **dict.fromkeys(("simulation", "model", "scenario", "realisation", "horizon"), "str"),
    "draw": "int64",
    **dict.fromkeys(("weight", "change"), "float64"),
}
"""Columns of the members table and their types; change in per cent."""

YEARLY = {
    **_KEYS,
    "scenario": "str",
    "year": "int64",
    **{f"yield_{name}": "float64" for name in (*SPREAD, "mean")},
    "production_mean_t": "float64",
}
"""Columns of the yearly table and their types; yields in t/ha."""


@dataclass(frozen=True)
class Group:
    """The simulations of one scenario, with one crop and system, over the same regions.

    Attributes
    ----------
    crop, system, scenario
        Names.
    simulations
        In a fixed order.
    series
        One per simulation.
    models
        Their models and weights.
    """

    crop: str
    system: str
    scenario: str
    simulations: Sequence[Simulation]
    series: Sequence[SystemSeries]
    models: Models

    def grown(self) -> list[tuple[int, str]]:
        """Return number and name of the regions with harvested area, with a yield or without."""
        there = np.any([series.area + series.missing_area > 0 for series in self.series], axis=0)
        return [(i, name) for i, name in enumerate(self.series[0].regions) if there[i]]

    def statistics(
        self, values: np.ndarray, shares: np.ndarray = SHARES
    ) -> tuple[np.ndarray, np.ndarray]:
        """Summarise members of shape (simulation, draw, series); see `member_statistics`."""
        simulations, draws, series = values.shape
        number = np.repeat(np.arange(simulations), draws)
        flat = np.ascontiguousarray(values.reshape(simulations * draws, series).T)
        return member_statistics(flat, number, self.models.number, self.models.weight, shares)

    def means(self, values: np.ndarray) -> np.ndarray:
        """Return weighted means over simulations: (simulation, series) -> (series)."""
        return self.statistics(values[:, None], _NONE)[0][:, 0]


def members_of(values: np.ndarray) -> np.ndarray:
    """Leave the central estimate out of (simulation, draw, ...), unless it is all there is."""
    return values[:, 1:] if values.shape[1] > 1 else values


# The years


def yearly_table(group: Group) -> pd.DataFrame:
    """Return yields year by year, columns `YEARLY`; a year that no member has is left out."""
    years = np.unique(np.concatenate([series.years for series in group.series]))
    parts = []
    for region, name in group.grown():
        shape = (len(group.series), len(group.series[0].production), years.size)
        production, yields = np.full(shape, np.nan), np.full(shape, np.nan)
        for number, series in enumerate(group.series):
            there = np.isin(years, series.years)
            production[number][:, there] = series.production[:, region]
            if series.area[region] > 0:
                yields[number] = production[number] / series.area[region]
        spread, counts = group.statistics(members_of(yields))
        mass = group.statistics(members_of(production), _NONE)[0]
        found = counts[:, 0] > 0
        columns = {"region": name, "year": years} | _named("yield", spread)
        part = pd.DataFrame(columns | {"production_mean_t": mass[:, 0]})
        parts.append(part[found])
    return _joined(parts, YEARLY, crop=group.crop, system=group.system, scenario=group.scenario)


def _named(prefix: str, statistics: np.ndarray) -> dict[str, np.ndarray]:
    """Return mean and percentiles by column name."""
    names = [f"{prefix}_mean", *(f"{prefix}_{name}" for name in SPREAD)]
    return dict(zip(names, statistics[:, [0, *range(3, 3 + SHARES.size)]].T, strict=True))


def _joined(parts: list[pd.DataFrame], columns: Mapping[str, str], **same: str) -> pd.DataFrame:
    if not parts:
        return empty_table(columns)
    frame = pd.concat(parts, ignore_index=True).assign(**same)
    return frame[list(columns)].astype(dict(columns))


def empty_table(columns: Mapping[str, str]) -> pd.DataFrame:
    """Return a table without rows."""
    return pd.DataFrame({name: pd.Series(dtype=kind) for name, kind in columns.items()})


# The horizons


@dataclass(frozen=True)
class Changes:
    """What a horizon changes against the baseline.

    Attributes
    ----------
    change
        per cent, shape (simulation, draw, region); NaN where a period lacks years.
    baseline, horizon
        Mean production, t, central estimate, shape (simulation, region).
    extrapolated
        Mean share of the area outside an estimation range at the horizon, (simulation, region).
    """

    change: np.ndarray
    baseline: np.ndarray
    horizon: np.ndarray
    extrapolated: np.ndarray


def changes_of(
    series: Sequence[SystemSeries], baseline: tuple[int, int], horizon: tuple[int, int]
) -> Changes:
    """Return the change of the mean yield of every simulation, draw and region.

    Harvested area stays as it is, so that the change of mean yield is that of mean production.
    """
    change, before, after, extrapolated = [], [], [], []
    for one in series:
        base = _period_mean(one.production, one.years, baseline)
        later = _period_mean(one.production, one.years, horizon)
        ratio = np.full(base.shape, np.nan)
        np.divide(later, base, out=ratio, where=base > 0)
        change.append(100.0 * (ratio - 1.0))
        before.append(base[CENTRAL_DRAW])
        after.append(later[CENTRAL_DRAW])
        extrapolated.append(_period_mean(one.extrapolated, one.years, horizon))
    return Changes(*(np.array(part) for part in (change, before, after, extrapolated)))


def _period_mean(values: np.ndarray, years: np.ndarray, period: tuple[int, int]) -> np.ndarray:
    """Average over a period: (..., year) -> (...)."""
    inside = (years >= period[0]) & (years <= period[1])
    flat = np.ascontiguousarray(values.reshape(-1, years.size))
    return period_means(flat, inside, period[1] - period[0] + 1).reshape(values.shape[:-1])


def changes_table(group: Group, horizon: str, changes: Changes) -> pd.DataFrame:
    """Return the statement on every region at one horizon, columns `CHANGES`."""
    grown = group.grown()
    kept = [region for region, _ in grown]
    change = changes.change[..., kept]
    spread, counts = group.statistics(members_of(change))
    central, _ = group.statistics(change[:, :1])
    words = [direction(share) for share in spread[:, 1]]
    area = np.array([series.area[kept] for series in group.series])
    missing = np.isnan(change[:, CENTRAL_DRAW])
    frame = pd.DataFrame(
        {
            "region": [name for _, name in grown],
            "members": counts[:, 0],
            "simulations": counts[:, 1],
            "models": counts[:, 2],
            **_named("change", spread),
            **_named("central", central),
            "share_decrease": spread[:, 1],
            "agreement": spread[:, 2],
            "likelihood": [word for word, _ in words],
            "likelihood_of": [of for _, of in words],
            "baseline_production_t": group.means(_hide(changes.baseline[:, kept], missing)),
            "horizon_production_t": group.means(_hide(changes.horizon[:, kept], missing)),
            "area_ha": group.means(area),
            "extrapolated_share": group.means(_hide(changes.extrapolated[:, kept], missing)),
        }
    )
    names = {"crop": group.crop, "system": group.system, "scenario": group.scenario}
    return _joined([frame], CHANGES, **names, horizon=horizon)


def _hide(values: np.ndarray, missing: np.ndarray) -> np.ndarray:
    return np.where(missing, np.nan, values)


def members_table(group: Group, horizon: str, changes: Changes) -> pd.DataFrame:
    """Return the change of every member with one, columns `MEMBERS`; draw 0 is central.

    `weight` is that of the simulation, the same for all its draws: the weights of the simulations
    that have a value in a region sum to 1.
    """
    grown = group.grown()
    weights = np.empty((len(group.simulations), len(grown)))
    for column, (region, _) in enumerate(grown):
        there = np.isfinite(changes.change[..., region]).any(axis=1)
        weights[:, column] = simulation_weights(there, group.models.number, group.models.weight)
    change = changes.change[..., [region for region, _ in grown]]
    whole = np.ascontiguousarray(np.moveaxis(change, 2, 0))  # (region, simulation, draw)
    kept = np.flatnonzero(np.isfinite(whole.ravel()))
    values = whole.ravel()[kept]
    place, number, draw = np.unravel_index(kept, whole.shape)
    runs = group.simulations
    regions = group.series[0].regions
    same = np.zeros(values.size, dtype=np.int64)
    names: dict[str, tuple[list[str], np.ndarray]] = {
        "crop": ([group.crop], same),
        "system": ([group.system], same),
        "region": (regions, np.array([region for region, _ in grown], dtype=np.int64)[place]),
        "simulation": ([run.name for run in runs], number),
        "model": ([run.model for run in runs], number),
        "scenario": ([group.scenario], same),
        "realisation": ([run.realisation for run in runs], number),
        "horizon": ([horizon], same),
    }
    columns: dict[str, Any] = {key: _chosen(*chosen) for key, chosen in names.items()}
    columns |= {"draw": draw, "weight": weights[number, place], "change": values}
    return pd.DataFrame(columns)[list(MEMBERS)]


def _chosen(names: list[str], places: np.ndarray) -> Any:
    """Return names by place as a categorical, which keeps a long table small."""
    unique = list(dict.fromkeys(names))
    number = np.array([unique.index(name) for name in names], dtype=np.int64)
    codes = np.asarray(number[places], dtype=np.int64)
    return pd.Categorical.from_codes(codes, categories=pd.Index(unique))


def stacked_members(parts: Sequence[pd.DataFrame]) -> pd.DataFrame:
    """Stack members tables; names stay categorical."""
    if not parts:
        return empty_table(MEMBERS)
    columns: dict[str, Any] = {}
    for name, kind in MEMBERS.items():
        pieces = [part[name] for part in parts]
        if kind == "str":
            columns[name] = union_categoricals(pieces)
        else:
            columns[name] = np.concatenate([piece.to_numpy() for piece in pieces])
    return pd.DataFrame(columns)


def stacked(parts: Sequence[pd.DataFrame], columns: Mapping[str, str]) -> pd.DataFrame:
    """Stack tables; sort by crop, system, region and scenario, each in order of appearance."""
    if not parts:
        return empty_table(columns)
    frame = pd.concat(parts, ignore_index=True)
    keys = ["crop", "system", "region", "scenario"]
    ranks = pd.DataFrame({key: pd.factorize(frame[key])[0] for key in keys})
    return frame.loc[ranks.sort_values(keys, kind="stable").index].reset_index(drop=True)
