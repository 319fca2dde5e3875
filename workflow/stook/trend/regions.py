"""Trends of regional yields, as a table."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from stook.constants import CENTRAL_DRAW
from stook.trend.breakpoint import find_break
from stook.trend.detrend import mean_of_years
from stook.trend.periods import is_covered
from stook.trend.pixels import YEARS_PER_DECADE
from stook.trend.series import TrendOptions, draw, series_trends
from stook.yields.technology import TECHNOLOGY

COLUMNS = [
    "crop",
    "system",
    "region",
    "period",
    "years",
    "slope",
    "slope_percent",
    "theil_sen",
    "lag1",
    "p_ar1",
    "p_shuffle",
    "break_year",
    "slope_before",
    "slope_after",
    "p_break",
]


def regional_yields(totals: pd.DataFrame) -> pd.DataFrame:
    """Return central yields, t/ha, at the technology of the baseline.

    Index year, columns (region, system) in order of appearance.

    Parameters
    ----------
    totals
        Columns region, system, year, draw, production_t, area_ha.
    """
    central = totals[totals["draw"] == CENTRAL_DRAW]
    grown = central[central["area_ha"] > 0]
    production = grown["production_t"] / grown.get(TECHNOLOGY, 1.0)
    values = grown.assign(value=production / grown["area_ha"])
    table = values.pivot_table(
        index="year", columns=["region", "system"], values="value", sort=False, dropna=False
    )
    order = pd.MultiIndex.from_frame(values[["region", "system"]].drop_duplicates())
    return table.reindex(columns=order).sort_index()


def regional_trends(
    yields: pd.DataFrame,
    crop: str,
    periods: Mapping[str, tuple[int, int]],
    baseline: tuple[int, int],
    options: TrendOptions,
) -> pd.DataFrame:
    """Return the trends of regional yields, one row per region, system and period.

    Parameters
    ----------
    yields
        t/ha, from `regional_yields`.
    crop
        Name of the crop.
    periods
        First and last year by name; one that the series do not cover gives no rows.
    baseline
        Years whose mean yield `slope_percent` refers to.
    options
        Seed, number of randomisations and the like.

    Returns
    -------
    DataFrame
        Columns `COLUMNS`: slope and theil_sen in t/ha per decade, slope_percent in percent of the
        baseline mean per decade; the best single change of slope (`find_break`), its year,
        slopes and p-value; NaN where there are too few years. The p-values of a further test of
        the options stand last.
    """
    years = yields.index.to_numpy().astype(np.int64)
    inside = (years >= baseline[0]) & (years <= baseline[1])
    base = mean_of_years(yields.to_numpy(dtype=np.float64)[inside])
    parts = []
    for name, (first, last) in periods.items():
        if yields.empty or not is_covered((first, last), years):
            continue
        inside = (years >= first) & (years <= last)
        values = yields.to_numpy(dtype=np.float64)[inside]
        trends, _ = series_trends(values, years[inside], options)
        slope = YEARS_PER_DECADE * trends.slope
        part = yields.columns.to_frame(index=False).assign(
            crop=crop,
            period=name,
            years=trends.years,
            slope=slope,
            slope_percent=np.where(base > 0, 100.0 * slope / np.where(base > 0, base, 1), np.nan),
            theil_sen=YEARS_PER_DECADE * trends.theil_sen,
            lag1=trends.lag1,
            **{f"p_{test}": p for test, p in trends.p.items()},
            **_breaks(values, years[inside], options),
        )
        parts.append(part[[*COLUMNS, *(c for c in part if c not in COLUMNS)]])
    return pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=COLUMNS)


def _breaks(values: np.ndarray, years: np.ndarray, options: TrendOptions) -> dict[str, np.ndarray]:
    """Return the change of slope of every series (n, s), slopes per decade."""
    names = ("break_year", "slope_before", "slope_after", "p_break")
    result = {name: np.full(values.shape[1], np.nan) for name in names}
    for i, series in enumerate(values.T):
        there = np.isfinite(series)
        drawn = draw(years[there], options)
        found = find_break(series[there], drawn) if drawn is not None else None
        if found is not None:
            slopes = YEARS_PER_DECADE * found.before, YEARS_PER_DECADE * found.after
            for name, value in zip(names, (found.year, *slopes, found.p), strict=True):
                result[name][i] = value
    return result
