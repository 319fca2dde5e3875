"""What was assumed, in words: read from the assessment and its response documents."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from stook.assessment.crops import Layer
from stook.assessment.schema import Assessment
from stook.assessment.variables import series_variables
from stook.season.definition import describe, unit_of
from stook.yields.response import PiecewiseLinear, Response
from stook.yields.technology import ConstantTechnology, describe_technology

Responses = Mapping[tuple[str, str], Response]
_VARIABLES = ("tas", "tasmin", "tasmax", "pr", "rsds", "hurs")


@dataclass(frozen=True)
class ResponseText:
    """One response document for the page."""

    crop: str
    system: str
    link: str
    terms: list[str]
    ranges: list[str]
    citation: str
    note: str


def general(assessment: Assessment) -> list[tuple[str, str]]:
    """Return what holds for every number of the report, as (subject, sentence)."""
    ensemble = assessment.ensemble
    weights = (
        "Every model counts the same, however many realisations it has."
        if ensemble.weights is None
        else "Model weights are given: "
        + ", ".join(f"{model} {weight:g}" for model, weight in ensemble.weights.items())
        + "."
    )
    draws = (
        f"{ensemble.draws} draws of the response coefficients besides the central estimate, the "
        "same draw for all pixels, years and simulations."
        if ensemble.draws
        else "No draws of the response coefficients: their uncertainty is not in the ranges."
    )
    return [
        (
            "Harvested area",
            "Held at its baseline, pixel by pixel. Production changes with yield alone.",
        ),
        ("Technology", _technology(assessment)),
        ("CO2", _co2(assessment)),
        (
            "Crop calendar",
            "Planting and maturity dates stay as they are; no shift with the climate.",
        ),
        (
            "Water",
            "Irrigated area is taken to receive the water its response was estimated with, in "
            "every year.",
        ),
        (
            "Not in the responses",
            "Pests, diseases, floods, soil loss, prices and policy, unless a response names them.",
        ),
        ("Models", weights),
        ("Response uncertainty", draws),
        ("Random numbers", f"Seed {assessment.seed}; the same seed gives the same values."),
    ]


def correction(assessment: Assessment) -> list[tuple[str, str]]:
    """Return how each climate variable was corrected, as (variable, sentence)."""
    if not (assessment.simulations.pattern or assessment.simulations.runs):
        return []
    first, last = assessment.correct.calibration or assessment.periods.baseline
    result = []
    for variable in series_variables(assessment, _VARIABLES):
        choice = assessment.correct.choice(variable)
        if choice.method == "none":
            result.append((variable, "not corrected"))
            continue
        text = f"{choice.method}, {choice.kind}; calibrated on {first}-{last}"
        if choice.method != "mean":
            text += f"; windows of {choice.window_days} days, a step every {choice.step_days}"
        if choice.method == "quantile-delta":
            text += f"; CDF of {choice.cdf_years} years, moved by {choice.cdf_step_years}"
        if choice.method == "delta":
            text = f"the record, changed by the simulated change of the mean: {text}"
            text += f"; means of {choice.cdf_years} years, moved by {choice.cdf_step_years}"
        if variable == "pr" and choice.kind == "ratio":
            text += f"; ratio capped at {choice.ratio_cap:g}, dry below {choice.trace:g} mm/day"
        if variable in ("tasmin", "tasmax"):
            text += f"; the pair as {assessment.correct.temperature_pair.replace('-', ' ')}"
        result.append((variable, text))
    return result


def trend(assessment: Assessment) -> str:
    """Return how trends were tested, one sentence or two."""
    spec = assessment.trend
    how = {
        "ar1": "series of the same lag-1 correlation but no trend (AR(1) surrogates)",
        "shuffle": "the years in random order",
        "blocks": "blocks of years in random order",
        "phases": "series of the same spectrum with Fourier phases at random",
    }[spec.method]
    return (
        f"Least-squares slopes against {spec.randomisations} randomisations; p-values quoted here "
        f"are from {how}. Level {spec.level:g}; series of fewer than {spec.minimum_years} years "
        "are not tested."
    )


def impact(assessment: Assessment) -> str:
    """Return how the observed impact was worked out, in a few sentences."""
    spec = assessment.trend
    return (
        "Yields under the observed weather against yields under the same weather without its "
        "trends: every season index of every pixel has its least-squares trend over the period "
        "taken out, its level in the first year kept, and the same responses are used for both "
        "(method of Lobell, Schlenker & Costa-Roberts 2011). The impact is the trend of their "
        "ratio over the period, in per cent of the yield without trends. Harvested area, "
        "technology and all that is not in a response are held constant. The p-value is that of "
        "the weather's trends, each weighted with what it did to yield, against "
        f"{spec.randomisations} randomisations; level {spec.level:g}."
    )


def crop_inputs(assessment: Assessment) -> list[tuple[str, str, str, str, str]]:
    """Return crop, system, and where area, calendar and baseline yield come from."""
    rows = []
    for crop, system in assessment.systems:
        spec = assessment.system(crop, system)
        calendar = f"{_layer(spec.calendar.planting)} to {_layer(spec.calendar.maturity)}"
        rows.append((crop, system, _layer(spec.area), calendar, _layer(spec.baseline_yield)))
    return rows


def _co2(assessment: Assessment) -> str:
    spec = assessment.co2
    if spec is None or spec.use == "off":
        return "The effect of rising CO2 on crops is not included."
    effects = "; ".join(
        f"{crop} {one.percent:g} % ({one.low:g} to {one.high:g} %) from {one.ppm[0]:g} to "
        f"{one.ppm[1]:g} ppm ({one.source})"
        for crop, one in spec.crops.items()
    )
    how = {"central": "the central effect in every draw", "drawn": "an effect drawn for each draw"}
    others = [crop for crop in assessment.crops if crop not in spec.crops]
    without = f" None on {', '.join(others)}." if others else ""
    return (
        f"The effect of rising CO2 on yields is included, {how[spec.use]}, as a power of the "
        f"concentration ({spec.file.name}): {effects}.{without} It is not in the observed impact. "
        "Published effects disagree: compare with a run without it."
    )


def _technology(assessment: Assessment) -> str:
    paths = {
        crop: describe_technology(spec.technology)
        for crop, spec in assessment.crops.items()
        if not isinstance(spec.technology, ConstantTechnology)
    }
    if not paths:
        return "Held constant. No breeding, no further inputs, no adaptation by farmers."
    given = "; ".join(f"{crop}: {path}" for crop, path in paths.items())
    return (
        "Changes, shortfalls, trends, and the production and people supplied beside them are at "
        "the technology of the baseline: what climate alone does. Yields and production by year "
        f"hold the path given ({given}). No adaptation by farmers to the climate."
    )


def _layer(layer: Layer) -> str:
    unit = f" {layer.unit}" if layer.unit else ""
    if layer.value is not None:
        return f"{layer.value:g}{unit}"
    inside = f" ({layer.variable})" if layer.variable else ""
    return f"{layer.file}{inside}{unit}"


def response_texts(responses: Responses) -> list[ResponseText]:
    """Describe every response document."""
    return [_response_text(crop, system, given) for (crop, system), given in responses.items()]


def _response_text(crop: str, system: str, response: Response) -> ResponseText:
    terms = []
    for name, term in response.terms.items():
        indices = " times ".join(describe(response.indices[index]) for index in term.used)
        knots = ""
        if isinstance(term, PiecewiseLinear):
            knots = f" (knots {', '.join(f'{knot:g}' for knot in term.knots)})"
        values = ", ".join(f"{value:.4g}" for value in term.coefficients)
        terms.append(f"{name}: {term.form}{knots} in {indices}; coefficients {values}")
    ranges = [
        f"{describe(response.indices[name])}: {low:g} to {high:g} {unit_of(response.indices[name])}"
        for name, (low, high) in response.estimation_range.items()
        if name in response.indices
    ]
    beyond = {
        "flag": "beyond these ranges the terms are followed as they are",
        "hold": "beyond these ranges the marginal effect of each index is held at the edge",
    }[response.extrapolation]
    ranges.append(beyond)
    link = {
        "log": "log: terms add up to the logarithm of yield",
        "level": "level: terms add up to yield, t/ha",
    }[response.link]
    citation, note = response.citation.strip().rstrip("."), response.note.strip()
    return ResponseText(crop, system, link, terms, ranges, citation, note)
