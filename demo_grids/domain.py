"""Sizes of the invented world and its grids."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

CENTRE_LAT, CENTRE_LON = 40.5, -35.0
STEP = 0.5
MAX_ROWS_DEGREES = 78.0
FIRST_SCENARIO_YEAR = 2015


@dataclass(frozen=True)
class Domain:
    """The analysis grid of the world and its years.

    Attributes
    ----------
    rows, columns
        Pixels of the analysis grid.
    step
        Pixel width, degrees.
    record
        First and last year of the reference record.
    simulated
        First and last year of the simulations.
    baseline
        First and last year of the baseline.
    horizons
        Windows of the future by name.
    members
        Scenarios of each model.
    draws, randomisations
        Choices of the assessment file that set how long a run takes.
    """

    rows: int
    columns: int
    step: float
    record: tuple[int, int]
    simulated: tuple[int, int]
    baseline: tuple[int, int]
    horizons: dict[str, tuple[int, int]]
    members: dict[str, tuple[str, ...]]
    draws: int = 200
    randomisations: int = 999

    @property
    def south(self) -> float:
        """Southern edge, degrees."""
        return CENTRE_LAT - self.rows * self.step / 2

    @property
    def west(self) -> float:
        """Western edge, degrees."""
        return CENTRE_LON - self.columns * self.step / 2

    @property
    def height(self) -> float:
        """South to north, degrees."""
        return self.rows * self.step

    @property
    def width(self) -> float:
        """West to east, degrees."""
        return self.columns * self.step

    @property
    def lat(self) -> np.ndarray:
        """Pixel centres, degrees, ascending."""
        return self.south + self.step * (np.arange(self.rows) + 0.5)

    @property
    def lon(self) -> np.ndarray:
        """Pixel centres, degrees, ascending."""
        return self.west + self.step * (np.arange(self.columns) + 0.5)

    def across(self, lon: np.ndarray) -> np.ndarray:
        """Return the position from west (0) to east (1)."""
        return (np.asarray(lon, dtype=float) - self.west) / self.width

    def up(self, lat: np.ndarray) -> np.ndarray:
        """Return the position from south (0) to north (1)."""
        return (np.asarray(lat, dtype=float) - self.south) / self.height

    def axes(self, step: float) -> tuple[np.ndarray, np.ndarray]:
        """Return latitudes and longitudes of a grid from the south-west corner over the domain.

        A step that does not divide the domain makes the last cells reach beyond it.
        """
        rows = math.ceil(self.height / step - 1e-9)
        columns = math.ceil(self.width / step - 1e-9)
        return (
            np.round(self.south + step * (np.arange(rows) + 0.5), 9),
            np.round(self.west + step * (np.arange(columns) + 0.5), 9),
        )


_ALL = ("moderate", "high")
_DEMO = Domain(
    rows=10,
    columns=12,
    step=STEP,
    record=(1981, 2020),
    simulated=(1981, 2100),
    baseline=(1991, 2020),
    horizons={"mid-century": (2041, 2060), "late-century": (2081, 2100)},
    members={"ALDER-ESM": _ALL, "ROWAN-CM": _ALL, "SEDGE-LR": _ALL},
)
_TINY = Domain(
    rows=4,
    columns=6,
    step=STEP,
    record=(1991, 2010),
    simulated=(1991, 2040),
    baseline=(1991, 2010),
    horizons={"near-term": (2021, 2040)},
    members={"ALDER-ESM": _ALL, "SEDGE-LR": ("high",)},
    draws=20,
    randomisations=99,
)
SIZES = {"tiny": _TINY, "demo": _DEMO}


def domain(size: str = "demo", pixels: int | None = None, years: int | None = None) -> Domain:
    """Return a world of a named size, or of about so many pixels and exactly so many years.

    Raises
    ------
    ValueError
        If the size is unknown, or there are fewer than 4 pixels or 20 years.
    """
    if size not in SIZES:
        raise ValueError(f"size {size!r} is not known; there are {', '.join(SIZES)}")
    result = SIZES[size]
    if pixels is not None:
        if pixels < 4:
            raise ValueError(f"pixels must be 4 or more, got {pixels}")
        step = STEP
        while (rows := max(2, round(math.sqrt(pixels / 1.2)))) * step > MAX_ROWS_DEGREES:
            step /= 2
        columns = max(2, round(pixels / rows))
        result = Domain(**{**vars(result), "rows": rows, "columns": columns, "step": step})
    if years is not None:
        if years < 20:
            raise ValueError(f"years must be 20 or more, got {years}")
        result = Domain(**{**vars(result), **_windows(years)})
    return result


def _windows(years: int) -> dict[str, object]:
    """Return the periods of simulations of any length from 1981 on."""
    last = 1981 + years - 1
    baseline = (1991, 2020) if last >= 2020 else (1981, last)
    horizons = {"mid-century": (2041, 2060), "late-century": (2081, 2100)}
    kept = {name: window for name, window in horizons.items() if window[1] <= last}
    if not kept and last - baseline[1] >= 10:
        kept = {"late-years": (max(baseline[1] + 1, last - 19), last)}
    return {
        "record": (1981, min(2020, last)),
        "simulated": (1981, last),
        "baseline": baseline,
        "horizons": kept,
    }
