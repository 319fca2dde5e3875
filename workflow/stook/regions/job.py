"""Jobs of the regions stage: files in and out."""

from __future__ import annotations

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.regions.overlay import overlay_dataset


def overlay(assessment: Assessment) -> None:
    """Write the share of every cell inside every region.

    Reads the region polygons; writes `Layout.overlay`.
    """
    path = assessment.path(assessment.regions.file)
    with Job(assessment, "regions_overlay", [path]) as job:
        title = "Share of every cell inside every region"
        job.netcdf(overlay_dataset(assessment), Layout.of(assessment).overlay, title)
