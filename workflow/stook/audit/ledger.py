"""The ledger: one record per result file, written by the job that made the file.

A record names the file's SHA-256, size, rule, seconds and peak memory of the job, parents with
their own SHA-256 at the time of reading, and per variable the count of missing values, minimum,
mean and maximum.
"""

from __future__ import annotations

import datetime
import glob
import hashlib
import json
import resource
import time
from collections.abc import Iterable
from pathlib import Path
from types import TracebackType
from typing import Any

import dask
import dask.array as da
import numpy as np
import pandas as pd
import xarray as xr

from stook.assessment.layout import STAGES, Layout
from stook.assessment.load import assessment_digest
from stook.assessment.schema import Assessment
from stook.errors import InputError, ResultsError
from stook.grids.files import Codec, delayed_netcdf, temporary_name, write_table
from stook.version import VERSION

INPUTS_FOLDER = "inputs"
"""Folder inside the ledger that remembers the digests of raw inputs by size and date."""

LEDGER_COLUMNS = (
    *("path", "rule", "size", "sha256", "seconds", "peak_mib", "parents"),
    *("variable", "missing", "minimum", "mean", "maximum"),
)
"""Columns of `ledger_table`."""

_BLOCK = 1 << 22


def sha256(path: Path) -> str:
    """Return the SHA-256 of a file, read in blocks."""
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while block := file.read(_BLOCK):
            digest.update(block)
    return digest.hexdigest()


def record_path(root: Path, result: Path) -> Path:
    """Return where the ledger record of a result file lies."""
    return root / "ledger" / f"{result.relative_to(root).as_posix()}.json"


