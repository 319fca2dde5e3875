"""Loading an assessment file, with overrides and a region subset."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import yaml

from stook.assessment.documents import read_yaml, validate
from stook.assessment.schema import Assessment
from stook.errors import AssessmentError

RESOLVED_NAME = "assessment.yaml"


def load_assessment(
    path: Path | str, overrides: Sequence[str] = (), regions: Sequence[str] = ()
) -> Assessment:
    """Read, override and validate an assessment file.

    Parameters
    ----------
    path
        The file.
    overrides
        ``key=value`` with a dotted key of the file and a YAML value, such as
        ``ensemble.draws=50`` (what ``--set`` takes).
    regions
        Names of the only regions to compute (what ``--region`` takes).

    Raises
    ------
    AssessmentError
        One line per fault.
    """
    path = Path(path)
    content = read_yaml(path)
    for override in overrides:
        _override(content, override, path)
    content["subset"] = sorted(dict.fromkeys(regions))
    content["source"] = str(path.resolve())
    return validate(content, Assessment, path)


def _override(content: dict[str, Any], override: str, path: Path) -> None:
    key, sign, text = override.partition("=")
    if not sign or not key.strip():
        raise AssessmentError(f"--set {override}: must be key=value, such as ensemble.draws=50")
    try:
        value = yaml.safe_load(text)
    except yaml.YAMLError:
        raise AssessmentError(f"--set {override}: the value is not valid YAML") from None
    *parents, last = key.strip().split(".")
    place = content
    for parent in parents:
        following = place.setdefault(parent, {})
        if not isinstance(following, dict):
            raise AssessmentError(f"--set {override}: {parent} in {path} holds no keys")
        place = following
    place[last] = value


def results_folder(assessment: Assessment) -> Path:
    """Return the folder of all results; a region subset has a folder of its own."""
    name = assessment.name
    if assessment.subset:
        safe = ["".join(c if c.isalnum() else "-" for c in region) for region in assessment.subset]
        name = "@".join((name, "+".join(safe)))
    return assessment.path(assessment.results) / name


def save_resolved(assessment: Assessment) -> Path:
    """Write the validated assessment, defaults included, into its results folder.

    The file is left alone when its content is the same, so that nothing reruns for its date.
    """
    path = results_folder(assessment) / RESOLVED_NAME
    text = yaml.safe_dump(assessment.model_dump(mode="json"), sort_keys=False, allow_unicode=True)
    if not path.exists() or path.read_text(encoding="utf-8") != text:
        path.parent.mkdir(parents=True, exist_ok=True)
        temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
        temporary.write_text(text, encoding="utf-8")
        temporary.replace(path)
    return path


def load_resolved(results: Path | str) -> Assessment:
    """Read the assessment that a results folder was made with."""
    path = Path(results) / RESOLVED_NAME
    return validate(read_yaml(path), Assessment, path)


def assessment_digest(assessment: Assessment) -> str:
    """Return the SHA-256 of the validated assessment, independent of layout and comments."""
    text = json.dumps(assessment.model_dump(mode="json", exclude={"source"}), sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()
