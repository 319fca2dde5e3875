"""The weather law of the invented world: what is expected where and when, and how it varies.

Temperature is a seasonal cycle plus a fast and a slow autoregressive anomaly, less on wet days.
Rain falls where a standard normal wetness passes a threshold; the amount of a wet day is gamma
distributed. The diurnal range is lognormal and smaller on wet days. Humidity is logistic-normal.
All anomalies are smooth functions of position, so the same weather can be written on any grid.
The law is invented; its ingredients are common practice in weather generators.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy import signal, special
from stook.randomness import generator

from demo_grids.domain import FIRST_SCENARIO_YEAR, Domain
from demo_grids.kernels import combine

VARIABLES = ("tasmin", "tasmax", "pr", "hurs")
KNOT_STEP = 2.2
MOST_KNOTS_ACROSS = 14
MARGIN = 4.0
FAST, SLOW, WET_FAST = 0.72, 0.975, 0.45
SLOW_SD = 0.8
SLOW_WET_SHARE = 0.04
WET_COOLING = 0.5
RANGE_WET, RANGE_NOISE = 0.18, 0.10
HUMIDITY_WET, HUMIDITY_FAST = 0.50, 0.20
RAIN_SHAPE = 0.75


@dataclass(frozen=True)
class Change:
    """What one unit of warming does; nature's own values, or a model's.

    Attributes
    ----------
    sensitivity
        Local warming per K of the scenario's path.
    rain_summer, rain_winter
        Relative change of mean rain per K of the path in summer and in winter.
    """

    sensitivity: float = 1.0
    rain_summer: float = -0.040
    rain_winter: float = 0.020


@dataclass(frozen=True)
class Bias:
    """How a model's climate differs from the true one; the defaults are no bias.

    Attributes
    ----------
    temperature, east, north, seasonal, peak
        Mean bias (K), its gradient to the east and the north edge of the world (K), amplitude
        (K) and time of the largest bias (fraction of the year).
    anomaly, diurnal
        Factors on temperature anomalies and on the diurnal range.
    wet_share
        Added to the share of days with rain.
    rain, rain_seasonal
        Relative bias of mean rain and its seasonal amplitude.
    rain_shape
        Shape of the gamma law of wet-day amounts (the true one is 0.75).
    humidity
        Shift of the logit of relative humidity.
    """

    temperature: float = 0.0
    east: float = 0.0
    north: float = 0.0
    seasonal: float = 0.0
    peak: float = 0.0
    anomaly: float = 1.0
    diurnal: float = 1.0
    wet_share: float = 0.0
    rain: float = 0.0
    rain_seasonal: float = 0.0
    rain_shape: float = RAIN_SHAPE
    humidity: float = 0.0


NATURE = Change()
NO_BIAS = Bias()


class State(NamedTuple):
    """The law at each day of the year and cell, shapes (day, cell), float32.

    temperature (degC), its spread (K), diurnal range (K), wet-day threshold of the wetness, share
    of wet days, mean amount of a wet day (mm), logit of humidity, warming per K of the path and
    relative change of rain per K of the path.
    """

    temperature: np.ndarray
    spread: np.ndarray
    diurnal: np.ndarray
    threshold: np.ndarray
    wet_share: np.ndarray
    amount: np.ndarray
    humidity: np.ndarray
    warming: np.ndarray
    drying: np.ndarray


def warming_path(scenario: str, year: np.ndarray) -> np.ndarray:
    """Return the path of warming (K) since 1981 at fractional years; invented."""
    past = 0.025 * (np.minimum(year, FIRST_SCENARIO_YEAR) - 1981)
    ahead = np.maximum(year - FIRST_SCENARIO_YEAR, 0)
    if scenario == "high":
        return past + 0.025 * ahead + 0.00025 * ahead**2
    return past + 1.45 * (1 - np.exp(-ahead / 45))


def mean_state(
    across: np.ndarray,
    up: np.ndarray,
    fraction: np.ndarray,
    bias: Bias = NO_BIAS,
    change: Change = NATURE,
) -> State:
    """Return the law of a climate.

    Parameters
    ----------
    across, up
        Positions of the cells in the world, 0 to 1, shape (cell,).
    fraction
        Fraction of the year of each day, shape (day,).
    bias, change
        The model's; nature's by default.
    """
    u, v = (np.clip(place, -0.25, 1.25)[None, :] for place in (across, up))
    year = 2 * np.pi * np.asarray(fraction)[:, None]
    summer = np.cos(year - 2 * np.pi * 0.55)
    wet_season = np.cos(year - 2 * np.pi * 0.12)
    hills = np.exp(-((u - 0.15) ** 2 + (v - 0.95) ** 2) / 0.08)
    offset = (
        bias.temperature
        + bias.east * (u - 0.5)
        + bias.north * (v - 0.5)
        + bias.seasonal * np.cos(year - 2 * np.pi * bias.peak)
    )
    temperature = 15.0 - 4.0 * (v - 0.5) - 3.0 * hills + (10.0 + 1.5 * u) * summer
    diurnal = 11.5 - 1.5 * hills + (2.0 + 0.5 * u) * summer
    share = np.clip(0.33 + 0.07 * wet_season + 0.08 * hills - 0.05 * (u - 0.5), 0.12, 0.7)
    amount = 6.0 + 1.5 * hills + 1.2 * summer - 1.0 * (u - 0.5)
    biased_share = np.clip(share + bias.wet_share, 0.05, 0.95)
    rain = 1 + bias.rain + bias.rain_seasonal * summer
    rain_change = (
        change.rain_summer * (1 + summer) / 2
        + change.rain_winter * (1 - summer) / 2
        + 0.01 * (v - 0.5)
    )
    shape = np.broadcast_shapes(year.shape, u.shape)
    fields = (
        temperature + offset,
        (2.7 - 0.5 * summer) * bias.anomaly,
        diurnal * bias.diurnal,
        -special.ndtri(biased_share),
        biased_share,
        amount * share / biased_share * rain,
        0.75 - 0.55 * summer + 0.3 * hills - 0.3 * (u - 0.5) + bias.humidity,
        change.sensitivity * (1 + 0.15 * summer + 0.15 * (u - 0.5)),
        rain_change,
    )
    return State(*(np.broadcast_to(field, shape).astype(np.float32) for field in fields))


def diurnal_change(path: np.ndarray, change: Change) -> np.ndarray:
    """Return the factor on the diurnal range for a warming path (K): nights warm more."""
    return 1 - 0.012 * change.sensitivity * path


class Latent(NamedTuple):
    """Standard normal series of the modes, shapes (time, mode): the weather before its law."""

    fast: np.ndarray
    slow: np.ndarray
    wet_fast: np.ndarray
    wet_slow: np.ndarray
    noise: np.ndarray

    def days(self, part: slice) -> Latent:
        """Return some of the days."""
        return Latent(*(series[part] for series in self))


def knots(domain: Domain) -> np.ndarray:
    """Return the centres of the modes of variability: latitude, longitude; shape (mode, 2)."""
    step = _knot_step(domain)
    axes = [
        np.arange(start - MARGIN, start + length + MARGIN + step, step)
        for start, length in ((domain.south, domain.height), (domain.west, domain.width))
    ]
    return np.stack([axis.ravel() for axis in np.meshgrid(*axes, indexing="ij")], axis=1)


def _knot_step(domain: Domain) -> float:
    return max(KNOT_STEP, max(domain.height, domain.width) / MOST_KNOTS_ACROSS)


def mode_weights(domain: Domain, lat: np.ndarray, lon: np.ndarray) -> np.ndarray:
    """Return the weight of every mode at every cell, shape (mode, cell), squares summing to 1.

    Parameters
    ----------
    domain
        The world.
    lat, lon
        Cell centres, degrees, shape (cell,).
    """
    centres, width = knots(domain), _knot_step(domain)
    distance = (centres[:, :1] - lat[None, :]) ** 2 + (centres[:, 1:] - lon[None, :]) ** 2
    weights = np.exp(-distance / (2 * width**2))
    return (weights / np.sqrt((weights**2).sum(axis=0))).astype(np.float32)


def latent_weather(seed: int, parts: list[tuple[str, int]], modes: int) -> Latent:
    """Return the latent weather of consecutive parts of a simulation.

    Parameters
    ----------
    seed
        Seed of the world.
    parts
        Name of the random stream and number of days of each part; two simulations that share
        their first part share its weather.
    modes
        Number of modes.
    """
    drawn = [
        generator(seed, "weather", name).standard_normal((len(Latent._fields), days, modes), "f4")
        for name, days in parts
    ]
    innovations = np.concatenate(drawn, axis=1)
    memory = (FAST, SLOW, WET_FAST, SLOW, 0.0)
    return Latent(*(_autoregress(e, phi) for e, phi in zip(innovations, memory, strict=True)))


def _autoregress(innovations: np.ndarray, phi: float) -> np.ndarray:
    """Return AR(1) series of unit variance along the first axis, stationary from the start."""
    scale = np.float32(np.sqrt(1 - phi**2))
    scaled = innovations * scale
    scaled[0] = innovations[0]
    if phi == 0:
        return scaled
    one, back = np.ones(1, "f4"), np.array([1, -phi], "f4")
    return signal.lfilter(one, back, scaled, axis=0)


def weather(
    state: State,
    day: np.ndarray,
    path: np.ndarray,
    latent: Latent,
    weights: np.ndarray,
    bias: Bias = NO_BIAS,
    change: Change = NATURE,
) -> dict[str, np.ndarray]:
    """Return daily weather: tasmin, tasmax (degC), pr (mm/day), hurs (%), shapes (time, cell).

    Parameters
    ----------
    state
        The law, from `mean_state` with the same bias and change.
    day
        Row of the law for every time step, shape (time,).
    path
        Warming path at every time step, K, shape (time,).
    latent
        Weather of these time steps.
    weights
        From `mode_weights`, shape (mode, cell).
    bias, change
        The model's; nature's by default.
    """
    wetness = np.float32(np.sqrt(1 - SLOW_WET_SHARE)) * combine(latent.wet_fast, weights)
    wetness += np.float32(np.sqrt(SLOW_WET_SHARE)) * combine(latent.wet_slow, weights)
    fast = combine(latent.fast, weights)
    warm = path.astype(np.float32)[:, None]
    mean = state.temperature[day] + state.warming[day] * warm
    anomaly = fast * state.spread[day]
    anomaly += np.float32(bias.anomaly) * (
        np.float32(SLOW_SD) * combine(latent.slow, weights) - np.float32(WET_COOLING) * wetness
    )
    mean += anomaly
    log_range = (
        np.float32(RANGE_NOISE) * combine(latent.noise, weights) - np.float32(RANGE_WET) * wetness
    )
    log_range -= np.float32((RANGE_WET**2 + RANGE_NOISE**2) / 2)
    factor = diurnal_change(path, change).astype(np.float32)[:, None]
    half = state.diurnal[day] * np.exp(log_range) * factor / 2
    humidity = state.humidity[day] + np.float32(HUMIDITY_WET) * wetness
    humidity -= np.float32(HUMIDITY_FAST) * fast
    return {
        "tasmin": mean - half,
        "tasmax": mean + half,
        "pr": _rain(state, day, warm, wetness, bias),
        "hurs": np.float32(100) * special.expit(humidity),
    }


_LEVELS = np.linspace(0, 14, 2049)


def _rain(
    state: State, day: np.ndarray, warm: np.ndarray, wetness: np.ndarray, bias: Bias
) -> np.ndarray:
    """Turn wetness into rain: the gamma quantile of how far it lies above its threshold."""
    wet = np.nonzero(wetness > state.threshold[day])
    cell = (day[wet[0]], wet[1])
    exceedance = special.ndtr(-wetness[wet]) / state.wet_share[cell]
    level = -np.log(np.clip(exceedance, 1e-6, 1))
    shape = bias.rain_shape
    table = special.gammainccinv(shape, np.exp(-_LEVELS)) / shape
    scale = state.amount[cell] * (1 + state.drying[cell] * warm[wet[0], 0])
    rain = np.zeros_like(wetness)
    rain[wet] = np.interp(level, _LEVELS, table) * scale
    return rain


def expected(
    state: State, path: float | np.ndarray, change: Change = NATURE
) -> dict[str, np.ndarray]:
    """Return the exact mean of the law: tasmin, tasmax (degC), pr (mm/day), hurs (%).

    Parameters
    ----------
    state
        The law, shapes (day, cell).
    path
        Warming path, K, one number or shape (day, 1).
    change
        The change the state was made with.

    Returns
    -------
    dict
        Arrays of shape (day, cell), float64.
    """
    path = np.asarray(path, dtype=float)
    wide = State(*(field.astype(float) for field in state))
    mean = wide.temperature + wide.warming * path
    half = wide.diurnal * diurnal_change(path, change) / 2
    nodes, node_weights = np.polynomial.hermite_e.hermegauss(21)
    spread = np.hypot(HUMIDITY_WET, HUMIDITY_FAST)
    humidity = sum(
        weight * special.expit(wide.humidity + spread * node)
        for node, weight in zip(nodes, node_weights, strict=True)
    ) / np.sqrt(2 * np.pi)
    return {
        "tasmin": mean - half,
        "tasmax": mean + half,
        "pr": wide.wet_share * wide.amount * (1 + wide.drying * path),
        "hurs": 100 * np.broadcast_to(humidity, mean.shape),
    }
