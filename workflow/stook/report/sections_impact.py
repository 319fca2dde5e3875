"""The section on the observed impact: what the trends of the weather did to yields."""

from __future__ import annotations

import numpy as np
import pandas as pd

from stook.constants import OBSERVED
from stook.grids.files import open_result, read_table
from stook.report import assumptions, tables
from stook.report import rows as written
from stook.report.figures_impact import impact_chart, impact_map
from stook.report.page import Page
from stook.report.publisher import Publisher
from stook.report.source import Source

_BANDS = ("impact", "impact_p05", "impact_p50", "impact_p95", "share_decrease", "lag1")


def add_impact(source: Source, page: Page, publisher: Publisher) -> None:
    """Add ranked chart, maps and table of the observed impact, where there is one."""
    layout, spec = source.layout, source.assessment.trend
    if all(series.name != OBSERVED for series in source.series):
        return
    paths = [layout.impact(crop) for crop in source.assessment.crops]
    paths = [path for path in paths if path.is_file()]
    found = [table for table in map(read_table, paths) if not table.empty]
    if not found:
        return
    test = f"p_{spec.method}"
    impacts = pd.concat(found, ignore_index=True)
    publisher.table("impact", impacts, paths, "impact of the observed trends of the weather")
    page.impact_text = assumptions.impact(source.assessment)
    shown = tables.in_regions(tables.combined(impacts))
    shown = shown[shown["impact"].notna()]
    for period, rows in shown.groupby("period", sort=False):
        drawing = impact_chart(rows, str(period), test, spec.level)
        page.impacts.append(publisher.drawing(drawing, paths))
    if not shown.empty:
        page.impact_tables.append(written.impact_table(shown, test))
        _add_maps(source, page, publisher, test)


def _add_maps(source: Source, page: Page, publisher: Publisher, test: str) -> None:
    """Add a map per period, and hand the pixels on as NetCDF and GeoTIFF."""
    layout = source.layout
    paths = {pair: layout.impact_map(*pair) for pair in source.assessment.systems}
    pixels = {}
    for (crop, system), path in paths.items():
        if not path.is_file():
            continue
        with open_result(path) as dataset:
            pixels[crop, system] = dataset.load()
        publisher.grids(
            f"impact_{crop}_{system}",
            pixels[crop, system],
            {str(period): (*_BANDS, test) for period in pixels[crop, system]["period"].values},
            "period",
            [path],
            f"Impact of the observed trends of the weather on {crop}, {system}",
        )
    periods = {str(p): None for dataset in pixels.values() for p in dataset["period"].values}
    for period in periods:
        there = {k: d for k, d in pixels.items() if period in d["period"].values}
        values = [d["impact"].sel(period=period).values for d in there.values()]
        if all(np.isnan(one).all() for one in values):
            continue
        drawing = impact_map(there, period, test, source.assessment.trend.level, source.polygons)
        parents = [paths[pair] for pair in there]
        page.impacts.append(publisher.drawing(drawing, parents))
