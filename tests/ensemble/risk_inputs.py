"""Invented regional totals: what the regions stage would leave for a small ensemble."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.assessment.simulations import Simulation
from stook.ensemble.horizons import horizons_of, level_windows
from stook.ensemble.risk import risk_tables
from stook.ensemble.series import SystemSeries
from stook.ensemble.summary import RunSummary, Settings, summarise

REGIONS = ("Saltmere", "Brackwater", "Thornfold")
YEARS = np.arange(1981, 2101)
BASELINE = (1991, 2020)


def settings(**changed: Any) -> Settings:
    given = {
        "baseline": BASELINE,
        "leads": np.arange(2025, 2101, 5),
        "steps": ((2021, 2040), (2041, 2060), (2061, 2080), (2081, 2100)),
        "shortfall": 25.0,
        "mean_years": 10,
    }
    return Settings(**(given | changed))


def simulation(model: str = "ALDER-ESM", scenario: str = "high", realisation: str = "r1") -> Any:
    return Simulation(model, scenario, realisation, {})


def series(production: np.ndarray, years: np.ndarray = YEARS, area: float = 1000.0) -> SystemSeries:
    """Return the totals of (draw, region, year) production."""
    count = production.shape[1]
    regions = [*REGIONS[:count], *(f"District {number}" for number in range(4, count + 1))]
    areas = np.full(len(regions), area)
    flags = np.zeros(production.shape[1:])
    return SystemSeries(regions, years, production, areas, np.zeros(len(regions)), flags)


def summary(
    production: np.ndarray,
    run: Simulation | None = None,
    windows: Mapping[str, tuple[int, int]] | None = None,
    **changed: Any,
) -> RunSummary:
    given = series(production)
    return summarise(
        given, run or simulation(), "maize", "rainfed", windows or {}, settings(**changed)
    )


def write_world(
    folder: Path,
    models: Sequence[str] = ("ALDER-ESM", "ROWAN-CM", "SEDGE-LR"),
    scenarios: Sequence[str] = ("moderate", "high"),
    draws: int = 5,
    subset: Sequence[str] = (),
    extra: Mapping[str, Any] | None = None,
) -> Assessment:
    """Write an assessment and the totals of two crops; a subset has the same numbers of its own."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "climate").mkdir(exist_ok=True)
    layer = {"area": 1.0, "calendar": {"planting": 100, "maturity": 200}, "baseline_yield": 5.0}
    systems = {
        "maize": ["rainfed", "irrigated"],
        "barley": ["rainfed"],
    }
    content: dict[str, Any] = {
        "title": "Invented",
        "name": "hollin",
        "seed": 7,
        "grid": {
            "lat": {"first": 44, "last": 46, "step": 1},
            "lon": {"first": 5, "last": 8, "step": 1},
        },
        "periods": {
            "baseline": list(BASELINE),
            "horizons": {"2041-2070": [2041, 2070], "2071-2100": [2071, 2100]},
        },
        "reference": {"name": "Hollin grid", "files": {"pr": ["climate/observed.nc"]}},
        "simulations": {"pattern": "climate/{variable}_{model}_{scenario}_{realisation}.nc"},
        "crops": {
            crop: {"systems": {one: {**layer, "response": "none.yaml"} for one in names}}
            for crop, names in systems.items()
        },
        "regions": {"file": "none.gpkg"},
    }
    for key, value in (extra or {}).items():
        content[key] = value
    (folder / "climate" / "observed.nc").touch()
    for model in models:
        for scenario in scenarios:
            (folder / "climate" / f"pr_{model}_{scenario}_r1.nc").touch()
    (folder / "assessment.yaml").write_text(yaml.safe_dump(content), encoding="utf-8")
    assessment = load_assessment(folder / "assessment.yaml", regions=list(subset))
    layout = Layout.of(assessment)
    names = ["observed", *(f"{m}_{s}_r1" for m in models for s in scenarios)]
    for number, name in enumerate(names):
        for crop, own in systems.items():
            path = layout.totals(name, crop)
            path.parent.mkdir(parents=True, exist_ok=True)
            table = _totals(number, name, crop, own, draws)
            chosen = [*subset] or [*REGIONS, "outside all regions"]
            table[table["region"].isin(chosen)].to_parquet(path, index=False)
    return assessment


def _totals(number: int, name: str, crop: str, systems: Sequence[str], draws: int) -> pd.DataFrame:
    random = np.random.default_rng([number, len(crop)])
    years = np.arange(1991, 2021) if name == "observed" else YEARS
    strength = {"observed": 0.1, "moderate": 0.15, "high": 0.35}[
        name if name == "observed" else name.split("_")[1]
    ] * (0.8 + 0.2 * (number % 3))
    slope = np.random.default_rng(len(crop)).normal(1, 0.2, draws + 1)
    slope[0] = 1.0
    parts = []
    both = [*systems, "all"] if len(systems) > 1 else list(systems)
    whole = 0.0
    for system in both:
        if system != "all":
            warm = np.clip((years - 2000) / 100, 0, None)
            noise = random.normal(0, 0.12, (1, 4, years.size))
            shift = 1 - strength * slope[:, None, None] * warm + noise
            made = 5000.0 * np.arange(1, 5)[None, :, None] * np.clip(shift, 0.05, None)
            whole = whole + made
        production = whole if system == "all" else made
        for draw in range(draws + 1):
            for place, region in enumerate([*REGIONS, "outside all regions"]):
                parts.append(
                    pd.DataFrame(
                        {
                            "region": region,
                            "system": system,
                            "year": years,
                            "draw": draw,
                            "production_t": production[draw, place],
                            "area_ha": 1000.0 * (place + 1) * (2 if system == "all" else 1),
                            "extrapolated_share": 0.1,
                            "missing_area_ha": 0.0,
                        }
                    )
                )
    return pd.concat(parts, ignore_index=True)


def tables_of(assessment: Assessment) -> dict[str, pd.DataFrame]:
    """Return the tables of risk of an invented world, without files."""
    from stook.assessment.simulations import all_simulations

    runs = all_simulations(assessment)
    windows = level_windows(assessment, [run for run in runs if run.name != "observed"])
    assert horizons_of(assessment, windows, runs[-1].name)
    return risk_tables(assessment, runs, windows)
