"""An invented yield panel: district yields of rain-fed maize, and a fit document beside it.

Yields come from the record's weather through the true response, pixel by pixel; to them are added
what statistics have besides: better seed year by year, fertiliser, a shock that all districts
share, and an error of each.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from stook.randomness import generator

from demo_grids.climate_files import record_source
from demo_grids.crop_files import positions
from demo_grids.domain import Domain
from demo_grids.geography import LAYERS, baseline_yield
from demo_grids.true_yields import layer_yields, pixel_area, region_coverage

NAME = "maize_rainfed"
MOST_PIXELS = 500
"""A bigger world has no panel: its weather would not fit in memory at once."""

TECHNOLOGY = 0.012
"""Yearly growth of the log yield with better seed."""

FERTILISER = 0.10
"""Elasticity of the yield to fertiliser."""

SHARED_SHOCK, OWN_ERROR = 0.015, 0.03
"""Standard deviation of the log yield: of a year, and of a district in a year."""

_FIT = """\
# Estimates the yield response of rain-fed maize from an invented panel; see docs/fit.md.
#   stook run assessment.yaml --until season
#   stook fit fit/maize_rainfed.yaml
# The response written can then replace responses/maize_rainfed.yaml.
crop: maize
system: rainfed
panel: yields.csv             # columns district, year, yield (t/ha), area (ha), fertiliser (kg/ha)
columns: {unit: district}
inputs: {fertiliser: log}     # what farmers do: held, and reported with and without

weather:
  assessment: ../assessment.yaml

link: log
unit_effects: true
trend: linear

specifications:
  growth-heat-rain:
    growth: {form: piecewise-linear, index: growth, knots: [1600, 1950]}
    heat: {form: linear, index: heat}
    rain: {form: quadratic, index: rain}
    dry_spell: {form: linear, index: dry_spell}
  no-dry-spell:
    growth: {form: linear, index: growth}
    heat: {form: linear, index: heat}
    rain: {form: quadratic, index: rain}
  rain-only:
    rain: {form: quadratic, index: rain}

standard_errors: {method: cluster-year}
citation: invented for the demo world
output: maize_rainfed
"""


def write_panel(folder: Path, world: Domain, seed: int) -> None:
    """Write ``yields.csv`` and ``maize_rainfed.yaml``, if the world is not too big."""
    if world.rows * world.columns > MOST_PIXELS:
        return
    folder.mkdir(parents=True, exist_ok=True)
    table = panel(world, seed)
    table.to_csv(folder / "yields.csv", index=False, float_format="%.6g")
    (folder / f"{NAME}.yaml").write_text(_FIT, encoding="utf-8")


def panel(world: Domain, seed: int) -> pd.DataFrame:
    """Return the invented panel.

    Returns
    -------
    DataFrame
        district, year, yield (t/ha), area (ha), fertiliser (kg/ha); districts that grow the crop.
    """
    layer = next(layer for layer in LAYERS if layer.name == NAME)
    factor = layer_yields(record_source(world, seed), layer)
    pixel = baseline_yield(NAME, *positions(world, world.lat, world.lon))
    yields = pixel * factor / factor.mean(axis=0)
    hectares = pixel_area(world, layer)
    first, last = world.record
    time = np.arange(first, last + 1) - (first + last) / 2
    random = generator(seed, "yield panel")
    shared = SHARED_SHOCK * random.standard_normal(len(time))
    tables = []
    for district, share in region_coverage(world).items():
        weight = hectares * share
        noise = random.standard_normal((2, len(time)))
        if weight.sum() <= 0:
            continue
        fertiliser = np.exp(np.log(90) + 0.01 * time + 0.15 * noise[0])
        log_yield = (
            np.log((yields * weight).sum(axis=(1, 2)) / weight.sum())
            + TECHNOLOGY * time
            + FERTILISER * np.log(fertiliser / 90)
            + shared
            + OWN_ERROR * noise[1]
        )
        columns = {
            "district": district,
            "year": np.arange(first, last + 1),
            "yield": np.exp(log_yield),
            "area": weight.sum(),
            "fertiliser": fertiliser,
        }
        tables.append(pd.DataFrame(columns))
    return pd.concat(tables, ignore_index=True)
