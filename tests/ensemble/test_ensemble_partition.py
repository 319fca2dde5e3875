"""Partition of variance: known shares, hand cases, and an analysis of variance by statsmodels."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from risk_inputs import BASELINE, YEARS, settings, simulation, summary
from statsmodels.formula.api import ols
from stook.ensemble import smooth
from stook.ensemble.partition import (
    COMPONENTS,
    crossed_variances,
    partition_table,
    polynomial_variances,
)

LEAD = 2090


def ensemble(
    spreads: tuple[float, float, float, float],
    models: int = 10,
    scenarios: int = 3,
    draws: int = 20,
    regions: int = 3,
) -> list:
    """Return summaries of an ensemble of known variances in `LEAD`.

    Effects grow with the square of time and add up; their standard deviations in per cent of the
    baseline in `LEAD` are internal (10-year means), model, scenario, coefficients.
    """
    random = np.random.default_rng(42)
    noise, *sizes = spreads

    def effects(count: int, size: float) -> np.ndarray:
        values = random.standard_normal(count)
        return size * (values - values.mean()) / values.std()

    by_model, by_scenario, by_draw = (
        effects(count, size) for count, size in zip((models, scenarios, draws), sizes, strict=True)
    )
    course = np.clip((YEARS - 2005) / (LEAD - 2005), 0, None) ** 2
    runs = []
    for m in range(models):
        for s in range(scenarios):
            weather = noise * np.sqrt(10) * random.standard_normal((1, regions, YEARS.size))
            size = -20 + by_model[m] + by_scenario[s] + np.append(0.0, by_draw)
            percent = size[:, None, None] * course + weather
            production = 1e4 * (1 + percent / 100)
            runs.append(summary(production, simulation(f"MODEL-{m}", f"path-{s}")))
    return runs


@pytest.mark.parametrize(
    "spreads", [(2.0, 3.0, 4.0, 3.0), (1.0, 5.0, 2.0, 1.0), (2.5, 1.5, 1.0, 4.0)]
)
def test_known_shares_are_recovered_within_five_points(
    spreads: tuple[float, float, float, float],
) -> None:
    """The shares of the ensemble are known by construction (invented).

    The mean over twelve regions with weather of their own, and each region within the sampling
    error of three scenarios and ten models.
    """
    table = partition_table(ensemble(spreads, regions=12), np.ones(10))
    wanted = np.array(spreads) ** 2 / np.sum(np.square(spreads))
    for method in ("polynomial", "crossed"):
        rows = table[(table["year"] == LEAD) & (table["method"] == method)]
        shares = rows.pivot_table(index="region", columns="component", values="share")
        np.testing.assert_allclose(shares.sum(axis=1), 1)
        found = shares[list(COMPONENTS)].to_numpy()
        np.testing.assert_allclose(found.mean(axis=0), wanted, atol=0.05)
        np.testing.assert_allclose(found, np.tile(wanted, (12, 1)), atol=0.15)
        if method == "crossed":
            assert shares["interaction"].max() < 0.05


def test_internal_variability_dominates_early_and_scenario_grows() -> None:
    table = partition_table(ensemble((2.0, 3.0, 6.0, 2.0)), np.ones(10))
    rows = table[(table["method"] == "polynomial") & (table["region"] == "Saltmere")]
    shares = rows.pivot_table(index="year", columns="component", values="share")
    assert shares.loc[2025, "internal"] > 0.8
    assert shares.loc[2090, "scenario"] > shares.loc[2040, "scenario"]


def test_polynomial_by_hand() -> None:
    """Two scenarios of two models, two draws: every variance can be taken by eye."""
    paths = np.array([[[1.0, 3.0], [5.0, 7.0], [-1.0, 1.0], [3.0, 5.0]]])
    internal = np.array([[1.0, 3.0, 2.0, 2.0]])
    found = polynomial_variances(
        paths,
        internal,
        np.zeros((1, 4)),
        np.array([0, 0, 1, 1]),
        np.array([0, 1, 0, 1]),
        np.ones(2),
    )
    # means 2, 6, 0, 4: within a scenario +-2 about 4 and 2; draws +-1; scenarios 4, 2
    np.testing.assert_allclose(found, [[2.0, 4.0, 1.0, 1.0]])


def test_polynomial_weights_and_missing_simulations() -> None:
    paths = np.array([[[0.0], [8.0], [np.nan]]])
    internal = np.array([[1.0, 5.0, 7.0]])
    found = polynomial_variances(
        paths,
        internal,
        np.zeros((1, 3)),
        np.zeros(3, int),
        np.array([0, 1, 2]),
        np.array([3.0, 1.0, 1.0]),
    )
    # weights 3/4 and 1/4: internal 2, mean 2, variance 3/4 x 4 + 1/4 x 36
    np.testing.assert_allclose(found, [[2.0, 12.0, 0.0, 0.0]])


def test_noise_in_the_paths_is_taken_off() -> None:
    """Models that differ by the noise of their fits only have no spread of their own."""
    random = np.random.default_rng(5)
    paths = random.standard_normal((400, 6, 1)) * 2.0
    arguments = (np.zeros(6, int), np.arange(6), np.ones(6))
    rough = np.full((400, 6), 4.0)
    raw = polynomial_variances(paths, rough, 0 * rough, *arguments)[:, 1].mean()
    assert raw == pytest.approx(4.0 * 5 / 6, rel=0.05)
    # unclipped mean: the part taken off is w (1 - w) x noise summed = 4 x 5 / 6
    taken = raw - 4.0 * 5 / 6
    assert abs(taken) < 0.2


def test_parts_of_a_crossing_add_up_and_match_statsmodels() -> None:
    """Against statsmodels.stats.anova.anova_lm, type 1, on a balanced invented crossing."""
    random = np.random.default_rng(9)
    cells = random.normal(size=(1, 4, 3, 5)) + random.normal(size=(4, 1, 1))
    found = crossed_variances(cells, np.zeros(1))[0]
    m, s, d = np.meshgrid(range(4), range(3), range(5), indexing="ij")
    frame = pd.DataFrame({"m": m.ravel(), "s": s.ravel(), "d": d.ravel(), "y": cells.ravel()})
    table = sm.stats.anova_lm(ols("y ~ C(m) + C(s) + C(d)", frame).fit(), typ=1)
    squares = table["sum_sq"].to_numpy() / frame.shape[0]
    np.testing.assert_allclose(found, squares, rtol=1e-10)
    assert found.sum() == pytest.approx(cells.var())


def test_model_and_scenario_with_interaction_match_statsmodels() -> None:
    """One draw: what is left over is the model x scenario term of the analysis of variance."""
    random = np.random.default_rng(10)
    cells = random.normal(size=(1, 5, 3, 1))
    found = crossed_variances(cells, np.zeros(1))[0]
    twice = np.repeat(cells[0, :, :, 0].ravel(), 2)  # a second equal value leaves no residual
    m, s = (np.repeat(x.ravel(), 2) for x in np.meshgrid(range(5), range(3), indexing="ij"))
    frame = pd.DataFrame({"m": m, "s": s, "y": twice + np.tile([1e-7, -1e-7], 15)})
    table = sm.stats.anova_lm(ols("y ~ C(m) * C(s)", frame).fit(), typ=1)
    squares = table["sum_sq"].to_numpy() / 30
    np.testing.assert_allclose(found[[0, 1, 3]], squares[:3], rtol=1e-6)
    assert found[2] == 0


def test_smooth_path_is_the_polynomial_of_numpy() -> None:
    """Against numpy.polynomial.Polynomial.fit, with a year missing."""
    random = np.random.default_rng(1)
    values = random.standard_normal((3, YEARS.size)).cumsum(axis=1)
    kept = np.ones(YEARS.size, bool)
    kept[7] = False
    basis = smooth.polynomial_basis(YEARS, kept)
    paths, squares = smooth.fit(values, basis, kept)
    for row in range(3):
        line = np.polynomial.Polynomial.fit(YEARS[kept], values[row, kept], 4)
        np.testing.assert_allclose(paths[row], line(YEARS), rtol=1e-8, atol=1e-8)
        rest = values[row, kept] - line(YEARS[kept])
        assert squares[row] == pytest.approx((rest**2).sum())


def test_running_variance_of_single_years_is_and_of_running_means_is_unbiased() -> None:
    random = np.random.default_rng(2)
    values = random.standard_normal((2000, 60))
    years = np.arange(60)
    kept = np.ones(60, bool)
    basis = smooth.polynomial_basis(years, kept)
    paths, squares = smooth.fit(values, basis, kept)
    one = smooth.running_variance(values, paths, basis, years, kept, 1)
    np.testing.assert_allclose(one, squares / 55)
    assert one.mean() == pytest.approx(1.0, abs=0.02)
    ten = smooth.running_variance(values, paths, basis, years, kept, 10)
    assert ten.mean() == pytest.approx(0.1, abs=0.005)
    means = pd.Series(values[0] - paths[0]).rolling(10).mean().dropna()
    ratios = [pd.Series(v - p).rolling(10).mean().dropna().pow(2).mean() / t
              for v, p, t in zip(values[:3], paths[:3], ten[:3], strict=True)]  # fmt: skip
    np.testing.assert_allclose(ratios, (means**2).mean() / ten[0])


def test_detrended_deviation_is_that_of_a_regression() -> None:
    """Against statsmodels OLS, with a missing year."""
    random = np.random.default_rng(3)
    years = np.arange(1991, 2021)
    values = random.standard_normal((1, 30)) + 0.1 * years
    values[0, 4] = np.nan
    found = smooth.detrended_deviation(values, years, np.ones(30, bool))
    there = np.isfinite(values[0])
    line = sm.OLS(values[0, there], sm.add_constant(years[there])).fit()
    assert found[0] == pytest.approx(np.sqrt(line.mse_resid))


def test_noise_of_a_path_is_that_of_the_regression() -> None:
    """Variance of path minus its baseline mean, against the covariance of statsmodels OLS."""
    random = np.random.default_rng(4)
    production = 1e4 * (1 + 0.1 * random.standard_normal((1, 1, YEARS.size)))
    run = summary(production)
    place = (YEARS - 2040) / 60
    design = np.vander(place, 5)
    fit = sm.OLS(production[0, 0], design).fit()
    inside = (BASELINE[0] <= YEARS) & (BASELINE[1] >= YEARS)
    base = production[0, 0, inside].mean()
    for number, lead in enumerate(settings().leads):
        contrast = design[lead == YEARS][0] - design[inside].mean(axis=0)
        wanted = contrast @ fit.cov_params() @ contrast * (100 / base) ** 2
        assert run.noise[0, number] == pytest.approx(wanted, rel=1e-6)


def test_short_series_have_no_partition() -> None:
    production = np.full((2, 2, YEARS.size), np.nan)
    production[:, :, :15] = 5.0
    assert partition_table([summary(production)], np.ones(1)).empty
