"""Distribution of pixel trends over a crop's area, and of the randomised trends."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

HALF = 512
"""Bins either side of zero while values are collected."""

WANTED_BINS = 80
"""Largest number of bins between the 1st and the 99th percentile of a finished table."""

COLUMNS = ["quantity", "period", "kind", "bin_low", "bin_high", "area_share"]

AREA_UNIT_HA = 0.001
"""Areas are counted in whole units of this, so that sums do not depend on their order."""


def whole_areas(area: np.ndarray) -> np.ndarray:
    """Return areas (ha) as int64 counts of `AREA_UNIT_HA`."""
    return np.rint(np.nan_to_num(area) / AREA_UNIT_HA).astype(np.int64)


@dataclass
class Histogram:
    """Area by class of trend, collected in any order; bins are a power of two wide.

    The width doubles whenever a value falls outside; bins of a width nest in those of twice the
    width, so that the result does not depend on the order or on the blocks.
    """

    exponent: int | None = None
    areas: np.ndarray = field(default_factory=lambda: np.zeros(2 * HALF, dtype=np.int64))

    def add(self, values: np.ndarray, areas: np.ndarray) -> None:
        """Add values (..., pixels) with int64 areas (pixels,); NaN is left out."""
        there = np.isfinite(values)
        if not there.any():
            return
        largest = float(np.abs(values[there]).max())
        if largest > 0:
            self.widen(int(np.frexp(largest)[1]) - int(np.log2(HALF)))
        width = 0 if self.exponent is None else self.exponent
        index = np.floor(np.ldexp(values[there], -width)).astype(np.int64) + HALF
        weights = np.broadcast_to(areas, values.shape)[there]
        np.add.at(self.areas, index, weights)

    def widen(self, exponent: int) -> None:
        """Make bins at least ``2**exponent`` wide."""
        if self.exponent is None:
            # Only zeros so far: they lie in the first bin above zero at any width.
            self.exponent = exponent
        while self.exponent < exponent:
            merged = self.areas.reshape(HALF, 2).sum(axis=1)
            self.areas = np.zeros_like(self.areas)
            self.areas[HALF // 2 : HALF // 2 + HALF] = merged
            self.exponent += 1

    def central_bins(self) -> int:
        """Return how many bins lie between the 1st and the 99th percentile of the area."""
        cumulative = np.cumsum(self.areas)
        low, high = np.searchsorted(cumulative, cumulative[-1] * np.array([0.01, 0.99]))
        return int(high - low + 1)


def distribution_table(
    quantity: str, period: str, observed: Histogram, random: Histogram
) -> pd.DataFrame:
    """Return both histograms on the same bins, as shares of area.

    Returns
    -------
    DataFrame
        Columns quantity, period, kind (observed, randomised), bin_low, bin_high (unit of the
        values), area_share (sums to 1 for each kind); no rows if there was no value.
    """
    pair = {"observed": observed, "randomised": random}
    if any(histogram.areas.sum() == 0 for histogram in pair.values()):
        return pd.DataFrame(columns=COLUMNS)
    exponent = max((h.exponent for h in pair.values() if h.exponent is not None), default=0)
    for histogram in pair.values():
        histogram.widen(exponent)
    while max(histogram.central_bins() for histogram in pair.values()) > WANTED_BINS:
        exponent += 1
        for histogram in pair.values():
            histogram.widen(exponent)
    used = np.flatnonzero(observed.areas + random.areas)
    bins = np.arange(used[0], used[-1] + 1)
    parts = [
        pd.DataFrame(
            {
                "quantity": quantity,
                "period": period,
                "kind": kind,
                "bin_low": np.ldexp((bins - HALF).astype(float), exponent),
                "bin_high": np.ldexp((bins - HALF + 1).astype(float), exponent),
                "area_share": histogram.areas[bins] / histogram.areas.sum(),
            }
        )
        for kind, histogram in pair.items()
    ]
    return pd.concat(parts, ignore_index=True)[COLUMNS]
