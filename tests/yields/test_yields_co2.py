"""Carbon dioxide: the power by hand, the term, its draws, the plain path, faults of the files."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from pydantic import ValidationError
from stook.audit.plain.yields import yields_of_pixel
from stook.errors import AssessmentError, InputError
from stook.yields.co2 import (
    CropEffect,
    co2_index,
    concentrations,
    effect_draws,
    read_concentrations,
    scenario_of,
    with_co2,
)
from stook.yields.grids import yield_grids
from stook.yields.response import Response
from yields_inputs import invented_indices, layer, response, with_product

GIVEN: dict[str, Any] = {
    "ppm": [353, 550],
    "percent": 19,
    "low": 12,
    "high": 26,
    "source": "invented",
}
EFFECT = CropEffect.model_validate(GIVEN)
YEARS = range(2001, 2041)
BASELINE = (2001, 2020)


def grids(ppm: np.ndarray, model: Response, indices: xr.Dataset | None = None) -> xr.Dataset:
    indices = invented_indices(YEARS, (2, 2)) if indices is None else indices
    return yield_grids(
        co2_index(indices, ppm, EFFECT.ppm[0]),
        layer(indices, 5.0),
        layer(indices, np.int8(0)),
        model,
        model.coefficient_vector,
        BASELINE,
    )


def test_the_power_gives_back_the_experiment_and_is_concave() -> None:
    """353 to 550 ppm, +19 % (Kimball 2016): b = 0.17395 / 0.44346."""
    assert EFFECT.central == pytest.approx(0.3923, abs=5e-5)
    assert (550 / 353) ** EFFECT.central == pytest.approx(1.19, rel=1e-14)
    gains = np.diff(np.array([353.0, 453, 553, 653, 753]) ** EFFECT.central)
    assert (gains > 0).all()
    assert (np.diff(gains) < 0).all()


def test_a_step_of_concentration_is_the_gain_of_the_experiment() -> None:
    ppm = np.where(np.array(YEARS) <= 2020, 353.0, 550.0)
    model = response()
    found, without = grids(ppm, with_co2(model, EFFECT, "central")), grids(ppm, model)
    expected = without["yield_ratio"] * np.where(ppm > 400, 1.19, 1.0)[:, None, None]
    np.testing.assert_allclose(found["yield_ratio"], expected, rtol=1e-13)
    np.testing.assert_allclose(found["effect_co2"][20:], math.log(1.19), rtol=1e-13)
    np.testing.assert_allclose(found["effect_co2"][:20], 0, atol=1e-15)
    assert found["extrapolated"].attrs["flag_meanings"].split()[-1] == "co2_outside"
    assert (found["extrapolated"] < 8).all()


def test_steady_concentration_changes_nothing() -> None:
    ppm = np.full(len(YEARS), 411.0)
    model = response()
    found, without = grids(ppm, with_co2(model, EFFECT, "drawn")), grids(ppm, model)
    np.testing.assert_allclose(found["yield_ratio"], without["yield_ratio"], rtol=1e-14)
    np.testing.assert_allclose(found["effect_co2"], 0, atol=1e-15)


@pytest.mark.parametrize("base", [response(), with_product(extrapolation="hold")])
def test_same_as_the_plain_path_and_effects_add_up(base: Response) -> None:
    ppm = np.linspace(370.0, 620.0, len(YEARS))
    model = with_co2(base, EFFECT, "drawn")
    indices = invented_indices(YEARS, (2, 2))
    found = grids(ppm, model, indices).isel(lat=1, lon=0)
    series = {
        name: dict(zip(YEARS, indices[name].values[:, 1, 0].tolist(), strict=True))
        for name in base.indices
    }
    logs = [math.log(value) - math.log(353.0) for value in ppm.tolist()]
    series["co2"] = dict(zip(YEARS, logs, strict=True))
    plain = yields_of_pixel(model, model.coefficient_vector.tolist(), series, BASELINE, 5.0)
    np.testing.assert_allclose(found["yield"], list(plain.yields.values()), rtol=1e-12)
    total = sum(found[f"effect_{term}"] for term in model.terms)
    log = np.log(found["yield_ratio"])
    np.testing.assert_allclose(total - total[0], log - log[0], atol=1e-12)
    outside = (found["extrapolated"].values & 8) > 0
    np.testing.assert_array_equal(outside, ppm > 550)
    assert [("co2" in names) for names in plain.outside.values()] == outside.tolist()


def test_the_term_is_last_and_uncorrelated() -> None:
    model = with_co2(response(), EFFECT, "drawn")
    assert model.coefficient_names[-1] == "co2"
    np.testing.assert_array_equal(model.covariance_matrix[:-1, :-1], response().covariance_matrix)
    assert (model.covariance_matrix[-1, :-1] == 0).all()
    assert model.covariance_matrix[-1, -1] == EFFECT.error**2
    assert with_co2(response(), EFFECT, "central").covariance_matrix[-1, -1] == 0


def test_draws_are_as_wide_as_the_range_given_about_the_central_effect() -> None:
    drawn = effect_draws(EFFECT, "drawn", "maize", 20000, 3)
    gain = 100 * ((550 / 353) ** drawn - 1)
    assert gain[0] == pytest.approx(19, rel=1e-12)
    scale = math.log(550 / 353)
    half = (math.log(1.26) - math.log(1.12)) / scale / 2
    expected = [math.log(1.19) / scale - half, math.log(1.19) / scale + half]
    # Sampling error of a 5th percentile: sqrt(0.05 x 0.95 / 20000) / 0.103 standard deviations.
    error = 0.00154 / 0.103 * EFFECT.error
    np.testing.assert_allclose(np.percentile(drawn[1:], [5, 95]), expected, atol=3 * error)
    np.testing.assert_array_equal(effect_draws(EFFECT, "drawn", "maize", 10, 3), drawn[:11])
    assert not np.array_equal(effect_draws(EFFECT, "drawn", "barley", 10, 3), drawn[:11])
    central = effect_draws(EFFECT, "central", "maize", 10, 3)
    assert (central == EFFECT.central).all()


def test_a_level_link_or_a_name_taken_is_refused() -> None:
    with pytest.raises(AssessmentError, match="level link; the effect of CO2 needs a log link"):
        with_co2(response("level"), EFFECT, "central")
    with pytest.raises(AssessmentError, match="has an index or a term co2 already"):
        with_co2(with_co2(response(), EFFECT, "central"), EFFECT, "central")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"ppm": [550, 353]}, "ascending"),
        ({"low": 20}, "low <= percent <= high"),
        ({"high": 60}, "concave"),
        ({"source": ""}, "source"),
    ],
)
def test_faults_of_an_effect(change: dict[str, Any], message: str) -> None:
    with pytest.raises(ValidationError, match=message):
        CropEffect.model_validate(GIVEN | change)


def write(folder: Path, text: str) -> Path:
    path = folder / "co2.csv"
    path.write_text(text, encoding="utf-8")
    return path


def test_the_scenario_comes_before_the_past(tmp_path: Path) -> None:
    path = write(tmp_path, "scenario,year,ppm\npast,2000,369\npast,2001,371\nhigh,2001,372.5\n")
    table = read_concentrations(path)
    years = np.array([2000, 2001])
    assert concentrations(table, "high", "past", years, path).tolist() == [369.0, 372.5]
    assert concentrations(table, "past", "past", years, path).tolist() == [369.0, 371.0]
    with pytest.raises(InputError, match=r"co2.csv: no concentration for high in 2002 and 1 more"):
        concentrations(table, "high", "past", np.array([2001, 2002, 2003]), path)
    assert scenario_of("ALDER-ESM_high_r1", "past") == "high"
    assert scenario_of("observed", "past") == "past"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (None, "no such file"),
        ("scenario,year\nhigh,2001\n", "lacks the column ppm"),
        ("scenario,year,ppm\nhigh,2001,400\nhigh,2001,401\n", "high 2001 stands twice"),
        ("scenario,year,ppm\nhigh,2001.5,400\n", "whole number"),
        ("scenario,year,ppm\nhigh,2001,0.0004\n", "between 100 and 10000"),
        ("scenario,year,ppm\nhigh,2001,\n", "between 100 and 10000"),
    ],
)
def test_faults_of_the_table(tmp_path: Path, text: str | None, message: str) -> None:
    path = tmp_path / "co2.csv" if text is None else write(tmp_path, text)
    with pytest.raises(InputError, match=rf"co2.csv: .*{message}") as caught:
        read_concentrations(path)
    assert "\n" not in str(caught.value)


def test_the_index_is_the_same_in_lazy_blocks() -> None:
    indices = invented_indices(YEARS, (4, 3))
    ppm = np.linspace(370.0, 620.0, len(YEARS))
    whole = co2_index(indices, ppm, 353.0)["co2"]
    lazy = co2_index(indices.chunk({"lat": 2}), ppm, 353.0)["co2"]
    assert lazy.chunks is not None
    np.testing.assert_array_equal(lazy, whole)
    assert (whole == whole[:, :1, :1]).all()
    expected = pd.Series(ppm).map(lambda value: math.log(value / 353.0))
    np.testing.assert_array_equal(whole[:, 0, 0], expected)
