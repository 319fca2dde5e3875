"""Re-read a whole results folder and name what no longer is what the ledger says.

A results folder can be checked without the program's stages: the ledger records, the files and
the raw inputs are enough.
"""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor, as_completed
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from stook.assessment.layout import STAGES
from stook.audit.ledger import INPUTS_FOLDER, sha256
from stook.errors import ResultsError

Kind = Literal["altered", "missing", "stale", "input", "untracked", "record"]
"""altered: content differs from the record; missing: recorded but not there; stale: made from
an earlier version of a parent; input: a raw input changed or is gone; untracked: no record;
record: a record that cannot be read."""

Progress = Callable[[int, int], None]
_LARGEST_POOL = 4


@dataclass(frozen=True)
class Finding:
    """One thing that is not as recorded.

    Attributes
    ----------
    kind
        What sort of finding it is, see `Kind`.
    path
        The file: relative to the results folder, or absolute for a raw input.
    message
        What is wrong and what to do, one line.
    """

    kind: Kind
    path: str
    message: str

    def __str__(self) -> str:
        return f"{self.path}: {self.message}"


def verify(results: Path | str, progress: Progress | None = None) -> list[Finding]:
    """Compare every file of a results folder, and every raw input, with the ledger.

    Parameters
    ----------
    results
        The results folder of one assessment (it holds ``ledger/``).
    progress
        Called now and then with the bytes read and the bytes to read.

    Returns
    -------
    list of Finding
        Sorted by path; empty when everything is as recorded.

    Raises
    ------
    ResultsError
        If the folder holds no ledger.
    """
    root = Path(results)
    if not (root / "ledger").is_dir():
        raise ResultsError(f"{root}: holds no ledger folder; give the results of one assessment")
    records, findings = _read_records(root)
    raw = {
        parent
        for record in records.values()
        for parent in record["parents"]
        if not _is_result(parent)
    }
    digests = _digests(root, [*records, *raw], progress)
    findings += [*_files(records, digests), *_inputs(records, raw, digests)]
    findings += [*_older_than_parent(records), *_untracked(root, records)]
    return sorted(findings, key=lambda finding: (finding.path, finding.kind, finding.message))


def _is_result(parent: str) -> bool:
    """Tell whether a recorded parent is a result, which has a record of its own."""
    path = Path(parent)
    return not path.is_absolute() and path.parts[0] in STAGES


def _read_records(root: Path) -> tuple[dict[str, dict[str, Any]], list[Finding]]:
    records: dict[str, dict[str, Any]] = {}
    findings = []
    folder = root / "ledger"
    for path in sorted(folder.rglob("*.json")):
        if path.relative_to(folder).parts[0] == INPUTS_FOLDER or path.name.startswith("."):
            continue
        try:
            record = json.loads(path.read_text(encoding="utf-8"))
            name = path.relative_to(folder).as_posix().removesuffix(".json")
            if record["path"] != name or not isinstance(record["parents"], dict):
                raise ValueError("it belongs to another file")
            records[name] = record
        except (ValueError, KeyError, TypeError, OSError) as error:
            name = path.relative_to(root).as_posix()
            findings.append(
                Finding("record", name, f"the ledger record cannot be read ({error}); run again")
            )
    return records, findings


def _digests(root: Path, names: Iterable[str], progress: Progress | None) -> dict[str, str | None]:
    """Return the SHA-256 of every file as it is now, None where it cannot be read."""
    paths = {name: root / name for name in names}  # an absolute name stays what it is
    sizes = {name: path.stat().st_size if path.is_file() else 0 for name, path in paths.items()}
    total, done = sum(sizes.values()), 0
    result: dict[str, str | None] = {}
    with ThreadPoolExecutor(min(_LARGEST_POOL, os.cpu_count() or 1)) as pool:
        jobs = {pool.submit(_digest, path): name for name, path in paths.items()}
        for job in as_completed(jobs):
            name = jobs[job]
            result[name] = job.result()
            done += sizes[name]
            if progress is not None:
                progress(done, total)
    return result


def _digest(path: Path) -> str | None:
    try:
        return sha256(path)
    except OSError:
        return None


def _files(records: dict[str, dict[str, Any]], digests: dict[str, str | None]) -> Iterator[Finding]:
    for name, record in records.items():
        now = digests[name]
        if now is None:
            yield Finding("missing", name, "is in the ledger but not on disk; run again")
        elif now != record["sha256"]:
            yield Finding(
                "altered",
                name,
                f"was altered after it was made (SHA-256 {record['sha256'][:12]} recorded, "
                f"{now[:12]} now); delete it and run again",
            )


def _inputs(
    records: dict[str, dict[str, Any]], raw: set[str], digests: dict[str, str | None]
) -> Iterator[Finding]:
    """Report each raw input once, with the count of results made from what it was."""
    for name in sorted(raw):
        now = digests[name]
        children = [
            child for child, record in records.items() if record["parents"].get(name, now) != now
        ]
        if not children:
            continue
        what = "is gone" if now is None else "has changed"
        others = f" and {len(children) - 1} more" if len(children) > 1 else ""
        yield Finding(
            "input", name, f"{what} since {children[0]}{others} was made from it; run again"
        )


def _older_than_parent(records: dict[str, dict[str, Any]]) -> Iterator[Finding]:
    for name, record in records.items():
        for parent, digest in record["parents"].items():
            if not _is_result(parent):
                continue
            if parent not in records:
                yield Finding("stale", name, f"its parent {parent} has no record; run again")
            elif records[parent]["sha256"] != digest:
                yield Finding(
                    "stale", name, f"was made from an earlier version of {parent}; run again"
                )


def _untracked(root: Path, records: dict[str, dict[str, Any]]) -> Iterator[Finding]:
    for stage in STAGES:
        for folder, _, names in os.walk(root / stage):
            for file in names:
                name = (Path(folder) / file).relative_to(root).as_posix()
                if name in records:
                    continue
                half = file.startswith(".") and file.endswith(".part")
                message = (
                    "is the half-written file of a job that was killed; delete it"
                    if half
                    else "is not in the ledger; no job of this assessment made it"
                )
                yield Finding("untracked", name, message)
