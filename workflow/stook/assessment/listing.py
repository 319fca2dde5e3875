"""What a check found, as tables and lines for a terminal."""

from __future__ import annotations

from collections.abc import Iterable

from rich.console import Console
from rich.table import Table
from rich.text import Text

from stook.assessment.check import Check
from stook.assessment.inventory import SeriesFacts
from stook.errors import Problem


def series_table(found: Check) -> Table:
    """Return a table of simulations and their variables: years, time step, calendar, grid, files.

    Variables of a simulation that agree in everything but the name of their files share a row.
    """
    table = Table(box=None, pad_edge=False, header_style="bold")
    for column in ("simulation", "variables", "years", "step", "calendar", "grid"):
        table.add_column(column, overflow="fold")
    table.add_column("files", justify="right")
    rows: dict[tuple[str, ...], list[SeriesFacts]] = {}
    for facts in found.series:
        rows.setdefault((facts.simulation, *_cells(facts)), []).append(facts)
    shown = ""
    for (simulation, *cells), alike in rows.items():
        variables = ", ".join(facts.variable for facts in alike)
        paths = {file.path for facts in alike for file in facts.series.files}
        name = simulation if simulation != shown else ""
        shown = simulation
        table.add_row(name, variables, *cells, str(len(paths)))
    return table


def _cells(facts: SeriesFacts) -> tuple[str, str, str, str]:
    first, last = facts.series.times[0], facts.series.times[-1]
    years = f"{first.year}-{last.year}"
    if facts.years != (first.year, last.year):
        years = f"{str(first)[:10]} to {str(last)[:10]}"
    return years, facts.series.step, facts.series.calendar, facts.grid


def system_table(found: Check) -> Table:
    """Return a table of crops and water systems: harvested area, pixels, response, indices."""
    table = Table(box=None, pad_edge=False, header_style="bold")
    for column in ("crop", "system"):
        table.add_column(column)
    table.add_column("area, ha", justify="right")
    table.add_column("pixels", justify="right")
    for column in ("response", "indices"):
        table.add_column(column, overflow="fold")
    for row in found.systems:
        table.add_row(
            row.crop,
            row.system,
            f"{row.hectares.sum():,.0f}",
            str((row.hectares > 0).sum()),
            row.response,
            ", ".join(row.indices),
        )
    return table


def print_problems(console: Console, problems: Iterable[Problem], most: int | None = None) -> None:
    """Print one line a problem; of more than `most`, the first ones and a count."""
    listed = list(problems)
    shown = listed if most is None else listed[:most]
    for problem in shown:
        style = "bold red" if problem.severity == "error" else "yellow"
        line = Text(f"{problem.severity}: ", style=style)
        console.print(line.append(str(problem), style="default"))
    if len(listed) > len(shown):
        console.print(f"and {len(listed) - len(shown)} more; see `stook check`")


def verdict(found: Check) -> str:
    """Return the result of a check in one line."""
    counts = [
        f"{len(problems)} {word}{'s' if len(problems) != 1 else ''}"
        for problems, word in ((found.errors, "error"), (found.warnings, "warning"))
        if problems
    ]
    if not counts:
        return "no problem found"
    return " and ".join(counts)
