"""Tables and sentences of the report, on rows small enough to check by hand (all invented)."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from stook.constants import OBSERVED, OUTSIDE
from stook.report.style import nice_limit, percent, signed
from stook.report.tables import (
    combined,
    in_order,
    index_changes,
    left_out_area,
    likelihood_share,
    main_findings,
    mass_unit,
    period_means,
    production_table,
    trend_summary,
)


def changes(**columns: list[object]) -> pd.DataFrame:
    frame = pd.DataFrame(columns)
    defaults = {
        "crop": "maize",
        "system": "rainfed",
        "scenario": "high",
        "horizon": "late",
        "models": 3,
        "change_p05": -20.0,
        "change_p95": 5.0,
    }
    return frame.assign(**{k: v for k, v in defaults.items() if k not in frame})


def test_combined_keeps_the_combination_or_the_only_system() -> None:
    frame = pd.DataFrame(
        {
            "crop": ["maize", "maize", "maize", "barley"],
            "system": ["rainfed", "irrigated", "all", "rainfed"],
            "value": [1, 2, 3, 4],
        }
    )
    assert list(combined(frame)["value"]) == [3, 4]
    assert combined(frame.iloc[:0]).empty


def test_in_order_follows_the_given_order_and_keeps_unknown_values_last() -> None:
    frame = pd.DataFrame({"region": ["c", "a", "x", "b"], "year": [1, 2, 3, 4]})
    assert list(in_order(frame, region=["b", "a", "c"])["region"]) == ["b", "a", "c", "x"]


def test_likelihood_share_is_the_share_in_the_named_direction() -> None:
    frame = pd.DataFrame({"share_decrease": [0.9, 0.2], "likelihood_of": ["decrease", "increase"]})
    assert list(likelihood_share(frame)) == pytest.approx([0.9, 0.8])


def test_finding_names_the_extremes_and_counts_regions() -> None:
    rows = changes(
        region=["A", "B", "C", OUTSIDE],
        change_p50=[-12.34, 3.0, -1.0, -99.0],
        share_decrease=[0.95, 0.2, 0.66, 1.0],
        agreement=[1.0, 2 / 3, 0.8, 1.0],
    )
    (finding,) = main_findings(rows, "late")
    minus = "\N{MINUS SIGN}"
    assert finding.text == (
        f"median yield change from {minus}12.3 % (A) to +3.0 % (B). Decrease in at least 66 % of "
        "members in 2 of 3 regions. Increase in at least 66 % of members in 1 of 3 regions. "
        "At least 80 % of models agree on the sign in 2 of 3."
    )


def test_finding_of_one_region_gives_its_range() -> None:
    rows = changes(region=["A"], change_p50=[-10.0], share_decrease=[0.9], agreement=[1.0])
    (finding,) = main_findings(rows, "late")
    minus = "\N{MINUS SIGN}"
    assert finding.text == (
        f"median yield change {minus}10.0 % in A (5-95 % range {minus}20.0 to +5.0 %); a decrease "
        "in 90 % of members. 100 % of models agree on the sign."
    )


def test_region_without_a_value_is_not_counted() -> None:
    rows = changes(
        region=["A", "B"],
        change_p50=[np.nan, -1.0],
        share_decrease=[np.nan, 0.7],
        agreement=[np.nan, 1.0],
    )
    assert "in B" in main_findings(rows, "late")[0].text
    assert main_findings(rows.iloc[:1], "late") == []


def test_production_keeps_the_central_draw_and_divides_by_area() -> None:
    totals = pd.DataFrame(
        {
            "region": ["A", "A", "B"],
            "system": "rainfed",
            "year": 2000,
            "draw": [0, 1, 0],
            "production_t": [50.0, 60.0, 0.0],
            "area_ha": [10.0, 10.0, 0.0],
            "missing_area_ha": [0.0, 0.0, 5.0],
        }
    )
    table = production_table({("S_high_r1", "maize"): totals})
    np.testing.assert_array_equal(table["yield"], [5.0, np.nan])
    assert list(table.columns[:5]) == ["crop", "system", "region", "simulation", "year"]
    assert "draw" not in table


def test_left_out_area_is_a_share_of_all_harvested_area() -> None:
    production = pd.DataFrame(
        {
            "crop": "maize",
            "system": "rainfed",
            "region": ["A", "A", "B"],
            "area_ha": [90.0, 95.0, 50.0],
            "missing_area_ha": [10.0, 5.0, 0.0],
        }
    )
    table = left_out_area(production)
    assert list(table["region"]) == ["A"]
    assert table["missing_area_ha"].item() == 10.0
    assert table["share"].item() == pytest.approx(0.1)


def test_index_changes_are_means_and_extremes_over_simulations() -> None:
    rows = []
    for simulation, scenario, late in (("a", "high", 14), ("b", "high", 20), ("o", OBSERVED, 99)):
        for year, value in ((2000, 10), (2001, 12), (2050, late)):
            rows.append([simulation, scenario, "maize", "rainfed", "heat", "day", year, value])
    keys = ["simulation", "scenario", "crop", "system", "quantity", "unit", "year", "value"]
    means = period_means(
        pd.DataFrame(rows, columns=keys), {"baseline": (2000, 2001), "late": (2050, 2060)}
    )
    row = index_changes(means, "baseline", "late").iloc[0]
    assert (row["baseline"], row["change"], row["lowest"], row["highest"]) == (11, 6, 3, 9)
    assert index_changes(means, "baseline", "later").empty


def test_trend_summary_counts_falling_and_rising_regions() -> None:
    trends = pd.DataFrame(
        {
            "crop": "maize",
            "system": "rainfed",
            "simulation": "s",
            "period": "all",
            "region": ["A", "B", "C", OUTSIDE],
            "slope": [-1.0, 1.0, -1.0, -1.0],
            "slope_percent": [-2.0, 2.0, -4.0, -9.0],
            "lag1": [0.1, 0.2, 0.3, 0.9],
            "p_ar1": [0.05, 0.01, 0.2, 0.001],
            "p_shuffle": [0.9, 0.9, 0.9, 0.9],
        }
    )
    row = trend_summary(trends, "p_ar1", 0.05).iloc[0]
    assert (row["regions"], row["falling"], row["rising"]) == (3, 1, 1)
    assert (row["slope_percent"], row["lag1"]) == (-2.0, 0.2)
    assert trend_summary(trends, "p_shuffle", 0.05).iloc[0]["falling"] == 0


@pytest.mark.parametrize(
    ("tonnes", "name", "shown"),
    [(900.0, "t", "900.0"), (25000.0, "thousand t", "25.0"), (3.21e7, "million t", "32.1")],
)
def test_mass_unit_keeps_numbers_short(tonnes: float, name: str, shown: str) -> None:
    unit = mass_unit(pd.Series([0.0, tonnes]))
    assert (unit.name, unit.show(tonnes)) == (name, shown)
    assert unit.show(float("nan")) == "n/a"


def test_numbers_in_words() -> None:
    minus = "\N{MINUS SIGN}"
    assert [signed(v) for v in (1.25, -1.25, 0.04, -0.04)] == ["+1.2", f"{minus}1.2", "0.0", "0.0"]
    assert signed(float("nan")) == "n/a"
    assert [percent(v) for v in (0.666, 1.0)] == ["67 %", "100 %"]
    assert percent(float("nan")) == "n/a"


@pytest.mark.parametrize(
    ("values", "limit"),
    [([1.0, -2.0], 5.0), ([12.0], 15.0), ([-20.0], 20.0), ([31.0], 50.0), ([np.nan], 5.0)],
)
def test_colour_limits_are_round(values: list[float], limit: float) -> None:
    assert nice_limit(np.array(values)) == limit
