"""Robustness, classes, losses, supply, and the tables of a whole invented ensemble."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from risk_inputs import REGIONS, YEARS, simulation, summary, tables_of, write_world
from stook.ensemble.classes import class_shares, class_table, successive_periods
from stook.ensemble.losses import add_losing, region_losses
from stook.ensemble.robustness import (
    Signal,
    classify,
    effective_models,
    robustness_table,
    variability_threshold,
)
from stook.ensemble.series import Models
from stook.ensemble.summary import TOTAL, with_total
from stook.ensemble.supply import energy_contents, read_population
from stook.errors import InputError

PER_PERSON = 2000 * 365.2425


def means(folder: Path) -> dict[str, object]:
    """Write global means that reach 1.5 K in both scenarios; return the assessment's section."""
    folder.mkdir(parents=True, exist_ok=True)
    years = np.arange(1850, 2101)
    parts = [
        pd.DataFrame({"year": years, "tas": 0.02 * np.clip(years - 1950, 0, None)}).assign(
            model=model, scenario=scenario, realisation="r1"
        )
        for model in ("ALDER-ESM", "ROWAN-CM", "SEDGE-LR")
        for scenario in ("moderate", "high")
    ]
    pd.concat(parts).to_csv(folder / "means.csv", index=False)
    return {"warming_levels": {"file": "means.csv", "levels": [1.5]}}


# Robustness


def test_threshold_of_two_twenty_year_means() -> None:
    """sqrt(2/20) x 1.645 s = 0.5202 s (IPCC AR6 WGI, Cross-Chapter Box Atlas.1)."""
    assert variability_threshold(np.array([2.0]), 20, 20)[0] == pytest.approx(2 * 0.5202, abs=1e-4)


@pytest.mark.parametrize(
    ("changes", "wanted"),
    [
        ([-9, -9, -9, -9, -9], Signal.ROBUST),
        ([-9, -9, -9, -9, 1], Signal.ROBUST),  # 80 % exceed and agree
        ([-9, -9, -9, 1, 1], Signal.NO_ROBUST_SIGNAL),  # 60 % exceed
        ([-9, -9, -9, 9, 9], Signal.CONFLICTING),  # all exceed, 60 % agree
        ([-1, -1, -1, -1, -1], Signal.NO_ROBUST_SIGNAL),
        ([np.nan] * 5, Signal.NO_VALUE),
    ],
)
def test_classes_of_the_advanced_approach(changes: list[float], wanted: Signal) -> None:
    change = np.array([changes], dtype=float)
    signal, _, _ = classify(change, np.full((1, 5), 5.0), np.arange(5), 5)
    assert signal[0] == wanted


def test_realisations_count_as_one_model() -> None:
    change = np.array([[-9.0, -9.0, -9.0, 9.0]])
    signal, shares, counts = classify(change, np.full((1, 4), 5.0), np.array([0, 0, 0, 1]), 2)
    assert signal[0] == Signal.CONFLICTING
    assert shares[0].tolist() == [1.0, 0.5]
    assert counts[0].tolist() == [2, 4]


def test_regional_robustness_uses_the_variability_of_the_baseline() -> None:
    random = np.random.default_rng(8)
    noise = random.standard_normal((1, 2, YEARS.size))
    fall = np.where(YEARS > 2020, -6.0, 0.0)
    production = 100 + fall + noise * np.array([2.0, 30.0])[None, :, None]
    runs = [summary(production, simulation(f"MODEL-{n}"), {"late": (2071, 2100)}) for n in (0, 1)]
    models = Models(np.arange(2), np.array([3.0, 1.0]))
    table = robustness_table(runs, models, ["late", "2-degC"]).set_index(["horizon", "region"])
    assert table.loc[("late", "Saltmere"), "robustness"] == "robust"
    assert table.loc[("late", "Brackwater"), "robustness"] == "no robust signal"
    assert pd.isna(table.loc[("2-degC", "Saltmere"), "robustness"])
    assert table.loc[("2-degC", "Saltmere"), "models"] == 0
    assert table.loc[("late", "Saltmere"), "effective_models"] == pytest.approx(16 / 10)
    baseline = (YEARS >= 1991) & (YEARS <= 2020)
    residuals = production[0, 0, baseline]
    line = np.polyval(np.polyfit(YEARS[baseline], residuals, 1), YEARS[baseline])
    deviation = np.sqrt(((residuals - line) ** 2).sum() / 28) / residuals.mean() * 100
    wanted = 1.645 * deviation * np.sqrt(2 / 30)
    assert table.loc[("late", "Saltmere"), "threshold"] == pytest.approx(wanted)


