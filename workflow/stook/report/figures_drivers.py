"""What moves the yield: the part of each weather term in the change."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from stook.constants import OBSERVED
from stook.report.style import INK, Drawing, Look, drawing_settings, looks, panels, signed

LOG_UNIT = "percent"
"""Unit the effects of a log link are shown in."""


def effects_in_percent(means: pd.DataFrame) -> pd.DataFrame:
    """Turn effects in log units into percent, 100 (exp(effect) - 1); others stay t ha-1."""
    log = means["unit"] == "1"
    value = means["value"].where(~log, 100 * np.expm1(means["value"]))
    return means.assign(value=value, unit=means["unit"].where(~log, LOG_UNIT))


def drivers_figure(effects: pd.DataFrame, horizon: str, scenarios: Sequence[str]) -> Drawing:
    """Draw the mean effect of every term at a horizon, a panel per crop and water system.

    Parameters
    ----------
    effects
        Period means: simulation, scenario, crop, system, quantity, unit, period, value; the
        effect of each term against its own baseline mean.
    """
    rows = effects[(effects["period"] == horizon) & (effects["scenario"] != OBSERVED)]
    cells = list(dict.fromkeys(zip(rows["crop"], rows["system"], strict=True)))
    terms = rows.groupby(["crop", "system"])["quantity"].nunique().max()
    with drawing_settings():
        look = looks(scenarios)
        figure, axes = panels(len(cells), min(2, len(cells)), 0.75 + 0.32 * terms, shared=False)
        for axis, (crop, system) in zip(axes, cells, strict=True):
            chosen = rows[(rows["crop"] == crop) & (rows["system"] == system)]
            _terms(axis, chosen, look)
            axis.set_title(f"{crop}, {system}")
            unit = str(chosen["unit"].iloc[0])
            axis.set_xlabel("effect on yield, " + ("%" if unit == LOG_UNIT else "t/ha"))
        handles = [
            Line2D([], [], linestyle="none", marker=own.marker, color=own.colour, label=name)
            for name, own in look.items()
        ]
        figure.legend(handles=handles, loc="outside upper left", ncols=5, fontsize=9)
    return Drawing(
        f"drivers_{horizon}",
        f"Part of each weather term of the response in the yield change, {horizon} against the "
        "baseline, mean over the harvested area. Large marker: mean of the simulations; small: "
        "each simulation. Central coefficients.",
        _alt(rows, horizon),
        figure,
        rows,
    )


def _terms(axis: Axes, rows: pd.DataFrame, look: Mapping[str, Look]) -> None:
    names = list(rows["quantity"].unique())
    axis.axvline(0, color=INK, linewidth=0.8)
    axis.grid(axis="x")
    axis.set_axisbelow(True)
    step = 0.6 / max(1, len(look))
    for number, (scenario, own) in enumerate(look.items()):
        shift = (number - (len(look) - 1) / 2) * step
        chosen = rows[rows["scenario"] == scenario]
        y = chosen["quantity"].map(names.index) + shift
        axis.plot(chosen["value"], y, own.marker, color=own.colour, markersize=3, alpha=0.45, mew=0)
        means = chosen.groupby("quantity", sort=False)["value"].mean()
        axis.plot(
            means,
            [names.index(name) + shift for name in means.index],
            own.marker,
            color=own.colour,
            markersize=7,
            markeredgecolor="white",
        )
    axis.set_yticks(range(len(names)), [name.replace("_", " ") for name in names])
    axis.set_ylim(len(names) - 0.5, -0.5)
    axis.tick_params(axis="y", length=0)


def _alt(rows: pd.DataFrame, horizon: str) -> str:
    keys = ["crop", "system", "scenario", "quantity"]
    means = rows.groupby(keys, sort=False)["value"].mean().reset_index()
    parts = [
        f"{row['crop']}, {row['system']}, {row['scenario']}, "
        f"{str(row['quantity']).replace('_', ' ')}: {signed(row['value'])}"
        for _, row in means.iterrows()
    ]
    return f"Mean effect of each weather term on yield, {horizon}. {'; '.join(parts)}."
