"""Does the correction recover the reference of the invented world, in and out of sample?

    python tests/validation/correct_truth.py [--size demo] [--folder FOLDER] [--json]

Generates the world (in FOLDER, kept, if given), prepares and corrects every simulation. In sample:
the corrected against the reference over the whole baseline. Out of sample: every second year
against the reference, corrected with the years between (in each half of the baseline the models
and the reference have slow swings of their own, which no correction can know; the table shows the
halves too). Each figure is the mean over the computed pixels of the size of the bias; the keys are
the largest of all simulations. The change is that of the daily mean temperature and of
precipitation from the baseline to the last horizon, before against after correction.

With ``--json`` the last line is one JSON object: mean_bias_degc, mean_bias_pr_percent,
p95_bias_degc (the larger of the 5th and 95th percentile), wet_day_bias_points, change_error_degc,
and the same with ``_out`` out of sample. change_error_degc_out is calibrated on the first half of
the baseline, and the change is that from its second half to the last horizon.
"""

from __future__ import annotations

import argparse
import json
import tempfile
from pathlib import Path

import dask
import numpy as np
import pandas as pd
import stook.correct.job as correct_job
import stook.prepare.job as prepare_job
import stook.regions.job as regions_job
import xarray as xr
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.assessment.simulations import all_simulations, simulations
from stook.constants import OBSERVED, WET_DAY_MM
from stook.correct.grids import correct_grids
from stook.correct.plan import series_of
from stook.correct.setup import ALTERNATE, HALVES, PAIR, make_setup
from stook.grids.analysis import tile_count
from stook.grids.files import open_result

from demo_grids.world import SEED, generate

TEMPERATURES = ("tasmin", "tasmax")
DAILY_MEAN = "daily mean"
ALTERNATE_YEARS = "alternate years"


def run(assessment: Assessment) -> None:
    """Prepare and correct every simulation."""
    regions_job.overlay(assessment)
    prepare_job.layers(assessment)
    tiles = [f"{tile:02d}" for tile in range(tile_count(assessment))]
    for simulation in all_simulations(assessment):
        for tile in tiles:
            prepare_job.tile(assessment, simulation.name, tile)
    for simulation in simulations(assessment):
        for tile in tiles:
            correct_job.tile(assessment, simulation.name, tile)


def whole(paths: list[Path]) -> xr.Dataset:
    """Return all tiles of a file together."""
    parts = []
    for path in paths:
        with open_result(path) as dataset:
            parts.append(dataset.load())
    return xr.concat(parts, "lat") if parts[1:] else parts[0]


def between(values: xr.Dataset, name: str, years: tuple[int, int]) -> np.ndarray:
    """Return the series of a variable at the computed pixels, shape (time, pixel)."""
    inside = [years[0] <= time.year <= years[1] for time in values["time"].values]
    series = values[name].values[np.array(inside)].reshape(sum(inside), -1)
    return series[:, np.isfinite(series).all(axis=0)].astype(np.float64)


def in_sample(found: xr.Dataset, record: xr.Dataset, years: tuple[int, int]) -> list[tuple]:
    """Return (variable, statistic, value) over the baseline."""
    rows = []
    for name in (*TEMPERATURES, "pr"):
        x, o = (between(values, name, years) for values in (found, record))
        if name == "pr":
            rows.append((name, "mean_bias_%", _size(100 * (x.mean(0) / o.mean(0) - 1))))
            share = [(values >= WET_DAY_MM).mean(0) for values in (x, o)]
            rows.append((name, "wet_day_bias", _size(100 * (share[0] - share[1]))))
            continue
        rows.append((name, "mean_bias", _size(x.mean(0) - o.mean(0))))
        for p in (5, 95):
            bias = np.percentile(x, p, axis=0) - np.percentile(o, p, axis=0)
            rows.append((name, f"p{p:02d}_bias", _size(bias)))
    return rows


def out_of_sample(
    evaluation: xr.Dataset, record: xr.Dataset, years: tuple[int, int], samples: tuple[str, ...]
) -> list[tuple]:
    """Return (variable, statistic, value) from the split-sample evaluation, whole year."""
    rows = []
    chosen = evaluation.sel(sample=list(samples), season="all", stage="corrected")
    for name in (*TEMPERATURES, "pr"):
        bias = chosen[f"mean_bias_{name}"]
        if name == "pr":
            mean = between(record, name, years).mean(0)
            values = bias.values.reshape(len(samples), -1)
            values = values[:, np.isfinite(values).all(axis=0)]
            rows.append((name, "mean_bias_%", _size(100 * values / mean)))
            rows.append((name, "wet_day_bias", _size(chosen["wet_day_bias_pr"].values)))
            continue
        rows.append((name, "mean_bias", _size(bias.values)))
        for p in ("p05", "p95"):
            rows.append((name, f"{p}_bias", _size(chosen[f"{p}_bias_{name}"].values)))
    return rows


