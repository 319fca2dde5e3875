"""The whole run against a plain copy of the same values, and the memory of its jobs.

    python tests/benchmarks/chain.py [--size demo] [--pixels N] [--years N] [--cores N] [--json]

Generates the invented world, reads every raw climate file and writes it again (NetCDF-4, zlib
level 1 and shuffle, one core), then runs the assessment to the report. With ``--json`` the last
line is one JSON object: run_over_copy, run_seconds, copy_seconds, jobs, peak_mib (largest job).
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import pandas as pd
import xarray as xr
from stook.audit.ledger import read_record

from demo_grids.world import generate


def copy(source: Path, target: Path) -> None:
    """Read a file and write its values again."""
    with xr.open_dataset(source, decode_times=False) as dataset:
        loaded = dataset.load().drop_encoding()
    options = {"zlib": True, "complevel": 1, "shuffle": True}
    encoding = {name: options for name, v in loaded.data_vars.items() if v.ndim == 3}
    loaded.to_netcdf(target, engine="netcdf4", encoding=encoding)


def jobs(root: Path) -> pd.DataFrame:
    """Return the records of the ledger, one row a job: rule, seconds, peak_mib."""
    rows = []
    for path in (root / "ledger").rglob("*.json"):
        name = path.relative_to(root / "ledger").with_suffix("")
        if name.parts[0] != "inputs":
            rows.append(read_record(root, root / name))
    keys = ["rule", "wildcards", "seconds", "peak_mib"]
    table = pd.DataFrame(rows)[keys].astype({"wildcards": str})
    return table.drop_duplicates()


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--size", choices=["tiny", "demo"], default="demo")
    parser.add_argument("--pixels", type=int)
    parser.add_argument("--years", type=int)
    parser.add_argument("--cores", type=int, default=2)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        folder = Path(temporary)
        file = generate(folder, size=given.size, pixels=given.pixels, years=given.years)
        start = time.perf_counter()
        sources = [*folder.glob("climate/*/*.nc"), *folder.glob("reference/*.nc")]
        for source in sources:
            copy(source, folder / "copy.nc")
        copy_seconds = time.perf_counter() - start
        start = time.perf_counter()
        command = [sys.executable, "-m", "stook.cli", "run", str(file)]
        subprocess.run([*command, "--cores", str(given.cores)], check=True, stdout=sys.stderr)
        run_seconds = time.perf_counter() - start
        table = jobs(next((folder / "results").iterdir()))
    summary = table.groupby("rule").agg(
        jobs=("seconds", "size"), seconds=("seconds", "sum"), peak_mib=("peak_mib", "max")
    )
    print(summary.sort_values("seconds", ascending=False).round(1).to_string())
    print(f"copy {copy_seconds:.1f} s on one core, run {run_seconds:.1f} s on {given.cores}")
    if given.json:
        result = {
            "run_over_copy": round(run_seconds / copy_seconds, 3),
            "run_seconds": round(run_seconds, 1),
            "copy_seconds": round(copy_seconds, 1),
            "jobs": len(table),
            "peak_mib": float(table["peak_mib"].max()),
        }
        print(json.dumps(result))


if __name__ == "__main__":
    main()
