"""The section on the observed impact: chart, maps, table, sentences; absent without the files."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from invented_impact import add_impact
from invented_results import invent
from invented_world import World
from read_page import Reader
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.verify import verify
from stook.report import job
from stook.report.figures_impact import impact_chart

CROPS = {"maize": ("rainfed", "irrigated"), "barley": ("rainfed",)}
PERIODS = {"early": (1991, 2005), "late": (2001, 2020)}
WORLD = World(crops=CROPS, models=(), regions=4)


def report_of(folder: Path, draws: bool = True) -> tuple[Assessment, Reader]:
    assessment = invent(folder, WORLD)
    add_impact(assessment, WORLD.names, PERIODS, draws)
    job.page(assessment)
    reader = Reader()
    reader.feed(Layout.of(assessment).report_page.read_text(encoding="utf-8"))
    reader.close()
    assert reader.open == []
    return assessment, reader


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> tuple[Assessment, Reader]:
    return report_of(tmp_path_factory.mktemp("impact"))


def test_section_has_chart_map_and_table(made: tuple[Assessment, Reader]) -> None:
    assessment, page = made
    folder = Layout.of(assessment).report
    names = {path.stem for path in (folder / "figures").glob("impact_*.png")}
    assert names == {f"impact_{kind}{period}" for kind in ("", "map_") for period in PERIODS}
    assert "impact" in {attributes.get("id") for attributes in page.all("section")}
    maps = {path.name for path in (folder / "maps").glob("impact_*")}
    pairs = ("maize_rainfed", "maize_irrigated", "barley_rainfed")
    assert maps == {f"impact_{pair}.nc" for pair in pairs} | {
        f"impact_{pair}_{period}.tif" for pair in pairs for period in PERIODS
    }
    assert verify(Layout.of(assessment).root) == []


def test_sentences_name_the_method_and_its_limits(made: tuple[Assessment, Reader]) -> None:
    text = " ".join(made[1].text.split())
    for words in (
        "method of Lobell, Schlenker & Costa-Roberts 2011",
        "its level in the first year kept",
        "Harvested area, technology and all that is not in a response are held constant",
        "against 999 randomisations; level 0.05",
        "this is no measured loss",
    ):
        assert words in text


def test_regions_are_ranked_and_numbers_are_those_of_the_table(
    made: tuple[Assessment, Reader],
) -> None:
    assessment, page = made
    numbers = pd.read_csv(Layout.of(assessment).report / "figures" / "impact_late.csv")
    for crop, rows in numbers.groupby("crop"):
        assert rows["impact"].is_monotonic_increasing
        # The region without a value and what lies outside all regions are left out.
        assert set(rows["region"]) == {"Upper Hollin", "Brackwater", "Thornfold"}
        assert set(rows["system"]) == ({"all"} if crop == "maize" else {"rainfed"})
    table = page.tables("Impact over the period")[0]
    assert len(table) == 2 * 2 * 3
    row = table.iloc[0]
    assert row["Impact over the period, %"] == "+6.0"
    assert row["5-95 % of draws, %"] == "+3.0 to +9.0"
    assert row["Production, last 10 years, % (thousand t a year)"] == "−5.0 (−5.0)"
    whole = pd.read_csv(Layout.of(assessment).report / "tables" / "impact.csv")
    assert len(whole) == 2 * 5 * (3 + 1)


def test_map_data_are_the_pixels(made: tuple[Assessment, Reader]) -> None:
    folder = Layout.of(made[0]).report / "figures"
    data = pd.read_csv(folder / "impact_map_late.csv")
    assert set(data["system"]) == {"rainfed", "irrigated"}
    assert data["impact"].notna().all()
    image = [i for i in made[1].all("img") if "Maps of the impact" in str(i["alt"])][1]
    share = (data[(data["crop"] == "barley")]["impact"] < 0).mean()
    assert f"barley, rainfed: a loss in {100 * share:.0f} % of pixels" in str(image["alt"])


def test_without_draws(tmp_path: Path) -> None:
    _, page = report_of(tmp_path, draws=False)
    table = page.tables("Impact over the period")[0]
    assert set(table["5-95 % of draws, %"]) == {"n/a to n/a"}


def test_no_section_without_the_files(tmp_path: Path) -> None:
    assessment = invent(tmp_path, WORLD)
    job.page(assessment)
    text = Layout.of(assessment).report_page.read_text(encoding="utf-8")
    assert 'id="impact"' not in text
    assert "#impact" not in text


def test_filled_markers_are_those_below_the_level() -> None:
    rows = pd.DataFrame(
        {
            "crop": "maize",
            "system": "rainfed",
            "region": ["a", "b", "c"],
            "period": "all",
            "first_year": 1991,
            "last_year": 2020,
            "impact": [-8.0, -2.0, 1.0],
            "chance_p05": -3.0,
            "chance_p95": 3.0,
            "p_ar1": [0.05, 0.2, 0.7],
        }
        | {f"impact_p{p:02d}": np.array([-8.0, -2.0, 1.0]) + p / 50 - 1 for p in (5, 17, 83, 95)}
    )
    drawing = impact_chart(rows.sample(frac=1, random_state=2), "all", "p_ar1", 0.05)
    axis = drawing.figure.axes[0]
    assert [text.get_text() for text in axis.get_yticklabels()] == ["a", "b", "c"]
    filled, hollow = [line for line in axis.lines if line.get_marker() == "o"]
    np.testing.assert_array_equal(filled.get_xdata(), [-8.0])
    np.testing.assert_array_equal(hollow.get_xdata(), [-2.0, 1.0])
    assert "1 of 3 significant" in drawing.alt
