"""Shortfalls, joint shortfalls and return periods: by hand and against scipy and statsmodels."""

from __future__ import annotations

import numpy as np
import pytest
from risk_inputs import YEARS, simulation, summary
from scipy import stats
from statsmodels.stats.proportion import proportion_confint
from stook.ensemble.joint import at_least, joint_crops, joint_regions, joint_shares
from stook.ensemble.series import Models
from stook.ensemble.shortfall import exact_interval, pooled, return_period, shortfall_table

ONE = Models(np.zeros(1, int), np.ones(1))
LATE = {"late": (2071, 2100)}


def test_shortfalls_are_counted_against_both_paths() -> None:
    """A level baseline of 100; later 90 with three years of 60: 40 % and 33 % below."""
    production = np.full((1, 1, YEARS.size), 100.0)
    production[..., YEARS > 2020] = 90.0
    production[..., np.isin(YEARS, [2075, 2080, 2085])] = 60.0
    production[..., YEARS == 2090] = 70.0  # 30 % below the baseline, 22 % below its own path
    table = shortfall_table([summary(production, windows=LATE)], ONE)
    rows = table.set_index(["period", "reference"])
    assert rows.loc[("baseline", "baseline mean"), "share"] == 0
    assert rows.loc[("late", "baseline mean"), "share"] == pytest.approx(4 / 30)
    assert rows.loc[("late", "smooth path"), "share"] == pytest.approx(3 / 30)
    late = rows.loc[("late", "baseline mean")]
    assert late["return_years"] == pytest.approx(7.5)
    assert (late["worst_t"], late["worst_percent"]) == (60.0, pytest.approx(60.0))
    found = stats.binomtest(4, 30).proportion_ci(0.90, method="exact")
    assert (late["low"], late["high"]) == pytest.approx((found.low, found.high))
    assert np.isnan(rows.loc[("baseline", "baseline mean"), "return_years"])
    assert rows.loc[("baseline", "baseline mean"), "return_low"] > 10


def test_a_year_exactly_at_the_limit_is_a_shortfall() -> None:
    production = np.full((1, 1, YEARS.size), 100.0)
    production[..., YEARS == 2080] = 75.0
    table = shortfall_table([summary(production, windows=LATE)], ONE)
    row = table[(table["period"] == "late") & (table["reference"] == "baseline mean")]
    assert row["share"].item() == pytest.approx(1 / 30)


def test_members_spread_with_the_draws_and_central_without() -> None:
    production = np.full((3, 1, YEARS.size), 100.0)
    production[2, :, YEARS >= 2086] = 50.0  # the second draw falls short in half the years
    table = shortfall_table([summary(production, windows=LATE)], ONE)
    row = table[(table["period"] == "late") & (table["reference"] == "baseline mean")].iloc[0]
    assert row["share"] == 0
    assert row["member_mean"] == pytest.approx(0.25)
    assert row["member_p95"] == pytest.approx(0.05 * 0 + 0.95 * 0.5)


def test_too_few_years_give_no_statement() -> None:
    production = np.full((1, 1, YEARS.size), 100.0)
    production[..., YEARS > 2085] = np.nan
    table = shortfall_table([summary(production, windows=LATE)], ONE)
    assert set(table["period"]) == {"baseline"}


@pytest.mark.parametrize(("events", "years"), [(0, 30), (1, 30), (7, 90), (30, 30)])
def test_interval_is_that_of_clopper_and_pearson(events: int, years: int) -> None:
    """Against scipy.stats.binomtest and statsmodels proportion_confint (method beta)."""
    low, high = exact_interval(events / years, years)
    found = stats.binomtest(events, years).proportion_ci(0.90, method="exact")
    assert (low, high) == pytest.approx((found.low, found.high))
    assert (low, high) == pytest.approx(
        proportion_confint(events, years, alpha=0.10, method="beta"), abs=1e-12
    )


