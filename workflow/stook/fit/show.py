"""A fit as tables on the terminal."""

from __future__ import annotations

from rich.console import Console
from rich.table import Table

from stook.fit.job import Fitted


def show_fit(found: Fitted, console: Console) -> None:
    """Print what was fitted: sample, comparison, coefficients, inputs, files."""
    rows = found.sample.rows
    console.print(
        f"{found.fit.crop} {found.fit.system}: {len(rows)} unit-years, "
        f"{rows['unit'].nunique()} units, {rows['year'].min()} to {rows['year'].max()}",
        markup=False,
    )
    for why, count in found.sample.dropped.items():
        if count:
            console.print(f"  left out: {count} unit-years, {why}", markup=False)
    console.print(_comparison(found))
    console.print(_coefficients(found))
    if found.shares:
        console.print(
            "of what effects and trends leave: "
            + ", ".join(f"{part} {100 * share:.0f} %" for part, share in found.shares.items()),
            markup=False,
        )
    for line in found.warnings:
        console.print(f"warning: {line}", markup=False)
    console.print(f"wrote {found.files[0]}, and beside it:", markup=False)
    console.print("  " + ", ".join(path.name for path in found.files[1:]), markup=False)


def _comparison(found: Fitted) -> Table:
    table = _table("Specifications (skill against the weather-free model)")
    for name in ("specification", "R2 within", "R2 weather", "skill, years", "skill, units", "BIC"):
        table.add_column(name, justify="left" if name == "specification" else "right")
    for row in found.comparison.to_dict("records"):
        name = str(row["specification"]) + (" *" if row["written"] else "")
        scores = [row[key] for key in ("r2_within", "r2_weather", "skill_years", "skill_units")]
        table.add_row(name, *(f"{score:.3f}" for score in scores), f"{row['bic']:.1f}")
    table.caption = "* written"
    return table


def _coefficients(found: Fitted) -> Table:
    held = found.estimates[found.chosen].coefficients
    plain = found.without_inputs.get(found.chosen)
    table = _table(f"Coefficients of {found.chosen}" + (", inputs held" if plain else ""))
    for name in ("name", "coefficient", "std. error", "95 % low", "95 % high"):
        table.add_column(name, justify="left" if name == "name" else "right")
    if plain is not None:
        table.add_column("without inputs", justify="right")
        table.add_column("std. error", justify="right")
    others = {} if plain is None else plain.coefficients.to_dict("index")
    for coefficient, row in held.to_dict("index").items():
        cells = [row[key] for key in ("coefficient", "standard_error", "low", "high")]
        if coefficient in others:
            cells += [others[coefficient][key] for key in ("coefficient", "standard_error")]
        table.add_row(str(coefficient), *(f"{cell:.4g}" for cell in cells))
    return table


def _table(title: str) -> Table:
    return Table(title=title, title_justify="left", title_style="bold", caption_justify="left")
