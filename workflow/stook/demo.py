"""The folder of the demo world: generated once, generated anew when asked for another world."""

from __future__ import annotations

import json
from pathlib import Path

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn

from stook.errors import InputError

MARK = "invented-world.json"
"""File in the folder of a demo world that says what it was generated with."""


def generate_world(
    folder: Path,
    size: str,
    seed: int | None,
    pixels: int | None,
    years: int | None,
    console: Console,
) -> Path:
    """Write the invented world into a folder, unless it is there already.

    Parameters
    ----------
    folder
        Not there, empty, or holding a demo world.
    size, seed, pixels, years
        See `demo_grids.world.generate`.
    console
        Where progress is shown.

    Returns
    -------
    Path
        The assessment file.

    Raises
    ------
    InputError
        If the folder holds something else, cannot be written, or the world is not possible.
    """
    from demo_grids.world import SEED, generate

    given = {"size": size, "seed": SEED if seed is None else seed, "pixels": pixels, "years": years}
    mark, file = folder / MARK, folder / "assessment.yaml"
    try:
        there = sorted(path.name for path in folder.iterdir()) if folder.exists() else []
        if there and not mark.exists():
            raise InputError(f"{folder}: is not empty and holds no demo world; give another folder")
        if file.exists() and json.loads(mark.read_text(encoding="utf-8")) == given:
            console.print(f"the invented world in {folder} is there already", markup=False)
            return file
        folder.mkdir(parents=True, exist_ok=True)
        mark.write_text(json.dumps(given), encoding="utf-8")
        with Progress(
            TextColumn("generating the invented world"),
            BarColumn(bar_width=30),
            TextColumn("{task.completed}/{task.total} {task.description}"),
            console=console,
            transient=True,
            disable=not console.is_terminal,
        ) as bar:
            task = bar.add_task("")

            def show(done: int, parts: int, what: str) -> None:
                bar.update(task, completed=done, total=parts, description=what)

            generate(folder, size, given["seed"], pixels, years, show)  # type: ignore[arg-type]
    except OSError as error:
        raise InputError(f"{folder}: cannot be written ({error.strerror})") from None
    except ValueError as error:
        raise InputError(f"demo: {error}") from None
    console.print(f"generated the invented world in {folder}", markup=False)
    return file
