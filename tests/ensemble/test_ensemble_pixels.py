"""Maps of yield change: against the plain path, and what must never change them."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

sys.path.append(str(Path(__file__).parents[1] / "regions"))
from region_inputs import BASELINE, HORIZON, YEARS, write_assessment, write_results
from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.assessment.simulations import all_simulations
from stook.audit.plain.ensemble import Member, change_percent, summary
from stook.ensemble import pixels as stage
from stook.ensemble.job import pixels
from stook.grids.files import open_result
from stook.grids.missing import Reason

RUNS = [
    ("ALDER-ESM", "high", "r1"),
    ("ALDER-ESM", "high", "r2"),
    ("ROWAN-CM", "high", "r1"),
    ("SEDGE-LR", "moderate", "r1"),
]
HORIZONS = {"later": HORIZON, "beyond": (2008, 2037)}


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> Assessment:
    path = write_assessment(tmp_path_factory.mktemp("pixels"), RUNS, horizons=HORIZONS)
    assessment = write_results(path)
    pixels(assessment, "maize", "rainfed", "high")
    return assessment


def grids(assessment: Assessment) -> xr.Dataset:
    with open_result(Layout.of(assessment).ensemble_pixels("maize", "rainfed", "high")) as dataset:
        return dataset.load()


def test_plain_path(full: Assessment) -> None:
    found = grids(full).sel(horizon="later")
    layout = Layout.of(full)
    runs = [run for run in all_simulations(full) if run.scenario == "high"]
    yields = {}
    for run in runs:
        with open_result(layout.yields(run.name, "maize", "rainfed")) as dataset:
            yields[run.name] = dataset.load()
    reason = yields[runs[0].name]["reason"].values
    assert (reason == 0).sum() > 20
    for i, j in np.ndindex(reason.shape):
        here = found.isel(lat=i, lon=j)
        if reason[i, j]:
            assert here["reason"] == reason[i, j]
            assert here["models"] == 0
            assert np.isnan(here["change_p50"])
            assert np.isnan(here["agreement"])
            continue
        members = []
        for run in runs:
            series = yields[run.name]["yield"].values[:, i, j]
            change = change_percent(
                dict(zip(YEARS.tolist(), series, strict=True)), BASELINE, HORIZON
            )
            members.append(Member(run.model, run.name, change))
        plain = summary(members)
        assert here["change_mean"] == pytest.approx(plain.mean, rel=1e-9)
        for percentile, value in plain.percentiles.items():
            assert here[f"change_p{percentile:02d}"] == pytest.approx(value, rel=1e-9)
        assert here["share_decrease"] == pytest.approx(plain.share_decrease, rel=1e-9)
        assert here["agreement"] == pytest.approx(plain.agreement)
        assert here["models"] == 2
        assert here["reason"] == 0


def test_a_horizon_with_too_few_years_says_so(full: Assessment) -> None:
    found = grids(full).sel(horizon="beyond")
    grown = grids(full).sel(horizon="later")["reason"].values == 0
    assert (found["reason"].values[grown] == Reason.TOO_FEW_VALUES).all()
    assert found["change_p50"].isnull().all()
    assert (found["models"] == 0).all()


def test_types_units_and_cautions(full: Assessment) -> None:
    found = grids(full)
    assert found["change_p50"].dims == ("horizon", "lat", "lon")
    assert found["change_p50"].attrs["units"] == "percent"
    assert found["models"].dtype == np.int16
    assert found["reason"].dtype == np.int8
    assert "not by itself a likelihood" in found["share_decrease"].attrs["comment"]


def test_a_subset_and_other_bands_have_the_same_bits(
    full: Assessment, monkeypatch: pytest.MonkeyPatch
) -> None:
    whole = grids(full)
    part = write_results(full.source, "Thornfold")
    pixels(part, "maize", "rainfed", "high")
    own = grids(part)
    inside = whole.sel(lat=own["lat"], lon=own["lon"])
    with open_result(Layout.of(part).overlay) as overlay:
        touched = (overlay["coverage"] > 0).any("region").values
    for name in ("change_mean", "change_p05", "change_p50", "agreement", "share_decrease"):
        for horizon in HORIZONS:
            values, expected = (d[name].sel(horizon=horizon).values for d in (own, inside))
            np.testing.assert_array_equal(values[touched], expected[touched])
    monkeypatch.setattr(stage, "_ROWS", 4)
    pixels(full, "maize", "rainfed", "high")
    xr.testing.assert_equal(grids(full), whole)
