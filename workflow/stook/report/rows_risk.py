"""Tables of the page on risk: shortfalls, supply, local losses, robustness and emergence."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd

from stook.ensemble.joint import ALL_CROPS
from stook.report.page import Table
from stook.report.rows import merge_equal
from stook.report.style import percent, signed
from stook.report.tables import combined, in_regions

_MEAN, _SMOOTH = "baseline mean", "smooth path"


def shortfall_table(shortfall: pd.DataFrame, limit: float) -> list[Table]:
    """Return a table per crop: years of shortfall by region, scenario and period."""
    rows = in_regions(combined(shortfall))
    tables = []
    for crop, own in rows.groupby("crop", sort=False):
        keys = ["region", "scenario", "period"]
        mean = own[own["reference"] == _MEAN].set_index(keys)
        smooth = own[own["reference"] == _SMOOTH].set_index(keys)["share"]
        body: list[list[Any]] = [
            [
                *key,
                f"{percent(row['share'])} ({percent(row['low'])} to {percent(row['high'])})",
                _returns(row),
                f"{percent(row['member_p05'])} to {percent(row['member_p95'])}",
                percent(smooth.get(key, np.nan)),
                f"{row['worst_percent']:.0f} %",
            ]
            for key, row in zip(mean.index, mean.to_dict("records"), strict=True)
        ]
        columns = [
            "Region",
            "Scenario",
            "Period",
            "Share of years (90 % interval)",
            "One year in",
            "Members, 5-95 %",
            "Around own smooth path",
            "Worst year, of baseline mean",
        ]
        caption = (
            f"{str(crop)[:1].upper()}{str(crop)[1:]}: years with production at least {limit:g} % "
            "below the baseline mean"
        )
        tables.append(
            Table(caption, columns, merge_equal(body, 2), frozenset(range(3, 8)), frozenset({2}))
        )
    return tables


def _returns(row: Mapping[Any, Any]) -> str:
    """Return a return period with its interval; an open end where no event was seen."""
    low, high = row["return_low"], row["return_high"]
    if not np.isfinite(row["return_years"]):
        return f"more than {low:,.0f} years" if np.isfinite(low) else "n/a"
    end = f"{high:,.0f}" if np.isfinite(high) else "more"
    return f"{row['return_years']:,.0f} years ({low:,.0f} to {end})"


def joint_table(joint: pd.DataFrame) -> Table | None:
    """Return how often several regions of a crop, or all crops of a region, fall short together."""
    rows = joint[joint["reference"] == _MEAN]
    regions = rows[rows["of"] == "regions"]
    half = np.maximum(2, np.ceil(regions["units"] / 2))
    regions = regions[regions["at_least"].isin([2]) | (regions["at_least"] == half)]
    crops = in_regions(rows[(rows["of"] == "crops") & (rows["at_least"] == 2)])
    body: list[list[Any]] = []
    for part, what in ((regions, "regions"), (crops, "crops")):
        for row in part.to_dict("records"):
            where = row["crop"] if what == "regions" else row["region"]
            chance = row["independent"]
            times = f"{row['ratio']:.1f}" if np.isfinite(row["ratio"]) else "n/a"
            body.append(
                [
                    where,
                    f"{row['at_least']} of {row['units']} {what}",
                    row["scenario"],
                    row["period"],
                    percent(row["share"], 1),
                    percent(chance, 1),
                    times,
                ]
            )
    if not body:
        return None
    columns = [
        *("Crop or region", "Short in the same year, at least", "Scenario", "Period"),
        *("Share of years", "If independent", "Ratio"),
    ]
    return Table(
        "Shortfalls in the same year, against the baseline mean",
        columns,
        merge_equal(body, 2),
        frozenset({4, 5, 6}),
        frozenset({2, 3}),
    )


def supply_table(supply: pd.DataFrame) -> Table | None:
    """Return the people that the crops of each region supply, all crops together."""
    rows = in_regions(supply[supply["crop"] == ALL_CROPS])
    if rows.empty:
        return None
    base = rows[rows["period"] == "baseline"].set_index(["region", "scenario"])["people_p50"]
    known = rows["population"].notna().any()
    body: list[list[Any]] = []
    for row in rows.to_dict("records"):
        before = base.get((row["region"], row["scenario"]), np.nan)
        change = 100 * (row["people_p50"] / before - 1)
        moved = "" if row["period"] == "baseline" else f"{signed(change)} %"
        spread = f"{_people(row['people_p05'])} to {_people(row['people_p95'])}"
        cells = [
            *(row["region"], row["scenario"], row["period"]),
            *(_people(row["people_p50"]), spread, moved),
        ]
        body.append([*cells, percent(row["self_supply"])] if known else cells)
    columns = [
        *("Region", "Scenario", "Period", "People supplied, thousands", "5-95 % of members"),
        "Change of median",
    ]
    columns += ["Self-supply"] if known else []
    return Table(
        "People whose need of energy all crops together would cover",
        columns,
        merge_equal(body, 2),
        frozenset(range(3, len(columns))),
        frozenset({2}),
    )


def _people(value: float) -> str:
    return f"{value / 1e3:,.1f}" if np.isfinite(value) else "n/a"


def loss_table(losses: pd.DataFrame) -> Table | None:
    """Return the shares of area and of regions that lose more than each limit."""
    area = losses.loc[losses["of"] == "area", "region"]
    rows = losses[(losses["of"] == "regions") | (losses["region"] == area.head(1).squeeze())]
    if rows.empty:
        return None
    keys = ["crop", "system", "scenario", "horizon"]
    limits = sorted(rows["limit"].unique())
    body: list[list[Any]] = []
    for key, group in rows.groupby(keys, sort=False):
        cells: list[Any] = list(key)
        for of in ("area", "regions"):
            for limit in limits:
                one = group[(group["of"] == of) & (group["limit"] == limit)]
                if one.empty:
                    cells.append("n/a")
                    continue
                low, high = one["p05"].item(), one["p95"].item()
                cells.append(f"{percent(one['p50'].item())} ({percent(low)} to {percent(high)})")
        body.append(cells)
    columns = ["Crop", "System", "Scenario", "Horizon"]
    columns += [f"{of} losing more than {x:g} %" for of in ("Area", "Regions") for x in limits]
    return Table(
        "Local losses: median (5-95 %) of the share of harvested area, over simulations, and of "
        "regions, over members",
        columns,
        merge_equal(body, 3),
        frozenset(range(4, len(columns))),
        frozenset({3}),
    )


def robustness_table(robustness: pd.DataFrame) -> Table:
    """Count the regions by class of their change."""
    rows = in_regions(combined(robustness)).assign(
        robustness=lambda frame: frame["robustness"].fillna("no value")
    )
    words = ("robust", "no robust signal", "conflicting", "no value")
    body: list[list[Any]] = []
    for key, group in rows.groupby(["crop", "scenario", "horizon"], sort=False):
        counts = group["robustness"].value_counts()
        effective = group["effective_models"].max()
        body.append([*key, *(str(counts.get(word, 0)) for word in words), f"{effective:.1f}"])
    columns = ["Crop", "Scenario", "Horizon", "Robust", "No robust signal", "Conflicting"]
    return Table(
        "Regions by robustness of their change",
        [*columns, "No value", "Effective models"],
        merge_equal(body, 2),
        frozenset(range(3, 8)),
        frozenset({2}),
    )


def emergence_table(emergence: pd.DataFrame, ratio: float = 2.0) -> Table:
    """Return when the signal of each region leaves its variability."""
    rows = in_regions(combined(emergence[emergence["ratio"] == ratio]))
    body: list[list[Any]] = []
    for row in rows.to_dict("records"):
        years = [row[f"year_{name}"] for name in ("p17", "p50", "p83")]
        early, middle, late = (
            f"{year:.0f}" if np.isfinite(year) else f"after {row['last_year']:.0f}"
            for year in years
        )
        cells = [row["crop"], row["region"], row["scenario"], middle, f"{early} to {late}"]
        body.append([*cells, percent(row["share_emerged"]), f"{row['noise']:.1f}"])
    return Table(
        "Year from which the smooth change stays beyond twice the year-to-year variability",
        [
            *("Crop", "Region", "Scenario", "Median", "17-83 % of simulations"),
            *("Simulations emerged", "Variability, % of mean"),
        ],
        merge_equal(body, 2),
        frozenset({3, 4, 5, 6}),
    )
