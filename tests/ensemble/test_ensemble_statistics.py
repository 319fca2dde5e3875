"""Weighted statistics of members: by hand, against numpy, and against the plain path."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from stook.audit.plain.ensemble import Member, summary
from stook.ensemble.kernels import (
    member_statistics,
    percentiles,
    period_means,
    simulation_weights,
)

SHARES = np.array([0.05, 0.17, 0.5, 0.83, 0.95])
EXAMPLES = settings(max_examples=60, deadline=None, derandomize=True)


def test_percentiles_by_hand() -> None:
    values, weights = np.array([30.0, 10, 20]), np.array([1.0, 2, 1])
    # 10 from 0 to 1/2, 20 to 3/4, 30 to 1. Effective members 16 / 6: windows of 3/8, begun at 0,
    # 5/16 and 5/8. The first holds 10 alone, the second as much of 10 as of 20, the third 1/8 of 20
    # and 1/4 of 30.
    found = percentiles(values, weights, np.array([0, 0.5, 1]))
    np.testing.assert_allclose(found, [10, 15, (20 / 8 + 30 / 4) / (3 / 8)], rtol=1e-14)


def test_percentiles_of_few() -> None:
    assert percentiles(np.array([7.0]), np.array([3.0]), SHARES).tolist() == [7.0] * 5
    assert percentiles(np.array([7.0, 9]), np.array([0.0, 1]), SHARES).tolist() == [9.0] * 5
    assert np.isnan(percentiles(np.array([7.0]), np.array([0.0]), SHARES)).all()
    assert np.isnan(percentiles(np.empty(0), np.empty(0), SHARES)).all()


numbers = st.lists(
    st.floats(-100, 100, allow_nan=False).map(lambda x: round(x, 3)), min_size=1, max_size=40
)


@EXAMPLES
@given(numbers, st.floats(0.1, 10))
def test_equal_weights_are_no_weights(values: list[float], weight: float) -> None:
    """numpy.percentile with its default, definition 7 of Hyndman & Fan (1996, Am. Stat. 50)."""
    members = np.array(values)
    equal = percentiles(members, np.full(members.size, weight), SHARES)
    np.testing.assert_allclose(equal, np.percentile(members, 100 * SHARES), rtol=1e-12, atol=1e-10)
    # The path for unequal weights tends to the same.
    nearly = np.full(members.size, weight)
    nearly[0] *= 1 + 1e-13
    np.testing.assert_allclose(percentiles(members, nearly, SHARES), equal, rtol=1e-9, atol=1e-9)


@EXAMPLES
@given(numbers, st.integers(0, 2**31))
def test_percentile_identities(values: list[float], seed: int) -> None:
    members = np.array(values)
    random = np.random.default_rng(seed)
    weights = random.uniform(0.1, 3, members.size)
    found = percentiles(members, weights, SHARES)
    assert (np.diff(found) >= -1e-12).all()
    assert found.min() >= members.min() - 1e-12
    assert found.max() <= members.max() + 1e-12
    order = random.permutation(members.size)
    np.testing.assert_allclose(
        percentiles(members[order], weights[order], SHARES), found, rtol=1e-9, atol=1e-9
    )
    np.testing.assert_allclose(percentiles(members, 4 * weights, SHARES), found, rtol=1e-12)
    turned = percentiles(-members, weights, 1 - SHARES[::-1])[::-1]
    np.testing.assert_allclose(turned, -found, rtol=1e-9, atol=1e-9)
    extra = percentiles(np.append(members, 1e6), np.append(weights, 0.0), SHARES)
    np.testing.assert_array_equal(extra, found)
    # Equal values may swap their weights.
    twins, first = np.append(members, members[0]), np.append(weights, 5.0)
    swapped = first.copy()
    swapped[[0, -1]] = swapped[[-1, 0]]
    np.testing.assert_allclose(
        percentiles(twins, first, SHARES), percentiles(twins, swapped, SHARES), atol=1e-9
    )


def test_weights_of_simulations() -> None:
    model = np.array([0, 0, 1, 2])
    there = np.array([True, True, True, True])
    equal = np.ones(3)
    np.testing.assert_allclose(
        simulation_weights(there, model, equal), [1 / 6, 1 / 6, 1 / 3, 1 / 3], rtol=1e-15
    )
    there[1] = False
    np.testing.assert_allclose(
        simulation_weights(there, model, equal), [1 / 3, 0, 1 / 3, 1 / 3], rtol=1e-15
    )
    given_weights = np.array([3.0, 1, 0])
    np.testing.assert_array_equal(
        simulation_weights(there, model, given_weights), [0.75, 0, 0.25, 0]
    )
    np.testing.assert_array_equal(simulation_weights(np.zeros(4, bool), model, equal), np.zeros(4))


def test_period_means_need_two_thirds() -> None:
    nan = np.nan
    values = np.array(
        [[1.0, 2, 3, 100], [1, nan, 3, 100], [nan, nan, 3, 100], [nan, nan, nan, 100]]
    )
    inside = np.array([True, True, True, False])
    np.testing.assert_array_equal(period_means(values, inside, 3), [2, 2, nan, nan])
    # Years that the series does not have at all count as missing.
    np.testing.assert_array_equal(period_means(values, inside, 5), [nan] * 4)
    np.testing.assert_array_equal(period_means(values[:1], inside, 4), [2])


@EXAMPLES
@given(
    st.integers(1, 6),
    st.integers(1, 4),
    st.integers(1, 5),
    st.booleans(),
    st.integers(0, 2**31),
)
def test_statistics_against_the_plain_path(
    runs: int, models: int, draws: int, weighted: bool, seed: int
) -> None:
    random = np.random.default_rng(seed)
    model = np.sort(random.integers(0, models, runs))
    weight = random.choice([0.0, 0.5, 1.0, 2.0], models) if weighted else np.ones(models)
    weight[model[0]] = 1.0
    number = np.repeat(np.arange(runs), draws)
    values = np.round(random.normal(-0.3, 1, (3, number.size)), 2)
    values[random.random(values.shape) < 0.15] = np.nan
    values[:, 0] = -1.0  # at least one member
    found, counts = member_statistics(values, number, model, weight, SHARES)
    for row in range(3):
        members = [
            Member(f"m{model[run]}", f"r{run}", value)
            for run, value in zip(number, values[row], strict=True)
        ]
        plain = summary(members, {f"m{k}": w for k, w in enumerate(weight)} if weighted else None)
        assert counts[row].tolist() == [plain.members, plain.simulations, plain.models]
        expected = [plain.mean, plain.share_decrease, plain.agreement, *plain.percentiles.values()]
        np.testing.assert_allclose(found[row], expected, rtol=1e-9, atol=1e-9)


def test_statistics_of_equal_members_are_those_of_numpy() -> None:
    values = np.random.default_rng(3).normal(-0.2, 1, (4, 60))
    number = np.repeat(np.arange(6), 10)
    found, counts = member_statistics(values, number, np.arange(6), np.ones(6), SHARES)
    np.testing.assert_allclose(found[:, 0], values.mean(axis=1), rtol=1e-12)
    np.testing.assert_allclose(found[:, 1], (values < 0).mean(axis=1), rtol=1e-12)
    np.testing.assert_allclose(found[:, 3:], np.percentile(values, 100 * SHARES, axis=1).T)
    np.testing.assert_array_equal(counts, np.tile([60, 6, 6], (4, 1)))


def test_no_member_and_no_change() -> None:
    values = np.array([[np.nan, np.nan], [0.0, 0.0]])
    found, counts = member_statistics(values, np.arange(2), np.arange(2), np.ones(2), SHARES)
    assert np.isnan(found[0]).all()
    assert counts[0].tolist() == [0, 0, 0]
    # No change has no sign; all models agree on that, and none has a decrease.
    assert found[1].tolist() == [0, 0, 1, 0, 0, 0, 0, 0]


def test_a_series_does_not_depend_on_its_neighbours() -> None:
    values = np.random.default_rng(4).normal(0, 1, (50, 30))
    number = np.repeat(np.arange(3), 10)
    weight = np.array([1.0, 2])
    model = np.array([0, 0, 1])
    whole, _ = member_statistics(values, number, model, weight, SHARES)
    for row in (0, 17, 49):
        one, _ = member_statistics(values[row : row + 1], number, model, weight, SHARES)
        np.testing.assert_array_equal(one[0], whole[row])


def test_agreement_counts_models_and_not_their_runs() -> None:
    # Model 0 has three runs that rise, models 1 and 2 fall: the median falls, two of three agree.
    values = np.array([[5.0, 5, 5, -4, -6]])
    model = np.array([0, 0, 0, 1, 2])
    found, counts = member_statistics(values, np.arange(5), model, np.ones(3), SHARES)
    assert found[0, 2] == pytest.approx(2 / 3)
    assert found[0, 1] == pytest.approx(2 / 3)
    assert counts[0].tolist() == [5, 5, 3]
