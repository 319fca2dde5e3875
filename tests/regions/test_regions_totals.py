"""Regional totals: by hand, by the plain path, and what must never change them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import shapely
import xarray as xr
from region_inputs import (
    BASELINE,
    HORIZON,
    POLYGONS,
    SYSTEMS,
    YEARS,
    response,
    write_assessment,
    write_polygons,
    write_results,
)
from stook.assessment.layout import Layout
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.audit.plain.regions import cell_share, region_year
from stook.constants import OUTSIDE
from stook.ensemble.changes import changes_of
from stook.ensemble.series import read_series
from stook.grids.files import open_result, read_table
from stook.regions.job import totals
from stook.regions.overlay import overlay_dataset
from stook.regions.totals import (
    COLUMNS,
    SystemGrids,
    Totals,
    region_weights,
    system_totals,
    totals_table,
)
from stook.trend.regions import regional_yields
from stook.yields.job import coefficients, grid
from stook.yields.response import Response

RUN = "ALDER-ESM_high_r1"
FLAT = Response.model_validate(
    response("rainfed")
    | {
        "terms": {"heat": {"form": "linear", "index": "heat", "coefficient": 0.0}},
        "indices": {"heat": {"measure": "degree-days", "base": 29}},
        "standard_errors": [0.001],
    }
)
PLACES = {"lat": [0.5, 1.5, 2.5], "lon": [0.5, 1.5, 2.5]}


def hand_grids() -> SystemGrids:
    """Return a 3 x 3 grid, two years; the yield of each pixel is its baseline yield."""
    heat = np.full((2, 3, 3), 10.0)
    heat[1, 2, 2] = 99.0
    reason = np.zeros((3, 3), dtype=np.int8)
    reason[0, 0] = 6
    area = np.array([[10.0, 20, 30], [40, 50, 60], [70, 0, 90]])
    season = xr.Dataset({"heat": (("year", "lat", "lon"), heat)}, {"year": [2001, 2002]} | PLACES)
    marks = (heat > 95).astype(np.int16)
    yields = xr.Dataset(
        {"reason": (("lat", "lon"), reason), "extrapolated": (("year", "lat", "lon"), marks)},
        PLACES,
    )
    layer = xr.Dataset(
        {"area": (("lat", "lon"), area), "baseline_yield": (("lat", "lon"), area / 10)}, PLACES
    )
    return SystemGrids(season, yields, layer)


def hand_overlay() -> xr.Dataset:
    """Return a western region of one and a half columns and an eastern one of a corner."""
    west = np.tile([1, 0.5, 0], (3, 1))
    east = np.array([[0, 0, 0], [0, 0.5, 0.25], [0, 0.5, 1]])
    shares = np.array([west, east])
    return xr.Dataset(
        {
            "coverage": (("region", "lat", "lon"), shares),
            "covered": (("lat", "lon"), shares.sum(axis=0)),
        },
        PLACES | {"region": ["West", "East"]},
    )


def test_three_by_three_by_hand() -> None:
    found = system_totals(
        hand_grids(), hand_overlay(), FLAT, np.array([[0.0], [0.0]]), (2001, 2002), 64
    )
    assert found.regions == ["West", "East", OUTSIDE]
    # West: 0.5 x 20 x 2 + 40 x 4 + 0.5 x 50 x 5 + 70 x 7 = 20 + 160 + 125 + 490 t.
    # East: 0.5 x 50 x 5 + 0.25 x 60 x 6 + 90 x 9 = 125 + 90 + 810 t.
    # Outside: 0.5 x 20 x 2 + 30 x 3 + 0.75 x 60 x 6 = 20 + 90 + 270 t.
    expected = np.array([795.0, 1025, 380])
    np.testing.assert_allclose(
        found.production, np.tile(expected[:, None], (2, 1, 2)), rtol=1e-14, atol=0
    )
    np.testing.assert_array_equal(found.area, [145, 130, 85])
    np.testing.assert_array_equal(found.missing_area, [10, 0, 0])
    np.testing.assert_array_equal(found.flagged_area, [[0, 0], [0, 90], [0, 0]])
    table = totals_table({"rainfed": found})
    assert list(table) == COLUMNS
    east = table[(table["region"] == "East") & (table["draw"] == 0)]
    np.testing.assert_allclose(east["extrapolated_share"], [0, 90 / 130], rtol=1e-14)


def test_a_missing_year_of_a_pixel_is_a_missing_year_of_its_region() -> None:
    grids = hand_grids()
    grids.season["heat"].values[0, 2, 2] = np.nan
    found = system_totals(grids, hand_overlay(), FLAT, np.array([[0.0]]), (2001, 2002), 64)
    np.testing.assert_array_equal(
        np.isnan(found.production[0]), [[False, False], [True, False], [False, False]]
    )
    np.testing.assert_array_equal(found.area, [145, 130, 85])
    table = totals_table({"rainfed": found})
    missing = table["production_t"].isna()
    np.testing.assert_array_equal(table["extrapolated_share"].isna(), missing)


def test_a_region_without_crop_has_no_share() -> None:
    grids = hand_grids()
    grids.layer["area"].values[:, 2] = 0.0
    grids.layer["area"].values[:, 1] = np.nan
    found = system_totals(grids, hand_overlay(), FLAT, np.array([[0.0]]), (2001, 2002), 64)
    table = totals_table({"rainfed": found})
    east = table[table["region"] == "East"]
    assert (east[["production_t", "area_ha", "missing_area_ha"]] == 0).all(axis=None)
    assert east["extrapolated_share"].isna().all()


def test_systems_are_combined_over_their_common_years() -> None:
    one = Totals(
        ["a"], np.array([2000, 2001]), np.array([[[1.0, 2]]]), np.array([4.0]), np.array([1.0]),
        np.array([[0.0, 4]]),
    )  # fmt: skip
    other = Totals(
        ["a"], np.array([2001, 2002]), np.array([[[30.0, 40]]]), np.array([6.0]), np.array([2.0]),
        np.array([[3.0, 0]]),
    )  # fmt: skip
    table = totals_table({"rainfed": one, "irrigated": other})
    both = table[table["system"] == "all"]
    assert len(both) == 1
    assert both.iloc[0].to_dict() == {
        "region": "a",
        "system": "all",
        "year": 2001,
        "draw": 0,
        "production_t": 32.0,
        "area_ha": 10.0,
        "extrapolated_share": 0.7,
        "missing_area_ha": 3.0,
    }


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> Assessment:
    path = write_assessment(tmp_path_factory.mktemp("full"))
    assessment = write_results(path)
    totals(assessment, RUN, "maize")
    return assessment


def table_of(assessment: Assessment) -> pd.DataFrame:
    return read_table(Layout.of(assessment).totals(RUN, "maize"))


def test_table(full: Assessment) -> None:
    table = table_of(full)
    assert list(table) == COLUMNS
    names = [*POLYGONS, OUTSIDE]
    systems = [*full.crops["maize"].systems, "all"]
    assert list(table["region"].unique()) == names
    assert list(table["system"].unique()) == systems
    assert len(table) == len(names) * len(systems) * YEARS.size * 5
    assert table["draw"].is_monotonic_increasing
    kinds = {str(kind) for kind in table.dtypes}
    assert kinds == {"str", "int64", "float64"}


def test_regions_and_the_rest_make_the_grid(full: Assessment) -> None:
    layout = Layout.of(full)
    table = table_of(full)
    for system in SYSTEMS:
        with (
            open_result(layout.layers) as layers,
            open_result(layout.yields(RUN, "maize", system)) as yields,
        ):
            area = layers["area"].sel(crop_system=f"maize_{system}").load()
            there = yields["reason"].load() == 0
            grid = (yields["yield"].load() * area.where(there)).sum(("lat", "lon")).values
        own = table[(table["system"] == system) & (table["draw"] == 0)]
        by_year = own.groupby("year")["production_t"].sum().to_numpy()
        np.testing.assert_allclose(by_year, grid, rtol=1e-9)
        first = own[own["year"] == YEARS[0]]
        assert first["area_ha"].sum() == pytest.approx(float(area.where(there).sum()), rel=1e-9)
        left_out = float(area.where(~there).sum())
        assert left_out > 0
        assert first["missing_area_ha"].sum() == pytest.approx(left_out, rel=1e-9)


def test_combination_is_the_sum(full: Assessment) -> None:
    table = table_of(full).set_index(["system", "region", "year", "draw"])
    whole, rainfed, irrigated = (table.loc[name] for name in ("all", *SYSTEMS))
    for column in ("production_t", "area_ha", "missing_area_ha"):
        np.testing.assert_allclose(whole[column], rainfed[column] + irrigated[column], rtol=1e-14)
    flagged = sum(one["extrapolated_share"] * one["area_ha"] for one in (rainfed, irrigated))
    np.testing.assert_allclose(whole["extrapolated_share"], flagged / whole["area_ha"], rtol=1e-12)


@pytest.mark.parametrize("system", SYSTEMS)
def test_plain_path(full: Assessment, system: str) -> None:
    """Every draw, region and some years again: plain overlap, plain response, plain sums."""
    layout = Layout.of(full)
    table = table_of(full).set_index(["system", "region", "draw", "year"])
    draws = read_table(layout.coefficients("maize", system)).set_index("draw")
    with open_result(layout.overlay) as overlay:
        edges = {name: overlay[f"{name}_bnds"].values for name in ("lat", "lon")}
    with open_result(layout.layers) as layers:
        layer = layers.sel(crop_system=f"maize_{system}").load()
    with open_result(layout.season(RUN, "maize", system, 0)) as season:
        heat, rain = season["heat"].values, season["rain"].values
    with open_result(layout.yields(RUN, "maize", system)) as yields:
        reason = yields["reason"].values
    inside = np.isin(YEARS, range(BASELINE[0], BASELINE[1] + 1))
    shares = {
        name: np.array(
            [[cell_share(shape, *south, *west) for west in edges["lon"]] for south in edges["lat"]]
        )
        for name, shape in POLYGONS.items()
    }
    for draw, c in draws.iterrows():
        h = c["heat"] * heat + c["rain.1"] * rain + c["rain.2"] * rain**2
        if system == "rainfed":
            ratio = np.exp(h) / np.exp(h)[inside].mean(axis=0)
        else:
            ratio = np.maximum(3 + h, 0) / (3 + h)[inside].mean(axis=0)
        values = ratio * layer["baseline_yield"].values
        for name, share in shares.items():
            for year in (0, 7, 19):
                production, area, left_out = region_year(
                    values[year], reason, layer["area"].values, share
                )
                found = table.loc[system, name, draw, YEARS[year]]
                assert found["production_t"] == pytest.approx(production, rel=1e-10)
                assert found["area_ha"] == pytest.approx(area, rel=1e-12)
                assert found["missing_area_ha"] == pytest.approx(left_out, rel=1e-12)


@pytest.mark.parametrize("region", list(POLYGONS))
def test_a_subset_has_the_same_bits(full: Assessment, region: str) -> None:
    part = write_results(full.source, region)
    totals(part, RUN, "maize")
    with open_result(Layout.of(part).overlay) as own, open_result(Layout.of(full).overlay) as whole:
        assert own.sizes["lat"] < whole.sizes["lat"] or own.sizes["lon"] < whole.sizes["lon"]
        assert "covered" not in own
        np.testing.assert_array_equal(
            own["coverage"].values,
            whole["coverage"].sel(region=[region], lat=own["lat"], lon=own["lon"]).values,
        )
    expected = table_of(full)
    expected = expected[expected["region"] == region].reset_index(drop=True)
    pd.testing.assert_frame_equal(table_of(part), expected, check_exact=True)


def test_neither_tiles_nor_blocks_change_a_bit(full: Assessment, tmp_path: Path) -> None:
    path = write_assessment(tmp_path, grid={"tiles": 4})
    tiled = write_results(path)
    totals(tiled, RUN, "maize")
    pd.testing.assert_frame_equal(table_of(tiled), table_of(full), check_exact=True)
    layout = Layout.of(full)
    document = Response.model_validate(response("rainfed"))
    coefficients = np.array([[-0.005, 0.002, -2e-6], [-0.004, 0.001, -1e-6]])
    found = []
    for block in (1e-6, 0.004, 64):
        with (
            open_result(layout.season(RUN, "maize", "rainfed", 0)) as season,
            open_result(layout.yields(RUN, "maize", "rainfed")) as yields,
            open_result(layout.layers) as layers,
            open_result(layout.overlay) as overlay,
        ):
            grids = SystemGrids(season, yields, layers.sel(crop_system="maize_rainfed"))
            found.append(system_totals(grids, overlay, document, coefficients, BASELINE, block))
    for one in found[1:]:
        for name in ("production", "area", "missing_area", "flagged_area"):
            np.testing.assert_array_equal(getattr(one, name), getattr(found[0], name))


TECHNOLOGY = {"form": "levelling-off", "rate": 1.5, "ceiling": 140}


def with_technology(full: Assessment, folder: Path, **technology: object) -> Assessment:
    """Write the same world with a technology path of its crop, and its totals."""
    content = full.model_dump(mode="json")["crops"]["maize"] | {"technology": technology}
    assessment = write_results(write_assessment(folder, crops={"maize": content}))
    totals(assessment, RUN, "maize")
    return assessment


def test_technology_scales_production_and_nothing_else(full: Assessment, tmp_path: Path) -> None:
    changed = with_technology(full, tmp_path, **TECHNOLOGY)
    plain, table = table_of(full), table_of(changed)
    assert list(table) == [*COLUMNS, "technology"]
    after = (table["year"] - BASELINE[1]).clip(lower=0)
    expected = 1 + 0.4 * (1 - np.exp(-0.015 * after / 0.4))
    np.testing.assert_allclose(table["technology"], expected, rtol=1e-14)
    assert (table["technology"] > 1.1).any()
    np.testing.assert_array_equal(table["production_t"], plain["production_t"] * table.technology)
    others = [name for name in COLUMNS if name != "production_t"]
    pd.testing.assert_frame_equal(table[others], plain[others], check_exact=True)


def test_changes_and_trends_are_against_the_same_technology(
    full: Assessment, tmp_path: Path
) -> None:
    changed = with_technology(full, tmp_path, **TECHNOLOGY)
    one, other = (
        read_series(Layout.of(assessment).totals(RUN, "maize")) for assessment in (full, changed)
    )
    for system in one:
        pair = [changes_of([run[system]], BASELINE, HORIZON) for run in (one, other)]
        assert np.isfinite(pair[0].change).any()
        np.testing.assert_allclose(pair[1].change, pair[0].change, rtol=0, atol=1e-12)
        np.testing.assert_allclose(pair[1].horizon, pair[0].horizon, rtol=1e-14)
    yields = [regional_yields(table_of(assessment)) for assessment in (full, changed)]
    pd.testing.assert_frame_equal(yields[1], yields[0], rtol=1e-14)


def test_constant_technology_and_a_subset_have_the_same_bits(
    full: Assessment, tmp_path: Path
) -> None:
    constant = with_technology(full, tmp_path / "constant", form="constant")
    pd.testing.assert_frame_equal(table_of(constant), table_of(full), check_exact=True)
    changed = with_technology(full, tmp_path / "changed", **TECHNOLOGY)
    whole, region = table_of(changed), next(iter(POLYGONS))
    part = write_results(changed.source, region)
    totals(part, RUN, "maize")
    expected = whole[whole["region"] == region].reset_index(drop=True)
    pd.testing.assert_frame_equal(table_of(part), expected, check_exact=True)


def test_totals_with_co2_are_those_of_the_grid_in_a_subset_too(tmp_path: Path) -> None:
    """The yields grid with central coefficients, times area, against draw 0."""
    effect = {"ppm": [353, 550], "percent": 19, "low": 12, "high": 26, "source": "invented"}
    co2 = {"use": "drawn", "file": "co2.csv", "crops": {"maize": effect}}
    path = write_assessment(tmp_path, systems=("rainfed",), co2=co2)
    rows = [f"high,{year},{360 + 3 * n}" for n, year in enumerate(YEARS)]
    (tmp_path / "co2.csv").write_text("\n".join(["scenario,year,ppm", *rows]), encoding="utf-8")
    tables = {}
    for region in (None, next(iter(POLYGONS))):
        assessment = write_results(path, region)
        layout = Layout.of(assessment)
        coefficients(assessment, "maize", "rainfed")
        grid(assessment, RUN, "maize", "rainfed")
        totals(assessment, RUN, "maize")
        tables[region] = table_of(assessment)
        if region is None:
            yields = xr.load_dataset(layout.yields(RUN, "maize", "rainfed"))
            area = xr.load_dataset(layout.layers)["area"].isel(crop_system=0)
            shares = xr.load_dataset(layout.overlay)["coverage"]
    for name in POLYGONS:
        weight = (area * shares.sel(region=name)).where(yields["reason"] == 0, 0.0)
        expected = (yields["yield"].fillna(0.0) * weight).sum(["lat", "lon"])
        found = tables[None].query("region == @name and draw == 0")["production_t"]
        np.testing.assert_allclose(found, expected, rtol=1e-12)
    first = next(iter(POLYGONS))
    expected = tables[None][tables[None]["region"] == first].reset_index(drop=True)
    pd.testing.assert_frame_equal(tables[first], expected, check_exact=True)
    assert tables[None].groupby("draw")["production_t"].sum().nunique() == 5


def test_one_system_has_no_combination(tmp_path: Path) -> None:
    assessment = write_results(write_assessment(tmp_path, systems=("rainfed",)))
    totals(assessment, RUN, "maize")
    assert list(table_of(assessment)["system"].unique()) == ["rainfed"]


def test_outside_is_what_the_union_of_overlapping_regions_leaves(tmp_path: Path) -> None:
    path = write_assessment(tmp_path)
    hill = shapely.box(5.5, 45, 7.5, 46)  # across the border of two regions
    (tmp_path / "regions.gpkg").unlink()
    write_polygons(tmp_path / "regions.gpkg", POLYGONS | {"Hill": hill})
    nested = overlay_dataset(load_assessment(path)).load()
    (tmp_path / "regions.gpkg").unlink()
    write_polygons(tmp_path / "regions.gpkg", POLYGONS)
    plain = overlay_dataset(load_assessment(path)).load()
    names, shares = region_weights(nested)
    assert names == [*POLYGONS, "Hill", OUTSIDE]
    np.testing.assert_allclose(nested["covered"], plain["covered"], rtol=0, atol=1e-12)
    np.testing.assert_allclose(shares[-1], 1 - plain["covered"], rtol=0, atol=1e-12)
    assert float(shares.sum("region").max()) == pytest.approx(2.0)
