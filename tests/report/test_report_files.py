"""Tables, polygons and grids of the report open in general-purpose programs with equal values."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyogrio
import pytest
import rioxarray
import xarray as xr
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.ledger import read_record
from stook.audit.verify import verify
from stook.constants import OUTSIDE
from stook.report import job


@pytest.fixture(scope="session")
def folder(reported: Assessment) -> Path:
    return Layout.of(reported).report


def same_rows(one: pd.DataFrame, other: pd.DataFrame) -> None:
    """Compare two tables whose rows may be in another order."""
    keys = [c for c in one.columns if one[c].dtype.kind not in "f"]
    parts = [frame.sort_values(keys).reset_index(drop=True) for frame in (one, other)]
    pd.testing.assert_frame_equal(*parts, check_dtype=False)


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
@pytest.mark.parametrize(("name", "source"), [("changes", "changes"), ("yearly", "yearly")])
def test_tables_equal_those_of_the_ensemble(
    reported: Assessment, folder: Path, name: str, source: str, suffix: str
) -> None:
    read = pd.read_csv if suffix == "csv" else pd.read_parquet
    same_rows(
        pd.read_parquet(getattr(Layout.of(reported), source)),
        read(folder / "tables" / f"{name}.{suffix}"),
    )


def test_rows_stand_in_the_order_of_the_assessment(folder: Path) -> None:
    table = pd.read_csv(folder / "tables" / "changes.csv")
    assert list(table["crop"].unique()) == ["maize", "barley"]
    assert list(table["region"].unique())[-1] == OUTSIDE
    assert list(table["horizon"].unique()) == ["2041-2070", "2071-2100"]


def test_production_holds_the_central_draw_of_every_simulation(
    reported: Assessment, folder: Path
) -> None:
    table = pd.read_parquet(folder / "tables" / "production.parquet")
    totals = pd.read_parquet(Layout.of(reported).totals("ROWAN-CM_high_r1", "maize"))
    central = totals[totals["draw"] == 0]
    chosen = table.query("simulation == 'ROWAN-CM_high_r1' and crop == 'maize'")
    assert chosen["production_t"].to_numpy() == pytest.approx(central["production_t"].to_numpy())
    expected = central["production_t"].to_numpy() / central["area_ha"].to_numpy()
    assert chosen["yield"].to_numpy() == pytest.approx(expected)
    assert table["simulation"].nunique() == 7


def test_trends_and_evaluation_are_complete(reported: Assessment, folder: Path) -> None:
    layout = Layout.of(reported)
    trends = pd.read_csv(folder / "tables" / "trend_regions.csv")
    for simulation, rows in trends.groupby("simulation"):
        same_rows(
            pd.read_parquet(layout.trend_regions(str(simulation))), rows.drop(columns="simulation")
        )
    same_rows(
        pd.read_parquet(layout.evaluation_table), pd.read_csv(folder / "tables" / "evaluation.csv")
    )


def test_index_means_are_weighted_by_area(reported: Assessment, folder: Path) -> None:
    """Recompute one number by plain NumPy from the season files of both tiles."""
    layout = Layout.of(reported)
    with xr.open_dataset(layout.layers) as layers:
        area = layers["area"].sel(crop_system="maize_rainfed").values
    parts = []
    for tile in (0, 1):
        with xr.open_dataset(layout.season("SEDGE-LR_high_r1", "maize", "rainfed", tile)) as season:
            parts.append(season["rain"].sel(year=slice(2071, 2100)).mean("year").values)
    rain = np.concatenate(parts)
    grown = area > 0
    expected = (rain[grown] * area[grown]).sum() / area[grown].sum()
    table = pd.read_csv(folder / "tables" / "indices.csv")
    row = table.query(
        "simulation == 'SEDGE-LR_high_r1' and crop == 'maize' and system == 'rainfed' and "
        "quantity == 'rain' and period == '2071-2100'"
    )
    assert row["value"].item() == pytest.approx(expected, rel=1e-12)
    assert row["unit"].item() == "mm"


def test_geopackage_has_a_layer_for_each_crop_scenario_and_horizon(
    reported: Assessment, folder: Path
) -> None:
    path = folder / "regions.gpkg"
    layers = [name for name, _ in pyogrio.list_layers(path)]
    assert len(layers) == 1 + 2 * 2 * 2
    changes = pd.read_parquet(Layout.of(reported).changes)
    frame = gpd.read_file(path, layer="maize_high_2071-2100").set_index("region")
    assert frame.crs.to_epsg() == 4326
    rows = changes.query(
        "crop == 'maize' and system == 'all' and scenario == 'high' and horizon == '2071-2100'"
    ).set_index("region")
    assert sorted(frame.index) == sorted(set(rows.index) - {OUTSIDE})
    for column in ("change_p05", "change_p50", "change_p95", "agreement", "likelihood"):
        assert list(frame[column]) == list(rows.loc[frame.index, column])
    given = gpd.read_file(reported.path(reported.regions.file)).set_index("name")
    for region, shape in frame.geometry.items():
        assert shape.equals(given.geometry[region])


@pytest.mark.parametrize("horizon", ["2041-2070", "2071-2100"])
def test_geotiff_is_north_up_with_the_values_of_the_pixels(
    reported: Assessment, folder: Path, horizon: str
) -> None:
    path = folder / "maps" / f"change_maize_irrigated_high_{horizon}.tif"
    source = Layout.of(reported).ensemble_pixels("maize", "irrigated", "high")
    with rioxarray.open_rasterio(path) as raster, xr.open_dataset(source) as pixels:
        assert raster.rio.crs.to_epsg() == 4326
        assert raster.rio.transform().e < 0
        assert raster.rio.bounds() == pytest.approx((4.5, 43.5, 14.5, 49.5))
        names = list(raster.attrs["long_name"])
        for name in ("change_p50", "agreement", "models"):
            band = raster.isel(band=names.index(name))
            expected = pixels[name].sel(horizon=horizon, lat=band["y"].values, lon=band["x"].values)
            np.testing.assert_array_equal(band.values, expected.values.astype(float))


def test_netcdf_of_the_pixels_keeps_values_and_names_its_crs(
    reported: Assessment, folder: Path
) -> None:
    source = Layout.of(reported).ensemble_pixels("barley", "rainfed", "moderate")
    copy = folder / "maps" / "change_barley_rainfed_moderate.nc"
    with xr.open_dataset(source) as given, xr.open_dataset(copy, decode_coords="all") as written:
        for name in given.data_vars:
            if not str(name).endswith("_bnds"):
                np.testing.assert_array_equal(written[name].values, given[name].values)
        assert written["horizon_name"].values.tolist() == ["2041-2070", "2071-2100"]
        assert written["change_p50"].attrs["units"] == "percent"
        assert written.rio.crs.to_epsg() == 4326
        assert written.attrs["Conventions"] == "CF-1.11"


@pytest.mark.parametrize("name", ["change_maize_rainfed_high", "trend_maize_rainfed_observed"])
def test_maps_pass_the_cf_checker(folder: Path, tmp_path: Path, name: str) -> None:
    """IOOS compliance-checker, CF 1.11, strict, offline."""
    out = tmp_path / "out.json"
    checker = Path(sys.executable).with_name("compliance-checker")
    options = ["--test=cf:1.11", "--criteria", "strict", "-f", "json", "-o", str(out)]
    subprocess.run(
        [checker, *options, folder / "maps" / f"{name}.nc"], check=True, capture_output=True
    )
    report = json.loads(out.read_text(encoding="utf-8"))["cf:1.11"]
    assert report["all_priorities"]
    found = [message for entry in report["all_priorities"] for message in entry["msgs"]]
    assert found == []


def test_trend_maps_are_handed_on(reported: Assessment, folder: Path) -> None:
    source = Layout.of(reported).trend_pixels("observed", "maize", "rainfed")
    path = folder / "maps" / "trend_maize_rainfed_observed_all.tif"
    with rioxarray.open_rasterio(path) as raster, xr.open_dataset(source) as pixels:
        band = raster.isel(band=list(raster.attrs["long_name"]).index("slope_yield"))
        expected = pixels["slope_yield"].sel(period="all").values[::-1]
        np.testing.assert_array_equal(band.values, expected)


def test_map_figure_numbers_are_the_drawn_pixels(reported: Assessment, folder: Path) -> None:
    data = pd.read_csv(folder / "figures" / "map_maize_2071-2100.csv")
    chosen = data.query("system == 'rainfed' and scenario == 'high'")
    source = Layout.of(reported).ensemble_pixels("maize", "rainfed", "high")
    with xr.open_dataset(source) as pixels:
        here = pixels["change_p50"].sel(horizon="2071-2100")
        assert len(chosen) == int(np.isfinite(here).sum())
        at = {name: xr.DataArray(chosen[name].to_numpy(), dims="pixel") for name in ("lat", "lon")}
        expected = here.sel(at).values
    assert chosen["change_p50"].to_numpy() == pytest.approx(expected, rel=1e-15)


def test_every_file_is_in_the_ledger_and_verifies(reported: Assessment, folder: Path) -> None:
    root = Layout.of(reported).root
    assert verify(root) == []
    for path in folder.rglob("*"):
        if path.is_file():
            assert read_record(root, path)["rule"] == "report_page"


def test_ledger_table_lists_every_file_but_itself(reported: Assessment, folder: Path) -> None:
    root = Layout.of(reported).root
    table = pd.read_csv(folder / "ledger.csv")
    stages = [path for path in root.rglob("*") if path.is_file() and "ledger" not in path.parts]
    files = {path.relative_to(root).as_posix() for path in stages}
    assert set(table["path"]) == files - {"assessment.yaml", "check.json", "report/ledger.csv"}


def test_altered_table_of_the_report_is_found(tmp_path: Path, reported: Assessment) -> None:
    copy = tmp_path / "copy"
    shutil.copytree(Layout.of(reported).root, copy)
    table = copy / "report" / "tables" / "changes.csv"
    table.write_text(table.read_text(encoding="utf-8").replace("likely", "unlikely", 1))
    findings = verify(copy)
    assert [(finding.kind, finding.path) for finding in findings] == [
        ("altered", "report/tables/changes.csv")
    ]


def test_second_run_gives_the_same_files(reported: Assessment, folder: Path) -> None:
    before = {path: path.read_bytes() for path in sorted(folder.rglob("*.[ct]*")) if path.is_file()}
    pictures = {path: path.read_bytes() for path in folder.rglob("*.png")}
    job.page(reported)
    for path, content in (before | pictures).items():
        if path.name != "ledger.csv":  # holds seconds
            assert path.read_bytes() == content, path
    assert verify(Layout.of(reported).root) == []
