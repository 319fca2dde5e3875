"""Comparing two results folders: settings, inputs, regions, pixels, files, parts of a grid."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from compare_inputs import SIMULATION, write_run
from rich.console import Console
from stook.audit.compare import compare, flatten
from stook.audit.compare_output import as_json, compare_folders, show, verdict, write_csv
from stook.errors import AssessmentError, ResultsError


@pytest.fixture(scope="module")
def plain(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_run(tmp_path_factory.mktemp("plain"))


@pytest.fixture(scope="module")
def hotter(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_run(tmp_path_factory.mktemp("hotter"), heat=-0.008, draws=50)


@pytest.fixture(scope="module")
def region(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_run(tmp_path_factory.mktemp("region"), region="Saltmere")


def test_same_run_twice_is_identical(plain: Path, tmp_path: Path) -> None:
    again = write_run(tmp_path, tiles=2)
    found = compare(plain, again)
    assert found.identical
    assert list(found.settings["key"]) == ["grid.tiles"]
    assert found.inputs.empty  # the same content, seen from the assessment file
    assert found.pixels.empty
    assert set(found.files["status"]) == {"identical"}
    assert (found.changes["change_p50_difference"] == 0).all()
    assert verdict(found).startswith("all values of the common part are identical")


def test_settings_and_inputs_that_differ(plain: Path, hotter: Path) -> None:
    found = compare(plain, hotter)
    rows = {row["key"]: (row["a"], row["b"]) for _, row in found.settings.iterrows()}
    assert rows == {
        "ensemble.draws": (20, 50),
        "response of maize rainfed: terms.heat.coefficient": (-0.006, -0.008),
    }
    assert list(found.inputs["input"]) == ["maize.yaml"]
    assert (found.inputs["sha256_a"] != found.inputs["sha256_b"]).all()


def test_response_that_was_edited_since_is_not_shown(hotter: Path, tmp_path: Path) -> None:
    root = write_run(tmp_path)
    (tmp_path / "maize.yaml").write_text("crop: other\n", encoding="utf-8")
    assert list(compare(root, hotter).settings["key"]) == ["ensemble.draws"]


def test_results_by_region(plain: Path, hotter: Path) -> None:
    found = compare(plain, hotter)
    assert not found.identical
    assert list(found.changes["region"]) == ["Saltmere", "Thornfold"]
    np.testing.assert_allclose(found.changes["change_p50_difference"], -2.0)
    np.testing.assert_allclose(found.changes["change_p05_a"], -11.0)
    np.testing.assert_allclose(found.changes["baseline_production_t_difference"], 0.0)
    row = found.production.iloc[0]
    # 1000 (1 + heat t): mean t of the baseline is 3, the largest difference is in the last year.
    assert row["baseline_a_t"] == pytest.approx(1000 * (1 - 0.006 * 3))
    assert row["baseline_b_t"] == pytest.approx(1000 * (1 - 0.008 * 3))
    assert row["in_year"] == 2000
    assert row["largest_difference_percent"] == pytest.approx(100 * (0.92 / 0.94 - 1))
    assert (row["simulation"], row["crop"], row["years"]) == (SIMULATION, "maize", 10)


def test_largest_pixels(plain: Path, hotter: Path) -> None:
    found = compare(plain, hotter, pixels=3)
    grids = [
        xr.load_dataset(root / "yields" / SIMULATION / "maize_rainfed.nc")["yield"]
        for root in (plain, hotter)
    ]
    difference = grids[1] - grids[0]
    largest = np.sort(np.abs(difference.values).max(axis=0).ravel())[::-1]
    rows = found.pixels[found.pixels["variable"] == "yield"]
    assert len(rows) == 3
    np.testing.assert_array_equal(rows["difference"].abs(), largest[:3])
    for _, row in rows.iterrows():
        year = int(row["where"].removeprefix("year "))
        at = {"lat": row["lat"], "lon": row["lon"], "year": year}
        assert row["value_a"] == float(grids[0].sel(at))
        assert row["value_b"] == float(grids[1].sel(at))
        assert row["difference"] == float(difference.sel(at))
    assert set(found.pixels["variable"]) == {"yield", "change_p50"}


def test_files_are_counted_value_by_value(plain: Path, hotter: Path) -> None:
    found = compare(plain, hotter).files.set_index("file")
    season = found.loc[f"season/{SIMULATION}/maize_rainfed_tile.nc"]
    assert season["status"] == "identical"
    assert season["compared"] == 160
    yields = found.loc[f"yields/{SIMULATION}/maize_rainfed.nc"]
    assert (yields["status"], yields["differing"], yields["one_missing"]) == ("different", 160, 0)
    totals = found.loc[f"regions/{SIMULATION}/maize.parquet"]
    assert totals["where"] == "rainfed, Saltmere, 0, 2000"
    assert totals["largest_difference"] == pytest.approx(-20.0)


def test_region_run_against_full_run(plain: Path, region: Path) -> None:
    found = compare(plain, region)
    assert found.identical
    files = found.files.set_index("file")
    # 4 rows and 2 columns of the region, 10 years; the third column is not computed there.
    assert files.loc[f"yields/{SIMULATION}/maize_rainfed.nc", "compared"] == 4 * 2 * 10
    assert files.loc[f"yields/{SIMULATION}/maize_rainfed.nc", "differing"] == 0
    # Significance is compared where the pixel's main region is the same: the first column.
    assert files.loc[f"trend/{SIMULATION}/maize_rainfed.nc", "compared"] == 4
    name = f"trend/{SIMULATION}/maize_rainfed_distribution.parquet"
    assert files.loc[name, "status"] == "not comparable"
    assert list(found.changes["region"]) == ["Saltmere"]
    assert [row["key"] for _, row in found.settings.iterrows()] == ["subset"]


def test_one_changed_bit_is_found(plain: Path, tmp_path: Path) -> None:
    root = write_run(tmp_path)
    path = root / "yields" / SIMULATION / "maize_rainfed.nc"
    dataset = xr.load_dataset(path)
    value = float(dataset["yield"][3, 1, 2])
    dataset["yield"][3, 1, 2] = np.nextafter(value, 9)
    dataset["yield"][4, 0, 0] = np.nan
    dataset.to_netcdf(path)
    found = compare(plain, root)
    assert not found.identical
    row = found.files.set_index("file").loc[f"yields/{SIMULATION}/maize_rainfed.nc"]
    assert (row["differing"], row["one_missing"]) == (2, 1)
    assert row["where"] == "year 1994, lat 45.5, lon 7.5"
    assert row["largest_difference"] == np.nextafter(value, 9) - value


def test_files_of_one_run_only(plain: Path, tmp_path: Path) -> None:
    root = write_run(tmp_path)
    (root / "ensemble" / "changes.parquet").unlink()
    extra = root / "ensemble" / "more.csv"
    extra.write_text("draw,heat\n0,1\n", encoding="utf-8")
    found = compare(plain, root)
    files = found.files.set_index("file")["status"]
    assert files["ensemble/changes.parquet"] == "only in A"
    assert files["ensemble/more.csv"] == "only in B"
    assert found.changes.empty
    assert not found.identical


def test_rows_of_one_table_only(plain: Path, tmp_path: Path) -> None:
    root = write_run(tmp_path)
    path = root / "regions" / SIMULATION / "maize.parquet"
    pd.read_parquet(path).iloc[:-3].to_parquet(path, index=False)
    row = compare(plain, root).files.set_index("file").loc[f"regions/{SIMULATION}/maize.parquet"]
    assert (row["status"], row["differing"]) == ("different", 3)


def test_no_results_folder(plain: Path, tmp_path: Path) -> None:
    with pytest.raises(ResultsError, match=r"holds no assessment\.yaml"):
        compare(plain, tmp_path)


def test_dotted_keys() -> None:
    nested = {"a": {"b": 1, "c": [1, 2]}, "runs": [{"model": "x"}, {"model": "y"}], "e": {}}
    assert flatten(nested) == {
        "a.b": 1,
        "a.c": [1, 2],
        "runs.0.model": "x",
        "runs.1.model": "y",
        "e": {},
    }


def test_output_for_people_and_machines(plain: Path, hotter: Path, tmp_path: Path) -> None:
    found = compare(plain, hotter)
    console = Console(record=True, width=160)
    show(found, console)
    text = console.export_text()
    for words in ("ensemble.draws", "-6.00 to -8.00", "maize.yaml", "the results differ:"):
        assert words in text
    content = json.loads(as_json(found))
    assert content["identical"] is False
    assert content["settings"][0] == {"key": "ensemble.draws", "a": 20, "b": 50}
    assert len(content["changes"]) == 2
    paths = write_csv(found, tmp_path / "out")
    assert sorted(path.name for path in paths) == [
        *("changes.csv", "files.csv", "inputs.csv", "pixels.csv", "production.csv"),
        "settings.csv",
    ]
    assert len(pd.read_csv(tmp_path / "out" / "changes.csv")) == 2
    with pytest.raises(ResultsError, match="cannot be written"):
        write_csv(found, tmp_path / "out" / "changes.csv")


def test_exit_status(plain: Path, hotter: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out, err = Console(width=160), Console(stderr=True)
    assert compare_folders(plain, plain, out, err) == 0
    assert compare_folders(plain, hotter, out, err, stages=["season"]) == 0
    capsys.readouterr()
    assert compare_folders(plain, hotter, out, err, as_text=False) == 3
    assert json.loads(capsys.readouterr().out)["identical"] is False
    with pytest.raises(AssessmentError, match="no stage seasons; give one of prepare, "):
        compare_folders(plain, hotter, out, err, stages=["seasons"])


def test_rows_are_told_apart_by_what_differs(plain: Path, tmp_path: Path) -> None:
    root = write_run(tmp_path)
    path = root / "ensemble" / "classes.parquet"
    table = pd.read_parquet(path)
    table.loc[table["region"].eq("Thornfold") & table["number"].eq(2), "share"] = 0.75
    table.sample(frac=1, random_state=1).to_parquet(path, index=False)  # in another order
    row = compare(plain, root).files.set_index("file").loc["ensemble/classes.parquet"]
    assert (row["compared"], row["differing"], row["variable"]) == (9, 1, "share")
    assert (row["where"], row["largest_difference"]) == ("maize, Thornfold, 2", 0.25)
