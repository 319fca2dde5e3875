"""The invented world the report is tested on: its assessment file, polygons and responses."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import yaml
from shapely.geometry import box
from stook.constants import OBSERVED

NAMES = ("Upper Hollin", "Saltmere", "Brackwater", "Thornfold", "Eastmoor", "Lowsend")
INDICES = {
    "growing_degree_days": ("degC day", 1500.0, 280.0),
    "heat_degree_days": ("degC day", 30.0, 45.0),
    "rain": ("mm", 420.0, -25.0),
}


@dataclass(frozen=True)
class World:
    """What to invent."""

    models: tuple[str, ...] = ("ALDER-ESM", "ROWAN-CM", "SEDGE-LR")
    scenarios: tuple[str, ...] = ("moderate", "high")
    crops: dict[str, tuple[str, ...]] = field(
        default_factory=lambda: {"maize": ("rainfed", "irrigated"), "barley": ("rainfed",)}
    )
    horizons: dict[str, tuple[int, int]] = field(
        default_factory=lambda: {"2041-2070": (2041, 2070), "2071-2100": (2071, 2100)}
    )
    trend_periods: dict[str, tuple[int, int]] = field(default_factory=dict)
    regions: int = 6
    subset: tuple[str, ...] = ()
    trend_rows: bool = True
    observed: bool = True

    @property
    def names(self) -> list[str]:
        more = [f"District {number}" for number in range(7, self.regions + 1)]
        return [*NAMES[: self.regions], *more]

    @property
    def shown(self) -> list[str]:
        return [name for name in self.names if not self.subset or name in self.subset]

    @property
    def runs(self) -> list[tuple[str, str]]:
        return [(model, scenario) for model in self.models for scenario in self.scenarios]

    @property
    def simulations(self) -> list[str]:
        series = [OBSERVED] if self.observed else []
        return [*series, *(f"{model}_{scenario}_r1" for model, scenario in self.runs)]


def write_inputs(folder: Path, world: World) -> None:
    columns = int(np.ceil(world.regions / 2))
    cells = [(n % columns, n // columns) for n in range(world.regions)]
    width, height = 9.0 / columns, 2.5
    polygons = [
        box(5 + x * width, 44 + y * height, 5 + (x + 1) * width, 44 + (y + 1) * height)
        for x, y in cells
    ]
    gpd.GeoDataFrame({"name": world.names}, geometry=polygons, crs=4326).to_file(
        folder / "regions.gpkg", driver="GPKG"
    )
    content: dict[str, Any] = {
        "title": "Crops of Hollin under a warmer climate (invented)",
        "name": "hollin",
        "seed": 7,
        "grid": {
            "lat": {"first": 43.75, "last": 49.25, "step": 0.5},
            "lon": {"first": 4.75, "last": 14.25, "step": 0.5},
            "tiles": 2,
        },
        "periods": {"baseline": [1991, 2020], "horizons": dict(world.horizons)},
        "crops": {
            crop: {"systems": {system: _system(folder, crop, system) for system in systems}}
            for crop, systems in world.crops.items()
        },
        "regions": {"file": "regions.gpkg"},
        "trend": {"periods": dict(world.trend_periods)},
        "ensemble": {"draws": 20},
    }
    climate = folder / "climate"
    climate.mkdir(exist_ok=True)
    if world.observed:
        (climate / "observed.nc").touch()
        content["reference"] = {"name": "Hollin grid", "files": {"pr": ["climate/observed.nc"]}}
    else:
        content["correct"] = {"all": {"method": "none"}}
    if world.runs:
        for model, scenario in world.runs:
            (climate / f"pr_{model}_{scenario}_r1.nc").touch()
        pattern = "climate/{variable}_{model}_{scenario}_{realisation}.nc"
        content["simulations"] = {"pattern": pattern}
    text = yaml.safe_dump(_plain(content), sort_keys=False)
    (folder / "assessment.yaml").write_text(text, encoding="utf-8")


def _plain(content: Any) -> Any:
    return json.loads(json.dumps(content))


def _system(folder: Path, crop: str, system: str) -> dict[str, Any]:
    response = {
        "crop": crop,
        "system": system,
        "link": "log",
        "indices": {
            "growing_degree_days": {"measure": "degree-days", "base": 8, "cap": 29},
            "heat_degree_days": {"measure": "degree-days", "base": 29},
            "rain": {"measure": "total"},
        },
        "terms": {
            "warmth": {"form": "linear", "index": "growing_degree_days", "coefficient": 0.0002},
            "heat": {"form": "linear", "index": "heat_degree_days", "coefficient": -0.006},
            "water": {"form": "quadratic", "index": "rain", "coefficients": [0.001, -1e-6]},
        },
        "standard_errors": [0.0001, 0.001, 0.0003, 2e-7],
        "estimation_range": {
            "growing_degree_days": [900, 2100],
            "heat_degree_days": [0, 120],
            "rain": [100, 900],
        },
        "citation": f"Invented response of {crop} ({system}) & its <terms>",
        "note": "All coefficients are invented for the demonstration.",
    }
    path = folder / f"{crop}_{system}.yaml"
    path.write_text(yaml.safe_dump(response, sort_keys=False), encoding="utf-8")
    return {
        "area": 1000.0,
        "calendar": {"planting": 110, "maturity": 270},
        "baseline_yield": 5.0,
        "response": path.name,
    }


SPREAD = [f"p{number:02d}" for number in (5, 17, 50, 83, 95)]
CHANGES = [
    *("crop", "system", "region", "scenario", "horizon", "members", "simulations", "models"),
    "change_mean",
    *(f"change_{name}" for name in SPREAD),
    "central_mean",
    *(f"central_{name}" for name in SPREAD),
    *("share_decrease", "agreement", "likelihood", "likelihood_of", "baseline_production_t"),
    *("horizon_production_t", "area_ha", "extrapolated_share"),
]
MEMBERS = [
    *("crop", "system", "region", "simulation", "model", "scenario", "realisation", "horizon"),
    *("draw", "weight", "change"),
]
YEARLY = [
    *("crop", "system", "region", "scenario", "year"),
    *(f"yield_{name}" for name in SPREAD),
    *("yield_mean", "production_mean_t"),
]
TRENDS = [
    *("crop", "system", "region", "period", "years", "slope", "slope_percent", "theil_sen"),
    *("lag1", "p_ar1", "p_shuffle", "break_year", "slope_before", "slope_after", "p_break"),
]
