"""What the tables of risk need of one simulation, crop and system, region by region.

A totals table is reduced to this as soon as it is read, so that memory does not grow with the
number of simulations. Every number of a region depends on that region alone; the row `TOTAL` sums
the regions that were computed.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from stook.assessment.simulations import Simulation
from stook.constants import OUTSIDE
from stook.ensemble import smooth
from stook.ensemble.kernels import SHARE_OF_YEARS, period_means, simulation_weights
from stook.ensemble.series import Models, SystemSeries
from stook.ensemble.short_years import REFERENCES, short_counts, short_years

TOTAL = "all regions"
"""Name of the sum of the regions; those outside every polygon are not in it."""

BASELINE = "baseline"
"""Name of the baseline among the periods."""

LEAD_STEP = 5
"""Years between the lead times of the partition."""

Years = tuple[int, int]


@dataclass(frozen=True)
class Settings:
    """What a summary depends on besides its totals.

    Attributes
    ----------
    baseline
        First and last year.
    leads
        Years of the partition.
    steps
        Successive periods of the class table.
    shortfall
        Per cent below the expected path that count as a shortfall.
    mean_years
        Years of the running mean of the internal variability.
    """

    baseline: Years
    leads: np.ndarray
    steps: tuple[Years, ...]
    shortfall: float
    mean_years: int


@dataclass(frozen=True)
class RunSummary:
    """One simulation, crop and system; arrays start with (region); NaN where there is no value.

    Attributes
    ----------
    area, missing_area
        ha, shape (region).
    leads
        Years of the partition, shape (lead).
    paths
        Smooth response against its baseline mean, per cent of the baseline mean of the same draw,
        (region, lead, draw), draw 0 the central estimate.
    internal
        Variance of running means of the residuals, per cent squared, mean over members, (region).
    noise
        Variance that the residuals put into `paths`, (region, lead).
    years
        Shape (year).
    signal
        Smooth response of the central estimate in every year, per cent, (region, year).
    deviation
        Standard deviation of the single years about it, per cent, (region).
    baseline_deviation
        Standard deviation about a straight line over the baseline, per cent, (region).
    steps
        Change of the mean by successive periods, per cent, (region, step, draw).
    periods
        Names: the baseline, then the horizons there are.
    production
        Mean production by period, t, (region, period, draw).
    counted
        Years with a value by period, (region, period).
    short
        Years with a shortfall, (region, period, reference, draw); see `REFERENCES`.
    worst
        Lowest yearly production of the central estimate by period, t, (region, period).
    flags
        1 a shortfall of the central estimate, 0 none, -1 unknown, (region, reference, year).
    windows
        First and last year of each period.
    extrapolated
        Mean share of the area outside an estimation range by period, (region, period).
    """

    simulation: Simulation
    crop: str
    system: str
    regions: list[str]
    area: np.ndarray
    missing_area: np.ndarray
    leads: np.ndarray
    paths: np.ndarray
    internal: np.ndarray
    noise: np.ndarray
    years: np.ndarray
    signal: np.ndarray
    deviation: np.ndarray
    baseline_deviation: np.ndarray
    steps: np.ndarray
    periods: list[str]
    production: np.ndarray
    counted: np.ndarray
    short: np.ndarray
    worst: np.ndarray
    flags: np.ndarray
    windows: Mapping[str, Years]
    extrapolated: np.ndarray

    def change(self, horizon: str) -> np.ndarray:
        """Return the change of mean yield against the baseline, per cent, (region, draw)."""
        base, later = self.production[:, 0], self.production[:, self.periods.index(horizon)]
        ratio = np.full(base.shape, np.nan)
        np.divide(later, base, out=ratio, where=base > 0)
        return 100.0 * (ratio - 1.0)

    def grown(self) -> list[tuple[int, str]]:
        """Return number and name of the regions with harvested area, with a yield or without."""
        there = self.area + self.missing_area > 0
        return [(i, name) for i, name in enumerate(self.regions) if there[i]]


def with_total(series: SystemSeries) -> SystemSeries:
    """Append the sum of the regions; of a single region there is none.

    A year that one region with harvested area lacks is missing in the sum.
    """
    inside = [i for i, name in enumerate(series.regions) if name != OUTSIDE]
    if len(inside) < 2:
        return series
    grown = [i for i in inside if series.area[i] > 0]
    production = np.zeros((len(series.production), 1, series.years.size))
    flagged = np.zeros(series.years.size)
    area = missing = 0.0
    for i in grown:
        production[:, 0] += series.production[:, i]
        flagged += series.extrapolated[i] * series.area[i]
        area += float(series.area[i])
    for i in inside:
        missing += float(series.missing_area[i])
    share = flagged / area if area > 0 else np.full(series.years.size, np.nan)
    return SystemSeries(
        [*series.regions, TOTAL],
        series.years,
        np.concatenate([series.production, production], axis=1),
        np.append(series.area, area),
        np.append(series.missing_area, missing),
        np.concatenate([series.extrapolated, share[None]]),
    )


def summarise(
    series: SystemSeries,
    simulation: Simulation,
    crop: str,
    system: str,
    windows: Mapping[str, Years],
    settings: Settings,
) -> RunSummary:
    """Reduce the totals of one simulation, crop and system.

    Parameters
    ----------
    windows
        First and last year of each horizon there is.
    """
    values = np.ascontiguousarray(np.moveaxis(series.production, 1, 0))  # region, draw, year
    years = series.years
    base = _period_mean(values, years, settings.baseline)
    base = np.where(base > 0, base, np.nan)
    fitted = _Fitted.of(values, years, settings)
    level = np.where(np.isfinite(base), 100.0 / base, np.nan)  # per cent per t
    central = level[:, 0]
    signal = (fitted.paths[:, 0] - fitted.origin[:, :1]) * central[:, None]
    inside = (years >= settings.baseline[0]) & (years <= settings.baseline[1])
    about = smooth.detrended_deviation(np.ascontiguousarray(values[:, 0]), years, inside)
    own = dict({BASELINE: settings.baseline}, **windows)
    return RunSummary(
        simulation=simulation,
        crop=crop,
        system=system,
        regions=series.regions,
        area=series.area,
        missing_area=series.missing_area,
        leads=settings.leads,
        paths=fitted.at_leads(years, settings.leads, level),
        internal=fitted.internal(level),
        noise=fitted.noise * (central * central)[:, None],
        years=years,
        signal=signal,
        deviation=fitted.deviation * central,
        baseline_deviation=about * central,
        steps=_step_changes(values, years, base, settings.steps),
        periods=list(own),
        windows=own,
        production=_period_means(values, years, own),
        extrapolated=_period_means(series.extrapolated[:, None], years, own)[..., 0],
        **_shortfalls(values, fitted.paths, base, years, own, settings.shortfall / 100),
    )


def _shortfalls(
    values: np.ndarray,
    expected: np.ndarray,
    base: np.ndarray,
    years: np.ndarray,
    own: Mapping[str, Years],
    share: float,
) -> dict[str, np.ndarray]:
    """Count the years far below the baseline mean and below the smooth path, by period.

    Takes production and its smooth path (region, draw, year) and its baseline mean (region, draw);
    returns the attributes `counted`, `short`, `worst` and `flags` of `RunSummary`.
    """
    count, draws, _ = values.shape
    flat = (count * draws, years.size)
    chosen = np.array([(years >= a) & (years <= b) for a, b in own.values()])
    lengths = np.array([b - a + 1 for a, b in own.values()])
    counted, short = short_counts(
        values.reshape(flat), expected.reshape(flat), base.ravel(), chosen, lengths, share
    )
    counted = counted.reshape(count, draws, -1)[:, 0]
    there = counted >= SHARE_OF_YEARS * lengths - 1e-9
    lowest = [_lowest(np.where(mask, values[:, 0], np.nan)) for mask in chosen]
    central, path = (np.ascontiguousarray(grid[:, 0]) for grid in (values, expected))
    return {
        "counted": np.where(there, counted, 0),
        "short": np.moveaxis(short.reshape(count, draws, len(own), len(REFERENCES)), 1, 3),
        "worst": np.where(there, np.stack(lowest, axis=1), np.nan),
        "flags": short_years(central, path, base[:, 0], share),
    }


def _period_means(values: np.ndarray, years: np.ndarray, own: Mapping[str, Years]) -> np.ndarray:
    """Return means by period: (region, draw, year) -> (region, period, draw)."""
    return np.stack([_period_mean(values, years, period) for period in own.values()], axis=1)


@dataclass(frozen=True)
class _Fitted:
    """Smooth paths in t: (region, draw, year), with what belongs to them.

    `origin` is their baseline mean (region, draw), `variance` that of running means of the
    residuals (region, draw), `deviation` that of single years of the central estimate (region),
    `noise` the variance of the central path at the lead times, t squared (region, lead).
    """

    paths: np.ndarray
    origin: np.ndarray
    variance: np.ndarray
    deviation: np.ndarray
    noise: np.ndarray

    @classmethod
    def of(cls, values: np.ndarray, years: np.ndarray, settings: Settings) -> _Fitted:
        """Fit the paths of all regions and draws; those with the same years known together."""
        count, draws, _ = values.shape
        paths = np.full(values.shape, np.nan)
        variance = np.full((count, draws), np.nan)
        deviation = np.full(count, np.nan)
        noise = np.full((count, settings.leads.size), np.nan)
        inside = (years >= settings.baseline[0]) & (years <= settings.baseline[1])
        known = np.isfinite(values[:, 0])
        for kept in np.unique(known, axis=0):
            if kept.sum() < max(smooth.LEAST_YEARS, SHARE_OF_YEARS * years.size):
                continue
            chosen = np.flatnonzero((known == kept).all(axis=1))
            basis = smooth.polynomial_basis(years, kept)
            flat = values[chosen].reshape(chosen.size * draws, -1)
            fitted, squares = smooth.fit(flat, basis, kept)
            spread = smooth.running_variance(flat, fitted, basis, years, kept, settings.mean_years)
            paths[chosen] = fitted.reshape(chosen.size, draws, -1)
            variance[chosen] = spread.reshape(chosen.size, draws)
            freedom = kept.sum() - (smooth.ORDER + 1)
            deviation[chosen] = np.sqrt(squares.reshape(chosen.size, draws)[:, 0] / freedom)
            place = _places(years, settings.leads)
            there = (place >= 0) & inside.any()
            contrast = basis[place[there]] - basis[inside].mean(axis=0)
            noise[np.ix_(chosen, there)] = deviation[chosen, None] ** 2 * (contrast * contrast).sum(
                axis=1
            )
        origin = _period_mean(paths, years, settings.baseline)
        return cls(paths, origin, variance, deviation, noise)

    def at_leads(self, years: np.ndarray, leads: np.ndarray, level: np.ndarray) -> np.ndarray:
        """Return the response in per cent, (region, lead, draw)."""
        place = _places(years, leads)
        result = np.full((self.paths.shape[0], leads.size, self.paths.shape[1]), np.nan)
        there = place >= 0
        change = (self.paths[..., place[there]] - self.origin[..., None]) * level[..., None]
        result[:, there] = np.moveaxis(change, 1, 2)
        return result

    def internal(self, level: np.ndarray) -> np.ndarray:
        """Return the variance of the residuals in per cent squared, mean over members, (region)."""
        spread = self.variance * level * level
        members = spread[:, 1:] if spread.shape[1] > 1 else spread
        return np.ascontiguousarray(members).mean(axis=1)


def _places(years: np.ndarray, wanted: np.ndarray) -> np.ndarray:
    """Return the position of years in a series, -1 where it has none."""
    place = np.searchsorted(years, wanted)
    found = years[np.minimum(place, years.size - 1)] == wanted
    return np.where(found, place, -1)


def _period_mean(values: np.ndarray, years: np.ndarray, period: Years) -> np.ndarray:
    """Average over a period: (region, draw, year) -> (region, draw)."""
    chosen = slice(*np.searchsorted(years, (period[0], period[1] + 1)))
    rows = int(np.prod(values.shape[:-1]))
    flat = np.ascontiguousarray(values[..., chosen]).reshape(rows, chosen.stop - chosen.start)
    inside = np.ones(flat.shape[1], dtype=bool)
    return period_means(flat, inside, period[1] - period[0] + 1).reshape(values.shape[:-1])


def _step_changes(
    values: np.ndarray, years: np.ndarray, base: np.ndarray, steps: Sequence[Years]
) -> np.ndarray:
    result = np.empty((values.shape[0], len(steps), values.shape[1]))
    for number, step in enumerate(steps):
        result[:, number] = 100.0 * (_period_mean(values, years, step) / base - 1.0)
    return result


def _lowest(values: np.ndarray) -> np.ndarray:
    """Return the lowest value of each row, NaN of none."""
    low = np.where(np.isnan(values), np.inf, values).min(axis=1)
    return np.where(np.isfinite(low), low, np.nan)


def period_weights(there: np.ndarray, models: Models) -> np.ndarray:
    """Return the weights of simulations in each region: (region, run) -> (region, run).

    Parameters
    ----------
    there
        bool: the simulation has a value in the region.
    """
    result = np.empty(there.shape)
    for region in range(len(there)):
        result[region] = simulation_weights(there[region], models.number, models.weight)
    return result


def labelled(
    parts: Sequence[Mapping[str, Any]], columns: Mapping[str, str], **same: str
) -> pd.DataFrame:
    """Stack groups of rows into one table of the given columns and types.

    Parameters
    ----------
    parts
        Values by column, an array or one value for all rows of the group; ``share`` is an array.
    same
        Columns that are the same in every row.
    """
    lengths = [len(part["share"]) for part in parts]
    content: dict[str, Any] = {}
    for name, kind in columns.items():
        if name in same:
            content[name] = np.full(sum(lengths), same[name], dtype=object)
            continue
        kept: Any = object if kind == "str" else kind
        pieces = [
            np.broadcast_to(np.asarray(part[name], dtype=kept), (length,))
            for part, length in zip(parts, lengths, strict=True)
        ]
        content[name] = np.concatenate(pieces) if pieces else np.empty(0, kept)
    return pd.DataFrame(content).astype(dict(columns))


def stacked_rows(rows: Sequence[dict[str, object]], columns: dict[str, str]) -> pd.DataFrame:
    """Return rows as a table of the given columns and types."""
    frame = pd.DataFrame(list(rows), columns=list(columns))
    return frame.astype(columns)
