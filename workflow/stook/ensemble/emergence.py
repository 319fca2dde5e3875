"""Year in which a regional signal leaves the variability it comes from.

Signal: the smooth path of the central estimate against its baseline mean. Noise: the standard
deviation of single years about that path. Emergence at a ratio k: the first year after the
baseline from which the signal stays beyond k times the noise, on one side, to the end of the
simulation, at least `LASTING` years (after Hawkins & Sutton 2012, Time of emergence of climate
signals, Geophys. Res. Lett. 39, L01702, who take k = 1 and 2; the staying is a choice of ours).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numba import njit

from stook.ensemble.kernels import percentiles
from stook.ensemble.series import Models
from stook.ensemble.summary import RunSummary, period_weights, stacked_rows

RATIOS = (1.0, 2.0)
"""Signal to noise."""

LASTING = 10
"""Years a signal must stay (own choice, no source)."""

_SHARES = np.array([0.17, 0.50, 0.83])
_NEVER = 9999.0

EMERGENCE = {
    **dict.fromkeys(("crop", "system", "region", "scenario"), "str"),
    "ratio": "float64",
    "simulations": "int64",
    **dict.fromkeys(("share_emerged", "share_decrease", "year_p17", "year_p50"), "float64"),
    **dict.fromkeys(("year_p83", "last_year", "noise"), "float64"),
}
"""Columns of the emergence table.

`share_emerged` is the weighted share of simulations whose signal emerges, `share_decrease` that
of those that emerge downwards; a percentile of the year is NaN where that share of simulations
has not emerged by `last_year`. `noise` in per cent of the baseline mean.
"""


@njit(cache=True, nogil=True)
def emergence_years(
    signal: np.ndarray, noise: np.ndarray, years: np.ndarray, after: int, ratio: float
) -> np.ndarray:
    """Return years of emergence, negative for a decrease (kernel): (series, year) -> (series).

    Parameters
    ----------
    signal
        NaN is missing.
    noise
        Same unit, shape (series); NaN gives NaN.
    after
        Last year that cannot be one of emergence.

    Returns
    -------
    ndarray
        float64; 0 of a signal that does not emerge, NaN of none.
    """
    result = np.full(signal.shape[0], np.nan)
    for series in range(signal.shape[0]):
        last = years.size - 1
        while last >= 0 and np.isnan(signal[series, last]):
            last -= 1
        if last < 0 or np.isnan(noise[series]):
            continue
        sign = 1.0 if signal[series, last] > 0 else -1.0
        first = last + 1
        for year in range(last, -1, -1):
            if not sign * signal[series, year] > ratio * noise[series] or years[year] <= after:
                break
            first = year
        found = first <= last and years[last] - years[first] + 1 >= LASTING
        result[series] = sign * years[first] if found else 0.0
    return result


def emergence_table(runs: Sequence[RunSummary], models: Models, after: int) -> pd.DataFrame:
    """Return the years of emergence of one scenario, crop and system, columns `EMERGENCE`.

    Parameters
    ----------
    after
        Last year of the baseline.
    """
    first = runs[0]
    noise = np.stack([run.deviation for run in runs], axis=1)
    weights = period_weights(np.isfinite(noise), models)
    last = max(int(run.years[-1]) for run in runs)
    rows: list[dict[str, object]] = []
    for ratio in RATIOS:
        found = np.stack(
            [emergence_years(r.signal, r.deviation, r.years, after, ratio) for r in runs], axis=1
        )
        for region, name in first.grown():
            own, years = weights[region], found[region]
            if not own.any():
                continue
            known = own > 0
            ranked = np.where(np.nan_to_num(years) == 0, _NEVER, np.abs(years))
            spread = percentiles(ranked, own, _SHARES)
            spread = np.where(spread > last, np.nan, spread)
            rows.append(
                {
                    "crop": first.crop,
                    "system": first.system,
                    "region": name,
                    "scenario": first.simulation.scenario,
                    "ratio": ratio,
                    "simulations": int(known.sum()),
                    "share_emerged": _share(own, known & (np.nan_to_num(years) != 0)),
                    "share_decrease": _share(own, known & (np.nan_to_num(years) < 0)),
                    "year_p17": spread[0],
                    "year_p50": spread[1],
                    "year_p83": spread[2],
                    "last_year": last,
                    "noise": float((own[known] * noise[region, known]).sum()),
                }
            )
    return stacked_rows(rows, EMERGENCE)


def _share(weights: np.ndarray, chosen: np.ndarray) -> float:
    return min(float(weights[chosen].sum()), 1.0)
