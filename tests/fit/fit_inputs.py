"""Invented panels and fit documents."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import yaml
from stook.fit.document import Fit, load_fit
from stook.fit.estimate import Estimate, estimate
from stook.fit.panel import Sample, make_sample, read_panel, table_weather

INDICES = {
    "heat": {"measure": "degree-days", "base": 30.0},
    "rain": {"measure": "total"},
}
SPECIFICATIONS: dict[str, Any] = {
    "heat-and-rain": {
        "heat": {"form": "linear", "index": "heat"},
        "rain": {"form": "quadratic", "index": "rain"},
    },
    "heat-bent": {"heat": {"form": "piecewise-linear", "index": "heat", "knots": [20, 40]}},
}
TRUTH = np.array([-0.004, 0.002, -2e-6])
"""Of heat-and-rain."""


def panel(units: int = 12, years: int = 15, seed: int = 1, noise: float = 0.05) -> pd.DataFrame:
    """Return an invented panel with its indices: log yields are exactly of the model."""
    random = np.random.default_rng(seed)
    unit = np.repeat(np.arange(units), years)
    year = np.tile(np.arange(2000, 2000 + years), units)
    heat = random.gamma(3.0, 10.0, unit.size)
    rain = random.normal(400, 90, unit.size) + 15 * (unit % 4)
    fertiliser = np.exp(random.normal(4, 0.3, unit.size))
    level = random.normal(1.5, 0.2, units)[unit]
    log_yield = (
        level
        + 0.01 * (year - 2000)
        + np.column_stack([heat, rain, rain**2]) @ TRUTH
        + 0.1 * np.log(fertiliser)
        + noise * random.standard_normal(unit.size)
    )
    return pd.DataFrame(
        {
            "unit": [f"unit {number}" for number in unit],
            "year": year,
            "yield": np.exp(log_yield),
            "area": random.uniform(50, 150, unit.size),
            "fertiliser": fertiliser,
            "block": unit // 3,
            "heat": heat,
            "rain": rain,
        }
    )


def document(**changes: Any) -> dict[str, Any]:
    """Return a fit document, with other keys."""
    return {
        "crop": "maize",
        "system": "rainfed",
        "panel": "panel.csv",
        "weather": {"table": "indices.csv", "indices": INDICES},
        "specifications": SPECIFICATIONS,
        "citation": "invented",
        "output": "found",
    } | changes


def write(folder: Path, frame: pd.DataFrame, **changes: Any) -> Path:
    """Write panel, index table and fit document; return the document."""
    indices = list((changes.get("weather") or document()["weather"]).get("indices", {}))
    frame.drop(columns=indices).to_csv(folder / "panel.csv", index=False)
    frame[["unit", "year", *indices]].to_csv(folder / "indices.csv", index=False)
    path = folder / "fit.yaml"
    path.write_text(yaml.safe_dump(document(**changes), sort_keys=False), encoding="utf-8")
    return path


def load(path: Path) -> tuple[Fit, Sample]:
    """Return a fit document and the sample of its panel and index table."""
    fit = load_fit(path)
    terms = [term for given in fit.specifications.values() for term in given.values()]
    file = path.parent / fit.panel
    assert fit.weather.table is not None
    weather = table_weather(path.parent / fit.weather.table, fit, terms)
    return fit, make_sample(read_panel(file, fit), weather, fit, file)


def estimated(path: Path, name: str) -> Estimate:
    """Return the estimate of one specification, inputs held."""
    fit, sample = load(path)
    return estimate(fit, name, sample, bool(fit.inputs))
