"""Cross-validation, bootstrap, and shares of farmer and weather, against plain loops."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf
import statsmodels.stats.sandwich_covariance as sandwich
from fit_inputs import TRUTH, estimated, load, panel, write
from stook.errors import InputError
from stook.fit.design import make_design
from stook.fit.estimate import estimate
from stook.fit.figures import curve_figure
from stook.fit.resampling import bootstrap
from stook.fit.tables import comparison, curves, farmer_and_weather
from stook.fit.validation import leave_units_out, leave_years_out
from stook.fit.writing import response_document
from stook.randomness import generator

WEATHER = " + heat + rain + I(rain**2)"


def prepared(frame: pd.DataFrame) -> pd.DataFrame:
    """Return the panel with the columns the plain formulas use."""
    return frame.assign(y=np.log(frame["yield"]), lf=np.log(frame["fertiliser"]))


def plain_errors(data: pd.DataFrame, formula: str, fold: pd.Series) -> pd.Series:
    """Refit by statsmodels without each fold and predict it."""
    errors = pd.Series(0.0, index=data.index)
    for value in fold.unique():
        out = fold == value
        found = smf.ols(formula, data[~out]).fit()
        errors[out] = data.loc[out, "y"] - found.predict(data[out])
    return errors


def rmse(errors: pd.Series) -> float:
    return float(np.sqrt((errors**2).mean()))


def test_years_left_out_equal_a_plain_loop(tmp_path) -> None:
    frame = panel(units=5, years=9)
    fit, sample = load(write(tmp_path, frame, inputs={"fertiliser": "log"}))
    design = make_design(fit, fit.specifications["heat-and-rain"], sample, inputs=True)
    found = leave_years_out(fit, design, sample)
    data = prepared(frame)
    base = "y ~ C(unit) + year + lf"
    assert found.rmse == pytest.approx(
        rmse(plain_errors(data, base + WEATHER, data["year"])), rel=1e-8
    )
    assert found.rmse_weather_free == pytest.approx(
        rmse(plain_errors(data, base, data["year"])), rel=1e-8
    )
    assert found.skill == pytest.approx(1 - found.rmse**2 / found.rmse_weather_free**2)


def test_blocks_of_years_are_left_out_together(tmp_path) -> None:
    frame = panel(units=5, years=9)
    fit, sample = load(write(tmp_path, frame, cross_validation={"years": 3}))
    design = make_design(fit, fit.specifications["heat-and-rain"], sample, inputs=False)
    data = prepared(frame)
    errors = plain_errors(data, "y ~ C(unit) + year" + WEATHER, (data["year"] - 2000) // 3)
    assert leave_years_out(fit, design, sample).rmse == pytest.approx(rmse(errors), rel=1e-8)


def test_year_effects_are_taken_out_of_the_errors_of_a_year(tmp_path) -> None:
    frame = panel(units=6, years=8)
    fit, sample = load(write(tmp_path, frame, trend="none", year_effects=True))
    design = make_design(fit, fit.specifications["heat-and-rain"], sample, inputs=False)
    found = leave_years_out(fit, design, sample)
    data = prepared(frame)
    errors = pd.Series(0.0, index=data.index)
    for year in data["year"].unique():
        out = data["year"] == year
        other = smf.ols("y ~ C(unit) + C(year)" + WEATHER, data[~out]).fit()
        known = data[out].assign(year=data.loc[~out, "year"].iloc[0])  # any year's effect
        error = data.loc[out, "y"] - other.predict(known)
        errors[out] = error - error.mean()
    assert found.rmse == pytest.approx(rmse(errors), rel=1e-8)


def test_units_left_out_equal_a_plain_loop(tmp_path) -> None:
    frame = panel(units=6, years=8)
    fit, sample = load(write(tmp_path, frame, cross_validation={"unit_groups": 6}))
    design = make_design(fit, fit.specifications["heat-and-rain"], sample, inputs=False)
    found = leave_units_out(fit, design, sample)
    data = prepared(frame)
    errors = pd.Series(0.0, index=data.index)
    for unit in data["unit"].unique():
        out = data["unit"] == unit
        other = smf.ols("y ~ C(unit) + year" + WEATHER, data[~out]).fit()
        known = data[out].assign(unit=data.loc[~out, "unit"].iloc[0])  # any unit's effect
        error = data.loc[out, "y"] - other.predict(known)
        errors[out] = error - error.mean()
    assert found.rmse == pytest.approx(rmse(errors), rel=1e-8)


def test_skill_is_near_none_when_weather_does_nothing(tmp_path) -> None:
    frame = panel(units=10, years=12)
    frame["yield"] = np.exp(np.random.default_rng(5).normal(1, 0.1, len(frame)))
    fit, sample = load(write(tmp_path, frame))
    found = {"heat-and-rain": estimate(fit, "heat-and-rain", sample, inputs=False)}
    row = comparison(fit, found, sample).iloc[0]
    assert -0.2 < row["skill_years"] < 0.05
    assert -0.2 < row["skill_units"] < 0.05
    assert row["r2_weather"] < 0.1


def test_information_criteria_and_r2_equal_statsmodels(tmp_path) -> None:
    frame = panel()
    found = estimated(write(tmp_path, frame), "heat-and-rain")
    data = prepared(frame)
    other = smf.ols("y ~ C(unit) + year" + WEATHER, data).fit()
    rows = len(data)
    constant = rows * (np.log(2 * np.pi) + 1)  # dropped: the same for every specification
    assert found.aic == pytest.approx(other.aic - constant, rel=1e-9)
    assert found.bic == pytest.approx(other.bic - constant, rel=1e-9)
    own = data["y"] - data.groupby("unit")["y"].transform("mean")
    assert found.r2_within == pytest.approx(1 - other.ssr / (own**2).sum(), rel=1e-9)
    plain = smf.ols("y ~ C(unit) + year", data).fit()
    assert found.r2_weather == pytest.approx(1 - other.ssr / plain.ssr, rel=1e-9)


@pytest.mark.parametrize("method", ["bootstrap-years", "bootstrap-space"])
def test_bootstrap_equals_refits_to_resampled_rows(tmp_path, method) -> None:
    """Rows drawn twice stand twice; units drawn twice are units of their own."""
    frame = panel(units=9, years=8)
    choices = {"method": method, "replications": 50}
    fit, sample = load(write(tmp_path, frame, standard_errors=choices, seed=3))
    terms = fit.specifications["heat-and-rain"]
    design = make_design(fit, terms, sample, inputs=False)
    blocks = sample.rows["block"].to_numpy() if method == "bootstrap-space" else None
    covariance, count = bootstrap(fit, design, sample, blocks, "heat-and-rain", 3)
    assert count == (3 if method == "bootstrap-space" else 8)
    random = generator(3, "fit", "heat-and-rain", method)
    data = prepared(frame)
    keys = sorted(data["block"].unique()) if blocks is not None else sorted(data["year"].unique())
    by = "block" if blocks is not None else "year"
    found = []
    for _ in range(50):
        drawn = random.integers(0, len(keys), (len(keys), 1)).ravel()
        parts = []
        for copy, place in enumerate(drawn):
            part = data[data[by] == keys[place]]
            parts.append(
                part.assign(unit=part["unit"] + f" copy {copy}") if by == "block" else part
            )
        rows = pd.concat(parts, ignore_index=True)
        means = rows[["unit", "y", "heat", "rain", "year"]].assign(square=rows["rain"] ** 2)
        left = means.drop(columns="unit") - means.groupby("unit").transform("mean")
        columns = left[["heat", "rain", "square", "year"]].to_numpy()
        found.append(np.linalg.lstsq(columns / 1e3, left["y"].to_numpy(), rcond=None)[0][:3] / 1e3)
    expected = np.cov(np.array(found).T)
    np.testing.assert_allclose(covariance, expected, rtol=1e-5)


def test_bootstrap_of_years_is_near_the_clustered_errors(tmp_path) -> None:
    frame = panel(units=10, years=30)
    clustered = estimated(
        write(tmp_path, frame, standard_errors={"method": "cluster-year"}), "heat-and-rain"
    )
    drawn = estimated(
        write(tmp_path, frame, standard_errors={"method": "bootstrap-years"}), "heat-and-rain"
    )
    ratio = np.sqrt(np.diag(drawn.covariance) / np.diag(clustered.covariance))
    assert ((ratio > 0.8) & (ratio < 1.25)).all()
    assert drawn.clusters == 30
    np.testing.assert_array_equal(drawn.weather, clustered.weather)
    longer = {"method": "bootstrap-years", "block_years": 3}
    assert estimated(write(tmp_path, frame, standard_errors=longer), "heat-and-rain").clusters == 10


def test_bootstrap_with_year_effects_keeps_every_replication(tmp_path) -> None:
    frame = panel(units=6, years=10)
    choices = {"method": "bootstrap-years", "replications": 50}
    path = write(tmp_path, frame, standard_errors=choices, trend="none", year_effects=True)
    found = estimated(path, "heat-and-rain")
    assert np.isfinite(found.covariance).all()


def test_bootstrap_says_when_a_term_is_seldom_determined(tmp_path) -> None:
    frame = panel(units=4, years=10)
    frame["rain"] = np.where(frame["year"] == 2003, frame["rain"], 400.0)
    linear = {"one": {"rain": {"form": "linear", "index": "rain"}}}
    choices = {"method": "bootstrap-years", "replications": 50}
    path = write(tmp_path, frame, standard_errors=choices, specifications=linear)
    with pytest.raises(InputError, match=r"specification one: perfect collinearity in \d+ of 50"):
        estimated(path, "one")


def test_shares_of_farmer_and_weather(tmp_path) -> None:
    frame = panel(noise=0.0)
    fit, sample = load(write(tmp_path, frame, inputs={"fertiliser": "log"}))
    shares = farmer_and_weather(fit, sample, "heat-and-rain")
    assert shares["unexplained"] == pytest.approx(0, abs=1e-12)
    assert sum(shares.values()) == pytest.approx(1, abs=1e-14)
    data = prepared(frame)
    left = {
        key: smf.ols(f"y ~ C(unit) + year{more}", data).fit().ssr
        for key, more in {"none": "", "w": WEATHER, "i": " + lf"}.items()
    }
    weather_first = 1 - left["w"] / left["none"]
    weather_last = left["i"] / left["none"]
    assert shares["weather"] == pytest.approx((weather_first + weather_last) / 2, rel=1e-9)


def test_curve_and_band_by_hand(tmp_path) -> None:
    frame = panel()
    fit, sample = load(write(tmp_path, frame))
    found = estimate(fit, "heat-and-rain", sample, inputs=False)
    table = curves(found, sample, fit.weather.indices, "log")
    rain = table[table["term"] == "rain"]
    last = rain.iloc[-1]
    top, mean = frame["rain"].max(), frame["rain"].mean()
    assert last["value"] == pytest.approx(top)
    change = np.array([top - mean, top**2 - mean**2])
    effect = change @ found.weather[1:]
    error = np.sqrt(change @ found.covariance[1:, 1:] @ change)
    reach = 2.2009852  # t, 11 degrees of freedom, 97.5 %: printed tables 2.201
    assert last["effect"] == pytest.approx(100 * np.expm1(effect), rel=1e-9)
    assert last["low"] == pytest.approx(100 * np.expm1(effect - reach * error), rel=1e-6)
    assert last["high"] == pytest.approx(100 * np.expm1(effect + reach * error), rel=1e-6)
    at_mean = rain[np.isclose(rain["value"], mean)]
    assert at_mean[["effect", "low", "high"]].abs().max(axis=None) < 1e-9
    assert (table[table["term"] == "heat"]["index_unit"] == "degC day").all()


def test_product_against_statsmodels(tmp_path) -> None:
    """statsmodels, least squares with dummies: the product of heat and rain; curves by hand."""
    frame = panel()
    terms = {
        "heat": {"form": "linear", "index": "heat"},
        "rain": {"form": "linear", "index": "rain"},
        "both": {"form": "product", "indices": ["heat", "rain"]},
    }
    fit, sample = load(write(tmp_path, frame, specifications={"product": terms}))
    found = estimate(fit, "product", sample, inputs=False)
    data = prepared(frame)
    expected = smf.ols("y ~ C(unit) + year + heat + rain + heat:rain", data).fit().params
    names = ["heat", "rain", "heat:rain"]
    np.testing.assert_allclose(found.weather, expected[names], rtol=1e-7)
    table = curves(found, sample, fit.weather.indices, "level")
    both = table[table["term"] == "both"]
    assert list(both["index"].unique()) == ["heat", "rain"]
    for index, other in (("heat", "rain"), ("rain", "heat")):
        last = both[both["index"] == index].iloc[-1]
        change = frame[other].mean() * (frame[index].max() - frame[index].mean())
        assert last["effect"] == pytest.approx(change * found.weather[2], rel=1e-9)
        error = abs(change) * np.sqrt(found.covariance[2, 2])
        assert last["high"] - last["effect"] == pytest.approx(2.2009852 * error, rel=1e-6)
    assert len(curve_figure(table, sample, "invented").figure.axes) == 6
    written = response_document(fit, found, sample, fit.weather.indices, {})
    assert written.terms["both"].used == ("heat", "rain")
    assert written.coefficient_vector[2] == found.weather[2]


def test_noiseless_panel_gives_the_truth(tmp_path) -> None:
    path = write(tmp_path, panel(noise=0.0), inputs={"fertiliser": "log"})
    found = estimated(path, "heat-and-rain")
    np.testing.assert_allclose(found.weather, TRUTH, rtol=1e-8)
    assert found.coefficients.loc["fertiliser", "coefficient"] == pytest.approx(0.1, rel=1e-9)
    assert found.coefficients.loc["trend.1", "coefficient"] == pytest.approx(0.01, rel=1e-9)


def test_clustering_both_ways_adds_and_takes_off(tmp_path) -> None:
    """Cameron, Gelbach & Miller 2011: by unit + by year - by observation, each with its rule."""
    frame = panel()
    path = write(tmp_path, frame, standard_errors={"method": "cluster-unit-year"})
    found = estimated(path, "heat-and-rain")
    other = smf.ols("y ~ C(unit) + year" + WEATHER, prepared(frame)).fit()
    keys = [pd.factorize(frame[key])[0] for key in ("unit", "year")]
    both = sandwich.cov_cluster_2groups(other, *keys)[0]
    places = [other.params.index.get_loc(name) for name in ("heat", "rain", "I(rain ** 2)")]
    np.testing.assert_allclose(found.covariance, both[np.ix_(places, places)], rtol=1e-6)
    assert found.clusters == 12
