"""The true yield responses of the invented world, and the noisy estimates a team would have.

All numbers are invented. They have the signs and sizes that make the world worth assessing; they
are no estimate for any crop anywhere.
"""

from __future__ import annotations

import copy
from pathlib import Path
from typing import Any

import numpy as np
import yaml
from stook.randomness import generator

_GROWTH = {"measure": "degree-days", "base": 10.0, "cap": 30.0}
_HEAT = {"measure": "degree-days", "base": 30.0}
_VPD = {"measure": "vapour-pressure-deficit"}

TRUE: dict[str, dict[str, Any]] = {
    "maize_rainfed": {
        "link": "log",
        "indices": {
            "growth": _GROWTH,
            "heat": _HEAT,
            "rain": {"measure": "total", "variable": "pr"},
            "dry_spell": {"measure": "longest-dry-spell"},
        },
        "terms": {
            "growth": {
                "form": "piecewise-linear",
                "index": "growth",
                "knots": [1600.0, 1950.0],
                "coefficients": [0.00060, 0.00020, -0.00010],
            },
            "heat": {"form": "linear", "index": "heat", "coefficient": -0.0030},
            "rain": {"form": "quadratic", "index": "rain", "coefficients": [0.0016, -1.6e-6]},
            "dry_spell": {"form": "linear", "index": "dry_spell", "coefficient": -0.006},
        },
        "estimation_range": {
            "growth": [1350.0, 2050.0],
            "heat": [0.0, 160.0],
            "rain": [70.0, 700.0],
            "dry_spell": [6.0, 55.0],
        },
    },
    "maize_irrigated": {
        "link": "log",
        "indices": {
            "growth": _GROWTH,
            "heat": _HEAT,
            "dry_air": _VPD,
            "warm_nights": {"measure": "mean", "variable": "tasmin", "phase": "flowering"},
        },
        "terms": {
            "growth": {
                "form": "piecewise-linear",
                "index": "growth",
                "knots": [1950.0],
                "coefficients": [0.00030, -0.00010],
            },
            "heat": {"form": "linear", "index": "heat", "coefficient": -0.0021},
            "dry_air": {"form": "linear", "index": "dry_air", "coefficient": -0.10},
            "warm_nights": {"form": "linear", "index": "warm_nights", "coefficient": -0.016},
        },
        "estimation_range": {
            "growth": [1650.0, 2150.0],
            "heat": [5.0, 170.0],
            "dry_air": [0.9, 1.9],
            "warm_nights": [16.5, 24.0],
        },
    },
    "barley_rainfed": {
        "link": "level",
        "intercept": 0.1,
        "indices": {
            "warmth": {"measure": "mean", "variable": "tas"},
            "rain": {"measure": "total", "variable": "pr"},
            "hot_days": {
                "measure": "days-above",
                "variable": "tasmax",
                "threshold": 30.0,
                "phase": "filling",
            },
        },
        "terms": {
            "warmth": {"form": "quadratic", "index": "warmth", "coefficients": [0.66, -0.030]},
            "rain": {"form": "quadratic", "index": "rain", "coefficients": [0.0030, -2.4e-6]},
            "hot_days": {"form": "linear", "index": "hot_days", "coefficient": -0.020},
        },
        "estimation_range": {
            "warmth": [8.0, 14.5],
            "rain": [180.0, 1100.0],
            "hot_days": [0.0, 38.0],
        },
    },
    "rice_irrigated": {
        "link": "log",
        "indices": {
            "early_growth": _GROWTH | {"phase": "vegetative"},
            "hot_days": {
                "measure": "days-above",
                "variable": "tasmax",
                "threshold": 35.0,
                "phase": "reproductive",
            },
            "warm_nights": {"measure": "mean", "variable": "tasmin", "phase": "ripening"},
            "dry_air": _VPD,
        },
        "terms": {
            "early_growth": {
                "form": "quadratic",
                "index": "early_growth",
                "coefficients": [0.00204, -1.2e-6],
            },
            "hot_days": {"form": "linear", "index": "hot_days", "coefficient": -0.006},
            "warm_nights": {"form": "linear", "index": "warm_nights", "coefficient": -0.035},
            "dry_air": {"form": "linear", "index": "dry_air", "coefficient": -0.06},
        },
        "estimation_range": {
            "early_growth": [620.0, 850.0],
            "hot_days": [0.0, 27.0],
            "warm_nights": [15.5, 22.0],
            "dry_air": [1.0, 2.0],
        },
    },
}
"""True response of every crop and system: a response document without its errors."""

