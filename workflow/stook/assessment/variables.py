"""Which climate variables an assessment needs, and which of them a simulation can give."""

from __future__ import annotations

from collections.abc import Collection

from stook.assessment.schema import Assessment
from stook.season.definition import DaysAbove, IndexDefinition, Mean, needed_variables
from stook.yields.co2 import effect_of, with_co2
from stook.yields.response import Response, load_response


def system_response(assessment: Assessment, crop: str, system: str) -> Response:
    """Return the response of one crop x water system: its document, as the assessment uses it."""
    spec = assessment.system(crop, system)
    response = load_response(assessment.path(spec.response))
    if spec.extrapolation is None:
        return response
    return response.model_copy(update={"extrapolation": spec.extrapolation})


def yield_response(assessment: Assessment, crop: str, system: str) -> Response:
    """Return the response that yields are taken from: `system_response`, with CO2 if it is on."""
    response = system_response(assessment, crop, system)
    effect = effect_of(assessment.co2, crop)
    if effect is None or assessment.co2 is None:
        return response
    return with_co2(response, effect, assessment.co2.use)


def system_indices(assessment: Assessment, crop: str, system: str) -> dict[str, IndexDefinition]:
    """Return every index of one crop x water system: those of its response, then the extra ones."""
    return (
        system_response(assessment, crop, system).indices | assessment.system(crop, system).indices
    )


def sources(definition: IndexDefinition, available: Collection[str]) -> tuple[str, ...] | None:
    """Return the variables an index is computed from, given those available; None if it cannot be.

    ``tas`` that is not available itself is the mean of tasmin and tasmax (common practice).
    """
    wanted: list[str] = []
    for variable in needed_variables(definition):
        if variable in available:
            wanted.append(variable)
        elif variable == "tas" and {"tasmin", "tasmax"} <= set(available):
            if not isinstance(definition, Mean | DaysAbove):
                return None
            wanted += ["tasmin", "tasmax"]
        else:
            return None
    return tuple(dict.fromkeys(wanted))


def series_variables(assessment: Assessment, available: Collection[str]) -> list[str]:
    """Return the variables to prepare from those a simulation has: only what some index needs."""
    needed: set[str] = set()
    for crop, system in assessment.systems:
        for definition in system_indices(assessment, crop, system).values():
            needed |= set(sources(definition, available) or ())
    return [name for name in ("tas", "tasmin", "tasmax", "pr", "rsds", "hurs") if name in needed]
