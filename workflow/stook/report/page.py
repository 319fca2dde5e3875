"""The page: tables as rows of text, pictures as embedded PNG, one HTML file that needs nothing."""

from __future__ import annotations

import base64
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from importlib import resources
from typing import Any

from jinja2 import BaseLoader, Environment, StrictUndefined
from markupsafe import Markup

from stook.report.style import Drawing


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
    uncertainty: list[Picture] = field(default_factory=list)
    uncertainty_tables: list[Table] = field(default_factory=list)
    level_tables: list[Table] = field(default_factory=list)
    risk_tables: list[Table] = field(default_factory=list)
    supply_tables: list[Table] = field(default_factory=list)
    supply_basis: str = ""
    supply_need: str = ""
    trends: list[Picture] = field(default_factory=list)
    trend_tables: list[Table] = field(default_factory=list)
    trend_text: str = ""
    impacts: list[Picture] = field(default_factory=list)
    impact_tables: list[Table] = field(default_factory=list)
    impact_text: str = ""
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
