"""What is true in the invented world: biases, changes and trends of the climate.

These are exact means of the law that the files are drawn from, so a comparison with the files has
sampling error only. The true yield responses are `demo_grids.responses.TRUE`, the true changes of
regional yields are in `demo_grids.true_yields`.
"""

from __future__ import annotations

import numpy as np

from demo_grids.climate_files import RECORD, RECORD_SCENARIO
from demo_grids.domain import Domain
from demo_grids.models import MODELS
from demo_grids.weather import NATURE, NO_BIAS, Bias, Change, expected, mean_state, warming_path

NATURE_NAME = "nature"
_DAYS = (np.arange(365) + 0.5) / 365


def mean_climate(
    world: Domain, source: str, scenario: str, years: tuple[int, int], biased: bool = True
) -> dict[str, np.ndarray]:
    """Return the expected mean over years at every pixel centre.

    Parameters
    ----------
    world
        The world.
    source
        A model's name, ``nature`` or ``HOLLIN-OBS``.
    scenario
        Scenario of the years from 2015 on.
    years
        First and last year.
    biased
        Whether a model has its bias, or only its change.

    Returns
    -------
    dict
        tasmin, tasmax (degC), pr (mm/day), hurs (%), shape (lat, lon).
    """
    bias, change = _source(source, biased)
    lat, lon = np.meshgrid(world.lat, world.lon, indexing="ij")
    law = mean_state(world.across(lon.ravel()), world.up(lat.ravel()), _DAYS, bias, change)
    path = np.mean(
        [warming_path(scenario, year + _DAYS) for year in range(years[0], years[1] + 1)], axis=0
    )
    means = expected(law, path[:, None], change)
    return {name: values.mean(axis=0).reshape(lat.shape) for name, values in means.items()}


def mean_bias(world: Domain, model: str, scenario: str = RECORD_SCENARIO) -> dict[str, np.ndarray]:
    """Return the true bias of a model over the baseline at every pixel, shape (lat, lon).

    The model's expected mean minus that of the record; tasmin and tasmax in K, hurs in
    percentage points, pr in percent of the record. It holds the model's own warming since 1981 as
    well, as a bias computed from the files does.
    """
    wrong = mean_climate(world, model, scenario, world.baseline)
    right = mean_climate(world, RECORD, RECORD_SCENARIO, world.baseline)
    return _difference(wrong, right)


def mean_change(
    world: Domain, source: str, scenario: str, years: tuple[int, int]
) -> dict[str, np.ndarray]:
    """Return the true change of the mean against the baseline at every pixel, shape (lat, lon).

    Of nature, or of the unbiased climate of a model: tasmin and tasmax in K, hurs in percentage
    points, pr in percent.
    """
    later = mean_climate(world, source, scenario, years, biased=False)
    return _difference(later, mean_climate(world, source, scenario, world.baseline, biased=False))


def mean_trend(
    world: Domain, source: str, scenario: str, years: tuple[int, int]
) -> dict[str, float]:
    """Return the true least-squares trend of the world's mean: K, mm/day or % per decade."""
    span = range(years[0], years[1] + 1)
    series = [mean_climate(world, source, scenario, (year, year), biased=False) for year in span]
    return {
        name: 10 * float(np.polyfit(span, [values[name].mean() for values in series], 1)[0])
        for name in series[0]
    }


def _source(source: str, biased: bool) -> tuple[Bias, Change]:
    if source in (NATURE_NAME, RECORD):
        return NO_BIAS, NATURE
    model = MODELS[source]
    return (model.bias if biased else NO_BIAS), model.change


def _difference(here: dict[str, np.ndarray], there: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    return {
        name: 100 * (here[name] / there[name] - 1) if name == "pr" else here[name] - there[name]
        for name in here
    }
