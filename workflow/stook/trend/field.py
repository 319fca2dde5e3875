"""Field significance: the area with a significant trend against that of randomised fields."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from stook.trend.kernels import area_sums
from stook.trend.randomise import probability
from stook.trend.series import RandomTrends, TrendOptions, series_trends

EVERYWHERE = "all pixels"
"""Name of the row over all pixels of the crop in the run."""

COLUMNS = [
    "quantity",
    "period",
    "region",
    "pixels",
    "area_ha",
    "mean_trend",
    "mean_trend_lag1",
    "mean_trend_p",
    "share_significant",
    "share_random_mean",
    "share_random_p95",
    "share_p",
]


@dataclass
class Field:
    """Sums over the pixels of each region and over all, collected in the order of the pixels.

    Attributes
    ----------
    regions
        Names of the regions; one more row, the last, is over all pixels.
    years
        int (n,): years of the period.
    count
        Number of randomisations, m.
    """

    regions: list[str]
    years: np.ndarray
    count: int
    pixels: np.ndarray = field(init=False)
    area: np.ndarray = field(init=False)
    significant: np.ndarray = field(init=False)
    values: np.ndarray = field(init=False)

    def __post_init__(self) -> None:
        rows = len(self.regions) + 1
        self.pixels = np.zeros(rows, dtype=np.int64)
        self.area = np.zeros(rows)
        self.significant = np.zeros((rows, self.count + 1))
        self.values = np.zeros((rows, len(self.years)))

    def add(
        self, values: np.ndarray, random: RandomTrends, areas: np.ndarray, region: np.ndarray
    ) -> None:
        """Add pixels.

        Parameters
        ----------
        values
            float64 (n, pixels).
        random
            Their randomised trends; a pixel without a trend is left out.
        areas
            int64 (pixels,), whole units of area.
        region
            int (pixels,): number in `regions`, -1 for none.
        """
        there = np.isfinite(random.slopes[0])
        areas = areas[there].astype(np.float64)
        judged = random.significant[:, there].astype(np.float64)
        within = np.ascontiguousarray(values[:, there])
        for number in [*np.unique(region[there & (region >= 0)]), len(self.regions)]:
            everywhere = number == len(self.regions)
            weights = areas if everywhere else np.where(region[there] == number, areas, 0.0)
            inside = weights > 0
            self.pixels[number] += np.count_nonzero(inside)
            self.area[number] += weights.sum()
            # Whole numbers: exact in any order.
            self.significant[number] += judged @ weights
            area_sums(within[:, inside], weights[inside], self.values[number])

    def table(
        self, quantity: str, period: str, unit_ha: float, scale: float, options: TrendOptions
    ) -> pd.DataFrame:
        """Return one row a region with pixels, and one over all; columns `COLUMNS`.

        Parameters
        ----------
        quantity, period
            Names.
        unit_ha
            Size of the unit of area, ha.
        scale
            Years a trend is given for.
        options
            Seed, number of randomisations and the like.
        """
        rows = []
        for number, name in enumerate([*self.regions, EVERYWHERE]):
            if self.area[number] == 0:
                continue
            series = self.values[number] / self.area[number]
            mean, _ = series_trends(series[:, None], self.years, options)
            shares = self.significant[number] / self.area[number]
            as_large = np.count_nonzero(self.significant[number, 1:] >= self.significant[number, 0])
            rows.append(
                {
                    "quantity": quantity,
                    "period": period,
                    "region": name,
                    "pixels": self.pixels[number],
                    "area_ha": self.area[number] * unit_ha,
                    "mean_trend": scale * mean.slope[0],
                    "mean_trend_lag1": mean.lag1[0],
                    "mean_trend_p": mean.p[options.method][0],
                    "share_significant": shares[0],
                    "share_random_mean": shares[1:].mean(),
                    "share_random_p95": np.percentile(shares[1:], 95),
                    "share_p": probability(int(as_large), self.count),
                }
            )
        return pd.DataFrame(rows, columns=COLUMNS)
