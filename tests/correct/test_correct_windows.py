"""Windows of days and years: position in the year, circle, calendars, counts."""

from __future__ import annotations

import numpy as np
import pytest
from correct_inputs import CALENDARS, annual, days, months
from stook.correct.windows import Membership, Series, day_windows, minimum_count, year_windows


@pytest.mark.parametrize("calendar", CALENDARS)
@pytest.mark.parametrize(("window", "step"), [(31, 5), (31, 31), (90, 5), (10, 10), (365, 5)])
def test_members_by_their_distance_from_the_centre(calendar: str, window: int, step: int) -> None:
    axis = days(2000, 2003, calendar)
    found = day_windows(axis, window, step)
    place = axis.position * 365
    width = max(window, 365 / found.count)
    for number in range(found.count):
        centre = (number + 0.5) * 365 / found.count
        away = np.abs((place - centre + 182.5) % 365 - 182.5)
        inside = (number - found.first) % found.count < found.number
        assert inside[away < width / 2 - 1e-6].all()
        assert not inside[away > width / 2 + 1e-6].any()
        assert found.sizes()[number] == inside.sum()
    own = (found.own - found.first) % found.count < found.number
    assert own.all()
    assert np.array_equal(found.own, np.floor(place / (365 / found.count) + 1e-9))


def test_days_of_calendars_meet_by_position() -> None:
    """Day 180 of 360, and day 183 of 365, lie in the middle of the year."""
    windows = [
        day_windows(days(2001, 2001, calendar), 31, 5).own[day - 1]
        for calendar, day in (("360_day", 180), ("noleap", 183), ("all_leap", 183))
    ]
    assert set(windows) <= {35, 36}
    assert windows[1] == 36


def test_31_day_window_of_whole_days() -> None:
    """Every window of a 365-day year holds 31 days of every year."""
    assert set(day_windows(days(1991, 2020), 31, 5).sizes()) == {31 * 30}


def test_windows_run_past_the_year_end() -> None:
    axis = days(2001, 2001)
    found = day_windows(axis, 31, 5)
    first = (0 - found.first) % found.count < found.number
    assert list(np.flatnonzero(first) + 1) == [*range(1, 19), *range(353, 366)]


def window_of(axis: Series, found: Membership, year: int) -> tuple[int, int, int]:
    own = found.own[year - axis.year[0]]
    years = axis.year[(found.first <= own) & (own < found.first + found.number)]
    return int(years[0]), int(years[-1]), len(years)


def test_moving_years() -> None:
    """Blocks of ten years from 1991; thirty years around each, cut off at the ends."""
    axis = annual(1981, 2100)
    found = year_windows(axis, 1991, 30, 10)
    spans = {1985: (1981, 2000), 1991: (1981, 2010), 2000: (1981, 2010), 2001: (1991, 2020)}
    spans |= {2055: (2041, 2070), 2085: (2071, 2100), 2095: (2081, 2100)}
    for year, (first, last) in spans.items():
        assert window_of(axis, found, year) == (first, last, last - first + 1)


def test_windows_keep_two_thirds_of_their_years() -> None:
    """One year of a block at either end still gets twenty years."""
    axis = annual(1990, 2101)
    found = year_windows(axis, 1991, 30, 10)
    assert window_of(axis, found, 1990) == (1990, 2009, 20)
    assert window_of(axis, found, 2101) == (2082, 2101, 20)
    assert window_of(axis, found, 1991) == (1990, 2010, 21)


@pytest.mark.parametrize("width", [5, 8, 30])
@pytest.mark.parametrize("step", [1, 4, 10])
def test_every_year_lies_in_its_own_window(width: int, step: int) -> None:
    axis = annual(1988, 2017)
    found = year_windows(axis, 1993, width, step)
    for year in axis.year:
        first, last, count = window_of(axis, found, year)
        assert first <= year <= last
        assert count == last - first + 1
        assert count >= min(30, -(-2 * max(width, step) // 3))


def test_short_series_have_one_window_of_years() -> None:
    found = year_windows(annual(1991, 2010), 1991, 30, 10)
    assert found.count == 1
    assert (found.own == 0).all()


def test_monthly_and_annual_windows() -> None:
    axis = months(1991, 1992)
    found = day_windows(axis, 31, 5)
    assert found.count == 12
    assert np.array_equal(found.own, axis.month - 1)
    assert day_windows(annual(1991, 1992), 31, 5).count == 1


def test_minimum_counts() -> None:
    assert minimum_count(100, "daily") == 100
    assert minimum_count(100, "monthly") == 10
    assert minimum_count(600, "monthly") == 20
    assert minimum_count(100, "annual") == 10
