"""Warming levels and years of emergence."""

from __future__ import annotations

from pathlib import Path

import iris_sample_data
import numpy as np
import pandas as pd
import pytest
import xarray as xr
from risk_inputs import YEARS, series, settings, simulation, write_world
from stook.assessment.simulations import simulations
from stook.ensemble.emergence import LASTING, emergence_table, emergence_years
from stook.ensemble.horizons import (
    horizon_names,
    horizons_of,
    level_name,
    level_windows,
    read_global_means,
    warming_window,
)
from stook.ensemble.series import Models
from stook.ensemble.summary import summarise
from stook.errors import AssessmentError, InputError

LONG = np.arange(1850, 2101)


def means(folder: Path, **changed: object) -> Path:
    """Write a table that warms 0.03 K a year from 1950 on."""
    rows = []
    for model in ("ALDER-ESM", "ROWAN-CM", "SEDGE-LR"):
        for scenario, slope in (("moderate", 0.01), ("high", 0.03)):
            warm = 14 + slope * np.clip(LONG - 1950, 0, None)
            frame = pd.DataFrame({"year": LONG, "tas": warm})
            rows.append(frame.assign(model=model, scenario=scenario, realisation="r1"))
    table = pd.concat(rows).assign(**changed)
    table.to_csv(folder / "means.csv", index=False)
    return folder / "means.csv"


def test_window_is_the_first_whose_mean_exceeds_the_level() -> None:
    """0.02 K a year from 1900 on: the mean of y..y+19 is 0.02 (y + 9.5 - 1900)."""
    warm = 0.02 * np.clip(LONG - 1900, 0, None)
    assert warming_window(LONG, warm, 1.5) == (1966, 1985)
    assert warming_window(LONG, warm, 1.511) == (1967, 1986)
    assert warming_window(LONG, warm, 4.0) is None
    assert warming_window(LONG, warm + 273.15, 1.5) == (1966, 1985)


def test_a_window_needs_all_its_years() -> None:
    warm = 0.02 * np.clip(LONG - 1900, 0, None)
    kept = LONG != 1970
    assert warming_window(LONG[kept], warm[kept], 1.5) == (1971, 1990)


def test_windows_of_a_real_model_as_pandas_finds_them() -> None:
    """Mean of a real model's grid (sample data, 1860-2099) against a rolling mean of pandas."""
    path = Path(iris_sample_data.__file__).parent / "sample_data" / "A1B_north_america.nc"
    with xr.open_dataset(path, decode_times=False) as data:
        grid = data["air_temperature"].mean(("latitude", "longitude")).values.astype(float)
    years = np.arange(1860, 1860 + grid.size)
    rolling = pd.Series(grid, years).rolling(20).mean() - grid[years <= 1900].mean()
    for level in (1.0, 2.0, 3.0):
        last = rolling[rolling > level].index[0]
        assert warming_window(years, grid, level) == (last - 19, last)


def test_levels_become_horizons_of_each_simulation(tmp_path: Path) -> None:
    means(tmp_path)
    levels = {"file": "means.csv", "levels": [1.5, 3]}
    assessment = write_world(tmp_path, extra={"ensemble": {"warming_levels": levels}})
    runs = simulations(assessment)
    table = level_windows(assessment, runs)
    high = horizons_of(assessment, table, "ROWAN-CM_high_r1")
    assert (
        list(high)
        == ["2041-2070", "2071-2100", "1.5-degC", "3-degC"]
        == [*horizon_names(assessment)]
    )
    assert high["1.5-degC"] == (1991, 2010)
    assert list(horizons_of(assessment, table, "ROWAN-CM_moderate_r1")) == [
        "2041-2070",
        "2071-2100",
    ]
    assert level_name(2) == "2-degC"


