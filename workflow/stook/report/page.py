"""The page: tables as rows of text, pictures as embedded PNG, one HTML file that needs nothing."""

from __future__ import annotations

import base64
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from importlib import resources
from typing import Any

import numpy as np
import pandas as pd
from jinja2 import BaseLoader, Environment, StrictUndefined
from markupsafe import Markup

from stook.constants import OUTSIDE
from stook.report.style import Drawing, percent, signed
from stook.report.tables import combined, likelihood_share, mass_unit

_GLYPH_WIDTH, _GLYPH_HEIGHT = 110.0, 14.0


@dataclass(frozen=True)
class Picture:
    """A figure as the page shows it."""

    name: str
    caption: str
    alt: str
    source: str

    @classmethod
    def of(cls, drawing: Drawing, png: bytes) -> Picture:
        """Return the picture of a drawing, embedded."""
        data = base64.b64encode(png).decode("ascii")
        return cls(drawing.name, drawing.caption, drawing.alt, f"data:image/png;base64,{data}")


@dataclass(frozen=True)
class Table:
    """A table as the page shows it: texts and markup; `numbers` and `whole` name columns."""

    caption: str
    columns: list[str]
    rows: list[list[Any]]
    numbers: frozenset[int] = frozenset()
    whole: frozenset[int] = frozenset()


@dataclass(frozen=True)
class Cell:
    """A cell that heads several rows."""

    text: str
    span: int


@dataclass(frozen=True)
class Entry:
    """A file of the report, linked from the page."""

    path: str
    description: str


@dataclass
class Page:
    """Everything the template shows."""

    title: str
    facts: list[tuple[str, str]]
    lead: list[Any] = field(default_factory=list)
    headline: list[Table] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    ranges: list[Picture] = field(default_factory=list)
    maps: list[Picture] = field(default_factory=list)
    series: list[Picture] = field(default_factory=list)
    drivers: list[Picture] = field(default_factory=list)
    driver_tables: list[Table] = field(default_factory=list)
    trends: list[Picture] = field(default_factory=list)
    trend_tables: list[Table] = field(default_factory=list)
    trend_text: str = ""
    correction: list[Picture] = field(default_factory=list)
    correction_tables: list[Table] = field(default_factory=list)
    assumed: list[tuple[str, str]] = field(default_factory=list)
    assumed_tables: list[Table] = field(default_factory=list)
    responses: list[Any] = field(default_factory=list)
    warnings: Any = None
    simulations: Table | None = None
    files: Mapping[str, Sequence[Entry]] = field(default_factory=dict)
    several_models: bool = False
    has_changes: bool = False


def render(page: Page) -> str:
    """Return the page as one HTML document."""
    folder = resources.files("stook.report")
    environment = Environment(
        loader=BaseLoader(),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    template = environment.from_string(folder.joinpath("page.html.j2").read_text(encoding="utf-8"))
    style = folder.joinpath("page.css").read_text(encoding="utf-8")
    return template.render(page=page, style=Markup(style))


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
        _merge_equal(rows, 3),
        numbers=frozenset({4, 5, 6}),
    )


def trend_table(trends: pd.DataFrame, caption: str) -> Table:
    """Return the regional trends of one simulation."""
    rows = [
        [
            row["crop"],
            row["region"],
            row["period"],
            f"{row['years']:g}",
            f"{signed(row['slope'], 3)} ({signed(row['slope_percent'])} %)",
            signed(row["theil_sen"], 3),
            signed(row["lag1"], 2),
            _p(row["p_ar1"]),
            _p(row["p_shuffle"]),
        ]
        for _, row in trends.iterrows()
    ]
    columns = [
        *("Crop", "Region", "Period", "Years", "Slope, t/ha per decade", "Theil-Sen"),
        *("Lag-1 correlation", "p, AR(1)", "p, shuffled years"),
    ]
    return Table(caption, columns, _merge_equal(rows, 2), numbers=frozenset(range(3, 9)))


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
        _merge_equal(rows, 1),
        numbers=frozenset(range(3, 7)),
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
        _merge_equal(body, 2),
        numbers=frozenset({4, 5}),
    )


def _merge_equal(rows: list[list[Any]], heads: int) -> list[list[Any]]:
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


def _p(value: float) -> str:
    return f"{value:.3f}" if np.isfinite(value) else "n/a"


def outside_note(changes: pd.DataFrame) -> str | None:
    """Explain the row of what lies outside every region, where there is one."""
    if (changes["region"] == OUTSIDE).any():
        return f"The row '{OUTSIDE}' holds the harvested area that no region polygon covers."
    return None
