"""Generating the invented world: one call, one folder, one assessment file."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from pathlib import Path

from demo_grids.assessment_file import assessment_text
from demo_grids.climate_files import RECORD, scenarios, write_record, write_simulation
from demo_grids.crop_files import write_crops, write_districts
from demo_grids.domain import domain
from demo_grids.models import MODELS
from demo_grids.panel import write_panel
from demo_grids.responses import write_responses

SEED = 20260101
Progress = Callable[[int, int, str], None]


def generate(
    folder: Path | str,
    size: str = "demo",
    seed: int = SEED,
    pixels: int | None = None,
    years: int | None = None,
    progress: Progress | None = None,
) -> Path:
    """Write the invented world into a folder.

    Parameters
    ----------
    folder
        Where to write; made if it is not there. An earlier world in it is replaced. The
        assessment file is written last, so that an interrupted world has none.
    size
        ``tiny`` (tests) or ``demo``.
    seed
        Seed of everything random; the same seed gives the same world.
    pixels
        About how many pixels the analysis grid has, instead of the size's own.
    years
        Years of the simulations from 1981 on, instead of the size's own.
    progress
        Called as ``progress(done, all, what)`` before every part and at the end.

    Returns
    -------
    Path
        The assessment file.

    Raises
    ------
    ValueError
        If the size is unknown, or pixels or years are too few.
    """
    world = domain(size, pixels, years)
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    _remove_earlier(folder)
    parts: list[tuple[str, Callable[[], None]]] = [
        ("crop layers", partial(write_crops, folder / "crops", world)),
        ("districts", partial(write_districts, folder / "districts.gpkg", world)),
        ("responses", partial(write_responses, folder / "responses", seed)),
        ("HOLLIN-OBS", partial(write_record, folder / "reference", world, seed)),
        ("yield panel", partial(write_panel, folder / "fit", world, seed)),
    ]
    for model, scenario, historical in scenarios(world):
        target = folder / "climate" / model.name
        simulation = partial(write_simulation, target, world, seed, model, scenario, historical)
        parts.append((f"{model.name} {scenario}", simulation))
    for done, (what, write) in enumerate(parts):
        if progress is not None:
            progress(done, len(parts), what)
        write()
    path = folder / "assessment.yaml"
    path.write_text(assessment_text(world, size, seed), encoding="utf-8")
    if progress is not None:
        progress(len(parts), len(parts), "done")
    return path


def _remove_earlier(folder: Path) -> None:
    """Remove the files of an earlier world that a world of another size would not replace."""
    for name in ("assessment.yaml", "fit/yields.csv", "fit/maize_rainfed.yaml"):
        (folder / name).unlink(missing_ok=True)
    for model in MODELS:
        for path in (folder / "climate" / model).glob(f"*_day_{model}_*.nc"):
            path.unlink()
    for path in (folder / "reference").glob(f"*_day_{RECORD}_*.nc"):
        path.unlink()
