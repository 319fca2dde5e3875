"""The page needs nothing but itself, says what it must, and links only to files that are there."""

from __future__ import annotations

import base64
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from read_page import Reader
from stook.assessment.layout import Layout
from stook.assessment.load import assessment_digest
from stook.assessment.schema import Assessment
from stook.report.rows import range_glyph
from stook.version import VERSION


@pytest.fixture(scope="session")
def html(reported: Assessment) -> str:
    return Layout.of(reported).report_page.read_text(encoding="utf-8")


@pytest.fixture(scope="session")
def page(html: str) -> Reader:
    reader = Reader()
    reader.feed(html)
    reader.close()
    return reader


def words(page: Reader) -> str:
    return " ".join(page.text.split())


def test_page_names_no_address_and_loads_nothing(html: str, page: Reader) -> None:
    without_pictures = re.sub(r"data:image/png;base64,[A-Za-z0-9+/=]+", "", html)
    assert not re.search(r"(https?:)?//[a-z]", without_pictures, flags=re.I)
    assert "@import" not in html
    assert "url(" not in html
    for tag in ("script", "link", "iframe", "object", "embed", "base"):
        assert page.all(tag) == []
    for image in page.all("img"):
        assert str(image["src"]).startswith("data:image/png;base64,")


def test_tags_are_closed_in_order(page: Reader) -> None:
    assert page.open == []


def test_embedded_pictures_are_the_png_files(reported: Assessment, page: Reader) -> None:
    folder = Layout.of(reported).report / "figures"
    shown = [base64.b64decode(str(image["src"]).split(",")[1]) for image in page.all("img")]
    assert sorted(shown) == sorted(path.read_bytes() for path in folder.glob("*.png"))


def test_every_link_leads_somewhere(reported: Assessment, page: Reader) -> None:
    folder = Layout.of(reported).report
    anchors = {attributes.get("id") for _, attributes in page.tags}
    links = [str(link["href"]) for link in page.all("a")]
    assert len(links) > 50
    for link in links:
        if link.startswith("#"):
            assert link[1:] in anchors, link
        else:
            assert not Path(link).is_absolute()
            assert (folder / link).is_file(), link


def test_every_file_of_the_report_is_linked(reported: Assessment, page: Reader) -> None:
    folder = Layout.of(reported).report
    links = {str(link["href"]) for link in page.all("a")}
    files = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    assert files - links == {"report.html"}


def test_every_figure_has_png_and_csv(reported: Assessment) -> None:
    folder = Layout.of(reported).report / "figures"
    pictures = {path.stem for path in folder.glob("*.png")}
    assert pictures == {path.stem for path in folder.glob("*.csv")}
    for kind in ("change_", "map_", "series_", "drivers_", "trend_", "correction"):
        assert any(name.startswith(kind) for name in pictures), kind
    for name in pictures:
        assert len(pd.read_csv(folder / f"{name}.csv")) > 0
        assert (folder / f"{name}.png").read_bytes().startswith(b"\x89PNG")


def test_page_is_accessible(page: Reader) -> None:
    # WCAG 2.2: language of page 3.1.1, non-text content 1.1.1, info and relationships 1.3.1
    assert page.all("html")[0]["lang"] == "en"
    assert len(page.all("h1")) == 1
    assert all(len(str(image["alt"])) > 40 for image in page.all("img"))
    assert len(page.all("caption")) == len(page.all("table")) > 5
    scopes = {str(head.get("scope")) for head in page.all("th")}
    assert scopes <= {"col", "row", "rowgroup"}
    levels = [int(tag[1]) for tag, _ in page.tags if re.fullmatch(r"h[1-6]", tag)]
    assert max(np.diff(levels)) <= 1
    identifiers = [a["id"] for _, a in page.tags if "id" in a]
    assert len(identifiers) == len(set(identifiers))


def test_title_block_names_what_was_assessed(reported: Assessment, page: Reader) -> None:
    text = words(page)
    for expected in (
        reported.title,
        "1991-2020",
        "2041-2070, 2071-2100",
        "high, moderate",
        "ALDER-ESM, ROWAN-CM, SEDGE-LR",
        f"Stook {VERSION}",
        assessment_digest(reported),
    ):
        assert expected in text


