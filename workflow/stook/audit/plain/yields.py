"""The yield response of one pixel, written for reading: a year at a time.

No code is shared with the yields stage but the response document and the random numbers.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from stook.randomness import generator
from stook.yields.response import Linear, Product, Quadratic, Response, Term
from stook.yields.technology import Technology


@dataclass(frozen=True)
class PlainYields:
    """Yields of one pixel by year; empty where the pixel has none.

    Attributes
    ----------
    ratio
        Yield over the mean of the baseline years.
    yields
        t/ha.
    effects
        By term: the term less its baseline mean.
    outside
        Names of the indices outside their estimation range.
    """

    ratio: dict[int, float]
    yields: dict[int, float]
    effects: dict[str, dict[int, float]]
    outside: dict[int, list[str]]


def yields_of_pixel(
    response: Response,
    coefficients: Sequence[float],
    indices: Mapping[str, Mapping[int, float]],
    baseline: tuple[int, int],
    baseline_yield: float,
) -> PlainYields:
    """Return the yields of one pixel.

    Parameters
    ----------
    response
        The response.
    coefficients
        In document order: the central estimate, or a draw.
    indices
        Value by index and year; NaN is missing.
    baseline
        First and last year of the baseline.
    baseline_yield
        t/ha.
    """
    used = [name for name in response.indices if any(name in t.used for t in terms_of(response))]
    years = [
        year
        for year in indices[used[0]]
        if not any(math.isnan(indices[name][year]) for name in used)
    ]
    parts: dict[str, dict[int, float]] = {}
    left = list(coefficients)
    for name, term in response.terms.items():
        own = [left.pop(0) for _ in term.coefficients]
        parts[name] = {
            year: term_value(response, term, own, [indices[index][year] for index in term.used])
            for year in years
        }
    level: dict[int, float] = {}
    for year in years:
        h = response.intercept + sum(part[year] for part in parts.values())
        level[year] = math.exp(h) if response.link == "log" else h
    base = [year for year in years if baseline[0] <= year <= baseline[1]]
    enough = 3 * len(base) >= 2 * (baseline[1] - baseline[0] + 1)
    mean = sum(level[year] for year in base) / len(base) if enough else -1.0
    if not mean > 0:
        return PlainYields({}, {}, {}, {})
    ratio = {year: max(value, 0.0) / mean for year, value in level.items()}
    effects = {}
    for name, part in parts.items():
        middle = sum(part[year] for year in base) / len(base)
        effects[name] = {year: value - middle for year, value in part.items()}
    outside = {
        year: [name for name in used if is_outside(response, name, indices[name][year])]
        for year in years
    }
    yields = {year: value * baseline_yield for year, value in ratio.items()}
    return PlainYields(ratio, yields, effects, outside)


def terms_of(response: Response) -> list[Term]:
    """Return the terms in document order."""
    return list(response.terms.values())


def term_value(
    response: Response, term: Term, coefficients: Sequence[float], values: Sequence[float]
) -> float:
    """Return one term of the predictor at the value of its index, or at two for a product.

    Where marginal effects are held, it is the value at the nearest point of the estimation range,
    and as much for every unit beyond as one unit brings there.
    """
    if response.extrapolation == "flag":
        return _value(term, coefficients, values)
    ranges = [response.estimation_range[name] for name in term.used]
    edge = [
        low if x < low else high if x > high else x
        for x, (low, high) in zip(values, ranges, strict=True)
    ]
    total = _value(term, coefficients, edge)
    for place, (x, (low, high)) in enumerate(zip(values, ranges, strict=True)):
        if x != edge[place]:
            inward = [(low + high) / 2 if at == place else e for at, e in enumerate(edge)]
            total += (x - edge[place]) * _slope(term, coefficients, edge, inward, place)
    return total


def _slope(
    term: Term,
    coefficients: Sequence[float],
    edge: Sequence[float],
    inward: Sequence[float],
    place: int,
) -> float:
    """Return the marginal effect of an index at an edge of its range, seen from inside."""
    if isinstance(term, Linear):
        return coefficients[0]
    if isinstance(term, Quadratic):
        return coefficients[0] + 2 * coefficients[1] * edge[0]
    if isinstance(term, Product):
        return coefficients[0] * edge[1 - place]
    between = [k for k in term.knots if min(edge[0], inward[0]) < k < max(edge[0], inward[0])]
    nearest = min([*between, inward[0]], key=lambda x: abs(x - edge[0]))
    rise = _value(term, coefficients, edge) - _value(term, coefficients, [nearest])
    return rise / (edge[0] - nearest)


def _value(term: Term, coefficients: Sequence[float], values: Sequence[float]) -> float:
    x = values[0]
    if isinstance(term, Product):
        return coefficients[0] * x * values[1]
    if isinstance(term, Linear):
        return coefficients[0] * x
    if isinstance(term, Quadratic):
        return coefficients[0] * x + coefficients[1] * x**2
    total = coefficients[0] * min(x, term.knots[0])
    for number, knot in enumerate(term.knots):
        following = term.knots[number + 1] if number + 1 < len(term.knots) else math.inf
        if x > knot:
            total += coefficients[number + 1] * (min(x, following) - knot)
    return total


def is_outside(response: Response, index: str, value: float) -> bool:
    """Return whether an index lies outside the range it was estimated in."""
    low, high = response.estimation_range[index]
    return not low <= value <= high


def technology_factor(
    technology: Technology, year: int, last: int, table: Mapping[int, float]
) -> float:
    """Return the technology factor of a year; `table` has the factors of a table by year."""
    n = year - last
    if n <= 0 or technology.form == "constant":
        return 1.0
    if technology.form == "linear":
        return 1 + n * technology.rate / 100
    if technology.form == "levelling-off":
        gap = (technology.ceiling - 100) / 100
        return 1 + gap - gap * math.exp(-n * technology.rate / 100 / gap)
    known = {last: 1.0} | {one: factor for one, factor in table.items() if one > last}
    before = max(one for one in known if one <= year)
    after = min(one for one in known if one >= year)
    if before == after:
        return known[before]
    share = (year - before) / (after - before)
    return known[before] + share * (known[after] - known[before])


def drawn_coefficients(response: Response, draws: int, seed: int) -> np.ndarray:
    """Return draws of the coefficients, shape (draw, k), the central estimate first.

    A draw is the central estimate plus standard normal numbers times the symmetric root of the
    covariance, taken on the scale of the correlations.
    """
    covariance = response.covariance_matrix
    errors = np.sqrt(np.diag(covariance))
    scale = np.where(errors > 0, errors, 1.0)
    u, s, _ = np.linalg.svd(covariance / np.outer(scale, scale))
    root = u @ np.diag(np.sqrt(s)) @ u.T
    normal = generator(seed, "coefficients", response.crop, response.system)
    rows = [response.coefficient_vector]
    for _ in range(draws):
        z = normal.standard_normal(len(errors))
        rows.append(response.coefficient_vector + errors * (root @ z))
    return np.array(rows)
