"""One run of a small invented world, which the tests of the whole chain look at.

All their modules carry the same group, so that parallel workers do not each make the run.
"""

from __future__ import annotations

import pytest
from chain_runs import Chain, stook

from demo_grids.world import generate


@pytest.fixture(scope="session")
def world(tmp_path_factory):
    """The assessment file of a tiny world of 6 x 7 pixels, three calendars apart."""
    return generate(tmp_path_factory.mktemp("world"), size="tiny", pixels=42)


@pytest.fixture(scope="session")
def full(world, tmp_path_factory):
    """The whole run: one tile, two cores."""
    results = tmp_path_factory.mktemp("full")
    done = stook("run", world, "--cores", 2, "--set", f"results={results}")
    assert done.returncode == 0, done.stdout + done.stderr
    return Chain(world, results / "hollin-tiny")
