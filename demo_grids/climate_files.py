"""Writing the climate files: the reference record and every model's simulations."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import netCDF4
import numpy as np
from stook.version import VERSION

from demo_grids.domain import FIRST_SCENARIO_YEAR, Domain
from demo_grids.models import MODELS, PLAIN_UNITS, REALISATION, Model, TimeAxis
from demo_grids.weather import (
    NATURE,
    NO_BIAS,
    VARIABLES,
    Latent,
    knots,
    latent_weather,
    mean_state,
    mode_weights,
    warming_path,
    weather,
)

RECORD = "HOLLIN-OBS"
BLOCK_VALUES = 4_000_000
CHUNK_DAYS = 1460
EPOCH = "days since 1850-01-01"
ATTRIBUTES = {
    "tasmin": ("air_temperature", "Daily Minimum Near-Surface Air Temperature"),
    "tasmax": ("air_temperature", "Daily Maximum Near-Surface Air Temperature"),
    "pr": ("precipitation_flux", "Precipitation"),
    "hurs": ("relative_humidity", "Near-Surface Relative Humidity"),
}
CELL_METHODS = {
    "tasmin": "area: mean time: minimum",
    "tasmax": "area: mean time: maximum",
    "pr": "area: time: mean",
    "hurs": "area: time: mean",
}


def record_axis(domain: Domain) -> TimeAxis:
    """Return the time axis of the reference record."""
    return TimeAxis.of(domain.record, "standard")


def record_latent(domain: Domain, seed: int) -> Latent:
    """Return the weather of the reference record."""
    return latent_weather(seed, [(RECORD, len(record_axis(domain).day))], len(knots(domain)))


def simulation_axis(domain: Domain, model: Model) -> TimeAxis:
    """Return the time axis of a whole simulation, historical and scenario part together."""
    return TimeAxis.of(domain.simulated, model.calendar)


def simulation_latent(domain: Domain, seed: int, model: Model, scenario: str) -> Latent:
    """Return the weather of a simulation; scenarios of a model share the historical part."""
    axis = simulation_axis(domain, model)
    past = int((axis.year < FIRST_SCENARIO_YEAR).sum())
    parts = [
        (f"{model.name} historical", past),
        (f"{model.name} {scenario}", len(axis.day) - past),
    ]
    return latent_weather(seed, [part for part in parts if part[1]], len(knots(domain)))


def write_record(folder: Path, domain: Domain, seed: int) -> None:
    """Write HOLLIN-OBS: one file a variable, on the analysis grid, degC and mm/day."""
    axis = record_axis(domain)
    lat, lon = domain.lat, domain.lon
    cells = [grid.ravel() for grid in np.meshgrid(lat, lon, indexing="ij")]
    law = mean_state(domain.across(cells[1]), domain.up(cells[0]), axis.fractions)
    latent = record_latent(domain, seed)
    weights = mode_weights(domain, *cells)
    path = warming_path("moderate", axis.fractional_year)
    folder.mkdir(parents=True, exist_ok=True)
    series = _Series(lat, lon, ("lat", "lon"), False, PLAIN_UNITS, _titles(RECORD, "", seed))
    files = {
        name: folder / f"{name}_day_{RECORD}_{axis.years[0]}-{axis.years[1]}.nc"
        for name in VARIABLES
    }
    with _Writer(files, series, axis, 0, len(axis.day)) as writer:
        for part in _blocks(0, len(axis.day), len(cells[0])):
            writer.put(
                part,
                weather(
                    law, axis.day[part], path[part], latent.days(part), weights, NO_BIAS, NATURE
                ),
            )


def write_simulation(
    folder: Path, domain: Domain, seed: int, model: Model, scenario: str, historical: bool
) -> None:
    """Write one simulation of a model.

    Parameters
    ----------
    folder
        Where the files go.
    domain, seed
        The world.
    model, scenario
        The simulation.
    historical
        Whether to write the historical part too (once a model is enough).
    """
    axis = simulation_axis(domain, model)
    lat, lon = model.axes(domain)
    cells = [grid.ravel() for grid in np.meshgrid(lat, lon, indexing="ij")]
    law = mean_state(
        domain.across(cells[1]), domain.up(cells[0]), axis.fractions, model.bias, model.change
    )
    latent = simulation_latent(domain, seed, model, scenario)
    weights = mode_weights(domain, *cells)
    path = warming_path(scenario, axis.fractional_year)
    folder.mkdir(parents=True, exist_ok=True)
    for experiment, first, last in file_years(domain, model, scenario):
        if experiment == "historical" and not historical:
            continue
        days = np.nonzero((axis.year >= first) & (axis.year <= last))[0]
        begin, end = int(days[0]), int(days[-1]) + 1
        titles = _titles(model.name, experiment, seed)
        series = _Series(lat, lon, model.axis_names, model.descending, model.units, titles)
        stop = f"{last}12{30 if model.calendar == '360_day' else 31}"
        label = f"day_{model.name}_{experiment}_{REALISATION}_gn_{first}0101-{stop}"
        files = {name: folder / f"{name}_{label}.nc" for name in VARIABLES}
        with _Writer(files, series, axis, begin, end, model.eastward) as writer:
            for part in _blocks(begin, end, len(cells[0])):
                today = latent.days(part)
                writer.put(
                    part,
                    weather(
                        law, axis.day[part], path[part], today, weights, model.bias, model.change
                    ),
                )


def file_years(domain: Domain, model: Model, scenario: str) -> Iterator[tuple[str, int, int]]:
    """Yield experiment, first and last year of every file of a simulation's variable."""
    first, last = domain.simulated
    boundary = FIRST_SCENARIO_YEAR
    for experiment, begin, end in (
        ("historical", first, min(last, boundary - 1)),
        (scenario, max(first, boundary), last),
    ):
        while begin <= end:
            step = model.file_years or 1000
            stop = min(end, begin + (step - 1 - (begin - 1) % step))
            yield experiment, begin, stop
            begin = stop + 1