def test_cautions_stand_on_the_page(page: Reader) -> None:
    text = words(page)
    for expected in (
        "projections, not forecasts",
        "conditional on the scenario, on the climate models",
        "no advice for a single farm",
        "safety, insurance, food aid or investment belong with qualified local experts",
        "A share of members is not by itself a likelihood",
        "harvested area held at its baseline",
        "The effect of rising CO2 on crops is not included",
        "Technology Held constant",
    ):
        assert expected in text, expected


def test_headline_table_shows_the_changes(reported: Assessment, page: Reader) -> None:
    changes = pd.read_parquet(Layout.of(reported).changes)
    tables = page.tables("Likelihood")
    assert len(tables) == 2
    for crop, table in zip(("maize", "barley"), tables, strict=True):
        system = "all" if crop == "maize" else "rainfed"
        rows = changes[(changes["crop"] == crop) & (changes["system"] == system)]
        assert len(table) == len(rows) == 7 * 2 * 2
        merged = table.merge(
            rows,
            left_on=["Region", "Scenario", "Horizon"],
            right_on=["region", "scenario", "horizon"],
            validate="1:1",
        )
        assert len(merged) == len(rows)
        shown = merged["Median, %"].str.replace("\N{MINUS SIGN}", "-").astype(float)
        assert shown.to_numpy() == pytest.approx(merged["change_p50"].to_numpy(), abs=0.0500001)


def test_likelihood_word_never_stands_without_its_number(page: Reader) -> None:
    for table in page.tables("Likelihood"):
        column = next(name for name in table.columns if name.startswith("Likelihood"))
        pattern = r"(decrease|increase): [a-z ]+ \(\d+ %\)"
        assert table[column].str.fullmatch(pattern).all()


def test_row_of_the_table_by_hand(reported: Assessment, page: Reader) -> None:
    changes = pd.read_parquet(Layout.of(reported).changes)
    key = {"region": "Saltmere", "scenario": "high", "horizon": "2071-2100"}
    row = changes[changes["crop"] == "barley"].set_index(list(key)).loc[tuple(key.values())]
    table = page.tables("Likelihood")[1].set_index(["Region", "Scenario", "Horizon"])
    shown = table.loc[tuple(key.values())]
    assert shown.filter(like="Likelihood").item() == (
        f"decrease: {row['likelihood']} ({100 * row['share_decrease']:.0f} %)"
    )
    assert shown["Agreement of 3 models"] == f"{100 * row['agreement']:.0f} %"
    assert shown["Outside estimation range"] == "8 %"  # invented
    assert shown["Production, thousand t"] == (
        f"200.0 \N{RIGHTWARDS ARROW} {row['horizon_production_t'] / 1000:.1f}"
    )


def test_texts_of_the_user_are_escaped(html: str, page: Reader) -> None:
    assert "<invented>" not in html
    assert "above 500 mm day-1 <invented>" in page.text
    assert "Invented response of maize (rainfed) & its <terms>" in page.text


def test_warnings_of_the_check_are_carried_into_the_report(page: Reader) -> None:
    assert "warning climate/pr_ROWAN-CM_high_r1.nc: 3 values of pr" in words(page)


def test_area_left_out_is_reported(page: Reader) -> None:
    # invented: 120 of 40,120 ha
    assert "maize, Saltmere: 120 ha of harvested area (0.3 %) have no value" in words(page)


def test_glyph_places_points_on_the_scale() -> None:
    row = {f"change_{name}": value for name, value in POINTS.items()}
    markup = range_glyph(row, -20.0, 20.0)
    assert re.search(r'class="zero" x1="55.0" x2="55.0"', markup)
    assert re.search(r'class="wide" x1="4.0" x2="106.0"', markup)
    assert re.search(r'circle cx="29.5"', markup)
    assert range_glyph(row | {"change_p50": np.nan}, -20.0, 20.0) == ""


POINTS = {"p05": -20.0, "p17": -15.0, "p50": -10.0, "p83": 10.0, "p95": 20.0}
