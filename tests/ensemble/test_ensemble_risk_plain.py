"""Tables of risk against the plain path, on random invented series."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from risk_inputs import BASELINE, YEARS, simulation, summary
from stook.audit.plain import risk as plain
from stook.ensemble.emergence import LASTING, emergence_years
from stook.ensemble.robustness import robustness_table
from stook.ensemble.series import Models
from stook.ensemble.short_years import REFERENCES

LATE = (2071, 2100)


def made(seed: int, fall: float, noise: float, gaps: int = 0) -> np.ndarray:
    random = np.random.default_rng(seed)
    course = 1 - fall * np.clip((YEARS - 2000) / 100, 0, None) ** 1.5
    values = 1e3 * (course + noise * random.standard_normal(YEARS.size))
    values[random.choice(YEARS.size, gaps, replace=False)] = np.nan
    return values


@settings(derandomize=True, max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.floats(-0.3, 0.6), st.floats(0.02, 0.25), st.integers(0, 6))
def test_shortfalls(seed: int, fall: float, noise: float, gaps: int) -> None:
    values = made(seed, fall, noise, gaps)
    run = summary(values[None, None], windows={"late": LATE})
    for number, period in enumerate((BASELINE, LATE)):
        for place in range(len(REFERENCES)):
            wanted = plain.shortfalls(
                YEARS.tolist(), values.tolist(), BASELINE, period, 25.0, place == 1
            )
            assert run.short[0, number, place, 0] == wanted


@settings(derandomize=True, max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.floats(-0.4, 0.8), st.floats(0.02, 0.2))
def test_emergence(seed: int, fall: float, noise: float) -> None:
    values = made(seed, fall, noise)
    run = summary(values[None, None])
    for ratio in (1.0, 2.0):
        found = emergence_years(run.signal, run.deviation, run.years, BASELINE[1], ratio)[0]
        wanted = plain.year_of_emergence(YEARS.tolist(), values.tolist(), BASELINE, ratio, LASTING)
        assert abs(found) == (wanted or 0)


@settings(derandomize=True, max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.floats(0, 0.15), st.integers(2, 7))
def test_robustness(seed: int, fall: float, count: int) -> None:
    runs, changes, deviations = [], [], []
    for number in range(count):
        values = made(seed + number, fall * (number - 1), 0.1)
        runs.append(
            summary(values[None, None], simulation(f"MODEL-{number}"), windows={"late": LATE})
        )
        base = plain.mean_of(YEARS.tolist(), values.tolist(), BASELINE)
        later = plain.mean_of(YEARS.tolist(), values.tolist(), LATE)
        changes.append(100 * (later / base - 1))
        line = plain.line_deviation(YEARS.tolist(), values.tolist(), BASELINE)
        deviations.append(100 * line / base)
    table = robustness_table(runs, Models(np.arange(count), np.ones(count)), ["late"])
    assert table["robustness"].item() == plain.robustness(changes, deviations, 30, 30)
    factor = 1.645 * np.sqrt(2 / 30)
    assert table["threshold"].item() == pytest.approx(factor * np.mean(deviations))
