"""Trends of regional yields depend on nothing but the region."""

from __future__ import annotations

import numpy as np
import pandas as pd
from stook.trend.regions import regional_trends, regional_yields
from stook.trend.series import TrendOptions


def test_a_region_alone_has_the_same_bits() -> None:
    random = np.random.default_rng(3)
    rows = [
        (f"region {k}", "rainfed", year, 0, 5000 * (1 + 0.1 * random.standard_normal()), 1000.0 + k)
        for k in range(9)
        for year in range(1981, 2021)
    ]
    names = ["region", "system", "year", "draw", "production_t", "area_ha"]
    totals = pd.DataFrame(rows, columns=names)
    options = TrendOptions(seed=1, count=99, minimum_years=20)

    def trends(some: pd.DataFrame) -> pd.DataFrame:
        periods = {"all": (1981, 2020)}
        return regional_trends(regional_yields(some), "maize", periods, (1981, 2010), options)

    together = trends(totals)
    for k, region in enumerate(together["region"]):
        alone = trends(totals[totals["region"] == region])
        expected = together.iloc[[k]].reset_index(drop=True)
        pd.testing.assert_frame_equal(alone, expected, check_exact=True)
