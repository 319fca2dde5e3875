"""One tile on two cores, six tiles on one core: the same values."""

from __future__ import annotations

import pytest
from chain_runs import ONE_MODEL, Chain, assert_same_grids, assert_same_results, grids, stook

pytestmark = pytest.mark.xdist_group("chain")


@pytest.fixture(scope="module")
def tiled(full, tmp_path_factory):
    results = tmp_path_factory.mktemp("tiled")
    done = stook(
        *("run", full.file, "--cores", 1, "--until", "trend"),
        *("--set", f"results={results}", "--set", "grid.tiles=6"),
        *("--set", "store.block_mb=1", *ONE_MODEL),
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return Chain(full.file, results / "hollin-tiny")


def test_tiled_grids_join_to_the_same_values(full, tiled):
    simulations = sorted(path.name for path in (tiled.root / "prepare").iterdir() if path.is_dir())
    assert simulations == ["SEDGE-LR_high_r1i1p1f1", "observed"]
    for simulation in simulations:
        kinds = [("prepare", "tile"), ("correct", "tile"), ("correct", "evaluation")]
        for stage, kind in kinds if simulation != "observed" else kinds[:1]:
            pattern = f"{stage}/{simulation}/{kind}-*.nc"
            assert len(tiled.files(pattern)) == 6
            assert_same_grids(grids(full.root, pattern), grids(tiled.root, pattern))
        for crop in ("maize_rainfed", "maize_irrigated", "barley_rainfed"):
            pattern = f"season/{simulation}/{crop}_tile-*.nc"
            assert_same_grids(grids(full.root, pattern), grids(tiled.root, pattern))


def test_all_later_results_are_the_same(full, tiled):
    patterns = [
        "prepare/layers.nc",
        "regions/overlay.nc",
        "yields/**/*.*",
        "regions/*/*.parquet",
        "trend/**/*.*",
    ]
    assert_same_results(full, tiled, patterns)
