"""The season stage against the plain path, on random weather, calendars and seasons."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import TypeAdapter
from season_inputs import daily_dates, layer, monthly_dates, no_reason, weather
from stook.audit.plain.season import season_index
from stook.season.definition import IndexDefinition
from stook.season.indices import season_indices

ADAPTER: TypeAdapter[IndexDefinition] = TypeAdapter(IndexDefinition)
CALENDARS = ("standard", "proleptic_gregorian", "noleap", "360_day", "all_leap")
FRACTION = st.floats(0, 1, allow_nan=False, width=32)


def measures(coarse: bool) -> st.SearchStrategy[dict[str, object]]:
    threshold = st.sampled_from([-5.0, 0.0, 8.0, 10.0, 15.5, 20.0, 29.0, 35.0])
    phase = st.sampled_from(["season", "early", "late"])
    variable = st.sampled_from(["tas", "tasmin", "tasmax", "diurnal-range", "pr", "rsds", "hurs"])
    mean = st.fixed_dictionaries({"measure": st.just("mean"), "variable": variable, "phase": phase})
    plain = [
        mean,
        st.fixed_dictionaries({"measure": st.just("total"), "phase": phase}),
        st.fixed_dictionaries({"measure": st.just("vapour-pressure-deficit"), "phase": phase}),
    ]
    if coarse:
        return st.one_of(plain)
    return st.one_of(
        *plain,
        st.fixed_dictionaries(
            {"measure": st.just("degree-days"), "base": threshold, "phase": phase}
        ),
        st.fixed_dictionaries(
            {
                "measure": st.just("degree-days"),
                "base": threshold,
                "cap": st.just(36.5),
                "phase": phase,
            }
        ),
        st.fixed_dictionaries(
            {
                "measure": st.just("days-above"),
                "variable": st.sampled_from(["tas", "tasmin", "tasmax", "pr"]),
                "threshold": threshold,
                "phase": phase,
            }
        ),
        st.fixed_dictionaries(
            {
                "measure": st.just("largest-total"),
                "days": st.sampled_from([1, 2, 5, 30]),
                "phase": phase,
            }
        ),
        st.fixed_dictionaries(
            {
                "measure": st.sampled_from(["wet-days", "longest-dry-spell"]),
                "wet_day": st.sampled_from([0.1, 1.0, 5.0]),
                "phase": phase,
            }
        ),
    )


def compare(
    climate: xr.Dataset,
    given_: dict[str, dict[str, object]],
    planting: int,
    maturity: int,
    cut: float,
) -> None:
    phases = {"early": (0.0, cut), "late": (cut, 1.0)}
    definitions = {name: ADAPTER.validate_python(one) for name, one in given_.items()}
    found = season_indices(
        climate,
        layer(climate, planting),
        layer(climate, maturity),
        no_reason(climate),
        definitions,
        phases,
    )
    dates = climate["time"].values
    for column in range(climate.sizes["lon"]):
        series = {
            str(name): grid.values[:, 0, column].astype(np.float64)
            for name, grid in climate.data_vars.items()
        }
        for name, definition in definitions.items():
            values = found[name].values[:, 0, column]
            expected = [
                season_index(
                    definition,
                    dates,
                    series,
                    planting,
                    maturity,
                    phases,
                    int(year),
                    climate.attrs["time_step"],
                )
                for year in found.year
            ]
            np.testing.assert_allclose(
                values, expected, rtol=1e-11, atol=1e-9, err_msg=f"{definition}"
            )


@settings(max_examples=25, deadline=None, derandomize=True)
@given(
    calendar=st.sampled_from(CALENDARS),
    start=st.integers(0, 364),
    wanted=st.lists(measures(coarse=False), min_size=2, max_size=4),
    planting=st.integers(1, 365),
    maturity=st.integers(1, 365),
    cut=FRACTION.filter(lambda value: 0.05 < value < 0.95),
    missing=st.lists(st.integers(0, 1000), max_size=2),
    seed=st.integers(0, 99),
)
def test_daily(
    calendar: str,
    start: int,
    wanted: list[dict[str, object]],
    planting: int,
    maturity: int,
    cut: float,
    missing: list[int],
    seed: int,
) -> None:
    dates = daily_dates("2002-01-01", 1100 + start, calendar)[start:]
    climate = weather(dates, (1, 2), seed)
    for day in missing:
        climate["tasmax"][day, 0, 1] = np.nan
        climate["pr"][day, 0, 1] = np.nan
    compare(climate, {f"i{n}": one for n, one in enumerate(wanted)}, planting, maturity, cut)


@settings(max_examples=15, deadline=None, derandomize=True)
@given(
    calendar=st.sampled_from(CALENDARS),
    annual=st.booleans(),
    wanted=st.lists(measures(coarse=True), min_size=2, max_size=3),
    planting=st.integers(1, 365),
    maturity=st.integers(1, 365),
    cut=FRACTION.filter(lambda value: 0.05 < value < 0.95),
    seed=st.integers(0, 99),
)
def test_monthly_and_annual(
    calendar: str,
    annual: bool,
    wanted: list[dict[str, object]],
    planting: int,
    maturity: int,
    cut: float,
    seed: int,
) -> None:
    dates = monthly_dates(2002, 2006, calendar)
    if annual:
        climate = weather(dates[6::12], (1, 2), seed, "annual")
    else:
        climate = weather(dates[3:-2], (1, 2), seed, "monthly")
        climate["tasmax"][17, 0, 1] = np.nan
    compare(climate, {f"i{n}": one for n, one in enumerate(wanted)}, planting, maturity, cut)


def test_the_plain_path_refuses_daily_measures_on_months() -> None:
    climate = weather(monthly_dates(2002, 2003, "noleap"), (1, 1), 1, "monthly")
    series = {str(name): grid.values[:, 0, 0] for name, grid in climate.data_vars.items()}
    definition = ADAPTER.validate_python({"measure": "wet-days"})
    with pytest.raises(ValueError, match="wet-days needs daily values"):
        season_index(definition, climate["time"].values, series, 100, 200, {}, 2002, "monthly")
