"""Food supply: tonnes, energy, people supplied, and self-supply of regions.

Energy contents: FAO (2001), Food Balance Sheets: A Handbook, Annex I (from memory). They belong to
the product named beside them; the energy of paddy rice is not that of the milled rice in it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
import pandas as pd

from stook.assessment.schema import Assessment, EnergyContent
from stook.ensemble.changes import members_of
from stook.ensemble.joint import ALL_CROPS
from stook.ensemble.kernels import percentiles
from stook.ensemble.series import Models
from stook.ensemble.summary import RunSummary, period_weights, stacked_rows
from stook.errors import InputError

KCAL_PER_TONNE = 1e4
"""kcal per tonne of 1 kcal per 100 g."""

DAYS_PER_YEAR = 365.2425
"""Days of a mean Gregorian year."""

_FAO = "FAO 2001, Food Balance Sheets, Annex I"
_PRODUCTS = {
    "wheat": (334.0, "wheat"),
    "maize": (356.0, "maize"),
    "rice": (280.0, "paddy rice"),
    "barley": (332.0, "barley"),
    "sorghum": (343.0, "sorghum"),
    "millet": (340.0, "millet"),
    "potato": (67.0, "potatoes, fresh"),
    "cassava": (109.0, "cassava, fresh"),
    "soybean": (335.0, "soybeans"),
}
_OTHER_NAMES = {"potatoes": "potato", "soybeans": "soybean", "soy": "soybean", "corn": "maize"}

_SHARES = np.array([0.05, 0.50, 0.95])
_QUANTITIES = ("production_t", "kcal", "people")

SUPPLY = {
    **dict.fromkeys(("crop", "region", "scenario", "period"), "str"),
    "simulations": "int64",
    **{f"{name}_{one}": "float64" for name in _QUANTITIES for one in ("mean", "p05", "p50", "p95")},
    **{f"{name}_central": "float64" for name in _QUANTITIES},
    **dict.fromkeys(("population", "self_supply"), "float64"),
    "basis": "str",
}
"""Columns of the supply table: yearly means over the period; mean and percentiles over members,
`central` with the central coefficients; production of all crops together has no tonnes."""


def energy_contents(assessment: Assessment) -> dict[str, EnergyContent]:
    """Return energy content and basis by crop: the assessment's own, or the default of its name.

    A crop without either is left out.
    """
    found: dict[str, EnergyContent] = {}
    for crop in assessment.crops:
        name = crop.lower()
        product = _PRODUCTS.get(_OTHER_NAMES.get(name, name))
        if crop in assessment.supply.energy:
            found[crop] = assessment.supply.energy[crop]
        elif product:
            kcal, basis = product
            found[crop] = EnergyContent(kcal=kcal, basis=f"{basis} ({_FAO})")
    return found


def read_population(path: Path) -> dict[str, float]:
    """Read the people of each region: a CSV table with the columns region and population.

    Raises
    ------
    InputError
        If it is missing, lacks a column, names a region twice or holds no number above 0.
    """
    try:
        frame = pd.read_csv(path, dtype={"region": str})
    except FileNotFoundError:
        raise InputError(f"{path}: no such file (population of the regions)") from None
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read as CSV ({error})") from None
    if lost := [name for name in ("region", "population") if name not in frame]:
        raise InputError(f"{path}: lacks the column {', '.join(lost)}")
    if frame["region"].duplicated().any():
        name = frame.loc[frame["region"].duplicated(), "region"].iloc[0]
        raise InputError(f"{path}: region {name!r} stands twice")
    people = pd.to_numeric(frame["population"], errors="coerce")
    if not (people > 0).all():
        name = frame.loc[~(people > 0), "region"].iloc[0]
        raise InputError(f"{path}: population of {name!r} must be a number above 0")
    return dict(zip(frame["region"], people.astype(float), strict=True))


def supply_table(
    by_crop: Mapping[str, Sequence[RunSummary]],
    models: Models,
    assessment: Assessment,
    population: Mapping[str, float],
) -> pd.DataFrame:
    """Return production, energy and people supplied of one scenario, columns `SUPPLY`.

    Parameters
    ----------
    by_crop
        All water systems together; the same simulations, in the same order, for every crop.
    population
        People by region; may be empty.

    Notes
    -----
    Draw k of one crop is paired with draw k of the others: the coefficients of different crops are
    independent, so that any pairing is as good.
    """
    energy = energy_contents(assessment)
    per_person = assessment.supply.kcal_per_day * DAYS_PER_YEAR
    first = next(iter(by_crop.values()))[0]
    rows: list[dict[str, object]] = []
    for region, name in enumerate(first.regions):
        whole: dict[str, list[np.ndarray]] = {}
        names = {"region": name, "scenario": first.simulation.scenario}
        people = population.get(name, np.nan)
        for crop, runs in by_crop.items():
            if not runs[0].area[region] + runs[0].missing_area[region] > 0:
                continue
            content = energy.get(crop)
            factor = content.kcal * KCAL_PER_TONNE if content else np.nan
            basis = f"{content.kcal:g} kcal/100 g, {content.basis}" if content else "none given"
            for period, tonnes in _by_period(runs, region).items():
                own = names | {"crop": crop, "period": period, "basis": basis}
                rows.append(own | _row(tonnes, tonnes * factor, per_person, people, models))
                if content:
                    whole.setdefault(period, []).append(tonnes * factor)
        counted = [c for c in by_crop if c in energy]
        for period, parts in whole.items():
            total = parts[0].copy()
            for part in parts[1:]:
                total += part
            basis = f"{', '.join(counted)}" if len(counted) < len(by_crop) else "all crops"
            own = names | {"crop": ALL_CROPS, "period": period, "basis": f"sum of {basis}"}
            rows.append(own | _row(total * np.nan, total, per_person, people, models))
    return stacked_rows(rows, SUPPLY)


def _by_period(runs: Sequence[RunSummary], region: int) -> dict[str, np.ndarray]:
    """Return mean production by period, (run, draw); NaN of a run that has not the period."""
    result = {}
    draws = runs[0].production.shape[2]
    for period in dict.fromkeys(name for run in runs for name in run.periods):
        values = np.full((len(runs), draws), np.nan)
        for number, run in enumerate(runs):
            if period in run.periods:
                values[number] = run.production[region, run.periods.index(period)]
        result[period] = values
    return result


def _row(
    tonnes: np.ndarray, kcal: np.ndarray, per_person: float, people: float, models: Models
) -> dict[str, object]:
    there = np.isfinite(tonnes[:, 0]) | np.isfinite(kcal[:, 0])
    weights = period_weights(there[None], models)[0]
    row: dict[str, object] = {"simulations": int(there.sum())}
    for name, values in zip(_QUANTITIES, (tonnes, kcal, kcal / per_person), strict=True):
        members = members_of(values)[there]
        known = bool(members.size) and bool(np.isfinite(members).all())
        own = np.repeat(weights[there, None] / max(1, members.shape[1]), members.shape[1], axis=1)
        spread = percentiles(members.ravel(), own.ravel(), _SHARES) if known else [np.nan] * 3
        row[f"{name}_mean"] = float((own * members).sum()) if known else np.nan
        row |= {f"{name}_{k}": v for k, v in zip(("p05", "p50", "p95"), spread, strict=True)}
        middle = float((weights[there] * values[there, 0]).sum()) if known else np.nan
        row[f"{name}_central"] = middle
    supplied = row["people_p50"]
    assert isinstance(supplied, float)
    return row | {"population": people, "self_supply": supplied / people}
