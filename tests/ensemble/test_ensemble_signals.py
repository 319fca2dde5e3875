"""Maps of robustness and area losses: against the plain path, and what must never change them."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr

sys.path.append(str(Path(__file__).parents[1] / "regions"))
from region_inputs import BASELINE, HORIZON, YEARS, write_assessment, write_results
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.simulations import all_simulations
from stook.audit.ledger import read_record
from stook.audit.plain import risk as plain
from stook.ensemble import signals as stage
from stook.ensemble.job import risk, robustness
from stook.ensemble.losses import LIMITS
from stook.ensemble.risk import TABLES
from stook.ensemble.robustness import WORDS, Signal
from stook.ensemble.summary import TOTAL
from stook.grids.files import open_result
from stook.regions.job import totals

RUNS = [
    ("ALDER-ESM", "high", "r1"),
    ("ROWAN-CM", "high", "r1"),
    ("SEDGE-LR", "high", "r1"),
]
HORIZONS = {"later": HORIZON}


def run(folder: Path, region: str | None = None) -> Assessment:
    path = write_assessment(folder, RUNS, horizons=HORIZONS)
    assessment = write_results(path, region)
    robustness(assessment, "maize", "rainfed", "high")
    return assessment


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> Assessment:
    return run(tmp_path_factory.mktemp("signals"))


def results(assessment: Assessment) -> tuple[xr.Dataset, pd.DataFrame]:
    layout = Layout.of(assessment)
    with open_result(layout.robustness_pixels("maize", "rainfed", "high")) as dataset:
        return dataset.load(), pd.read_parquet(layout.area_losses("maize", "rainfed", "high"))


def yields_of(assessment: Assessment) -> tuple[np.ndarray, np.ndarray]:
    layout = Layout.of(assessment)
    series = []
    for one in all_simulations(assessment):
        if one.scenario == "high":
            with open_result(layout.yields(one.name, "maize", "rainfed")) as dataset:
                series.append(dataset["yield"].transpose("year", "lat", "lon").values)
                reason = dataset["reason"].values
    return np.array(series), reason


def test_maps_are_those_of_the_plain_path(full: Assessment) -> None:
    grids, _ = results(full)
    series, reason = yields_of(full)
    found = grids.sel(horizon="later")
    years = YEARS.tolist()
    lengths = [period[1] - period[0] + 1 for period in (BASELINE, HORIZON)]
    for i, j in np.ndindex(reason.shape):
        here = found.isel(lat=i, lon=j)
        if reason[i, j]:
            assert (here["robustness"], here["reason"]) == (Signal.NO_VALUE, reason[i, j])
            continue
        changes, deviations = [], []
        for values in series[:, :, i, j].tolist():
            base = plain.mean_of(years, values, BASELINE)
            changes.append(100 * (plain.mean_of(years, values, HORIZON) / base - 1))
            deviations.append(100 * plain.line_deviation(years, values, BASELINE) / base)
        word = WORDS[Signal(int(here["robustness"]))]
        assert word == plain.robustness(changes, deviations, *lengths)
        assert here["reason"] == 0
    assert (reason == 0).sum() > 20
    assert grids["robustness"].attrs["flag_meanings"].split()[1] == "robust"
    assert grids["robustness"].dtype == np.int8


def test_area_that_loses_is_that_of_a_loop(full: Assessment) -> None:
    _, losses = results(full)
    series, reason = yields_of(full)
    layout = Layout.of(full)
    with open_result(layout.layers) as layers, open_result(layout.overlay) as overlay:
        area = layers["area"].sel(crop_system="maize_rainfed").values
        shares = overlay["coverage"].load()
    for name in shares["region"].values:
        weight = np.where(reason == 0, np.nan_to_num(area) * shares.sel(region=name).values, 0)
        for limit in LIMITS:
            found = []
            for values in series:
                lost = 0.0
                for i, j in np.argwhere(weight > 0):
                    own = values[:, i, j].tolist()
                    base = plain.mean_of(YEARS.tolist(), own, BASELINE)
                    later = plain.mean_of(YEARS.tolist(), own, HORIZON)
                    lost += weight[i, j] if 100 * (later / base - 1) < -limit else 0.0
                found.append(lost / weight.sum())
            row = losses[(losses["region"] == name) & (losses["limit"] == limit)].iloc[0]
            assert row["mean"] == pytest.approx(np.mean(found))
            assert row["whole"] == pytest.approx(weight.sum())


def test_blocks_change_nothing(
    full: Assessment, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(stage, "PIXEL_CHUNK", 1)
    again = results(run(tmp_path))
    xr.testing.assert_identical(
        again[0].drop_attrs(deep=False), results(full)[0].drop_attrs(deep=False)
    )
    pd.testing.assert_frame_equal(again[1], results(full)[1], check_exact=True)


def test_a_run_for_one_region_gives_the_same_bits(full: Assessment, tmp_path: Path) -> None:
    whole, losses = results(full)
    grids, own = results(run(tmp_path, "Thornfold"))
    wanted = whole.sel(lat=grids["lat"], lon=grids["lon"])
    there = (grids["reason"] == 0).values
    assert there.any()
    assert TOTAL not in set(own["region"])
    for variable in grids.data_vars:
        if "horizon" in grids[variable].dims:
            np.testing.assert_array_equal(
                grids[variable].values[there], wanted[variable].values[there]
            )
    pd.testing.assert_frame_equal(
        own[own["region"] == "Thornfold"].reset_index(drop=True),
        losses[losses["region"] == "Thornfold"].reset_index(drop=True),
        check_exact=True,
    )


def test_the_job_of_the_tables_writes_them_all(full: Assessment) -> None:
    """From totals made by the regions stage to every table, with records that verify."""
    layout = Layout.of(full)
    for one in all_simulations(full):
        totals(full, one.name, "maize")
    risk(full)
    for name, columns in TABLES.items():
        table = pd.read_parquet(layout.ensemble_table(name))
        assert list(table.columns) == list(columns)
        assert table.empty == (name in ("levels", "classes"))
        assert read_record(layout.root, layout.ensemble_table(name))["rule"] == "ensemble_risk"
    assert pd.read_parquet(layout.ensemble_table("windows")).empty
