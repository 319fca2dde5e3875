"""Looking at the files of a folder and writing a first assessment file from what they are."""

from __future__ import annotations

from pathlib import Path

from stook.assessment.discover import Discovered, discover
from stook.assessment.first_file import assessment_text
from stook.errors import AssessmentError

NAME = "assessment.yaml"


def write_first_assessment(folder: Path) -> tuple[Path, list[str]]:
    """Write a commented assessment file that loads once its blanks are filled.

    Parameters
    ----------
    folder
        Holds climate files, at any depth; the assessment file is written at its top.

    Returns
    -------
    Path
        The file.
    list of str
        What was found, a line each.

    Raises
    ------
    AssessmentError
        If there is an assessment file already, or the folder is not there or cannot be written.
    """
    path = folder / NAME
    if not folder.is_dir():
        raise AssessmentError(f"{folder}: no such folder; give the folder of your climate files")
    if path.exists():
        raise AssessmentError(f"{path}: is there already; nothing is overwritten")
    found = discover(folder)
    try:
        with path.open("x", encoding="utf-8") as file:
            file.write(assessment_text(folder.resolve().name, found))
    except OSError as error:
        raise AssessmentError(f"{path}: cannot be written ({error.strerror})") from None
    return path, list(_seen(found))


def _seen(found: Discovered) -> list[str]:
    runs = [
        f"simulation {run.model} {run.scenario} {run.realisation}: {', '.join(sorted(run.files))}"
        for run in found.runs
    ]
    reference = [f"reference: {', '.join(sorted(found.reference))}"] if found.reference else []
    others = [
        f"{what}: {', '.join(names)}"
        for what, names in (
            ("polygons", [polygons.file for polygons in found.polygons]),
            ("responses", [response.file for response in found.responses]),
            ("other grids", found.layers),
            ("left aside", found.aside),
        )
        if names
    ]
    return [*runs, *reference, *others] or ["no climate file found"]
