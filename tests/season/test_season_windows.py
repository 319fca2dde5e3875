"""Which days are in a season: hand-computed cases."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pandas as pd
import pytest
from season_inputs import daily_dates, monthly_dates, whole_years
from stook.errors import InputError
from stook.season.windows import Seasons, SeriesTime


def seasons(dates: np.ndarray, planting: float, maturity: float) -> tuple[SeriesTime, Seasons]:
    time = SeriesTime.of(dates, "daily", "weather")
    return time, Seasons.of(time, np.array([planting]), np.array([maturity]))


def days(found: Seasons) -> list[tuple[int, int]]:
    first, end = found.days()
    return [(int(a), int(b)) for a, b in zip(first[:, 0], end[:, 0], strict=True)]


def test_a_year_of_365_days_takes_exactly_planting_to_maturity() -> None:
    _, found = seasons(whole_years(2001, 2003, "noleap"), 100, 250)
    assert days(found) == [(99, 250), (464, 615), (829, 980)]
    assert found.nominal[0] == 151


def test_the_whole_year() -> None:
    for calendar, length in (("noleap", 365), ("360_day", 360), ("all_leap", 366)):
        _, found = seasons(whole_years(2001, 2002, calendar), 1, 365)
        assert days(found) == [(0, length), (length, 2 * length)]


def test_leap_years_keep_the_position_in_the_year() -> None:
    """Day 100 begins at 99/365 of the year: day 99.27 of 366, so the first middle is that of 100.

    Day 250 ends at 250/365: day 250.68 of 366, so the last middle is that of day 251.
    """
    dates = whole_years(2003, 2004, "standard")
    time, found = seasons(dates, 100, 250)
    assert days(found) == [(99, 250), (365 + 99, 365 + 251)]
    assert dates[464].dayofyr == 100
    assert dates[365 + 250].dayofyr == 251
    np.testing.assert_array_equal(time.years, [2003, 2004])


def test_a_year_of_360_days() -> None:
    """99/365 x 360 = 97.64: first middle at 98.5 (day 99); 250/365 x 360 = 246.58: last 246.5."""
    _, found = seasons(whole_years(2001, 2001, "360_day"), 100, 250)
    assert days(found) == [(98, 247)]
    assert found.nominal[0] == 151


def test_across_the_year_end_the_first_harvest_has_no_season() -> None:
    _, found = seasons(whole_years(2001, 2003, "noleap"), 280, 190)
    assert days(found) == [(-1, -1), (279, 555), (644, 920)]
    assert found.nominal[0] == 276


def test_a_series_that_starts_and_ends_within_a_year() -> None:
    dates = daily_dates("2001-04-11", 3 * 365, "noleap")  # 2001-04-11 is day 101
    _, found = seasons(dates, 100, 250)
    assert days(found) == [(-1, -1), (364, 515), (729, 880), (-1, -1)]
    _, found = seasons(dates, 101, 250)
    assert days(found)[0] == (0, 150)


def test_phases_cut_the_season_without_gap_or_overlap() -> None:
    time, found = seasons(whole_years(2001, 2002, "standard"), 280, 190)
    cuts = (0.0, 0.13, 0.45, 0.7, 1.0)
    parts = [found.phase(pair, daily=True) for pair in pairwise(cuts)]
    edges = [days(part)[1] for part in parts]
    assert edges[0][0] == days(found)[1][0]
    assert edges[-1][1] == days(found)[1][1]
    assert all(one[1] == other[0] for one, other in pairwise(edges))
    assert sum(float(part.nominal[0]) for part in parts) == pytest.approx(found.nominal[0])
    assert time.daily


def test_a_phase_too_short_for_a_day_has_no_days() -> None:
    _, found = seasons(whole_years(2001, 2001, "noleap"), 100, 103)  # four days
    assert days(found.phase((0.3, 0.35), daily=True)) == [(-1, -1)]
    assert days(found.phase((0.3, 0.4), daily=True)) == [(100, 101)]  # middle of the second day


def test_a_crop_without_calendar_has_no_days() -> None:
    _, found = seasons(whole_years(2001, 2001, "noleap"), np.nan, np.nan)
    assert days(found) == [(-1, -1)]


def test_month_edges_against_pandas() -> None:
    time = SeriesTime.of(monthly_dates(2003, 2005, "standard"), "monthly", "weather")
    starts = pd.date_range("2003-01-01", "2006-01-01", freq="MS")
    np.testing.assert_array_equal(time.edges, (starts - starts[0]).days)
    np.testing.assert_array_equal(time.lengths, [365, 365, 366, 365])


def test_a_monthly_series_that_starts_and_ends_within_a_year() -> None:
    dates = monthly_dates(2003, 2004, "noleap")[2:-4]
    time = SeriesTime.of(dates, "monthly", "weather")
    assert time.edges[0] == 59
    assert time.edges[-1] == 365 + 243
    found = Seasons.of(time, np.array([60.0, 59.0]), np.array([200.0, 200.0]))
    np.testing.assert_array_equal(np.isnan(found.begin), [[False, True], [False, False]])


def test_gap_is_refused() -> None:
    dates = np.delete(whole_years(2001, 2001, "noleap"), 40)
    with pytest.raises(InputError, match=r"weather: gap between 2001-02-09 and 2001-02-11"):
        SeriesTime.of(dates, "daily", "weather")
