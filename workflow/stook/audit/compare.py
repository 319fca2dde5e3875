"""Compare two results folders: what differs in the assessments, and what that does to results."""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import yaml

from stook.assessment.layout import STAGES, Layout
from stook.assessment.load import RESOLVED_NAME, load_resolved
from stook.assessment.schema import Assessment
from stook.audit.compare_values import FILE_COLUMNS, PIXEL_COLUMNS, Scope, compare_file, files_of
from stook.audit.ledger import INPUTS_FOLDER, sha256
from stook.constants import CENTRAL_DRAW
from stook.errors import ResultsError
from stook.grids.files import read_table

MEASURES = ("change_p50", "change_p05", "change_p95", "central_mean", "baseline_production_t")
"""Columns of the changes table that are set side by side."""

CHANGE_KEYS = ["crop", "system", "region", "scenario", "horizon"]
PRODUCTION_KEYS = ["simulation", "crop", "system", "region"]
PRODUCTION_COLUMNS = [
    *PRODUCTION_KEYS,
    *("years", "baseline_a_t", "baseline_b_t", "baseline_difference_percent"),
    *("largest_difference_percent", "in_year"),
]

Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class Comparison:
    """What differs between two results folders, A and B.

    Attributes
    ----------
    a, b
        The folders.
    settings
        key, a, b: keys of the assessment, and of the response documents, that differ.
    inputs
        input, sha256_a, sha256_b: raw inputs whose content differs, or that one run lacks.
    changes
        Rows of the changes table that both have: `CHANGE_KEYS`, and of each of `MEASURES` its
        value in A, in B and B less A.
    production
        By `PRODUCTION_KEYS`: mean production of the baseline years, t, in A and B; the largest
        difference of a single year, per cent of A. Central estimate.
    pixels
        The pixels with the largest difference, see `PIXEL_COLUMNS`.
    files
        One row per file, tiles joined, see `FILE_COLUMNS`.
    """

    a: Path
    b: Path
    settings: pd.DataFrame
    inputs: pd.DataFrame
    changes: pd.DataFrame
    production: pd.DataFrame
    pixels: pd.DataFrame
    files: pd.DataFrame

    @property
    def identical(self) -> bool:
        """Whether both have the same files, with the same values in the part they share."""
        return bool(self.files["status"].isin(["identical", "not comparable"]).all())


def compare(
    a: Path | str,
    b: Path | str,
    stages: tuple[str, ...] = STAGES[:-1],
    pixels: int = 10,
    progress: Progress | None = None,
) -> Comparison:
    """Compare two results folders.

    Only what both have in common is compared: pixels both have computed, regions, crops,
    simulations and years of both. A region run can so be compared with a full run.

    Parameters
    ----------
    a, b
        Results folders.
    stages
        Stages whose files are read value by value.
    pixels
        Pixels listed of each file of yields and of the ensemble.
    progress
        Called with the files done, all files, and the name of the next one.

    Raises
    ------
    ResultsError
        If a folder is no results folder, or a result cannot be read.
    """
    roots = Path(a), Path(b)
    first, second = (_assessment(root) for root in roots)
    used = _raw_parents(roots[0]), _raw_parents(roots[1])
    scope = Scope.of(*roots, same_part=first.subset == second.subset)
    files, found = _compare_files(*roots, scope, stages, pixels, progress)
    return Comparison(
        *roots,
        settings=_settings(used, first, second),
        inputs=_inputs(used, first, second),
        changes=_changes(*roots),
        production=_production(*roots, first),
        pixels=found,
        files=files,
    )


def _assessment(root: Path) -> Assessment:
    if not (root / RESOLVED_NAME).is_file():
        raise ResultsError(
            f"{root}: holds no {RESOLVED_NAME}; give the results folder of one assessment"
        )
    return load_resolved(root)


# What was asked for.


def flatten(content: Any, prefix: str = "") -> dict[str, Any]:
    """Return nested mappings, and lists of mappings, as one mapping with dotted keys."""
    if isinstance(content, list) and any(isinstance(item, dict) for item in content):
        content = {str(number): item for number, item in enumerate(content)}
    if not isinstance(content, dict) or not content:
        return {prefix: content} if prefix else {}
    result: dict[str, Any] = {}
    for key, value in content.items():
        result |= flatten(value, f"{prefix}.{key}" if prefix else str(key))
    return result


Used = tuple[dict[str, str], dict[str, str]]
"""Raw inputs of A and of B: path and SHA-256."""


def _settings(used: Used, first: Assessment, second: Assessment) -> pd.DataFrame:
    contents = [
        flatten(assessment.model_dump(mode="json", exclude={"source"}))
        for assessment in (first, second)
    ]
    rows = list(_differences(*contents))
    for crop, system in first.systems:
        if (crop, system) not in second.systems:
            continue
        one, other = (
            _response(inputs, assessment.path(assessment.system(crop, system).response))
            for inputs, assessment in zip(used, (first, second), strict=True)
        )
        if one is not None and other is not None:
            prefix = f"response of {crop} {system}: "
            rows += [(prefix + key, *values) for key, *values in _differences(one, other)]
    return pd.DataFrame(rows, columns=["key", "a", "b"])


def _differences(one: dict[str, Any], other: dict[str, Any]) -> Iterator[tuple[str, Any, Any]]:
    """Yield key and both values where they differ; a key that one lacks has the value None."""
    for key in dict.fromkeys([*one, *other]):
        if key not in one or key not in other or one[key] != other[key]:
            yield key, one.get(key), other.get(key)