def change_errors(
    raw: xr.Dataset,
    found: xr.Dataset,
    baseline: tuple[int, int],
    horizon: tuple[int, int],
    others: tuple[str, ...] = ("pr",),
) -> list[tuple]:
    """Return (variable, statistic, value) of the change of the mean."""
    rows = []
    means = {}
    for name in (*TEMPERATURES, *others):
        means[name] = [
            between(values, name, years).mean(0)
            for values in (raw, found)
            for years in (baseline, horizon)
        ]
    means[DAILY_MEAN] = [
        (low + high) / 2 for low, high in zip(means["tasmin"], means["tasmax"], strict=True)
    ]
    for name, (raw_then, raw_late, then, late) in means.items():
        if name == "pr":
            error = 100 * (late / then - raw_late / raw_then)
        else:
            error = late - then - (raw_late - raw_then)
        rows.append((name, "change_error", _size(error)))
    return rows


def change_out_of_sample(assessment: Assessment, simulation: str) -> float:
    """Return the error of the change of the daily mean between years that are not calibrated on."""
    layout = Layout.of(assessment)
    first, last = assessment.correct.calibration or assessment.periods.baseline
    middle = first + (last - first + 1) // 2
    horizon = list(assessment.periods.horizons.values())[-1]
    tiles = range(tile_count(assessment))
    reference, raw = (
        whole([layout.prepared(name, tile) for tile in tiles]) for name in (OBSERVED, simulation)
    )
    setup = make_setup(
        series_of(reference["time"], "daily"),
        series_of(raw["time"], "daily"),
        TEMPERATURES,
        assessment.correct,
        (first, middle - 1),
        {},
        simulation,
        assessment.seed,
    )
    nowhere = xr.zeros_like(raw["tasmin"].isel(time=0), dtype=np.int8)
    found = correct_grids(PAIR, reference[list(PAIR)], raw[list(PAIR)], nowhere, setup).grids
    errors = change_errors(raw, found, (middle, last), horizon, ())
    return next(value for name, _, value in errors if name == DAILY_MEAN)


def _size(values: np.ndarray) -> float:
    return float(np.nanmean(np.abs(values)))


def table(assessment: Assessment) -> pd.DataFrame:
    """Return sample, simulation, variable, statistic, value."""
    layout = Layout.of(assessment)
    years = assessment.correct.calibration or assessment.periods.baseline
    horizon = list(assessment.periods.horizons.values())[-1]
    tiles = range(tile_count(assessment))
    record = whole([layout.prepared(OBSERVED, tile) for tile in tiles])
    rows = []
    for simulation in simulations(assessment):
        raw, found, evaluation = (
            whole([path(simulation.name, tile) for tile in tiles])
            for path in (layout.prepared, layout.corrected, layout.evaluation)
        )
        parts = {
            "in": in_sample(found, record, years) + change_errors(raw, found, years, horizon),
            ALTERNATE_YEARS: out_of_sample(evaluation, record, years, ALTERNATE),
            "halves": out_of_sample(evaluation, record, years, HALVES),
        }
        out = (DAILY_MEAN, "change_error", change_out_of_sample(assessment, simulation.name))
        parts[ALTERNATE_YEARS].append(out)
        for sample, lines in parts.items():
            rows += [(sample, simulation.name, *line) for line in lines]
    return pd.DataFrame(rows, columns=["sample", "simulation", "variable", "statistic", "value"])


def keys_of(frame: pd.DataFrame, sample: str, suffix: str = "") -> dict[str, float]:
    """Return the keys of one sample: the largest over simulations."""
    rows = frame[frame["sample"] == sample]

    def largest(variables: tuple[str, ...], *statistics: str) -> float:
        chosen = rows["variable"].isin(variables) & rows["statistic"].isin(statistics)
        return round(float(rows[chosen]["value"].max()), 4)

    found = {
        "mean_bias_degc": largest(TEMPERATURES, "mean_bias"),
        "mean_bias_pr_percent": largest(("pr",), "mean_bias_%"),
        "p95_bias_degc": largest(TEMPERATURES, "p05_bias", "p95_bias"),
        "wet_day_bias_points": largest(("pr",), "wet_day_bias"),
        "change_error_degc": largest((DAILY_MEAN,), "change_error"),
    }
    return {f"{name}{suffix}": value for name, value in found.items()}


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--size", choices=["tiny", "demo"], default="demo")
    parser.add_argument("--seed", type=int, default=SEED)
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary, dask.config.set(num_workers=1):
        folder = given.folder or Path(temporary)
        file = folder / "assessment.yaml"
        if not file.exists():
            file = generate(folder, size=given.size, seed=given.seed)
        assessment = load_assessment(file)
        run(assessment)
        frame = table(assessment)
    wide = frame.pivot_table(
        index=["variable", "statistic"], columns=["sample"], values="value", aggfunc="max"
    )
    print("largest of all simulations\n" + wide.round(3).to_string())
    print(frame.round(3).to_string(index=False))
    if given.json:
        print(json.dumps(keys_of(frame, "in") | keys_of(frame, ALTERNATE_YEARS, "_out")))


if __name__ == "__main__":
    main()
