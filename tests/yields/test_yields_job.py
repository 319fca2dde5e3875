"""The yields jobs: files in and out, tiles, blocks, a region alone."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
import yaml
from compliance_checker.runner import CheckSuite, ComplianceChecker
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job, read_record
from stook.engine.fingerprints import Job as Planned
from stook.engine.fingerprints import fingerprint
from stook.errors import ResultsError
from stook.grids.analysis import analysis_grid, tile_count
from stook.grids.files import open_result, read_table
from stook.grids.missing import reason_attributes
from stook.report.assumptions import general
from stook.yields.job import coefficients, grid
from yields_inputs import COMMON, invented_indices

SIMULATION = "ALDER-ESM_high_r1"
YEARS = range(1991, 2031)


def write_inputs(
    folder: Path, tiles: int = 1, block_mb: int = 64, region: str | None = None
) -> Assessment:
    """Write an assessment of a 6 x 8 grid, its layers and its season files."""
    content = {
        "title": "Invented yields",
        "name": "hollin",
        "seed": 11,
        "grid": {
            "lat": {"first": 44.25, "last": 46.75, "step": 0.5},
            "lon": {"first": 5.25, "last": 8.75, "step": 0.5},
            "tiles": tiles,
        },
        "periods": {"baseline": [1991, 2010]},
        "correct": {"all": {"method": "none"}},
        "simulations": {
            "runs": [
                {
                    "model": "ALDER-ESM",
                    "scenario": "high",
                    "realisation": "r1",
                    "files": {"pr": ["pr.nc"]},
                }
            ]
        },
        "crops": {
            "maize": {
                "systems": {
                    "rainfed": {
                        "area": 1,
                        "calendar": {"planting": 100, "maturity": 250},
                        "baseline_yield": 5,
                        "response": "maize.yaml",
                    }
                }
            }
        },
        "regions": {"file": "regions.gpkg"},
        "ensemble": {"draws": 12},
        "store": {"block_mb": block_mb},
    }
    folder.mkdir(parents=True, exist_ok=True)
    text = yaml.safe_dump(COMMON | {"link": "log"}, sort_keys=False)
    (folder / "maize.yaml").write_text(text, encoding="utf-8")
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    assessment = load_assessment(path, regions=[region] if region else [])
    _write_results(assessment, slice(0, 5) if region else slice(0, 8))
    return assessment


def _write_results(assessment: Assessment, columns: slice) -> None:
    full = analysis_grid(assessment)
    part = full.part(slice(0, 6), columns)
    layout = Layout.of(assessment)
    random = np.random.default_rng(3)
    reason = (random.random(full.shape) < 0.2).astype(np.int8)
    baseline_yield = random.uniform(3, 8, full.shape)
    season = invented_indices(YEARS, full.shape)
    for name, value in season.items():
        if name != "reason":
            value.values[:, reason == 1] = np.nan
    season["reason"] = ("lat", "lon"), reason, reason_attributes()
    maps = ("crop_system", "lat", "lon")
    layers = xr.Dataset(
        {
            "baseline_yield": (maps, baseline_yield[None, :, columns], {"units": "t ha-1"}),
            "reason": (maps, reason[None, :, columns], reason_attributes()),
        },
        part.coordinates() | {"crop_system": ["maize_rainfed"]},
    )
    with Job(assessment, "invented", []) as job:
        job.netcdf(layers, layout.layers, "layers")
        for tile in range(tile_count(assessment)):
            rows = part.rows(tile, tile_count(assessment))
            here = season.isel(lon=columns).isel(lat=rows)
            here = here.assign_coords(part.part(rows, slice(0, len(part.lon))).coordinates())
            job.netcdf(here, layout.season(SIMULATION, "maize", "rainfed", tile), "season")


def run(assessment: Assessment) -> xr.Dataset:
    coefficients(assessment, "maize", "rainfed")
    grid(assessment, SIMULATION, "maize", "rainfed")
    path = Layout.of(assessment).yields(SIMULATION, "maize", "rainfed")
    with open_result(path) as dataset:
        return dataset.load()


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> tuple[Assessment, xr.Dataset]:
    assessment = write_inputs(tmp_path_factory.mktemp("whole"))
    return assessment, run(assessment)


def test_coefficients_file(whole: tuple[Assessment, xr.Dataset]) -> None:
    layout = Layout.of(whole[0])
    path = layout.coefficients("maize", "rainfed")
    table = read_table(path)
    names = ["growth.1", "growth.2", "growth.3", "heat", "rain.1", "rain.2"]
    assert list(table.columns) == ["draw", *names]
    assert table["draw"].tolist() == list(range(13))
    np.testing.assert_allclose(table.loc[0, "heat"], -0.004, rtol=1e-15)
    record = read_record(layout.root, path)
    assert record["rule"] == "yields_coefficients"
    assert record["variables"]["heat"]["missing"] == 0


def test_yields_file(whole: tuple[Assessment, xr.Dataset]) -> None:
    assessment, result = whole
    effects = ["effect_growth", "effect_heat", "effect_rain"]
    assert list(result.data_vars) == ["yield_ratio", "yield", *effects, "extrapolated", "reason"]
    grown = result["reason"].values == 0
    assert 30 < grown.sum() < 48
    mean = result["yield_ratio"].sel(year=slice(1991, 2010)).mean("year").values
    np.testing.assert_allclose(mean[grown], 1.0, rtol=1e-13)
    assert np.isnan(result["yield"].values[:, ~grown]).all()
    assert result["extrapolated"].dtype == np.int16
    layout = Layout.of(assessment)
    record = read_record(layout.root, layout.yields(SIMULATION, "maize", "rainfed"))
    assert record["rule"] == "yields_grid"
    assert f"season/{SIMULATION}/maize_rainfed_tile-00.nc" in record["parents"]
    assert "yields/coefficients/maize_rainfed.csv" in record["parents"]


def test_cf_compliance(whole: tuple[Assessment, xr.Dataset], tmp_path: Path) -> None:
    """compliance-checker, CF 1.11."""
    path = Layout.of(whole[0]).yields(SIMULATION, "maize", "rainfed")
    CheckSuite.load_all_available_checkers()
    passed, errors = ComplianceChecker.run_checker(
        str(path), ["cf:1.11"], 0, "strict", output_filename=str(tmp_path / "report.txt")
    )
    assert passed, (tmp_path / "report.txt").read_text(encoding="utf-8")
    assert not errors


@pytest.mark.parametrize(("tiles", "block_mb"), [(4, 64), (2, 1)])
def test_tiles_and_blocks_give_the_same_bits(
    whole: tuple[Assessment, xr.Dataset], tmp_path: Path, tiles: int, block_mb: int
) -> None:
    assessment = write_inputs(tmp_path, tiles, block_mb)
    result = run(assessment)
    for name in whole[1].variables:
        np.testing.assert_array_equal(result[name], whole[1][name], strict=True)
    ours, theirs = (
        Layout.of(one).coefficients("maize", "rainfed") for one in (assessment, whole[0])
    )
    pd.testing.assert_frame_equal(read_table(ours), read_table(theirs), check_exact=True)


def test_a_region_alone_gives_the_same_bits(
    whole: tuple[Assessment, xr.Dataset], tmp_path: Path
) -> None:
    result = run(write_inputs(tmp_path, tiles=3, region="Saltmere"))
    expected = whole[1].isel(lon=slice(0, 5))
    for name in expected.variables:
        np.testing.assert_array_equal(result[name], expected[name], strict=True)


def test_the_system_of_the_assessment_overrides_the_document(tmp_path: Path) -> None:
    assessment = write_inputs(tmp_path)
    flag = run(assessment)
    job = Planned(assessment, {"simulation": SIMULATION, "crop": "maize", "system": "rainfed"}, ())
    before = {rule: fingerprint(rule, job) for rule in ("yields_grid", "regions_totals")}
    content = yaml.safe_load(assessment.source.read_text(encoding="utf-8"))
    content["crops"]["maize"]["systems"]["rainfed"]["extrapolation"] = "hold"
    assessment.source.write_text(yaml.safe_dump(content), encoding="utf-8")
    changed = load_assessment(assessment.source)
    hold = run(changed)
    np.testing.assert_array_equal(hold["extrapolated"], flag["extrapolated"])
    base = flag["year"].values <= 2010
    untouched = ((flag["extrapolated"] == 0) | ~base[:, None, None]).all("year").values
    outside = (flag["extrapolated"] != 0).values
    assert (hold["effect_rain"].values != flag["effect_rain"].values)[outside].any()
    same = ~outside & untouched
    assert same.any()
    np.testing.assert_array_equal(hold["yield"].values[same], flag["yield"].values[same])
    now = Planned(changed, job.wildcards, ())
    for rule, digests in before.items():
        (one,) = set(digests) - set(fingerprint(rule, now))
        assert one.startswith("extrapolation:")


EFFECT = {"ppm": [353, 550], "percent": 19, "low": 12, "high": 26, "source": "invented"}


def with_co2(folder: Path, use: str, region: str | None = None, tiles: int = 1) -> Assessment:
    """Write the same inputs with an effect of CO2; 2 ppm more every year."""
    assessment = write_inputs(folder, tiles=tiles, region=region)
    rows = [f"{'historical' if y < 2011 else 'high'},{y},{350 + 2 * (y - 1991)}" for y in YEARS]
    (folder / "co2.csv").write_text("\n".join(["scenario,year,ppm", *rows]), encoding="utf-8")
    content = yaml.safe_load(assessment.source.read_text(encoding="utf-8"))
    content["co2"] = {"use": use, "file": "co2.csv", "crops": {"maize": EFFECT}}
    assessment.source.write_text(yaml.safe_dump(content), encoding="utf-8")
    return load_assessment(assessment.source, regions=[region] if region else [])


def test_co2_that_is_off_is_none_bit_for_bit(
    whole: tuple[Assessment, xr.Dataset], tmp_path: Path
) -> None:
    assessment = with_co2(tmp_path, "off")
    result = run(assessment)
    assert list(result.variables) == list(whole[1].variables)
    for name in whole[1].variables:
        np.testing.assert_array_equal(result[name], whole[1][name], strict=True)
    tables = [
        read_table(Layout.of(one).coefficients("maize", "rainfed"))
        for one in (assessment, whole[0])
    ]
    pd.testing.assert_frame_equal(*tables, check_exact=True)


@pytest.mark.parametrize("use", ["central", "drawn"])
def test_co2_adds_a_term_and_leaves_the_other_draws(
    whole: tuple[Assessment, xr.Dataset], tmp_path: Path, use: str
) -> None:
    assessment = with_co2(tmp_path, use)
    result = run(assessment)
    table = read_table(Layout.of(assessment).coefficients("maize", "rainfed"))
    before = read_table(Layout.of(whole[0]).coefficients("maize", "rainfed"))
    pd.testing.assert_frame_equal(table.drop(columns="co2"), before, check_exact=True)
    assert len(set(table["co2"])) == (1 if use == "central" else 13)
    b = np.log(1.19) / np.log(550 / 353)
    gain = (350 + 2 * (np.array(YEARS) - 1991.0)) ** b
    ratio = whole[1]["yield_ratio"] * gain[:, None, None]
    ratio = ratio / ratio.sel(year=slice(1991, 2010)).mean("year")
    np.testing.assert_allclose(result["yield_ratio"], ratio, rtol=1e-12)
    texts = dict(general(assessment))
    assert "maize 19 % (12 to 26 %) from 353 to 550 ppm (invented)" in texts["CO2"]
    assert ("drawn for each draw" in texts["CO2"]) == (use == "drawn")


def test_co2_in_a_region_alone_and_in_tiles_gives_the_same_bits(tmp_path: Path) -> None:
    result = run(with_co2(tmp_path / "whole", "drawn"))
    part = run(with_co2(tmp_path / "part", "drawn", region="Saltmere", tiles=3))
    tiled = run(with_co2(tmp_path / "tiles", "drawn", tiles=4))
    for name in result.variables:
        np.testing.assert_array_equal(tiled[name], result[name], strict=True)
        expected = result.isel(lon=slice(0, 5))[name]
        np.testing.assert_array_equal(part[name], expected, strict=True)


def test_coefficients_of_another_response_are_refused(tmp_path: Path) -> None:
    """A table of other coefficients than those of the response: one line."""
    assessment = write_inputs(tmp_path)
    coefficients(assessment, "maize", "rainfed")
    path = Layout.of(assessment).coefficients("maize", "rainfed")
    read_table(path).drop(columns="heat").to_csv(path, index=False)
    with pytest.raises(ResultsError, match=r"maize_rainfed.csv: lacks heat") as caught:
        grid(assessment, SIMULATION, "maize", "rainfed")
    assert "\n" not in str(caught.value)
