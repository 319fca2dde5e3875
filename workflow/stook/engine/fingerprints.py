"""What each job's result depends on, beside its input files: settings and code, as digests.

Snakemake keeps them with every result and runs a job again when one of them changes, so that a
changed key of the assessment reruns exactly the jobs it touches and those that follow.
"""

from __future__ import annotations

import functools
import hashlib
import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from pydantic import BaseModel

from stook.assessment.crops import WaterSystem
from stook.assessment.load import assessment_digest
from stook.assessment.schema import Assessment
from stook.assessment.variables import system_indices
from stook.engine.code import code_digest
from stook.yields.co2 import effect_of


@dataclass(frozen=True)
class Job:
    """One job to be: the assessment and the values of its wildcards."""

    assessment: Assessment
    wildcards: Mapping[str, str]
    variables: tuple[str, ...]
    """Climate variables of its simulation; empty if it has none."""

    @property
    def system(self) -> WaterSystem:
        """The crop x water system of its wildcards."""
        return self.assessment.system(self.wildcards["crop"], self.wildcards["system"])


def _layers(job: Job) -> Any:
    return {
        f"{crop}_{system}": {
            key: _plain(getattr(job.assessment.system(crop, system), key))
            for key in ("area", "calendar", "baseline_yield")
        }
        for crop, system in job.assessment.systems
    }


def _indices(job: Job) -> Any:
    indices = system_indices(job.assessment, job.wildcards["crop"], job.wildcards["system"])
    return {name: _plain(definition) for name, definition in indices.items()}


def _correction(job: Job) -> Any:
    spec = job.assessment.correct
    choices = {variable: _plain(spec.choice(variable)) for variable in job.variables}
    return [spec.temperature_pair, choices]


def _calibration(job: Job) -> Any:
    return job.assessment.correct.calibration or job.assessment.periods.baseline


def _extrapolation(job: Job) -> Any:
    systems = job.assessment.crops[job.wildcards["crop"]].systems
    own = job.wildcards.get("system")
    return {name: spec.extrapolation for name, spec in systems.items() if own in (None, name)}


def _co2(job: Job) -> Any:
    effect = effect_of(job.assessment.co2, job.wildcards["crop"])
    return [job.assessment.co2.use, _plain(effect)] if effect and job.assessment.co2 else None


def _grid(job: Job) -> Any:
    return job.assessment.grid.model_dump(mode="json", exclude={"tiles"})


def _levels(job: Job) -> Any:
    spec = job.assessment.ensemble.warming_levels
    return _plain(spec) if spec else None


SECTIONS: dict[str, Callable[[Job], Any]] = {
    "assessment": lambda job: assessment_digest(job.assessment),
    "baseline": lambda job: job.assessment.periods.baseline,
    "calibration": _calibration,
    "co2": _co2,
    "codec": lambda job: job.assessment.store.daily_codec,
    "correction": _correction,
    "draws": lambda job: job.assessment.ensemble.draws,
    "ensemble": lambda job: job.assessment.ensemble.model_dump(mode="json", exclude={"draws"}),
    "levels": _levels,
    "supply": lambda job: _plain(job.assessment.supply),
    "extrapolation": _extrapolation,
    "grid": _grid,
    "horizons": lambda job: job.assessment.periods.horizons,
    "indices": _indices,
    "layers": _layers,
    "phases": lambda job: job.system.phases,
    "regions": lambda job: _plain(job.assessment.regions),
    "seed": lambda job: job.assessment.seed,
    "span": lambda job: job.assessment.periods.span,
    "subset": lambda job: job.assessment.subset,
    "technology": lambda job: _plain(job.assessment.crops[job.wildcards["crop"]].technology),
    "tiles": lambda job: job.assessment.grid.tiles,
    "trend": lambda job: _plain(job.assessment.trend),
    "variables": lambda job: job.variables,
    "weights": lambda job: job.assessment.ensemble.weights,
}
"""The parts of an assessment a job may depend on, by the name shown when one has changed."""

RULES: dict[str, tuple[str, ...]] = {
    "regions_overlay": ("regions", "grid", "subset"),
    "prepare_layers": ("layers", "grid", "subset"),
    "prepare_tile": ("variables", "span", "grid", "tiles", "codec"),
    "correct_tile": ("variables", "correction", "calibration", "seed", "codec"),
    "correct_summary": (),
    "season_tile": ("indices", "phases"),
    "yields_coefficients": ("draws", "seed", "co2"),
    "yields_grid": ("baseline", "extrapolation", "technology", "co2"),
    "regions_totals": ("baseline", "extrapolation", "technology", "co2"),
    "ensemble_changes": ("baseline", "horizons", "weights"),
    "ensemble_pixels": ("baseline", "horizons", "weights"),
    "ensemble_risk": ("baseline", "horizons", "ensemble", "supply"),
    "ensemble_robustness": ("baseline", "horizons", "weights", "levels"),
    "trend_pixels": ("trend", "seed"),
    "trend_regions": ("trend", "seed", "baseline"),
    "trend_impact": ("trend", "seed", "baseline", "extrapolation"),
    "trend_impact_map": ("trend", "seed", "baseline", "extrapolation"),
    "report_page": ("assessment",),
}
"""The sections each rule depends on. What arrives through an input file is not repeated here."""


def fingerprint(rule: str, job: Job) -> list[str]:
    """Return the digests of a job, one ``name:digest`` for its code and each section.

    Parameters
    ----------
    rule
        A key of `RULES`, ``<stage>_<name>``.
    job
        The assessment and the job's wildcards.
    """
    stage, _, name = rule.partition("_")
    sections = {section: digest_of(SECTIONS[section](job)) for section in RULES[rule]}
    code = _code(f"stook.{stage}.job", name)
    return [f"{key}:{value}" for key, value in {"code": code, **sections}.items()]


def digest_of(content: Any) -> str:
    """Return 8 hexadecimal digits that stand for plain content, whatever the order of its keys."""
    text = json.dumps(content, sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()[:8]


@functools.cache
def _code(module: str, function: str) -> str:
    return code_digest(module, function)


def _plain(model: BaseModel) -> Any:
    return model.model_dump(mode="json")
