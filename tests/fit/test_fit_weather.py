"""Weather of units from pixels: against plain loops, and the invented world end to end."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import stook.prepare.job as prepare
import stook.regions.job as regions
import stook.season.job as season
import xarray as xr
import yaml
from pydantic import TypeAdapter
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.variables import system_response
from stook.audit.ledger import sha256
from stook.errors import StookError
from stook.fit.job import files_digest, run_fit
from stook.fit.weather import WeatherSums
from stook.yields.response import Response, Term, load_response
from stook.yields.response_terms import design_matrix

from demo_grids.assessment_file import assessment_text
from demo_grids.climate_files import write_record
from demo_grids.crop_files import write_crops, write_districts
from demo_grids.domain import domain
from demo_grids.panel import FERTILISER, write_panel
from demo_grids.responses import TRUE, coefficients, write_responses
from demo_grids.world import SEED

TERM: TypeAdapter[Term] = TypeAdapter(Term)
YEARS = np.arange(2001, 2005)


def grids(seed: int = 3):
    """Return invented season indices, shares of two units, and areas: 4 x 3 pixels."""
    random = np.random.default_rng(seed)
    lat, lon = np.arange(4.0), np.arange(3.0)
    shape = (len(YEARS), 4, 3)
    indices = xr.Dataset(
        {
            "heat": (("year", "lat", "lon"), random.gamma(2, 20, shape)),
            "rain": (("year", "lat", "lon"), random.normal(400, 90, shape)),
        },
        coords={"year": YEARS, "lat": lat, "lon": lon},
    )
    coverage = xr.DataArray(
        random.uniform(0, 1, (2, 4, 3)) * (random.uniform(0, 1, (2, 4, 3)) > 0.3),
        dims=("region", "lat", "lon"),
        coords={"region": ["a", "b"], "lat": lat, "lon": lon},
    )
    area = xr.DataArray(
        random.uniform(0, 90, (4, 3)), dims=("lat", "lon"), coords={"lat": lat, "lon": lon}
    )
    return indices, coverage, area


TERMS = [
    TERM.validate_python(
        {"form": "piecewise-linear", "index": "heat", "knots": [30], "coefficients": [0, 0]}
    ),
    TERM.validate_python({"form": "quadratic", "index": "rain", "coefficients": [0, 0]}),
]


def test_terms_are_averaged_over_pixels_by_area() -> None:
    indices, coverage, area = grids()
    area[0, 0] = np.nan
    indices["heat"][:, 1, 1] = np.nan  # a pixel without a season is left out
    sums = WeatherSums(["a", "b"], TERMS, YEARS, 64)
    sums.add(indices, coverage, area)
    found = sums.result()
    forms = {
        "piecewise-linear heat 30 1": lambda heat, rain: min(heat, 30.0),
        "piecewise-linear heat 30 2": lambda heat, rain: max(heat - 30.0, 0.0),
        "quadratic rain 1": lambda heat, rain: rain,
        "quadratic rain 2": lambda heat, rain: rain**2,
    }
    assert set(found.columns) == set(forms)
    for number, unit in enumerate("ab"):
        for place, year in enumerate(YEARS):
            for name, form in forms.items():
                total = weight = 0.0
                for row in range(4):
                    for column in range(3):
                        if (row, column) in ((0, 0), (1, 1)):
                            continue
                        w = float(coverage[number, row, column] * area[row, column])
                        heat = float(indices["heat"][place, row, column])
                        rain = float(indices["rain"][place, row, column])
                        total += w * form(heat, rain)
                        weight += w
                expected = pytest.approx(total / weight, rel=1e-13)
                assert found.columns.loc[(unit, year), name] == expected
    used = ((coverage > 0).any("region") & (area > 0)).values
    used[1, 1] = False
    heat = indices["heat"].values[:, used]
    assert found.ranges["heat"] == (heat.min(), heat.max())


def test_a_missing_year_of_one_pixel_makes_the_unit_year_missing() -> None:
    indices, coverage, area = grids()
    coverage[:] = 0.5
    coverage[0, 2:] = 0
    indices["rain"][1, 3, 0] = np.nan
    sums = WeatherSums(["a", "b"], TERMS, YEARS, 64)
    sums.add(indices, coverage, area)
    missing = sums.result().columns["quadratic rain 2"].isna()
    assert list(missing[missing].index) == [("b", 2002)]


@pytest.mark.parametrize("block_mb", [64, 1e-6])
def test_tiles_and_blocks_give_the_same_bits(block_mb: float) -> None:
    indices, coverage, area = grids()
    whole = WeatherSums(["a", "b"], TERMS, YEARS, 64)
    whole.add(indices, coverage, area)
    parts = WeatherSums(["a", "b"], TERMS, YEARS, block_mb)
    for rows in (slice(0, 3), slice(3, 4)):
        parts.add(indices.isel(lat=rows), coverage.isel(lat=rows), area.isel(lat=rows))
    pd.testing.assert_frame_equal(whole.result().columns, parts.result().columns, check_exact=True)
    assert whole.result().ranges == parts.result().ranges


def test_a_unit_without_area_has_no_rows() -> None:
    indices, coverage, area = grids()
    coverage[1] = 0
    sums = WeatherSums(["a", "b"], TERMS, YEARS, 64)
    sums.add(indices, coverage, area)
    assert set(sums.result().columns.index.get_level_values("unit")) == {"a"}
    assert sums.area[1] == 0


def test_digest_of_several_files(tmp_path) -> None:
    for name in "ab":
        (tmp_path / name).write_text(name, encoding="utf-8")
    # sha256 of "a", a line feed and of "b", by sha256sum
    one = files_digest([tmp_path / "a"])
    assert one == "ca978112ca1bbdcafac231b39a23dc4da786eff8147c4e72b9807785afee48bb"
    both = files_digest([tmp_path / "a", tmp_path / "b"])
    assert both not in (one, files_digest([tmp_path / "b", tmp_path / "a"]))


@pytest.fixture(scope="module")
def world(tmp_path_factory):
    """What a fit needs of the tiny world: the record, crops and districts, up to the season."""
    folder = tmp_path_factory.mktemp("world")
    tiny = domain("tiny")
    write_crops(folder / "crops", tiny)
    write_districts(folder / "districts.gpkg", tiny)
    write_responses(folder / "responses", SEED)
    write_record(folder / "reference", tiny, SEED)
    write_panel(folder / "fit", tiny, SEED)
    file = folder / "assessment.yaml"
    content = yaml.safe_load(assessment_text(tiny, "tiny", SEED))
    del content["simulations"]  # the record is enough
    file.write_text(yaml.safe_dump(content, sort_keys=False), encoding="utf-8")
    assessment = load_assessment(file)
    regions.overlay(assessment)
    prepare.layers(assessment)
    prepare.tile(assessment, "observed", "0")
    season.tile(assessment, "observed", "maize", "rainfed", "0")
    return folder, assessment


def rewritten(folder, **changes):
    """Write the fit document of the world with other keys; return its path."""
    text = (folder / "fit" / "maize_rainfed.yaml").read_text(encoding="utf-8")
    path = folder / "fit" / "other.yaml"
    content = yaml.safe_load(text) | {"output": "other"} | changes
    path.write_text(yaml.safe_dump(content, sort_keys=False), encoding="utf-8")
    return path


def test_invented_truth_is_recovered(world) -> None:
    folder, assessment = world
    found = run_fit(folder / "fit" / "maize_rainfed.yaml")
    response = load_response(folder / "fit" / "maize_rainfed" / "maize_rainfed.yaml")
    assert response == found.response
    assert found.chosen == "growth-heat-rain"
    table = found.estimates[found.chosen].coefficients
    expected = [*coefficients(TRUE["maize_rainfed"]), FERTILISER]
    names = [*response.coefficient_names, "fertiliser"]
    errors = (table.loc[names, "coefficient"] - expected) / table.loc[names, "standard_error"]
    assert errors.abs().max() < 3
    assert found.shares["weather"] > 0.7
    assert response.indices == system_response(assessment, "maize", "rainfed").indices
    season_file = Layout.of(assessment).season("observed", "maize", "rainfed", 0)
    with xr.open_dataset(season_file) as indices:
        low, high = response.estimation_range["heat"]
        assert float(indices["heat"].min()) <= low < high <= float(indices["heat"].max())
    assert f"observed season indices SHA-256 {sha256(season_file)}" in response.note


@pytest.mark.parametrize(("mean_of_logs", "tolerance"), [(True, 1e-9), (False, 0.05)])
def test_panel_without_noise_gives_back_the_response(world, mean_of_logs, tolerance) -> None:
    """The area mean of the pixels' log yields exactly; the log of their mean yield nearly."""
    folder, assessment = world
    layout = Layout.of(assessment)
    errors = {"standard_errors": [0.0] * 7, "citation": "none", "note": "none"}
    response = Response.model_validate(
        TRUE["maize_rainfed"] | {"crop": "maize", "system": "rainfed"} | errors
    )
    with (
        xr.open_dataset(layout.season("observed", "maize", "rainfed", 0)) as indices,
        xr.open_dataset(layout.layers) as layers,
        xr.open_dataset(layout.overlay) as overlay,
    ):
        area = layers["area"].sel(crop_system="maize_rainfed").fillna(0).values.ravel()
        weights = overlay["coverage"].values.reshape(overlay.sizes["region"], -1) * area
        units, years = list(overlay["region"].values), indices["year"].values
        predictor = design_matrix(response, indices) @ response.coefficient_vector
    there = np.isfinite(predictor).all(axis=1)
    weights, predictor = weights[:, there], predictor[there]
    if mean_of_logs:
        yields = np.exp(weights @ predictor / weights.sum(axis=1, keepdims=True))
    else:
        yields = weights @ np.exp(predictor) / weights.sum(axis=1, keepdims=True)
    frame = pd.DataFrame(yields, index=units, columns=years)
    frame = frame.dropna().rename_axis("district").reset_index()
    frame = frame.melt("district", var_name="year", value_name="yield")
    frame.to_csv(folder / "fit" / "exact.csv", index=False)
    path = rewritten(folder, panel="exact.csv", inputs={}, trend="none", choose="growth-heat-rain")
    found = run_fit(path).response.coefficient_vector
    np.testing.assert_allclose(found, response.coefficient_vector, rtol=tolerance)


