"""One run at a time in a results folder; the lock of a run that was killed counts no longer."""

from __future__ import annotations

import fcntl
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from stook.errors import ResultsError

STATE = ".snakemake"
"""Folder of the engine's own records inside a results folder."""


@contextmanager
def run_lock(root: Path) -> Iterator[None]:
    """Hold a results folder for one run.

    The lock is the kernel's and ends with the process that holds it, however that ends. Locks
    that the engine left on disk then belong to no one and are removed.

    Raises
    ------
    ResultsError
        If another run holds the folder.
    """
    state = root / STATE
    state.mkdir(parents=True, exist_ok=True)
    with (state / "run.lock").open("a+", encoding="utf-8") as file:
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            file.seek(0)
            holder = file.read().strip() or "unknown"
            raise ResultsError(
                f"{root}: another run is working here (process {holder}); wait for it or end it"
            ) from None
        file.truncate(0)
        file.write(str(os.getpid()))
        file.flush()
        shutil.rmtree(state / "locks", ignore_errors=True)
        yield
