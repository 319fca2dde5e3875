"""Adds the observed impact to an invented results folder: tables by region and maps."""

from __future__ import annotations

import numpy as np
import pandas as pd
import xarray as xr
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.constants import OUTSIDE
from stook.grids.analysis import analysis_grid
from stook.trend.impact_table import COLUMNS


def add_impact(
    assessment: Assessment, regions: list[str], periods: dict[str, tuple[int, int]], draws: bool
) -> None:
    """Write impact tables and maps of every crop; one region has no value."""
    random = np.random.default_rng(4)
    layout, grid = Layout.of(assessment), analysis_grid(assessment)
    for crop, spec in assessment.crops.items():
        systems = [*spec.systems, "all"] if len(spec.systems) > 1 else list(spec.systems)
        rows = []
        for period, (first, last) in periods.items():
            for system in systems:
                for number, region in enumerate([*regions, OUTSIDE]):
                    impact = 6.0 - 4.0 * number if number != 1 else np.nan
                    offsets = np.array([-3, -1.5, 0.2, 1.5, 3]) if draws else np.full(5, np.nan)
                    names = [crop, system, region, period, first, last, 30, impact]
                    chance = [0.9, -4.0, 4.5, 0.15, 0.04 if impact < -5 else 0.4, 0.03]
                    rows.append([*names, *(impact + offsets), *chance])
                    rows[-1] += [9.5e4, 1e5, -5.0, 2e4, 0.0]
        with Job(assessment, "trend_impact", []) as job:
            job.table(pd.DataFrame(rows, columns=COLUMNS), layout.impact(crop))
        for system in spec.systems:
            shape = (len(periods), *grid.shape)
            values = random.normal(-4, 5, shape)
            values[:, :3] = np.nan
            dims = ("period", "lat", "lon")
            data = {
                "impact": values,
                **{f"impact_p{p:02d}": values + p / 10 - 5 for p in (5, 50, 95)},
                "share_decrease": np.where(np.isnan(values), np.nan, (values < 0) * 1.0),
                "p_ar1": np.where(np.isnan(values), np.nan, random.uniform(0, 0.2, shape)),
                "lag1": 0 * values + 0.1,
            }
            ends = np.array(list(periods.values()))
            coordinates = grid.coordinates() | {
                "period": list(periods),
                "first_year": ("period", ends[:, 0]),
                "last_year": ("period", ends[:, 1]),
            }
            grids = xr.Dataset(
                {
                    name: (dims, array, {"long_name": name, "units": "1"})
                    for name, array in data.items()
                },
                coordinates,
            )
            with Job(assessment, "trend_impact_map", []) as job:
                job.netcdf(grids, layout.impact_map(crop, system), "impact")
