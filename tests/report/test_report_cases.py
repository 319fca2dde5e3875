"""The report of assessments that lack one thing or another, and of mistakes and leftovers."""

from __future__ import annotations

import json
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from invented_results import invent
from invented_world import World
from read_page import Reader
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.audit.verify import verify
from stook.constants import OUTSIDE
from stook.errors import InputError, ResultsError
from stook.report import job

ONE_CROP = {"maize": ("rainfed",)}


def report_of(folder: Path, world: World) -> tuple[Assessment, Reader]:
    assessment = invent(folder, world)
    job.page(assessment)
    reader = Reader()
    reader.feed(Layout.of(assessment).report_page.read_text(encoding="utf-8"))
    reader.close()
    assert reader.open == []
    assert verify(Layout.of(assessment).root) == []
    return assessment, reader


def figures(assessment: Assessment) -> set[str]:
    return {path.stem for path in (Layout.of(assessment).report / "figures").glob("*.png")}


def sections(page: Reader) -> set[str]:
    return {str(attributes["id"]) for attributes in page.all("section")}


def test_observed_only(tmp_path: Path) -> None:
    assessment, page = report_of(tmp_path, World(models=(), crops=ONE_CROP))
    assert figures(assessment) == {"series_maize", "trend_maize_rainfed_observed"}
    assert not {"results", "maps", "drivers", "correction"} & sections(page)
    assert "this assessment looks at the reference data alone" in page.text
    assert pd.read_csv(Layout.of(assessment).report / "tables" / "changes.csv").empty


def test_no_horizons(tmp_path: Path) -> None:
    assessment, page = report_of(tmp_path, World(horizons={}, crops=ONE_CROP))
    assert not {"results", "maps", "drivers"} & sections(page)
    assert {"trends", "correction", "years"} <= sections(page)
    assert "names no horizons" in page.text
    assert "series_maize" in figures(assessment)


def test_one_simulation_says_that_agreement_means_nothing(tmp_path: Path) -> None:
    world = World(models=("ALDER-ESM",), scenarios=("high",), crops=ONE_CROP)
    _, page = report_of(tmp_path, world)
    assert "There is one model: agreement between models says nothing here" in page.text
    assert "models agree on the sign in" not in page.text


def test_no_series_long_enough_for_a_trend(tmp_path: Path) -> None:
    assessment, page = report_of(tmp_path, World(trend_rows=False, crops=ONE_CROP))
    assert "No trend was tested" in page.text
    assert not any(name.startswith("trend_") for name in figures(assessment))


def test_several_trend_periods(tmp_path: Path) -> None:
    periods = {"early": (1991, 2040), "late": (2041, 2100)}
    assessment, page = report_of(tmp_path, World(trend_periods=periods, crops=ONE_CROP))
    table = page.tables("Lag-1")[0]
    assert list(table["Period"].unique()) == ["early", "late"]
    maps = {path.name for path in (Layout.of(assessment).report / "maps").glob("trend_*.tif")}
    assert maps == {f"trend_maize_rainfed_observed_{period}.tif" for period in periods}


def test_subset_shows_the_requested_region_only(tmp_path: Path) -> None:
    assessment, page = report_of(tmp_path, World(subset=("Saltmere",), crops=ONE_CROP))
    assert "Saltmere (a subset)" in page.text
    assert "Brackwater" not in page.text
    assert OUTSIDE not in page.text
    assert [*page.tables("Likelihood")[0]["Region"].unique()] == ["Saltmere"]
    assert Layout.of(assessment).root.name == "hollin@Saltmere"


def test_without_a_reference(tmp_path: Path) -> None:
    assessment, page = report_of(tmp_path, World(observed=False, crops=ONE_CROP))
    assert "correction" not in sections(page)
    assert "trend_maize_rainfed_ALDER-ESM_high_r1" in figures(assessment)


def test_many_regions_all_stand_in_the_tables(tmp_path: Path) -> None:
    world = World(regions=50, models=("ALDER-ESM",), scenarios=("high",), crops=ONE_CROP)
    _, page = report_of(tmp_path, world)
    assert set(page.tables("Likelihood")[0]["Region"]) == {*world.names, OUTSIDE}


