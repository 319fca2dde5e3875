"""Correction of labelled grids: xarray in and out, no files."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from stook.constants import OBSERVED
from stook.correct.block import (
    PROBABILITIES,
    Corrected,
    Pixels,
    Values,
    changes_of,
    correct_group,
    evaluate_group,
    prepare_group,
    shown_windows,
)
from stook.correct.kernels_scores import CHANGES, SCORES, SEASONS
from stook.correct.setup import (
    DIURNAL_RANGE,
    MEAN_TEMPERATURE,
    Setup,
    quantities_of,
)
from stook.correct.windows import YEAR_DAYS
from stook.grids.missing import Reason, reason_attributes
from stook.grids.units import INSIDE_UNITS
from stook.randomness import pixel_keys

STAGES = ("raw", "corrected")
_DIFFERENCE = {"units_metadata": "temperature: difference"}
_ON_SCALE = {"units_metadata": "temperature: on_scale"}
_NAMES = {MEAN_TEMPERATURE: "mean of tasmin and tasmax", DIURNAL_RANGE: "diurnal range"}


@dataclass(frozen=True)
class CorrectedGrids:
    """Results of the correction of one group of variables.

    Attributes
    ----------
    grids
        Corrected variables (time, lat, lon) and `reason_<variable>` (lat, lon).
    transfer
        Calibration quantiles (probability, day_of_year, lat, lon) of reference and model.
    evaluation
        Split-sample evaluation and simulated changes.
    """

    grids: xr.Dataset
    transfer: xr.Dataset
    evaluation: xr.Dataset

    def datasets(self) -> tuple[xr.Dataset, xr.Dataset, xr.Dataset]:
        """Return the three datasets."""
        return self.grids, self.transfer, self.evaluation


def correct_grids(
    group: tuple[str, ...],
    reference: xr.Dataset | None,
    simulation: xr.Dataset,
    outside: xr.DataArray,
    setup: Setup,
) -> CorrectedGrids:
    """Correct a group of variables on a block of pixels.

    Parameters
    ----------
    group
        Variables that are corrected together, see `setup.groups_of`.
    reference, simulation
        Prepared grids with dimensions (time, lat, lon), native calendars, units of
        `stook.grids.units.INSIDE_UNITS`; the reference of all its years.
    outside
        Reason code of pixels that are not computed, 0 elsewhere, int8, (lat, lon).
    setup
        From `setup.make_setup`.

    Returns
    -------
    CorrectedGrids
        A pixel that cannot be corrected is missing in all of them and has a reason code.
    """
    shape = (simulation.sizes["lat"], simulation.sizes["lon"])
    lat, lon = np.meshgrid(simulation["lat"].values, simulation["lon"].values, indexing="ij")
    pixels = Pixels(lat.ravel(), pixel_keys(lat, lon).ravel())
    f = _series(simulation, group)
    f_prepared = prepare_group(group, f, setup.model, setup.simulation, setup, pixels)
    o, o_prepared = {}, {}
    if reference is not None and setup.reference is not None and set(group) <= set(reference):
        o = _series(reference, group)
        o_prepared = prepare_group(group, o, setup.reference, OBSERVED, setup, pixels)
    corrected = correct_group(group, o_prepared, f_prepared, setup.whole, setup, pixels, keep=True)
    reason = np.where(outside.values.ravel() != 0, outside.values.ravel(), corrected.reason)
    corrected.reason = reason.astype(np.int8)
    invalid = corrected.reason != int(Reason.VALID)
    for values in corrected.values.values():
        values[invalid] = np.nan
    evaluation = xr.Dataset()
    if o:
        evaluation = _evaluation(group, (o, f), (o_prepared, f_prepared), corrected, setup, pixels)
    grids = _grids(corrected, simulation)
    transfer = _transfer(group, corrected, setup)
    return CorrectedGrids(
        *(_unfold(dataset, simulation, shape) for dataset in (grids, transfer, evaluation))
    )


def _series(dataset: xr.Dataset, names: tuple[str, ...]) -> Values:
    """Return contiguous series of shape (pixel, time)."""
    result = {}
    for name in names:
        values = dataset[name].transpose("time", "lat", "lon").values
        result[name] = np.ascontiguousarray(values.reshape(len(values), -1).T)
    return result


def _unfold(dataset: xr.Dataset, like: xr.Dataset, shape: tuple[int, int]) -> xr.Dataset:
    """Turn the dimension pixel into lat and lon, behind all others."""
    result = xr.Dataset(coords={"lat": like["lat"], "lon": like["lon"]})
    for name, variable in dataset.variables.items():
        if "pixel" not in variable.dims:
            result = result.assign_coords({name: variable})
            continue
        others = [dim for dim in variable.dims if dim != "pixel"]
        values = variable.transpose(*others, "pixel").values
        values = np.ascontiguousarray(values).reshape(*values.shape[:-1], *shape)
        result[name] = xr.Variable((*others, "lat", "lon"), values, variable.attrs)
    return result


def _grids(corrected: Corrected, simulation: xr.Dataset) -> xr.Dataset:
    result = xr.Dataset(coords={"time": simulation["time"]})
    for name, values in corrected.values.items():
        attributes = dict(simulation[name].attrs) | {"ancillary_variables": f"reason_{name}"}
        result[name] = xr.Variable(("pixel", "time"), values, attributes)
        result[f"reason_{name}"] = xr.Variable("pixel", corrected.reason, reason_attributes())
    return result


def _transfer(group: tuple[str, ...], corrected: Corrected, setup: Setup) -> xr.Dataset:
    if not corrected.kept:
        return xr.Dataset()
    invalid = corrected.reason != int(Reason.VALID)
    result = xr.Dataset()
    for quantity in quantities_of(group, setup.correct):
        kept = corrected.kept[quantity.name].copy()
        kept[invalid] = np.nan
        windows = setup.whole.mappings[quantity.name].f_plan.windows
        day = (shown_windows(windows) + 0.5) * YEAR_DAYS / windows
        dimension = f"day_of_year_{quantity.name}"
        result = result.assign_coords(
            {
                dimension: xr.Variable(
                    dimension,
                    day,
                    {"units": "1", "long_name": "centre of the window, day of a year of 365 days"},
                ),
                "probability": xr.Variable(
                    "probability", PROBABILITIES, {"units": "1", "long_name": "probability"}
                ),
            }
        )
        for number, whose in enumerate(("reference", "model")):
            attributes = _units(quantity.name) | {
                "long_name": f"quantiles of {_NAMES.get(quantity.name, quantity.name)} of the "
                f"{whose} in the calibration period",
                "method": quantity.choice.method,
                "kind": "ratio" if quantity.ratio else "additive",
            }
            result[f"{whose}_{quantity.name}"] = xr.Variable(
                ("pixel", "probability", dimension), kept[:, number], attributes
            )
    return result


def _units(name: str) -> dict[str, str]:
    if name == DIURNAL_RANGE:
        return {"units": "degC"} | _DIFFERENCE
    unit = INSIDE_UNITS.get(name, "degC")
    return {"units": unit} | (_ON_SCALE if unit == "degC" else {})


def _evaluation(
    group: tuple[str, ...],
    raw: tuple[Values, Values],
    prepared: tuple[Values, Values],
    corrected: Corrected,
    setup: Setup,
    pixels: Pixels,
) -> xr.Dataset:
    names = {
        "stage": list(STAGES),
        "sample": [sample.name for sample in setup.samples],
        "season": list(SEASONS),
    }
    horizons = [period.name for period in setup.periods[1:]]
    result = xr.Dataset(coords=names | ({"horizon": horizons} if horizons else {}))
    invalid = corrected.reason != int(Reason.VALID)
    scores = evaluate_group(group, raw, prepared, setup, pixels)
    for name in group:
        scores[name][invalid] = np.nan
        for number, score in enumerate(SCORES):
            if score == "wet_day_bias" and name != "pr":
                continue
            result[f"{score}_{name}"] = xr.Variable(
                ("pixel", "sample", "stage", "season"),
                scores[name][:, :, :, number],
                score_attributes(score, name),
            )
        if horizons:
            before = raw[1][name]
            changes = changes_of(before, corrected.values[name], name, setup)
            changes[invalid] = np.nan
            for number, change in enumerate(CHANGES):
                result[f"{change}_{name}"] = xr.Variable(
                    ("pixel", "stage", "horizon", "season"),
                    changes[:, :, :, number],
                    score_attributes(change, name),
                )
    for quantity, count in corrected.capped.items():
        result[f"ratio_capped_{quantity}"] = xr.Variable(
            "pixel",
            np.where(invalid, 0, count),
            {
                "units": "1",
                "long_name": f"values of {_NAMES.get(quantity, quantity)} whose ratio was capped",
            },
        )
    return result


_WORDS = {
    "mean_bias": "bias of the mean",
    "p05_bias": "bias of the 5th percentile",
    "p95_bias": "bias of the 95th percentile",
    "wet_day_bias": "bias of the share of wet days",
    "cdf_distance": "largest distance of the distributions from that of the reference",
    "mean_change": "simulated change of the mean since the calibration period",
    "p05_change": "simulated change of the 5th percentile since the calibration period",
    "p95_change": "simulated change of the 95th percentile since the calibration period",
}


def score_attributes(score: str, variable: str) -> dict[str, str]:
    """Return long name and units of a statistic of a variable."""
    text = {"long_name": f"{_WORDS[score]}, {variable}"}
    if score == "cdf_distance":
        return text | {"units": "1"}
    if score == "wet_day_bias" or (score.endswith("_change") and variable == "pr"):
        return text | {"units": "%"}
    unit = INSIDE_UNITS[variable]
    return text | {"units": unit} | (_DIFFERENCE if unit == "degC" else {})
