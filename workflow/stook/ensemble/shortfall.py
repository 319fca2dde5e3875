"""How often production falls far below what was expected, and how bad the worst year is.

A shortfall is a year at least 25 % (an option; common practice, no source) below the expected
path; see `stook.ensemble.short_years` for the two paths.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from scipy import stats

from stook.ensemble.changes import members_of
from stook.ensemble.kernels import percentiles
from stook.ensemble.series import Models
from stook.ensemble.short_years import REFERENCES
from stook.ensemble.summary import RunSummary, period_weights, stacked_rows

LEVEL = 0.90
"""Coverage of the intervals."""

_ENDS = np.array([0.05, 0.95])

SHORTFALL = {
    **dict.fromkeys(("crop", "system", "region", "scenario", "period", "reference"), "str"),
    **dict.fromkeys(("simulations", "years"), "int64"),
    **dict.fromkeys(("share", "low", "high"), "float64"),
    **dict.fromkeys(("return_years", "return_low", "return_high"), "float64"),
    **dict.fromkeys(("member_mean", "member_p05", "member_p95"), "float64"),
    **dict.fromkeys(("worst_t", "worst_mean_t", "worst_percent"), "float64"),
}
"""Columns of the shortfall table; see docs/risk.md."""


def exact_interval(share: float, years: float, level: float = LEVEL) -> tuple[float, float]:
    """Return the interval of a probability by Clopper & Pearson (1934, Biometrika 26, 404-413).

    Parameters
    ----------
    share
        Share of years with the event.
    years
        Number of years, taken as independent; need not be whole (an effective number).

    Returns
    -------
    low, high
        It holds the true probability in at least `level` of cases.
    """
    if not years > 0 or not np.isfinite(share):
        return np.nan, np.nan
    events, tail = share * years, (1 - level) / 2
    low = 0.0 if events <= 0 else float(stats.beta.ppf(tail, events, years - events + 1))
    high = 1.0 if share >= 1 else float(stats.beta.ppf(1 - tail, events + 1, years - events))
    return low, high


def return_period(share: float) -> float:
    """Return the mean number of years between events, NaN where none was seen."""
    return 1.0 / share if share > 0 else np.nan


def pooled(shares: np.ndarray, years: np.ndarray, weights: np.ndarray) -> tuple[float, float]:
    """Return the weighted share of several simulations, and their effective number of years.

    The effective number is that of one sample with the same sampling variance,
    ``1 / sum(w_i^2 / n_i)``: all years if the weights follow the years.
    """
    used = weights > 0
    if not used.any():
        return np.nan, 0.0
    share, inverse = 0.0, 0.0
    for one, count, weight in zip(shares[used], years[used], weights[used], strict=True):
        share += weight * one
        inverse += weight * weight / count
    return min(float(share), 1.0), float(1.0 / inverse)


def shortfall_table(runs: Sequence[RunSummary], models: Models) -> pd.DataFrame:
    """Return the shortfalls of one scenario, crop and system, columns `SHORTFALL`."""
    first = runs[0]
    names = {"crop": first.crop, "system": first.system}
    names["scenario"] = first.simulation.scenario
    rows: list[dict[str, object]] = []
    for period in dict.fromkeys(name for run in runs for name in run.periods):
        have = [number for number, run in enumerate(runs) if period in run.periods]
        chosen = [(runs[number], runs[number].periods.index(period)) for number in have]
        own = Models(models.number[have], models.weight)
        years = np.stack([run.counted[:, place] for run, place in chosen], axis=1)
        short = np.stack([run.short[:, place] for run, place in chosen], axis=1)
        base = np.stack([run.production[:, 0, 0] for run, _ in chosen], axis=1)
        worst = np.stack([run.worst[:, place] for run, place in chosen], axis=1)
        for number, reference in enumerate(REFERENCES):
            found = short[:, :, number]  # region, run, draw
            weights = period_weights(np.isfinite(found[..., 0]), own)
            for region, name in first.grown():
                if not weights[region].any():
                    continue
                place = {"region": name, "period": period, "reference": reference}
                row = _row(found[region], years[region], weights[region])
                low = _worst(worst[region], base[region], weights[region])
                rows.append({**names, **place, **row, **low})
    return stacked_rows(rows, SHORTFALL)


def _row(short: np.ndarray, years: np.ndarray, weights: np.ndarray) -> dict[str, float]:
    """Return shares and return periods of (run, draw) counts in so many years each."""
    used = weights > 0
    shares = short[used] / years[used, None]
    share, effective = pooled(shares[:, 0], years[used], weights[used])
    low, high = exact_interval(share, effective)
    members = members_of(shares)
    own = np.repeat(weights[used, None] / members.shape[1], members.shape[1], axis=1)
    ends = percentiles(members.ravel(), own.ravel(), _ENDS)
    return {
        "simulations": int(used.sum()),
        "years": int(years[used].sum()),
        "share": share,
        "low": low,
        "high": high,
        "return_years": return_period(share),
        "return_low": return_period(high),
        "return_high": return_period(low),
        "member_mean": min(float((own * members).sum()), 1.0),
        "member_p05": ends[0],
        "member_p95": ends[1],
    }


def _worst(worst: np.ndarray, base: np.ndarray, weights: np.ndarray) -> dict[str, float]:
    """Return the worst year: of all simulations, and the mean of each one's worst."""
    used = weights > 0
    percent = 100.0 * worst[used] / base[used]
    return {
        "worst_t": float(worst[used].min()),
        "worst_mean_t": float((weights[used] * worst[used]).sum()),
        "worst_percent": float((weights[used] * percent).sum()),
    }