def test_change_that_could_not_be_computed_is_shown_as_such(tmp_path: Path) -> None:
    """Horizon beyond the simulated years: numbers missing, likelihood empty."""
    assessment = invent(tmp_path, World(crops=ONE_CROP))
    layout = Layout.of(assessment)
    changes = pd.read_parquet(layout.changes)
    lost = changes["horizon"] == "2071-2100"
    numbers = changes.select_dtypes("float").columns.drop("area_ha")
    changes.loc[lost, numbers] = np.nan
    changes.loc[lost, ["likelihood", "likelihood_of"]] = None
    with Job(assessment, "ensemble_changes", []) as write:
        write.table(changes, layout.changes)
    job.page(assessment)
    reader = Reader()
    reader.feed(layout.report_page.read_text(encoding="utf-8"))
    table = reader.tables("Likelihood")[0]
    rows = table[table["Horizon"] == "2071-2100"]
    assert set(rows["Median, %"]) == {"n/a"}
    assert set(rows["Likelihood (share of members)"]) == {"n/a"}
    assert "nan" not in re.sub(r"[A-Za-z]+nan|nan[a-z]+", "", reader.text)


def test_run_without_a_check_says_so(tmp_path: Path) -> None:
    assessment = invent(tmp_path, World(models=(), crops=ONE_CROP))
    (Layout.of(assessment).root / "check.json").unlink()
    job.page(assessment)
    text = Layout.of(assessment).report_page.read_text(encoding="utf-8")
    assert "were not checked with <code>stook check</code>" in text


@pytest.mark.parametrize("content", ["{", "[1]", '[{"severity": "warning"}]'])
def test_spoilt_list_of_warnings_is_refused(tmp_path: Path, content: str) -> None:
    assessment = invent(tmp_path, World(models=(), crops=ONE_CROP))
    (Layout.of(assessment).root / "check.json").write_text(content, encoding="utf-8")
    with pytest.raises(ResultsError, match=r"check\.json: cannot be read"):
        job.page(assessment)


def test_empty_list_of_warnings(tmp_path: Path) -> None:
    assessment = invent(tmp_path, World(models=(), crops=ONE_CROP))
    (Layout.of(assessment).root / "check.json").write_text(json.dumps([]), encoding="utf-8")
    job.page(assessment)
    text = Layout.of(assessment).report_page.read_text(encoding="utf-8")
    assert "found nothing to warn of" in text


def test_missing_result_is_named_and_no_page_is_written(tmp_path: Path) -> None:
    assessment = invent(tmp_path, World(crops=ONE_CROP))
    layout = Layout.of(assessment)
    layout.yields("ROWAN-CM_high_r1", "maize", "rainfed").unlink()
    with pytest.raises(ResultsError, match=r"ROWAN-CM_high_r1/maize_rainfed\.nc: no such file"):
        job.page(assessment)
    assert not layout.report_page.exists()
    assert not list(layout.root.rglob("*.part"))


def test_missing_polygons_are_named(tmp_path: Path) -> None:
    assessment = invent(tmp_path, World(models=(), crops=ONE_CROP))
    assessment.path(assessment.regions.file).unlink()
    with pytest.raises(InputError, match=r"regions\.gpkg"):
        job.page(assessment)


def test_files_of_an_earlier_report_are_cleared(tmp_path: Path) -> None:
    """A scenario that is gone leaves neither picture nor record behind."""
    assessment = invent(tmp_path, World(crops=ONE_CROP))
    layout = Layout.of(assessment)
    old = layout.report / "figures" / "map_rye_2071-2100.png"
    with Job(assessment, "report_page", []) as write:
        write.claim(old).write_bytes(b"old")
    job.page(assessment)
    assert not old.exists()
    assert verify(layout.root) == []
    assert "map_rye" not in (layout.report / "ledger.csv").read_text(encoding="utf-8")
