"""Writing the climate files: the reference record and every model's simulations."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import ExitStack, closing
from dataclasses import dataclass
from functools import cached_property
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
    Bias,
    Change,
    Latent,
    State,
    knots,
    latent_weather,
    mean_state,
    mode_weights,
    warming_path,
    weather,
)

RECORD = "HOLLIN-OBS"
RECORD_SCENARIO = "moderate"
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


@dataclass(frozen=True)
class Source:
    """A climate and its weather at the cells of a grid, ready to be sampled.

    Attributes
    ----------
    lat, lon
        Axes of the grid, ascending, degrees.
    axis
        Time steps.
    latent
        The weather of all time steps.
    scenario
        Scenario of the years from 2015 on.
    bias, change
        The model's, or nature's.
    """

    domain: Domain
    lat: np.ndarray
    lon: np.ndarray
    axis: TimeAxis
    latent: Latent
    scenario: str
    bias: Bias = NO_BIAS
    change: Change = NATURE

    @cached_property
    def cells(self) -> list[np.ndarray]:
        """Latitude and longitude of every cell, shape (cell,)."""
        return [grid.ravel() for grid in np.meshgrid(self.lat, self.lon, indexing="ij")]

    @cached_property
    def law(self) -> State:
        """The law at every day of the year and cell."""
        up, across = self.domain.up(self.cells[0]), self.domain.across(self.cells[1])
        return mean_state(across, up, self.axis.fractions, self.bias, self.change)

    @cached_property
    def weights(self) -> np.ndarray:
        """Weight of every mode at every cell."""
        return mode_weights(self.domain, *self.cells)

    @cached_property
    def path(self) -> np.ndarray:
        """Warming path at every time step, K."""
        return warming_path(self.scenario, self.axis.fractional_year)

    def daily(self, part: slice) -> dict[str, np.ndarray]:
        """Return the weather of some time steps, shape (time, cell): degC, mm/day and %."""
        return weather(
            self.law, self.axis.day[part], self.path[part], self.latent.days(part),
            self.weights, self.bias, self.change,
        )  # fmt: skip


def record_source(domain: Domain, seed: int) -> Source:
    """Return the reference record on the analysis grid."""
    axis = TimeAxis.of(domain.record, "standard")
    latent = latent_weather(seed, [(RECORD, len(axis.day))], len(knots(domain)))
    return Source(domain, domain.lat, domain.lon, axis, latent, RECORD_SCENARIO)


def simulation_source(domain: Domain, seed: int, model: Model, scenario: str) -> Source:
    """Return a simulation on its own grid; scenarios of a model share the historical part."""
    axis = TimeAxis.of(domain.simulated, model.calendar)
    past = int((axis.year < FIRST_SCENARIO_YEAR).sum())
    parts = [
        (f"{model.name} historical", past),
        (f"{model.name} {scenario}", len(axis.day) - past),
    ]
    latent = latent_weather(seed, [part for part in parts if part[1]], len(knots(domain)))
    lat, lon = model.axes(domain)
    return Source(domain, lat, lon, axis, latent, scenario, model.bias, model.change)


def write_record(folder: Path, domain: Domain, seed: int) -> None:
    """Write HOLLIN-OBS: one file a variable, on the analysis grid, degC and mm/day."""
    source = record_source(domain, seed)
    series = _Series(source, ("lat", "lon"), PLAIN_UNITS, _titles(RECORD, "", seed))
    first, last = domain.record
    files = {name: folder / f"{name}_day_{RECORD}_{first}-{last}.nc" for name in VARIABLES}
    _write(files, series, slice(0, len(source.axis.day)))


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
    source = simulation_source(domain, seed, model, scenario)
    year = source.axis.year
    for experiment, first, last in file_years(domain, model, scenario):
        if experiment == "historical" and not historical:
            continue
        titles = _titles(model.name, experiment, seed)
        series = _Series(
            source, model.axis_names, model.units, titles, model.descending, model.eastward
        )
        stop = f"{last}12{30 if model.calendar == '360_day' else 31}"
        label = f"day_{model.name}_{experiment}_{REALISATION}_gn_{first}0101-{stop}"
        files = {name: folder / f"{name}_{label}.nc" for name in VARIABLES}
        days = np.nonzero((year >= first) & (year <= last))[0]
        _write(files, series, slice(int(days[0]), int(days[-1]) + 1))


def file_years(domain: Domain, model: Model, scenario: str) -> Iterator[tuple[str, int, int]]:
    """Yield experiment, first and last year of every file of a simulation's variable."""
    first, last = domain.simulated
    boundary = FIRST_SCENARIO_YEAR
    for experiment, begin, end in (
        ("historical", first, min(last, boundary - 1)),
        (scenario, max(first, boundary), last),
    ):
        while begin <= end:
            step = model.file_years
            stop = end if step is None else min(end, begin + step - 1 - (begin - 1) % step)
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


