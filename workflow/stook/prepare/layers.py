"""The crop layers of all crops and systems, with what later stages compute and why not the rest."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr

from stook.grids.analysis import AnalysisGrid
from stook.grids.cells import cell_areas
from stook.grids.missing import Reason, reason_attributes
from stook.prepare.resample import YIELD_UNIT


@dataclass(frozen=True)
class SystemLayers:
    """The layers of one crop and system on the whole analysis grid, float64, shape (lat, lon).

    Attributes
    ----------
    area
        Harvested area, ha; 0 where there is none.
    planting, maturity
        Day of year, 1 to 365; NaN where there is none.
    baseline_yield
        t ha-1; NaN where there is none.
    """

    area: np.ndarray
    planting: np.ndarray
    maturity: np.ndarray
    baseline_yield: np.ndarray


def crop_layers(
    systems: Mapping[str, SystemLayers], grid: AnalysisGrid, overlay: xr.Dataset, subset: bool
) -> xr.Dataset:
    """Return the layers of all crops on the grid of the region overlay.

    Parameters
    ----------
    systems
        Layers by ``crop_system``, on the whole analysis grid.
    grid
        The whole analysis grid.
    overlay
        ``coverage(region, lat, lon)`` on the grid of the run, a part of the analysis grid; in a
        run of some regions ``mostly_elsewhere(lat, lon)``, where none of them is the main one.
    subset
        Whether pixels outside every region of the overlay are left out.

    Returns
    -------
    Dataset
        area, planting, maturity, baseline_yield, reason (crop_system, lat, lon); computed,
        cell_area, main_region (lat, lon).
    """
    here = AnalysisGrid.from_dataset(overlay)
    rows, columns = _place(grid.lat, here.lat), _place(grid.lon, here.lon)
    fields = {
        name: np.stack([getattr(one, name)[rows, columns] for one in systems.values()])
        for name in ("area", "planting", "maturity", "baseline_yield")
    }
    coverage = overlay["coverage"].transpose("region", "lat", "lon").values
    most = coverage.max(axis=0, initial=0.0)
    requested = most > 0 if subset else np.ones(here.shape, dtype=bool)
    reason = _reasons(fields, requested)
    computed = (fields["area"] > 0).any(axis=0) & requested
    main_region = np.full(here.shape, -1, dtype=np.int16)
    if coverage.shape[0]:
        main_region = np.where(most > 0, coverage.argmax(axis=0), -1).astype(np.int16)
    if "mostly_elsewhere" in overlay:
        main_region[overlay["mostly_elsewhere"].values == 1] = -1
    three, two = ("crop_system", "lat", "lon"), ("lat", "lon")
    return xr.Dataset(
        {name: (three, values, _ATTRIBUTES[name]) for name, values in fields.items()}
        | {
            "reason": (three, reason, reason_attributes()),
            "computed": (two, computed.astype(np.int8), _ATTRIBUTES["computed"]),
            "cell_area": (
                two, cell_areas(here.lat_edges, here.lon_edges), _ATTRIBUTES["cell_area"]
            ),
            "main_region": (two, main_region, _ATTRIBUTES["main_region"]),
        },
        coords={
            "crop_system": ("crop_system", list(systems), {"long_name": "crop and water system"}),
            "region": ("region", overlay["region"].values.astype(str), {"long_name": "region"}),
            **here.coordinates(),
        },
    )  # fmt: skip


_ATTRIBUTES: dict[str, dict[str, Any]] = {
    "area": {"long_name": "harvested area", "units": "ha", "cell_methods": "area: sum"},
    "planting": {"long_name": "planting, day of the year", "units": "1"},
    "maturity": {"long_name": "maturity, day of the year", "units": "1"},
    "baseline_yield": {"long_name": "baseline yield", "units": YIELD_UNIT},
    "cell_area": {"standard_name": "cell_area", "long_name": "area of the pixel", "units": "km2"},
    "computed": {
        "long_name": "whether later stages compute the pixel",
        "flag_values": np.array([0, 1], dtype=np.int8),
        "flag_meanings": "left_out computed",
    },
    "main_region": {
        "long_name": "region that covers most of the pixel, counted from 0; -1 none",
        "units": "1",
    },
}


def _place(whole: np.ndarray, part: np.ndarray) -> slice:
    start = int(np.abs(whole - part[0]).argmin())
    return slice(start, start + len(part))


def _reasons(fields: Mapping[str, np.ndarray], requested: np.ndarray) -> np.ndarray:
    dated = ~np.isnan(fields["planting"]) & ~np.isnan(fields["maturity"])
    return np.select(
        [
            ~(fields["area"] > 0),
            np.broadcast_to(~requested, dated.shape),
            ~dated,
            np.isnan(fields["baseline_yield"]),
        ],
        [
            np.int8(Reason.OUTSIDE_CROP_AREA),
            np.int8(Reason.OUTSIDE_REQUESTED_REGION),
            np.int8(Reason.NO_CALENDAR),
            np.int8(Reason.NO_BASELINE_YIELD),
        ],
        default=np.int8(Reason.VALID),
    ).astype(np.int8)
