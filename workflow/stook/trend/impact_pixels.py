"""Maps of the observed impact: every pixel of one crop and water system."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import xarray as xr

from stook.grids.missing import Reason, reason_attributes
from stook.regions.totals import SystemGrids
from stook.trend.detrend import impact_series
from stook.trend.discovery import UNKNOWN, rate_for_level, significant_in_families
from stook.trend.impact import JointYears, Setting, blocks
from stook.trend.impact_kernels import impact_percent, ratio_trends
from stook.trend.impact_table import spread
from stook.trend.periods import is_covered
from stook.trend.pixels import TEST_WORDS, Domain
from stook.trend.series import TrendOptions, series_trends

_SPREAD = ("impact", "impact_p05", "impact_p50", "impact_p95", "share_decrease")


def impact_maps(
    grids: SystemGrids,
    setting: Setting,
    domain: Domain,
    periods: Mapping[str, tuple[int, int]],
) -> xr.Dataset:
    """Return the observed impact at every pixel of a system.

    Parameters
    ----------
    grids
        Of ``observed``, lazy; read in bands of rows.
    setting
        Response, coefficients and options.
    domain
        The crop's pixels.
    periods
        First and last year by name; one that the series does not cover has no impact.

    Returns
    -------
    Dataset
        Dimensions (period, lat, lon): impact and its spread over the draws, per cent of the yield
        under detrended weather; p-values, lag-1 correlation, significance among the pixels of a
        region, years, reason.
    """
    shape = (len(periods), *domain.there.shape)
    options = setting.options
    names = (*_SPREAD, *(f"p_{test}" for test in options.tests), "lag1")
    arrays = {name: np.full(shape, np.nan) for name in names}
    arrays["years"] = np.zeros(shape, dtype=np.int16)
    for number, ends in enumerate(periods.values()):
        if is_covered(ends, grids.season["year"].values):
            _fill({name: array[number] for name, array in arrays.items()}, grids, setting, ends)
    family = np.where(domain.there, domain.region, UNKNOWN).ravel()
    p = arrays[f"p_{options.method}"].reshape(len(periods), -1)
    marks = [significant_in_families(row, family, options.level) for row in p]
    arrays["significant"] = np.stack(marks).reshape(shape)
    given = grids.yields["reason"].values
    why = np.where(domain.there, given, domain.reason)
    short = np.isnan(arrays["impact"]) & (why == int(Reason.VALID))
    arrays["reason"] = np.where(short, int(Reason.TOO_FEW_VALUES), why).astype(np.int8)
    attributes = _attributes(options)
    coordinates = {"period": ("period", np.array(list(periods), dtype=object))}
    dims = ("period", "lat", "lon")
    return xr.Dataset(
        {name: (dims, arrays[name], attributes[name]) for name in attributes}, coordinates
    )


def _fill(
    maps: Mapping[str, np.ndarray], grids: SystemGrids, setting: Setting, ends: tuple[int, int]
) -> None:
    """Fill the maps (lat, lon) of one period."""
    axis = JointYears.of(grids.season, setting, ends)
    years = axis.years[axis.inside]
    span = float(ends[1] - ends[0])
    width = grids.season.sizes["lon"]
    for block in blocks(grids, setting, axis, ends, draws=len(setting.coefficients)):
        enough = block.weather.enough
        actual, detrended = block.yields(setting, axis, slice(None))
        slopes = ratio_trends(actual, detrended, years.astype(np.float64))
        impacts = impact_percent(slopes.ravel(), span).reshape(slopes.shape)
        impacts[:, ~enough] = np.nan
        carried = impact_series(setting.response, setting.coefficients[0], block.weather)
        trends, _ = series_trends(carried, years, setting.options)
        row, column = np.divmod(block.used, width)
        place = (row + block.rows.start, column)
        found = spread(impacts)
        for name in _SPREAD:
            maps[name][place] = found[name]
        known = np.isfinite(impacts[0])
        for test, values in trends.p.items():
            maps[f"p_{test}"][place] = np.where(known, values, np.nan)
        maps["lag1"][place] = np.where(known, trends.lag1, np.nan)
        maps["years"][place] = np.where(known, trends.years, 0)


def _attributes(options: TrendOptions) -> dict[str, dict[str, object]]:
    what = "change of yield by the trends of the weather over the period"
    base = "of the yield under detrended weather"
    result: dict[str, dict[str, object]] = {
        "impact": {"long_name": f"{what}, {base}, central coefficients", "units": "percent"}
    }
    for percentile in (5, 50, 95):
        result[f"impact_p{percentile:02d}"] = {
            "long_name": f"{what}, {base}, percentile {percentile} of the coefficient draws",
            "units": "percent",
        }
    result["share_decrease"] = {
        "long_name": "share of the coefficient draws with a loss",
        "units": "1",
    }
    for test in options.tests:
        result[f"p_{test}"] = {
            "long_name": f"p-value of the {what} against {TEST_WORDS[test]}, two-sided",
            "units": "1",
            "randomisations": np.int32(options.count),
        }
    rate = rate_for_level(options.level)
    return result | {
        "lag1": {
            "long_name": "bias-corrected lag-1 correlation of the series that carries the impact",
            "units": "1",
        },
        "significant": {
            "long_name": f"{what} is significant among the pixels of its region, "
            f"{TEST_WORDS[options.method]}, false discovery rate {rate:g}",
            "flag_values": np.array([UNKNOWN, 0, 1], dtype=np.int8),
            "flag_meanings": "unknown not_significant significant",
            "false_discovery_rate": rate,
        },
        "years": {"long_name": "years used", "units": "1"},
        "reason": reason_attributes() | {"long_name": "reason why an impact is missing"},
    }
