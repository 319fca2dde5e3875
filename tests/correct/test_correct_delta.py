"""Method `delta`: the record, its years again and again, with the simulated change of the mean."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from correct_inputs import annual, correct, days, plain
from correct_world import BASELINE, GAP, SHORT, SIMULATION, write_assessment, write_results
from stook.assessment.layout import Layout
from stook.assessment.schema import VariableCorrection
from stook.audit.plain.correct import correct_series
from stook.correct import job
from stook.correct.windows import record_times
from stook.grids.files import CF_TIME
from stook.grids.missing import Reason

RECORD = days(1991, 2000, "standard")
FUTURE = days(1991, 2030, "360_day")
BEFORE = FUTURE.years(1991, 2000)
AXES = (RECORD, FUTURE.part(BEFORE), FUTURE)


def test_calibration_years_are_the_record_itself() -> None:
    random = np.random.default_rng(1)
    o, f = random.normal(size=len(RECORD)), random.normal(size=len(RECORD))
    axes = (RECORD, RECORD, RECORD)
    found, reason, _ = correct(o, f, f, axes, method="delta")
    assert reason == 0
    np.testing.assert_array_equal(found, o)


def test_a_warming_by_steps_is_added_to_the_record() -> None:
    """Decades 2 degC apart and windows of ten years: record + 2, 4, 6."""
    random = np.random.default_rng(2)
    o = random.normal(10, 3, len(RECORD))
    f = 5.0 + 2.0 * ((FUTURE.year - 1991) // 10)
    found, reason, _ = correct(o, f[BEFORE], f, AXES, method="delta", cdf_years=10)
    assert reason == 0
    decade = (FUTURE.year - 1991) // 10
    standing = o[record_times(RECORD, FUTURE)]
    np.testing.assert_allclose(found, standing + 2.0 * decade, rtol=1e-12)


def test_a_ratio_multiplies_rain_and_keeps_dry_days() -> None:
    random = np.random.default_rng(3)
    o = random.gamma(0.7, 6, len(RECORD)) * (random.random(len(RECORD)) < 0.4)
    f = np.where(FUTURE.year > 2000, 40.0, 2.0)
    choice = {"method": "delta", "cdf_years": 10, "ratio_cap": 5}
    found, _, capped = correct(o, f[BEFORE], f, AXES, True, 0.05, **choice)
    standing = o[record_times(RECORD, FUTURE)]
    np.testing.assert_allclose(found, np.where(BEFORE, 1, 5) * standing, rtol=1e-12)
    assert capped > 0.9 * (~BEFORE).sum()  # 20 is cut to 5 on every later day


def test_years_of_the_record_repeat_by_position() -> None:
    source = record_times(RECORD, FUTURE)
    np.testing.assert_array_equal(RECORD.year[source], 1991 + (FUTURE.year - 1991) % 10)
    apart = np.abs(RECORD.position[source] - FUTURE.position)
    assert apart.max() <= 0.5 / 365 + 1e-12
    backwards = record_times(annual(1991, 1993), annual(1988, 1996))
    np.testing.assert_array_equal(backwards, [0, 1, 2, 0, 1, 2, 0, 1, 2])


@pytest.mark.parametrize("ratio", [False, True])
def test_delta_by_the_plain_path(ratio: bool) -> None:
    random = np.random.default_rng(4)
    o, f = (random.gamma(2, 3, len(axis)).astype(np.float32) for axis in (RECORD, FUTURE))
    f += np.float32(0.1) * (FUTURE.year - 1991).astype(np.float32)
    o[::17], f[::13] = np.nan, np.nan
    choice = {"method": "delta", "cdf_years": 15, "ratio_cap": 1.5}
    found, reason, _ = correct(o, f[BEFORE], f, AXES, ratio, **choice)
    assert reason == 0
    series = (plain(x, axis) for x, axis in zip((o, f[BEFORE], f), AXES, strict=True))
    expected = correct_series(*series, VariableCorrection(**choice), ratio)
    np.testing.assert_allclose(found, expected, rtol=1e-6, atol=1e-5)
    assert np.isnan(found).any()  # gaps of the record stay gaps


def test_too_few_values_of_the_future_are_a_reason() -> None:
    o, f = np.ones(len(RECORD)), np.ones(len(FUTURE))
    f[FUTURE.year > 2005] = np.nan
    found, reason, _ = correct(o, f[BEFORE], f, AXES, method="delta", cdf_years=10)
    assert reason == int(Reason.TOO_FEW_VALUES)
    assert np.isnan(found).all()


def test_delta_in_the_job(tmp_path: Path) -> None:
    choices = {"all": {"method": "delta", "minimum_values": 50}}
    assessment = write_results(write_assessment(tmp_path, correct=choices))
    job.tile(assessment, simulation=SIMULATION, tile="00")
    job.summary(assessment)
    layout = Layout.of(assessment)
    found = xr.load_dataset(layout.corrected(SIMULATION, 0), decode_times=CF_TIME)
    record = xr.load_dataset(layout.prepared("observed", 0), decode_times=CF_TIME)
    assert int(found["reason_pr"][GAP]) == int(Reason.MISSING_INPUT)
    assert int(found["reason_pr"][SHORT]) == int(Reason.TOO_FEW_VALUES)
    first = [time.year == BASELINE[0] for time in found["time"].values]
    rain, low, high = (found[n].isel(lat=8, lon=8, time=first) for n in ("pr", "tasmin", "tasmax"))
    then = record.isel(lat=8, lon=8)
    assert np.isin(rain, np.where(then["pr"] < 0.05, 0, then["pr"])).all()
    mean = (then["tasmin"].values + then["tasmax"].values) / 2
    middle = ((low + high) / 2).values
    assert (np.abs(middle[:, None] - mean[None, :366]).min(axis=1) < 1e-5).all()
    assert (low <= high).all()
