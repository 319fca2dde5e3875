"""Does a whole run recover the truth of the invented world?

    python tests/validation/truth_recovery.py [--size demo] [--seed N] [--folder FOLDER] [--json]

Generates the world, runs the assessment to the ensemble (in FOLDER, kept, if given) and compares:

- the mean over the baseline after correction with the record's, pixel by pixel;
- the change of the mean between baseline and last horizon before and after correction;
- the true regional yield change, known from the generator, with the 5-95 range of the ensemble.

With ``--json`` the last line is one JSON object: mean_bias_degc, mean_bias_pr_percent,
change_error_degc (of the daily mean, which the correction keeps), change_error_pair_degc (of
tasmin and tasmax, whose range is kept as a ratio), change_error_pr_points, inside_5_95, cases.
Errors are means over pixels of absolute errors; of all simulations the worst.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr
from stook.assessment.layout import Layout
from stook.assessment.load import load_resolved
from stook.assessment.schema import Assessment
from stook.assessment.simulations import simulations
from stook.constants import OBSERVED
from stook.grids.analysis import tile_count
from stook.grids.files import open_result

from demo_grids import true_yields
from demo_grids.domain import Domain, domain
from demo_grids.world import SEED, generate

VARIABLES = ("tasmin", "tasmax", "pr")
MEAN = "daily mean"


def period_means(path: Path, years: tuple[int, int]) -> xr.Dataset:
    """Return the mean over a period of every variable of a daily file, dims (lat, lon)."""
    with open_result(path) as dataset:
        inside = [years[0] <= time.year <= years[1] for time in dataset["time"].values]
        chosen = dataset[list(VARIABLES)].isel(time=np.flatnonzero(inside))
        means = chosen.mean("time", dtype=np.float64).load()
    return means.assign({MEAN: (means["tasmin"] + means["tasmax"]) / 2})


def tiles(assessment: Assessment, path, simulation: str, years: tuple[int, int]) -> xr.Dataset:
    """Return the period means of all tiles together."""
    parts = [path(simulation, tile) for tile in range(tile_count(assessment))]
    return xr.concat([period_means(part, years) for part in parts], "lat")


def climate_errors(assessment: Assessment) -> pd.DataFrame:
    """Return per simulation and variable the errors of mean and change over the computed pixels.

    ``bias`` is the mean over pixels of the absolute bias of the corrected baseline mean,
    ``change`` that of the difference between the corrected and the simulated change of the mean:
    degC; percent and percentage points for pr.
    """
    layout = Layout.of(assessment)
    baseline = assessment.periods.baseline
    horizon = list(assessment.periods.horizons.values())[-1]
    record = tiles(assessment, layout.prepared, OBSERVED, baseline)
    rows = []
    for simulation in simulations(assessment):
        windows = (baseline, horizon)
        raw = [tiles(assessment, layout.prepared, simulation.name, years) for years in windows]
        good = [tiles(assessment, layout.corrected, simulation.name, years) for years in windows]
        for name in (*VARIABLES, MEAN):
            if name == "pr":
                bias = 100 * (good[0][name] / record[name] - 1)
                change = 100 * (good[1][name] / good[0][name] - raw[1][name] / raw[0][name])
            else:
                bias = good[0][name] - record[name]
                change = (good[1] - good[0] - raw[1] + raw[0])[name]
            row = {"simulation": simulation.name, "variable": name}
            rows.append(
                row | {"bias": float(abs(bias).mean()), "change": float(abs(change).mean())}
            )
    return pd.DataFrame(rows)


def coverage(assessment: Assessment, world: Domain, seed: int) -> pd.DataFrame:
    """Return every case with its true change and whether the 5-95 range holds it."""
    keys = ["crop", "system", "region", "scenario", "horizon"]
    truth = true_yields.nature_changes(world, seed).set_index(keys)["change"]
    found = pd.read_parquet(Layout.of(assessment).changes).set_index(keys)
    table = found.join(truth.rename("true_change"), how="inner").reset_index()
    inside = table["true_change"].between(table["change_p05"], table["change_p95"])
    return table[[*keys, "true_change", "change_p05", "change_p50", "change_p95"]].assign(
        inside=inside
    )


def run(file: Path) -> Assessment:
    """Run the assessment to the ensemble and return it."""
    command = [sys.executable, "-m", "stook.cli", "run", str(file), "--until", "ensemble"]
    subprocess.run(command, check=True, stdout=sys.stderr)
    return load_resolved(next((file.parent / "results").iterdir()))


def main() -> None:
    """Print the tables and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--size", choices=["tiny", "demo"], default="demo")
    parser.add_argument("--seed", type=int, default=SEED)
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        folder = given.folder or Path(temporary)
        file = folder / "assessment.yaml"
        if not file.exists():
            file = generate(folder, size=given.size, seed=given.seed)
        assessment = run(file)
        climate = climate_errors(assessment)
        cases = coverage(assessment, domain(given.size), given.seed)
    print(climate.round(4).to_string(index=False))
    print(cases.round(2).to_string(index=False))
    worst = climate.groupby("variable")[["bias", "change"]].max()
    pair = worst.loc[["tasmin", "tasmax"]]
    result = {
        "mean_bias_degc": pair["bias"].max(),
        "mean_bias_pr_percent": worst.loc["pr", "bias"],
        "change_error_degc": worst.loc[MEAN, "change"],
        "change_error_pair_degc": pair["change"].max(),
        "change_error_pr_points": worst.loc["pr", "change"],
        "inside_5_95": float(cases["inside"].mean()),
        "cases": len(cases),
    }
    print(f"true change inside the 5-95 range: {cases['inside'].sum()} of {len(cases)} cases")
    if given.json:
        print(json.dumps({key: round(float(value), 4) for key, value in result.items()}))


if __name__ == "__main__":
    main()
