"""The true change of regional yields: unbiased weather through the true response.

Two truths. `nature_changes` is the expected change under nature's own climate change, which the
models' changes scatter around. `model_changes` is the change in one model's world without its
bias: the very weather of its files, on the analysis grid. Neither uses the program under test.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pandas as pd
import shapely
from pydantic import TypeAdapter
from stook.season.definition import SEASON, IndexDefinition

from demo_grids.climate_files import Source, scenarios, simulation_source
from demo_grids.crop_files import area_layer, hectares, positions
from demo_grids.domain import Domain
from demo_grids.geography import LAYERS, CropLayer, baseline_yield, districts, season_days
from demo_grids.indices import phase_days, season_index
from demo_grids.indices import season_days as days_of_season
from demo_grids.models import TimeAxis
from demo_grids.responses import TRUE
from demo_grids.truth import NATURE_NAME
from demo_grids.weather import NO_BIAS, knots, latent_weather

SAMPLES = 20
_DEFINITION: TypeAdapter[IndexDefinition] = TypeAdapter(IndexDefinition)
Yields = dict[str, np.ndarray]
"""Exponential (log link) or level of the predictor by crop layer, shape (year, lat, lon)."""


def nature_changes(world: Domain, seed: int, replicates: int = 10) -> pd.DataFrame:
    """Return the expected change of regional yields under nature's climate change.

    Parameters
    ----------
    world
        The world.
    seed
        Seed of the weather that the expectation is taken over.
    replicates
        Repetitions of every window; the sampling error falls with their square root.

    Returns
    -------
    DataFrame
        crop, system, region, model ("nature"), scenario, horizon, change (percent).
    """
    tables = []
    for scenario in dict.fromkeys(name for given in world.members.values() for name in given):
        base = _nature_mean(world, seed, scenario, world.baseline, replicates)
        for horizon, years in world.horizons.items():
            later = _nature_mean(world, seed, scenario, years, replicates)
            table = regional_changes(world, later, base)
            tables.append(table.assign(model=NATURE_NAME, scenario=scenario, horizon=horizon))
    return pd.concat(tables, ignore_index=True)


def model_changes(world: Domain, seed: int) -> pd.DataFrame:
    """Return the change of regional yields in every simulation's own world without its bias.

    Returns
    -------
    DataFrame
        crop, system, region, model, scenario, horizon, change (percent).
    """
    tables = []
    for model, scenario, _ in scenarios(world):
        source = unbiased(simulation_source(world, seed, model, scenario))
        yields = true_yields(source)
        base = _window_mean(yields, world.simulated[0], world.baseline)
        for horizon, years in world.horizons.items():
            later = _window_mean(yields, world.simulated[0], years)
            table = regional_changes(world, later, base)
            tables.append(table.assign(model=model.name, scenario=scenario, horizon=horizon))
    return pd.concat(tables, ignore_index=True)


def unbiased(source: Source) -> Source:
    """Return the same climate and weather without bias, on the analysis grid."""
    return replace(source, lat=source.domain.lat, lon=source.domain.lon, bias=NO_BIAS)


def true_yields(source: Source) -> Yields:
    """Return the true yield factor of every crop layer, year of harvest and pixel.

    Parameters
    ----------
    source
        A climate without bias on the analysis grid.

    Returns
    -------
    dict
        By layer, shape (year, lat, lon); missing where a season began before the first year.
    """
    daily = source.daily(slice(0, len(source.axis.day)))
    return {layer.name: layer_yields(source, layer, daily) for layer in LAYERS}


def layer_yields(
    source: Source, layer: CropLayer, daily: dict[str, np.ndarray] | None = None
) -> np.ndarray:
    """Return the true yield factor of one layer, shape (year, lat, lon); see `true_yields`."""
    if daily is None:
        daily = source.daily(slice(0, len(source.axis.day)))
    shape = (-1, source.domain.rows, source.domain.columns)
    return _yields(source.domain, layer, source.axis, daily).reshape(shape)


def regional_changes(world: Domain, later: Yields, base: Yields) -> pd.DataFrame:
    """Return the change of regional yields, percent, from mean yield factors (lat, lon).

    Districts without any of a crop have no row; systems of a crop are combined as ``all`` where
    there are several.
    """
    rows = []
    coverage = region_coverage(world)
    for crop in dict.fromkeys(layer.crop for layer in LAYERS):
        before: dict[str, float] = {}
        after: dict[str, float] = {}
        layers = [layer for layer in LAYERS if layer.crop == crop]
        for layer in layers:
            ratio = later[layer.name] / base[layer.name]
            production = pixel_area(world, layer) * _pixel_yield(world, layer)
            for region, share in coverage.items():
                weight = production * share
                if weight.sum() <= 0:
                    continue
                before[region] = before.get(region, 0.0) + weight.sum()
                after[region] = after.get(region, 0.0) + (weight * ratio).sum()
                change = 100 * ((weight * ratio).sum() / weight.sum() - 1)
                rows.append((crop, layer.system, region, change))
        if len(layers) > 1:
            rows += [
                (crop, "all", region, 100 * (after[region] / before[region] - 1))
                for region in before
            ]
    return pd.DataFrame(rows, columns=["crop", "system", "region", "change"])


def region_coverage(world: Domain) -> dict[str, np.ndarray]:
    """Return the share of every pixel inside each district, by sampling, shape (lat, lon)."""
    offsets = (np.arange(SAMPLES) + 0.5) / SAMPLES - 0.5
    lat = (world.lat[:, None] + world.step * offsets).ravel()
    lon = (world.lon[:, None] + world.step * offsets).ravel()
    x, y = np.meshgrid(lon, lat)
    shape = (world.rows, SAMPLES, world.columns, SAMPLES)
    frame = districts(world)
    return {
        name: shapely.contains_xy(polygon, x, y).reshape(shape).mean(axis=(1, 3))
        for name, polygon in zip(frame["name"], frame.geometry, strict=True)
    }


def pixel_area(world: Domain, layer: CropLayer) -> np.ndarray:
    """Return the harvested area of every pixel, ha, shape (lat, lon), from the area layer."""
    lat, lon, share = area_layer(world, layer)
    step = world.step * layer.area_step
    fine_lat, fine_lon = world.axes(world.step / SAMPLES)
    row = np.clip(((fine_lat - lat[0]) / step + 0.5).astype(int), 0, len(lat) - 1)
    column = np.clip(((fine_lon - lon[0]) / step + 0.5).astype(int), 0, len(lon) - 1)
    fine = share[row[:, None], column] * hectares(fine_lat, fine_lon, world.step / SAMPLES)
    return fine.reshape(world.rows, SAMPLES, world.columns, SAMPLES).sum(axis=(1, 3))


def _pixel_yield(world: Domain, layer: CropLayer) -> np.ndarray:
    return baseline_yield(layer.name, *positions(world, world.lat, world.lon))


def _nature_mean(
    world: Domain, seed: int, scenario: str, years: tuple[int, int], replicates: int
) -> Yields:
    """Return the mean yield factor over the years of a window, over repeated weather."""
    axis = TimeAxis.of((years[0] - 1, years[1]), "noleap")
    sums: Yields = {}
    for number in range(replicates):
        stream = f"{NATURE_NAME} {scenario} {years[0]} {number}"
        latent = latent_weather(seed, [(stream, len(axis.day))], len(knots(world)))
        source = Source(world, world.lat, world.lon, axis, latent, scenario)
        yields = true_yields(source)
        for name, mean in _window_mean(yields, axis.years[0], years).items():
            sums[name] = sums.get(name, 0.0) + mean / replicates
    return sums


def _window_mean(yields: Yields, first_year: int, years: tuple[int, int]) -> Yields:
    part = slice(years[0] - first_year, years[1] - first_year + 1)
    return {name: np.nanmean(values[part], axis=0) for name, values in yields.items()}


def _yields(
    world: Domain, layer: CropLayer, axis: TimeAxis, daily: dict[str, np.ndarray]
) -> np.ndarray:
    """Return the yield factor of one layer, shape (year, cell)."""
    document = TRUE[layer.name]
    u, v = positions(world, world.lat, world.lon)
    planting, maturity = (days.ravel() for days in season_days(layer.name, u, v))
    january = np.nonzero(axis.day == 0)[0]
    result = np.full((len(january), planting.size), np.nan)
    length = 360 if axis.calendar == "360_day" else 365
    for sown, ripe in np.unique(np.stack([planting, maturity]), axis=1).T:
        cells = np.nonzero((planting == sown) & (maturity == ripe))[0]
        crossing = int(ripe < sown)
        season = days_of_season(sown, ripe, length)
        real_days = ripe - sown + 1 + 365 * crossing
        start = january[: len(january) - crossing]
        predictor = np.full((len(start), len(cells)), document.get("intercept", 0.0))
        for term in document["terms"].values():
            definition = _DEFINITION.validate_python(document["indices"][term["index"]])
            share = (0.0, 1.0) if definition.phase == SEASON else layer.phases[definition.phase]
            days = phase_days(season, share)
            rows = start[None, :] + np.array(days)[:, None]
            part = {name: values[rows[:, :, None], cells] for name, values in daily.items()}
            index = season_index(part, definition, real_days * len(days) / len(season))
            predictor += _FORMS[term["form"]](term, index)
        link = np.exp(predictor) if document["link"] == "log" else np.maximum(predictor, 0)
        result[crossing:, cells] = link
    return result


def _linear(term: dict, index: np.ndarray) -> np.ndarray:
    return term["coefficient"] * index


def _quadratic(term: dict, index: np.ndarray) -> np.ndarray:
    first, second = term["coefficients"]
    return first * index + second * index**2


def _piecewise(term: dict, index: np.ndarray) -> np.ndarray:
    """Integrate the slopes from zero to the index."""
    total = np.zeros_like(index)
    segments = pairwise([0.0, *term["knots"], np.inf])
    for slope, (low, high) in zip(term["coefficients"], segments, strict=True):
        total += slope * np.clip(index - low, 0, high - low)
    return total


_FORMS: dict[str, Callable[[dict, np.ndarray], np.ndarray]] = {
    "linear": _linear,
    "quadratic": _quadratic,
    "piecewise-linear": _piecewise,
}
