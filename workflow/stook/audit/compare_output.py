"""A comparison of two results folders for people (terminal), for tables (CSV) and as JSON."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from rich.console import Console
from rich.markup import escape
from rich.table import Table

from stook.assessment.layout import STAGES
from stook.audit.compare import Comparison, compare
from stook.errors import AssessmentError, ResultsError

TABLES = ("settings", "inputs", "changes", "production", "pixels", "files")
"""Tables of a comparison, in the order they are shown."""

ROWS_SHOWN = 20
"""Rows of a table that are printed; `--csv` and `--json` give all."""


DIFFERENT = 3
"""Exit status when values differ or files are missing; 0 is identical, 1 an error."""


def compare_folders(
    a: Path,
    b: Path,
    out: Console,
    err: Console,
    stages: Sequence[str] = (),
    csv: Path | None = None,
    as_text: bool = True,
) -> int:
    """Compare two results folders, print the result, and return the exit status.

    Parameters
    ----------
    a, b
        Results folders.
    out, err
        Where the result and the moving line go.
    stages
        Stages whose files are read; all but the report if none is named.
    csv
        Folder to write every table to.
    as_text
        Print tables for people; False prints one JSON object.

    Raises
    ------
    StookError
        If a folder holds no results, a stage is unknown, or the tables cannot be written.
    """
    known = STAGES[:-1]
    if unknown := [stage for stage in stages if stage not in known]:
        raise AssessmentError(f"--stage: no stage {unknown[0]}; give one of {', '.join(known)}")
    with err.status("comparing") as status:
        comparison = compare(
            a,
            b,
            tuple(stage for stage in known if not stages or stage in stages),
            progress=lambda done, all_, name: status.update(f"comparing {done}/{all_} {name}"),
        )
    if csv is not None:
        write_csv(comparison, csv)
    if as_text:
        show(comparison, out)
    else:
        out.print(as_json(comparison), markup=False, highlight=False, soft_wrap=True)
    return 0 if comparison.identical else DIFFERENT


def show(comparison: Comparison, console: Console) -> None:
    """Print a comparison: what differs, the largest first."""
    console.print(f"A  {comparison.a}\nB  {comparison.b}", markup=False)
    _print(console, "Settings that differ", comparison.settings, {})
    inputs = comparison.inputs.assign(
        sha256_a=comparison.inputs["sha256_a"].str[:12],
        sha256_b=comparison.inputs["sha256_b"].str[:12],
    )
    _print(console, "Inputs that differ", inputs, {})
    _print(console, "Yield change, % of the baseline", _short_changes(comparison), _CHANGE_HEADS)
    _print(console, "Production, central estimate", _short_production(comparison), _PRODUCTION)
    _print(console, "Pixels with the largest difference", _by_size(comparison.pixels), {})
    _print(console, "Files that differ", _short_files(comparison), {})
    console.print()
    console.print(verdict(comparison), markup=False)


def verdict(comparison: Comparison) -> str:
    """Say in one line whether the values are the same."""
    counts = comparison.files["status"].value_counts()
    same = int(counts.get("identical", 0))
    if comparison.identical:
        return f"all values of the common part are identical ({same} files)"
    names = ("different", "only in A", "only in B", "not comparable")
    parts = [f"{int(counts[name])} {name}" for name in names if name in counts]
    return f"the results differ: {', '.join(parts)}; {same} files identical"


def write_csv(comparison: Comparison, folder: Path) -> list[Path]:
    """Write every table as CSV into a folder; return the paths.

    Raises
    ------
    ResultsError
        If the folder cannot be written.
    """
    paths = []
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for name in TABLES:
            path = folder / f"{name}.csv"
            table: pd.DataFrame = getattr(comparison, name)
            if name == "settings":
                table = table.assign(a=table["a"].map(_text), b=table["b"].map(_text))
            table.to_csv(path, index=False)
            paths.append(path)
    except OSError as error:
        raise ResultsError(f"{folder}: cannot be written ({error.strerror})") from None
    return paths


def as_json(comparison: Comparison) -> str:
    """Return a comparison as one JSON object; a missing number is null."""
    content: dict[str, Any] = {
        "a": str(comparison.a),
        "b": str(comparison.b),
        "identical": comparison.identical,
    }
    for name in TABLES:
        rows = getattr(comparison, name).to_dict("records")
        content[name] = [{key: _plain(value) for key, value in row.items()} for row in rows]
    return json.dumps(content, ensure_ascii=False, allow_nan=False)


_CHANGE_HEADS = {
    "change_p50": "median, A to B",
    "change_p05": "5 %, A to B",
    "change_p95": "95 %, A to B",
    "central_mean": "central, A to B",
    "change_p50_difference": "median, B - A",
}
_PRODUCTION = {
    "baseline_a_t": "baseline A, t",
    "baseline_b_t": "baseline B, t",
    "baseline_difference_percent": "difference, %",
    "largest_difference_percent": "largest of a year, %",
}


def _short_changes(comparison: Comparison) -> pd.DataFrame:
    """Return the rows that differ in any percentile, the largest first, A and B in one column."""
    table = comparison.changes
    names = ["change_p50", "change_p05", "change_p95", "central_mean"]
    columns = [f"{name}_difference" for name in names]
    sizes = table[columns].abs().max(axis=1)
    order = sizes[sizes > 0].sort_values(ascending=False, kind="stable").index
    chosen = table.loc[order]
    shown = chosen[["crop", "system", "region", "scenario", "horizon"]].copy()
    for name in names:
        pairs = zip(chosen[f"{name}_a"], chosen[f"{name}_b"], strict=True)
        shown[name] = [f"{one:+.2f} to {other:+.2f}" for one, other in pairs]
    return shown.assign(change_p50_difference=chosen["change_p50_difference"])


def _short_production(comparison: Comparison) -> pd.DataFrame:
    table = comparison.production
    sizes = table["largest_difference_percent"].astype(float).abs()
    return table.loc[sizes[sizes > 0].sort_values(ascending=False, kind="stable").index]


def _short_files(comparison: Comparison) -> pd.DataFrame:
    table = comparison.files
    return table[~table["status"].isin(["identical", "not comparable"])].drop(
        columns=["one_missing"]
    )


def _by_size(pixels: pd.DataFrame) -> pd.DataFrame:
    sizes = pixels["difference"].astype(float).abs()
    return pixels.loc[sizes.sort_values(ascending=False, kind="stable").index]


def _print(console: Console, title: str, table: pd.DataFrame, heads: Mapping[str, str]) -> None:
    """Print the first rows of a table that is not empty."""
    if table.empty:
        return
    more = f" ({ROWS_SHOWN} of {len(table)} shown)" if len(table) > ROWS_SHOWN else ""
    shown = Table(title=escape(title + more), title_justify="left", title_style="bold")
    for column in table:
        number = table[column].dtype.kind in "fi"
        head = heads.get(str(column), str(column).replace("_", " "))
        shown.add_column(escape(head), justify="right" if number else "left", overflow="fold")
    for row in table.head(ROWS_SHOWN).itertuples(index=False):
        shown.add_row(*(escape(_text(value)) for value in row))
    console.print()
    console.print(shown)


def _text(value: Any) -> str:
    """Return a value of a setting or a table as short text."""
    match value:
        case None:
            return "-"
        case str():
            return value
        case float() | np.floating():
            return "-" if np.isnan(value) else f"{value:.6g}"
        case list() | dict():
            return json.dumps(value, ensure_ascii=False)
        case _:
            return str(value)


def _plain(value: Any) -> Any:
    if isinstance(value, np.generic):
        value = value.item()
    return None if isinstance(value, float) and not np.isfinite(value) else value
