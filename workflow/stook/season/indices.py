"""Season indices of climate grids, labelled."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from stook.assessment.variables import sources
from stook.errors import InputError
from stook.grids.calendars import TimeStep
from stook.grids.files import chunked_like
from stook.grids.missing import Reason, reason_attributes
from stook.season.definition import (
    SEASON,
    YEAR_ATTRIBUTES,
    DaysAbove,
    DegreeDays,
    DrySpell,
    IndexDefinition,
    LargestTotal,
    Mean,
    Total,
    VapourPressureDeficit,
    WetDays,
    describe,
    unit_of,
)
from stook.season.kernels import (
    interval_means,
    season_counts,
    season_degree_days,
    season_dry_spells,
    season_largest_totals,
    season_sums,
    season_vapour_pressure_deficits,
    step_deficits,
)
from stook.season.windows import Seasons, SeriesTime

Phases = Mapping[str, tuple[float, float]]
"""Growth phases as fractions of the season, by name."""

_DAILY = (DegreeDays, DaysAbove, DrySpell, WetDays, LargestTotal)
_STANDARD_NAMES = {
    "tas": "air_temperature",
    "tasmin": "air_temperature",
    "tasmax": "air_temperature",
    "pr": "lwe_precipitation_rate",
    "rsds": "surface_downwelling_shortwave_flux_in_air",
    "hurs": "relative_humidity",
}


@dataclass(frozen=True)
class Wanted:
    """What to compute from a file.

    Attributes
    ----------
    definitions
        The indices by name.
    phases
        The growth phases their definitions name.
    variables
        The climate variables they need, in the file.
    """

    definitions: Mapping[str, IndexDefinition]
    phases: Phases
    variables: tuple[str, ...]

    @classmethod
    def of(
        cls,
        definitions: Mapping[str, IndexDefinition],
        phases: Phases,
        available: Sequence[str],
        step: TimeStep,
        path: Path | str,
    ) -> Wanted:
        """Return what to compute, having checked that it can be.

        Raises
        ------
        InputError
            If an index needs a variable or a time step the file does not have, or a phase that is
            not defined.
        """
        needed: dict[str, None] = {}
        for name, definition in definitions.items():
            found = sources(definition, available)
            if found is None:
                raise InputError(
                    f"{path}: index {name} ({describe(definition)}) cannot be computed from "
                    f"{', '.join(available) or 'no variable'}; add what it needs"
                )
            if step != "daily" and isinstance(definition, _DAILY):
                raise InputError(
                    f"{path}: index {name} ({describe(definition)}) needs daily values; "
                    f"these are {step}"
                )
            if definition.phase not in (SEASON, *phases):
                raise InputError(
                    f"{path}: index {name} is over phase {definition.phase}, which is not one of "
                    f"{', '.join((SEASON, *phases))}"
                )
            needed |= dict.fromkeys(found)
        return cls(definitions, phases, tuple(needed))


def season_indices(
    climate: xr.Dataset,
    planting: xr.DataArray,
    maturity: xr.DataArray,
    reason: xr.DataArray,
    definitions: Mapping[str, IndexDefinition],
    phases: Phases,
    path: Path | str = "climate grids",
) -> xr.Dataset:
    """Return one value per season and pixel of every index.

    Parameters
    ----------
    climate
        Daily, monthly or annual grids (time, lat, lon) of one simulation: tas, tasmin, tasmax
        (degC), pr (mm day-1), rsds (W m-2), hurs (%), cftime times and attribute ``time_step``;
        lazy in blocks of pixels with whole series, or not. ``reason_<variable>`` (lat, lon), where
        there, says why a variable is missing at a pixel.
    planting, maturity
        Day of year, 1 to 365 (lat, lon).
    reason
        int8 (lat, lon); a pixel is computed where it is 0.
    definitions
        The indices by name.
    phases
        Growth phases as fractions of the season.
    path
        What the grids are, for messages.

    Returns
    -------
    Dataset
        float64 (year, lat, lon) per index, by year of harvest, for every calendar year of the
        series; ``reason`` int8 (lat, lon), 0 where at least one year has every index. Missing:
        seasons the series does not cover, and seasons or phases with a missing value.

    Raises
    ------
    InputError
        See `Wanted.of`; also if the times are not continuous.
    """
    step: TimeStep = climate.attrs["time_step"]
    available = [str(name) for name, v in climate.data_vars.items() if v.dims[0] == "time"]
    wanted = Wanted.of(definitions, phases, available, step, path)
    time = SeriesTime.of(climate["time"].values, step, path)
    grids = [climate[name] for name in wanted.variables]
    lost = _input_reason(climate, wanted.variables, reason)
    layers = chunked_like(grids[0], [planting, maturity, reason, lost])
    results = xr.apply_ufunc(
        _block,
        *layers,
        *grids,
        kwargs={"time": time, "wanted": wanted},
        input_core_dims=[[]] * len(layers) + [["time"]] * len(grids),
        output_core_dims=[["year"]] * len(definitions) + [[]],
        output_dtypes=[np.float64] * len(definitions) + [np.int8],
        dask="parallelized",
        dask_gufunc_kwargs={"output_sizes": {"year": len(time.years)}},
        join="exact",
    )
    data = {
        name: grid.transpose("year", "lat", "lon").assign_attrs(_attributes(definition))
        for (name, definition), grid in zip(definitions.items(), results[:-1], strict=True)
    }
    data["reason"] = results[-1].assign_attrs(reason_attributes())
    dataset = xr.Dataset(data).drop_vars(["time", "crop_system"], errors="ignore")
    return dataset.assign_coords(year=("year", time.years, YEAR_ATTRIBUTES))


def _block(*arrays: np.ndarray, time: SeriesTime, wanted: Wanted) -> tuple[np.ndarray, ...]:
    """Return the indices (lat, lon, year) and the reason (lat, lon) of a block of pixels.

    Takes planting, maturity, reason, the reason of missing input (lat, lon), and the series of
    the variables (lat, lon, time).
    """
    shape = arrays[0].shape
    planting, maturity, reason, input_reason = (one.ravel() for one in arrays[:4])
    there = np.flatnonzero(reason == int(Reason.VALID))
    series = {
        name: _columns(grid, there) for name, grid in zip(wanted.variables, arrays[4:], strict=True)
    }
    seasons = Seasons.of(
        time, planting[there].astype(np.float64), maturity[there].astype(np.float64)
    )
    complete = np.ones((len(time.years), len(there)), dtype=bool)
    results = []
    for definition in wanted.definitions.values():
        part = seasons
        if definition.phase != SEASON:
            part = seasons.phase(wanted.phases[definition.phase], time.daily)
        values = season_index(definition, series, part, time)
        complete &= ~np.isnan(values)
        result = np.full((len(time.years), reason.size), np.nan)
        result[:, there] = values
        results.append(np.moveaxis(result.reshape(-1, *shape), 0, -1))
    why = reason.astype(np.int8)
    for pixel in np.flatnonzero(~complete.any(axis=0)):
        empty = any(np.isnan(grid[:, pixel]).all() for grid in series.values())
        known = input_reason[there[pixel]] or int(Reason.MISSING_INPUT)
        why[there[pixel]] = known if empty else int(Reason.INCOMPLETE_SEASON)
    return (*results, why.reshape(shape))


def season_index(
    definition: IndexDefinition,
    series: Mapping[str, np.ndarray],
    seasons: Seasons,
    time: SeriesTime,
) -> np.ndarray:
    """Return one index of some pixels.

    Parameters
    ----------
    definition
        The index.
    series
        Arrays (time, pixel) of the variables it needs.
    seasons
        The seasons, or the phase, of the pixels.
    time
        The time axis.

    Returns
    -------
    ndarray
        float64, shape (year, pixel).
    """
    match definition:
        case Mean(variable=variable):
            return _mean(variable, series, seasons, time)
        case Total():
            return _mean("pr", series, seasons, time) * seasons.nominal
        case VapourPressureDeficit():
            given = series["tasmin"], series["tasmax"], series["hurs"]
            if not time.daily:
                deficits = step_deficits(*given)
                return interval_means(deficits, time.edges, seasons.begin, seasons.end)
            first, end = seasons.days()
            return season_vapour_pressure_deficits(*given, first, end) / (end - first)
        case DrySpell(wet_day=wet_day):
            return season_dry_spells(series["pr"], *seasons.days(), wet_day)
        case LargestTotal(days=days):
            return season_largest_totals(series["pr"], *seasons.days(), days)
        case _:
            counted = _daily_sums(definition, series, *seasons.days())
            return counted * (seasons.nominal / (seasons.end - seasons.begin))


def _daily_sums(
    definition: IndexDefinition,
    series: Mapping[str, np.ndarray],
    first: np.ndarray,
    end: np.ndarray,
) -> np.ndarray:
    """Return sums or counts over the days of the calendar, not yet in real days."""
    match definition:
        case DegreeDays(base=base, cap=cap):
            pair = series["tasmin"], series["tasmax"]
            top = np.inf if cap is None else cap
            return season_degree_days(*pair, first, end, base, top)
        case DaysAbove(variable=variable, threshold=threshold):
            own = series.get(variable)
            pair = (own, own) if own is not None else (series["tasmin"], series["tasmax"])
            return season_counts(*pair, first, end, threshold)
        case WetDays(wet_day=wet_day):
            below = np.nextafter(wet_day, -np.inf)  # above it means: at least a wet day
            return season_counts(series["pr"], series["pr"], first, end, below)
        case _:
            raise TypeError(f"no daily sum for {definition}")


def _mean(
    variable: str, series: Mapping[str, np.ndarray], seasons: Seasons, time: SeriesTime
) -> np.ndarray:
    if variable == "diurnal-range":
        high, low = (_mean(name, series, seasons, time) for name in ("tasmax", "tasmin"))
        return high - low
    if variable not in series:  # tas, which stands for the mean of the two
        low, high = (_mean(name, series, seasons, time) for name in ("tasmin", "tasmax"))
        return 0.5 * (low + high)
    if not time.daily:
        return interval_means(series[variable], time.edges, seasons.begin, seasons.end)
    first, end = seasons.days()
    return season_sums(series[variable], first, end) / (end - first)


def _columns(grid: np.ndarray, there: np.ndarray) -> np.ndarray:
    """Return the series of some pixels, (time, pixel), from a block (lat, lon, time)."""
    flat = np.moveaxis(grid, -1, 0).reshape(grid.shape[-1], -1)
    return np.ascontiguousarray(flat if len(there) == flat.shape[1] else flat[:, there])


def _input_reason(
    climate: xr.Dataset, variables: Sequence[str], reason: xr.DataArray
) -> xr.DataArray:
    """Return the first reason a variable of the file gives for missing values, else 0."""
    result = xr.zeros_like(reason, dtype=np.int8)
    for name in variables:
        if f"reason_{name}" in climate:
            result = result.where(result != 0, climate[f"reason_{name}"].astype(np.int8))
    return result


def _attributes(definition: IndexDefinition) -> dict[str, str]:
    attributes = {"long_name": describe(definition), "units": unit_of(definition)}
    match definition:
        case Mean(variable="diurnal-range") | DegreeDays():
            attributes["units_metadata"] = "temperature: difference"
        case Mean(variable=variable):
            attributes["standard_name"] = _STANDARD_NAMES[variable]
            if variable.startswith("tas"):
                attributes["units_metadata"] = "temperature: on_scale"
        case Total() | LargestTotal():
            attributes["standard_name"] = "lwe_thickness_of_precipitation_amount"
        case VapourPressureDeficit():
            attributes["standard_name"] = "water_vapor_saturation_deficit_in_air"
    return attributes
