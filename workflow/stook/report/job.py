"""The report job: reads the results of every stage and writes the report folder."""

from __future__ import annotations

import datetime

from stook.assessment.load import assessment_digest
from stook.assessment.schema import Assessment
from stook.report import sections, sections_risk
from stook.report.page import Page, render
from stook.report.publisher import Publisher
from stook.report.reading import read_warnings
from stook.report.sections_impact import add_impact
from stook.report.source import Source, read_source
from stook.version import VERSION


def page(assessment: Assessment) -> None:
    """Write the report of an assessment: the page, and every file it links to.

    The page comes last but for the ledger table, so that a page that is there is complete.

    Raises
    ------
    ResultsError
        If a result it draws on is missing or cannot be read, or the folder cannot be written.
    """
    source = read_source(assessment)
    publisher = Publisher(assessment)
    content = Page(assessment.title, _facts(source))
    content.warnings = read_warnings(source.layout.root)
    sections.add_results(source, content, publisher)
    sections.add_maps(source, content, publisher)
    sections.add_years(source, content, publisher)
    sections_risk.add_uncertainty(source, content, publisher)
    sections_risk.add_bad_years(source, content, publisher)
    sections_risk.add_supply(source, content, publisher)
    sections.add_drivers(source, content, publisher)
    sections.add_trends(source, content, publisher)
    add_impact(source, content, publisher)
    sections.add_correction(source, content, publisher)
    sections.add_assumptions(source, content)
    content.files = publisher.files
    publisher.page(render(content))
    publisher.ledger()


def _facts(source: Source) -> list[tuple[str, str]]:
    assessment = source.assessment
    today = datetime.datetime.now(datetime.UTC).date().isoformat()
    horizons = [
        name if name == f"{first}-{last}" else f"{name} ({first}-{last})"
        for name, (first, last) in source.horizons.items()
    ]
    crops = [f"{crop} ({', '.join(spec.systems)})" for crop, spec in assessment.crops.items()]
    return [
        ("Assessment", assessment.name),
        ("Baseline", "{}-{}".format(*assessment.periods.baseline)),
        ("Horizons", ", ".join(horizons) or "none"),
        ("Crops", ", ".join(crops)),
        ("Regions", _regions(source)),
        ("Scenarios", ", ".join(source.scenarios) or "none"),
        ("Models", ", ".join(source.models) or "none"),
        ("Reference data", assessment.reference.name if assessment.reference else "none"),
        ("Made", f"{today}, Stook {VERSION}"),
        ("Digest of the assessment (SHA-256)", assessment_digest(assessment)),
    ]


def _regions(source: Source) -> str:
    """Name a few regions, count many."""
    names = source.regions
    shown = ", ".join(names) if len(names) <= 8 else str(len(names))
    return f"{shown} (a subset)" if source.assessment.subset else shown
