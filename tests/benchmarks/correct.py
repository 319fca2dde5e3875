"""Time and memory of the correction: kernel against a sort, job against a copy.

    python tests/benchmarks/correct.py [--pixels N] [--years Y] [--skip-job] [--json]

One thread; times are processor time, so that other work on the machine counts less. The reference
has 30 years of days, the simulation 30 and Y more (90 by default).
The kernel (quantile-delta, additive, default windows) is compared with `np.argsort` of the same
values along time, and, on a few pixels, with a plain NumPy formulation of the same method that
sorts every window. The job corrects tasmin, tasmax and pr with everything it writes; the copy
reads the same reference and simulation and writes the simulation with zlib level 1 and shuffle.
Each job runs in a process of its own, whose peak memory is noted, with N pixels and with 4 N.
Series are invented and repeated to the size. With ``--json`` the last line is one JSON object:
kernel_over_argsort, plain_over_kernel, job_over_copy, peak_mib, peak_mib_x4.
"""

from __future__ import annotations

import argparse
import json
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import dask
import netCDF4
import numpy as np
import xarray as xr
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment, VariableCorrection
from stook.audit.ledger import Job
from stook.correct import job
from stook.correct.block import map_series
from stook.correct.plan import series_of
from stook.correct.setup import Quantity, tables_of
from stook.correct.windows import Series
from stook.grids.analysis import analysis_grid
from stook.grids.files import PIXEL_CHUNK, TIME_CHUNK

SIMULATION = "ALDER-ESM_high_r1"
BASELINE = (1991, 2020)
POOL = 100
"""Pixels of invented series; larger grids repeat them."""
VARIABLES = ("tasmin", "tasmax", "pr")


def time_axis(first: int, last: int) -> xr.DataArray:
    """Return noon of every day in a calendar without leap years."""
    start = f"{first}-01-01 12:00"
    count = 365 * (last - first + 1)
    times = xr.date_range(start, periods=count, calendar="noleap", use_cftime=True)
    return xr.DataArray(times, dims="time", attrs={"standard_name": "time", "axis": "T"})


def invented(axis: Series, count: int, warm: float) -> dict[str, np.ndarray]:
    """Return series of shape (pixel, time), float32."""
    random = np.random.default_rng([len(axis), int(10 * warm)])
    season = -np.cos(2 * np.pi * axis.position)
    shape = (count, len(axis))
    mean = 12 + warm + 9 * season + 0.02 * (axis.year - 1991) * warm
    mean = mean + (3 + 0.5 * warm) * random.standard_normal(shape)
    half = random.gamma(6, 0.8 + 0.1 * season, shape)
    rain = random.gamma(0.7, 6 + season, shape) * (random.random(shape) < 0.35 + 0.1 * warm)
    found = {"tasmin": mean - half, "tasmax": mean + half, "pr": rain}
    return {name: values.astype(np.float32) for name, values in found.items()}


def plain_quantile_delta(
    o: np.ndarray, h: np.ndarray, f: np.ndarray, axes: tuple[Series, Series, Series]
) -> np.ndarray:
    """Correct one pixel, window by window, in plain NumPy (whole decades from the first year)."""
    steps = 73
    result = np.empty(len(f))
    first = int(axes[2].year[0])
    last = int(axes[2].year[-1])
    own = np.floor(axes[2].position * steps).astype(int)
    for window in range(steps):
        inside = []
        for axis in axes:
            away = (axis.position * 365 - (window * 5 + 2.5) + 182.5) % 365 - 182.5
            inside.append((away >= -15.5) & (away < 15.5))
        for block in range(first, last + 1, 10):
            chosen = (axes[2].year >= block - 10) & (axes[2].year < block + 20) & inside[2]
            mine = (own == window) & (axes[2].year >= block) & (axes[2].year < block + 10)
            ordered = np.sort(f[chosen])
            below, upto = (np.searchsorted(ordered, f[mine], side) for side in ("left", "right"))
            t = (below + upto) / 2 / len(ordered)
            reference = np.quantile(o[inside[0]], t, method="hazen")
            model = np.quantile(h[inside[1]], t, method="hazen")
            result[mine] = reference + f[mine] - model
    return result


