"""The commented assessment file of the invented world."""

from __future__ import annotations

from demo_grids.domain import Domain
from demo_grids.geography import LAYERS, CropLayer

PIXELS_PER_TILE = 2500

_HEAD = """\
# Assessment of the demo world: the invented federation of Hollin.
# Everything in this folder is invented; see docs/demo-world.md. Paths are relative to this file.

title: Climate and crops in the federation of Hollin (invented)
name: hollin-{size}            # the results go to results/hollin-{size}
seed: {seed}           # the same seed gives the same results
results: results

grid:                      # the analysis grid: centres of the first and the last pixel, degrees
  lat: {{first: {lat_first:g}, last: {lat_last:g}, step: {step:g}}}
  lon: {{first: {lon_first:g}, last: {lon_last:g}, step: {step:g}}}
  tiles: {tiles}                 # bands of rows that heavy stages are split into

periods:                   # first and last year, both included
  baseline: [{baseline[0]}, {baseline[1]}]
{horizons}
reference:                 # the observed record that models are corrected with
  name: HOLLIN-OBS
  files:
    tasmin: [reference/tasmin_day_*.nc]
    tasmax: [reference/tasmax_day_*.nc]
    pr: [reference/pr_day_*.nc]
    hurs: [reference/hurs_day_*.nc]

simulations:               # every file that fits the pattern; the historical part comes first
  pattern: climate/{{model}}/{{variable}}_day_{{model}}_{{scenario}}_{{realisation}}_*.nc
  historical: historical

correct:                   # quantile delta mapping for every variable (the default)
  all: {{method: quantile-delta, window_days: 31, step_days: 5}}

crops:
"""

_SYSTEM = """\
      {system}:
        area: {area}
        calendar:
          planting: {{file: crops/calendars.nc, variable: {name}_planting}}
          maturity: {{file: crops/calendars.nc, variable: {name}_maturity}}
        phases: {{{phases}}}
        baseline_yield: {{file: crops/yields.nc, variable: {name}}}
        response: responses/{name}.yaml
"""

_TAIL = """\

regions:
  file: districts.gpkg
  layer: districts
  name: name               # the attribute that holds a district's name

ensemble:
  draws: {draws}               # draws of the response coefficients

trend:
  periods:                 # first and last year of each period to look for a trend in
{periods}
  randomisations: {randomisations}
"""


def assessment_text(world: Domain, size: str, seed: int) -> str:
    """Return the assessment file of a world, with comments."""
    horizons = "".join(
        f"    {name}: [{first}, {last}]\n" for name, (first, last) in world.horizons.items()
    )
    head = _HEAD.format(
        size=size,
        seed=seed,
        step=world.step,
        lat_first=world.lat[0],
        lat_last=world.lat[-1],
        lon_first=world.lon[0],
        lon_last=world.lon[-1],
        tiles=min(world.rows, max(1, round(world.rows * world.columns / PIXELS_PER_TILE))),
        baseline=world.baseline,
        horizons=f"  horizons:\n{horizons}" if horizons else "",
    )
    crops = ""
    for crop in dict.fromkeys(layer.crop for layer in LAYERS):
        systems = "".join(_system(layer) for layer in LAYERS if layer.crop == crop)
        crops += f"  {crop}:\n    systems:\n{systems}"
    periods = "".join(
        f"    {name}: [{first}, {last}]\n" for name, (first, last) in trend_periods(world).items()
    )
    tail = _TAIL.format(
        draws=world.draws, periods=periods.rstrip("\n"), randomisations=world.randomisations
    )
    return head + crops + tail


def trend_periods(world: Domain) -> dict[str, tuple[int, int]]:
    """Return the periods a trend is looked for in: the record, and half of each simulation."""
    first, last = world.simulated
    middle = (first + last) // 2
    periods = {"observed": world.record, "early": (first, middle), "late": (middle + 1, last)}
    return {name: years for name, years in periods.items() if years[1] - years[0] + 1 >= 20}


def _system(layer: CropLayer) -> str:
    if layer.geotiff:
        area = f"{{file: crops/{layer.name}_area.tif, unit: ha}}"
    else:
        area = f"{{file: crops/{layer.name}_area.nc, variable: harvested_share}}"
    phases = ", ".join(f"{name}: [{a:g}, {b:g}]" for name, (a, b) in layer.phases.items())
    return _SYSTEM.format(system=layer.system, name=layer.name, area=area, phases=phases)
