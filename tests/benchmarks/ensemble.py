"""Time and memory of the ensemble's tables for a large ensemble.

    python tests/benchmarks/ensemble.py [--simulations 30] [--draws 200] [--regions 50]
        [--crops 4] [--years 130] [--json]

It writes invented totals of one simulation and crop, gives every other simulation and crop the same
file, and runs the jobs ``ensemble_changes`` and ``ensemble_risk`` on them one after the other, from
reading to the tables written. Beside them stands the time pandas takes to read the same files,
production alone. With ``--json`` the last line is one JSON object: seconds (both jobs),
seconds_changes, seconds_risk, seconds_processor (both, all threads), seconds_reading,
rows_million, peak_mib (of the whole process).
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import shutil
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd
import yaml
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.assessment.simulations import all_simulations
from stook.audit.ledger import Job, record_path
from stook.ensemble.job import changes, risk
from stook.regions.totals import Totals, totals_table

LAYER = {"area": 1, "calendar": {"planting": 100, "maturity": 200}, "baseline_yield": 5}


def write_assessment(folder: Path, simulations: int, crops: int, draws: int) -> Assessment:
    """Write an assessment of half as many models as simulations, two scenarios."""
    (folder / "pr.nc").touch()
    runs = [
        {
            "model": f"MODEL-{number // 2}",
            "scenario": ("moderate", "high")[number % 2],
            "realisation": "r1",
            "files": {"pr": ["pr.nc"]},
        }
        for number in range(simulations)
    ]
    system = LAYER | {"response": "response.yaml"}
    content = {
        "title": "Invented ensemble",
        "name": "large",
        "seed": 1,
        "grid": {
            "lat": {"first": 0, "last": 1, "step": 1},
            "lon": {"first": 0, "last": 1, "step": 1},
        },
        "periods": {
            "baseline": [1991, 2020],
            "horizons": {"middle": [2041, 2070], "late": [2071, 2100]},
        },
        "correct": {"all": {"method": "none"}},
        "simulations": {"runs": runs},
        "crops": {f"crop-{n}": {"systems": {"rainfed": system}} for n in range(crops)},
        "regions": {"file": "regions.gpkg"},
        "ensemble": {"draws": draws},
    }
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    return load_assessment(path)


def invented_totals(regions: int, years: int, draws: int) -> Totals:
    """Return invented totals of one system."""
    random = np.random.default_rng(3)
    return Totals(
        [f"District {number}" for number in range(regions)],
        np.arange(2101 - years, 2101),
        random.uniform(4e4, 6e4, (draws + 1, regions, years)),
        np.full(regions, 1e4),
        np.zeros(regions),
        random.uniform(0, 1e3, (regions, years)),
    )


def write_totals(assessment: Assessment, table: pd.DataFrame) -> list[Path]:
    """Write the totals of every simulation and crop: one file, many names."""
    layout = Layout.of(assessment)
    paths = [
        layout.totals(run.name, crop)
        for run in all_simulations(assessment)
        for crop in assessment.crops
    ]
    with Job(assessment, "regions_totals", []) as job:
        job.table(table, paths[0])
    record = record_path(layout.root, paths[0])
    for path in paths[1:]:
        for source, target in ((paths[0], path), (record, record_path(layout.root, path))):
            target.parent.mkdir(parents=True, exist_ok=True)
            os.link(source, target)
    return paths


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    for name, default in (
        ("simulations", 30),
        ("draws", 200),
        ("regions", 50),
        ("crops", 4),
        ("years", 130),
    ):
        parser.add_argument(f"--{name}", type=int, default=default)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    folder = Path(tempfile.mkdtemp(prefix="stook-ensemble-"))
    try:
        assessment = write_assessment(folder, given.simulations, given.crops, given.draws)
        totals = {"rainfed": invented_totals(given.regions, given.years, given.draws)}
        table = totals_table(totals)
        paths = write_totals(assessment, table)
        rows = len(table) * len(paths) / 1e6
        del table, totals
        seconds, busy = {}, {}
        for job in (changes, risk):
            start, used = time.perf_counter(), time.process_time()
            job(assessment)
            seconds[job.__name__] = time.perf_counter() - start
            busy[job.__name__] = time.process_time() - used
        start = time.perf_counter()
        for path in paths:
            pd.read_parquet(path, columns=["production_t"])
        reading = time.perf_counter() - start
    finally:
        shutil.rmtree(folder)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(
        f"{given.simulations} simulations x {given.draws} draws x {given.regions} regions x "
        f"{given.crops} crops x {given.years} years: {rows:.0f} million rows"
    )
    print("| task | s | on the processor, all threads, s |\n|---|---|---|")
    for name, value in seconds.items():
        print(f"| ensemble_{name} | {value:.1f} | {busy[name]:.1f} |")
    print(f"| reading production alone | {reading:.1f} | |")
    print(f"peak memory {peak:.0f} MiB")
    if given.json:
        result = {
            "seconds": round(sum(seconds.values()), 2),
            "seconds_changes": round(seconds["changes"], 2),
            "seconds_risk": round(seconds["risk"], 2),
            "seconds_processor": round(sum(busy.values()), 2),
            "seconds_reading": round(reading, 2),
            "rows_million": round(rows, 1),
            "peak_mib": round(peak, 1),
        }
        print(json.dumps(result))


if __name__ == "__main__":
    main()
