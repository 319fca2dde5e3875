"""What all blocks of a correction have in common: time axes, windows, samples, periods."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from stook.assessment.schema import Correct, VariableCorrection
from stook.correct.kernels_pixels import Rule
from stook.correct.kernels_windows import Application, Calibration
from stook.correct.plan import application_plan, calibration_plan, rule_of
from stook.correct.windows import Series, record_times, year_windows
from stook.errors import InputError

PAIR = ("tasmin", "tasmax")
MEAN_TEMPERATURE, DIURNAL_RANGE = "mean_temperature", "diurnal_range"
HALVES = ("first half", "second half")
ALTERNATE = ("even years", "odd years")
"""Samples of the calibration period; each is evaluated with the correction of its complement."""


@dataclass(frozen=True)
class Quantity:
    """What is mapped: a variable, or the mean or the range of the temperature pair.

    `trace` is the amount below which a value is dry, 0 for all but precipitation.
    """

    name: str
    choice: VariableCorrection
    ratio: bool
    trace: float = 0.0


@dataclass(frozen=True)
class Tables:
    """Tables of one quantity for one part of the series."""

    quantity: Quantity
    o_plan: Calibration
    h_plan: Calibration
    f_plan: Application
    rule: Rule
    changes: tuple[Change, ...] = ()


@dataclass(frozen=True)
class Change:
    """Years to which `delta` gives the record, changed as the simulation changes.

    Attributes
    ----------
    at
        Their times, of the series to correct.
    record
        Times of the reference that are used.
    source
        Of each of `at` its place in `record`.
    window
        Times of the series to correct, around those years, whose mean is compared with that of the
        model in the calibration period.
    tables
        With the window as reference and the record as the series; None in calibration years, where
        the record stays as it is.
    """

    at: np.ndarray
    record: np.ndarray
    source: np.ndarray
    window: np.ndarray
    tables: Tables | None


@dataclass(frozen=True)
class Part:
    """Times to calibrate on and to correct, and the tables of every quantity.

    `o` indexes the reference, `h` and `f` the simulation.
    """

    o: np.ndarray
    h: np.ndarray
    f: np.ndarray
    mappings: Mapping[str, Tables]


@dataclass(frozen=True)
class Sample:
    """Times that are evaluated, of the reference and the simulation, and how they are corrected."""

    name: str
    o: np.ndarray
    part: Part


@dataclass(frozen=True)
class Period:
    """Times of the simulation between a first and a last year."""

    name: str
    years: tuple[int, int]
    start: int
    end: int


@dataclass(frozen=True)
class Setup:
    """All that a block needs besides its values.

    Attributes
    ----------
    simulation, seed
        Name of the simulation and seed of the assessment.
    correct
        The choices of the assessment file.
    groups
        Variables that are corrected together.
    reference, model
        Time axes.
    calibration
        First and last year of calibration that both have.
    whole
        The correction that is written.
    samples
        The split-sample evaluation.
    periods
        The calibration period, then the horizons.
    """

    simulation: str
    seed: int
    correct: Correct
    groups: tuple[tuple[str, ...], ...]
    reference: Series | None
    model: Series
    calibration: tuple[int, int]
    whole: Part
    samples: tuple[Sample, ...]
    periods: tuple[Period, ...]


def groups_of(variables: Sequence[str]) -> tuple[tuple[str, ...], ...]:
    """Return the variables in groups that are corrected together: the temperature pair, others."""
    pair = set(PAIR) <= set(variables)
    single = [(name,) for name in variables if not (pair and name in PAIR)]
    return ((PAIR,) if pair else ()) + tuple(single)


def quantities_of(group: tuple[str, ...], correct: Correct) -> list[Quantity]:
    """Return what is mapped for a group of variables; nothing for those not corrected."""
    if group == PAIR and correct.temperature_pair == "mean-and-range":
        choice = correct.choice(PAIR[0])
        found = [Quantity(MEAN_TEMPERATURE, choice, False), Quantity(DIURNAL_RANGE, choice, True)]
    else:
        choices = {name: correct.choice(name) for name in group}
        found = [
            Quantity(name, choice, choice.kind == "ratio", choice.trace if name == "pr" else 0.0)
            for name, choice in choices.items()
        ]
    return [quantity for quantity in found if quantity.choice.method != "none"]


def make_setup(
    reference: Series | None,
    model: Series,
    variables: Sequence[str],
    correct: Correct,
    calibration: tuple[int, int],
    horizons: Mapping[str, tuple[int, int]],
    simulation: str,
    seed: int,
) -> Setup:
    """Return the setup of a simulation.

    Parameters
    ----------
    reference, model
        Time axes of reference and simulation, of one time step; no reference where nothing is
        corrected.
    variables
        Variables of the simulation.
    correct, calibration, horizons, simulation, seed
        From the assessment.

    Raises
    ------
    InputError
        If reference and simulation share fewer than two years of calibration.
    """
    o, f = reference, model
    groups = groups_of(variables)
    first, last = _common_years(o, f, calibration, simulation)
    quantities = [quantity for group in groups for quantity in quantities_of(group, correct)]
    everything = np.arange(len(f))
    calibrated = np.flatnonzero(f.years(first, last))
    samples: tuple[Sample, ...] = ()
    if o is None:
        whole = Part(everything[:0], everything[:0], everything, {})
    else:
        inside = np.flatnonzero(o.years(first, last))
        whole = _part(o, f, inside, calibrated, everything, quantities)
        samples = _samples(o, f, inside, calibrated, quantities)
    wanted = {"calibration": (first, last)} | dict(horizons)
    periods = tuple(_period(name, years, f) for name, years in wanted.items())
    return Setup(simulation, seed, correct, groups, o, f, (first, last), whole, samples, periods)


def _samples(
    o: Series,
    f: Series,
    o_times: np.ndarray,
    f_times: np.ndarray,
    quantities: Sequence[Quantity],
) -> tuple[Sample, ...]:
    """Return the samples: the times of both series, split by halves and by alternate years."""
    years = np.unique(f.year[f_times])
    middle = years[0] + len(years) // 2
    tests = {
        HALVES[0]: lambda year: year < middle,
        HALVES[1]: lambda year: year >= middle,
        ALTERNATE[0]: lambda year: year % 2 == 0,
        ALTERNATE[1]: lambda year: year % 2 == 1,
    }
    found = []
    for name, test in tests.items():
        o_here, f_here = test(o.year[o_times]), test(f.year[f_times])
        part = _part(o, f, o_times[~o_here], f_times[~f_here], f_times[f_here], quantities)
        found.append(Sample(name, o_times[o_here], part))
    return tuple(found)


def _part(
    o: Series,
    f: Series,
    o_times: np.ndarray,
    h_times: np.ndarray,
    f_times: np.ndarray,
    quantities: Sequence[Quantity],
) -> Part:
    series = (o.part(o_times), f.part(h_times), f.part(f_times))
    mappings = {quantity.name: tables_of(quantity, *series) for quantity in quantities}
    return Part(o_times, h_times, f_times, mappings)


def tables_of(quantity: Quantity, o: Series, h: Series, f: Series) -> Tables:
    """Return the tables of a quantity.

    Parameters
    ----------
    quantity
        What is mapped, and how.
    o, h, f
        Time axes: reference and model in the calibration period, model to correct.
    """
    choice = quantity.choice
    return Tables(
        quantity,
        calibration_plan(o, choice),
        calibration_plan(h, choice),
        application_plan(f, choice, int(h.year.min())),
        rule_of(choice, quantity.ratio, quantity.trace, f.step),
        _changes(quantity, o, h, f) if choice.method == "delta" and len(f) else (),
    )


def _changes(quantity: Quantity, o: Series, h: Series, f: Series) -> tuple[Change, ...]:
    """Return what `delta` does to each part of the series to correct."""
    choice = quantity.choice
    source = record_times(o, f)
    years = year_windows(f, int(h.year.min()), choice.cdf_years, choice.cdf_step_years)
    calibrated = np.isin(f.year, h.year)
    mean = replace(quantity, choice=choice.model_copy(update={"method": "mean"}))
    found = []
    for number in (-1, *range(years.count)):
        at = np.flatnonzero(np.where(calibrated, -1, years.own) == number)
        if not len(at):
            continue
        record, places = np.unique(source[at], return_inverse=True)
        inside = (years.first <= number) & (number < years.first + years.number)
        window = np.flatnonzero(inside)
        tables = None if number < 0 else tables_of(mean, f.part(window), h, o.part(record))
        found.append(Change(at, record, places.ravel(), window, tables))
    return tuple(found)


def _common_years(
    o: Series | None, f: Series, calibration: tuple[int, int], simulation: str
) -> tuple[int, int]:
    first = max(calibration[0], int(f.year[0]))
    last = min(calibration[1], int(f.year[-1]))
    if o is not None:
        first, last = max(first, int(o.year[0])), min(last, int(o.year[-1]))
    if last - first < 1:
        raise InputError(
            f"{simulation}: reference and simulation share fewer than two of the calibration years "
            f"{calibration[0]} to {calibration[1]}; change correct.calibration or give more years"
        )
    return first, last


def _period(name: str, years: tuple[int, int], f: Series) -> Period:
    """Return a period; empty unless the simulation holds all its years."""
    if years[0] < f.year[0] or years[1] > f.year[-1]:
        return Period(name, years, 0, 0)
    times = np.flatnonzero(f.years(*years))
    return Period(name, years, int(times[0]), int(times[-1]) + 1)