def test_historical_rows_go_before_every_scenario(tmp_path: Path) -> None:
    path = means(tmp_path)
    table = pd.read_csv(path)
    early = table[(table["year"] < 2015) & (table["scenario"] == "high")]
    past = early.assign(scenario="past")
    pd.concat([past, table[table["year"] >= 2015]]).to_csv(path, index=False)
    pattern = "climate/{variable}_{model}_{scenario}_{realisation}.nc"
    extra = {
        "ensemble": {"warming_levels": {"file": "means.csv", "levels": [1.5]}},
        "simulations": {"pattern": pattern, "historical": "past"},
    }
    assessment = write_world(tmp_path, extra=extra)
    windows = level_windows(assessment, simulations(assessment))
    high = windows[windows["scenario"] == "high"]
    assert set(high["first"]) == {1991}


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (lambda t: t.drop(columns="tas"), "lacks the columns tas;"),
        (lambda t: t.assign(tas="warm"), "tas in line 2 is no number"),
        (lambda t: pd.concat([t, t.iloc[:1]]), "has the year 1850 twice"),
        (lambda t: t[t["model"] != "ROWAN-CM"], "no rows for model ROWAN-CM"),
        (lambda t: t[t["year"] > 1880], "20 years of 1850-1900"),
    ],
)
def test_spoilt_tables_are_refused(tmp_path: Path, spoil, message: str) -> None:
    path = means(tmp_path)
    spoil(pd.read_csv(path)).to_csv(path, index=False)
    extra = {"ensemble": {"warming_levels": {"file": "means.csv"}}}
    assessment = write_world(tmp_path, extra=extra)
    with pytest.raises(InputError, match=message):
        level_windows(assessment, simulations(assessment))


def test_missing_table_and_wrong_options_are_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"means\.csv: no such file"):
        read_global_means(tmp_path / "means.csv")
    with pytest.raises(AssessmentError, match="classes must ascend"):
        write_world(tmp_path, extra={"ensemble": {"classes": [5, -5]}})
    with pytest.raises(AssessmentError, match="rye is no crop"):
        write_world(tmp_path, extra={"supply": {"energy": {"rye": {"kcal": 330, "basis": "rye"}}}})


def test_emergence_by_hand() -> None:
    """A fall of 1 a year from 2020 with noise 5 leaves 1 s in 2026 and 2 s in 2031."""
    signal = -np.clip(YEARS - 2020.0, 0, None)[None]
    for ratio, year in ((1.0, 2026), (2.0, 2031)):
        assert emergence_years(signal, np.array([5.0]), YEARS, 2020, ratio)[0] == -year
    assert emergence_years(-signal, np.array([5.0]), YEARS, 2020, 1.0)[0] == 2026
    assert emergence_years(signal, np.array([500.0]), YEARS, 2020, 1.0)[0] == 0
    assert np.isnan(emergence_years(signal, np.array([np.nan]), YEARS, 2020, 1.0)[0])


def test_a_signal_that_comes_back_or_comes_late_has_not_emerged() -> None:
    back = np.where((YEARS > 2030) & (YEARS < 2080), -20.0, 0.0)[None]
    assert emergence_years(back, np.array([5.0]), YEARS, 2020, 1.0)[0] == 0
    late = np.where(YEARS[-1] - YEARS < LASTING - 1, -20.0, 0.0)[None]
    assert emergence_years(late, np.array([5.0]), YEARS, 2020, 1.0)[0] == 0
    lasting = np.where(YEARS[-1] - YEARS < LASTING, -20.0, 0.0)[None]
    assert emergence_years(lasting, np.array([5.0]), YEARS, 2020, 1.0)[0] == -2091


def test_emergence_table_tells_how_many_have_emerged() -> None:
    random = np.random.default_rng(6)
    runs = []
    for number, fall in enumerate((0.5, 0.4, 0.0)):
        course = 1 - fall * np.clip((YEARS - 2000) / 100, 0, None)
        production = 100 * (course + 0.03 * random.standard_normal((1, 1, YEARS.size)))
        runs.append(
            summarise(
                series(production), simulation(f"MODEL-{number}"), "maize", "rainfed", {},
                settings(),
            )
        )  # fmt: skip
    table = emergence_table(runs, Models(np.arange(3), np.ones(3)), 2020).set_index("ratio")
    assert table.loc[2.0, "share_emerged"] == pytest.approx(2 / 3)
    assert table.loc[2.0, "share_decrease"] == pytest.approx(2 / 3)
    assert 2020 < table.loc[2.0, "year_p50"] < 2060
    assert np.isnan(table.loc[2.0, "year_p83"])
    assert table.loc[2.0, "noise"] == pytest.approx(3, abs=0.6)
