"""What all blocks of a correction have in common: time axes, windows, samples, periods."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr

from stook.assessment.schema import Correct, VariableCorrection
from stook.correct.kernels_pixels import Rule
from stook.correct.kernels_windows import Application, Calibration
from stook.correct.plan import application_plan, calibration_plan, rule_of, series_of
from stook.correct.windows import Series, TimeStep
from stook.errors import InputError

PAIR = ("tasmin", "tasmax")
MEAN_TEMPERATURE, DIURNAL_RANGE = "mean_temperature", "diurnal_range"
SAMPLES = ("first half", "second half")
"""Halves of the calibration period; each is evaluated with the correction of the other."""


@dataclass(frozen=True)
class Quantity:
    """What is mapped: a variable, or the mean or the range of the temperature pair."""

    name: str
    choice: VariableCorrection
    ratio: bool


@dataclass(frozen=True)
class Tables:
    """Tables of one quantity for one part of the series."""

    quantity: Quantity
    o_plan: Calibration
    h_plan: Calibration
    f_plan: Application
    rule: Rule


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
        found = [Quantity(name, choice, choice.kind == "ratio") for name, choice in choices.items()]
    return [quantity for quantity in found if quantity.choice.method != "none"]


def make_setup(
    reference: xr.DataArray | None,
    model: xr.DataArray,
    step: TimeStep,
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
        Time coordinates (cftime) of reference and simulation; no reference where nothing is
        corrected.
    step
        Time step of both.
    variables
        Variables of the simulation.
    correct, calibration, horizons, simulation, seed
        From the assessment.

    Raises
    ------
    InputError
        If reference and simulation share fewer than two years of calibration.
    """
    f = series_of(model, step)
    o = None if reference is None else series_of(reference, step)
    groups = groups_of(variables)
    first, last = _common_years(o, f, calibration, simulation)
    quantities = [quantity for group in groups for quantity in quantities_of(group, correct)]
    everything = np.arange(len(f))
    calibrated = np.flatnonzero(f.years(first, last))
    samples: list[Sample] = []
    if o is None:
        whole = Part(everything[:0], everything[:0], everything, {})
    else:
        inside = np.flatnonzero(o.years(first, last))
        whole = _part(o, f, inside, calibrated, everything, quantities)
        for name, early in zip(SAMPLES, (True, False), strict=True):
            middle = first + (last - first + 1) // 2
            o_here = inside[(o.year[inside] < middle) == early]
            o_other = inside[(o.year[inside] < middle) != early]
            here = calibrated[(f.year[calibrated] < middle) == early]
            other = calibrated[(f.year[calibrated] < middle) != early]
            samples.append(Sample(name, o_here, _part(o, f, o_other, other, here, quantities)))
    wanted = {"calibration": (first, last)} | dict(horizons)
    periods = tuple(_period(name, years, f) for name, years in wanted.items())
    return Setup(
        simulation, seed, correct, groups, o, f, (first, last), whole, tuple(samples), periods
    )


def _part(
    o: Series,
    f: Series,
    o_times: np.ndarray,
    h_times: np.ndarray,
    f_times: np.ndarray,
    quantities: Sequence[Quantity],
) -> Part:
    mappings = {}
    o_part, h_part, f_part = o.part(o_times), f.part(h_times), f.part(f_times)
    for quantity in quantities:
        choice = quantity.choice
        mappings[quantity.name] = Tables(
            quantity,
            calibration_plan(o_part, choice),
            calibration_plan(h_part, choice),
            application_plan(f_part, choice, int(h_part.year[0])),
            rule_of(choice, quantity.ratio, o.step),
        )
    return Part(o_times, h_times, f_times, mappings)


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
