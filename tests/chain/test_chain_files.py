"""Every kind of NetCDF file passes the CF compliance checker of the registry (offline)."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
import xarray as xr
from stook.grids.missing import Reason

pytestmark = pytest.mark.xdist_group("chain")

SIMULATION = "SEDGE-LR_high_r1i1p1f1"  # 360-day calendar
KINDS = [
    "regions/overlay.nc",
    "prepare/layers.nc",
    f"prepare/{SIMULATION}/tile-00.nc",
    f"correct/{SIMULATION}/tile-00.nc",
    f"correct/{SIMULATION}/transfer-00.nc",
    f"correct/{SIMULATION}/evaluation-00.nc",
    f"season/{SIMULATION}/barley_rainfed_tile-00.nc",
    f"season/{SIMULATION}/maize_irrigated_tile-00.nc",
    f"yields/{SIMULATION}/maize_rainfed.nc",
    "ensemble/pixels/maize_rainfed_high.nc",
    f"trend/{SIMULATION}/maize_rainfed.nc",
]


@pytest.mark.parametrize("name", KINDS)
def test_cf_compliance(full, tmp_path, name):
    """IOOS compliance-checker, CF 1.11, strict; it tells nothing of names it cannot look up."""
    out = tmp_path / "out.json"
    checker = Path(sys.executable).with_name("compliance-checker")
    subprocess.run(
        [
            checker,
            "--test=cf:1.11",
            "--criteria",
            "strict",
            "-f",
            "json",
            "-o",
            out,
            full.root / name,
        ],
        capture_output=True,
        timeout=120,
    )
    found = json.loads(out.read_text())["cf:1.11"]
    assert found["all_priorities"]
    messages = [message for entry in found["all_priorities"] for message in entry["msgs"]]
    assert messages == []


def test_every_missing_pixel_has_a_reason(full):
    """Where a grid has no value at all, its reason is not `valid`, and the other way round."""
    for pattern in ("season/*/*.nc", "yields/*/*.nc"):
        for name in full.files(pattern):
            with xr.open_dataset(full.root / name) as dataset:
                reason = dataset["reason"]
                for variable in dataset.data_vars.values():
                    if variable.dims == ("year", "lat", "lon") and variable.dtype.kind == "f":
                        lost = variable.isnull().all("year")
                        assert bool((lost == (reason != Reason.VALID)).all()), name


def test_every_file_names_the_software_and_the_assessment(full):
    for name in KINDS:
        with xr.open_dataset(full.root / name, decode_times=False) as dataset:
            attributes = dataset.attrs
        assert attributes["Conventions"] == "CF-1.11"
        assert attributes["source"].startswith("stook ")
        assert len(attributes["assessment_sha256"]) == 64
        assert attributes["title"]
        assert attributes["history"]
