"""False discovery rate within families."""

from __future__ import annotations

import numpy as np
from stook.trend.discovery import benjamini_hochberg, rate_for_level, significant_in_families


def test_largest_rank_that_passes() -> None:
    # .030 > .05/4, .040 > .05/2, .041 > .0375, but .042 <= .05: all four (derived by hand).
    p = np.array([0.042, 0.030, 0.041, 0.040])
    np.testing.assert_array_equal(benjamini_hochberg(p, 0.05), True)
    np.testing.assert_array_equal(benjamini_hochberg(p, 0.0419), False)


def test_equal_to_the_threshold_passes() -> None:
    # p = i / 1000 against alpha i / n: 0.001 * 50 / 0.05 = 1, without loss to rounding.
    p = np.concatenate([[0.001], np.full(49, 0.9)])
    assert benjamini_hochberg(p, 0.05).sum() == 1
    assert benjamini_hochberg(np.concatenate([p, [0.9]]), 0.05).sum() == 0


def test_empty_and_single() -> None:
    assert benjamini_hochberg(np.empty(0), 0.05).shape == (0,)
    np.testing.assert_array_equal(benjamini_hochberg(np.array([0.05]), 0.05), [True])
    np.testing.assert_array_equal(benjamini_hochberg(np.array([0.0501]), 0.05), [False])


def test_families_are_judged_apart() -> None:
    # Alone, the first family passes; pooled with the second, its p-values would not.
    p = np.array([0.06, 0.08, np.nan, 0.9, 0.9, 0.9, 0.9, 0.001])
    family = np.array([0, 0, 0, 1, 1, 1, 1, -1])
    found = significant_in_families(p, family, level=0.05)
    np.testing.assert_array_equal(found, [1, 1, -1, 0, 0, 0, 0, -1])
    assert not benjamini_hochberg(p[[0, 1, 3, 4, 5, 6]], rate_for_level(0.05)).any()


def test_rate_is_twice_the_level() -> None:
    # Wilks 2016, BAMS 97, 2263-2273: alpha_FDR = 2 alpha_global for correlated fields.
    assert rate_for_level(0.05) == 0.1


def test_a_family_alone_gives_the_same_map() -> None:
    random = np.random.default_rng(6)
    p, family = random.random(200) ** 3, random.integers(-1, 3, 200)
    whole = significant_in_families(p, family, 0.05)
    for number in range(3):
        only = np.where(family == number, 0, -1)
        part = significant_in_families(p, only, 0.05)
        np.testing.assert_array_equal(part[family == number], whole[family == number])
