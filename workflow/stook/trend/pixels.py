"""Trend maps: the trends of every pixel of a crop, labelled, from series read in bands of rows."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
import xarray as xr

from stook.grids.missing import Reason, reason_attributes
from stook.trend.discovery import UNKNOWN, rate_for_level, significant_in_families
from stook.trend.distribution import AREA_UNIT_HA, Histogram, distribution_table, whole_areas
from stook.trend.distribution import COLUMNS as DISTRIBUTION_COLUMNS
from stook.trend.field import COLUMNS as FIELD_COLUMNS
from stook.trend.field import Field
from stook.trend.periods import is_covered
from stook.trend.series import RandomTrends, SeriesTrends, TrendOptions, series_trends

YEARS_PER_DECADE = 10.0

_BYTES_PER_RANDOM = 40  # of one series and randomisation, temporary arrays included


@dataclass(frozen=True)
class Quantity:
    """What the trend is of.

    Attributes
    ----------
    name
        Name of the variable, such as ``yield`` or an index.
    description
        In words.
    unit
        UDUNITS unit of the values.
    """

    name: str
    description: str
    unit: str

    @property
    def trend_unit(self) -> str:
        """UDUNITS unit of a trend: the quantity's unit per decade."""
        return f"0.1 {self.unit.replace('degC', 'K')} year-1"


@dataclass(frozen=True)
class Domain:
    """The pixels of one crop and water system.

    Attributes
    ----------
    reason
        int8 (lat, lon): 0 where the crop grows.
    area
        Harvested area, ha (lat, lon).
    region
        int (lat, lon): number of the region a pixel is judged in, -1 for none.
    names
        Names of the regions.
    """

    reason: np.ndarray
    area: np.ndarray
    region: np.ndarray
    names: list[str]

    @property
    def there(self) -> np.ndarray:
        """Return where the crop grows, bool (lat, lon)."""
        return self.reason == int(Reason.VALID)


@dataclass(frozen=True)
class MapTrends:
    """The trends of one quantity: grids (period, lat, lon) and tables."""

    grids: xr.Dataset
    distribution: pd.DataFrame
    field: pd.DataFrame


def map_trends(
    series: xr.DataArray,
    reason: np.ndarray,
    quantity: Quantity,
    domain: Domain,
    periods: Mapping[str, tuple[int, int]],
    options: TrendOptions,
    block_mb: float,
) -> MapTrends:
    """Return the trends of one quantity at every pixel of a crop.

    Parameters
    ----------
    series
        float64 (year, lat, lon), lazy or not; read a band of rows at a time.
    reason
        int8 (lat, lon): why the series of a pixel is missing, if it is.
    quantity
        Its name, description and unit.
    domain
        The crop's pixels.
    periods
        First and last year by name; one that the series does not cover has no trends.
    options
        Seed, number of randomisations and the like.
    block_mb
        Size of the largest arrays, MiB.
    """
    years = series["year"].values.astype(np.int64)
    covered = {name: ends for name, ends in periods.items() if is_covered(ends, years)}
    maps = _Grids.empty((len(periods), *domain.there.shape), options.tests)
    numbers = {name: k for k, name in enumerate(periods)}
    parts = {name: _Period.of(years, ends, domain, options) for name, ends in covered.items()}
    for rows, columns, values in _bands(series, domain.there, options, block_mb):
        areas = whole_areas(domain.area[rows, columns])
        for name, part in parts.items():
            trends, random = series_trends(
                values[part.inside], years[part.inside], options, with_random=True
            )
            assert random is not None
            maps.store(numbers[name], rows, columns, trends)
            part.collect(values[part.inside], random, areas, domain.region[rows, columns])
    distributions = [part.distribution(quantity.name, name) for name, part in parts.items()]
    fields = [part.field_table(quantity.name, name, options) for name, part in parts.items()]
    return MapTrends(
        maps.dataset(quantity, domain, reason, list(periods), options),
        join_tables(distributions, DISTRIBUTION_COLUMNS),
        join_tables(fields, FIELD_COLUMNS),
    )


def join_tables(tables: list[pd.DataFrame], columns: list[str]) -> pd.DataFrame:
    """Join tables of the same columns; no table, or only empty ones, give an empty one."""
    filled = [table for table in tables if not table.empty]
    return pd.concat(filled, ignore_index=True) if filled else pd.DataFrame(columns=columns)


@dataclass
class _Period:
    """What is collected over the pixels in one period."""

    inside: np.ndarray
    observed: Histogram
    random: Histogram
    sums: Field

    @classmethod
    def of(
        cls, years: np.ndarray, ends: tuple[int, int], domain: Domain, options: TrendOptions
    ) -> _Period:
        """Return an empty collection of the years between two ends, both included."""
        inside = (years >= ends[0]) & (years <= ends[1])
        sums = Field(domain.names, years[inside], options.count)
        return cls(inside, Histogram(), Histogram(), sums)

    def collect(
        self, values: np.ndarray, random: RandomTrends, areas: np.ndarray, region: np.ndarray
    ) -> None:
        """Add the trends of some pixels."""
        slopes = random.slopes * YEARS_PER_DECADE
        self.observed.add(slopes[:1], areas)
        self.random.add(slopes[1:], areas)
        self.sums.add(values, random, areas, region)

    def distribution(self, quantity: str, period: str) -> pd.DataFrame:
        """Return the distribution of the pixels' trends and of the randomised ones."""
        return distribution_table(quantity, period, self.observed, self.random)

    def field_table(self, quantity: str, period: str, options: TrendOptions) -> pd.DataFrame:
        """Return the significance of the field by region."""
        return self.sums.table(quantity, period, AREA_UNIT_HA, YEARS_PER_DECADE, options)


