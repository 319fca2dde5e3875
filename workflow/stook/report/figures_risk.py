"""Figures of uncertainty: where the variance comes from, and members by class of change."""

from __future__ import annotations

from collections.abc import Sequence

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.patches import Patch

from stook.ensemble.partition import COMPONENTS, CROSSED, INTERACTION, POLYNOMIAL
from stook.ensemble.summary import TOTAL
from stook.report.style import INK, Drawing, drawing_settings, panels, percent, signed
from stook.report.tables import combined, in_order, in_regions

MOST_PANELS = 12
"""Regions drawn; the figure's numbers hold the rest."""

_METHODS = {POLYNOMIAL: "polynomial", CROSSED: "analysis of variance"}

# Okabe & Ito 2008; told apart by hatching as well
_PARTS = {
    "internal": ("#c9d0d3", "", "internal variability"),
    "coefficients": ("#E69F00", "...", "response coefficients"),
    "model": ("#56B4E9", "//", "climate model"),
    "scenario": ("#009E73", "\\\\", "scenario"),
    INTERACTION: ("#CC79A7", "xx", "interactions"),
}


def _rows_of(table: pd.DataFrame, crop: str, regions: Sequence[str]) -> pd.DataFrame:
    rows = in_regions(combined(table[table["crop"] == crop]))
    return in_order(rows, region=[TOTAL, *regions])


