"""The sections on uncertainty, bad years and food supply; each is left out without its table."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import pandas as pd

from stook.constants import OBSERVED, OUTSIDE
from stook.ensemble.horizons import horizon_names
from stook.ensemble.summary import BASELINE, TOTAL
from stook.grids.files import read_table
from stook.report import rows as written
from stook.report import rows_risk
from stook.report.figures_risk import class_figure, partition_figure
from stook.report.page import Page
from stook.report.publisher import Publisher
from stook.report.source import Source
from stook.report.tables import in_order


def add_uncertainty(source: Source, page: Page, publisher: Publisher) -> None:
    """Add the partition of variance, classes of change, robustness, emergence, warming levels."""
    for name, description in (
        ("partition", "shares of variance by year"),
        ("classes", "members by class of change, successive periods"),
        ("robustness", "robustness of every regional change"),
        ("emergence", "year in which the signal leaves the variability"),
        ("levels", "changes at global warming levels"),
        ("windows", "years in which each simulation passes each level"),
    ):
        found = _table(source, publisher, name, description)
        if found is None:
            continue
        table, parents = found
        if name in ("partition", "classes"):
            for crop in table["crop"].unique():
                if name == "partition":
                    drawing = partition_figure(table, crop, source.regions)
                else:
                    drawing = class_figure(table, crop, source.scenarios, source.regions)
                page.uncertainty.append(publisher.drawing(drawing, parents))
        elif name == "robustness":
            page.uncertainty_tables.append(rows_risk.robustness_table(table))
        elif name == "emergence":
            page.uncertainty_tables.append(rows_risk.emergence_table(table))
        elif name == "levels":
            page.level_tables = written.headline_tables(table)


def add_bad_years(source: Source, page: Page, publisher: Publisher) -> None:
    """Add shortfalls, and those of several regions or crops in one year."""
    if found := _table(source, publisher, "shortfall", "years of shortfall, return periods"):
        limit = source.assessment.ensemble.shortfall
        page.risk_tables += rows_risk.shortfall_table(found[0], limit)
    if found := _table(source, publisher, "joint", "shortfalls in the same year"):
        table = rows_risk.joint_table(found[0])
        page.risk_tables += [table] if table else []


def add_supply(source: Source, page: Page, publisher: Publisher) -> None:
    """Add the people supplied, and where the losses are."""
    if found := _table(source, publisher, "supply", "tonnes, energy and people supplied"):
        table = rows_risk.supply_table(found[0])
        page.supply_tables += [table] if table else []
        basis = found[0][["crop", "basis"]].drop_duplicates()
        parts = [f"{row['crop']}: {row['basis']}" for row in basis.to_dict("records")]
        page.supply_basis = "; ".join(parts)
        page.supply_need = f"{source.assessment.supply.kcal_per_day:,.0f}"
    losses = _losses(source, publisher)
    if losses is not None:
        table = rows_risk.loss_table(losses)
        page.supply_tables += [table] if table else []


def _table(
    source: Source, publisher: Publisher, name: str, description: str
) -> tuple[pd.DataFrame, Sequence[Path]] | None:
    """Read a table of risk and hand it on; None if it is not there or empty."""
    path = source.layout.ensemble_table(name)
    if not path.exists():
        return None
    table = _ordered(source, read_table(path))
    if table.empty:
        return None
    publisher.table(name, table, [path], description)
    return table, [path]


def _losses(source: Source, publisher: Publisher) -> pd.DataFrame | None:
    """Return the losses of regions and of area together, the regions together first."""
    layout = source.layout
    paths = [layout.ensemble_table("losses")]
    paths += [
        layout.area_losses(*pair, scenario)
        for pair in source.assessment.systems
        for scenario in source.scenarios
    ]
    paths = [path for path in paths if path.exists()]
    parts = [table for path in paths if len(table := read_table(path))]
    if not parts:
        return None
    table = _ordered(source, pd.concat(parts, ignore_index=True))
    publisher.table("losses", table, paths, "shares of area and of regions that lose")
    return table


def _ordered(source: Source, table: pd.DataFrame) -> pd.DataFrame:
    """Sort the rows of a table as the assessment has them; regions together come first."""
    orders = {
        "crop": list(source.assessment.crops),
        "region": [TOTAL, *source.regions, OUTSIDE],
        "scenario": [OBSERVED, *source.scenarios],
        "horizon": horizon_names(source.assessment),
        "period": [BASELINE, *horizon_names(source.assessment)],
    }
    chosen = {name: order for name, order in orders.items() if name in table}
    return in_order(table, **chosen) if chosen else table
