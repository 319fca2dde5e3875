"""The sections on uncertainty, bad years and supply, from tables of the ensemble stage."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from invented_results import invent
from invented_world import World
from matplotlib.patches import PathPatch
from read_page import Reader
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job
from stook.audit.verify import verify
from stook.constants import OUTSIDE
from stook.ensemble.job import risk
from stook.ensemble.losses import LOSSES
from stook.ensemble.robustness import Signal
from stook.grids.analysis import analysis_grid
from stook.grids.files import open_result
from stook.report import job
from stook.report.figures_maps import change_maps
from stook.report.figures_risk import class_figure, partition_figure
from stook.report.rows_risk import (
    emergence_table,
    joint_table,
    loss_table,
    robustness_table,
    shortfall_table,
    supply_table,
)

NAMES = ("partition", "classes", "robustness", "emergence", "levels", "shortfall", "joint")
FIGURES = ("partition_maize", "partition_barley", "classes_maize_members", "classes_barley_members")


def with_risk(folder: Path, world: World | None = None) -> Assessment:
    """Return an invented assessment with the tables of risk of its totals."""
    assessment = invent(folder, world)
    risk(assessment)
    layout = Layout.of(assessment)
    levels = pd.read_parquet(layout.changes)
    with Job(assessment, "ensemble_risk", []) as write:
        write.table(
            levels[levels["horizon"] == "2041-2070"].assign(horizon="2-degC"),
            layout.ensemble_table("levels"),
        )
    for crop, system in assessment.systems:
        for scenario in ("moderate", "high"):
            _robustness(assessment, crop, system, scenario)
    return assessment


def _robustness(assessment: Assessment, crop: str, system: str, scenario: str) -> None:
    layout, grid = Layout.of(assessment), analysis_grid(assessment)
    with open_result(layout.ensemble_pixels(crop, system, scenario)) as dataset:
        known = np.isfinite(dataset["change_p50"].values)
        horizons = dataset["horizon"].values
    classes = np.where(known, 1 + np.indices(known.shape).sum(axis=0) % 3, 0).astype(np.int8)
    variable = (("horizon", "lat", "lon"), classes, {"long_name": "invented"})
    flags = xr.Dataset({"robustness": variable}, grid.coordinates() | {"horizon": horizons})
    row = {"of": "area", "crop": crop, "system": system, "region": "all regions"}
    row |= {"scenario": scenario, "horizon": "2071-2100", "limit": 10.0, "simulations": 3}
    numbers = {"whole": 1e5, "mean": 0.5, "p05": 0.2, "p50": 0.5, "p95": 0.75}
    with Job(assessment, "ensemble_robustness", []) as write:
        write.netcdf(flags, layout.robustness_pixels(crop, system, scenario), "invented")
        losses = pd.DataFrame([row | numbers], columns=list(LOSSES))
        write.table(losses, layout.area_losses(crop, system, scenario))


@pytest.fixture(scope="module")
def risky(tmp_path_factory: pytest.TempPathFactory) -> Assessment:
    assessment = with_risk(tmp_path_factory.mktemp("risky"))
    job.page(assessment)
    return assessment


@pytest.fixture(scope="module")
def page(risky: Assessment) -> Reader:
    reader = Reader()
    reader.feed(Layout.of(risky).report_page.read_text(encoding="utf-8"))
    assert reader.open == []
    return reader


def table(assessment: Assessment, name: str) -> pd.DataFrame:
    return pd.read_parquet(Layout.of(assessment).ensemble_table(name))


def test_sections_and_files_are_there_and_verify(risky: Assessment, page: Reader) -> None:
    folder = Layout.of(risky).report
    anchors = {attributes.get("id") for _, attributes in page.tags}
    assert {"uncertainty", "risk", "supply"} <= anchors
    for name in (*NAMES, "supply", "losses"):
        assert (folder / "tables" / f"{name}.csv").exists(), name
    for name in FIGURES:
        assert len(pd.read_csv(folder / "figures" / f"{name}.csv")) > 0
    assert verify(Layout.of(risky).root) == []


def test_nothing_on_the_page_is_a_bare_nan(page: Reader) -> None:
    words = page.text.lower().split()
    assert "nan" not in words
    assert "inf" not in words


def test_shortfalls_give_intervals_beside_return_periods(risky: Assessment, page: Reader) -> None:
    tables = page.tables("One year in")
    assert len(tables) == 2
    rows = tables[0]
    assert set(rows["Scenario"]) == {"observed", "moderate", "high"}
    late = rows[(rows["Region"] == "Saltmere") & (rows["Period"] == "2071-2100")]
    source = table(risky, "shortfall")
    source = source[(source["crop"] == "maize") & (source["region"] == "Saltmere")]
    one = source[
        (source["system"] == "all")
        & (source["scenario"] == "high")
        & (source["period"] == "2071-2100")
        & (source["reference"] == "baseline mean")
    ].iloc[0]
    shown = late[late["Scenario"] == "high"]["Share of years (90 % interval)"].item()
    assert shown.startswith(f"{100 * one['share']:.0f} % (")
    assert "common practice" in page.text


def test_robustness_counts_every_region_once(risky: Assessment) -> None:
    found = robustness_table(table(risky, "robustness"))
    for row in found.rows:
        counts = row[-5:-1]
        assert sum(map(int, counts)) == 7  # six regions and their sum


def test_supply_names_its_basis(page: Reader) -> None:
    assert "FAO 2001" in page.text
    assert "2,000 kcal per person and day" in page.text
    shown = page.tables("People supplied")[0]
    assert shown["Region"].iloc[0] == "all regions"
    assert OUTSIDE not in set(shown["Region"])


def test_levels_stand_with_their_caution(page: Reader) -> None:
    assert "at its own first 20 years warmer" in page.text
    horizons = [set(frame["Horizon"]) for frame in page.tables("Likelihood")]
    assert {"2-degC"} in horizons


def test_maps_hatch_the_classes_and_say_the_rule(risky: Assessment, page: Reader) -> None:
    assert "conflicting (at least 66 % do, but fewer than 80 % agree" in page.text
    layout = Layout.of(risky)
    with (
        open_result(layout.ensemble_pixels("barley", "rainfed", "high")) as change,
        open_result(layout.robustness_pixels("barley", "rainfed", "high")) as classes,
    ):
        pixels = change.load().assign(robustness=classes["robustness"].load())
    import geopandas as gpd
    from shapely.geometry import box

    outline = gpd.GeoDataFrame({"region": ["A"]}, geometry=[box(5, 44, 6, 45)], crs=4326)
    drawing = change_maps({("rainfed", "high"): pixels}, "barley", "2071-2100", outline)
    axis = drawing.figure.axes[0]
    hatched = {p.get_hatch() for p in axis.patches if isinstance(p, PathPatch) and p.get_hatch()}
    assert hatched == {"////", "xxxx"}
    (legend,) = drawing.figure.legends
    texts = " ".join(text.get_text() for text in legend.get_texts())
    assert "66 %" in texts
    assert "80 %" in texts
    assert set(drawing.data["robustness"]) == {1, 2, 3}
    assert Signal.CONFLICTING == 3


def test_figures_draw_what_their_numbers_say(risky: Assessment) -> None:
    drawing = partition_figure(table(risky, "partition"), "maize", ["Saltmere", "Brackwater"])
    titles = [axis.get_title("left") for axis in drawing.figure.axes]
    assert titles[0] == "all regions, polynomial"
    assert titles[1] == "all regions, analysis of variance"
    sums = drawing.data.groupby(["region", "method", "year"])["share"].sum()
    np.testing.assert_allclose(sums, 1)
    classes = class_figure(table(risky, "classes"), "maize", ["moderate", "high"], ["Saltmere"])
    bars = [p.get_height() for p in classes.figure.axes[0].patches]
    assert sum(bars) == pytest.approx(100 * 4)  # four periods of 20 years


def test_tables_without_rows_or_numbers(risky: Assessment) -> None:
    assert supply_table(table(risky, "supply").iloc[:0]) is None
    assert joint_table(table(risky, "joint").iloc[:0]) is None
    assert loss_table(table(risky, "losses").iloc[:0]) is None
    never = emergence_table(table(risky, "emergence").assign(year_p50=np.nan))
    assert "after 2100" in str(never.rows[0])
    none = table(risky, "shortfall").assign(share=0.0, low=0.0, return_years=np.nan)
    assert "more than" in str(shortfall_table(none, 25)[0].rows[0])


def test_one_region_and_one_model(tmp_path: Path) -> None:
    world = World(regions=1, models=("ALDER-ESM",), crops={"barley": ("rainfed",)})
    assessment = with_risk(tmp_path, world)
    job.page(assessment)
    text = Layout.of(assessment).report_page.read_text(encoding="utf-8")
    assert 'id="uncertainty"' in text
    assert "all regions, polynomial" not in text


def test_sections_are_left_out_without_their_tables(reported: Assessment) -> None:
    text = Layout.of(reported).report_page.read_text(encoding="utf-8")
    for anchor in ("uncertainty", "risk", "supply"):
        assert f'id="{anchor}"' not in text
