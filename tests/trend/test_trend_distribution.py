"""Distribution of trends over area: by hand, and independent of order and cuts."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from stook.trend.distribution import Histogram, distribution_table, whole_areas


def table(values: np.ndarray, areas: np.ndarray, cuts: list[slice]) -> pd.DataFrame:
    observed, random = Histogram(), Histogram()
    for cut in cuts:
        observed.add(values[:1, cut], areas[cut])
        random.add(values[1:, cut], areas[cut])
    return distribution_table("heat", "all", observed, random)


def test_areas_by_hand() -> None:
    values = np.array([[0.3, -0.3, 0.3], [0.0, 0.0, 0.7]])
    found = table(values, whole_areas(np.array([100.0, 50.0, 50.0])), [slice(None)])
    assert list(found.columns[:3]) == ["quantity", "period", "kind"]
    for kind, row in (
        ("observed", {0.3: 0.75, -0.3: 0.25}),
        ("randomised", {0.0: 0.75, 0.7: 0.25}),
    ):
        part = found[found["kind"] == kind]
        assert part["area_share"].sum() == pytest.approx(1.0, abs=1e-12)
        for value, share in row.items():
            inside = part[(part["bin_low"] <= value) & (value < part["bin_high"])]
            np.testing.assert_array_equal(inside["area_share"], [share])


def test_neither_order_nor_cuts_matter() -> None:
    random = np.random.default_rng(7)
    values = random.standard_normal((30, 90)) * np.linspace(0.1, 40, 90)
    values[:, 3] = np.nan
    values[:, 0] = 0.0
    areas = whole_areas(random.random(90) * 1000)
    whole = table(values, areas, [slice(None)])
    cut = table(values, areas, [slice(0, 1), slice(1, 5), slice(5, 60), slice(60, 90)])
    turned = table(values[:, ::-1], areas[::-1], [slice(0, 45), slice(45, 90)])
    pd.testing.assert_frame_equal(cut, whole, check_exact=True)
    pd.testing.assert_frame_equal(turned, whole, check_exact=True)


def test_against_numpy_on_the_same_bins() -> None:
    random = np.random.default_rng(8)
    values, areas = random.standard_normal((20, 50)), whole_areas(np.full(50, 2.5))
    found = table(values, areas, [slice(None)])
    part = found[found["kind"] == "randomised"]
    edges = np.append(part["bin_low"], part["bin_high"].iloc[-1])
    counts, _ = np.histogram(values[1:], edges)
    np.testing.assert_allclose(part["area_share"], counts / counts.sum(), rtol=1e-12)
    assert 40 <= (part["area_share"].cumsum().between(0.01, 0.99)).sum() <= 81


def test_zero_trends_and_none() -> None:
    zeros = table(np.zeros((3, 2)), whole_areas(np.ones(2)), [slice(None)])
    np.testing.assert_array_equal(zeros["area_share"], [1.0, 1.0])
    assert table(np.full((3, 2), np.nan), whole_areas(np.ones(2)), [slice(None)]).empty
    assert table(np.zeros((3, 2)), whole_areas(np.zeros(2)), [slice(None)]).empty
