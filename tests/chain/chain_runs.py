"""Running the program as its users do, and comparing the results of two runs."""

from __future__ import annotations

import os
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr
from stook.assessment.layout import Layout
from stook.assessment.load import load_resolved
from stook.grids.files import CF_TIME


@dataclass(frozen=True)
class Chain:
    """A finished run: the assessment file and the results folder."""

    file: Path
    root: Path

    @property
    def layout(self) -> Layout:
        return Layout(self.root)

    @property
    def assessment(self):
        return load_resolved(self.root)

    def files(self, pattern: str) -> list[str]:
        """Return result files by pattern, relative to the root, sorted."""
        found = [str(path.relative_to(self.root)) for path in self.root.glob(pattern)]
        assert found, f"{pattern} finds nothing"
        return sorted(found)


def command(*arguments) -> list[str]:
    """Return the command line of the installed program."""
    return [sys.executable, "-m", "stook.cli", *map(str, arguments)]


def stook(*arguments, **environment) -> subprocess.CompletedProcess:
    """Run the program to its end."""
    return subprocess.run(
        command(*arguments),
        capture_output=True,
        text=True,
        env=os.environ | {"COLUMNS": "200"} | environment,
        timeout=900,
    )


def grids(root: Path, pattern: str) -> xr.Dataset:
    """Open all tiles of a grid as one, loaded."""
    parts = []
    for path in sorted(root.glob(pattern)):
        with xr.open_dataset(path, decode_times=CF_TIME) as dataset:
            parts.append(dataset.load())
    assert parts, f"{root}/{pattern} finds nothing"
    return parts[0] if len(parts) == 1 else xr.concat(parts, "lat", data_vars="minimal")


def assert_same_grids(one: xr.Dataset, other: xr.Dataset, where: xr.DataArray | None = None):
    """Compare every variable bit for bit, at all pixels or where a mask over pixels is true."""
    assert sorted(map(str, one.data_vars)) == sorted(map(str, other.data_vars))
    for name in one.data_vars:
        left, right = one[name], other[name]
        if str(name).endswith("_bnds"):
            continue
        assert left.dtype == right.dtype, name
        assert left.dims == right.dims, name
        if where is not None and {"lat", "lon"} <= set(left.dims):
            left, right = (values.where(where) for values in (left, right))
        np.testing.assert_array_equal(left.values, right.values, err_msg=str(name))


def assert_same_rows(one: pd.DataFrame, other: pd.DataFrame):
    """Compare two tables exactly, whatever the order of their rows."""
    assert list(one.columns) == list(other.columns)
    one, other = (_plain(table) for table in (one, other))
    keys = [name for name in one.columns if one[name].dtype.kind not in "f"]
    left, right = (t.sort_values(keys).reset_index(drop=True) for t in (one, other))
    pd.testing.assert_frame_equal(left, right, check_exact=True)


def _plain(table: pd.DataFrame) -> pd.DataFrame:
    """Return a table with text for categories, which may be fewer in a part."""
    names = table.select_dtypes("category").columns
    return table.astype(dict.fromkeys(names, str))


ONE_MODEL = ("--set", "simulations.models=[SEDGE-LR]")
"""Options of a shorter run: the record and the one simulation of a model."""


def assert_same_results(whole: Chain, part: Chain, patterns: list[str]):
    """Compare the files of a run with those of the same names of another that may hold more."""
    for pattern in patterns:
        names = part.files(pattern)
        assert set(names) <= set(whole.files(pattern))
        for name in names:
            if name.endswith(".nc"):
                assert_same_grids(grids(whole.root, name), grids(part.root, name))
            elif name.endswith(".parquet"):
                assert_same_rows(*(pd.read_parquet(run.root / name) for run in (whole, part)))
            else:
                assert (whole.root / name).read_bytes() == (part.root / name).read_bytes(), name
