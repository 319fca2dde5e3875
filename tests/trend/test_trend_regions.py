"""Trends of regional yields depend on nothing but the region."""

from __future__ import annotations

import numpy as np
import pandas as pd
from stook.trend.regions import regional_trends
from stook.trend.series import TrendOptions


def test_a_region_alone_has_the_same_bits() -> None:
    years = np.arange(1981, 2021)
    random = np.random.default_rng(3)
    columns = pd.MultiIndex.from_product([[f"region {k}" for k in range(9)], ["rainfed"]])
    values = 5 + random.standard_normal((40, 9))
    yields = pd.DataFrame(values, index=pd.Index(years, name="year"), columns=columns)
    yields.columns.names = ["region", "system"]
    options = TrendOptions(seed=1, count=99, minimum_years=20)
    periods = {"all": (1981, 2020)}
    together = regional_trends(yields, "maize", periods, (1981, 2010), options)
    for k in range(9):
        alone = regional_trends(yields.iloc[:, [k]], "maize", periods, (1981, 2010), options)
        expected = together.iloc[[k]].reset_index(drop=True)
        pd.testing.assert_frame_equal(alone, expected, check_exact=True)
