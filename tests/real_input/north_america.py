"""Write an assessment on real climate model grids: ``python north_america.py FOLDER``.

Climate: annual mean air temperature, scenarios A1B and E1, 1860-2099, from the registry package
``iris-sample-data``. Polygons: the country fixture inside ``pyogrio``. The crop, its area, its
yield and its response are invented, and say so.
"""

from __future__ import annotations

import sys
from pathlib import Path

import geopandas
import iris_sample_data
import pyogrio

COUNTRIES = ("Canada", "United States of America", "Mexico")

RESPONSE = """\
crop: grain
system: rainfed
link: log
indices:
  warmth: {measure: mean, variable: tas}
terms:
  warmth: {form: linear, index: warmth, coefficient: -0.05}
standard_errors: [0.02]
estimation_range:
  warmth: [-25.0, 30.0]
citation: invented for this example
note: An invented loss of about 5 % per degree C; it describes no real crop.
"""

ASSESSMENT = """\
title: Invented grain under a real climate model, North America
name: north-america
seed: 1860
grid:
  # pixels of 2.5 x 2.5 degrees inside the model's domain
  lat: {first: 17.5, last: 57.5, step: 2.5}
  lon: {first: -132.5, last: -47.5, step: 2.5}
periods:
  baseline: [1961, 1990]
  horizons:
    mid-century: [2040, 2059]
    late-century: [2080, 2099]
simulations:
  runs:
    - model: real-model
      scenario: A1B
      realisation: r1
      files: {tas: [climate/A1B_north_america.nc]}
    - model: real-model
      scenario: E1
      realisation: r1
      files: {tas: [climate/E1_north_america.nc]}
correct:
  all: {method: none}        # no reference: changes are taken against the model's own baseline
crops:
  grain:
    systems:
      rainfed:
        area: {value: 0.01, unit: "1"}           # invented: one per cent of every cell
        calendar: {planting: 1, maturity: 365}   # the whole year: the data are annual means
        baseline_yield: {value: 3.0, unit: t ha-1}
        response: response.yaml
regions:
  file: countries.gpkg
  name: name
trend:
  periods:
    early: [1860, 1920]
    late: [1980, 2099]
"""


def write(folder: Path) -> Path:
    """Write climate links, polygons, response and assessment; return the assessment file."""
    climate = folder / "climate"
    climate.mkdir(parents=True, exist_ok=True)
    source = Path(iris_sample_data.path)
    for scenario in ("A1B", "E1"):
        name = f"{scenario}_north_america.nc"
        (climate / name).unlink(missing_ok=True)
        (climate / name).symlink_to(source / name)
    fixtures = Path(pyogrio.__file__).parent / "tests" / "fixtures"
    world = geopandas.read_file(fixtures / "naturalearth_lowres")
    countries = world.loc[world["name"].isin(COUNTRIES), ["name", "geometry"]]
    countries.to_file(folder / "countries.gpkg", driver="GPKG")
    (folder / "response.yaml").write_text(RESPONSE, encoding="utf-8")
    assessment = folder / "assessment.yaml"
    assessment.write_text(ASSESSMENT, encoding="utf-8")
    return assessment


if __name__ == "__main__":
    print(write(Path(sys.argv[1])))
