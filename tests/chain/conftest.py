"""One run of a small invented world, which the tests of the whole chain look at.

All their modules carry the same group, so that parallel workers do not each make the run.
"""

from __future__ import annotations

import pytest
import yaml
from chain_runs import Chain, stook

from demo_grids.world import generate


@pytest.fixture(scope="session")
def world(tmp_path_factory):
    """The assessment file of a tiny world of 6 x 7 pixels, without rice to save time."""
    file = generate(tmp_path_factory.mktemp("world"), size="tiny", pixels=42)
    content = yaml.safe_load(file.read_text(encoding="utf-8"))
    del content["crops"]["rice"]
    file.write_text(yaml.safe_dump(content, sort_keys=False), encoding="utf-8")
    return file


@pytest.fixture(scope="session")
def full(world, tmp_path_factory):
    """The whole run: one tile, two cores."""
    results = tmp_path_factory.mktemp("full")
    done = stook("run", world, "--cores", 2, "--set", f"results={results}")
    assert done.returncode == 0, done.stdout + done.stderr
    return Chain(world, results / "hollin-tiny")
