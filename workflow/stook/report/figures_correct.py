"""The correction, before and after, on years it was not calibrated on."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from stook.report.style import INK, QUIET, WIDTH, Drawing, drawing_settings, new_figure

_RAW, _CORRECTED = "#D55E00", "#0072B2"
WHOLE_YEAR = "all"
_MOST_SIMULATIONS = 15
_MOST_STATISTICS = 4


def correction_figure(evaluation: pd.DataFrame) -> Drawing:
    """Draw statistics of each variable and simulation, raw and corrected, whole year.

    Parameters
    ----------
    evaluation
        simulation, variable, season, stage, statistic, unit, mean, p05, p95.
    """
    rows = evaluation[evaluation["season"] == WHOLE_YEAR]
    variables = list(rows["variable"].unique())
    statistics = list(rows["statistic"].unique())[:_MOST_STATISTICS]
    rows = rows[rows["statistic"].isin(statistics)]
    simulations = list(rows["simulation"].unique())
    if pooled := len(simulations) > _MOST_SIMULATIONS:
        rows, simulations = _by_model(rows)
    line = 0.19 * len(simulations) + 0.75
    with drawing_settings():
        figure = new_figure(0.5 + line * len(variables), WIDTH)
        axes = figure.subplots(len(variables), len(statistics), sharey=True, squeeze=False)
        for row, variable in enumerate(variables):
            for column, statistic in enumerate(statistics):
                chosen = rows[(rows["variable"] == variable) & (rows["statistic"] == statistic)]
                axis = axes[row, column]
                if chosen.empty:
                    axis.set_axis_off()
                    continue
                _dumbbells(axis, chosen, simulations)
                axis.set_title(f"{variable}: {statistic.replace('_', ' ')}", fontsize=8.5)
                axis.set_xlabel(_unit(chosen), fontsize=8)
        figure.legend(handles=_handles(), loc="outside upper left", ncols=3, fontsize=9)
    names = "models" if pooled else "simulations"
    return Drawing(
        "correction",
        "Correction evaluated on the half of the reference period it was not calibrated on, whole "
        "year, mean over the pixels computed (thin line: 5-95 % of pixels). A bias of zero is "
        "perfect.",
        f"Biases of {len(simulations)} {names} before and after correction. {_alt(rows)}",
        figure,
        rows,
    )


def _by_model(rows: pd.DataFrame) -> tuple[pd.DataFrame, list[str]]:
    """Average the simulations of a model, when there are too many to show each."""
    keys = ["simulation", "variable", "season", "stage", "statistic", "unit"]
    model = rows["simulation"].str.split("_").str[0]
    pooled = rows.assign(simulation=model).groupby(keys, sort=False, dropna=False)
    frame = pooled[["mean", "p05", "p95"]].mean().reset_index()
    return frame, list(frame["simulation"].unique())


def _dumbbells(axis: Axes, rows: pd.DataFrame, simulations: Sequence[str]) -> None:
    axis.axvline(0, color=INK, linewidth=0.7)
    axis.grid(axis="x")
    axis.set_axisbelow(True)
    place = {name: number for number, name in enumerate(simulations)}
    for stage, colour, marker, shift in (
        ("raw", _RAW, "o", -0.13),
        ("corrected", _CORRECTED, "D", 0.13),
    ):
        chosen = rows[rows["stage"] == stage]
        y = chosen["simulation"].map(place) + shift
        axis.hlines(y, chosen["p05"], chosen["p95"], colour, linewidth=0.9, alpha=0.8)
        face = "white" if stage == "raw" else colour
        axis.plot(
            chosen["mean"],
            y,
            linestyle="none",
            marker=marker,
            markersize=4.2,
            color=colour,
            markerfacecolor=face,
        )
    axis.set_yticks(range(len(simulations)), [s.replace("_", " ") for s in simulations])
    axis.set_ylim(len(simulations) - 0.4, -0.6)
    axis.tick_params(axis="y", length=0, labelsize=7.5)
    axis.tick_params(axis="x", labelsize=7.5)
    axis.locator_params(axis="x", nbins=4)


def _unit(rows: pd.DataFrame) -> str:
    unit = str(rows["unit"].iloc[0])
    return {"1": "share", "nan": "", "None": ""}.get(unit, unit)


def _handles() -> list[Line2D]:
    return [
        Line2D(
            [], [], linestyle="none", marker="o", color=_RAW, markerfacecolor="white", label="raw"
        ),
        Line2D([], [], linestyle="none", marker="D", color=_CORRECTED, label="corrected"),
        Line2D([], [], color=QUIET, linewidth=0.9, label="5-95 % of pixels"),
    ]


def _alt(rows: pd.DataFrame) -> str:
    parts = []
    for (variable, statistic), group in rows.groupby(["variable", "statistic"], sort=False):
        size = group.assign(size=group["mean"].abs()).groupby("stage")["size"].max()
        before, after = size.get("raw", np.nan), size.get("corrected", np.nan)
        parts.append(
            f"{variable}, {str(statistic).replace('_', ' ')}: largest {before:.2g} before, "
            f"{after:.2g} after"
        )
    return "; ".join(parts) + "."
