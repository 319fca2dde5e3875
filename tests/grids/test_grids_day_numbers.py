"""Numbers of days against cftime's own conversion, in every calendar."""

from __future__ import annotations

import cftime
import numpy as np
import pytest
from stook.grids.calendars import step_number

CALENDARS = ["standard", "proleptic_gregorian", "julian", "noleap", "all_leap", "360_day"]


@pytest.mark.parametrize("calendar", CALENDARS)
@pytest.mark.parametrize("first", [-1500, 54000, -98000])  # 1845, 1997, and the year 1582
def test_days_are_those_of_cftime(calendar, first):
    days = np.arange(first, first + 1500)
    units = "days since 1850-01-01"
    for hour in (0.0, 0.5, 0.99):
        times = cftime.num2date(days + hour, units, calendar=calendar)
        np.testing.assert_array_equal(step_number(times, "daily"), days)
