"""The response document of an estimate."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import yaml

from stook.errors import InputError
from stook.fit.document import Fit
from stook.fit.estimate import Estimate, cluster_word
from stook.fit.panel import Sample
from stook.season.definition import IndexDefinition, describe
from stook.version import VERSION
from stook.yields.response import Response


def response_document(
    fit: Fit,
    found: Estimate,
    sample: Sample,
    definitions: Mapping[str, IndexDefinition],
    data: Mapping[str, str],
) -> Response:
    """Return an estimate as a response document.

    Parameters
    ----------
    fit, found, sample
        What was estimated.
    definitions
        Definition of every index.
    data
        SHA-256 of the data by what they are.

    Raises
    ------
    InputError
        If an index does not vary.
    """
    names = list(dict.fromkeys(index for term in found.terms.values() for index in term.used))
    for name in names:
        low, high = sample.ranges[name]
        if not low < high:
            raise InputError(f"index {name} is {low:g} everywhere in the panel; leave it out")
    content: dict[str, Any] = {
        "crop": fit.crop,
        "system": fit.system,
        "link": fit.link,
        "intercept": found.intercept,
        "indices": {name: _bare(definitions[name]) for name in names},
        "terms": _terms(found),
        "covariance": [[float(value) for value in row] for row in _symmetric(found)],
        "estimation_range": {name: [float(end) for end in sample.ranges[name]] for name in names},
        "citation": fit.citation,
        "note": note(fit, found, sample, data),
    }
    return Response.model_validate(content)


def response_text(response: Response) -> str:
    """Return a response document as YAML, numbers to their last digit."""
    content = response.model_dump(mode="json", exclude_none=True)
    content["indices"] = {name: _bare(index) for name, index in response.indices.items()}
    head = "".join(f"#   {name}: {describe(index)}\n" for name, index in response.indices.items())
    body = yaml.safe_dump(
        content, sort_keys=False, width=100, default_flow_style=None, allow_unicode=True
    )
    title = f"# Yield response of {response.crop}, {response.system}, estimated by stook fit.\n"
    return title + "# Indices:\n" + head + body


def note(fit: Fit, found: Estimate, sample: Sample, data: Mapping[str, str]) -> str:
    """Return where the numbers come from, in one paragraph."""
    rows = sample.rows
    years = rows["year"]
    trend = fit.trend.replace("-", " ")
    effects = [
        "unit effects" if fit.unit_effects else "no unit effects",
        *(["year effects"] if fit.year_effects else []),
        "no trend" if fit.trend == "none" else f"{trend} trend",
    ]
    method = fit.standard_errors.method.replace("-", " ")
    inputs = "no inputs"
    if fit.inputs:
        word = "held" if fit.response_holds_inputs else "not held"
        inputs = f"inputs {word}: {', '.join(fit.inputs)}"
    parts = [
        f"Estimated by stook fit {VERSION}, specification {found.name}",
        f"panel of {len(rows)} unit-years, {rows['unit'].nunique()} units, "
        f"{years.min()} to {years.max()} ({years.nunique()} years)",
        ", ".join(effects),
        inputs,
        f"standard errors by {method} ({found.clusters} {cluster_word(fit)})",
        *(f"{what} SHA-256 {digest}" for what, digest in data.items()),
    ]
    return "; ".join(parts) + "."


def _terms(found: Estimate) -> dict[str, Any]:
    result, start = {}, 0
    for name, term in found.terms.items():
        stop = start + len(term.coefficients)
        values = [float(value) for value in found.weather[start:stop]]
        content = term.model_dump(mode="json")
        if "coefficient" in content:
            content["coefficient"] = values[0]
        else:
            content["coefficients"] = values
        result[name], start = content, stop
    return result


def _symmetric(found: Estimate) -> Any:
    return (found.covariance + found.covariance.T) / 2


def _bare(index: IndexDefinition) -> dict[str, Any]:
    """Return an index as a person writes it: without what is the default."""
    return {"measure": index.measure} | index.model_dump(mode="json", exclude_defaults=True)
