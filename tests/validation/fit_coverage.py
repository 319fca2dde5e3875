"""How often the 95 % intervals of a fit hold the truth, in simulated panels.

    python tests/validation/fit_coverage.py [--replications N] [--all] [--json]

Prints the table of docs/fit.md. Every replication draws unit effects, trends, weather that the
units of a year share in part, and errors that are correlated in the way the standard errors allow
for: within units over the years (cluster-unit), or between the units of a year (cluster-year).
With ``--json`` the last line is one JSON object: coverage_95 (the share of all coefficients of all
replications inside their 95 % intervals, both ways together), coverage_95_cluster_unit and
coverage_95_cluster_year. ``--all`` adds the bootstrap over years and the small-sample factor, for
comparison.
"""

from __future__ import annotations

import argparse
import json

import numpy as np
import pandas as pd
from scipy.signal import lfilter
from stook.fit.document import Fit
from stook.fit.estimate import estimate
from stook.fit.panel import UnitWeather, design_columns, make_sample

UNITS, YEARS = 40, 30
TRUTH = np.array([-0.004, 0.0020, -2.0e-6, -0.02])
METHODS = ("cluster-unit", "cluster-year")
OTHERS = ("cluster-unit factor", "cluster-year factor", "bootstrap-years")
TERMS = {
    "heat": {"form": "linear", "index": "heat"},
    "rain": {"form": "quadratic", "index": "rain"},
    "nights": {"form": "linear", "index": "nights"},
}


def fit_document(method: str, trend: str) -> Fit:
    """Return the fit document of the simulated panels."""
    definition = {"measure": "total"}
    return Fit.model_validate(
        {
            "crop": "maize",
            "system": "rainfed",
            "panel": "simulated",
            "weather": {
                "table": "simulated",
                "indices": dict.fromkeys(("heat", "rain", "nights"), definition),
            },
            "trend": trend,
            "specifications": {"true": TERMS},
            "standard_errors": {
                "method": method.split()[0],
                "small_sample": "factor" if method.endswith("factor") else "jackknife",
                "replications": 200,
            },
            "citation": "simulated",
            "output": "none",
        }
    )


def simulate(random: np.random.Generator, method: str, own_trends: bool) -> pd.DataFrame:
    """Return one panel: unit, year, yield (t/ha) and three indices."""
    unit, year = np.divmod(np.arange(UNITS * YEARS), YEARS)

    def mixed() -> np.ndarray:
        """Weather: half of the variance is the year's, the rest the unit's own."""
        shared = random.standard_normal(YEARS)[year]
        own = random.standard_normal(unit.size)
        return np.sqrt(0.5) * (shared + own) + random.standard_normal(UNITS)[unit]

    heat = np.maximum(60 + 25 * mixed(), 0)
    rain = 400 + 90 * mixed()
    nights = 18 + 1.2 * mixed()
    columns = np.column_stack([heat, rain, rain**2, nights])
    if method.startswith("cluster-unit"):
        shocks = random.standard_normal((UNITS, YEARS))
        shocks[:, 0] /= np.sqrt(1 - 0.5**2)
        error = lfilter([1.0], [1.0, -0.5], shocks, axis=1).ravel()
    else:
        error = random.standard_normal(YEARS)[year] + random.standard_normal(unit.size)
    error *= 1 + 0.5 * (heat > 80)  # not the same everywhere
    slope = 0.01 + (0.005 * random.standard_normal(UNITS)[unit] if own_trends else 0)
    level = 1.5 + 0.3 * random.standard_normal(UNITS)[unit]
    log_yield = level + slope * year + columns @ TRUTH + 0.08 * error
    return pd.DataFrame(
        {
            "unit": [f"{number:02d}" for number in unit],
            "year": 1980 + year,
            "yield": np.exp(log_yield),
            "heat": heat,
            "rain": rain,
            "nights": nights,
        }
    )


def inside(method: str, replications: int, seed: int = 1) -> np.ndarray:
    """Return whether each interval holds the truth, shape (replication, coefficient)."""
    own_trends = method.startswith("cluster-unit")
    fit = fit_document(method, "linear-by-unit" if own_trends else "linear")
    random = np.random.default_rng([seed, own_trends])
    terms = list(fit.specifications["true"].values())
    found = []
    for _ in range(replications):
        frame = simulate(random, method, own_trends)
        indices = frame.set_index(["unit", "year"])[["heat", "rain", "nights"]]
        columns = design_columns(terms, {str(k): v.to_numpy() for k, v in indices.items()})
        weather = UnitWeather(pd.DataFrame(columns, index=indices.index), indices, {})
        sample = make_sample(frame[["unit", "year", "yield"]], weather, fit, fit.panel)
        table = estimate(fit, "true", sample, inputs=False).coefficients.iloc[: len(TRUTH)]
        found.append((table["low"] <= TRUTH) & (table["high"] >= TRUTH))
    return np.array(found)


def main() -> None:
    """Print the coverage of every method."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--replications", type=int, default=500)
    parser.add_argument("--all", action="store_true")
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    print(f"{UNITS} units, {YEARS} years, {given.replications} replications; coverage of 95 %")
    print(f"{'method':<22}{'all':>8}{'heat':>8}{'rain.1':>8}{'rain.2':>8}{'nights':>8}")
    shares = {}
    for method in METHODS + (OTHERS if given.all else ()):
        held = inside(method, given.replications)
        shares[method] = float(held.mean())
        cells = "".join(f"{100 * share:8.1f}" for share in held.mean(axis=0))
        print(f"{method:<22}{100 * shares[method]:8.1f}{cells}", flush=True)
    if given.json:
        keys = {f"coverage_95_{name.replace('-', '_')}": shares[name] for name in METHODS}
        print(json.dumps({"coverage_95": sum(keys.values()) / len(keys)} | keys))


if __name__ == "__main__":
    main()