def partition_figure(table: pd.DataFrame, crop: str, regions: Sequence[str]) -> Drawing:
    """Draw the shares of variance by lead time, a panel per region, both methods side by side.

    Parameters
    ----------
    table
        The partition table.
    """
    rows = _rows_of(table, crop, regions)
    names = list(rows["region"].unique())[: MOST_PANELS // 2]
    methods = [name for name in _METHODS if (rows["method"] == name).any()]
    with drawing_settings():
        figure, axes = panels(len(names) * len(methods), 2 * len(methods), 2.0)
        pairs = [(name, method) for name in names for method in methods]
        for axis, (name, method) in zip(axes, pairs, strict=True):
            own = rows[(rows["region"] == name) & (rows["method"] == method)]
            _stack(axis, own)
            axis.set_title(f"{name}, {_METHODS[method]}", fontsize=8)
        shown = [part for part in _PARTS if (rows["component"] == part).any()]
        handles = [
            Patch(facecolor=_PARTS[part][0], hatch=_PARTS[part][1], edgecolor=INK, linewidth=0.4,
                  label=_PARTS[part][2])
            for part in shown
        ]  # fmt: skip
        figure.legend(handles=handles, loc="outside upper left", ncols=5, fontsize=9)
        figure.supylabel("share of variance, %", fontsize=9)
    return Drawing(
        f"partition_{crop}",
        f"Where the spread of projected {crop} yield comes from, by year. Left of each pair: "
        "smooth path of every member (polynomial of fourth order), internal variability what is "
        "left around it; right: analysis of variance of the models that have every scenario. The "
        "shares are those of this ensemble: they say nothing of what all its members lack.",
        _partition_alt(rows, crop),
        figure,
        rows,
    )


def _stack(axis: Axes, rows: pd.DataFrame) -> None:
    wide = rows.pivot_table(index="year", columns="component", values="share", sort=False)
    below = np.zeros(len(wide))
    for part, (colour, hatch, _) in _PARTS.items():
        if part not in wide:
            continue
        above = below + 100 * wide[part].to_numpy()
        axis.fill_between(
            wide.index, below, above, facecolor=colour, hatch=hatch, edgecolor=INK, linewidth=0.3
        )
        below = above
    axis.set_ylim(0, 100)
    axis.margins(x=0)


def _partition_alt(rows: pd.DataFrame, crop: str) -> str:
    last = rows["year"].max()
    own = rows[(rows["year"] == last) & (rows["method"] == POLYNOMIAL)]
    first = own[own["region"] == own["region"].iloc[0]].set_index("component")["share"]
    parts = ", ".join(f"{_PARTS[p][2]} {percent(first[p])}" for p in COMPONENTS if p in first)
    return (
        f"Stacked shares of the variance of {crop} yield through the years. "
        f"{own['region'].iloc[0]}, {last}: {parts}."
    )


def class_figure(
    table: pd.DataFrame, crop: str, scenarios: Sequence[str], regions: Sequence[str]
) -> Drawing:
    """Draw the share of members by class of change, a bar per period, a panel per scenario.

    The regions together, or the only region.
    """
    rows = _rows_of(table, crop, regions)
    where = str(rows["region"].iloc[0])
    own = in_order(rows[rows["region"] == where], scenario=scenarios)
    shown = list(own["scenario"].unique())
    count = int(own["number"].max()) + 1
    colours = mpl.colormaps["BrBG"](_places(own, count))
    with drawing_settings():
        figure, axes = panels(len(shown), 3, 2.6)
        for axis, scenario in zip(axes, shown, strict=True):
            wide = own[own["scenario"] == scenario].pivot_table(
                index=["first", "last"], columns="number", values="share"
            )
            below = np.zeros(len(wide))
            for number in range(count):
                share = 100 * wide[number].to_numpy()
                axis.bar(
                    range(len(wide)), share, bottom=below, color=colours[number], edgecolor=INK,
                    linewidth=0.4, width=0.75,
                )  # fmt: skip
                for place, (low, height) in enumerate(zip(below, share, strict=True)):
                    if height >= 10:
                        text = f"{height:.0f}"
                        axis.text(place, low + height / 2, text, ha="center", va="center",
                                  fontsize=7.5, color=_ink(colours[number]))  # fmt: skip
                below = below + share
            axis.set_xticks(range(len(wide)), [f"{a}-\n{b}" for a, b in wide.index])
            axis.set_title(scenario)
            axis.set_ylim(0, 100)
        labels = _labels(own, count)
        handles = [
            Patch(facecolor=colours[n], edgecolor=INK, linewidth=0.4, label=labels[n])
            for n in range(count)
        ]
        figure.legend(handles=handles[::-1], loc="outside right upper", fontsize=8.5,
                      title="yield change, %")  # fmt: skip
        figure.supylabel("share of members, %", fontsize=9)
    return Drawing(
        f"classes_{crop}_members",
        f"{crop[:1].upper()}{crop[1:]}, {where}: members by class of yield change against the "
        "baseline, period after period. Other regions: tables/classes.csv. A share of members is "
        "not by itself a likelihood.",
        f"Stacked bars of members by class of yield change of {crop} in {where} for "
        f"{', '.join(shown)}. {_classes_alt(own)}",
        figure,
        rows,
    )


def _places(rows: pd.DataFrame, count: int) -> np.ndarray:
    """Return the place of each class on a diverging scale: losses below the middle, gains above."""
    first = rows.drop_duplicates("number").set_index("number")
    upper, lower = first["upper"], first["lower"]
    losing = int((upper <= 0).sum())
    gaining = int((lower >= 0).sum())
    places = np.full(count, 0.5)
    places[:losing] = np.linspace(0.1, 0.42, max(losing, 1))[:losing]
    places[count - gaining :] = np.linspace(0.58, 0.9, max(gaining, 1))[:gaining]
    return places


def _ink(colour: np.ndarray) -> str:
    return "white" if 0.3 * colour[0] + 0.59 * colour[1] + 0.11 * colour[2] < 0.5 else INK


def _labels(rows: pd.DataFrame, count: int) -> list[str]:
    first = rows.drop_duplicates("number").set_index("number")
    lower, upper = first["lower"], first["upper"]
    labels = []
    for number in range(count):
        low, high = float(lower[number]), float(upper[number])
        if np.isnan(low):
            labels.append(f"below {signed(high, 0)}")
        elif np.isnan(high):
            labels.append(f"{signed(low, 0)} and more")
        else:
            labels.append(f"{signed(low, 0)} to {signed(high, 0)}")
    return labels


def _classes_alt(rows: pd.DataFrame) -> str:
    last = rows[rows["first"] == rows["first"].max()]
    parts = [
        f"{scenario}: {percent(float(group.loc[group['upper'] <= 0, 'share'].sum()))} of members "
        "in the classes of loss"
        for scenario, group in last.groupby("scenario", sort=False)
    ]
    years = f"{last['first'].iloc[0]}-{last['last'].iloc[0]}"
    return f"{years}, {'; '.join(parts)}."
