"""Conversion to the units inside Stook."""

from __future__ import annotations

import pytest
from stook.errors import InputError
from stook.grids.units import INSIDE_UNITS, linear_conversion


@pytest.mark.parametrize(
    ("variable", "unit", "given", "expected"),
    [
        # definitions of the SI and of the degree Fahrenheit
        ("tas", "K", 273.15, 0.0),
        ("tasmin", "degF", 212.0, 100.0),
        ("tasmax", "degF", -40.0, -40.0),
        ("tas", "degC", 12.5, 12.5),
        ("tas", "celsius", 12.5, 12.5),
        ("tas", "C", 12.5, 12.5),
        ("tas", "F", 32.0, 0.0),
        # CMIP6 day table: pr in kg m-2 s-1; x 86400 = mm/day
        ("pr", "kg m-2 s-1", 1e-5, 0.864),
        ("pr", "kg m-2 day-1", 3.0, 3.0),
        ("pr", "mm day-1", 3.0, 3.0),
        ("pr", "mm/day", 3.0, 3.0),
        ("pr", "mm h-1", 0.5, 12.0),
        ("pr", "m s-1", 1e-8, 0.864),
        ("pr", "inch day-1", 1.0, 25.4),
        # rsds x 0.0864 = MJ m-2 day-1
        ("rsds", "MJ m-2 day-1", 0.0864, 1.0),
        ("rsds", "W m-2", 250.0, 250.0),
        ("hurs", "1", 0.5, 50.0),
        ("hurs", "%", 50.0, 50.0),
    ],
)
def test_conversion(variable: str, unit: str, given: float, expected: float) -> None:
    scale, offset = linear_conversion(unit, variable, "a.nc")
    assert scale * given + offset == pytest.approx(expected, rel=1e-12, abs=1e-12)


@pytest.mark.parametrize("variable", INSIDE_UNITS)
def test_the_inside_unit_is_left_alone(variable: str) -> None:
    assert linear_conversion(INSIDE_UNITS[variable], variable, "a.nc") == (1.0, 0.0)


@pytest.mark.parametrize(
    ("variable", "unit", "message"),
    [
        ("tas", None, "a.nc: tas has no units attribute; it must convert to degC"),
        ("tas", " ", "a.nc: tas has no units attribute; it must convert to degC"),
        ("pr", "mm", "a.nc: pr has unit 'mm', not convertible to mm day-1"),
        ("tas", "W m-2", "a.nc: tas has unit 'W m-2', not convertible to degC"),
        (
            "pr",
            "drops",
            "a.nc: pr has unit 'drops', which UDUNITS does not know; it must convert to mm day-1",
        ),
        (
            "pr",
            "mm month-1",
            "a.nc: pr has unit 'mm month-1'; months differ in length, "
            "divide by the days of each month and give mm day-1",
        ),
    ],
)
def test_messages(variable: str, unit: str | None, message: str) -> None:
    with pytest.raises(InputError) as caught:
        linear_conversion(unit, variable, "a.nc")
    assert str(caught.value) == message
