"""Labelled season indices: against pandas, in every calendar, missing values, blocks."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from pydantic import TypeAdapter
from season_inputs import layer, monthly_dates, no_reason, weather, whole_years
from stook.errors import InputError
from stook.grids.missing import Reason
from stook.season.definition import IndexDefinition
from stook.season.indices import season_indices

PHASES = {"flowering": (0.45, 0.65)}
WANTED = {
    "growth": {"measure": "degree-days", "base": 10, "cap": 30},
    "heat": {"measure": "degree-days", "base": 29},
    "warmth": {"measure": "mean", "variable": "tas"},
    "nights": {"measure": "mean", "variable": "tasmin", "phase": "flowering"},
    "range": {"measure": "mean", "variable": "diurnal-range"},
    "light": {"measure": "mean", "variable": "rsds"},
    "rain": {"measure": "total"},
    "hot_days": {"measure": "days-above", "variable": "tasmax", "threshold": 25},
    "warm_days": {"measure": "days-above", "variable": "tas", "threshold": 18},
    "dry_spell": {"measure": "longest-dry-spell"},
    "wet_days": {"measure": "wet-days", "wet_day": 0.1, "phase": "flowering"},
    "dry_air": {"measure": "vapour-pressure-deficit"},
    "downpour": {"measure": "largest-total"},
}


def definitions(*names: str) -> dict[str, IndexDefinition]:
    adapter: TypeAdapter[IndexDefinition] = TypeAdapter(IndexDefinition)
    return {name: adapter.validate_python(WANTED[name]) for name in names or WANTED}


def indices(climate: xr.Dataset, planting: float, maturity: float, *names: str) -> xr.Dataset:
    return season_indices(
        climate,
        layer(climate, planting),
        layer(climate, maturity),
        no_reason(climate),
        definitions(*names),
        PHASES,
    )


def test_against_pandas() -> None:
    """pandas: the days chosen by day of year in years of 365 days."""
    climate = weather(whole_years(2001, 2003, "standard"), (2, 2))
    found = indices(climate, 100, 250).isel(lat=1, lon=0).load()
    frame = climate.isel(lat=1, lon=0).drop_vars(["lat", "lon"]).to_dataframe().astype("float64")
    frame.index = pd.date_range("2001-01-01", "2003-12-31")
    season = frame[(frame.index.day_of_year >= 100) & (frame.index.day_of_year <= 250)]
    part = season.groupby(season.index.year)
    mean = (season.tasmin + season.tasmax) / 2
    years = season.index.year
    expected = {
        "warmth": mean.groupby(years).mean(),
        "range": part.tasmax.mean() - part.tasmin.mean(),
        "light": part.rsds.mean(),
        "rain": part.pr.sum(),
        "hot_days": (season.tasmax > 25).groupby(years).sum(),
        "warm_days": (mean > 18).groupby(years).sum(),
    }
    for name, values in expected.items():
        np.testing.assert_allclose(found[name], values, rtol=1e-12)
    dry = season.pr < 1
    runs = dry.groupby([years, (~dry).cumsum()]).sum().groupby(level=0).max()
    np.testing.assert_array_equal(found["dry_spell"], runs)
    wettest = season.groupby(years).pr.apply(lambda rain: rain.rolling(5).sum().max())
    np.testing.assert_allclose(found["downpour"], wettest, rtol=1e-12)
    # Flowering: 151 days from day 100; 67.95 to 98.15 days after its begin.
    flowering = frame[(frame.index.day_of_year >= 168) & (frame.index.day_of_year < 198)]
    part = flowering.groupby(flowering.index.year)
    np.testing.assert_allclose(found["nights"], part.tasmin.mean(), rtol=1e-12)
    wet = (flowering.pr >= 0.1).groupby(flowering.index.year).mean()
    np.testing.assert_allclose(found["wet_days"], wet * 151 * 0.2, rtol=1e-12)


def test_largest_total_lies_inside_the_season_and_is_missing_with_any_day() -> None:
    """Planting 11, maturity 20: days 10 to 19 counted from zero."""
    rain = np.zeros(365)
    rain[[9, 10, 11, 13, 19, 20]] = [50.0, 4.0, 3.0, 2.0, 8.0, 60.0]
    climate = weather(whole_years(2001, 2001, "noleap"), (1, 2))
    climate["pr"] = ("time", "lat", "lon"), np.repeat(rain, 2).reshape(365, 1, 2).astype(np.float32)
    adapter: TypeAdapter[IndexDefinition] = TypeAdapter(IndexDefinition)
    for days, expected in ((1, 8.0), (2, 8.0), (3, 8.0), (4, 9.0), (10, 17.0), (11, np.nan)):
        wanted = {"most": adapter.validate_python({"measure": "largest-total", "days": days})}
        for missing, result in ((9, expected), (15, np.nan), (10, np.nan), (19, np.nan)):
            gap = climate.copy(deep=True)
            gap["pr"][missing, 0, 1] = np.nan
            found = season_indices(gap, layer(gap, 11), layer(gap, 20), no_reason(gap), wanted, {})[
                "most"
            ].squeeze()
            np.testing.assert_array_equal(found, [expected, result])


@pytest.mark.parametrize("calendar", ["standard", "noleap", "360_day", "all_leap", "julian"])
def test_steady_weather_gives_the_same_sums_in_every_calendar(calendar: str) -> None:
    dates = whole_years(2003, 2006, calendar)
    steady = {"tasmin": 12.0, "tasmax": 36.0, "pr": 2.0, "rsds": 200.0, "hurs": 50.0}
    climate = weather(dates, (1, 1))
    climate = climate.assign({name: climate[name] * 0 + value for name, value in steady.items()})
    found = indices(climate, 280, 200).isel(lat=0, lon=0).load()
    length = 365 - 280 + 1 + 200
    whole = found.sel(year=slice(2004, None))
    assert found.year.values.tolist() == [2003, 2004, 2005, 2006]
    assert np.isnan(found["rain"][0])
    np.testing.assert_allclose(whole["rain"], 2 * length, rtol=1e-6)
    np.testing.assert_allclose(whole["hot_days"], length, rtol=1e-12)
    np.testing.assert_allclose(whole["warmth"], 24, rtol=1e-6)
    np.testing.assert_allclose(whole["growth"] + whole["heat"] * 0, whole["growth"][0], rtol=1e-12)
    days = whole["dry_spell"]
    assert (days == 0).all()


def test_a_dry_spell_is_counted_in_days_of_the_calendar() -> None:
    climate = weather(whole_years(2001, 2001, "360_day"), (1, 1))
    climate["pr"] = climate["pr"] * 0
    assert float(indices(climate, 1, 365, "dry_spell")["dry_spell"].squeeze()) == 360


def test_dry_spell_and_wet_days_take_a_wet_day_as_at_least_its_threshold() -> None:
    climate = weather(whole_years(2001, 2001, "noleap"), (1, 1))
    rain = np.zeros(365)
    rain[[10, 20]] = 1.0
    rain[30] = np.nextafter(np.float32(1.0), np.float32(0.0))
    climate["pr"] = ("time", "lat", "lon"), rain.astype(np.float32)[:, None, None]
    adapter: TypeAdapter[IndexDefinition] = TypeAdapter(IndexDefinition)
    wanted = {
        name: adapter.validate_python({"measure": name})
        for name in ("wet-days", "longest-dry-spell")
    }
    found = season_indices(
        climate, layer(climate, 1), layer(climate, 365), no_reason(climate), wanted, {}
    )
    assert float(found["wet-days"].squeeze()) == 2
    assert float(found["longest-dry-spell"].squeeze()) == 365 - 21


def test_days_exactly_at_a_threshold_are_not_above_it() -> None:
    climate = weather(whole_years(2001, 2001, "noleap"), (1, 1))
    climate["tasmax"] = climate["tasmax"] * 0 + 25
    assert float(indices(climate, 1, 365, "hot_days")["hot_days"].squeeze()) == 0


def test_a_missing_day_makes_the_season_missing_and_no_other() -> None:
    climate = weather(whole_years(2001, 2003, "noleap"), (1, 1))
    for name in ("tasmin", "tasmax", "pr", "rsds", "hurs"):
        climate[name][365 + 150] = np.nan  # in the season, before flowering
    found = indices(climate, 100, 250)
    for name in WANTED:
        missing = [name not in ("nights", "wet_days") and year == 2002 for year in found.year]
        np.testing.assert_array_equal(np.isnan(found[name]).squeeze(), missing, err_msg=name)
    climate = weather(whole_years(2001, 2003, "noleap"), (1, 1))
    climate["tasmin"][[0, 98, 250, 400]] = np.nan  # outside every season
    assert not np.isnan(indices(climate, 100, 250)["growth"]).any()


def test_reasons() -> None:
    climate = weather(whole_years(2001, 2002, "noleap"), (2, 3))
    climate["tasmax"][:, 0, 1] = np.nan
    climate["tasmax"][:, 0, 2] = np.nan
    climate["reason_tasmax"] = layer(climate, 0).astype(np.int8)
    climate["reason_tasmax"][0, 2] = int(Reason.TOO_FEW_VALUES)
    climate["tasmin"][[200, 500], 1, 0] = np.nan  # a missing day in every season
    reason = no_reason(climate)
    reason[1, 1] = int(Reason.OUTSIDE_CROP_AREA)
    reason[1, 2] = int(Reason.NO_CALENDAR)
    planting = layer(climate, 100)
    planting[1, 2] = np.nan
    found = season_indices(
        climate, planting, layer(climate, 250), reason, definitions("growth", "rain"), PHASES
    )
    np.testing.assert_array_equal(
        found["reason"],
        [
            [Reason.VALID, Reason.MISSING_INPUT, Reason.TOO_FEW_VALUES],
            [Reason.INCOMPLETE_SEASON, Reason.OUTSIDE_CROP_AREA, Reason.NO_CALENDAR],
        ],
    )
    assert np.isnan(found["rain"].values[:, found["reason"].values == 1]).all()
    assert found["reason"].dtype == np.int8
    assert not np.isnan(found["growth"].values[:, 0, 0]).any()


def test_a_pixel_has_the_same_bits_in_any_block() -> None:
    climate = weather(whole_years(2001, 2004, "standard"), (5, 7))
    random = np.random.default_rng(8)
    planting = layer(climate, random.integers(60, 300, (5, 7)))
    maturity = layer(climate, random.integers(60, 300, (5, 7)))
    climate["tasmin"][700, 2, 2] = np.nan
    reason = no_reason(climate)
    reason[3, 4] = 1
    whole = season_indices(climate, planting, maturity, reason, definitions(), PHASES)
    chunked = climate.chunk({"time": -1, "lat": 2, "lon": 3})
    lazy = season_indices(chunked, planting, maturity, reason, definitions(), PHASES)
    assert lazy["growth"].chunks is not None
    xr.testing.assert_identical(lazy.compute(), whole)
    for row, column in ((0, 0), (2, 2), (3, 4), (4, 6)):
        at = {"lat": slice(row, row + 1), "lon": slice(column, column + 1)}
        one = season_indices(
            climate.isel(at),
            planting.isel(at),
            maturity.isel(at),
            reason.isel(at),
            definitions(),
            PHASES,
        )
        xr.testing.assert_identical(one, whole.isel(at))


def test_indices_know_their_units() -> None:
    climate = weather(whole_years(2001, 2001, "noleap"), (1, 1))
    found = indices(climate, 100, 250)
    units = {name: found[name].attrs["units"] for name in WANTED}
    assert units["growth"] == "degC day"
    assert units["rain"] == "mm"
    assert units["dry_air"] == "kPa"
    assert found["growth"].attrs["units_metadata"] == "temperature: difference"
    assert found["nights"].attrs["units_metadata"] == "temperature: on_scale"
    assert found["nights"].attrs["long_name"] == "mean tasmin, flowering phase"
    assert all(found[name].dtype == np.float64 for name in WANTED)
    assert found["growth"].dims == ("year", "lat", "lon")


def test_monthly_values_are_weighted_by_their_days_in_the_season() -> None:
    climate = weather(monthly_dates(2001, 2002, "noleap"), (1, 1), step="monthly")
    months = climate["pr"].values[:12, 0, 0].astype(np.float64)
    found = indices(climate, 80, 130, "rain", "warmth", "light")
    # Days 80 to 130: 11 of March (ends with day 90), 30 of April, 10 of May.
    expected = 11 * months[2] + 30 * months[3] + 10 * months[4]
    assert float(found["rain"].sel(year=2001).squeeze()) == pytest.approx(expected, rel=1e-12)
    light = climate["rsds"].values[:12, 0, 0].astype(np.float64)
    expected = (11 * light[2] + 30 * light[3] + 10 * light[4]) / 51
    assert float(found["light"].sel(year=2001).squeeze()) == pytest.approx(expected, rel=1e-12)


def test_a_missing_month_outside_the_season_does_not_matter() -> None:
    climate = weather(monthly_dates(2001, 2002, "noleap"), (1, 1), step="monthly")
    climate["pr"][[1, 5, 14]] = np.nan  # February and June 2001, March 2002
    found = indices(climate, 80, 130, "rain")["rain"].squeeze()
    np.testing.assert_array_equal(np.isnan(found), [False, True])


def test_annual_values_are_those_of_the_year() -> None:
    dates = monthly_dates(1860, 1865, "360_day")[5::12]
    climate = weather(dates, (1, 1), step="annual")
    climate["tas"] = climate["tasmax"] + 1
    climate = climate[["tas"]].assign_attrs(time_step="annual")
    found = indices(climate, 1, 365, "warmth")["warmth"].squeeze()
    np.testing.assert_allclose(found, climate["tas"].squeeze().astype(float), rtol=1e-15)
    assert found.year.values.tolist() == list(range(1860, 1866))
    inside = indices(climate, 120, 240, "warmth")["warmth"].squeeze()
    np.testing.assert_allclose(inside, found, rtol=1e-14)


@pytest.mark.parametrize("step", ["monthly", "annual"])
def test_daily_indices_are_refused_on_coarser_values(step: str) -> None:
    climate = weather(monthly_dates(2001, 2003, "noleap"), (1, 1), step="monthly")
    if step == "annual":
        climate = climate.isel(time=slice(0, None, 12)).assign_attrs(time_step="annual")
    with pytest.raises(InputError, match=rf"heat .* needs daily values; these are {step}"):
        indices(climate, 100, 250, "heat")


def test_an_index_without_its_variable_is_refused() -> None:
    climate = weather(whole_years(2001, 2001, "noleap"), (1, 1)).drop_vars("hurs")
    with pytest.raises(InputError, match=r"climate grids: index dry_air .* tasmin, tasmax, pr"):
        indices(climate, 100, 250)


def test_an_unknown_phase_is_refused() -> None:
    climate = weather(whole_years(2001, 2001, "noleap"), (1, 1))
    with pytest.raises(InputError, match="phase flowering, which is not one of season"):
        season_indices(
            climate,
            layer(climate, 100),
            layer(climate, 250),
            no_reason(climate),
            definitions("nights"),
            {},
        )


def test_tas_itself_is_taken_where_there_is_one() -> None:
    climate = weather(whole_years(2001, 2001, "noleap"), (1, 1))
    climate["tas"] = climate["tasmin"] * 0 + 19
    found = indices(climate, 100, 250, "warmth", "warm_days")
    assert float(found["warmth"].squeeze()) == 19
    assert float(found["warm_days"].squeeze()) == 151
