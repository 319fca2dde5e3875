"""The analysis grid of an assessment."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
import yaml
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.errors import AssessmentError, InputError
from stook.grids.analysis import AnalysisGrid, analysis_grid, tile_count


def assessment_with(
    folder: Path, grid: dict[str, Any], regions: tuple[str, ...] = ()
) -> Assessment:
    system = {
        "area": 1.0, "calendar": {"planting": 1, "maturity": 200}, "baseline_yield": 1.0,
        "response": "response.yaml",
    }  # fmt: skip
    content = {
        "title": "Invented", "name": "invented", "seed": 1, "grid": grid,
        "periods": {"baseline": [2001, 2002]},
        "reference": {"name": "record", "files": {"tas": ["tas.nc"]}},
        "crops": {"grain": {"systems": {"rainfed": system}}},
        "regions": {"file": "regions.gpkg"},
    }  # fmt: skip
    path = folder / "assessment.yaml"
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    return load_assessment(path, regions=regions)


def test_grid_from_axes(tmp_path: Path) -> None:
    axes = {
        "lat": {"first": 10.1, "last": 10.7, "step": 0.1},
        "lon": {"first": -179.75, "last": 179.75, "step": 0.5},
    }
    grid = analysis_grid(assessment_with(tmp_path, axes))
    assert grid.shape == (7, 720)
    assert grid.lat.tolist() == [10.1, 10.2, 10.3, 10.4, 10.5, 10.6, 10.7]
    assert grid.lat_edges.tolist() == [10.05, 10.15, 10.25, 10.35, 10.45, 10.55, 10.65, 10.75]
    assert grid.lon_edges[[0, -1]].tolist() == [-180.0, 180.0]


def test_grid_like_a_file(tmp_path: Path) -> None:
    """Latitudes from north to south, longitudes 0..360 in the file."""
    lat, lon = np.array([52.0, 51.0, 50.0]), np.array([1.0, 2.0, 358.0, 359.0, 0.0])
    xr.Dataset(coords={"lat": lat, "lon": lon}).to_netcdf(tmp_path / "like.nc")
    grid = analysis_grid(assessment_with(tmp_path, {"like": "like.nc"}))
    assert grid.lat.tolist() == [50.0, 51.0, 52.0]
    assert grid.lon.tolist() == [-2.0, -1.0, 0.0, 1.0, 2.0]
    assert grid.lon_edges.tolist() == [-2.5, -1.5, -0.5, 0.5, 1.5, 2.5]
    xr.Dataset(coords={"lat": [1.0, 2.0, 4.0], "lon": lon}).to_netcdf(tmp_path / "like.nc")
    with pytest.raises(InputError) as caught:
        analysis_grid(assessment_with(tmp_path, {"like": "like.nc"}))
    assert str(caught.value) == (
        f"{tmp_path}/like.nc: latitude is not evenly spaced; give grid.lat and grid.lon"
    )


@pytest.mark.parametrize(
    ("lat", "lon", "tiles", "message"),
    [
        ((80, 90), (0, 10), 1, "grid.lat: pixel edges lie beyond a pole"),
        ((0, 10), (175, 185), 1, "grid.lon: pixel edges must lie within -180 to 180"),
        ((0, 1), (0, 1), 3, "grid.tiles: 3 is more than the 2 rows"),
    ],
)
def test_impossible_grids(
    tmp_path: Path, lat: tuple[float, float], lon: tuple[float, float], tiles: int, message: str
) -> None:
    axes = {
        name: {"first": values[0], "last": values[1], "step": 1.0}
        for name, values in (("lat", lat), ("lon", lon))
    }
    with pytest.raises(AssessmentError) as caught:
        analysis_grid(assessment_with(tmp_path, axes | {"tiles": tiles}))
    assert str(caught.value) == f"{tmp_path}/assessment.yaml: {message}"


def test_tiles_cover_every_row_once(tmp_path: Path) -> None:
    axes = {name: {"first": 0.5, "last": 10.5, "step": 1.0} for name in ("lat", "lon")}
    assessment = assessment_with(tmp_path, axes | {"tiles": 4})
    grid = analysis_grid(assessment)
    bands = [grid.rows(tile, 4) for tile in range(tile_count(assessment))]
    assert [(band.start, band.stop) for band in bands] == [(0, 3), (3, 6), (6, 9), (9, 11)]
    part = grid.part(bands[1], slice(2, 5))
    assert part.lat.tolist() == [3.5, 4.5, 5.5]
    assert part.lon_edges.tolist() == [2.0, 3.0, 4.0, 5.0]
    subset = assessment_with(tmp_path, axes | {"tiles": 4}, regions=("A",))
    assert tile_count(subset) == 1


def test_grid_survives_a_file(tmp_path: Path) -> None:
    edges = np.round(np.linspace(-1, 1, 22), 9)
    centres = np.round((edges[:-1] + edges[1:]) / 2, 9)
    grid = AnalysisGrid(centres, centres + 7, edges, edges + 7)
    xr.Dataset(coords=grid.coordinates()).to_netcdf(tmp_path / "a.nc")
    with xr.open_dataset(tmp_path / "a.nc") as dataset:
        found = AnalysisGrid.from_dataset(dataset)
    for name in ("lat", "lon", "lat_edges", "lon_edges"):
        np.testing.assert_array_equal(getattr(found, name), getattr(grid, name))