def kernel_times(pixels: int, years: int, plain_pixels: int) -> dict[str, float]:
    """Return seconds of kernel and sort for all pixels, and of the plain code for one."""
    last = BASELINE[1] + years
    o_axis = series_of(time_axis(*BASELINE), "daily")
    f_axis = series_of(time_axis(BASELINE[0], last), "daily")
    inside = f_axis.years(*BASELINE)
    axes = (o_axis, f_axis.part(inside), f_axis)
    tables = tables_of(Quantity("tasmax", VariableCorrection(), False), *axes)
    o, f = (invented(axis, POOL, warm)["tasmax"] for axis, warm in ((o_axis, 0), (f_axis, 2)))
    h = np.ascontiguousarray(f[:, inside])
    map_series(o[:1], h[:1], f[:1], tables)  # compile
    seconds = {"kernel": 0.0, "argsort": 0.0}
    for _ in range(max(1, pixels // POOL)):
        start = time.process_time()
        out, reason, _, _ = map_series(o, h, f, tables)
        middle = time.process_time()
        np.argsort(o, axis=1)
        np.argsort(f, axis=1)
        seconds["kernel"] += middle - start
        seconds["argsort"] += time.process_time() - middle
    assert not reason.any()
    start = time.process_time()
    plain = [
        plain_quantile_delta(*(values[i].astype(float) for values in (o, h, f)), axes)
        for i in range(plain_pixels)
    ]
    seconds["plain, per pixel"] = (time.process_time() - start) / plain_pixels
    np.testing.assert_allclose(out[:plain_pixels], plain, rtol=1e-6, atol=1e-5)
    seconds["kernel, per pixel"] = seconds["kernel"] / (max(1, pixels // POOL) * POOL)
    return seconds


def write_inputs(folder: Path, pixels: int, years: int) -> Assessment:
    """Write an assessment of a grid with 40 columns and the prepared files of one simulation."""
    rows = -(-pixels // 40)
    last = BASELINE[1] + years
    response = {
        "crop": "maize",
        "system": "rainfed",
        "link": "log",
        "indices": {"rain": {"measure": "total"}},
        "terms": {"rain": {"form": "linear", "index": "rain", "coefficient": 0.0002}},
        "standard_errors": [0.0001],
        "estimation_range": {"rain": [100, 900]},
        "citation": "invented",
        "note": "invented",
    }
    series = {name: [f"{name}.nc"] for name in VARIABLES}
    system = {
        "area": 1,
        "calendar": {"planting": 100, "maturity": 250},
        "baseline_yield": 5,
        "response": "maize.yaml",
    }
    run = {"model": "ALDER-ESM", "scenario": "high", "realisation": "r1", "files": series}
    content = {
        "title": "Invented series",
        "name": "benchmark",
        "seed": 1,
        "grid": {
            "lat": {"first": 0.25, "last": 0.25 + 0.5 * (rows - 1), "step": 0.5},
            "lon": {"first": 0.25, "last": 19.75, "step": 0.5},
        },
        "periods": {
            "baseline": list(BASELINE),
            "horizons": {"late": [last - 19, last]} if years >= 20 else {},
        },
        "reference": {"name": "INVENTED", "files": series},
        "simulations": {"runs": [run]},
        "crops": {"maize": {"systems": {"rainfed": system}}},
        "regions": {"file": "regions.gpkg"},
    }
    (folder / "maize.yaml").write_text(yaml.safe_dump(response), encoding="utf-8")
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    assessment = load_assessment(path)
    _write_layers(assessment)
    for name, span, warm in (("observed", BASELINE, 0.0), (SIMULATION, (1991, last), 1.0)):
        _write_prepared(assessment, name, time_axis(*span), warm)
    return assessment


def _write_layers(assessment: Assessment) -> None:
    grid = analysis_grid(assessment)
    one = ("crop_system", "lat", "lon"), np.ones((1, *grid.shape))
    layers = xr.Dataset(
        {
            "area": one,
            "reason": (one[0], np.zeros((1, *grid.shape), np.int8)),
            "computed": (("lat", "lon"), np.ones(grid.shape, np.int8)),
        },
        {"crop_system": ["maize_rainfed"], **grid.coordinates()},
    )
    with Job(assessment, "prepare_layers", []) as made:
        made.netcdf(layers, Layout.of(assessment).layers, "Invented layers")


def _write_prepared(assessment: Assessment, name: str, axis: xr.DataArray, warm: float) -> None:
    """Write a header with the job's own code, then the values block by block."""
    grid = analysis_grid(assessment)
    layout = Layout.of(assessment)
    values = invented(series_of(axis, "daily"), POOL, warm)
    tall = -(-grid.shape[0] // PIXEL_CHUNK), grid.shape[1] // PIXEL_CHUNK
    units = {"pr": "mm day-1"}
    arrays = {}
    for variable in VARIABLES:
        block = values[variable].T.reshape(-1, PIXEL_CHUNK, PIXEL_CHUNK)
        lazy = dask.array.from_array(block, chunks=(-1, PIXEL_CHUNK, PIXEL_CHUNK))
        field = dask.array.tile(lazy, (1, *tall))[:, : grid.shape[0]]
        attributes = {"units": units.get(variable, "degC")}
        arrays[variable] = (("time", "lat", "lon"), field, attributes)
    dataset = xr.Dataset(
        arrays,
        {"time": axis, **grid.coordinates()},
        {"time_step": "daily", "simulation": name},
    )
    with Job(assessment, "prepare_tile", []) as made:
        made.netcdf(dataset, layout.prepared(name, 0), "Invented series", "zstd")


def copy(layout: Layout) -> float:
    """Read reference and simulation, write the simulation with zlib; return seconds."""
    start = time.process_time()
    target = layout.root / "copy.nc"
    with (
        netCDF4.Dataset(layout.prepared("observed", 0)) as reference,
        netCDF4.Dataset(layout.prepared(SIMULATION, 0)) as source,
        netCDF4.Dataset(target, "w") as out,
    ):
        for name in ("time", "lat", "lon"):
            out.createDimension(name, source.dimensions[name].size)
        for name in VARIABLES:
            shape = source[name].shape
            chunks = tuple(np.minimum(shape, (TIME_CHUNK, PIXEL_CHUNK, PIXEL_CHUNK)))
            data = out.createVariable(
                name,
                "f4",
                ("time", "lat", "lon"),
                compression="zlib",
                complevel=1,
                shuffle=True,
                chunksizes=chunks,
            )
            for file in (reference, source, out):
                file[name].set_auto_maskandscale(False)
            for row in range(0, shape[1], PIXEL_CHUNK):
                for column in range(0, shape[2], PIXEL_CHUNK):
                    here = np.s_[:, row : row + PIXEL_CHUNK, column : column + PIXEL_CHUNK]
                    reference[name][here]
                    data[here] = source[name][here]
    seconds = time.process_time() - start
    target.unlink()
    return seconds


def run_job(file: Path) -> None:
    """Run one job and print seconds and peak memory as JSON (in a process of its own)."""
    assessment = load_assessment(file)
    with dask.config.set(scheduler="threads", num_workers=1):
        start = time.process_time()
        job.tile(assessment, SIMULATION, "00")
        seconds = time.process_time() - start
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(json.dumps({"seconds": seconds, "peak_mib": peak}))


def job_times(pixels: int, years: int) -> dict[str, float]:
    """Return seconds of job and copy, and peak memory with the pixels and with four times them."""
    found = {}
    for factor in (1, 4):
        with tempfile.TemporaryDirectory() as name:
            folder = Path(name)
            assessment = write_inputs(folder, factor * pixels, years)
            command = [sys.executable, __file__, "--run", str(folder / "assessment.yaml")]
            runs = [_child(command) for _ in range(2 if factor == 1 else 1)]
            found[f"peak x{factor}"] = runs[-1]["peak_mib"]
            if factor == 1:
                found["job"] = min(run["seconds"] for run in runs)
                found["copy"] = min(copy(Layout.of(assessment)) for _ in range(2))
    return found


def _child(command: list[str]) -> dict[str, float]:
    text = subprocess.run(command, check=True, capture_output=True, text=True).stdout
    return json.loads(text.splitlines()[-1])


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pixels", type=int, default=2000)
    parser.add_argument("--years", type=int, default=90)
    parser.add_argument("--plain-pixels", type=int, default=2)
    parser.add_argument("--skip-job", action="store_true")
    parser.add_argument("--run", type=Path, help=argparse.SUPPRESS)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    if given.run:
        run_job(given.run)
        return
    seconds = kernel_times(given.pixels, given.years, given.plain_pixels)
    result = {
        "kernel_over_argsort": seconds["kernel"] / seconds["argsort"],
        "plain_over_kernel": seconds["plain, per pixel"] / seconds["kernel, per pixel"],
    }
    print(f"{given.pixels} pixels, 30 + {given.years} years of days, one thread")
    if not given.skip_job:
        seconds |= (jobs := job_times(given.pixels, given.years))
        result["job_over_copy"] = jobs["job"] / jobs["copy"]
        result |= {"peak_mib": jobs.pop("peak x1"), "peak_mib_x4": jobs.pop("peak x4")}
    print("| task | s |\n|---|---|")
    for name, value in seconds.items():
        if not name.startswith("peak"):
            print(f"| {name} | {value:.4g} |")
    for name, value in result.items():
        print(f"{name.replace('_', ' ')}: {value:.2f}")
    if given.json:
        print(json.dumps({name: round(value, 3) for name, value in result.items()}))


if __name__ == "__main__":
    main()
