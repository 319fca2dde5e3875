"""The kernels against the plain path, series by series."""

from __future__ import annotations

import numpy as np
import pytest
from stook.audit.plain.trend import break_of_series, trend_of_series
from stook.trend.breakpoint import find_break
from stook.trend.randomise import randomisations
from stook.trend.series import TrendOptions, series_trends

SEED, COUNT, MINIMUM = 23, 199, 20


def random_series(n: int) -> np.ndarray:
    """Return series of many kinds, shape (n, 12)."""
    random = np.random.default_rng(n)
    shocks = random.standard_normal((n, 12))
    result = shocks.copy()
    for t in range(1, n):
        result[t] += np.linspace(-0.4, 0.9, 12) * result[t - 1]
    result += np.linspace(-0.03, 0.03, 12) * np.arange(n)[:, None]
    result[:, 3] = np.floor(np.clip(3 * shocks[:, 3], 0, None))  # days above a threshold: ties
    result[:, 4] = 1e6 + 1e-3 * result[:, 4]  # large mean
    result[:2, 5] = np.nan  # first seasons missing
    result[[5, 17], 6] = np.nan  # a gap
    result[::3, 7] = np.nan  # too many gaps
    result[20 if n > 20 else 5 :, 8] = np.nan
    result[:, 9] = 4.2
    return result


@pytest.mark.parametrize("n", [25, 60, 61])
def test_same_as_the_plain_path(n: int) -> None:
    years = np.arange(n) + 1950
    values = random_series(n)
    found = {}
    for method in ("ar1", "blocks", "phases"):
        options = TrendOptions(SEED, COUNT, MINIMUM, method)
        found[method], _ = series_trends(values, years, options)
    trends = found["ar1"]
    for i in range(values.shape[1]):
        plain = trend_of_series(values[:, i], years, SEED, COUNT, MINIMUM)
        assert trends.years[i] == plain.years
        scale = 1e-12 + 1e-16 * np.nanmax(np.abs(values[:, i]))
        np.testing.assert_allclose(trends.slope[i], plain.slope, rtol=1e-7, atol=scale)
        np.testing.assert_allclose(trends.theil_sen[i], plain.theil_sen, rtol=1e-7, atol=scale)
        np.testing.assert_allclose(trends.lag1[i], plain.lag1, rtol=1e-6, atol=1e-12)
        np.testing.assert_array_equal(trends.p["ar1"][i], plain.p_ar1)
        np.testing.assert_array_equal(trends.p["shuffle"][i], plain.p_shuffle)
        np.testing.assert_array_equal(found["blocks"].p["blocks"][i], plain.p_blocks)
        np.testing.assert_array_equal(found["phases"].p["phases"][i], plain.p_phases)


def test_same_break_as_the_plain_path() -> None:
    years = np.arange(60) + 1950
    drawn = randomisations(SEED, tuple(years.tolist()), 99)
    for i in (0, 1, 2, 10, 11):
        values = random_series(60)[:, i] + 0.04 * i * np.clip(years - 1985, 0, None)
        found = find_break(values, drawn)
        assert found is not None
        assert (found.year, found.p) == break_of_series(values, years, SEED, 99)
