"""Every mistake is one clear line."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest
from fit_inputs import INDICES, panel, write
from stook.errors import StookError
from stook.fit.job import run_fit


def message(path) -> str:
    with pytest.raises(StookError) as caught:
        run_fit(path)
    text = str(caught.value)
    assert "\n" not in text
    assert not (path.parent / "found").exists()
    return text.replace(str(path.parent) + "/", "")


def linear(*names: str) -> dict[str, Any]:
    return {"one": {name: {"form": "linear", "index": name} for name in names}}


def bent(*knots: float) -> dict[str, Any]:
    return {"one": {"heat": {"form": "piecewise-linear", "index": "heat", "knots": list(knots)}}}


DOCUMENTS: dict[str, tuple[dict[str, Any], str]] = {
    "knots out of order": (
        {"specifications": bent(40, 20)},
        "fit.yaml: specifications.one.heat.piecewise-linear: knots must increase, got [40.0, 20.0]",
    ),
    "coefficient written": (
        {
            "specifications": {
                "one": {"heat": {"form": "linear", "index": "heat", "coefficient": 1}}
            }
        },
        "fit.yaml: specifications.one.heat: coefficient is what the fit estimates; leave it out",
    ),
    "no specification of that name": (
        {"choose": "other"},
        "fit.yaml: document: choose: no specification other; there are heat-and-rain, heat-bent",
    ),
    "two trends": (
        {"year_effects": True},
        "fit.yaml: document: year_effects hold every common trend already; trend must be none or "
        "by unit",
    ),
    "unit trend without unit effects": (
        {"unit_effects": False, "trend": "linear-by-unit"},
        "fit.yaml: document: trend linear-by-unit needs unit_effects: true",
    ),
    "two sources of weather": (
        {"weather": {"table": "indices.csv", "assessment": "a.yaml", "indices": INDICES}},
        "fit.yaml: weather: give either assessment or table",
    ),
    "table without definitions": (
        {"weather": {"table": "indices.csv"}},
        "fit.yaml: weather: indices is required with a table: the definition of every index",
    ),
    "definitions beside an assessment": (
        {"weather": {"assessment": "a.yaml", "indices": INDICES}},
        "fit.yaml: weather: indices belongs to a table; an assessment defines its own",
    ),
    "unknown key": (
        {"trends": "linear"},
        "fit.yaml: trends: unknown key; valid here: crop, system, panel, columns, years, inputs, "
        "response_holds_inputs, weather, link, unit_effects, year_effects, trend, weight, "
        "specifications, choose, standard_errors, cross_validation, seed, citation, output",
    ),
    "index not available": (
        {"specifications": linear("heat", "frost")},
        "indices.csv: index frost has no definition; weather.indices has heat, rain",
    ),
    "missing input column": (
        {"inputs": {"labour": "log"}},
        "panel.csv: has no column labour; it has unit, year, yield, area, fertiliser, block",
    ),
    "missing unit column": (
        {"columns": {"unit": "district"}},
        "panel.csv: has no column district; it has unit, year, yield, area, fertiliser, block",
    ),
    "no panel": ({"panel": "none.csv"}, "none.csv: no such file"),
    "too few years asked for": (
        {"years": [2001, 2004]},
        "panel.csv: 4 years with yield and weather; a fit needs 5 or more",
    ),
    "knot outside the data": (
        {"specifications": bent(20, 400)},
        "fit.yaml: specification one: knot 400 of term heat lies outside the data (heat is ",
    ),
    "the same index twice": (
        {
            "specifications": {
                "one": {
                    "heat": {"form": "linear", "index": "heat"},
                    "again": {"form": "linear", "index": "heat"},
                }
            }
        },
        "fit.yaml: specification one: perfect collinearity: again cannot be told apart from the "
        "effects, trends and other terms in this panel; leave something out",
    ),
    "no assessment": ({"weather": {"assessment": "a.yaml"}}, "a.yaml: no such file"),
}


@pytest.mark.parametrize("name", DOCUMENTS)
def test_document(tmp_path, name: str) -> None:
    changes, expected = DOCUMENTS[name]
    assert message(write(tmp_path, panel(), **changes)).startswith(expected)


def changed(column: str, place: int, value: object) -> pd.DataFrame:
    frame = panel()
    frame[column] = frame[column].astype(object)
    frame.loc[place, column] = value
    return frame


def test_duplicated_unit_years(tmp_path) -> None:
    frame = panel()
    path = write(tmp_path, frame)
    pd.concat([frame, frame.iloc[[3]]]).to_csv(tmp_path / "panel.csv", index=False)
    assert message(path) == "panel.csv: unit 0 2003 stands twice; a unit has one row a year"
    pd.concat([frame, frame.iloc[:8]]).to_csv(tmp_path / "panel.csv", index=False)
    assert "unit 0 2004 and 3 more stand twice" in message(path)


def test_duplicated_unit_years_of_the_index_table(tmp_path) -> None:
    frame = panel()
    path = write(tmp_path, frame)
    pd.concat([frame, frame.iloc[[3]]]).to_csv(tmp_path / "indices.csv", index=False)
    assert message(path).startswith("indices.csv: unit 0 2003 stands twice")


def test_values_that_are_no_numbers(tmp_path) -> None:
    found = message(write(tmp_path, changed("yield", 4, "n/a?")))
    assert found == "panel.csv: line 6: yield is 'n/a?'; must be a number"
    found = message(write(tmp_path, changed("year", 4, 2004.5)))
    assert found == "panel.csv: year 2004.5 is not a whole number"
    found = message(write(tmp_path, changed("unit", 4, np.nan)))
    assert found == "panel.csv: line 6 has no unit or no year; give every row both"


def test_yields_and_inputs_without_logarithm(tmp_path) -> None:
    found = message(write(tmp_path, changed("yield", 4, 0.0)))
    assert found == (
        "panel.csv: yield of unit 0 2004 is 0 (1 such rows); a logarithm needs values above 0: "
        "mend the rows, or use link: level"
    )
    frame = changed("fertiliser", 4, -1.0)
    found = message(write(tmp_path, frame, inputs={"fertiliser": "log"}))
    assert found.endswith("mend the rows, or use inputs.fertiliser: level")
    found = message(write(tmp_path, changed("area", 4, 0.0), weight="area"))
    assert found == "panel.csv: area of unit 0 2004 is 0; a weight must be above 0"


def test_unit_without_weather(tmp_path) -> None:
    frame = panel()
    path = write(tmp_path, frame)
    frame[frame["unit"] != "unit 3"].to_csv(tmp_path / "indices.csv", index=False)
    assert message(path) == "panel.csv: no season indices for unit unit 3"


def test_unit_with_too_few_years(tmp_path) -> None:
    frame = panel()
    frame = frame[(frame["unit"] != "unit 3") | (frame["year"] < 2002)]
    found = message(write(tmp_path, frame, trend="linear-by-unit"))
    assert found == (
        "panel.csv: unit unit 3 has too few years; an effect and trend of its own need 3 or more"
    )


def test_one_unit_is_no_panel(tmp_path) -> None:
    found = message(write(tmp_path, panel(units=1)))
    assert found == "panel.csv: only one unit; a panel needs two or more"


def test_index_that_is_the_same_every_year(tmp_path) -> None:
    frame = panel()
    frame["rain"] = frame.groupby("unit")["rain"].transform("first")
    found = message(write(tmp_path, frame, specifications=linear("heat", "rain")))
    assert "perfect collinearity: rain cannot be told apart" in found


def test_covariance_of_more_coefficients_than_clusters(tmp_path) -> None:
    found = message(write(tmp_path, panel(units=3)))
    assert found == (
        "fit.yaml: specification heat-and-rain: the covariance of its 3 coefficients is singular: "
        "3 clusters are too few; cluster otherwise, or use fewer terms"
    )


def test_more_effects_than_rows(tmp_path) -> None:
    # 4 unit effects, 8 coefficients of their trends, 2 year effects besides, 6 of the weather: 20.
    terms = {**bent(15, 25, 40)["one"], "rain": {"form": "quadratic", "index": "rain"}}
    frame = panel(units=4, years=5)
    choices = {"trend": "quadratic-by-unit", "year_effects": True, "specifications": {"one": terms}}
    assert "20 unit-years are too few for so many effects, trends and terms" in message(
        write(tmp_path, frame, **choices)
    )


def test_space_needs_blocks(tmp_path) -> None:
    frame = panel().drop(columns="block")
    path = write(tmp_path, frame, standard_errors={"method": "bootstrap-space"})
    assert message(path).startswith("panel.csv: has no column block; it has unit,")
    path = write(tmp_path, frame.assign(block="b"), standard_errors={"method": "bootstrap-space"})
    assert "singular: 1 clusters are too few" in message(path)


def test_a_coefficient_that_hangs_on_one_cluster(tmp_path) -> None:
    frame = panel()
    frame["rain"] = np.where(frame["unit"] == "unit 3", frame["rain"], 400.0)
    found = message(write(tmp_path, frame, specifications=linear("heat", "rain")))
    assert found == (
        "fit.yaml: specification one: perfect collinearity without one of the 12 clusters: a "
        "coefficient hangs on that cluster alone; use fewer terms, or other knots"
    )
