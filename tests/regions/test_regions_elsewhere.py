"""A run of some regions knows which cells belong mostly to a region it has not been asked for."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from region_inputs import POLYGONS, write_assessment
from stook.assessment.load import load_assessment
from stook.grids.analysis import AnalysisGrid
from stook.prepare.layers import SystemLayers, crop_layers
from stook.regions.overlay import overlay_dataset


@pytest.mark.parametrize("region", list(POLYGONS))
def test_main_region_is_that_of_the_full_run(tmp_path: Path, region: str) -> None:
    path = write_assessment(tmp_path)
    whole = overlay_dataset(load_assessment(path)).load()
    own = overlay_dataset(load_assessment(path, regions=[region])).load()
    assert "mostly_elsewhere" not in whole
    coverage = whole["coverage"].sel(lat=own["lat"], lon=own["lon"])
    names = whole["region"].values
    main = np.where(coverage.max("region") > 0, names[coverage.argmax("region")], "")
    own_main = np.where(own["mostly_elsewhere"] == 1, "", region)
    own_main = np.where(own["coverage"].values[0] > 0, own_main, "")
    np.testing.assert_array_equal(own_main, np.where(main == region, region, ""))


@pytest.mark.parametrize("region", list(POLYGONS))
def test_layers_name_the_main_region_of_the_full_run(tmp_path: Path, region: str) -> None:
    path = write_assessment(tmp_path)
    names, mains, grids = [], [], []
    for regions in ([], [region]):
        overlay = overlay_dataset(load_assessment(path, regions=regions)).load()
        grid = AnalysisGrid.from_dataset(overlay)
        ones = np.ones(grid.shape)
        system = SystemLayers(area=ones, planting=ones, maturity=ones, baseline_yield=ones)
        layers = crop_layers({"maize_rainfed": system}, grid, overlay, bool(regions))
        names.append(np.append(layers["region"].values.astype(object), ""))
        mains.append(layers["main_region"])
        grids.append(grid)
    whole = mains[0].sel(lat=grids[1].lat, lon=grids[1].lon).values
    expected = np.where(names[0][whole] == region, region, "")
    np.testing.assert_array_equal(names[1][mains[1].values], expected)
    assert (mains[1].values == 0).any()
