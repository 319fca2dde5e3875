"""Everything the report draws on, read once (files in, frames out)."""

from __future__ import annotations

from dataclasses import dataclass

import geopandas as gpd
import pandas as pd
from pyogrio.errors import DataLayerError, DataSourceError

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.sections import Years
from stook.assessment.simulations import Simulation, all_simulations
from stook.assessment.variables import system_response
from stook.constants import OBSERVED, OUTSIDE
from stook.errors import InputError
from stook.grids.files import read_table
from stook.report.assumptions import Responses
from stook.report.geo import EPSG
from stook.report.tables import in_order

BASELINE = "baseline"


@dataclass(frozen=True)
class Source:
    """An assessment with its tables, every table in the order of the assessment.

    Attributes
    ----------
    series
        All simulations, `observed` first if there is a reference.
    polygons
        Columns region and geometry, EPSG:4326, the regions that have results.
    """

    assessment: Assessment
    layout: Layout
    series: list[Simulation]
    responses: Responses
    polygons: gpd.GeoDataFrame
    changes: pd.DataFrame
    yearly: pd.DataFrame
    trends: pd.DataFrame
    evaluation: pd.DataFrame | None

    @property
    def runs(self) -> list[Simulation]:
        """The simulations without `observed`."""
        return [simulation for simulation in self.series if simulation.name != OBSERVED]

    @property
    def models(self) -> list[str]:
        """Model names."""
        return list(dict.fromkeys(simulation.model for simulation in self.runs))

    @property
    def scenarios(self) -> list[str]:
        """Scenario names in the order of the assessment."""
        given = self.assessment.simulations.scenarios
        return given or list(dict.fromkeys(simulation.scenario for simulation in self.runs))

    @property
    def horizons(self) -> dict[str, Years]:
        """First and last year of each horizon."""
        return self.assessment.periods.horizons

    @property
    def periods(self) -> dict[str, Years]:
        """The baseline and then the horizons."""
        return {BASELINE: self.assessment.periods.baseline} | self.horizons

    @property
    def regions(self) -> list[str]:
        """Names of the regions, in the order of their file."""
        return list(self.polygons["region"])


def read_source(assessment: Assessment) -> Source:
    """Read the tables of an assessment's results.

    Raises
    ------
    ResultsError
        If a table is missing or cannot be read.
    InputError
        If the region polygons cannot be read.
    """
    layout = Layout.of(assessment)
    series = all_simulations(assessment)
    yearly = read_table(layout.yearly)
    polygons = _polygons(assessment)
    polygons = polygons[polygons["region"].isin(yearly["region"])].reset_index(drop=True)
    crops = list(assessment.crops)
    regions = [*polygons["region"], OUTSIDE]
    names = [simulation.name for simulation in series]
    trends = [read_table(layout.trend_regions(name)).assign(simulation=name) for name in names]
    source = Source(
        assessment,
        layout,
        series,
        {pair: system_response(assessment, *pair) for pair in assessment.systems},
        polygons,
        read_table(layout.changes),
        yearly,
        pd.concat(trends, ignore_index=True),
        read_table(layout.evaluation_table) if _evaluated(series) else None,
    )
    return Source(
        **source.__dict__
        | {
            "changes": in_order(
                source.changes,
                crop=crops,
                region=regions,
                scenario=source.scenarios,
                horizon=list(source.horizons),
            ),
            "yearly": in_order(
                yearly, crop=crops, region=regions, scenario=[OBSERVED, *source.scenarios]
            ),
            "trends": in_order(source.trends, crop=crops, simulation=names, region=regions),
        }
    )


def _evaluated(series: list[Simulation]) -> bool:
    """Tell whether there was a reference to evaluate the correction of a simulation with."""
    return series[0].name == OBSERVED and len(series) > 1


def _polygons(assessment: Assessment) -> gpd.GeoDataFrame:
    spec = assessment.regions
    path = assessment.path(spec.file)
    try:
        frame = gpd.read_file(path, layer=spec.layer)
    except (DataSourceError, DataLayerError) as error:
        raise InputError(f"{path}: region polygons cannot be read ({error})") from None
    frame = frame.rename(columns={spec.name: "region"})[["region", "geometry"]].to_crs(EPSG)
    return frame.assign(region=frame["region"].astype(str))
