"""A small assessment whose jobs are stand-ins: its climate files need not be real."""

from __future__ import annotations

import io
import os
from pathlib import Path

import yaml
from rich.console import Console
from stook.assessment.load import load_assessment
from stook.engine.plan import Plan
from stook.engine.run import Request, run
from stook.engine.start import start

STAND_IN = Path(__file__).parent / "stand_in"

RESPONSE = {
    "crop": "maize",
    "system": "rainfed",
    "link": "log",
    "indices": {"warmth": {"measure": "mean", "variable": "tas"}},
    "terms": {"warmth": {"form": "linear", "index": "warmth", "coefficient": -0.05}},
    "standard_errors": [0.01],
    "estimation_range": {"warmth": [0, 40]},
    "citation": "invented",
    "note": "invented",
}

CONTENT = {
    "title": "Engine (invented)",
    "name": "engine",
    "seed": 1,
    "grid": {
        "lat": {"first": 40, "last": 41, "step": 1},
        "lon": {"first": 0, "last": 1, "step": 1},
    },
    "periods": {"baseline": [1991, 2010], "horizons": {"end": [2031, 2040]}},
    "reference": {"name": "R", "files": {"tas": ["reference.nc"]}},
    "simulations": {"pattern": "{variable}_{model}_{scenario}_{realisation}.nc"},
    "crops": {
        "maize": {
            "systems": {
                "rainfed": {
                    "area": {"value": 1, "unit": "ha"},
                    "calendar": {"planting": 100, "maturity": 200},
                    "baseline_yield": 1,
                    "response": "maize.yaml",
                }
            }
        }
    },
    "regions": {"file": "regions.gpkg"},
}
JOBS = 15
"""Jobs up to yields, for one crop x system and one tile: overlay, layers, 3 x prepare (observed and
two simulations), 2 x correct and their summary, 3 x season, coefficients, 3 x yields."""


def write_assessment(folder: Path) -> Path:
    """Write the assessment and the files it names; return its file."""
    for name in ("reference.nc", "tas_A_low_r1.nc", "tas_B_low_r1.nc", "regions.gpkg"):
        (folder / name).write_text(name, encoding="utf-8")
    (folder / "maize.yaml").write_text(yaml.safe_dump(RESPONSE), encoding="utf-8")
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(CONTENT), encoding="utf-8")
    return path


def planned(file: Path, *overrides: str, until: str = "yields", cores: int = 2):
    """Return the plan and the request of an assessment."""
    request = Request(file, overrides, (), until, cores)
    return Plan(load_assessment(file, overrides)), request


def run_all(file: Path, *overrides: str, until: str = "yields") -> tuple[int, str]:
    """Run an assessment; return the number of jobs that ran and what was shown."""
    plan, request = planned(file, *overrides, until=until)
    start(plan, [])
    shown = io.StringIO()
    return run(plan, request, Console(file=shown, width=200)), shown.getvalue()


def traced() -> list[str]:
    """Return the jobs that the stand-ins finished since the last call, sorted."""
    path = Path(os.environ["STAND_IN_TRACE"])
    lines = path.read_text(encoding="utf-8").splitlines() if path.exists() else []
    path.write_text("", encoding="utf-8")
    return sorted(lines)