def test_pooled_years_count_by_their_weights() -> None:
    share, years = pooled(np.array([0.1, 0.3]), np.array([30.0, 30.0]), np.array([0.5, 0.5]))
    assert (share, years) == pytest.approx((0.2, 60.0))
    share, years = pooled(np.array([0.1, 0.3]), np.array([30.0, 30.0]), np.array([1.0, 0.0]))
    assert (share, years) == pytest.approx((0.1, 30.0))
    assert np.isnan(return_period(0.0))
    assert np.isnan(exact_interval(np.nan, 0)).all()


def test_independent_shortfalls_are_binomial_for_equal_shares() -> None:
    """Against scipy.stats.binom, and against all outcomes counted out for unequal ones."""
    np.testing.assert_allclose(at_least(np.full(6, 0.2)), stats.binom.sf(np.arange(-1, 6), 6, 0.2))
    shares = np.array([0.1, 0.5, 0.7])
    wanted = np.zeros(4)
    for outcome in np.ndindex(2, 2, 2):
        chance = np.prod(np.where(outcome, shares, 1 - shares))
        wanted[: sum(outcome) + 1] += chance
    np.testing.assert_allclose(at_least(shares), wanted)


def test_joint_shares_by_hand() -> None:
    """Two units, short together in one of four known years, each in two."""
    flags = np.array([[1, 1, 0, 0, -1], [1, 0, 1, 0, 1]], np.int8)
    observed, independent, years = joint_shares(flags)
    np.testing.assert_allclose(observed, [1, 0.75, 0.25])
    np.testing.assert_allclose(independent, [1, 0.75, 0.25])
    assert years == 4
    observed, independent, _ = joint_shares(np.array([[1, 0, 0, 0], [1, 0, 0, 0]], np.int8))
    np.testing.assert_allclose(observed[2] / independent[2], 4.0)


def test_regions_that_fail_together_fail_more_often_than_independent_ones() -> None:
    production = np.full((1, 3, YEARS.size), 100.0)
    production[:, :, np.isin(YEARS, [2075, 2085, 2095])] = 50.0
    table = joint_regions([summary(production, windows=LATE)], ONE)
    row = table[
        (table["period"] == "late")
        & (table["reference"] == "baseline mean")
        & (table["at_least"] == 3)
    ].iloc[0]
    assert row["units"] == 3
    assert row["share"] == pytest.approx(0.1)
    assert row["independent"] == pytest.approx(0.001)
    assert row["ratio"] == pytest.approx(100)


def test_crops_that_fail_in_turn_never_fail_together() -> None:
    runs = []
    for bad in ([2075, 2085, 2095], [2076, 2086, 2096]):
        production = np.full((1, 1, YEARS.size), 100.0)
        production[..., np.isin(YEARS, bad)] = 50.0
        runs.append([summary(production, windows=LATE)])
    table = joint_crops(runs, ONE)
    rows = table[(table["period"] == "late") & (table["reference"] == "baseline mean")]
    both = rows.set_index("at_least")
    assert set(table["of"]) == {"crops"}
    assert both.loc[2, "share"] == 0
    assert both.loc[2, "independent"] == pytest.approx(0.01)
    assert both.loc[1, "share"] == pytest.approx(0.2)


def test_weights_of_models_decide_between_simulations() -> None:
    production = np.full((1, 1, YEARS.size), 100.0)
    bad = production.copy()
    bad[..., YEARS >= 2086] = 50.0
    runs = [
        summary(production, simulation("ALDER-ESM"), LATE),
        summary(bad, simulation("ROWAN-CM"), LATE),
    ]
    table = shortfall_table(runs, Models(np.array([0, 1]), np.array([3.0, 1.0])))
    row = table[(table["period"] == "late") & (table["reference"] == "baseline mean")].iloc[0]
    assert row["share"] == pytest.approx(0.125)
    assert row["years"] == 60
    joint = joint_regions(runs, Models(np.array([0, 1]), np.ones(2)))
    assert joint.empty  # one region has nothing to fail with
