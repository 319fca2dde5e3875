"""One region alone gives exactly the values of the full run."""

from __future__ import annotations

import pandas as pd
import pytest
from chain_runs import Chain, assert_same_grids, assert_same_rows, grids, stook
from stook.trend.field import EVERYWHERE

pytestmark = pytest.mark.xdist_group("chain")

REGION = "Saltmere"


@pytest.fixture(scope="module")
def alone(full, tmp_path_factory):
    results = tmp_path_factory.mktemp("region")
    done = stook(
        *("run", full.file, "--cores", 2, "--region", REGION, "--set", f"results={results}")
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return Chain(full.file, results / f"hollin-tiny@{REGION}")


@pytest.fixture(scope="module")
def pixels(alone):
    """The pixels that were computed."""
    return grids(alone.root, "prepare/layers.nc")["computed"] == 1


def test_the_region_is_a_part_of_the_grid(full, alone, pixels):
    whole = grids(full.root, "prepare/layers.nc")
    assert pixels.size < whole["computed"].size
    cover = grids(full.root, "regions/overlay.nc")["coverage"].sel(region=REGION)
    wanted = (cover > 0) & (whole["computed"] == 1)
    assert int(wanted.sum()) == int(pixels.sum()) > 0
    assert bool((pixels == wanted.sel(lat=pixels.lat, lon=pixels.lon)).all())


@pytest.mark.parametrize(
    "pattern",
    [
        "prepare/*/tile-00.nc",
        "correct/*/tile-00.nc",
        "correct/*/evaluation-00.nc",
        "season/*/*.nc",
        "yields/*/*.nc",
        "ensemble/pixels/*.nc",
    ],
)
def test_grids_are_those_of_the_full_run(full, alone, pixels, pattern):
    names = alone.files(pattern)
    assert names == full.files(pattern)
    for name in names:
        part = grids(alone.root, name)
        whole = grids(full.root, name).sel(lat=part.lat, lon=part.lon)
        assert_same_grids(part, whole, pixels)


def test_slopes_and_p_values_are_those_of_the_full_run(full, alone, pixels):
    """A pixel is tested for false discovery among the pixels of its own region."""
    layers = grids(alone.root, "prepare/layers.nc")
    whole = grids(full.root, "prepare/layers.nc").sel(lat=layers.lat, lon=layers.lon)
    inside = pixels & (whole["region"].values[whole["main_region"]] == REGION)
    assert int(inside.sum()) > 0
    for name in alone.files("trend/*/*.nc"):
        part = grids(alone.root, name)
        other = grids(full.root, name).sel(lat=part.lat, lon=part.lon)
        assert_same_grids(part, other, inside)


@pytest.mark.parametrize(
    "pattern",
    [
        "regions/*/*.parquet",
        "ensemble/changes.parquet",
        "ensemble/members.parquet",
        "ensemble/yearly.parquet",
        "trend/*/regions.parquet",
        "trend/*/*_field.parquet",
    ],
)
def test_tables_are_those_of_the_full_run(full, alone, pattern):
    names = alone.files(pattern)
    assert names == full.files(pattern)
    for name in names:
        part, whole = (pd.read_parquet(run.root / name) for run in (alone, full))
        there = {REGION} & set(whole["region"])  # none where all series are too short
        assert set(part["region"]) - {EVERYWHERE} == there, name
        assert_same_rows(part[part["region"] == REGION], whole[whole["region"] == REGION])


def test_coefficients_are_those_of_the_full_run(full, alone):
    for name in alone.files("yields/coefficients/*.csv"):
        assert (alone.root / name).read_bytes() == (full.root / name).read_bytes()


def test_the_full_run_alone_holds_the_remainder(full, alone):
    name = alone.files("regions/*/maize.parquet")[0]
    assert "outside all regions" in set(pd.read_parquet(full.root / name)["region"])
    assert "outside all regions" not in set(pd.read_parquet(alone.root / name)["region"])


def test_an_unknown_region_is_one_line(full, tmp_path):
    done = stook("run", full.file, "--region", "Nowhere", "--set", f"results={tmp_path / 'r'}")
    assert done.returncode == 1
    assert "Nowhere" in done.stderr
    assert "Saltmere" in done.stderr
    assert "Traceback" not in done.stderr
    assert not (tmp_path / "r").exists()
