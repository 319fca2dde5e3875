"""What is drawn is what the numbers say (all invented), and can be told apart without colour."""

from __future__ import annotations

import colorsys

import geopandas as gpd
import matplotlib as mpl
import numpy as np
import pandas as pd
import pytest
import xarray as xr
from matplotlib.collections import QuadMesh
from matplotlib.patches import PathPatch
from shapely.geometry import box
from stook.grids.analysis import AnalysisGrid
from stook.report.figures_correct import correction_figure
from stook.report.figures_drivers import drivers_figure, effects_in_percent
from stook.report.figures_maps import cells_outline, change_maps, diverging
from stook.report.figures_series import range_figure
from stook.report.figures_trend import trend_figure
from stook.report.geo import bands
from stook.report.style import looks


def grid() -> AnalysisGrid:
    return AnalysisGrid(
        np.array([0.5, 1.5]),
        np.array([10.5, 11.5, 12.5]),
        np.array([0.0, 1.0, 2.0]),
        np.array([10.0, 11.0, 12.0, 13.0]),
    )


def pixels() -> xr.Dataset:
    change = np.array([[[-30.0, -10.0, np.nan], [0.0, 10.0, 20.0]]])
    agreement = np.array([[[1.0, 0.8, np.nan], [0.5, 0.79, 1.0]]])
    dims = ("horizon", "lat", "lon")
    data = {f"change_{name}": (dims, change) for name in ("p05", "p50", "p95")}
    data |= {"agreement": (dims, agreement), "models": (dims, np.ones_like(change))}
    return xr.Dataset(data, grid().coordinates() | {"horizon": ["late"]})


def outlines() -> gpd.GeoDataFrame:
    return gpd.GeoDataFrame({"region": ["A"]}, geometry=[box(10, 0, 12, 2)], crs=4326)


def test_map_draws_every_pixel_where_it_lies_and_hatches_disagreement() -> None:
    drawing = change_maps({("rainfed", "high"): pixels()}, "maize", "late", outlines())
    axis = drawing.figure.axes[0]
    (mesh,) = [c for c in axis.collections if isinstance(c, QuadMesh)]
    drawn = np.ma.filled(np.ma.asarray(mesh.get_array()), np.nan).reshape(2, 3)
    np.testing.assert_array_equal(drawn, pixels()["change_p50"].values[0])
    (hatched,) = [p for p in axis.patches if isinstance(p, PathPatch) and p.get_hatch()]
    # the two pixels below 80 % lie side by side in the upper row, columns 0 and 1
    assert hatched.get_path().get_extents().bounds == pytest.approx((10.0, 1.0, 2.0, 1.0))
    assert axis.get_xlim() == (10.0, 13.0)
    assert axis.get_ylim() == (0.0, 2.0)
    assert len(drawing.data) == 5


def test_colours_of_change_are_centred_at_zero() -> None:
    drawing = change_maps({("rainfed", "high"): pixels()}, "maize", "late", outlines())
    (mesh,) = [c for c in drawing.figure.axes[0].collections if isinstance(c, QuadMesh)]
    edges = np.asarray(mesh.norm.boundaries)  # type: ignore[attr-defined]
    np.testing.assert_allclose(edges, -edges[::-1])
    assert 0.0 in edges


def test_loss_and_gain_differ_for_colour_blind_readers() -> None:
    """Deuteranopes and protanopes keep the blue-yellow axis: it must carry the sign."""
    low, high = (np.array(diverging()(x)[:3]) for x in (0.15, 0.85))
    yellow_blue = [rgb[:2].mean() - rgb[2] for rgb in (low, high)]
    assert yellow_blue[0] - yellow_blue[1] > 0.2


def test_outline_joins_neighbours_of_a_row() -> None:
    mask = np.array([[True, True, False], [False, False, True]])
    outline = cells_outline(mask, np.array([0.0, 1.0, 2.0]), np.array([0.0, 1.0, 2.0, 3.0]))
    assert len(outline.vertices) == 10  # two rectangles of five corners
    assert outline.contains_point((0.5, 0.5))
    assert outline.contains_point((2.5, 1.5))
    assert not outline.contains_point((2.5, 0.5))


def test_scenarios_differ_in_line_and_marker_and_lightness() -> None:
    look = looks(["a", "b", "c", "d"])
    for part in ("line", "marker", "colour"):
        assert len({str(getattr(own, part)) for own in look.values()}) == 4
    two = [colorsys.rgb_to_hls(*mpl.colors.to_rgb(look[name].colour))[1] for name in "ab"]
    assert two[0] != two[1]


