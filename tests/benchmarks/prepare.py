"""Time and memory of preparing climate series, against copying what they give.

    python tests/benchmarks/prepare.py [--rows N] [--columns M] [--years Y] [--json]

One thread. The source is an invented daily field of 1 x 1 degree, the target lies on it at half
that step; temperature is interpolated, precipitation remapped conservatively. The copy reads the
prepared file block by block and writes it again with the same codec. With ``--json`` the last
line is one JSON object: bilinear_over_copy, conservative_over_copy, peak_mib (of the whole
process), block_mib.
"""

from __future__ import annotations

import argparse
import json
import resource
import tempfile
import time
from pathlib import Path

import dask
import netCDF4
import numpy as np
import xarray as xr
from stook.grids.analysis import AnalysisGrid
from stook.grids.files import TIME_CHUNK, delayed_netcdf, open_result
from stook.prepare.climate import prepare_series, time_coordinate
from stook.prepare.series import open_series

BLOCK_MB = 64
UNITS = {"tas": "K", "pr": "kg m-2 s-1"}


def write_source(path: Path, variable: str, rows: int, columns: int, years: int) -> None:
    """Write an invented field year by year: a season and noise, in the unit of a model."""
    random = np.random.default_rng(5)
    season = 285 + 10 * np.sin(np.arange(365) * 2 * np.pi / 365)[:, None, None].astype("f4")
    with netCDF4.Dataset(path, "w") as file:
        for name, size in (("time", 365 * years), ("lat", rows), ("lon", columns)):
            file.createDimension(name, size)
            file.createVariable(name, "f8", (name,))[:] = np.arange(size) + 0.5
        file["lat"][:] = np.arange(rows) + 0.5 - rows / 2
        file["lat"].units, file["lon"].units = "degrees_north", "degrees_east"
        file["time"].units, file["time"].calendar = "days since 1981-01-01", "noleap"
        chunks = (365, min(30, rows), min(30, columns))
        data = file.createVariable(
            variable, "f4", ("time", "lat", "lon"), zlib=True, complevel=1, chunksizes=chunks
        )
        data.units = UNITS[variable]
        for year in range(years):
            noise = random.standard_normal((365, rows, columns), dtype="f4")
            values = season + 4 * noise if variable == "tas" else np.abs(noise) * np.float32(1e-5)
            data[365 * year : 365 * (year + 1)] = values


def prepare(source: Path, variable: str, grid: AnalysisGrid, path: Path) -> float:
    """Prepare one variable; return seconds."""
    start = time.perf_counter()
    with open_series([source], variable) as series:
        steps = slice(0, len(series.times))
        wanted = np.ones(grid.shape, dtype=bool)
        data = prepare_series(series, steps, grid, wanted, BLOCK_MB)
        coordinates = {"time": time_coordinate(series, steps), **grid.coordinates()}
        dask.compute(delayed_netcdf(xr.Dataset({variable: data}, coordinates), path, "zstd"))
    return time.perf_counter() - start


def copy(path: Path, other: Path) -> float:
    """Copy a prepared file block by block; return seconds."""
    start = time.perf_counter()
    with open_result(path, {"time": TIME_CHUNK, "lat": 40, "lon": -1}) as dataset:
        dask.compute(delayed_netcdf(dataset, other, "zstd"))
    return time.perf_counter() - start


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=int, default=40)
    parser.add_argument("--columns", type=int, default=60)
    parser.add_argument("--years", type=int, default=10)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    lat_edges = (np.arange(2 * given.rows + 1) - given.rows) / 2
    lon_edges = np.arange(2 * given.columns + 1) / 2
    grid = AnalysisGrid(lat_edges[:-1] + 0.25, lon_edges[:-1] + 0.25, lat_edges, lon_edges)
    ratios = {}
    with tempfile.TemporaryDirectory() as folder, dask.config.set(scheduler="synchronous"):
        print(
            f"{grid.shape[0]} x {grid.shape[1]} pixels, {given.years} years of days, one thread\n"
            "| variable | prepare, s | copy, s | ratio |\n|---|---|---|---|"
        )
        for variable in UNITS:
            source, path = Path(folder, f"{variable}.nc"), Path(folder, "prepared.nc")
            write_source(source, variable, given.rows, given.columns, given.years)
            times = [prepare(source, variable, grid, path) for _ in range(given.repeats + 1)]
            copies = [copy(path, Path(folder, "copy.nc")) for _ in range(given.repeats)]
            ratios[variable] = min(times[1:]) / min(copies)
            row = f"| {variable} | {min(times[1:]):.2f} | {min(copies):.2f} |"
            print(f"{row} {ratios[variable]:.2f} |")
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"peak memory {peak:.0f} MiB, blocks of {BLOCK_MB} MiB")
    if given.json:
        result = {
            "bilinear_over_copy": round(ratios["tas"], 3),
            "conservative_over_copy": round(ratios["pr"], 3),
            "peak_mib": round(peak, 1),
            "block_mib": BLOCK_MB,
        }
        print(json.dumps(result))


if __name__ == "__main__":
    main()