def message(folder, **changes) -> str:
    with pytest.raises(StookError) as caught:
        run_fit(rewritten(folder, **changes))
    assert "\n" not in str(caught.value)
    return str(caught.value).replace(f"{folder}/", "")


def test_mistakes_beside_an_assessment_are_one_line(world) -> None:
    folder, _ = world
    assert message(folder, crop="wheat") == (
        "assessment.yaml: has no wheat rainfed; it has maize rainfed, maize irrigated, "
        "barley rainfed, rice irrigated"
    )
    frost = {"one": {"frost": {"form": "linear", "index": "frost"}}}
    assert "index frost is not available" in message(folder, specifications=frost)
    assert "add it under its indices" in message(folder, specifications=frost)
    heat = {"one": {"heat": {"form": "linear", "index": "heat"}}}
    missing = message(folder, system="irrigated", specifications=heat)
    assert "no such file; run the stage that makes it" in missing
    panel = pd.read_csv(folder / "fit" / "yields.csv")
    elsewhere = panel.assign(district=panel["district"].replace("Thornfold", "Farland"))
    elsewhere.to_csv(folder / "fit" / "elsewhere.csv", index=False)
    strange = message(folder, panel="elsewhere.csv")
    assert strange == "fit/elsewhere.csv: unit Farland is not a region of districts.gpkg"
    panel.assign(year=panel["year"] + 300).to_csv(folder / "fit" / "later.csv", index=False)
    assert "(2291 to 2310); there are 1991 to 2010" in message(folder, panel="later.csv")


def test_blocks_of_space_come_from_the_polygons(world) -> None:
    folder, _ = world
    choices = {"method": "bootstrap-space", "replications": 50, "block_degrees": 0.2}
    few = {"method": "bootstrap-space", "block_degrees": 90.0}
    assert "singular: 1 clusters are too few" in message(folder, standard_errors=few)
    heat = {"one": {"heat": {"form": "linear", "index": "heat"}}}
    path = rewritten(folder, specifications=heat, standard_errors=choices)
    assert run_fit(path).estimates["one"].clusters == 6
