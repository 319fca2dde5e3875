"""The tables of the page: numbers turned into rows of text, with small pictures of ranges."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from markupsafe import Markup

from stook.constants import OUTSIDE
from stook.report.page import Cell, Table
from stook.report.style import percent, signed
from stook.report.tables import combined, likelihood_share, mass_unit

_GLYPH_WIDTH, _GLYPH_HEIGHT = 110.0, 14.0


def headline_tables(changes: pd.DataFrame) -> list[Table]:
    """Return a table per crop: region x scenario x horizon, in the order of the rows."""
    rows = combined(changes)
    return [_headline(str(crop), group) for crop, group in rows.groupby("crop", sort=False)]


def _headline(crop: str, rows: pd.DataFrame) -> Table:
    unit = mass_unit(rows["baseline_production_t"])
    ends = np.concatenate([rows["change_p05"].to_numpy(float), rows["change_p95"].to_numpy(float)])
    ends = np.append(ends[np.isfinite(ends)], 0.0)
    low, high = float(ends.min()), float(ends.max())
    rows = rows.assign(share=likelihood_share(rows))
    systems = ", all water systems" if (rows["system"] == "all").all() else ""
    one_count = len(set(rows["models"])) == 1
    counted = f"{rows['models'].iloc[0]:g} " if one_count else ""
    body: list[list[Any]] = []
    for region, group in rows.groupby("region", sort=False):
        for number, (_, row) in enumerate(group.iterrows()):
            cells: list[Any] = [Cell(str(region), len(group))] if number == 0 else []
            cells += [
                row["scenario"],
                row["horizon"],
                signed(row["change_p50"]),
                f"{signed(row['change_p05'])} to {signed(row['change_p95'])}",
                range_glyph(row, low, high),
                _likelihood(row),
                percent(row["agreement"]) + ("" if one_count else f" of {row['models']:g}"),
                percent(row["extrapolated_share"]),
                f"{unit.show(row['baseline_production_t'])} \N{RIGHTWARDS ARROW} "
                f"{unit.show(row['horizon_production_t'])}",
            ]
            body.append(cells)
    return Table(
        f"{crop[:1].upper()}{crop[1:]}{systems}",
        [
            "Region",
            "Scenario",
            "Horizon",
            "Median, %",
            "5-95 % range, %",
            f"Range, {signed(low, 0)} to {signed(high, 0)} %",
            "Likelihood (share of members)",
            f"Agreement of {counted}models",
            "Outside estimation range",
            f"Production, {unit.name}",
        ],
        body,
        numbers=frozenset({3, 4, 7, 8, 9}),
        whole=frozenset({1, 2, 6}),
    )


def _likelihood(row: pd.Series) -> str:
    share = float(row["share"])
    if not isinstance(row["likelihood"], str) or not np.isfinite(share):
        return "n/a"
    return f"{row['likelihood_of']}: {row['likelihood']} ({percent(share)})"


def range_glyph(row: Mapping[str, Any] | pd.Series, low: float, high: float) -> Markup:
    """Return a small picture of one range: 5-95 % line, 17-83 % bar, median dot, zero line."""
    points = {name: float(row[f"change_{name}"]) for name in ("p05", "p17", "p50", "p83", "p95")}
    if not all(np.isfinite(list(points.values()))):
        return Markup("")
    scale = (_GLYPH_WIDTH - 8) / ((high - low) or 1.0)
    x = {name: 4 + (value - low) * scale for name, value in (points | {"zero": 0.0}).items()}
    middle = _GLYPH_HEIGHT / 2
    return Markup(
        f'<svg class="glyph" width="{_GLYPH_WIDTH:g}" height="{_GLYPH_HEIGHT:g}" '
        'aria-hidden="true" focusable="false">'
        f'<line class="zero" x1="{x["zero"]:.1f}" x2="{x["zero"]:.1f}" y1="0" '
        f'y2="{_GLYPH_HEIGHT:g}"/>'
        f'<line class="wide" x1="{x["p05"]:.1f}" x2="{x["p95"]:.1f}" y1="{middle:g}" '
        f'y2="{middle:g}"/>'
        f'<line class="narrow" x1="{x["p17"]:.1f}" x2="{x["p83"]:.1f}" y1="{middle:g}" '
        f'y2="{middle:g}"/>'
        f'<circle cx="{x["p50"]:.1f}" cy="{middle:g}" r="3"/></svg>'
    )


def index_table(
    changes: pd.DataFrame, horizon: str, words: Mapping[tuple[str, str, str], str]
) -> Table:
    """Return the change of every weather index by scenario, mean and range over simulations."""
    rows = [
        [
            row["crop"],
            row["system"],
            words[row["crop"], row["system"], row["quantity"]],
            row["scenario"],
            f"{_short(row['baseline'])} {row['unit']}",
            _signed_short(row["change"]),
            f"{_signed_short(row['lowest'])} to {_signed_short(row['highest'])}",
        ]
        for _, row in changes.iterrows()
    ]
    columns = ["Crop", "System", "Weather index", "Scenario", "Baseline", "Change", "Simulations"]
    return Table(
        f"Weather of the growing season, {horizon} against the baseline: mean over the harvested "
        "area, and the lowest and highest simulation",
        columns,
        merge_equal(rows, 3),
        numbers=frozenset({4, 5, 6}),
    )


_TESTS = {
    "ar1": "AR(1)",
    "shuffle": "shuffled years",
    "blocks": "shuffled blocks",
    "phases": "random phases",
}


def trend_table(trends: pd.DataFrame, caption: str) -> Table:
    """Return the regional trends of one simulation, with every test there is."""
    tests = [name for name in _TESTS if f"p_{name}" in trends]
    rows = [
        [
            row["crop"],
            row["region"],
            row["period"],
            f"{row['years']:g}",
            f"{signed(row['slope'], 3)} ({signed(row['slope_percent'])} %)",
            signed(row["theil_sen"], 3),
            signed(row["lag1"], 2),
            *(_p(row[f"p_{name}"]) for name in tests),
            _break(row),
        ]
        for _, row in trends.iterrows()
    ]
    columns = [
        *("Crop", "Region", "Period", "Years", "Slope, t/ha per decade", "Theil-Sen"),
        "Lag-1 correlation",
        *(f"p, {_TESTS[name]}" for name in tests),
        "Change of slope, year (p)",
    ]
    return Table(caption, columns, merge_equal(rows, 2), numbers=frozenset(range(3, len(columns))))


def field_table(fields: pd.DataFrame, units: Mapping[tuple[str, str, str], str]) -> Table:
    """Return the area with a significant trend against that of randomised fields.

    Parameters
    ----------
    fields
        The field significance over all pixels, with columns crop and system.
    units
        Unit of a quantity by (crop, system, quantity).
    """
    rows = [
        [
            row["crop"],
            row["system"],
            row["quantity"].replace("_", " "),
            row["period"],
            f"{_signed_short(row['mean_trend'])} "
            f"{units[row['crop'], row['system'], row['quantity']]}",
            signed(row["mean_trend_lag1"], 2),
            _p(row["mean_trend_p"]),
            percent(row["share_significant"]),
            percent(row["share_random_p95"]),
            _p(row["share_p"]),
        ]
        for _, row in fields.iterrows()
    ]
    columns = [
        *(
            "Crop",
            "System",
            "Quantity",
            "Period",
            "Mean trend per decade",
            "Lag-1 correlation",
            "p",
        ),
        *("Area with a trend", "Area by chance, 95 %", "p of the area"),
    ]
    return Table(
        "Trends over the whole crop area: the area-weighted mean, and the share of area whose own "
        "trend is significant against the share in randomised fields",
        columns,
        merge_equal(rows, 3),
        numbers=frozenset(range(4, 10)),
    )


def trend_summary_table(summary: pd.DataFrame, level: float) -> Table:
    """Return how many regions have a trend that is more than chance, by simulation."""
    rows = [
        [
            row["crop"],
            row["simulation"].replace("_", " "),
            row["period"],
            f"{row['falling']:g} of {row['regions']:g}",
            f"{row['rising']:g} of {row['regions']:g}",
            signed(row["slope_percent"]),
            signed(row["lag1"], 2),
        ]
        for _, row in summary.iterrows()
    ]
    columns = [
        *("Crop", "Simulation", "Period", "Regions falling", "Regions rising"),
        *("Median slope, % per decade", "Median lag-1 correlation"),
    ]
    return Table(
        f"Regions whose yield trend is more than chance at level {level:g}",
        columns,
        merge_equal(rows, 1),
        numbers=frozenset(range(3, 7)),
    )


def impact_table(impacts: pd.DataFrame, test: str) -> Table:
    """Return the impact of the observed trends of the weather by crop and region.

    Parameters
    ----------
    impacts
        Rows of the impact table.
    test
        Column of the p-value.
    """
    unit = mass_unit(impacts["recent_production_t"])
    lost = impacts["recent_production_t"] - impacts["recent_detrended_t"]
    rows = [
        [
            row["crop"],
            row["period"],
            row["region"],
            signed(row["impact"]),
            f"{signed(row['impact_p05'])} to {signed(row['impact_p95'])}",
            f"{signed(row['chance_p05'])} to {signed(row['chance_p95'])}",
            signed(row["lag1"], 2),
            _p(row[test]),
            f"{signed(row['recent_impact'])} ({signed(change / unit.tonnes)})",
        ]
        for change, (_, row) in zip(lost, impacts.iterrows(), strict=True)
    ]
    columns = [
        *("Crop", "Period", "Region", "Impact over the period, %", "5-95 % of draws, %"),
        *("Without a trend, 5-95 %, %", "Lag-1 correlation", "p"),
        f"Production, last 10 years, % ({unit.name} a year)",
    ]
    return Table(
        "Impact of the trends of the observed weather on yields, water systems together",
        columns,
        merge_equal(rows, 2),
        numbers=frozenset(range(3, 9)),
    )


def correction_table(evaluation: pd.DataFrame) -> Table:
    """Return the largest absolute statistic of any simulation before and after correction."""
    keys = ["variable", "statistic", "unit", "season"]
    largest = evaluation.assign(size=evaluation["mean"].abs(), unit=evaluation["unit"].fillna(""))
    largest = largest.pivot_table(
        index=keys, columns="stage", values="size", aggfunc="max", sort=False
    )
    body = [
        [
            row["variable"],
            str(row["statistic"]).replace("_", " "),
            row["season"],
            "share" if row["unit"] == "1" else str(row["unit"]),
            _short(row.get("raw", np.nan)),
            _short(row.get("corrected", np.nan)),
        ]
        for _, row in largest.reset_index().iterrows()
    ]
    return Table(
        "Largest absolute value of any simulation, mean over pixels",
        ["Variable", "Statistic", "Season", "Unit", "Raw", "Corrected"],
        merge_equal(body, 2),
        numbers=frozenset({4, 5}),
    )


def merge_equal(rows: list[list[Any]], heads: int) -> list[list[Any]]:
    """Join the equal heading cells of following rows into one cell that spans them."""
    result: list[list[Any]] = [[] for _ in rows]
    for column in range(heads):
        start = 0
        while start < len(rows):
            stop = start
            while stop < len(rows) and rows[stop][: column + 1] == rows[start][: column + 1]:
                stop += 1
            result[start].append(Cell(str(rows[start][column]), stop - start))
            start = stop
    return [head + row[heads:] for head, row in zip(result, rows, strict=True)]


def _short(value: float) -> str:
    if not np.isfinite(value):
        return "n/a"
    size = abs(value)
    digits = 0 if size >= 100 else 1 if size >= 10 else 2 if size >= 0.1 or size == 0 else 3
    return f"{value:,.{digits}f}".replace("-", "\N{MINUS SIGN}")


def _signed_short(value: float) -> str:
    text = _short(value)
    return f"+{text}" if np.isfinite(value) and value > 0 else text


def _break(row: pd.Series) -> str:
    if not np.isfinite(row["break_year"]):
        return "n/a"
    return f"{row['break_year']:.0f} ({_p(row['p_break'])})"


def _p(value: float) -> str:
    return f"{value:.3f}" if np.isfinite(value) else "n/a"


def outside_note(changes: pd.DataFrame) -> str | None:
    """Explain the row of what lies outside every region, where there is one."""
    if (changes["region"] == OUTSIDE).any():
        return f"The row '{OUTSIDE}' holds the harvested area that no region polygon covers."
    return None