def _response(used: dict[str, str], path: Path) -> dict[str, Any] | None:
    """Return a response document, if it still is the one the run was made with."""
    recorded = used.get(str(path))
    if recorded is None or not path.is_file() or sha256(path) != recorded:
        return None
    return flatten(yaml.safe_load(path.read_text(encoding="utf-8")))


def _raw_parents(root: Path) -> dict[str, str]:
    """Return the raw inputs of a run and their digests, from the ledger."""
    result: dict[str, str] = {}
    folder = root / "ledger"
    for path in sorted(folder.rglob("*.json")):
        if path.relative_to(folder).parts[0] == INPUTS_FOLDER:
            continue
        try:
            parents = json.loads(path.read_text(encoding="utf-8"))["parents"]
        except (ValueError, KeyError, OSError) as error:
            raise ResultsError(f"{path}: cannot be read ({error}); run stook verify") from None
        result |= {parent: d for parent, d in parents.items() if Path(parent).is_absolute()}
    return result


def _inputs(used: Used, first: Assessment, second: Assessment) -> pd.DataFrame:
    """Compare inputs by where they lie, seen from the assessment file."""
    digests = [
        {os.path.relpath(path, assessment.folder): d for path, d in inputs.items()}
        for inputs, assessment in zip(used, (first, second), strict=True)
    ]
    rows = [(key, one or "", other or "") for key, one, other in _differences(*digests)]
    return pd.DataFrame(sorted(rows), columns=["input", "sha256_a", "sha256_b"])


# Results by region and crop.


def _changes(a: Path, b: Path) -> pd.DataFrame:
    columns = [*CHANGE_KEYS]
    for measure in MEASURES:
        columns += [f"{measure}_a", f"{measure}_b", f"{measure}_difference"]
    paths = [Layout(root).changes for root in (a, b)]
    if not all(path.is_file() for path in paths):
        return pd.DataFrame(columns=columns)
    one, other = (read_table(path)[[*CHANGE_KEYS, *MEASURES]] for path in paths)
    both = one.merge(other, on=CHANGE_KEYS, suffixes=("_a", "_b"))
    for measure in MEASURES:
        both[f"{measure}_difference"] = both[f"{measure}_b"] - both[f"{measure}_a"]
    return both[columns]


def _production(a: Path, b: Path, assessment: Assessment) -> pd.DataFrame:
    tables = []
    for path in sorted((a / "regions").glob("*/*.parquet")):
        other = b / path.relative_to(a)
        if other.is_file():
            one = _baseline_differences(path, other, assessment.periods.baseline)
            tables.append(one.assign(simulation=path.parent.name, crop=path.stem))
    filled = [table for table in tables if not table.empty]
    if not filled:
        return pd.DataFrame(columns=PRODUCTION_COLUMNS)
    return pd.concat(filled, ignore_index=True)[PRODUCTION_COLUMNS]


def _baseline_differences(a: Path, b: Path, baseline: tuple[int, int]) -> pd.DataFrame:
    keys = ["system", "region", "year"]
    central = [table[table["draw"] == CENTRAL_DRAW] for table in map(read_table, (a, b))]
    one, other = (table[[*keys, "production_t"]] for table in central)
    both = one.merge(other, on=keys, suffixes=("_a", "_b"))
    rows = []
    for (system, region), group in both.groupby(["system", "region"], sort=False):
        inside = group[group["year"].between(*baseline)]
        means = [float(inside[f"production_t_{name}"].mean()) for name in "ab"]
        percent = _percent(group["production_t_a"], group["production_t_b"])
        known = percent.notna().any()
        largest = int(np.nanargmax(percent.abs().to_numpy())) if known else 0
        rows.append(
            {
                "system": system,
                "region": region,
                "years": len(group),
                "baseline_a_t": means[0],
                "baseline_b_t": means[1],
                "baseline_difference_percent": float(_percent(*map(pd.Series, means)).iloc[0]),
                "largest_difference_percent": float(percent.iloc[largest]),
                "in_year": int(group["year"].iloc[largest]) if known else 0,
            }
        )
    return pd.DataFrame(rows)


def _percent(a: pd.Series, b: pd.Series) -> pd.Series:
    """Return the difference in per cent of A; 0 where both are equal, also both 0."""
    difference = 100.0 * (b - a) / a.where(a != 0)
    return difference.where(a != b, 0.0)


# Files, value by value.


def _compare_files(
    a: Path,
    b: Path,
    scope: Scope,
    stages: tuple[str, ...],
    pixels: int,
    progress: Progress | None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    here, there = files_of(a, stages), files_of(b, stages)
    names = sorted({*here, *there}, key=lambda name: (STAGES.index(name.split("/")[0]), name))
    rows, largest = [], []
    for number, name in enumerate(names):
        if progress is not None:
            progress(number, len(names), name)
        if name not in here or name not in there:
            only = "only in A" if name in here else "only in B"
            rows.append({"file": name, "status": only, "compared": 0, "differing": 0})
            continue
        row, found = compare_file(name, here[name], there[name], scope, pixels)
        rows.append(row)
        largest.append(found)
    filled = [table for table in largest if not table.empty]
    joined = pd.concat(filled, ignore_index=True) if filled else pd.DataFrame()
    return pd.DataFrame(rows, columns=FILE_COLUMNS), joined.reindex(columns=PIXEL_COLUMNS)
