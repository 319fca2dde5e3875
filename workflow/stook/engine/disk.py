"""How much disk a run would take, from what the check found; right within a factor of about two."""

from __future__ import annotations

import shutil
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from stook.assessment.check import Check
from stook.assessment.schema import Assessment
from stook.engine.progress import Planned
from stook.grids.analysis import tile_count

COMPRESSED = {
    "zstd": {"pr": 0.30, "other": 0.80},
    "zlib": {"pr": 0.36, "other": 0.58},
}
"""Size of daily float32 series after compression, as a share (measured: docs/performance.md)."""

_FLOAT64 = 8 * 0.9  # bytes of a compressed value of a later stage
_TREND_MAPS = 40  # maps per series in a trend file
_ROW = 12.0  # bytes of a row of a totals table in Parquet
_SMALL = 50e3  # bytes of a file that holds no grid
_PAGE = 8e6  # bytes of the report and its figures


def estimate(assessment: Assessment, found: Check, planned: Sequence[Planned]) -> float:
    """Return the bytes that jobs would write.

    Parameters
    ----------
    assessment
        The assessment.
    found
        Its check, without errors.
    planned
        The jobs that would run.
    """
    sizes = _Sizes(assessment, found)
    return sum(sizes.of(job.rule, job.wildcards) for job in planned)


class _Sizes:
    """Sizes of the files of each rule."""

    def __init__(self, assessment: Assessment, found: Check) -> None:
        self.assessment = assessment
        self.tiles = tile_count(assessment)
        self.pixels = found.pixels
        self.systems = {(one.crop, one.system): one for one in found.systems}
        self.daily: dict[str, float] = {}
        self.years: dict[str, int] = {}
        shares = COMPRESSED[assessment.store.daily_codec]
        for facts in found.series:
            span = assessment.periods.span or facts.years
            years = max(0, min(span[1], facts.years[1]) - max(span[0], facts.years[0]) + 1)
            steps = {"daily": 365, "monthly": 12, "annual": 1}[facts.series.step] * years
            share = shares.get(facts.variable, shares["other"])
            size = 4.0 * share * steps * self.pixels
            self.daily[facts.simulation] = self.daily.get(facts.simulation, 0.0) + size
            self.years[facts.simulation] = years

    def of(self, rule: str, wildcards: dict[str, str]) -> float:
        """Return the bytes that one job writes."""
        simulation = wildcards.get("simulation", "")
        years = self.years.get(simulation, 0)
        crop, system = wildcards.get("crop", ""), wildcards.get("system", "")
        one = self.systems.get((crop, system))
        pixels = int(np.sum(one.hectares > 0)) if one else self.pixels
        indices = len(one.indices) if one else 0
        match rule:
            case "prepare_tile" | "correct_tile":
                return _SMALL + self.daily.get(simulation, 0.0) / self.tiles
            case "season_tile":
                return _SMALL + _FLOAT64 * indices * years * pixels / self.tiles
            case "yields_grid":
                return _SMALL + _FLOAT64 * (2 + indices) * years * pixels
            case "regions_totals":
                systems = len(self.assessment.crops[crop].systems) + 1
                return _SMALL + _ROW * systems * years * (1 + self.assessment.ensemble.draws)
            case "trend_pixels":
                return _SMALL + 8.0 * _TREND_MAPS * (1 + indices) * pixels
            case "report_page":
                return _PAGE
            case _:
                return _SMALL + 8.0 * 10 * self.pixels


def free_space(root: Path) -> int:
    """Return the bytes free where a folder is, or would be made."""
    there = root
    while not there.exists():
        there = there.parent
    return shutil.disk_usage(there).free


def size(count: float) -> str:
    """Return a number of bytes in words: ``3.2 GB``."""
    for unit, factor in (("TB", 1e12), ("GB", 1e9), ("MB", 1e6)):
        if count >= factor:
            return f"{count / factor:.1f} {unit}"
    return f"{max(1, round(count / 1e3))} kB"
