"""Calendars, time steps and the joining of series."""

from __future__ import annotations

import calendar as civil
import datetime

import cftime
import numpy as np
import pytest
from stook.errors import InputError
from stook.grids.calendars import (
    CALENDARS,
    calendar_name,
    check_continuous,
    join_order,
    step_number,
    time_step,
    year_fraction,
    year_lengths,
    years_of,
)


def daily(first: str, count: int, calendar: str = "standard") -> np.ndarray:
    return cftime.num2date(np.arange(count) + 0.5, f"days since {first}", calendar=calendar)


def test_names_of_calendars() -> None:
    """CF 1.13, section 4.4.1: gregorian = standard, 365_day = noleap, 366_day = all_leap."""
    assert calendar_name("gregorian", "a.nc") == calendar_name("Standard", "a.nc") == "standard"
    assert calendar_name("365_day", "a.nc") == calendar_name("no_leap", "a.nc") == "noleap"
    assert calendar_name("366_day", "a.nc") == "all_leap"
    with pytest.raises(InputError) as caught:
        calendar_name("none", "a.nc")
    assert str(caught.value) == (
        f"a.nc: calendar 'none' is not known; valid: {', '.join(CALENDARS)}"
    )


def test_year_lengths() -> None:
    years = np.array([1900, 2000, 2001, 2004, 2100])
    expected = [366 if civil.isleap(year) else 365 for year in years.tolist()]  # standard library
    assert year_lengths(years, "standard").tolist() == expected
    assert year_lengths(years, "proleptic_gregorian").tolist() == expected
    assert year_lengths(years, "noleap").tolist() == [365] * 5
    assert year_lengths(years, "all_leap").tolist() == [366] * 5
    assert year_lengths(years, "360_day").tolist() == [360] * 5
    assert year_lengths(np.array([1900]), "julian").tolist() == [366]
    assert year_lengths(years.reshape(5, 1), "noleap").shape == (5, 1)


@pytest.mark.parametrize(
    ("calendar", "days"), [("standard", 366), ("noleap", 365), ("360_day", 360)]
)
def test_year_fraction(calendar: str, days: int) -> None:
    fractions = year_fraction(daily("2004-01-01", days, calendar), calendar)
    np.testing.assert_allclose(fractions, (np.arange(days) + 0.5) / days, rtol=1e-15)


def test_days_are_numbered_like_ordinals() -> None:
    """Differences are those of the standard library's proleptic Gregorian ordinals."""
    times = daily("1999-12-30", 500, "proleptic_gregorian")
    numbers = step_number(times, "daily")
    first = datetime.date(1999, 12, 30).toordinal() - datetime.date(1850, 1, 1).toordinal()
    np.testing.assert_array_equal(numbers, first + np.arange(500))
    midnight = cftime.num2date(np.arange(3) - 1e-6, "days since 2001-01-01")  # a moment before
    assert np.diff(step_number(midnight, "daily")).tolist() == [1, 1]
    assert step_number(midnight, "daily")[0] == step_number(daily("2001-01-01", 1), "daily")[0]


def test_months_and_years_are_numbered() -> None:
    times = cftime.num2date(np.array([15.0, 45.0, 380.0]), "days since 2001-01-01")
    assert np.diff(step_number(times, "monthly")).tolist() == [1, 11]
    assert step_number(times, "annual").tolist() == years_of(times).tolist() == [2001, 2001, 2002]


def test_time_steps() -> None:
    assert time_step(daily("2001-01-01", 5), "a.nc") == "daily"
    months = cftime.num2date(15 + 30.4 * np.arange(12), "days since 2001-01-01")
    assert time_step(months, "a.nc") == "monthly"
    for length in (360, 365, 366):
        years = cftime.num2date(180 + length * np.arange(5), "days since 1901-01-01", "360_day")
        assert time_step(years, "a.nc") == "annual"
    assert time_step(daily("2001-01-01", 1), "a.nc") == "annual"
    with pytest.raises(InputError) as caught:
        time_step(cftime.num2date(np.arange(9) * 5.0, "days since 2001-01-01"), "a.nc")
    assert str(caught.value) == (
        "a.nc: time step of 5 days; daily, monthly or annual values are read"
    )


def test_continuous_series_pass_and_the_rest_is_named() -> None:
    times = daily("2004-02-27", 5)
    check_continuous(times, "daily", "a.nc")
    check_continuous(daily("2004-02-27", 5, "noleap"), "daily", "a.nc")
    for broken, message in (
        (times[[0, 1, 3]], "a.nc: gap between 2004-02-28 and 2004-03-01"),
        (times[[0, 1, 1]], "a.nc: 2004-02-28 stands twice"),
        (times[[1, 0]], "a.nc: 2004-02-27 follows 2004-02-28"),
    ):
        with pytest.raises(InputError) as caught:
            check_continuous(broken, "daily", "a.nc")
        assert str(caught.value).startswith(message)


def test_files_are_ordered_by_their_first_time() -> None:
    parts = [daily("2011-01-01", 3), daily("1991-01-01", 3), daily("2001-01-01", 3)]
    assert join_order(parts, "tas") == [1, 2, 0]
    with pytest.raises(InputError, match="tas: a file has no time step"):
        join_order([*parts, np.array([], dtype=object)], "tas")
    with pytest.raises(InputError, match="files have different calendars: 360_day, standard"):
        join_order([*parts, daily("2021-01-01", 3, "360_day")], "tas")
