"""The plan of a run: which files each rule reads and which results are wanted.

The rules hold wildcards and resources; everything that must be looked up in the assessment is
here. Paths are relative to the results folder, which is the working directory of every job.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from functools import cached_property
from pathlib import Path
from typing import Any, Protocol

import yaml

from stook.assessment.layout import STAGES, Layout
from stook.assessment.load import load_assessment, results_folder
from stook.assessment.schema import Assessment
from stook.assessment.simulations import Simulation, all_simulations
from stook.assessment.variables import series_variables
from stook.constants import OBSERVED
from stook.engine.fingerprints import Job, fingerprint
from stook.engine.resources import memory_mb, threads_per_job
from stook.errors import AssessmentError
from stook.grids.analysis import analysis_grid, tile_count
from stook.yields.co2 import effect_of
from stook.yields.technology import TableTechnology

RELATIVE = Layout(Path())
"""The layout as seen from inside the results folder."""


class Wildcards(Protocol):
    """The wildcards of a job, as attributes."""

    def get(self, name: str, default: Any = None) -> Any:
        """Return the value of a wildcard."""


class Plan:
    """One assessment as a set of jobs.

    Parameters
    ----------
    assessment
        Validated, with the region subset of this run.

    Raises
    ------
    StookError
        If files, simulations, responses or grid that the assessment names cannot be found.
    """

    def __init__(self, assessment: Assessment) -> None:
        self.assessment = assessment
        self.root = results_folder(assessment)
        self.simulations = {found.name: found for found in all_simulations(assessment)}
        analysis_grid(assessment)  # refuses an impossible grid and too many tiles
        self._variables: dict[frozenset[str], tuple[str, ...]] = {}

    @classmethod
    def from_config(cls, config: Mapping[str, Any]) -> Plan:
        """Return the plan of a Snakemake configuration.

        Parameters
        ----------
        config
            ``assessment``: the file; optionally ``region``: a name or a list of names, and
            ``set``: one ``key=value`` or a list of them.

        Raises
        ------
        AssessmentError
            If the assessment is not given or not valid.
        """
        return cls(assessment_of(config))

    @property
    def name(self) -> str:
        """Name of the results folder."""
        return self.root.name

    @cached_property
    def tiles(self) -> list[str]:
        """The tiles as they stand in file names."""
        return [f"{tile:02d}" for tile in range(tile_count(self.assessment))]

    @property
    def corrected(self) -> list[str]:
        """Names of the simulations that are corrected: all but `observed`."""
        return [name for name in self.simulations if name != OBSERVED]

    @property
    def scenarios(self) -> list[str]:
        """Scenario names, `observed` excluded."""
        found = [s.scenario for name, s in self.simulations.items() if name != OBSERVED]
        return list(dict.fromkeys(found))

    def variables(self, simulation: str) -> tuple[str, ...]:
        """Return the climate variables that are prepared of a simulation."""
        available = frozenset(self.simulations[simulation].files)
        if available not in self._variables:
            self._variables[available] = tuple(series_variables(self.assessment, available))
        return self._variables[available]

    # Inputs of the rules, as functions of the wildcards.

    def polygons(self, wildcards: Wildcards) -> str:
        """Return the file of the region polygons."""
        return self.inside(self.assessment.path(self.assessment.regions.file))

    def crop_layers(self, wildcards: Wildcards) -> list[str]:
        """Return the files of all crop areas, calendars and baseline yields."""
        found: dict[Path, None] = {}
        for crop, system in self.assessment.systems:
            spec = self.assessment.system(crop, system)
            layers = [spec.area, spec.calendar.planting, spec.calendar.maturity]
            for layer in [*layers, spec.baseline_yield]:
                if layer.file is not None:
                    found[self.assessment.path(layer.file)] = None
        return [self.inside(path) for path in found]

    def climate_files(self, wildcards: Wildcards) -> list[str]:
        """Return the raw files of the variables of a simulation that are prepared."""
        simulation: Simulation = self.simulations[wildcards.get("simulation")]
        names = self.variables(simulation.name)
        paths = dict.fromkeys(path for name in names for path in simulation.files[name])
        return [self.inside(path) for path in paths]

    def reference(self, wildcards: Wildcards) -> list[Path]:
        """Return the prepared reference of a tile, if there is a reference."""
        if OBSERVED not in self.simulations:
            return []
        return [RELATIVE.prepared(OBSERVED, wildcards.get("tile"))]

    def evaluations(self, wildcards: Wildcards) -> list[Path]:
        """Return the evaluations of all corrected simulations and tiles."""
        return [RELATIVE.evaluation(s, t) for s in self.corrected for t in self.tiles]

    def climate(self, wildcards: Wildcards) -> Path:
        """Return the climate grids that the season of a simulation is taken from."""
        return RELATIVE.climate(wildcards.get("simulation"), wildcards.get("tile"))

    def response(self, wildcards: Wildcards) -> str:
        """Return the response document of a crop x water system."""
        spec = self.assessment.system(wildcards.get("crop"), wildcards.get("system"))
        return self.inside(self.assessment.path(spec.response))

    def responses(self, wildcards: Wildcards) -> list[str]:
        """Return the response documents of all systems of a crop."""
        systems = self.assessment.crops[wildcards.get("crop")].systems.values()
        paths = [self.inside(self.assessment.path(spec.response)) for spec in systems]
        return list(dict.fromkeys(paths))

    def technology(self, wildcards: Wildcards) -> list[str]:
        """Return the table of the technology path of a crop, if it has one."""
        spec = self.assessment.crops[wildcards.get("crop")].technology
        if not isinstance(spec, TableTechnology):
            return []
        return [self.inside(self.assessment.path(spec.file))]

    def concentrations(self, wildcards: Wildcards) -> list[str]:
        """Return the table of CO2 concentrations, if it acts on a crop."""
        spec = self.assessment.co2
        if spec is None or effect_of(spec, wildcards.get("crop")) is None:
            return []
        return [self.inside(self.assessment.path(spec.file))]

    def seasons(self, wildcards: Wildcards) -> list[Path]:
        """Return the season tiles of a simulation, crop and system (all systems without one)."""
        return [
            RELATIVE.season(wildcards.get("simulation"), wildcards.get("crop"), system, tile)
            for system in self._systems(wildcards)
            for tile in self.tiles
        ]

    def coefficients(self, wildcards: Wildcards) -> list[Path]:
        """Return the coefficient draws of all systems of a crop."""
        crop = wildcards.get("crop")
        return [RELATIVE.coefficients(crop, system) for system in self._systems(wildcards)]

    def yields(self, wildcards: Wildcards) -> list[Path]:
        """Return the yields of a crop, all its systems, or a scenario's of one system."""
        crop, scenario = wildcards.get("crop"), wildcards.get("scenario")
        named = [wildcards.get("simulation")]
        if scenario is not None:
            named = [n for n in self.corrected if self.simulations[n].scenario == scenario]
        return [RELATIVE.yields(n, crop, s) for n in named for s in self._systems(wildcards)]

    def totals(self, wildcards: Wildcards) -> list[Path]:
        """Return the totals of all crops, of one simulation or of all."""
        one = wildcards.get("simulation")
        names = [one] if one else list(self.simulations)
        return [RELATIVE.totals(name, crop) for name in names for crop in self.assessment.crops]

    def global_means(self, wildcards: Wildcards) -> list[str]:
        """Return the table of global mean temperatures, if warming levels are wanted."""
        spec = self.assessment.ensemble.warming_levels
        return [self.inside(self.assessment.path(spec.file))] if spec else []

    def population(self, wildcards: Wildcards) -> list[str]:
        """Return the table of the people of each region, if one is given."""
        path = self.assessment.supply.population
        return [self.inside(self.assessment.path(path))] if path else []

    def observed_grids(self, wildcards: Wildcards) -> list[Path]:
        """Return season tiles, yields and draws of `observed`, of one or all systems of a crop."""
        crop = wildcards.get("crop")
        found: list[Path] = []
        for system in self._systems(wildcards):
            found += [RELATIVE.season(OBSERVED, crop, system, tile) for tile in self.tiles]
            found += [RELATIVE.yields(OBSERVED, crop, system), RELATIVE.coefficients(crop, system)]
        return found

    def before_report(self, wildcards: Wildcards) -> list[Path]:
        """Return every result the report may draw on."""
        return self.targets(STAGES[-2])

    # Targets.

    def targets(self, until: str = STAGES[-1]) -> list[Path]:
        """Return the results wanted of all stages up to and with one.

        Raises
        ------
        AssessmentError
            If there is no stage of that name.
        """
        if until not in STAGES:
            raise AssessmentError(f"no stage {until}; the stages are {', '.join(STAGES)}")
        wanted: list[Path] = []
        for stage in STAGES[: STAGES.index(until) + 1]:
            wanted += getattr(self, f"_{stage}_targets")()
        return wanted

    def _prepare_targets(self) -> list[Path]:
        tiles = [RELATIVE.prepared(s, t) for s in self.simulations for t in self.tiles]
        return [RELATIVE.overlay, RELATIVE.layers, *tiles]

    def _correct_targets(self) -> list[Path]:
        tiles = [RELATIVE.corrected(s, t) for s in self.corrected for t in self.tiles]
        return [*tiles, RELATIVE.evaluation_table] if self._evaluated else tiles

    @property
    def _evaluated(self) -> bool:
        """Whether there is something to evaluate the correction with."""
        return OBSERVED in self.simulations and bool(self.corrected)

    def _season_targets(self) -> list[Path]:
        return [
            RELATIVE.season(simulation, *pair, tile)
            for simulation in self.simulations
            for pair in self.assessment.systems
            for tile in self.tiles
        ]

    def _yields_targets(self) -> list[Path]:
        coefficients = [RELATIVE.coefficients(*pair) for pair in self.assessment.systems]
        return coefficients + [
            RELATIVE.yields(simulation, *pair)
            for simulation in self.simulations
            for pair in self.assessment.systems
        ]

    def _regions_targets(self) -> list[Path]:
        return [
            RELATIVE.totals(s, crop) for s in self.simulations for crop in self.assessment.crops
        ]

    def _ensemble_targets(self) -> list[Path]:
        tables = [RELATIVE.changes, RELATIVE.members, RELATIVE.yearly]
        tables.append(RELATIVE.ensemble_table("partition"))
        groups = [(*pair, name) for pair in self.assessment.systems for name in self.scenarios]
        calendar = bool(self.assessment.periods.horizons)
        if calendar:
            tables += [RELATIVE.ensemble_pixels(*group) for group in groups]
        if calendar or self.assessment.ensemble.warming_levels:
            tables += [RELATIVE.robustness_pixels(*group) for group in groups]
        return tables

    def _trend_targets(self) -> list[Path]:
        found = [RELATIVE.trend_regions(simulation) for simulation in self.simulations]
        for simulation in self.simulations:
            for pair in self.assessment.systems:
                found.append(RELATIVE.trend_pixels(simulation, *pair))
        if OBSERVED in self.simulations:
            found += [RELATIVE.impact(crop) for crop in self.assessment.crops]
            found += [RELATIVE.impact_map(*pair) for pair in self.assessment.systems]
        return found

    def _report_targets(self) -> list[Path]:
        return [RELATIVE.report_page]

    # Fingerprints and resources.

    def fingerprint(self, rule: str) -> Callable[[Wildcards], list[str]]:
        """Return the function of the wildcards that digests settings and code of a rule's jobs."""

        def digests(wildcards: Any) -> list[str]:
            given = dict(wildcards.items())
            simulation = given.get("simulation")
            variables = self.variables(simulation) if simulation else ()
            return fingerprint(rule, Job(self.assessment, given, variables))

        return digests

    def threads(self, cores: int | None) -> int:
        """Return the threads of one tile job when the run has so many cores."""
        return threads_per_job(cores, len(self.simulations) * len(self.tiles))

    def memory(self, rule: str, threads: int) -> int:
        """Return an upper estimate of the memory of one job, MiB."""
        return memory_mb(rule, self.assessment, threads)

    def inside(self, path: Path) -> str:
        """Return a path as seen from the results folder, so that both can be moved together."""
        return os.path.relpath(path, self.root)

    def _systems(self, wildcards: Wildcards) -> list[str]:
        system = wildcards.get("system")
        return [system] if system else list(self.assessment.crops[wildcards.get("crop")].systems)


def assessment_of(config: Mapping[str, Any]) -> Assessment:
    """Return the assessment of a Snakemake configuration; see `Plan.from_config`."""
    if "assessment" not in config:
        raise AssessmentError("no assessment given; add --config assessment=FILE")
    overrides, regions = (_list(config.get(key)) for key in ("set", "region"))
    return load_assessment(config["assessment"], overrides, regions)


def _list(given: Any) -> list[str]:
    """Return one value or a list of values, or the YAML text of a list, as a list of strings."""
    if isinstance(given, str) and given.startswith("["):
        given = yaml.safe_load(given)
    if given is None:
        return []
    return [str(item) for item in given] if isinstance(given, list | tuple) else [str(given)]
