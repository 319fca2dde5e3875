"""The kernels against the plain path: every method, calendar and kind of trouble."""

from __future__ import annotations

import numpy as np
import pytest
from correct_inputs import CALENDARS, annual, correct, days, months, plain
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st
from stook.assessment.schema import VariableCorrection
from stook.audit.plain.correct import correct_series
from stook.correct.windows import Series

QUICK = settings(
    derandomize=True,
    deadline=None,
    max_examples=12,
    phases=[Phase.explicit, Phase.generate],
    suppress_health_check=[HealthCheck.too_slow],
)
CHOICES = st.fixed_dictionaries(
    {
        "method": st.sampled_from(["quantile-delta", "quantile", "delta", "mean"]),
        "window_days": st.sampled_from([31, 91, 5, 45, 365]),
        "step_days": st.sampled_from([5, 31, 10]),
        "cdf_years": st.sampled_from([5, 8, 30]),
        "cdf_step_years": st.sampled_from([1, 4, 10]),
        "nodes": st.sampled_from(["all", "all", 20, 7]),
        "ratio_cap": st.sampled_from([10.0, 1.5]),
        "minimum_values": st.just(10),
    }
)


def seasonal(random: np.random.Generator, axis: Series, ratio: bool) -> np.ndarray:
    """Return a series with a seasonal cycle; positive for ratios, often exactly zero."""
    cycle = np.cos(2 * np.pi * axis.position)
    if not ratio:
        return 10 + 8 * cycle + random.normal(0, 3, len(axis)) + 0.05 * (axis.year - 1990)
    amount = random.gamma(0.7, 4 + 2 * cycle)
    return np.where(random.random(len(axis)) < 0.4, random.choice([0.0, 0.02]), amount)


def trouble(random: np.random.Generator, values: np.ndarray, kind: str) -> np.ndarray:
    """Return a series with gaps, ties or a single value."""
    if kind == "gaps":
        values = np.where(random.random(len(values)) < 0.1, np.nan, values)
    if kind == "ties":
        values = np.round(values)
    if kind == "constant":
        values = np.full(len(values), 4.0)
    return values


def compare(axes: tuple[Series, ...], seed: int, kind: str, ratio: bool, **choice: object) -> None:
    random = np.random.default_rng(seed)
    trace = 0.05 if ratio and random.random() < 0.5 else 0.0
    o, f = (trouble(random, seasonal(random, axis, ratio), kind) for axis in (axes[0], axes[2]))
    inside = axes[2].years(int(axes[1].year[0]), int(axes[1].year[-1]))
    h = f[inside]
    dtype = np.float32 if seed % 2 else np.float64
    series = [values.astype(dtype) for values in (o, h, f)]
    found, reason, _ = correct(*series, axes, ratio, trace, **choice)
    expected = correct_series(
        *(plain(values, axis) for values, axis in zip(series, axes, strict=True)),
        VariableCorrection(**choice),
        ratio,
        trace,
    )
    assert (reason != 0) == bool(np.isnan(expected).all())
    np.testing.assert_allclose(found, expected, rtol=1e-6, atol=1e-5)


@QUICK
@given(
    seed=st.integers(0, 2**32),
    calendars=st.tuples(st.sampled_from(CALENDARS), st.sampled_from(CALENDARS)),
    kind=st.sampled_from(["plain", "gaps", "ties", "constant"]),
    ratio=st.booleans(),
    choice=CHOICES,
)
def test_daily(
    seed: int, calendars: tuple[str, str], kind: str, ratio: bool, choice: dict[str, object]
) -> None:
    f = days(1988, 1997, calendars[1])
    axes = (days(1990, 1994, calendars[0]), f.part(f.years(1990, 1994)), f)
    compare(axes, seed, kind, ratio, **choice)


@QUICK
@given(
    seed=st.integers(0, 2**32),
    kind=st.sampled_from(["plain", "gaps", "ties"]),
    ratio=st.booleans(),
    choice=CHOICES,
)
def test_monthly_and_annual(seed: int, kind: str, ratio: bool, choice: dict[str, object]) -> None:
    for axis in (months, annual):
        f = axis(1950, 2050)
        compare((axis(1961, 1990), f.part(f.years(1961, 1990)), f), seed, kind, ratio, **choice)


@pytest.mark.parametrize("method", ["quantile-delta", "quantile", "delta", "mean"])
@pytest.mark.parametrize("ratio", [False, True])
def test_default_options_at_full_length(method: str, ratio: bool) -> None:
    f = days(1981, 2030, "360_day")
    axes = (days(1991, 2020, "standard"), f.part(f.years(1991, 2020)), f)
    compare(axes, 4, "plain", ratio, method=method)