@dataclass(frozen=True)
class _Series:
    """What all files of a series share; see `Model` for the fields."""

    source: Source
    names: tuple[str, str]
    units: dict[str, str]
    titles: dict[str, str]
    descending: bool = False
    eastward: bool = False


def _write(files: dict[str, Path], series: _Series, days: slice) -> None:
    """Write the files of one period, one a variable, block by block."""
    source = series.source
    shape = (-1, len(source.lat), len(source.lon))
    with ExitStack() as stack:
        datasets = {
            name: stack.enter_context(closing(_create(name, path, series, days)))
            for name, path in files.items()
        }
        for part in _blocks(days.start, days.stop, shape[1] * shape[2]):
            values = source.daily(part)
            inside = slice(part.start - days.start, part.stop - days.start)
            for name, dataset in datasets.items():
                grid = _convert(values[name], name, series.units[name]).reshape(shape)
                dataset[name][inside] = grid[:, ::-1] if series.descending else grid


def _create(name: str, path: Path, series: _Series, days: slice) -> netCDF4.Dataset:
    """Create a file with its coordinates and an empty variable."""
    path.parent.mkdir(parents=True, exist_ok=True)
    dataset = netCDF4.Dataset(path, "w", format="NETCDF4")
    dataset.setncatts(series.titles)
    dataset.createDimension("time", days.stop - days.start)
    dataset.createDimension("bnds", 2)
    _time(dataset, series.source.axis, days)
    lon = series.source.lon % 360 if series.eastward else series.source.lon
    lat = series.source.lat[::-1] if series.descending else series.source.lat
    _axis(dataset, series.names[0], "latitude", "degrees_north", "Y", lat)
    _axis(dataset, series.names[1], "longitude", "degrees_east", "X", lon)
    chunks = (min(CHUNK_DAYS, days.stop - days.start), *(min(24, len(a)) for a in (lat, lon)))
    variable = dataset.createVariable(
        name, "f4", ("time", *series.names), zlib=True, complevel=1, shuffle=True,
        chunksizes=chunks, fill_value=np.float32(1e20),
    )  # fmt: skip
    standard, long_name = ATTRIBUTES[name]
    unit = series.units[name]
    # CMIP gives rain as a mass flux; a depth per day has a standard name of its own.
    if name == "pr" and unit == "mm day-1":
        standard = "lwe_precipitation_rate"
    attributes = {"standard_name": standard, "long_name": long_name, "units": unit}
    variable.setncatts(attributes | {"cell_methods": CELL_METHODS[name]})
    if name in ("tasmin", "tasmax"):
        variable.units_metadata = "temperature: on_scale"
    return dataset


def _time(dataset: netCDF4.Dataset, axis: TimeAxis, days: slice) -> None:
    midnight = axis.start() + np.arange(days.start, days.stop)
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
    if axis.calendar == "standard":
        time.units_metadata = "leap_seconds: none"
    time[:] = midnight + 0.5
    dataset.createVariable("time_bnds", "f8", ("time", "bnds"))[:] = np.stack(
        [midnight, midnight + 1], axis=1
    )


def _axis(
    dataset: netCDF4.Dataset, name: str, standard: str, unit: str, letter: str, values: np.ndarray
) -> None:
    dataset.createDimension(name, len(values))
    variable = dataset.createVariable(name, "f8", (name,))
    attributes = {"standard_name": standard, "units": unit, "axis": letter}
    variable.setncatts(attributes | {"bounds": f"{name}_bnds"})
    variable[:] = values
    half = (values[1] - values[0]) / 2
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
