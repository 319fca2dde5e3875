"""The tables of the report and the sentences drawn from them: frames in, frames out, no files."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from stook.constants import CENTRAL_DRAW, OBSERVED, OUTSIDE
from stook.report.style import percent, signed

COMBINED = "all"
"""System name of the combination of the water systems of a crop."""

AGREEMENT = 0.8
"""Share of models that must agree on the sign (IPCC AR6 WGI, Cross-Chapter Box Atlas.1)."""

LIKELY = 0.66
"""Share from which a change is called likely (Mastrandrea et al. 2010; from memory)."""


def combined(frame: pd.DataFrame) -> pd.DataFrame:
    """Keep one row set per crop: all water systems together, or the only system there is."""
    has_all = frame.groupby("crop")["system"].transform(lambda names: (names == COMBINED).any())
    return frame[(frame["system"] == COMBINED) | ~has_all.astype(bool)]


def in_regions(frame: pd.DataFrame) -> pd.DataFrame:
    """Leave out what lies outside every region."""
    return frame[frame["region"] != OUTSIDE]


def in_order(frame: pd.DataFrame, **orders: Sequence[str]) -> pd.DataFrame:
    """Sort rows by columns whose values have a given order; values not named come last."""
    keys = {}
    for column, order in orders.items():
        place = {value: number for number, value in enumerate(order)}
        keys[column] = frame[column].map(place).fillna(len(place))
    ranks = pd.DataFrame(keys, index=frame.index)
    return frame.loc[ranks.sort_values(list(orders), kind="stable").index]


def likelihood_share(changes: pd.DataFrame) -> pd.Series:
    """Return the share of members behind the likelihood word of each row."""
    decrease = changes["share_decrease"]
    return decrease.where(changes["likelihood_of"] == "decrease", 1 - decrease)


@dataclass(frozen=True)
class Unit:
    """A unit of mass that keeps the numbers of a table short."""

    name: str
    tonnes: float

    def show(self, tonnes: float) -> str:
        """Return a mass in this unit, thousands separated."""
        return f"{tonnes / self.tonnes:,.1f}" if np.isfinite(tonnes) else "n/a"


def mass_unit(tonnes: pd.Series) -> Unit:
    """Return t, thousand t or million t, by the largest value."""
    largest = tonnes.abs().max()
    if not np.isfinite(largest) or largest < 1e4:
        return Unit("t", 1.0)
    return Unit("thousand t", 1e3) if largest < 1e7 else Unit("million t", 1e6)


@dataclass(frozen=True)
class Finding:
    """One sentence on a crop under a scenario."""

    crop: str
    scenario: str
    text: str


def main_findings(changes: pd.DataFrame, horizon: str) -> list[Finding]:
    """Say in one sentence per crop and scenario what the regions have in common.

    Parameters
    ----------
    changes
        The changes table, in the order the sentences shall have.
    horizon
        The horizon to speak of.
    """
    rows = in_regions(combined(changes))
    rows = rows[(rows["horizon"] == horizon) & rows["change_p50"].notna()]
    result = []
    for (crop, scenario), group in rows.groupby(["crop", "scenario"], sort=False):
        result.append(Finding(str(crop), str(scenario), _sentence(group)))
    return result


def _sentence(group: pd.DataFrame) -> str:
    low = group.iloc[int(group["change_p50"].to_numpy().argmin())]
    high = group.iloc[int(group["change_p50"].to_numpy().argmax())]
    if len(group) == 1:
        text = (
            f"median yield change {signed(low['change_p50'])} % in {low['region']} "
            f"(5-95 % range {signed(low['change_p05'])} to {signed(low['change_p95'])} %); a "
            f"decrease in {percent(low['share_decrease'])} of members."
        )
        if low["models"] > 1:
            text += f" {percent(low['agreement'])} of models agree on the sign."
        return text
    text = (
        f"median yield change from {signed(low['change_p50'])} % ({low['region']}) to "
        f"{signed(high['change_p50'])} % ({high['region']})."
    )
    for direction, share in (
        ("decrease", group["share_decrease"]),
        ("increase", 1 - group["share_decrease"]),
    ):
        count = int((share >= LIKELY).sum())
        if count:
            text += (
                f" {direction.capitalize()} in at least 66 % of members in {count} of "
                f"{len(group)} regions."
            )
    agreeing = int((group["agreement"] >= AGREEMENT).sum())
    if group["models"].max() > 1:
        text += (
            f" At least {percent(AGREEMENT)} of models agree on the sign in {agreeing} of "
            f"{len(group)}."
        )
    return text


def production_table(totals: Mapping[tuple[str, str], pd.DataFrame]) -> pd.DataFrame:
    """Join the central totals of all simulations and crops.

    Parameters
    ----------
    totals
        By (simulation, crop), the totals table of the regions stage.

    Returns
    -------
    DataFrame
        crop, system, region, simulation, year, area_ha, production_t, yield (t ha-1) and the
        other columns of the totals; the central estimate only.
    """
    parts = []
    for (simulation, crop), frame in totals.items():
        central = frame[frame["draw"] == CENTRAL_DRAW].drop(columns="draw")
        area = central["area_ha"].where(central["area_ha"] > 0)
        central = central.assign(**{"yield": central["production_t"] / area})
        central.insert(0, "simulation", simulation)
        central.insert(0, "crop", crop)
        parts.append(central)
    names = ["crop", "system", "region", "simulation", "year"]
    table = pd.concat(parts, ignore_index=True)
    others = [column for column in table.columns if column not in names]
    return table[names + others]


def left_out_area(production: pd.DataFrame) -> pd.DataFrame:
    """Return the hectares left out for a missing value, where there are any.

    Returns
    -------
    DataFrame
        crop, region, missing_area_ha (the most over simulations and years), share of all area.
    """
    rows = combined(production)
    rows = rows.assign(total=rows["area_ha"] + rows["missing_area_ha"])
    found = rows.groupby(["crop", "region"], sort=False)[["missing_area_ha", "total"]].max()
    found = found[found["missing_area_ha"] > 0].reset_index()
    return found.assign(share=found["missing_area_ha"] / found["total"]).drop(columns="total")


def period_means(means: pd.DataFrame, periods: Mapping[str, tuple[int, int]]) -> pd.DataFrame:
    """Average yearly area means over periods.

    Parameters
    ----------
    means
        Columns simulation, scenario, crop, system, quantity, unit, year, value.
    periods
        First and last year by name.

    Returns
    -------
    DataFrame
        simulation, scenario, crop, system, quantity, unit, period, value; NaN if no year of the
        period has a value.
    """
    keys = ["simulation", "scenario", "crop", "system", "quantity", "unit"]
    parts = []
    for name, (first, last) in periods.items():
        years = means[means["year"].between(first, last)]
        mean = years.groupby(keys, sort=False)["value"].mean().reset_index()
        parts.append(mean.assign(period=name))
    columns = [*keys, "period", "value"]
    return pd.concat(parts, ignore_index=True)[columns] if parts else pd.DataFrame(columns=columns)


def index_changes(means: pd.DataFrame, baseline: str, horizon: str) -> pd.DataFrame:
    """Return the change of every weather index from the baseline to a horizon by scenario.

    Parameters
    ----------
    means
        What `period_means` returns.

    Returns
    -------
    DataFrame
        crop, system, quantity, unit, scenario, baseline, change, lowest, highest: mean over
        simulations, and the lowest and highest change of a simulation.
    """
    keys = ["crop", "system", "quantity", "unit", "scenario", "simulation"]
    wide = means[means["scenario"] != OBSERVED].pivot_table(
        index=keys, columns="period", values="value", sort=False, observed=True
    )
    if baseline not in wide or horizon not in wide:
        return pd.DataFrame(columns=[*keys[:-1], "baseline", "change", "lowest", "highest"])
    wide = wide.assign(baseline=wide[baseline], change=wide[horizon] - wide[baseline])
    grouped = wide.groupby(keys[:-1], sort=False)
    return grouped.agg(
        baseline=("baseline", "mean"),
        change=("change", "mean"),
        lowest=("change", "min"),
        highest=("change", "max"),
    ).reset_index()


def trend_summary(trends: pd.DataFrame, test: str, level: float) -> pd.DataFrame:
    """Count the regions with a trend that is more than chance, by crop and simulation.

    Parameters
    ----------
    trends
        The regional trends of all simulations.
    test
        Column of the p-values to go by, such as ``p_ar1``.
    level
        Largest p-value that counts.

    Returns
    -------
    DataFrame
        crop, system, simulation, period, regions, falling, rising (regions at or below the level),
        median slope (% of the mean per decade), median lag-1 correlation.
    """
    rows = in_regions(combined(trends))
    sure = rows[test] <= level
    rows = rows.assign(falling=sure & (rows["slope"] < 0), rising=sure & (rows["slope"] > 0))
    grouped = rows.groupby(["crop", "system", "simulation", "period"], sort=False)
    return grouped.agg(
        regions=("region", "size"),
        falling=("falling", "sum"),
        rising=("rising", "sum"),
        slope_percent=("slope_percent", "median"),
        lag1=("lag1", "median"),
    ).reset_index()