def scenarios(domain: Domain) -> list[tuple[Model, str, bool]]:
    """Return every simulation: model, scenario, and whether it writes the historical part."""
    return [
        (MODELS[name], scenario, place == 0)
        for name, given in domain.members.items()
        for place, scenario in enumerate(given)
    ]


def _blocks(begin: int, end: int, cells: int) -> Iterator[slice]:
    """Yield blocks of days of a bounded number of values, in whole chunks of the files."""
    days = max(1, BLOCK_VALUES // cells // CHUNK_DAYS) * CHUNK_DAYS
    for start in range(begin, end, days):
        yield slice(start, min(start + days, end))


def _titles(source: str, experiment: str, seed: int) -> dict[str, str]:
    title = f"Invented daily weather of Hollin: {source}"
    attributes = {
        "Conventions": "CF-1.11",
        "title": f"{title}, {experiment}" if experiment else title,
        "institution": "Invented for the demo world of Stook",
        "source": f"{source} (invented)",
        "source_id": source,
        "frequency": "day",
        "history": f"Generated by demo_grids of Stook {VERSION}, seed {seed}",
        "comment": "Invented data: describes no real place and no real model.",
        "references": "docs/demo-world.md",
    }
    if experiment:
        attributes |= {"experiment_id": experiment, "variant_label": REALISATION}
    return attributes


class _Series:
    """What all files of a series share."""

    def __init__(
        self,
        lat: np.ndarray,
        lon: np.ndarray,
        names: tuple[str, str],
        descending: bool,
        units: dict[str, str],
        titles: dict[str, str],
    ) -> None:
        self.lat, self.lon, self.names = lat, lon, names
        self.descending, self.units, self.titles = descending, units, titles


class _Writer:
    """Open files of one period, one a variable, written block by block."""

    def __init__(
        self,
        files: dict[str, Path],
        series: _Series,
        axis: TimeAxis,
        begin: int,
        end: int,
        eastward: bool = False,
    ) -> None:
        self._series, self._begin = series, begin
        self._open = {
            name: self._create(name, path, axis, begin, end, eastward)
            for name, path in files.items()
        }

    def __enter__(self) -> _Writer:
        return self

    def __exit__(self, *exception: object) -> None:
        for dataset in self._open.values():
            dataset.close()

    def put(self, part: slice, values: dict[str, np.ndarray]) -> None:
        """Write the values of some days, shape (time, cell), degC, mm/day and %."""
        shape = (-1, len(self._series.lat), len(self._series.lon))
        for name, dataset in self._open.items():
            grid = _convert(values[name], name, self._series.units[name]).reshape(shape)
            if self._series.descending:
                grid = grid[:, ::-1]
            days = slice(part.start - self._begin, part.stop - self._begin)
            dataset[name][days] = grid.astype("f4")

    def _create(
        self, name: str, path: Path, axis: TimeAxis, begin: int, end: int, eastward: bool
    ) -> netCDF4.Dataset:
        series = self._series
        dataset = netCDF4.Dataset(path, "w", format="NETCDF4")
        dataset.setncatts(series.titles)
        dataset.createDimension("time", end - begin)
        dataset.createDimension("bnds", 2)
        _time(dataset, axis, begin, end)
        lon = series.lon % 360 if eastward else series.lon
        lat = series.lat[::-1] if series.descending else series.lat
        for label, standard, letter, values in zip(
            series.names, ("latitude", "longitude"), "YX", (lat, lon), strict=True
        ):
            unit = "degrees_north" if letter == "Y" else "degrees_east"
            _axis(dataset, label, {"standard_name": standard, "units": unit}, letter, values)
        standard, long_name = ATTRIBUTES[name]
        dims = ("time", *series.names)
        chunks = (min(CHUNK_DAYS, end - begin), *(min(24, len(axis)) for axis in (lat, lon)))
        variable = dataset.createVariable(
            name, "f4", dims, zlib=True, complevel=1, shuffle=True, chunksizes=chunks,
            fill_value=np.float32(1e20),
        )  # fmt: skip
        unit = series.units[name]
        # CMIP gives rain as a mass flux; a depth per day has a standard name of its own.
        if name == "pr" and unit == "mm day-1":
            standard = "lwe_precipitation_rate"
        variable.setncatts(
            {
                "standard_name": standard,
                "long_name": long_name,
                "units": unit,
                "cell_methods": CELL_METHODS[name],
            }
        )
        if name in ("tasmin", "tasmax"):
            variable.units_metadata = "temperature: on_scale"
        return dataset


def _time(dataset: netCDF4.Dataset, axis: TimeAxis, begin: int, end: int) -> None:
    midnight = axis.start() + np.arange(begin, end)
    time = dataset.createVariable("time", "f8", ("time",))
    time.setncatts(
        {
            "standard_name": "time",
            "units": EPOCH,
            "calendar": axis.calendar,
            "axis": "T",
            "bounds": "time_bnds",
        }
    )
    time[:] = midnight + 0.5
    dataset.createVariable("time_bnds", "f8", ("time", "bnds"))[:] = np.stack(
        [midnight, midnight + 1], axis=1
    )


def _axis(
    dataset: netCDF4.Dataset, name: str, attributes: dict[str, str], letter: str, values: np.ndarray
) -> None:
    dataset.createDimension(name, len(values))
    variable = dataset.createVariable(name, "f8", (name,))
    variable.setncatts(attributes | {"axis": letter, "bounds": f"{name}_bnds"})
    variable[:] = values
    half = abs(values[1] - values[0]) / 2 * np.sign(values[1] - values[0])
    dataset.createVariable(f"{name}_bnds", "f8", (name, "bnds"))[:] = np.stack(
        [values - half, values + half], axis=1
    )


def _convert(values: np.ndarray, name: str, unit: str) -> np.ndarray:
    """Convert degC, mm/day and % to the unit of a file."""
    match name, unit:
        case (("tasmin" | "tasmax"), "K"):
            return values + np.float32(273.15)
        case "pr", "kg m-2 s-1":
            return values / np.float32(86400)
        case "hurs", "1":
            return values / np.float32(100)
        case _:
            return values
