"""The files of a fit: a document ready for use, tables, figures; whole or not at all."""

from __future__ import annotations

import hashlib
import io

import numpy as np
import pandas as pd
import pytest
import xarray as xr
import yaml
from fit_inputs import panel, write
from rich.console import Console
from stook.errors import ResultsError
from stook.fit.job import run_fit, write_all
from stook.fit.show import show_fit
from stook.yields.response import load_response
from stook.yields.response_terms import design_matrix

FILES = {
    "maize_rainfed.yaml",
    *("specifications.csv", "coefficients.csv", "curves.csv", "residuals.csv", "sample.csv"),
    *("shares.csv", "curves.png", "residuals.png"),
}


@pytest.fixture(scope="module")
def done(tmp_path_factory):
    folder = tmp_path_factory.mktemp("fit")
    frame = panel(units=22)
    frame.loc[3, "yield"] = np.nan
    frame.loc[40, "rain"] = np.nan
    return frame, run_fit(write(folder, frame, inputs={"fertiliser": "log"})), folder


def test_all_files_are_there_and_nothing_else(done) -> None:
    _, found, folder = done
    assert {path.name for path in (folder / "found").iterdir()} == FILES
    assert {path.name for path in found.files} == FILES
    for name in ("curves.png", "residuals.png"):
        assert (folder / "found" / name).read_bytes().startswith(b"\x89PNG")


def test_document_gives_the_same_predictor_as_the_fit(done) -> None:
    frame, found, folder = done
    response = load_response(folder / "found" / "maize_rainfed.yaml")
    assert response == found.response
    assert response.coefficient_names == ["heat", "rain.1", "rain.2"]
    estimate = found.estimates[found.chosen]
    np.testing.assert_array_equal(response.coefficient_vector, estimate.weather)
    np.testing.assert_array_equal(response.covariance_matrix, estimate.covariance)
    used = frame.drop(index=[3, 40]).sort_values(["unit", "year"], ignore_index=True)
    grid = xr.Dataset(
        {name: (("year", "lat", "lon"), used[name].to_numpy()[None, None]) for name in INDEX}
    )
    predictor = (
        response.intercept + design_matrix(response, grid)[:, 0] @ response.coefficient_vector
    )
    # What the fit has besides: unit effects, a trend and the input, all of mean zero in sum.
    assert predictor.mean() == pytest.approx(np.log(used["yield"]).mean(), abs=1e-12)
    rest = pd.Series(estimate.fitted - predictor)
    time = used["year"] - 2007
    part = estimate.coefficients.loc["trend.1", "coefficient"] * time + estimate.coefficients.loc[
        "fertiliser", "coefficient"
    ] * np.log(used["fertiliser"])
    own = rest - part
    assert (own.groupby(used["unit"]).transform("mean") - own).abs().max() < 1e-11


INDEX = ("heat", "rain")


def test_document_says_where_its_numbers_come_from(done) -> None:
    frame, found, folder = done
    response = found.response
    assert response.citation == "invented"
    digest = hashlib.sha256((folder / "panel.csv").read_bytes()).hexdigest()
    assert f"panel SHA-256 {digest}" in response.note
    assert "panel of 328 unit-years, 22 units, 2000 to 2014 (15 years)" in response.note
    assert "inputs held: fertiliser" in response.note
    assert "cluster unit (22 units)" in response.note
    used = frame.drop(index=[3, 40])
    assert response.estimation_range == {
        name: (used[name].min(), used[name].max()) for name in INDEX
    }


def test_tables(done) -> None:
    _, found, folder = done
    table = pd.read_csv(folder / "found" / "specifications.csv")
    assert list(table["specification"]) == ["heat-and-rain", "heat-bent"]
    assert list(table["written"]) == [True, False]
    assert (table["observations"] == 328).all()
    assert table["skill_years"].iloc[0] > table["skill_years"].iloc[1]
    coefficients = pd.read_csv(folder / "found" / "coefficients.csv")
    held = coefficients[coefficients["inputs"] == "held"]
    left_out = coefficients[coefficients["inputs"] == "left out"]
    assert "fertiliser" in set(held["name"])
    assert "fertiliser" not in set(left_out["name"])
    heat = [part[part["name"] == "heat"].iloc[0] for part in (held, left_out)]
    assert heat[0]["standard_error"] < heat[1]["standard_error"]
    shares = pd.read_csv(folder / "found" / "shares.csv").set_index("part")["share"]
    assert shares.sum() == pytest.approx(1)
    assert found.sample.dropped == {
        "yield, area or input missing": 1,
        "season index missing": 1,
    }
    sample = pd.read_csv(folder / "found" / "sample.csv")
    assert len(sample) == 328
    assert "quadratic rain 2" in sample


def test_inputs_may_be_left_out_of_the_document(done, tmp_path) -> None:
    frame, found, _ = done
    path = write(tmp_path, frame, inputs={"fertiliser": "log"}, response_holds_inputs=False)
    other = run_fit(path)
    np.testing.assert_array_equal(
        other.response.coefficient_vector, found.without_inputs[found.chosen].weather
    )
    assert "inputs not held: fertiliser" in other.response.note


def test_terminal(done) -> None:
    _, found, _ = done
    stream = io.StringIO()
    show_fit(found, Console(file=stream, width=120))
    text = stream.getvalue()
    assert "maize rainfed: 328 unit-years, 22 units, 2000 to 2014" in text
    assert "left out: 1 unit-years, season index missing" in text
    assert "heat-and-rain *" in text
    assert "without inputs" in text
    assert "unexplained" in text
    assert "warning" not in text


def test_same_fit_twice_gives_the_same_bytes(tmp_path) -> None:
    choices = {"method": "bootstrap-years", "replications": 50}
    path = write(tmp_path, panel(), standard_errors=choices, choose="heat-bent")
    first = {file.name: file.read_bytes() for file in run_fit(path).files}
    again = run_fit(path)
    assert first == {file.name: file.read_bytes() for file in again.files}
    assert again.chosen == "heat-bent"
    # Blocks of years are few: the warning is there once.
    assert sum("15 blocks of years only" in line for line in again.warnings) == 2
    assert yaml.safe_load(first["maize_rainfed.yaml"])["terms"]["heat"]["knots"] == [20, 40]


def test_level_link_has_its_level(tmp_path) -> None:
    frame = panel()
    response = run_fit(write(tmp_path, frame, link="level")).response
    heat, rain = frame["heat"], frame["rain"]
    columns = np.column_stack([heat, rain, rain**2])
    predicted = response.intercept + columns @ response.coefficient_vector
    assert predicted.mean() == pytest.approx(frame["yield"].mean(), rel=1e-10)


def test_an_interrupted_writing_leaves_what_was_there(tmp_path) -> None:
    (tmp_path / "a").write_text("old", encoding="utf-8")

    def fail(path) -> None:
        raise KeyboardInterrupt

    writers = {"a": lambda path: path.write_text("new", encoding="utf-8"), "b": fail}
    with pytest.raises(KeyboardInterrupt):
        write_all(tmp_path, writers)
    assert [(path.name, path.read_text()) for path in tmp_path.iterdir()] == [("a", "old")]


def test_a_folder_that_is_a_file_is_one_line(tmp_path) -> None:
    (tmp_path / "found").write_text("", encoding="utf-8")
    with pytest.raises(ResultsError, match=r"found: cannot be written \("):
        run_fit(write(tmp_path, panel()))
