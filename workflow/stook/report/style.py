"""How every figure of the report looks, and what a figure carries beside its picture."""

from __future__ import annotations

import io
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

WIDTH = 9.2
"""Width of a figure, inches: with the resolution below it fills the page at laptop width."""

_DPI = 150
MINUS = "\N{MINUS SIGN}"

# Okabe & Ito 2008, Color Universal Design: told apart under all common colour deficiencies.
_COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9")
_LINES = ("-", "--", "-.", ":", (0, (5, 1, 1, 1, 1, 1)), (0, (1, 1)))
_MARKERS = ("o", "s", "^", "D", "v", "P")
INK = "#1f2a30"
QUIET = "#6b767d"
PALE = "#dfe4e6"

_SETTINGS: dict[Any, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 9,
    "axes.titlesize": 9.5,
    "axes.titlelocation": "left",
    "axes.labelsize": 9,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "text.color": INK,
    "grid.color": PALE,
    "grid.linewidth": 0.7,
    "legend.frameon": False,
    "hatch.linewidth": 0.6,
    "axes.unicode_minus": True,
}


@dataclass(frozen=True)
class Look:
    """Colour, line and marker of one scenario: never told apart by colour alone."""

    colour: str
    line: Any
    marker: str


@dataclass(frozen=True)
class Drawing:
    """A figure with all that stands beside it.

    Attributes
    ----------
    name
        File name without suffix; letters, digits, ``-`` and ``_``.
    caption
        What is shown and how to read it, plain text.
    alt
        The picture in words, for those who cannot see it.
    figure
        The picture.
    data
        The numbers that are drawn.
    """

    name: str
    caption: str
    alt: str
    figure: Figure
    data: pd.DataFrame

    def png(self) -> bytes:
        """Return the picture as PNG, without a date."""
        buffer = io.BytesIO()
        with mpl.rc_context(_SETTINGS):
            FigureCanvasAgg(self.figure)
            self.figure.savefig(buffer, format="png", dpi=_DPI, metadata={"Software": None})
        return buffer.getvalue()


@contextmanager
def drawing_settings() -> Iterator[None]:
    """Draw with the settings of the report."""
    with mpl.rc_context(_SETTINGS):
        yield


def looks(scenarios: Sequence[str]) -> dict[str, Look]:
    """Return a look for each scenario, by its place in the assessment."""
    return {
        name: Look(
            _COLOURS[n % len(_COLOURS)], _LINES[n % len(_LINES)], _MARKERS[n % len(_MARKERS)]
        )
        for n, name in enumerate(scenarios)
    }


def new_figure(height: float, width: float = WIDTH) -> Figure:
    """Return an empty figure, inches."""
    return Figure(figsize=(width, height), layout="constrained")


def panels(
    count: int, columns: int, row_height: float, shared: bool = True
) -> tuple[Figure, list[Axes]]:
    """Return a figure with `count` panels in rows of `columns`, sharing both axes or none."""
    columns = min(columns, count)
    rows = -(-count // columns)
    figure = new_figure(0.6 + rows * row_height)
    grid = figure.subplots(rows, columns, sharex=shared, sharey=shared, squeeze=False)
    axes = list(grid.ravel())
    for spare in axes[count:]:
        spare.set_axis_off()
    for axis in axes[max(0, count - columns) : count]:
        axis.tick_params(labelbottom=True)
    return figure, axes[:count]


def nice_limit(values: np.ndarray, share: float = 0.98, smallest: float = 5.0) -> float:
    """Return a round limit that most absolute values stay within (1, 1.5, 2, 3, 5, 7.5 x 10^n)."""
    valid = np.abs(values[np.isfinite(values)])
    wanted = max(float(np.quantile(valid, share)) if valid.size else smallest, smallest)
    power = 10.0 ** np.floor(np.log10(wanted))
    steps = (1.0, 1.5, 2.0, 3.0, 5.0, 7.5, 10.0)
    return next(step * power for step in steps if step * power >= wanted * (1 - 1e-12))


def signed(value: float, digits: int = 1) -> str:
    """Return a number with its sign and a true minus; ``n/a`` for a missing one."""
    if not np.isfinite(value):
        return "n/a"
    text = f"{abs(value):.{digits}f}"
    if float(text) == 0:
        return text
    return f"{'+' if value > 0 else MINUS}{text}"


def percent(share: float, digits: int = 0) -> str:
    """Return a share of one in percent; ``n/a`` for a missing one."""
    return f"{100 * share:.{digits}f} %" if np.isfinite(share) else "n/a"