def test_effective_number_of_equal_models_is_their_number() -> None:
    there = np.array([True, True, True, False])
    models = Models(np.array([0, 0, 1, 2]), np.ones(3))
    assert effective_models(models, there) == 2
    assert effective_models(models, ~there & False) == 0


# Classes and losses


def test_successive_periods_and_shares_by_hand() -> None:
    assert successive_periods(2020, 2100, 20)[-1] == (2081, 2100)
    values = np.array([-30.0, -25.0, 0.0, 26.0, np.nan])
    shares = class_shares(values, np.array([1.0, 1.0, 2.0, 4.0, 9.0]), np.array([-25.0, 25.0]))
    np.testing.assert_allclose(shares, [1 / 8, 3 / 8, 4 / 8])


def test_class_table_with_and_without_draws() -> None:
    production = np.full((3, 1, YEARS.size), 100.0)
    production[1, :, YEARS > 2020] = 80.0
    steps = ((2021, 2040), (2041, 2060), (2061, 2080), (2081, 2100))
    table = class_table([summary(production)], Models(np.zeros(1, int), np.ones(1)), steps, [-10.0])
    late = table[table["first"] == 2081].set_index("number")
    assert late["share"].tolist() == [0.5, 0.5]
    assert late["central_share"].tolist() == [0.0, 1.0]
    assert np.isnan(late.loc[0, "lower"])
    assert late.loc[0, "upper"] == -10 == late.loc[1, "lower"]


def test_area_that_loses_by_hand() -> None:
    change = np.array([[-30.0, -12.0, 5.0, np.nan]])
    weights = np.array([[1.0, 2.0, 3.0, 4.0], [0.0, 1.0, 0.0, 0.0]])
    losing, whole = np.zeros((1, 2, 2)), np.zeros((1, 2))
    add_losing(change, weights, np.array([10.0, 25.0]), losing, whole)
    np.testing.assert_allclose(losing[0], [[3, 1], [1, 0]])
    np.testing.assert_allclose(whole[0], [6, 1])


def test_share_of_regions_that_lose() -> None:
    production = np.full((1, 3, YEARS.size), 100.0)
    production[:, 0, YEARS > 2020] = 70.0
    production[:, 1, YEARS > 2020] = 85.0
    run = summary(production, windows={"late": (2071, 2100)})
    table = region_losses([run], Models(np.zeros(1, int), np.ones(1)), ["late"])
    assert table.set_index("limit")["mean"].to_dict() == pytest.approx({10.0: 2 / 3, 25.0: 1 / 3})


# Supply


def test_energy_contents_are_those_of_the_handbook(tmp_path: Path) -> None:
    """FAO 2001, Food Balance Sheets: A Handbook, Annex I (from memory): maize 356, barley 332."""
    found = energy_contents(write_world(tmp_path))
    assert {crop: one.kcal for crop, one in found.items()} == {"maize": 356, "barley": 332}
    assert "FAO 2001" in found["maize"].basis
    own = {"energy": {"maize": {"kcal": 350, "basis": "maize flour, own"}}}
    found = energy_contents(write_world(tmp_path, extra={"supply": own}))
    assert (found["maize"].kcal, found["maize"].basis) == (350, "maize flour, own")