STANDARD_ERRORS: dict[str, list[float]] = {
    "maize_rainfed": [0.00012, 0.00008, 0.00008, 0.00045, 0.00030, 3.5e-7, 0.0012],
    "maize_irrigated": [0.00008, 0.00006, 0.00035, 0.025, 0.004],
    "barley_rainfed": [0.050, 0.0040, 0.00050, 4.5e-7, 0.0040],
    "rice_irrigated": [0.00040, 2.6e-7, 0.0012, 0.006, 0.015],
}
"""Standard error of each coefficient, in document order."""

CORRELATED: dict[str, list[tuple[int, int, float]]] = {
    "maize_rainfed": [(4, 5, -0.96)],
    "maize_irrigated": [],
    "barley_rainfed": [(0, 1, -0.98), (2, 3, -0.96)],
    "rice_irrigated": [(0, 1, -0.98)],
}
"""Pairs of coefficients with correlated errors: the two of a quadratic term."""

CITATION = "invented for the demo world"
NOTE = (
    "Invented numbers: noisy estimates of the true response that the demo world is built with "
    "(docs/demo-world.md). Not an estimate for any crop anywhere."
)
DEVIATION = 0.7
"""Largest part of a standard error by which one independent error displaces an estimate."""


def coefficients(document: dict[str, Any]) -> np.ndarray:
    """Return all coefficients of a document in its order, shape (k,)."""
    return np.concatenate(
        [
            np.atleast_1d(term.get("coefficients", term.get("coefficient")))
            for term in document["terms"].values()
        ]
    ).astype(float)


def covariance(name: str) -> np.ndarray:
    """Return the covariance of the estimated coefficients, shape (k, k)."""
    errors = np.array(STANDARD_ERRORS[name])
    correlation = np.eye(len(errors))
    for first, second, value in CORRELATED[name]:
        correlation[first, second] = correlation[second, first] = value
    return correlation * np.outer(errors, errors)


def estimated_document(name: str, seed: int) -> dict[str, Any]:
    """Return the response document a team would have: estimates with their errors.

    Every estimate lies within one standard error of the truth.
    """
    document = copy.deepcopy(TRUE[name])
    truth, matrix = coefficients(document), covariance(name)
    errors = np.sqrt(np.diag(matrix))
    factor = np.linalg.cholesky(matrix / np.outer(errors, errors))
    noise = generator(seed, "response", name).standard_normal(len(truth))
    estimates = truth + DEVIATION * errors * (factor @ np.clip(noise, -1, 1))
    place = 0
    for term in document["terms"].values():
        if "coefficient" in term:
            term["coefficient"] = _digits(estimates[place])
            place += 1
        else:
            count = len(term["coefficients"])
            term["coefficients"] = [_digits(value) for value in estimates[place : place + count]]
            place += count
    crop, system = name.split("_")
    result = {"crop": crop, "system": system, **document}
    if CORRELATED[name]:
        result["covariance"] = [[float(value) for value in row] for row in matrix]
    else:
        result["standard_errors"] = [float(value) for value in errors]
    return result | {"citation": CITATION, "note": NOTE}


def write_responses(folder: Path, seed: int) -> None:
    """Write the response document of every crop and system."""
    folder.mkdir(parents=True, exist_ok=True)
    for name in TRUE:
        crop, system = name.split("_")
        text = yaml.safe_dump(
            estimated_document(name, seed), sort_keys=False, width=100, default_flow_style=None
        )
        head = f"# Yield response of {crop}, {system}: an invented estimate.\n"
        (folder / f"{name}.yaml").write_text(head + text, encoding="utf-8")


def _digits(value: float) -> float:
    return float(f"{value:.6g}")
