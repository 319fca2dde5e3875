"""Bounds, dry days, the temperature pair: what surrounds the mapping, through the block."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from correct_inputs import annual, days, months
from stook.assessment.schema import Correct
from stook.audit.plain import correct as plain_path
from stook.correct import kernels_values
from stook.correct.block import Corrected, Pixels, correct_group, prepare_group
from stook.correct.setup import Setup, make_setup
from stook.correct.windows import Series
from stook.randomness import pixel_keys

LAT, LON = np.array([45.25, -10.75]), np.array([8.25, 120.25])
PIXELS = Pixels(LAT, pixel_keys(LAT, LON))
YEARS = (1991, 2000)
OPTIONS = {"minimum_values": 50}


def setup_of(o: Series, f: Series, variables: tuple[str, ...], **choices: Any) -> Setup:
    correct = Correct.model_validate({"all": OPTIONS} | choices)
    return make_setup(o, f, variables, correct, YEARS, {}, "ALDER-ESM_high_r1", 7)


def corrected(
    setup: Setup, o: dict[str, np.ndarray], f: dict[str, np.ndarray], pixels: Pixels = PIXELS
) -> Corrected:
    """Correct one group of variables as the labelled function does."""
    group = setup.groups[0]
    prepared = (
        prepare_group(group, o, setup.reference, "observed", setup, pixels),
        prepare_group(group, f, setup.model, setup.simulation, setup, pixels),
    )
    return correct_group(group, *prepared, setup.whole, setup, pixels)


def pair(random: np.random.Generator, axis: Series, wide: float, count: int) -> dict[str, Any]:
    mean = 12 + 10 * np.cos(2 * np.pi * axis.position) + random.normal(0, 5, (count, len(axis)))
    half = wide * random.gamma(1.2, 2.5, mean.shape)
    return {
        "tasmin": (mean - half).astype(np.float32),
        "tasmax": (mean + half).astype(np.float32),
    }


def check_pair(count: int, mode: str) -> None:
    random = np.random.default_rng(11)
    o_axis, f_axis = days(*YEARS, "standard"), days(1991, 2030, "noleap")
    pixels = Pixels(np.full(count, 45.0), np.arange(count, dtype=np.uint64))
    setup = setup_of(o_axis, f_axis, ("tasmin", "tasmax"), temperature_pair=mode)
    o, f = pair(random, o_axis, 1.0, count), pair(random, f_axis, 0.6, count)
    f["tasmin"][0, 100:200] = f["tasmax"][0, 100:200] + 1  # not even true of the model
    found = corrected(setup, o, f, pixels)
    assert (found.reason == 0).all()
    low, high = found.values["tasmin"], found.values["tasmax"]
    assert np.isfinite(low).all()
    assert (low <= high).all()
    if mode == "mean-and-range":
        inside = f_axis.years(*YEARS)
        gap = (high - low)[:, inside].mean() - (o["tasmax"] - o["tasmin"]).mean()
        assert abs(gap) < 0.1


@pytest.mark.parametrize("mode", ["mean-and-range", "separate"])
def test_tasmin_is_never_above_tasmax(mode: str) -> None:
    check_pair(6, mode)


@pytest.mark.heavy
@pytest.mark.parametrize("mode", ["mean-and-range", "separate"])
def test_tasmin_is_never_above_tasmax_in_ten_million_values(mode: str) -> None:
    check_pair(700, mode)


def check_bounds(count: int) -> None:
    random = np.random.default_rng(12)
    o_axis, f_axis = days(*YEARS, "standard"), days(1991, 2030, "360_day")
    pixels = Pixels(np.linspace(-60, 75, count), np.arange(count, dtype=np.uint64))
    shape = (count, len(o_axis)), (count, len(f_axis))
    invented = {
        "hurs": [100 * random.beta(5, 1, shape[0]), 103 * random.beta(4, 1, shape[1])],
        "rsds": [330 * random.beta(3, 2, shape[0]), 400 * random.beta(2, 2, shape[1])],
        "pr": [random.gamma(0.3, 9, shape[0]), random.gamma(0.2, 12, shape[1])],
    }
    for name, (o, f) in invented.items():
        setup = setup_of(o_axis, f_axis, (name,))
        found = corrected(setup, {name: o.astype(np.float32)}, {name: f.astype(np.float32)}, pixels)
        values = found.values[name]
        assert np.isfinite(values).all()
        assert values.min() >= 0
        if name == "hurs":
            assert values.max() <= 100
        if name == "pr":
            assert ((values == 0) | (values >= np.float32(0.05))).all()
        if name == "rsds":
            for pixel in range(0, count, max(1, count // 5)):
                day = f_axis.position * 365 + 0.5
                top = [plain_path.clear_sky(float(pixels.lat[pixel]), d) for d in day[:360]]
                assert (values[pixel, :360] <= np.array(top) * (1 + 1e-6)).all()


def test_bounds() -> None:
    check_bounds(4)


@pytest.mark.heavy
def test_bounds_of_ten_million_values() -> None:
    check_bounds(700)


def test_clear_sky_of_the_plain_path() -> None:
    day = np.arange(1.0, 366.0, 13)
    found = kernels_values.clear_sky(np.array([-75.0, 0.0, 52.5]), day)
    for row, lat in enumerate((-75.0, 0.0, 52.5)):
        expected = [plain_path.clear_sky(lat, d) for d in day]
        np.testing.assert_allclose(found[row], expected, rtol=1e-12, atol=1e-9)


@pytest.mark.parametrize("axis_of", [months, annual])
def test_clear_sky_of_months_and_years(axis_of: Any) -> None:
    axis = axis_of(1961, 2020)
    setup = setup_of(axis.part(axis.years(*YEARS)), axis, ("rsds",), all={"minimum_values": 10})
    o = np.full((2, 10 * len(axis) // 60), 900.0, np.float32)
    found = corrected(setup, {"rsds": o}, {"rsds": np.full((2, len(axis)), 900.0, np.float32)})
    daily = [plain_path.clear_sky(45.25, day) for day in np.arange(1.0, 366.0)]
    expected = np.mean(daily) if axis_of is annual else np.mean(daily[:31])
    assert found.values["rsds"][0, 0] == pytest.approx(expected, rel=1e-6)


@pytest.mark.parametrize(("o_dry", "f_dry"), [(0.7, 0.3), (0.3, 0.7), (0.9, 0.0), (0.5, 0.5)])
def test_dry_days_in_both_directions(o_dry: float, f_dry: float) -> None:
    """Too few and too many dry days of the model both become those of the reference."""
    random = np.random.default_rng(2)
    axis = days(*YEARS)
    o, f = random.gamma(0.8, 7, (2, 2, len(axis))).astype(np.float32) + np.float32(0.06)
    o[random.random(o.shape) < o_dry] = 0
    f[random.random(f.shape) < f_dry] = 0
    for method in ("quantile-delta", "quantile"):
        setup = setup_of(axis, axis, ("pr",), all={"method": method} | OPTIONS)
        out = corrected(setup, {"pr": o}, {"pr": f}).values["pr"]
        assert (out == 0).mean() == pytest.approx((o == 0).mean(), abs=0.002)
        assert out.mean() == pytest.approx(o.mean(), rel=0.01)
        assert (out >= 1).mean() == pytest.approx((o >= 1).mean(), abs=0.002)


def test_no_rain_at_all_in_the_reference_or_the_model() -> None:
    axis = days(1991, 2020)
    random = np.random.default_rng(2)
    summer = (axis.position > 0.3) & (axis.position < 0.7)
    core = (axis.position > 0.4) & (axis.position < 0.6)
    wet = np.where(random.random((2, len(axis))) < 0.5, 0, random.gamma(1, 5, (2, len(axis))))
    dry = np.where(summer, 0, wet)
    setup = setup_of(axis.part(axis.years(*YEARS)), axis, ("pr",))
    ten = axis.years(*YEARS)
    for o, f in ((dry, wet), (wet, dry)):
        values = {"pr": f.astype(np.float32)}
        out = corrected(setup, {"pr": o[:, ten].astype(np.float32)}, values).values["pr"]
        assert np.isfinite(out).all()
        if o is dry:  # but for days that are wet only because the model has become wetter
            assert (out[:, core] > 0).mean() < 0.02
            assert out[:, core].mean() < 0.005
        else:  # wet days are made from dry ones
            made, seen = out[:, core & ten], o[:, core & ten]
            assert (made > 0).mean() == pytest.approx((seen > 0).mean(), abs=0.03)
            assert made.mean() == pytest.approx(seen.mean(), rel=0.1)


def test_new_rain_where_the_model_was_dry_is_added_not_multiplied() -> None:
    """Nothing has no relative change: a model that was dry and now rains adds what it rains."""
    axis = days(1991, 2030)
    ten = axis.years(*YEARS)
    random = np.random.default_rng(8)
    f = np.where(ten, 0.0, random.gamma(1, 2, (2, len(axis))) + 0.1).astype(np.float32)
    o = random.gamma(1, 4, (2, ten.sum())).astype(np.float32) + np.float32(0.1)
    setup = setup_of(axis.part(ten), axis, ("pr",), all={"cdf_years": 10, **OPTIONS})
    out = corrected(setup, {"pr": o}, {"pr": f}).values["pr"]
    later = axis.year >= 2001
    assert out[:, later].mean() == pytest.approx(o.mean() + f[:, later].mean(), rel=0.05)


def test_noise_of_dry_days_is_that_of_the_plain_path() -> None:
    axis = days(*YEARS)
    setup = setup_of(axis, axis, ("pr",))
    values = np.random.default_rng(1).choice([0.0, 0.03, 2.0], (2, len(axis))).astype(np.float32)
    filled = prepare_group(("pr",), {"pr": values}, axis, "observed", setup, PIXELS)["pr"]
    for pixel in range(2):
        expected = plain_path.fill_dry(
            values[pixel], axis.day, LAT[pixel], LON[pixel], 7, "observed", 0.05
        )
        np.testing.assert_array_equal(filled[pixel], expected)
    assert filled.max() == 2
    noise = filled[values < 0.05]
    assert noise.min() > 0
    assert noise.max() < 0.05
    assert noise.mean() == pytest.approx(0.025, abs=0.001)


def test_mean_and_range_of_the_plain_path() -> None:
    axis = days(*YEARS)
    values = pair(np.random.default_rng(1), axis, 0.5, 2)
    values["tasmax"][0, :50] -= 20
    setup = setup_of(axis, axis, ("tasmin", "tasmax"))
    found = prepare_group(setup.groups[0], values, axis, "observed", setup, PIXELS)
    mean, gap = plain_path.mean_and_range(values["tasmin"][0], values["tasmax"][0])
    np.testing.assert_array_equal(found["mean_temperature"][0], mean)
    np.testing.assert_array_equal(found["diurnal_range"][0], gap)


def test_one_of_the_pair_alone_is_additive() -> None:
    axis = days(*YEARS)
    random = np.random.default_rng(1)
    o = {"tasmax": random.normal(20, 3, (2, len(axis))).astype(np.float32)}
    f = {"tasmax": random.normal(23, 4, (2, len(axis))).astype(np.float32)}
    out = corrected(setup_of(axis, axis, ("tasmax",)), o, f).values["tasmax"]
    assert out.mean() == pytest.approx(o["tasmax"].mean(), abs=1e-3)


def test_no_correction_passes_values_through() -> None:
    axis = days(*YEARS)
    f = pair(np.random.default_rng(1), axis, 0.5, 2)
    o = pair(np.random.default_rng(2), axis, 0.5, 2)
    setup = setup_of(axis, axis, ("tasmin", "tasmax"), all={"method": "none"})
    found = corrected(setup, o, f)
    for name, values in found.values.items():
        np.testing.assert_array_equal(values, f[name])


def test_the_pair_has_one_set_of_choices() -> None:
    different = {"variables": {"tasmax": {"method": "none"}}}
    with pytest.raises(ValueError, match="tasmin and tasmax need the same choices"):
        Correct.model_validate(different)
    assert Correct.model_validate(different | {"temperature_pair": "separate"})
