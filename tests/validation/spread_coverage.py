"""How often the true regional change lies within the 5-95 % range of an invented ensemble.

    python tests/validation/spread_coverage.py [--worlds 200] [--models 20] [--draws 200] [--json]

What is simulated: one region, yearly yields, nothing on a grid. In every invented world nature
and the climate models warm at rates drawn from one distribution, each with weather of its own,
and yields answer to temperature and rain with coefficients that are true for the world. The team
knows these only as a least-squares estimate from 40 years of another, noisy record, with its
standard errors and correlations, and draws from them. The true change is that of the expected
yield of the world: its own warming, the true coefficients, no weather. Members go through
`changes_of` and `Group.statistics`, as in the ensemble stage.

What is not: models that share errors, or differ from nature as a group; a wrong form of the
response; correction; scenarios. In the real world these make the range too narrow. The table
shows what the range owes to the coefficient draws, and what few models cost: percentiles of a
small sample lie inside those of the distribution it is from. With ``--json`` the last line is one
JSON object: coverage_90 (with draws), coverage_90_central (without), low, high (exact 90 %
interval of coverage_90 for the number of worlds).
"""

from __future__ import annotations

import argparse
import json

import numpy as np
from stook.assessment.simulations import Simulation
from stook.ensemble.changes import Group, changes_of, members_of
from stook.ensemble.series import Models, SystemSeries
from stook.ensemble.shortfall import exact_interval

YEARS = np.arange(1991, 2101)
BASELINE, HORIZON = (1991, 2020), (2071, 2100)
WARMING = (3.5, 1.0)  # K by 2100 against 2000: mean and spread of models and of nature
EFFECTS = np.array([-0.06, 0.04])  # log yield per K and per unit of rain: their means
RECORD = 40  # years the response is estimated from
WEATHER = (0.8, 1.0, 0.1)  # standard deviations of temperature, rain, log yield left over


def estimate(random: np.random.Generator, true: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return coefficients and their covariance, by least squares from a noisy record."""
    weather = random.standard_normal((RECORD, 2)) * WEATHER[:2]
    design = np.column_stack([np.ones(RECORD), weather])
    yields = weather @ true + WEATHER[2] * random.standard_normal(RECORD)
    inverse = np.linalg.inv(design.T @ design)
    found = inverse @ design.T @ yields
    left = yields - design @ found
    variance = left @ left / (RECORD - 3)
    return found[1:], variance * inverse[1:, 1:]


def course(strength: float) -> np.ndarray:
    """Return warming against 2000, K, accelerating to its strength in 2100."""
    place = np.clip((YEARS - 1991) / 109, 0, None)
    return strength * place**1.5


def true_change(strength: float, true: np.ndarray) -> float:
    """Return the change of the expected yield, per cent; its weather averaged out."""
    yields = np.exp(true[0] * course(strength))
    baseline, horizon = (
        yields[(first <= YEARS) & (last >= YEARS)].mean() for first, last in (BASELINE, HORIZON)
    )
    return float(100 * (horizon / baseline - 1))


def world(seed: int, models: int, draws: int) -> tuple[bool, bool, float]:
    """Return whether the range holds the truth with and without draws, and its width with."""
    random = np.random.default_rng([2026, seed])
    true = EFFECTS * (1 + 0.3 * random.standard_normal(2))
    mean, covariance = estimate(random, true)
    drawn = random.multivariate_normal(mean, covariance, draws)
    coefficients = np.vstack([mean, drawn])
    strengths = WARMING[0] + WARMING[1] * random.standard_normal(models + 1)
    series, runs = [], []
    for number, strength in enumerate(strengths[1:]):
        temperature = course(strength) + WEATHER[0] * random.standard_normal(YEARS.size)
        weather = np.stack([temperature, WEATHER[1] * random.standard_normal(YEARS.size)])
        production = np.exp(coefficients @ weather)[:, None, :]
        one = np.ones(1)
        flags = np.zeros((1, YEARS.size))
        series.append(SystemSeries(["Saltmere"], YEARS, production, one, 0 * one, flags))
        runs.append(Simulation(f"MODEL-{number}", "high", "r1", {}))
    group = Group(
        "maize", "rainfed", "high", runs, series, Models(np.arange(models), np.ones(models))
    )
    change = changes_of(series, BASELINE, HORIZON).change
    truth = true_change(float(strengths[0]), true)
    spread = group.statistics(members_of(change))[0][0]
    central = group.statistics(change[:, :1])[0][0]
    inside = [bool(found[3] <= truth <= found[-1]) for found in (spread, central)]
    return inside[0], inside[1], float(spread[-1] - spread[3])


def coverage(worlds: int, models: int, draws: int) -> tuple[float, float, float]:
    """Return coverage with draws, without, and the mean width of the range, per cent."""
    found = np.array([world(number, models, draws) for number in range(worlds)], dtype=float)
    return float(found[:, 0].mean()), float(found[:, 1].mean()), float(found[:, 2].mean())


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--worlds", type=int, default=200)
    parser.add_argument("--models", type=int, default=20)
    parser.add_argument("--draws", type=int, default=200)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    print(f"{given.worlds} invented worlds, {given.draws} draws")
    print("| models | in the 5-95 % range | without draws | mean width, points |")
    print("|---|---|---|---|")
    for models in sorted({5, 10, 40, given.models}):
        row = coverage(given.worlds, models, given.draws)
        print(f"| {models} | {100 * row[0]:.1f} % | {100 * row[1]:.1f} % | {row[2]:.1f} |")
        if models == given.models:
            chosen = row
    low, high = exact_interval(chosen[0], given.worlds)
    print(f"{given.models} models: 90 % interval {100 * low:.1f} to {100 * high:.1f} %")
    if given.json:
        result = {
            "coverage_90": round(chosen[0], 4),
            "coverage_90_central": round(chosen[1], 4),
            "low": round(low, 4),
            "high": round(high, 4),
        }
        print(json.dumps(result))


if __name__ == "__main__":
    main()
