"""The trend of one series, written for reading: plain loops, no code shared with the kernels.

Only the random numbers are the same (`stook.randomness`), so that the p-values can be compared.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from stook.randomness import generator

_LIMIT = 0.95  # lag-1 correlations are held within this
_GAP = 0.1  # share of years that may be missing inside
_TIE = 1e-9  # randomised slopes this close to the observed are equal


@dataclass(frozen=True)
class PlainTrend:
    """The trend of one series; slopes per year, NaN where there are too few years."""

    years: int
    slope: float
    theil_sen: float
    lag1: float
    p_ar1: float
    p_shuffle: float
    p_blocks: float
    p_phases: float


def trend_of_series(
    values: np.ndarray, years: np.ndarray, seed: int, randomisations: int, minimum_years: int
) -> PlainTrend:
    """Return the trend of one series by every test.

    Parameters
    ----------
    values
        shape (n,); NaN is missing.
    years
        int, shape (n,), increasing.
    seed, randomisations, minimum_years
        As in the assessment.
    """
    there = ~np.isnan(values)
    y, year = values[there], years[there]
    n = len(y)
    if n < minimum_years or 1 - n / (year[-1] - year[0] + 1) > _GAP:
        return PlainTrend(0, *[float("nan")] * 7)
    slope, _ = fit_line(year, y)
    pairs = [(y[b] - y[a]) / (year[b] - year[a]) for a in range(n) for b in range(a + 1, n)]
    middle = float(np.median(pairs))
    if y.max() - y.min() <= 1e-10 * np.abs(y).max():
        return PlainTrend(n, 0.0, 0.0, float("nan"), 1.0, 1.0, 1.0, 1.0)
    step = np.arange(n)
    step_slope, residuals = fit_line(step, y)
    rho = lag1_correlation(residuals)
    shuffled = [fit_line(year, y[order])[0] for order in _orders(seed, n, randomisations)]
    blocks = [
        fit_line(step, residuals[index])[0]
        for index in _block_indices(seed, n, randomisations, rho)
    ]
    phases = [
        fit_line(step, series)[0] for series in _phase_series(seed, residuals, randomisations)
    ]
    spread = np.sqrt(n / (n - 2))
    statistics = [
        studentised(step, series) for series in _ar1_series(seed, residuals, rho, randomisations)
    ]
    return PlainTrend(
        years=n,
        slope=slope,
        theil_sen=middle,
        lag1=rho,
        p_ar1=p_value(statistics, studentised(step, y)),
        p_shuffle=p_value(shuffled, slope),
        p_blocks=p_value([spread * one for one in blocks], step_slope),
        p_phases=p_value([spread * one for one in phases], step_slope),
    )


def break_of_series(
    values: np.ndarray, years: np.ndarray, seed: int, randomisations: int
) -> tuple[int, float]:
    """Return the last year of the first slope of the best broken line, and its p-value.

    Takes a complete series; see `trend_of_series` for the parameters.
    """
    step, statistic, rho, rest = _best_bend(values)
    random = [_best_bend(series)[1] for series in _ar1_series(seed, rest, rho, randomisations)]
    return int(years[step]), p_value(random, statistic)


def _best_bend(y: np.ndarray) -> tuple[int, float, float, np.ndarray]:
    """Try a bend at every step with ten years on either side; keep the best fit."""
    n = len(y)
    x = np.arange(n)
    straight = np.sum(fit_line(x, y)[1] ** 2)
    best, squares, rest = 0, np.inf, y
    for step in range(9, n - 10):
        design = np.stack([np.ones(n), x, np.clip(x - step, 0, None)], axis=1)
        residuals = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
        if np.sum(residuals**2) < squares:
            best, squares, rest = step, float(np.sum(residuals**2)), residuals
    rho = lag1_correlation(rest)
    return best, float((straight - squares) / squares * (1 - rho) / (1 + rho)), rho, rest


def fit_line(x: np.ndarray, y: np.ndarray) -> tuple[float, np.ndarray]:
    """Return the least-squares slope and the residuals."""
    dx, dy = x - np.mean(x), y - np.mean(y)
    slope = float(np.sum(dx * dy) / np.sum(dx**2))
    return slope, dy - slope * dx


def lag1_correlation(residuals: np.ndarray) -> float:
    """Return the lag-1 correlation of residuals of a line, corrected for bias."""
    n = len(residuals)
    ratio = np.sum(residuals[1:] * residuals[:-1]) / np.sum(residuals**2)
    return float(np.clip((n * ratio + 2) / (n - 4), -_LIMIT, _LIMIT))


def studentised(x: np.ndarray, y: np.ndarray) -> float:
    """Return the slope over its standard error, inflated for the lag-1 correlation."""
    slope, residuals = fit_line(x, y)
    rho = lag1_correlation(residuals)
    variance = np.sum(residuals**2) / (len(y) - 2) / np.sum((x - np.mean(x)) ** 2)
    return float(slope / np.sqrt(variance * (1 + rho) / (1 - rho)))


def p_value(random: list[float], observed: float) -> float:
    """Return ``(b + 1) / (m + 1)``, two-sided."""
    as_large = sum(abs(one) >= abs(observed) * (1 - _TIE) for one in random)
    return (as_large + 1) / (len(random) + 1)


def _orders(seed: int, n: int, count: int) -> list[np.ndarray]:
    stream = generator(seed, "trend", "orders", str(n))
    return [stream.permutation(n) for _ in range(count)]


def _ar1_series(seed: int, residuals: np.ndarray, rho: float, count: int) -> list[np.ndarray]:
    """Whiten the residuals, shuffle the innovations, colour them again."""
    n = len(residuals)
    shocks = residuals.copy()
    shocks[0] = np.sqrt(1 - rho**2) * residuals[0]
    for t in range(1, n):
        shocks[t] = residuals[t] - rho * residuals[t - 1]
    shocks = shocks - np.mean(shocks)
    result = []
    for order in _orders(seed, n, count):
        z = shocks[order]
        series = np.empty(n)
        series[0] = z[0] / np.sqrt(1 - rho**2)
        for t in range(1, n):
            series[t] = rho * series[t - 1] + z[t]
        result.append(series)
    return result


def _block_indices(seed: int, n: int, count: int, rho: float) -> list[np.ndarray]:
    """Join blocks of years from anywhere in the series."""
    effective = n * (1 - max(rho, 0.0)) / (1 + max(rho, 0.0))
    power = 2 / 3 * (1 - effective / n)
    length = next(size for size in range(1, n) if size >= (n - size + 1) ** power or size == n // 2)
    stream = generator(seed, "trend", "blocks", str(n))
    result = []
    for _ in range(count):
        places = stream.random(n)
        index: list[int] = []
        for place in places:
            start = int(place * (n - length + 1))
            index += range(start, start + length)
        result.append(np.array(index[:n]))
    return result


def _phase_series(seed: int, residuals: np.ndarray, count: int) -> list[np.ndarray]:
    """Shift the phase of every frequency by a random angle, amplitudes unchanged."""
    n = len(residuals)
    spectrum = np.fft.rfft(residuals)
    stream = generator(seed, "trend", "phases", str(n))
    result = []
    for _ in range(count):
        angles = stream.uniform(0, 2 * np.pi, n // 2 + 1)
        # The tables of weights turn the other way round: turning the series forth is turning the
        # weights back, and the angles are the same.
        turned = spectrum * np.exp(-1j * angles)
        if n % 2 == 0:
            turned[-1] = spectrum[-1] * (1 if angles[-1] < np.pi else -1)
        result.append(np.fft.irfft(turned, n))
    return result
