"""Weights and kernels of regridding on small grids that can be computed by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest
from stook.grids.axes import SourceAxis, axis_of_edges
from stook.grids.regrid import (
    HALF,
    AxisWeights,
    bilinear_weights,
    conservative_weights,
    nearest_weights,
    weighted_mean,
    weighted_total,
)


def lat_axis(*edges: float) -> SourceAxis:
    return axis_of_edges(np.array(edges), False, None)


def lon_axis(*edges: float) -> SourceAxis:
    return axis_of_edges(np.array(edges), False, 360.0)


def listed(weights: AxisWeights) -> list[dict[int, float]]:
    """Return weights as one mapping a target cell."""
    return [
        dict(
            zip(
                weights.index[start:stop].tolist(),
                weights.weight[start:stop].tolist(),
                strict=True,
            )
        )
        for start, stop in zip(weights.start[:-1], weights.start[1:], strict=True)
    ]


def mean_of(
    values: np.ndarray,
    rows: AxisWeights,
    columns: AxisWeights,
    importance: np.ndarray | None = None,
    least: float = HALF,
    scale: float = 1.0,
    offset: float = 0.0,
) -> np.ndarray:
    shape = len(rows.start) - 1, len(columns.start) - 1
    result = np.empty((len(values), *shape), dtype=np.float32)
    wanted = np.ones(shape, dtype=bool)
    weighted_mean(
        values, rows.arrays, columns.arrays, importance, wanted, least, scale, offset, result
    )
    return result


def test_overlap_in_latitude_is_one_of_sines() -> None:
    weights = conservative_weights(lat_axis(0, 30, 90), np.array([0.0, 90.0]), "lat")
    assert listed(weights) == [{0: pytest.approx(0.5), 1: pytest.approx(0.5)}]  # sin 30 = 1/2


def test_overlap_in_longitude_is_one_of_degrees() -> None:
    weights = conservative_weights(lon_axis(0, 30, 90), np.array([0.0, 45.0, 90.0]), "lon")
    assert listed(weights) == [{0: pytest.approx(2 / 3), 1: pytest.approx(1 / 3)}, {1: 1.0}]


def test_share_of_the_source() -> None:
    weights = conservative_weights(
        lon_axis(0, 30, 90), np.array([0.0, 45.0, 90.0]), "lon", share_of="source"
    )
    assert listed(weights) == [{0: 1.0, 1: pytest.approx(0.25)}, {1: pytest.approx(0.75)}]


def test_same_cells_take_exactly_one() -> None:
    edges = np.array([10.1, 10.6, 11.1, 11.6])
    rounded = edges + np.array([2e-7, -3e-7, 1e-7, 0.0])  # as a file may round them
    for axis in ("lat", "lon"):
        weights = conservative_weights(lat_axis(*rounded), edges, axis)
        assert listed(weights) == [{0: 1.0}, {1: 1.0}, {2: 1.0}]
    centres = (edges[:-1] + edges[1:]) / 2
    assert listed(bilinear_weights(lat_axis(*rounded), centres, "lat")) == [
        {0: 1.0},
        {1: 1.0},
        {2: 1.0},
    ]


def test_longitudes_meet_over_whole_turns() -> None:
    """A source of 0..360 under a target of -180..180; the seam of the source lies inside a cell."""
    source = axis_of_edges(np.arange(0, 361, 90.0), False, 360.0)
    assert source.cyclic
    target = np.array([-180.0, -45.0, 45.0, 180.0])
    found = listed(conservative_weights(source, target, "lon"))
    assert found[0] == {2: pytest.approx(2 / 3), 3: pytest.approx(1 / 3)}
    assert found[1] == {3: 0.5, 0: 0.5}
    assert list(found[1]) == [3, 0]  # from west to east
    assert found[2] == {0: pytest.approx(1 / 3), 1: pytest.approx(2 / 3)}


def test_bilinear_over_the_seam() -> None:
    source = axis_of_edges(np.arange(0, 361, 90.0), False, 360.0)  # centres 45, 135, 225, 315
    found = listed(bilinear_weights(source, np.array([-22.5, 0.0, 90.0]), "lon"))
    assert found == [{3: 0.75, 0: 0.25}, {3: 0.5, 0: 0.5}, {0: 0.5, 1: 0.5}]


def test_bilinear_holds_the_outermost_value_for_half_a_cell_and_no_further() -> None:
    source = lat_axis(10, 12, 14)  # centres 11, 13
    places = np.array([9.9, 10.0, 10.5, 11.5, 13.9, 14.0, 14.1])
    found = listed(bilinear_weights(source, places, "lat"))
    assert found == [{}, {0: 1.0}, {0: 1.0}, {0: 0.75, 1: 0.25}, {1: 1.0}, {1: 1.0}, {}]


def test_one_cell_is_a_grid() -> None:
    lat, lon = lat_axis(34.5, 35.0), lon_axis(-83.0, -82.5)
    pixel = np.array([34.5, 35.0]), np.array([-83.0, -82.5])
    assert listed(conservative_weights(lat, pixel[0], "lat")) == [{0: 1.0}]
    assert listed(bilinear_weights(lat, np.array([34.75, 35.25]), "lat")) == [{0: 1.0}, {}]
    assert listed(bilinear_weights(lon, np.array([-82.75, 277.25, -82.25]), "lon")) == [
        {0: 1.0},
        {0: 1.0},
        {},
    ]


def test_nearest_takes_the_cell_of_the_centre_and_at_an_edge_the_one_before() -> None:
    source = lat_axis(0, 1, 2, 3)
    places = np.array([-0.2, 0.0, 0.9, 1.0, 1.1, 3.0, 3.2])
    found = listed(nearest_weights(source, places, "lat"))
    assert found == [{}, {0: 1.0}, {0: 1.0}, {0: 1.0}, {1: 1.0}, {2: 1.0}, {}]
    around = axis_of_edges(np.arange(0, 361, 90.0), False, 360.0)
    assert listed(nearest_weights(around, np.array([-10.0, 10.0]), "lon")) == [{3: 1.0}, {0: 1.0}]


def test_missing_cells_are_left_out_and_half_is_enough() -> None:
    rows = conservative_weights(lat_axis(0, 1), np.array([0.0, 1.0]), "lat")
    columns = conservative_weights(
        lon_axis(0, 1, 2, 3, 4, 5, 6, 7, 8), np.array([0.0, 4.0, 8.0]), "lon"
    )
    nan = math.nan
    values = np.array([[[1, 3, nan, nan, 5, nan, nan, nan]]], dtype=np.float32)
    found = mean_of(values, rows, columns)
    assert found[0, 0, 0] == 2.0  # exactly half has a value
    assert math.isnan(found[0, 0, 1])  # a quarter
    assert mean_of(values, rows, columns, least=0.0)[0, 0, 1] == 5.0


def test_a_target_half_outside_the_source() -> None:
    """Half covered has a value, less than half has none; outside there is nothing."""
    rows = conservative_weights(lat_axis(0, 1), np.array([0.0, 1.0]), "lat")
    columns = conservative_weights(
        lon_axis(0, 1, 2), np.array([-2.2, -1.0, 1.0, 1.8, 2.9, 4.0]), "lon"
    )
    found = mean_of(np.array([[[4.0, 8.0]]]), rows, columns)[0, 0]
    assert math.isnan(found[0])
    assert found[1] == 4.0
    assert found[2] == 8.0
    assert math.isnan(found[3])  # 0.2 of 1.1
    assert math.isnan(found[4])


def test_importance_weights_the_cells() -> None:
    rows = conservative_weights(lat_axis(0, 1), np.array([0.0, 1.0]), "lat")
    columns = conservative_weights(lon_axis(0, 1, 2, 3), np.array([0.0, 3.0]), "lon")
    values = np.array([[[1.0, 2.0, 100.0]]])
    found = mean_of(values, rows, columns, np.array([[1.0, 3.0, 0.0]]), least=0.0)
    assert found[0, 0, 0] == np.float32(1.75)
    assert np.isnan(mean_of(values, rows, columns, np.zeros((1, 3)), least=0.0)).all()


def test_unit_conversion_and_unwanted_pixels() -> None:
    weights = AxisWeights(np.array([0, 1, 2]), np.array([0, 1]), np.ones(2))
    values = np.array([[[273.15, 283.15], [293.15, 303.15]]])
    result = np.empty((1, 2, 2), dtype=np.float32)
    wanted = np.array([[True, False], [True, True]])
    weighted_mean(values, weights.arrays, weights.arrays, None, wanted, HALF, 1.0, -273.15, result)
    np.testing.assert_array_equal(result[0], np.array([[0, np.nan], [20, 30]], dtype=np.float32))


def test_totals_leave_out_missing_cells() -> None:
    rows = conservative_weights(lat_axis(0, 1), np.array([0.0, 1.0]), "lat", "source")
    columns = conservative_weights(lon_axis(0, 2, 4), np.array([0.0, 1.0, 4.0]), "lon", "source")
    result = np.empty((1, 2))
    weighted_total(np.array([[10.0, np.nan]]), rows.arrays, columns.arrays, result)
    assert result.tolist() == [[5.0, 5.0]]


def test_window_holds_only_what_is_needed() -> None:
    weights = AxisWeights(np.array([0, 2, 3]), np.array([4, 5, 6]), np.ones(3))
    positions, local = weights.window(False, 20)
    assert positions.tolist() == [4, 5, 6]
    assert local.index.tolist() == [0, 1, 2]


def test_window_over_the_seam_of_a_cyclic_axis() -> None:
    weights = AxisWeights(np.array([0, 2, 4]), np.array([18, 19, 0, 1]), np.ones(4))
    positions, local = weights.window(True, 20)
    assert positions.tolist() == [18, 19, 0, 1]
    assert local.index.tolist() == [0, 1, 2, 3]
    whole = AxisWeights(np.arange(21), np.arange(20), np.ones(20))
    assert whole.window(True, 20)[0].tolist() == list(range(20))


def test_window_of_nothing() -> None:
    weights = AxisWeights(np.zeros(3, dtype=np.int64), np.empty(0, dtype=np.int64), np.empty(0))
    assert len(weights.window(True, 20)[0]) == 0


@pytest.mark.parametrize("method", ["conservative", "bilinear"])
def test_a_part_of_the_grid_has_the_bits_of_the_whole(method: str) -> None:
    random = np.random.default_rng(9)
    source = (
        axis_of_edges(np.linspace(-30, 30, 24), False, None),
        axis_of_edges(np.linspace(0, 360, 41), False, 360.0),
    )
    lat, lon = np.linspace(-33, 33, 50), np.linspace(-180, 180, 72)

    def weights(rows: slice, columns: slice) -> tuple[AxisWeights, AxisWeights]:
        sides = lat[rows.start : rows.stop + 1], lon[columns.start : columns.stop + 1]
        if method == "conservative":
            return (
                conservative_weights(source[0], sides[0], "lat"),
                conservative_weights(source[1], sides[1], "lon"),
            )
        middle = [(side[:-1] + side[1:]) / 2 for side in sides]
        return (
            bilinear_weights(source[0], middle[0], "lat"),
            bilinear_weights(source[1], middle[1], "lon"),
        )

    values = random.normal(size=(4, 23, 40)).astype(np.float32)
    values[random.random(values.shape) < 0.2] = np.nan
    whole = mean_of(values, *weights(slice(0, 49), slice(0, 71)))
    for rows, columns in (
        (slice(0, 7), slice(0, 71)),
        (slice(7, 49), slice(3, 4)),
        (slice(20, 21), slice(30, 60)),
    ):
        part_rows, part_columns = weights(rows, columns)
        positions_lat, local_rows = part_rows.window(False, 23)
        positions_lon, local_columns = part_columns.window(True, 40)
        window = values[:, positions_lat][:, :, positions_lon]
        part = mean_of(window, local_rows, local_columns)
        np.testing.assert_array_equal(part, whole[:, rows, columns])
