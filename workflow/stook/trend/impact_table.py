"""The observed impact by region and system: its size, its spread over draws, and chance."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from stook.constants import CENTRAL_DRAW
from stook.regions.totals import COMBINED
from stook.trend.detrend import mean_of_years
from stook.trend.impact import SystemImpact
from stook.trend.impact_kernels import impact_percent, ratio_trends
from stook.trend.series import TrendOptions, draw, series_trends

RECENT_YEARS = 10
"""Last years of a period whose mean production is given."""

PERCENTILES = (5, 17, 50, 83, 95)

COLUMNS = [
    *("crop", "system", "region", "period", "first_year", "last_year", "years", "impact"),
    *(f"impact_p{percentile:02d}" for percentile in PERCENTILES),
    *("share_decrease", "chance_p05", "chance_p95", "lag1", "p_ar1", "p_shuffle"),
    *("recent_production_t", "recent_detrended_t", "recent_impact", "area_ha", "missing_area_ha"),
]
"""Impacts and chance in per cent of the yield under detrended weather."""


def impact_table(
    crop: str, systems: Mapping[str, SystemImpact], period: str, options: TrendOptions
) -> pd.DataFrame:
    """Return the impact by region and system, one row each; columns `COLUMNS`.

    Parameters
    ----------
    crop
        Name of the crop.
    systems
        By name; of more than one, the combination `COMBINED` follows.
    period
        Name of the period.
    options
        Seed, number of randomisations and the like.

    Returns
    -------
    DataFrame
        A region without area has no row. ``impact`` is that of the central coefficients, its
        percentiles are over the other draws, NaN without draws; ``chance_*`` is what the
        randomised trends amount to. The p-values of a further test of the options stand last.
    """
    parts = dict(systems)
    if len(parts) > 1:
        first, *others = parts.values()
        for other in others:
            first = first + other
        parts[COMBINED] = first
    tables = [_rows(one, options).assign(system=name) for name, one in parts.items()]
    table = pd.concat(tables, ignore_index=True).assign(crop=crop, period=period)
    return table[[*COLUMNS, *(column for column in table if column not in COLUMNS)]]


def _rows(sums: SystemImpact, options: TrendOptions) -> pd.DataFrame:
    span = float(sums.ends[1] - sums.ends[0])
    positions = sums.years.astype(np.float64)
    slopes = ratio_trends(sums.actual, sums.detrended, positions)
    weight = sums.weight[:, None]
    series = np.where(weight > 0, sums.series / np.where(weight > 0, weight, 1.0), np.nan)
    rows = []
    for number, region in enumerate(sums.regions):
        if sums.area[number] <= 0:
            continue
        there = np.isfinite(sums.actual[CENTRAL_DRAW, number])
        enough = draw(sums.years[there], options) is not None
        found = impact_percent(slopes[:, number], span) if enough else np.full(len(slopes), np.nan)
        rows.append(
            {
                "region": region,
                "first_year": sums.ends[0],
                "last_year": sums.ends[1],
                "years": int(there.sum()) if enough else 0,
                **spread(found[:, None]).iloc[0],
                **_chance(series[number], sums.years, span, options),
                **_recent(sums, number),
                "area_ha": sums.area[number],
                "missing_area_ha": max(sums.missing_area[number], 0.0),
            }
        )
    return pd.DataFrame(rows, columns=None if rows else COLUMNS)


def spread(impacts: np.ndarray) -> pd.DataFrame:
    """Return the central impact, percentiles over the draws and the share that is a loss.

    Parameters
    ----------
    impacts
        Per cent, shape (draw, s), the central estimate first; a column in which one is missing
        has no spread.
    """
    central, draws = impacts[0], impacts[1:]
    columns = {"impact": central}
    known = np.isfinite(draws).all(axis=0) if len(draws) else np.zeros(central.shape, dtype=bool)
    values = np.where(known, draws, 0.0) if len(draws) else np.zeros((1, *central.shape))
    for percentile in PERCENTILES:
        found = np.percentile(values, percentile, axis=0)
        columns[f"impact_p{percentile:02d}"] = np.where(known, found, np.nan)
    columns["share_decrease"] = np.where(known, (values < 0).mean(axis=0), np.nan)
    return pd.DataFrame(columns)


def _chance(
    series: np.ndarray, years: np.ndarray, span: float, options: TrendOptions
) -> dict[str, float]:
    """Test the impact series of one region against its randomised trends."""
    trends, random = series_trends(series[:, None], years, options, with_random=True)
    assert random is not None
    chance = impact_percent(np.ascontiguousarray(random.slopes[1:, 0]), span)
    low, high = np.percentile(chance, (5, 95))
    return {
        "chance_p05": float(low),
        "chance_p95": float(high),
        "lag1": float(trends.lag1[0]),
        **{f"p_{test}": float(p[0]) for test, p in trends.p.items()},
    }


def _recent(sums: SystemImpact, number: int) -> dict[str, float]:
    """Return mean production of the last years under observed and detrended weather, t."""
    last = sums.years > sums.ends[1] - RECENT_YEARS
    both = [grid[CENTRAL_DRAW, number, last][:, None] for grid in (sums.actual, sums.detrended)]
    actual, detrended = (float(mean_of_years(one)[0]) for one in both)
    return {
        "recent_production_t": actual,
        "recent_detrended_t": detrended,
        "recent_impact": 100.0 * (actual / detrended - 1.0) if detrended > 0 else np.nan,
    }