class Job:
    """One job: its parents, its outputs under temporary names, and their ledger records.

    Use as a context manager. Outputs get their final names together when the block ends without
    an error; on an error nothing of them stays.

    Examples
    --------
    >>> with Job(assessment, "season_tile", parents=[source]) as job:  # doctest: +SKIP
    ...     job.netcdf(indices, path)
    """

    def __init__(
        self,
        assessment: Assessment,
        rule: str,
        parents: Iterable[Path],
        wildcards: dict[str, str] | None = None,
    ) -> None:
        self.assessment = assessment
        self.root = Layout.of(assessment).root
        self.rule = rule
        self.wildcards = wildcards or {}
        self.parents = list(dict.fromkeys(Path(parent) for parent in parents))
        self._outputs: dict[Path, dict[str, Any]] = {}

    def __enter__(self) -> Job:
        self._start = time.perf_counter()
        for parent in self.parents:
            if not parent.exists():
                raise InputError(f"{parent}: no such file")
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        if kind is not None:
            for path in self._outputs:
                temporary_name(path).unlink(missing_ok=True)
            return
        self._finish()

    def attributes(self, title: str) -> dict[str, str]:
        """Return the global attributes of a NetCDF file of this job."""
        now = datetime.datetime.now(datetime.UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
        where = " ".join(f"{key}={value}" for key, value in self.wildcards.items())
        return {
            "Conventions": "CF-1.11",
            "title": title,
            "history": f"{now} stook {VERSION}: {' '.join((self.rule, where)).strip()}",
            "source": f"stook {VERSION}",
            "assessment": self.assessment.title,
            "assessment_sha256": assessment_digest(self.assessment),
        }

    def netcdf(self, dataset: xr.Dataset, path: Path, title: str, codec: Codec = "zlib") -> None:
        """Compute a dataset and write it as CF NetCDF-4, block by block.

        `dataset` may be lazy; data and statistics come from one pass over its blocks.
        """
        self.netcdf_files([(dataset, path, title, codec)])

    def netcdf_files(self, files: Iterable[tuple[xr.Dataset, Path, str, Codec]]) -> None:
        """Write several datasets as `netcdf` does; blocks they share are computed once.

        Parameters
        ----------
        files
            Dataset, path, title and codec of each.
        """
        writing, statistics = [], {}
        for dataset, path, title, codec in files:
            temporary = self.claim(path)
            complete = dataset.assign_attrs(self.attributes(title))
            statistics[path] = {
                str(name): _lazy_statistics(variable.data)
                for name, variable in complete.data_vars.items()
                if variable.dtype.kind in "fiu" and not str(name).endswith("_bnds")
            }
            writing.append(delayed_netcdf(complete, temporary, codec))
        _, found = dask.compute(writing, statistics)
        for path, values in found.items():
            self._outputs[path]["variables"] = {
                name: _statistics(*map(float, value)) for name, value in values.items()
            }

    def table(self, frame: pd.DataFrame, path: Path) -> None:
        """Write a table as Parquet or CSV, by suffix."""
        temporary = self.claim(path)
        write_table(frame, temporary)
        numbers = frame.select_dtypes("number")
        self._outputs[path]["variables"] = {
            str(name): _statistics(
                float(column.isna().sum()),
                float(column.min()),
                float(column.sum()),
                float(column.max()),
                float(column.size),
            )
            for name, column in numbers.items()
        }

    def claim(self, path: Path) -> Path:
        """Register an output of any other kind and return the temporary name to write it to.

        Raises
        ------
        ResultsError
            If the folder cannot be written.
        """
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            for left in path.parent.glob(f".{glob.escape(path.name)}.*.part"):
                left.unlink(missing_ok=True)  # of a job that was killed
            temporary_name(path).touch()
        except OSError as error:
            raise ResultsError(f"{path.parent}: cannot be written ({error.strerror})") from None
        self._outputs[path] = {"variables": {}}
        return temporary_name(path)

    def _finish(self) -> None:
        seconds = round(time.perf_counter() - self._start, 3)
        peak_mib = round(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024, 1)
        parents = {str(_relative(p, self.root)): self._parent_digest(p) for p in self.parents}
        for path, extra in self._outputs.items():
            temporary = temporary_name(path)
            record = {
                "path": path.relative_to(self.root).as_posix(),
                "sha256": sha256(temporary),
                "size": temporary.stat().st_size,
                "rule": self.rule,
                "wildcards": self.wildcards,
                "seconds": seconds,
                "peak_mib": peak_mib,
                "parents": parents,
                **extra,
            }
            _write_json(record, record_path(self.root, path))
        for path in self._outputs:
            temporary_name(path).replace(path)

    def _parent_digest(self, parent: Path) -> str:
        """Return the digest of a parent: from its record, or of the raw file (remembered)."""
        if parent.is_relative_to(self.root) and _relative(parent, self.root).parts[0] in STAGES:
            return str(read_record(self.root, parent)["sha256"])
        status = parent.stat()
        key = hashlib.blake2b(str(parent).encode(), digest_size=12).hexdigest()
        memory = self.root / "ledger" / INPUTS_FOLDER / f"{key}.json"
        stamp = [status.st_size, status.st_mtime_ns]
        if memory.exists():
            known = json.loads(memory.read_text(encoding="utf-8"))
            if known["stamp"] == stamp:
                return str(known["sha256"])
        digest = sha256(parent)
        _write_json({"path": str(parent), "stamp": stamp, "sha256": digest}, memory)
        return digest


def read_record(root: Path, result: Path) -> dict[str, Any]:
    """Read the ledger record of a result file.

    Raises
    ------
    ResultsError
        If there is none.
    """
    path = record_path(root, result)
    try:
        return json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise ResultsError(f"{result}: has no ledger record; delete it and run again") from None


def ledger_table(root: Path) -> pd.DataFrame:
    """Return the ledger of a results folder as a table, one row a file and variable.

    Parameters
    ----------
    root
        The results folder.

    Returns
    -------
    DataFrame
        path, rule, size (bytes), sha256, seconds, peak_mib (memory of the job, MiB), parents
        (joined by ``; ``), variable, missing (count), minimum, mean, maximum (unit of the
        variable); sorted by path. A file without numeric variables has one row in which the last
        five are empty.
    """
    rows: list[dict[str, Any]] = []
    folder = root / "ledger"
    for path in sorted(folder.rglob("*.json")):
        if path.relative_to(folder).parts[0] == INPUTS_FOLDER:
            continue
        record = json.loads(path.read_text(encoding="utf-8"))
        row = {key: record[key] for key in LEDGER_COLUMNS[:6]}
        row["parents"] = "; ".join(record["parents"])
        variables = record["variables"] or {None: {}}
        rows += [row | {"variable": name} | values for name, values in variables.items()]
    return pd.DataFrame(rows, columns=list(LEDGER_COLUMNS))


def forget(root: Path, result: Path) -> None:
    """Delete a result file together with its record."""
    record_path(root, result).unlink(missing_ok=True)
    result.unlink(missing_ok=True)


def _relative(path: Path, root: Path) -> Path:
    return path.relative_to(root) if path.is_relative_to(root) else path


def _write_json(content: dict[str, Any], path: Path) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = temporary_name(path)
    temporary.write_text(json.dumps(content, indent=1, ensure_ascii=False), encoding="utf-8")
    temporary.replace(path)


def _lazy_statistics(data: Any) -> tuple[Any, ...]:
    """Return missing count, minimum, sum, maximum and size of an array, lazy if it is."""
    if not isinstance(data, da.Array):
        values = np.asarray(data, dtype=np.float64)
        valid = values[np.isfinite(values)]
        low, high = (valid.min(), valid.max()) if valid.size else (np.nan, np.nan)
        return values.size - valid.size, low, valid.sum(), high, values.size
    finite = da.isfinite(data)
    return (
        (~finite).sum(),
        da.where(finite, data, np.inf).min(),
        da.where(finite, data, 0).sum(dtype=np.float64),
        da.where(finite, data, -np.inf).max(),
        data.size,
    )


def _statistics(
    missing: float, low: float, total: float, high: float, size: float
) -> dict[str, float | int | None]:
    count = size - missing
    if count == 0:
        return {"missing": int(missing), "minimum": None, "mean": None, "maximum": None}
    return {"missing": int(missing), "minimum": low, "mean": total / count, "maximum": high}
