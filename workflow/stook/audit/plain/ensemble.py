"""The ensemble stage for one region, written for reading: lists of numbers, no code shared."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

_SCALE = (
    # lowest share, highest share, word; narrower ranges first (Mastrandrea et al. 2010)
    (99.0, 100.0, "virtually certain"),
    (0.0, 1.0, "exceptionally unlikely"),
    (95.0, 100.0, "extremely likely"),
    (0.0, 5.0, "extremely unlikely"),
    (90.0, 100.0, "very likely"),
    (0.0, 10.0, "very unlikely"),
    (66.0, 100.0, "likely"),
    (50.0 + 1e-9, 100.0, "more likely than not"),
    (33.0, 66.0, "about as likely as not"),
    (0.0, 33.0, "unlikely"),
)


@dataclass(frozen=True)
class Member:
    """One simulation under one draw, and its value."""

    model: str
    simulation: str
    value: float


@dataclass(frozen=True)
class Summary:
    """What the members of one region, crop, system, scenario and horizon say together."""

    members: int
    simulations: int
    models: int
    mean: float
    percentiles: dict[int, float]
    share_decrease: float
    agreement: float
    word: str
    word_of: str


def change_percent(
    production: Mapping[int, float], baseline: tuple[int, int], horizon: tuple[int, int]
) -> float:
    """Return the change of mean production, per cent; NaN where a period lacks a third of years.

    Parameters
    ----------
    production
        t by year; NaN is missing.
    baseline, horizon
        First and last year.
    """
    means = []
    for first, last in (baseline, horizon):
        years = range(first, last + 1)
        found = [production[y] for y in years if y in production and not math.isnan(production[y])]
        if 3 * len(found) < 2 * len(years):
            return math.nan
        means.append(sum(found) / len(found))
    return 100 * (means[1] / means[0] - 1) if means[0] > 0 else math.nan


def summary(members: Sequence[Member], weights: Mapping[str, float] | None = None) -> Summary:
    """Summarise members: models weigh equally or as given, their simulations and draws share.

    Parameters
    ----------
    members
        All of one region and horizon; a NaN value is left out.
    weights
        By model.
    """
    there = [m for m in members if not math.isnan(m.value) and (weights or {}).get(m.model, 1) > 0]
    models = sorted({m.model for m in there})
    runs = {model: sorted({m.simulation for m in there if m.model == model}) for model in models}
    total = sum((weights or {}).get(model, 1) for model in models)
    shares = []
    for m in there:
        model_share = (weights or {}).get(m.model, 1) / total
        draws = sum(other.simulation == m.simulation for other in there)
        shares.append(model_share / len(runs[m.model]) / draws)
    pairs = sorted(zip([m.value for m in there], shares, strict=True))
    falling = sum(share for value, share in pairs if value < 0)
    percentiles = {p: _percentile(pairs, p / 100) for p in (5, 17, 50, 83, 95)}
    agreeing = [_sign(_model_mean(there, model)) == _sign(percentiles[50]) for model in models]
    of = "decrease" if falling >= 0.5 - 1e-12 else "increase"
    return Summary(
        len(there),
        sum(map(len, runs.values())),
        len(models),
        sum(value * share for value, share in pairs),
        percentiles,
        falling,
        sum(agreeing) / len(models),
        word(falling if of == "decrease" else 1 - falling),
        of,
    )


def _percentile(pairs: Sequence[tuple[float, float]], share: float) -> float:
    """Average what lies in a window of one effective member over the members laid end to end.

    `pairs` are values and weights, sorted by value, the weights summing to 1.
    """
    effective = 1 / sum(weight**2 for _, weight in pairs)
    low = share * (1 - 1 / effective)
    high = low + 1 / effective
    found = 0.0
    for k, (value, weight) in enumerate(pairs):
        start = sum(before for _, before in pairs[:k])
        inside = max(0.0, min(high, start + weight) - max(low, start))
        found += value * inside / (high - low)
    return found


def _model_mean(members: Sequence[Member], model: str) -> float:
    by_run: dict[str, list[float]] = {}
    for m in members:
        if m.model == model:
            by_run.setdefault(m.simulation, []).append(m.value)
    means = [sum(values) / len(values) for values in by_run.values()]
    return sum(means) / len(means)


def _sign(value: float) -> int:
    return int(value > 0) - int(value < 0)


def word(share: float) -> str:
    """Return the calibrated word for a share, 0 to 1."""
    percent = round(100 * share, 9)
    return next(text for low, high, text in _SCALE if low <= percent <= high)