def _bands(
    series: xr.DataArray, there: np.ndarray, options: TrendOptions, block_mb: float
) -> Iterator[tuple[np.ndarray, np.ndarray, np.ndarray]]:
    """Yield rows, columns and values (year, pixel) of the crop's pixels, in row-major order."""
    most = max(1, int(block_mb * 2**20 / (_BYTES_PER_RANDOM * (options.count + 1))))
    height = max(1, int(block_mb * 2**20 / (8 * series.sizes["year"] * series.sizes["lon"])))
    for top in range(0, there.shape[0], height):
        band = slice(top, top + height)
        rows, columns = np.nonzero(there[band])
        if rows.size == 0:
            continue
        values = series.isel(lat=band).transpose("year", "lat", "lon").values
        for first in range(0, rows.size, most):
            part = slice(first, first + most)
            block = values[:, rows[part], columns[part]].astype(np.float64)
            yield rows[part] + top, columns[part], block


@dataclass
class _Grids:
    """Arrays (period, lat, lon) that fill up band by band; slopes per decade."""

    years: np.ndarray
    values: dict[str, np.ndarray]

    @classmethod
    def empty(cls, shape: tuple[int, ...], tests: tuple[str, ...]) -> _Grids:
        """Return arrays without a value."""
        names = ("slope", "theil_sen", "lag1", *(f"p_{test}" for test in tests))
        return cls(np.zeros(shape, np.int16), {name: np.full(shape, np.nan) for name in names})

    def store(self, k: int, rows: np.ndarray, columns: np.ndarray, trends: SeriesTrends) -> None:
        """Put the trends of some pixels in period `k`."""
        self.years[k, rows, columns] = trends.years
        found = {
            "slope": YEARS_PER_DECADE * trends.slope,
            "theil_sen": YEARS_PER_DECADE * trends.theil_sen,
            "lag1": trends.lag1,
        } | {f"p_{test}": p for test, p in trends.p.items()}
        for name, values in found.items():
            self.values[name][k, rows, columns] = values

    def dataset(
        self,
        quantity: Quantity,
        domain: Domain,
        reason: np.ndarray,
        periods: list[str],
        options: TrendOptions,
    ) -> xr.Dataset:
        """Return the labelled grids, with the false discovery rate applied in each region."""
        family = np.where(domain.there, domain.region, -1).ravel()
        p = self.values[f"p_{options.method}"].reshape(len(periods), -1)
        significant = np.stack([significant_in_families(row, family, options.level) for row in p])
        short = np.isnan(self.values["slope"]) & domain.there & (reason == int(Reason.VALID))
        why = np.where(domain.there, reason, domain.reason)
        reasons = np.where(short, int(Reason.TOO_FEW_VALUES), why).astype(np.int8)
        arrays = self.values | {
            "significant": significant.reshape(self.years.shape),
            "years": self.years,
            "reason": reasons,
        }
        attributes = _attributes(quantity, options)
        dims = ("period", "lat", "lon")
        return xr.Dataset(
            {
                f"{name}_{quantity.name}": (dims, arrays[name], attributes[name])
                for name in attributes
            },
            {"period": ("period", np.array(periods, dtype=object), {"long_name": "period"})},
        )


TEST_WORDS = {
    "ar1": "AR(1) surrogates",
    "shuffle": "shuffled years",
    "blocks": "moving blocks",
    "phases": "random Fourier phases",
}


def _attributes(quantity: Quantity, options: TrendOptions) -> dict[str, dict[str, object]]:
    what, unit = quantity.description, quantity.trend_unit
    rate = rate_for_level(options.level)
    p_values: dict[str, dict[str, object]] = {
        f"p_{test}": {
            "long_name": f"p-value of the trend of {what} against {TEST_WORDS[test]}, two-sided",
            "units": "1",
            "randomisations": np.int32(options.count),
        }
        for test in options.tests
    }
    p_values["p_shuffle"]["comment"] = "right for independent years only: see the lag-1 correlation"
    return {
        "slope": {"long_name": f"least-squares trend of {what}, per decade", "units": unit},
        "theil_sen": {"long_name": f"Theil-Sen trend of {what}, per decade", "units": unit},
        **p_values,
        "lag1": {
            "long_name": f"bias-corrected lag-1 correlation of detrended {what}",
            "units": "1",
        },
        "significant": {
            "long_name": f"trend of {what} is significant among the pixels of its region, "
            f"{TEST_WORDS[options.method]}, false discovery rate {rate:g}",
            "flag_values": np.array([UNKNOWN, 0, 1], dtype=np.int8),
            "flag_meanings": "unknown not_significant significant",
            "false_discovery_rate": rate,
        },
        "years": {"long_name": f"years of {what} in the trend", "units": "1"},
        "reason": reason_attributes() | {"long_name": f"reason why a trend of {what} is missing"},
    }
