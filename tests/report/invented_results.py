"""A results folder as the stages before the report leave it, filled with invented numbers.

Only shapes, names and units matter here; no stage of the program is run. The world is the
invented federation of Hollin.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import xarray as xr
from invented_world import CHANGES, INDICES, MEMBERS, TRENDS, YEARLY, World, write_inputs
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment, load_resolved, save_resolved
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.constants import OBSERVED, OUTSIDE
from stook.grids.analysis import AnalysisGrid, analysis_grid, tile_count
from stook.trend.field import COLUMNS as FIELD_COLUMNS
from stook.trend.field import EVERYWHERE


def invent(folder: Path, world: World | None = None) -> Assessment:
    """Write inputs and results of an invented assessment; return the assessment."""
    world = world or World()
    folder.mkdir(parents=True, exist_ok=True)
    write_inputs(folder, world)
    loaded = load_assessment(folder / "assessment.yaml", regions=list(world.subset))
    save_resolved(loaded)
    assessment = load_resolved(Layout.of(loaded).root)
    maker = _Maker(assessment, world)
    maker.grids()
    maker.tables()
    maker.trends()
    check = [
        {
            "severity": "warning",
            "where": "climate/pr_ROWAN-CM_high_r1.nc",
            "message": "3 values of pr are above 500 mm day-1 <invented>",
        }
    ]
    (Layout.of(assessment).root / "check.json").write_text(json.dumps(check), encoding="utf-8")
    return assessment


class _Maker:
    """Writes the result files of one invented assessment."""

    def __init__(self, assessment: Assessment, world: World) -> None:
        self.assessment, self.world = assessment, world
        self.layout = Layout.of(assessment)
        self.random = np.random.default_rng(11)
        self.grid: AnalysisGrid = analysis_grid(assessment)
        self.years = np.arange(1991, 2101)
        self.polygons = gpd.read_file(assessment.path("regions.gpkg"))
        lon, lat = np.meshgrid(self.grid.lon, self.grid.lat)
        self.member = np.full(self.grid.shape, -1, dtype=np.int16)
        for number, name in enumerate(world.names):
            if name in world.shown:
                bounds = self.polygons.geometry.iloc[number].bounds
                inside = (lon > bounds[0]) & (lon < bounds[2])
                self.member[inside & (lat > bounds[1]) & (lat < bounds[3])] = number
        self.crop_mask = (self.member >= 0) & (self.random.random(self.grid.shape) > 0.15)

    def years_of(self, simulation: str) -> np.ndarray:
        return np.arange(1991, 2021) if simulation == OBSERVED else self.years

    def warming(self, simulation: str) -> np.ndarray:
        years = self.years_of(simulation)
        if simulation == OBSERVED:
            return 0.02 * (years - 1991)
        strength = 1.0 if "high" in simulation else 0.5
        model = 0.7 + 0.3 * self.world.models.index(simulation.split("_")[0])
        return strength * model * np.clip((years - 2005) / 95, 0, None)

    def job(self, rule: str) -> Job:
        return Job(self.assessment, rule, [])

    # grids
    def grids(self) -> None:
        coordinates = self.grid.coordinates()
        systems = self.assessment.systems
        shape = (len(systems), *self.grid.shape)
        area = np.where(self.crop_mask, 1000 + 4000 * self.random.random(shape), 0.0)
        self.area = area
        layers = xr.Dataset(
            {
                "area": (("crop_system", "lat", "lon"), area, {"units": "ha"}),
                "reason": (("crop_system", "lat", "lon"), (area == 0).astype(np.int8)),
                "main_region": (("lat", "lon"), self.member),
            },
            coordinates | {"crop_system": [f"{c}_{s}" for c, s in systems]},
        )
        with self.job("prepare_layers") as job:
            job.netcdf(layers, self.layout.layers, "layers")
        for number, (crop, system) in enumerate(systems):
            for simulation in self.world.simulations:
                self._season(simulation, crop, system, number)
            if self.world.horizons:
                for scenario in self.world.scenarios if self.world.models else ():
                    self._pixels(crop, system, scenario)

    def _season(self, simulation: str, crop: str, system: str, number: int) -> None:
        years = self.years_of(simulation)
        valid = self.area[number] > 0
        indices, coordinates = {}, self.grid.coordinates()
        for name, (unit, base, change) in INDICES.items():
            path = base + change * self.warming(simulation)
            noise = self.random.normal(0, 0.1 * base, (len(years), *self.grid.shape))
            values = np.where(valid, path[:, None, None] + noise, np.nan)
            attributes = {"units": unit, "long_name": name.replace("_", " ")}
            indices[name] = (("year", "lat", "lon"), values, attributes)
        reason = (("lat", "lon"), (~valid).astype(np.int8))
        whole = xr.Dataset(indices | {"reason": reason}, coordinates | {"year": years})
        tiles = tile_count(self.assessment)
        for tile in range(tiles):
            part = whole.isel(lat=self.grid.rows(tile, tiles))
            with self.job("season_tile") as job:
                path = self.layout.season(simulation, crop, system, tile)
                job.netcdf(part, path, "season")
        effects = {
            "effect_heat": (
                ("year", "lat", "lon"),
                np.where(valid, -0.006 * (indices["heat_degree_days"][1] - 30), np.nan),
            ),
            "effect_warmth": (
                ("year", "lat", "lon"),
                np.where(valid, 0.0002 * (indices["growing_degree_days"][1] - 1500), np.nan),
            ),
        }
        yields = xr.Dataset(effects | {"reason": reason}, coordinates | {"year": years})
        with self.job("yields_grid") as job:
            job.netcdf(yields, self.layout.yields(simulation, crop, system), "yields")

    def _pixels(self, crop: str, system: str, scenario: str) -> None:
        horizons = list(self.world.horizons)
        shape = (len(horizons), *self.grid.shape)
        slope = np.linspace(-22, 12, shape[1])[:, None] * (1.4 if scenario == "high" else 0.7)
        middle = np.where(self.crop_mask, slope + self.random.normal(0, 3, shape), np.nan)
        dims = ("horizon", "lat", "lon")
        names = {"mean": 0.3, "p05": -14, "p17": -6, "p50": 0, "p83": 6, "p95": 14}
        data: dict[str, Any] = {
            f"change_{name}": (dims, middle + offset, _named(f"change, {name}", "percent"))
            for name, offset in names.items()
        }
        agreement = np.where(np.isnan(middle), np.nan, np.where(abs(middle) > 5, 1.0, 2 / 3))
        data["agreement"] = (dims, agreement, _named("share of models", "1"))
        models = np.where(np.isnan(middle), 0, len(self.world.models)).astype(np.int16)
        data["models"] = (dims, models, _named("models", "1"))
        coordinates = self.grid.coordinates() | {"horizon": horizons}
        path = self.layout.ensemble_pixels(crop, system, scenario)
        with self.job("ensemble_pixels") as job:
            job.netcdf(xr.Dataset(data, coordinates), path, "pixels")

    # tables
    def systems_of(self, crop: str) -> list[str]:
        systems = list(self.world.crops[crop])
        return [*systems, "all"] if len(systems) > 1 else systems

    def tables(self) -> None:
        rows = [] if self.world.subset else [OUTSIDE]
        changes, members, yearly = [], [], []
        for crop in self.world.crops:
            totals = {simulation: [] for simulation in self.world.simulations}
            for system in self.systems_of(crop):
                for number, region in enumerate([*self.world.shown, *rows]):
                    series = self._series(crop, system, region, number, totals)
                    yearly += self._yearly(crop, system, region, series)
                    found = self._changes(crop, system, region, series)
                    changes += found[0]
                    members += found[1]
            for simulation, parts in totals.items():
                with self.job("regions_totals") as job:
                    job.table(pd.concat(parts), self.layout.totals(simulation, crop))
        with self.job("ensemble_changes") as job:
            for given, path, columns in (
                (changes, self.layout.changes, CHANGES),
                (members, self.layout.members, MEMBERS),
                (yearly, self.layout.yearly, YEARLY),
            ):
                job.table(pd.DataFrame(given, columns=columns), path)
        if self.world.models and self.world.observed:
            self._evaluation()

    def _series(
        self, crop: str, system: str, region: str, number: int, totals: dict[str, list[Any]]
    ) -> dict[str, np.ndarray]:
        series = {}
        for simulation in self.world.simulations:
            years = self.years_of(simulation)
            fall = (0.32 - 0.05 * (number % 7)) * self.warming(simulation)
            noise = self.random.normal(0, 0.06, len(years))
            series[simulation] = 5.0 * (1 - fall + noise)
            area = 40000.0 if region != OUTSIDE else 500.0
            frame = pd.DataFrame(
                {
                    "region": region,
                    "system": system,
                    "year": years,
                    "draw": 0,
                    "production_t": series[simulation] * area,
                    "area_ha": area,
                    "extrapolated_share": np.clip(self.warming(simulation) * 0.2, 0, 1),
                    "missing_area_ha": 120.0 if number == 1 else 0.0,
                }
            )
            again = frame.assign(draw=1, production_t=frame["production_t"] * 1.01)
            totals[simulation] += [frame, again]
        return series

    def _yearly(
        self, crop: str, system: str, region: str, series: dict[str, np.ndarray]
    ) -> list[dict[str, Any]]:
        result = []
        for scenario in [OBSERVED, *self.world.scenarios]:
            chosen = {k: v for k, v in series.items() if scenario in k.split("_")}
            if not chosen:
                continue
            values = np.array(list(chosen.values()))
            spread = 0.0 if scenario == OBSERVED else 0.25
            for column, year in enumerate(self.years_of(next(iter(chosen)))):
                here = values[:, column]
                row = {
                    "crop": crop,
                    "system": system,
                    "region": region,
                    "scenario": scenario,
                    "year": year,
                    "yield_mean": here.mean(),
                    "production_mean_t": here.mean() * 40000,
                }
                for percentile in (5, 17, 50, 83, 95):
                    offset = spread * (percentile - 50) / 45
                    row[f"yield_p{percentile:02d}"] = np.percentile(here, percentile) + offset
                result.append(row)
        return result

    def _changes(
        self, crop: str, system: str, region: str, series: dict[str, np.ndarray]
    ) -> tuple[list[dict[str, Any]], list[dict[str, Any]]]:
        changes: list[dict[str, Any]] = []
        members: list[dict[str, Any]] = []
        names = {"crop": crop, "system": system, "region": region}
        for scenario in self.world.scenarios if self.world.models else ():
            for horizon, (first, last) in self.world.horizons.items():
                found = []
                for model in self.world.models:
                    simulation = f"{model}_{scenario}_r1"
                    values = pd.Series(series[simulation], self.years)
                    ratio = values.loc[first:last].mean() / values.loc[1991:2020].mean()
                    draws = 100 * (ratio - 1) + self.random.normal(0, 3, 21)
                    found.append(draws)
                    for draw, change in enumerate(draws):
                        members.append(
                            names
                            | {
                                "simulation": simulation,
                                "model": model,
                                "scenario": scenario,
                                "realisation": "r1",
                                "horizon": horizon,
                                "draw": draw,
                                "weight": 1 / len(self.world.models),
                                "change": change,
                            }
                        )
                changes.append(
                    names
                    | {"scenario": scenario, "horizon": horizon}
                    | _summary(np.array(found))
                    | {"area_ha": 40000.0 if region != OUTSIDE else 500.0}
                )
        return changes, members

    def _evaluation(self) -> None:
        rows = []
        for simulation in self.world.simulations:
            if simulation == OBSERVED:
                continue
            for variable, unit in (("pr", "mm day-1"), ("tasmax", "degC"), ("tasmin", "degC")):
                for season in ("all", "DJF", "MAM", "JJA", "SON"):
                    for statistic in ("mean_bias", "p05_bias", "p95_bias", "cdf_distance"):
                        size = self.random.normal(0, 1.5)
                        for stage, factor in (("raw", 1.0), ("corrected", 0.05)):
                            value = abs(size) / 5 if statistic == "cdf_distance" else size
                            rows.append(
                                {
                                    "simulation": simulation,
                                    "variable": variable,
                                    "season": season,
                                    "stage": stage,
                                    "statistic": statistic,
                                    "unit": "1" if statistic == "cdf_distance" else unit,
                                    "mean": value * factor,
                                    "p05": value * factor - 0.2,
                                    "p95": value * factor + 0.2,
                                }
                            )
        with self.job("correct_summary") as job:
            job.table(pd.DataFrame(rows), self.layout.evaluation_table)

    # trend
    def trends(self) -> None:
        periods = list(self.world.trend_periods) or ["all"]
        for simulation in self.world.simulations:
            rows = []
            for crop in self.world.crops:
                for system in self.systems_of(crop):
                    for region in self.world.shown:
                        for period in periods if self.world.trend_rows else []:
                            p = float(self.random.uniform(0.001, 1))
                            rows.append([crop, system, region, period, 30, -0.12, -2.4, -0.11])
                            rows[-1] += [float(self.random.normal(0.1, 0.2)), p, min(1.0, p * 0.7)]
                            rows[-1] += [2006.0, -0.05, -0.2, 0.31]
            with self.job("trend_regions") as job:
                job.table(pd.DataFrame(rows, columns=TRENDS), self.layout.trend_regions(simulation))
            for crop, system in self.assessment.systems:
                self._distribution(simulation, crop, system, periods)
                self._field(simulation, crop, system, periods)
                self._trend_pixels(simulation, crop, system, periods)

    def _distribution(self, simulation: str, crop: str, system: str, periods: list[str]) -> None:
        rows = []
        for quantity in [*INDICES, "yield"]:
            scale = 0.05 if quantity == "yield" else INDICES[quantity][1] * 0.02
            edges = np.linspace(-5 * scale, 5 * scale, 41)
            middle = (edges[1:] + edges[:-1]) / 2
            for period in periods if self.world.trend_rows else []:
                for kind, shift, width in (("observed", -1.2, 0.8), ("randomised", 0, 1.1)):
                    density = np.exp(-0.5 * ((middle / scale - shift) / width) ** 2)
                    for low, high, share in zip(
                        edges[:-1], edges[1:], density / density.sum(), strict=True
                    ):
                        rows.append([quantity, period, kind, low, high, share])
        columns = ["quantity", "period", "kind", "bin_low", "bin_high", "area_share"]
        with self.job("trend_pixels") as job:
            path = self.layout.trend_distribution(simulation, crop, system)
            job.table(pd.DataFrame(rows, columns=columns), path)

    def _field(self, simulation: str, crop: str, system: str, periods: list[str]) -> None:
        rows = [
            [quantity, period, region, 60, 1e5, -0.1, 0.2, 0.03, 0.5, 0.05, 0.11, 0.002]
            for quantity in [*INDICES, "yield"]
            for period in (periods if self.world.trend_rows else [])
            for region in [*self.world.shown, EVERYWHERE]
        ]
        with self.job("trend_pixels") as job:
            path = self.layout.trend_field(simulation, crop, system)
            job.table(pd.DataFrame(rows, columns=FIELD_COLUMNS), path)

    def _trend_pixels(self, simulation: str, crop: str, system: str, periods: list[str]) -> None:
        shape = (len(periods), *self.grid.shape)
        dims, data = ("period", "lat", "lon"), {}
        for quantity in [*INDICES, "yield"]:
            values = np.where(self.crop_mask, self.random.normal(-0.1, 0.05, shape), np.nan)
            data[f"slope_{quantity}"] = (dims, values, _named("slope", "1"))
            data[f"p_ar1_{quantity}"] = (dims, 0 * values + 0.04, _named("p-value", "1"))
            significant = np.where(self.crop_mask, values < -0.1, -1).astype(np.int8)
            data[f"significant_{quantity}"] = (dims, significant, _named("significant", "1"))
        coordinates = self.grid.coordinates() | {"period": periods}
        with self.job("trend_pixels") as job:
            path = self.layout.trend_pixels(simulation, crop, system)
            job.netcdf(xr.Dataset(data, coordinates), path, "trend")


def _named(name: str, unit: str) -> dict[str, str]:
    return {"long_name": name, "units": unit}


def _summary(draws: np.ndarray) -> dict[str, Any]:
    """Summarise changes of shape (models, draws) in the columns of the changes table."""
    central = draws[:, 0]
    share = float((draws < 0).mean())
    of = "decrease" if share > 0.5 else "increase"
    certain = max(share, 1 - share)
    words = ((0.99, "virtually certain"), (0.9, "very likely"), (0.66, "likely"))
    word = next((word for cut, word in words if certain >= cut), "more likely than not")
    sign = np.sign(np.median(draws))
    row: dict[str, Any] = {
        "members": draws.size,
        "simulations": len(draws),
        "models": len(draws),
        "change_mean": draws.mean(),
        "central_mean": central.mean(),
        "share_decrease": share,
        "agreement": float((np.sign(draws.mean(axis=1)) == sign).mean()),
        "likelihood": word,
        "likelihood_of": of,
        "baseline_production_t": 200000.0,
        "horizon_production_t": 200000.0 * (1 + central.mean() / 100),
        "extrapolated_share": 0.08,
    }
    for percentile in (5, 17, 50, 83, 95):
        row[f"change_p{percentile:02d}"] = np.percentile(draws, percentile)
        row[f"central_p{percentile:02d}"] = np.percentile(central, percentile)
    return row
