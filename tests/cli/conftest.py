"""The invented world of the command line's tests, generated once; tests alter copies of it."""

from __future__ import annotations

import pytest
import snakemake.shell  # noqa: F401  keeps the sys.stdout of its import: not that of a test
from altered import Case, linked_copy

from demo_grids.world import generate


@pytest.fixture(scope="session")
def tiny(tmp_path_factory):
    """The assessment file of a tiny world; do not alter it."""
    return generate(tmp_path_factory.mktemp("tiny"), size="tiny")


@pytest.fixture
def case(tiny, tmp_path):
    """A world of one's own, with one simulation; unaltered files are links."""
    return Case(linked_copy(tiny.parent, tmp_path / "world"))
