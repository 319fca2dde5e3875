"""The generated folder: what a user finds in it, and that it comes out the same again."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from stook.assessment.load import load_assessment
from stook.assessment.simulations import all_simulations
from stook.assessment.variables import series_variables, system_response

from demo_grids.__main__ import main
from demo_grids.domain import domain
from demo_grids.models import MODELS
from demo_grids.world import generate

CF_TIME = xr.coders.CFDatetimeCoder(use_cftime=True)
VARIABLES = ["tasmin", "tasmax", "pr", "hurs"]


def open_series(files):
    parts = [xr.open_dataset(path, decode_times=CF_TIME) for path in files]
    return xr.concat(parts, "time", data_vars="minimal", coords="minimal", compat="override")


def digests(folder: Path) -> dict[str, str]:
    files = sorted(path for path in folder.rglob("*") if path.is_file())
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in files
    }


@pytest.fixture(scope="module")
def tiny(tmp_path_factory):
    return load_assessment(generate(tmp_path_factory.mktemp("tiny"), "tiny", seed=3))


@pytest.fixture(scope="module")
def three_models(tmp_path_factory):
    """Six pixels and forty years of all three models."""
    folder = tmp_path_factory.mktemp("three")
    return load_assessment(generate(folder, seed=3, pixels=6, years=40))


def test_tiny_world_is_a_valid_assessment(tiny):
    names = [simulation.name for simulation in all_simulations(tiny)]
    assert names == [
        "observed",
        "ALDER-ESM_high_r1i1p1f1",
        "ALDER-ESM_moderate_r1i1p1f1",
        "SEDGE-LR_high_r1i1p1f1",
    ]
    assert series_variables(tiny, VARIABLES) == VARIABLES
    assert tiny.periods.baseline == (1991, 2010)
    assert tiny.systems == [
        ("maize", "rainfed"),
        ("maize", "irrigated"),
        ("barley", "rainfed"),
        ("rice", "irrigated"),
    ]
    rice = tiny.system("rice", "irrigated")
    assert list(rice.phases) == ["vegetative", "reproductive", "ripening"]
    for crop, system in tiny.systems:
        response = system_response(tiny, crop, system)
        assert (response.crop, response.system) == (crop, system)
        assert response.citation == "invented for the demo world"
        phases = set(tiny.system(crop, system).phases) | {"season"}
        assert {index.phase for index in response.indices.values()} <= phases


def test_demo_assessment_has_the_stated_windows():
    world = domain("demo")
    assert world.rows * world.columns == 120
    assert world.record == (1981, 2020)
    assert world.baseline == (1991, 2020)
    assert world.horizons == {"mid-century": (2041, 2060), "late-century": (2081, 2100)}
    assert {name: len(given) for name, given in world.members.items()} == dict.fromkeys(MODELS, 2)


def test_every_response_form_and_both_links_are_there(tiny):
    responses = [system_response(tiny, *pair) for pair in tiny.systems]
    assert sorted(response.link for response in responses) == ["level", "log", "log", "log"]
    forms = {term.form for response in responses for term in response.terms.values()}
    assert forms == {"linear", "quadratic", "piecewise-linear"}
    assert {response.covariance is None for response in responses} == {True, False}
    measures = {index.measure for response in responses for index in response.indices.values()}
    assert measures == {
        "degree-days",
        "mean",
        "total",
        "days-above",
        "longest-dry-spell",
        "vapour-pressure-deficit",
    }


@pytest.mark.parametrize(
    ("model", "calendar", "days"),
    [
        ("ALDER-ESM", "standard", 40 * 365 + 10),
        ("ROWAN-CM", "noleap", 40 * 365),
        ("SEDGE-LR", "360_day", 40 * 360),
    ],
)
def test_every_series_is_whole_and_in_its_calendar(three_models, model, calendar, days):
    for simulation in all_simulations(three_models):
        if simulation.model != model:
            continue
        for variable in VARIABLES:
            series = open_series(simulation.files[variable])
            assert series["time"].dt.calendar == calendar
            assert series.sizes["time"] == days
            steps = np.diff(series["time"].values)
            assert {step.total_seconds() for step in steps} == {86400.0}
            first = series["time"].values[0]
            assert (first.year, first.month, first.day, first.hour) == (1981, 1, 1, 12)
            assert not np.isnan(series[variable].values).any()


def test_files_are_split_as_stated(three_models):
    counts = {
        simulation.model: len(simulation.files["pr"])
        for simulation in all_simulations(three_models)
        if simulation.scenario == "high"
    }
    # 1981-1990, 1991-2000, 2001-2010, 2011-2014 and 2015-2020; 1981-2014 and 2015-2020;
    # 1981-2000, 2001-2014 and 2015-2020
    assert counts == {"ALDER-ESM": 5, "ROWAN-CM": 2, "SEDGE-LR": 3}


def test_weather_is_physical_and_in_the_stated_units(three_models):
    factors = {"kg m-2 s-1": 86400.0, "mm day-1": 1.0, "%": 1.0, "1": 100.0}
    for simulation in all_simulations(three_models):
        data = {name: open_series(simulation.files[name])[name] for name in VARIABLES}
        kelvin = 273.15 if data["tasmax"].attrs["units"] == "K" else 0.0
        assert data["tasmin"].attrs["units"] == data["tasmax"].attrs["units"]
        low, high = (data[name].values - kelvin for name in ("tasmin", "tasmax"))
        assert np.all(low < high)
        assert -35 < low.min() < high.max() < 60
        rain = data["pr"].values * factors[data["pr"].attrs["units"]]
        assert rain.min() >= 0
        assert 300 < 365 * rain.mean() < 1500
        humidity = data["hurs"].values * factors[data["hurs"].attrs["units"]]
        assert 0 <= humidity.min() < humidity.max() <= 100
        assert data["tasmin"].attrs["cell_methods"] == "area: mean time: minimum"
        assert data["tasmax"].attrs["cell_methods"] == "area: mean time: maximum"
        assert data["tasmax"].attrs["standard_name"] == "air_temperature"


def test_units_differ_between_models(three_models):
    units = {
        simulation.model: open_series(simulation.files["pr"])["pr"].attrs["units"]
        for simulation in all_simulations(three_models)
    }
    assert units == {
        "observed": "mm day-1",
        "ALDER-ESM": "kg m-2 s-1",
        "ROWAN-CM": "kg m-2 s-1",
        "SEDGE-LR": "mm day-1",
    }


def test_model_grids_are_coarse_and_surround_the_world(three_models):
    world = domain(pixels=6, years=40)
    steps = set()
    for simulation in all_simulations(three_models):
        if simulation.model == "observed":
            continue
        model = MODELS[simulation.model]
        series = open_series(simulation.files["pr"])
        lat, lon = (series[name].values for name in model.axis_names)
        assert (lat[0] > lat[-1]) == (simulation.model == "SEDGE-LR")
        assert (lon.min() >= 180) == (simulation.model == "SEDGE-LR")
        lon = (lon + 180) % 360 - 180
        assert lat.min() < world.south < world.south + world.height < lat.max()
        assert lon.min() < world.west < world.west + world.width < lon.max()
        steps.add((abs(float(lat[1] - lat[0])), float(lon[1] - lon[0])))
    assert len(steps) == 3
    assert min(min(step) for step in steps) > world.step


def test_the_same_seed_gives_the_same_bytes_and_another_seed_another_world(tmp_path):
    made = {}
    for name, seed in (("a", 1), ("b", 1), ("c", 2)):
        generate(tmp_path / name, seed=seed, pixels=4, years=20)
        made[name] = digests(tmp_path / name)
    assert made["a"] == made["b"]
    changed = {name for name in made["a"] if made["a"][name] != made["c"][name]}
    assert {name.split("/")[0] for name in changed} == {
        "climate",
        "fit",
        "reference",
        "responses",
        "assessment.yaml",
    }


def test_a_new_world_replaces_an_earlier_one(tmp_path):
    generate(tmp_path / "twice", seed=1, pixels=4, years=40)
    generate(tmp_path / "twice", seed=1, pixels=4, years=20)
    generate(tmp_path / "once", seed=1, pixels=4, years=20)
    assert digests(tmp_path / "twice") == digests(tmp_path / "once")


def test_an_interrupted_world_has_no_assessment_file(tmp_path):
    generate(tmp_path, pixels=4, years=20)

    def stop(done, parts, what):
        if done == 3:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        generate(tmp_path, pixels=4, years=20, progress=stop)
    assert not (tmp_path / "assessment.yaml").exists()


def test_progress_counts_to_the_end(tmp_path):
    seen = []
    generate(tmp_path, pixels=4, years=20, progress=lambda *given: seen.append(given))
    parts = seen[0][1]
    assert [done for done, _, _ in seen] == list(range(parts + 1))
    assert {count for _, count, _ in seen} == {parts}
    assert seen[-1][2] == "done"


@pytest.mark.parametrize(("pixels", "years"), [(500, 20), (4, 130)])
def test_a_world_of_any_size_is_a_valid_assessment(tmp_path, pixels, years):
    world = domain(pixels=pixels, years=years)
    assert world.rows * world.columns == pytest.approx(pixels, rel=0.1)
    assert world.simulated[1] - world.simulated[0] + 1 == years
    if pixels == 4:
        assessment = load_assessment(generate(tmp_path, pixels=pixels, years=years))
        assert set(assessment.periods.horizons) == {"mid-century", "late-century"}


def test_a_huge_world_stays_on_the_globe():
    world = domain(pixels=1_000_000)
    assert world.rows * world.columns == pytest.approx(1_000_000, rel=0.01)
    assert world.south >= 0
    assert world.south + world.height <= 90
    assert world.west >= -180
    assert world.west + world.width <= 180


def test_command_line_writes_a_world(tmp_path, capsys):
    assert main([str(tmp_path), "--pixels", "4", "--years", "20"]) == 0
    out, err = capsys.readouterr()
    assert out.strip() == str(tmp_path / "assessment.yaml")
    assert "SEDGE-LR" in err


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (["--pixels", "3"], "error: pixels must be 4 or more, got 3\n"),
        (["--years", "19"], "error: years must be 20 or more, got 19\n"),
    ],
)
def test_command_line_refuses_worlds_that_are_too_small(tmp_path, capsys, options, message):
    assert main([str(tmp_path / "new"), *options]) == 1
    assert capsys.readouterr().err == message
    assert not (tmp_path / "new").exists()


def test_unknown_size_is_refused():
    with pytest.raises(ValueError, match="size 'huge' is not known; there are tiny, demo"):
        domain("huge")