def test_supply_by_hand(tmp_path: Path) -> None:
    people = pd.DataFrame({"region": REGIONS, "population": [1e4, 2e4, 3e4]})
    people.to_csv(tmp_path / "people.csv", index=False)
    extra = {"supply": {"population": "people.csv"}}
    assessment = write_world(tmp_path, extra=extra)
    supply = tables_of(assessment)["supply"]
    chosen = supply[(supply["scenario"] == "high") & (supply["period"] == "2071-2100")]
    rows = chosen.set_index(["region", "crop"])
    maize, barley, both = (rows.loc[("Saltmere", c)] for c in ("maize", "barley", "all crops"))
    assert maize["kcal_mean"] == pytest.approx(maize["production_t_mean"] * 1e4 * 356)
    assert both["kcal_mean"] == pytest.approx(maize["kcal_mean"] + barley["kcal_mean"])
    assert both["people_p50"] == pytest.approx(both["kcal_p50"] / PER_PERSON)
    assert both["self_supply"] == pytest.approx(both["people_p50"] / 1e4)
    assert np.isnan(both["production_t_mean"])
    total = rows.loc[(TOTAL, "all crops")]
    assert total["kcal_mean"] == pytest.approx(
        sum(rows.loc[(name, "all crops"), "kcal_mean"] for name in REGIONS)
    )
    assert total["population"] == 6e4


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("region,people\nA,1\n", "lacks the column population"),
        ("region,population\nA,1\nA,2\n", "'A' stands twice"),
        ("region,population\nA,0\n", "population of 'A' must be a number above 0"),
    ],
)
def test_spoilt_population_is_refused(tmp_path: Path, content: str, message: str) -> None:
    path = tmp_path / "people.csv"
    path.write_text(content, encoding="utf-8")
    with pytest.raises(InputError, match=message):
        read_population(path)


# All tables


def test_sum_of_regions_leaves_out_what_lies_outside() -> None:
    from stook.ensemble.series import SystemSeries

    production = np.arange(12.0).reshape(1, 3, 4)
    names = ["Saltmere", "Brackwater", "outside all regions"]
    area = np.array([1.0, 2.0, 4.0])
    given = SystemSeries(names, np.arange(4), production, area, area, np.ones((3, 4)))
    whole = with_total(given)
    assert whole.regions[-1] == TOTAL
    np.testing.assert_array_equal(whole.production[0, -1], production[0, 0] + production[0, 1])
    assert whole.area[-1] == 3
    np.testing.assert_allclose(whole.extrapolated[-1], 1)


def test_a_run_for_one_region_gives_the_same_bits(tmp_path: Path) -> None:
    ensemble = means(tmp_path)
    whole = tables_of(write_world(tmp_path, draws=20, extra={"ensemble": ensemble}))
    for subset in (("Saltmere",), ("Saltmere", "Thornfold")):
        extra = {"ensemble": ensemble}
        part = tables_of(write_world(tmp_path, draws=20, subset=subset, extra=extra))
        for name, table in part.items():
            own = table[table["region"].isin(subset)].reset_index(drop=True)
            if name in ("joint", "losses"):
                own = table[(table["of"] == "crops") & table["region"].isin(subset)]
            wanted = whole[name][whole[name]["region"].isin(subset)]
            if name == "losses":
                continue  # of regions together: of those that are asked for
            assert len(own) > 0, name
            pd.testing.assert_frame_equal(
                own.reset_index(drop=True), wanted.reset_index(drop=True), check_exact=True
            )


def test_changes_at_a_level_are_those_of_its_window(tmp_path: Path) -> None:
    """A level all simulations reach in the same years equals a calendar window of these years."""
    ensemble = means(tmp_path)
    tables = tables_of(write_world(tmp_path, extra={"ensemble": ensemble}))
    levels = tables["levels"]
    assert set(levels["horizon"]) == {"1.5-degC"}
    first = tables["robustness"]
    assert set(first["horizon"]) == {"2041-2070", "2071-2100", "1.5-degC"}
    # 0.02 K a year from 1950: the mean of y..y+19 passes 1.5 K for y + 9.5 > 2025
    periods = {"baseline": [1991, 2020], "horizons": {"window": [2016, 2035]}}
    again = write_world(tmp_path, extra={"ensemble": ensemble, "periods": periods})
    rows = tables_of(again)["robustness"].set_index("horizon")
    np.testing.assert_array_equal(
        rows.loc["window", "share_exceeding"], rows.loc["1.5-degC", "share_exceeding"]
    )


def test_tables_hold_every_region_and_no_scenario_of_the_reference(tmp_path: Path) -> None:
    tables = tables_of(write_world(tmp_path))
    assert set(tables["classes"]["scenario"]) == {"moderate", "high"}
    assert set(tables["shortfall"]["scenario"]) == {"observed", "moderate", "high"}
    assert set(tables["partition"]["region"]) == {*REGIONS, TOTAL, "outside all regions"}
    assert tables["levels"].empty
    shares = tables["partition"].groupby(["crop", "system", "region", "method", "year"])["share"]
    np.testing.assert_allclose(shares.sum(), 1)
