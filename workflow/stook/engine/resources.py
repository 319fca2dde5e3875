"""Threads and memory of a job."""

from __future__ import annotations

from stook.assessment.schema import Assessment

LARGEST_THREADS = 4
"""Threads beyond this gain nothing: reading is serial within a process (see docs/scale.md)."""

BASE_MB = 300
"""Memory of a job that holds no grid: interpreter and libraries."""

BLOCKS = {
    "prepare_tile": 6,
    "correct_tile": 8,
    "season_tile": 6,
    "yields_grid": 8,
    "regions_totals": 8,
    "ensemble_pixels": 8,
    "ensemble_risk": 24,
    "ensemble_robustness": 8,
    "trend_pixels": 10,
    "trend_impact": 10,
    "trend_impact_map": 10,
}
"""Blocks of `store.block_mb` a job of a rule holds per thread at its peak."""


def threads_per_job(cores: int | None, jobs: int) -> int:
    """Return the threads of one of several equal jobs.

    With at least as many jobs as cores each job has one thread; with fewer, cores are shared out.
    """
    return max(1, min(LARGEST_THREADS, (cores or 1) // max(1, jobs)))


def memory_mb(rule: str, assessment: Assessment, threads: int) -> int:
    """Return an upper estimate of the peak memory of one job, MiB."""
    return BASE_MB + BLOCKS.get(rule, 1) * assessment.store.block_mb * threads