def test_range_figure_draws_the_percentiles_of_the_last_horizons() -> None:
    rows = pd.DataFrame(
        {
            "crop": "maize",
            "system": "rainfed",
            "region": ["A"] * 4,
            "scenario": "high",
            "horizon": ["h1", "h2", "h3", "h4"],
            "change_p05": -9.0,
            "change_p17": -7.0,
            "change_p50": [-1.0, -2.0, -3.0, -4.0],
            "change_p83": 1.0,
            "change_p95": 2.0,
            "agreement": [1.0, 0.5, 1.0, 0.5],
            "share_decrease": 0.8,
        }
    )
    drawing = range_figure(rows, "maize", ["high"], ["h1", "h2", "h3", "h4"], ["A"])
    assert [axis.get_title(loc="left") for axis in drawing.figure.axes] == ["h2", "h3", "h4"]
    last = drawing.figure.axes[-1]
    points = [line for line in last.lines if line.get_marker() == "o" and len(line.get_xdata())]
    assert [list(line.get_xdata()) for line in points] == [[-4.0]]
    assert points[0].get_markerfacecolor() == "white"  # models disagree
    wide = last.collections[0].get_segments()[0]
    assert (wide[0][0], wide[1][0]) == (-9.0, 2.0)


def test_trend_figure_draws_both_distributions() -> None:
    frame = pd.DataFrame(
        {
            "quantity": "yield",
            "period": "all",
            "kind": ["observed", "observed", "randomised", "randomised"],
            "bin_low": [-1.0, 0.0, -1.0, 0.0],
            "bin_high": [0.0, 1.0, 0.0, 1.0],
            "area_share": [0.9, 0.1, 0.5, 0.5],
        }
    )
    significant = {("yield", "all"): 0.25}
    drawing = trend_figure(frame, "t", "maize", {"yield": "t/ha"}, significant)
    axis = drawing.figure.axes[0]
    steps = [list(patch.get_data().values) for patch in axis.patches]
    assert steps == [[0.9, 0.1], [0.9, 0.1], [0.5, 0.5]]
    assert axis.get_xlabel() == "trend, t/ha per decade"
    assert "25 %" in axis.texts[0].get_text()
    assert "mean of all pixels -0.4" in drawing.alt


def test_correction_of_many_simulations_is_drawn_by_model() -> None:
    rows = [
        [f"M{m}_s_r{r}", "tas", "all", stage, "mean_bias", "degC", float(r), 0.0, 1.0]
        for m in range(4)
        for r in range(5)
        for stage in ("raw", "corrected")
    ]
    columns = ["simulation", "variable", "season", "stage", "statistic", "unit"]
    frame = pd.DataFrame(rows, columns=[*columns, "mean", "p05", "p95"])
    drawing = correction_figure(frame)
    assert sorted(drawing.data["simulation"].unique()) == ["M0", "M1", "M2", "M3"]
    assert set(drawing.data["mean"]) == {2.0}


def test_log_effects_become_percent_and_level_effects_stay() -> None:
    means = pd.DataFrame({"value": [np.log(0.9), -0.5], "unit": ["1", "t ha-1"]})
    shown = effects_in_percent(means)
    assert list(shown["value"]) == pytest.approx([-10.0, -0.5])
    assert list(shown["unit"]) == ["percent", "t ha-1"]


def test_bands_are_north_up() -> None:
    stack = bands(pixels().sel(horizon="late"), ["change_p50", "agreement"])
    assert list(stack["y"].values) == [1.5, 0.5]
    assert stack.values[0, 0].tolist() == [0.0, 10.0, 20.0]
    assert stack.rio.bounds() == (10.0, 0.0, 13.0, 2.0)


def test_every_crop_has_its_own_terms_on_its_axis() -> None:
    rows = [
        ("maize", "heat", "percent", -8.0),
        ("maize", "rain", "percent", 1.0),
        ("barley", "warmth", "t ha-1", -0.2),
    ]
    effects = pd.DataFrame(rows, columns=["crop", "quantity", "unit", "value"]).assign(
        simulation="ALDER-ESM_high_r1", scenario="high", system="rainfed", period="late"
    )
    axes = drivers_figure(effects, "late", ["high"]).figure.axes
    labels = [[text.get_text() for text in axis.get_yticklabels()] for axis in axes]
    assert labels == [["heat", "rain"], ["warmth"]]
    assert [axis.get_xlabel() for axis in axes] == ["effect on yield, %", "effect on yield, t/ha"]
    assert axes[1].get_xlim()[0] > -1  # a scale of its own
