"""Where every result lies. Rules, jobs, report and verify all take their paths from here."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from stook.assessment.load import RESOLVED_NAME, results_folder
from stook.assessment.schema import Assessment
from stook.constants import OBSERVED

STAGES = ("prepare", "correct", "season", "yields", "regions", "ensemble", "trend", "report")
"""The stages in their order; each has a folder of this name in the results."""


@dataclass(frozen=True)
class Layout:
    """Paths of one results folder, named by stage.

    A tile is a number from 0; `crop` and `system` are the names of the assessment file.
    """

    root: Path

    @classmethod
    def of(cls, assessment: Assessment) -> Layout:
        """Return the layout of an assessment's results folder."""
        return cls(results_folder(assessment))

    @property
    def assessment(self) -> Path:
        """The validated assessment, defaults included."""
        return self.root / RESOLVED_NAME

    @property
    def logs(self) -> Path:
        """Folder of job logs."""
        return self.root / "logs"

    @property
    def ledger(self) -> Path:
        """Folder of ledger records, one JSON file per result."""
        return self.root / "ledger"

    # prepare
    @property
    def layers(self) -> Path:
        """Crop layers on the analysis grid."""
        return self.root / "prepare" / "layers.nc"

    def prepared(self, simulation: str, tile: int | str) -> Path:
        """Prepared climate grids of a simulation."""
        return self.root / "prepare" / simulation / f"tile-{_tile(tile)}.nc"

    # correct
    def corrected(self, simulation: str, tile: int | str) -> Path:
        """Corrected climate grids of a simulation."""
        return self.root / "correct" / simulation / f"tile-{_tile(tile)}.nc"

    def transfer(self, simulation: str, tile: int | str) -> Path:
        """Transfer functions of the correction."""
        return self.root / "correct" / simulation / f"transfer-{_tile(tile)}.nc"

    def evaluation(self, simulation: str, tile: int | str) -> Path:
        """Split-sample evaluation of the correction, per pixel."""
        return self.root / "correct" / simulation / f"evaluation-{_tile(tile)}.nc"

    @property
    def evaluation_table(self) -> Path:
        """Split-sample evaluation of all simulations, over the crop area."""
        return self.root / "correct" / "evaluation.parquet"

    def climate(self, simulation: str, tile: int | str) -> Path:
        """The climate grids the season stage reads: prepared for `observed`, else corrected."""
        if simulation == OBSERVED:
            return self.prepared(simulation, tile)
        return self.corrected(simulation, tile)

    # season
    def season(self, simulation: str, crop: str, system: str, tile: int | str) -> Path:
        """Season indices of a simulation, crop and system."""
        return self.root / "season" / simulation / f"{crop}_{system}_tile-{_tile(tile)}.nc"

    # yields
    def coefficients(self, crop: str, system: str) -> Path:
        """Draws of the response coefficients."""
        return self.root / "yields" / "coefficients" / f"{crop}_{system}.csv"

    def yields(self, simulation: str, crop: str, system: str) -> Path:
        """Yield ratio and yield per pixel and year."""
        return self.root / "yields" / simulation / f"{crop}_{system}.nc"

    # regions
    @property
    def overlay(self) -> Path:
        """Fraction of each cell inside each region polygon."""
        return self.root / "regions" / "overlay.nc"

    def totals(self, simulation: str, crop: str) -> Path:
        """Production and area by region, system, year and draw."""
        return self.root / "regions" / simulation / f"{crop}.parquet"

    # ensemble
    @property
    def changes(self) -> Path:
        """Change against the baseline by region, crop, system, scenario and horizon."""
        return self.root / "ensemble" / "changes.parquet"

    @property
    def members(self) -> Path:
        """The member-level changes behind `changes`."""
        return self.root / "ensemble" / "members.parquet"

    @property
    def yearly(self) -> Path:
        """Spread per year."""
        return self.root / "ensemble" / "yearly.parquet"

    def ensemble_pixels(self, crop: str, system: str, scenario: str) -> Path:
        """Maps of yield change, spread and agreement."""
        return self.root / "ensemble" / "pixels" / f"{crop}_{system}_{scenario}.nc"

    def ensemble_table(self, name: str) -> Path:
        """A table of risk: see `stook.ensemble.risk.TABLES`, and windows."""
        return self.root / "ensemble" / f"{name}.parquet"

    def robustness_pixels(self, crop: str, system: str, scenario: str) -> Path:
        """Maps of the robustness of the change."""
        return self.root / "ensemble" / "robustness" / f"{crop}_{system}_{scenario}.nc"

    def area_losses(self, crop: str, system: str, scenario: str) -> Path:
        """Share of harvested area that loses more than a limit."""
        return self.root / "ensemble" / "losses" / f"{crop}_{system}_{scenario}.parquet"

    # trend
    def trend_pixels(self, simulation: str, crop: str, system: str) -> Path:
        """Maps of slopes, p-values and false discovery rate."""
        return self.root / "trend" / simulation / f"{crop}_{system}.nc"

    def trend_distribution(self, simulation: str, crop: str, system: str) -> Path:
        """Distribution of pixel trends and of randomised trends."""
        return self.root / "trend" / simulation / f"{crop}_{system}_distribution.parquet"

    def trend_field(self, simulation: str, crop: str, system: str) -> Path:
        """Field significance by region: area share significant, area-weighted mean trend."""
        return self.root / "trend" / simulation / f"{crop}_{system}_field.parquet"

    def trend_regions(self, simulation: str) -> Path:
        """Slopes and p-values of regional yields."""
        return self.root / "trend" / simulation / "regions.parquet"

    def impact(self, crop: str) -> Path:
        """Observed impact by region: yields under observed against detrended weather."""
        return self.root / "trend" / OBSERVED / f"{crop}_impact.parquet"

    def impact_map(self, crop: str, system: str) -> Path:
        """Maps of the observed impact."""
        return self.root / "trend" / OBSERVED / f"{crop}_{system}_impact.nc"

    # report
    @property
    def report(self) -> Path:
        """Folder of the report."""
        return self.root / "report"

    @property
    def report_page(self) -> Path:
        """The self-contained page."""
        return self.report / "report.html"


def _tile(tile: int | str) -> str:
    return tile if isinstance(tile, str) else f"{tile:02d}"
