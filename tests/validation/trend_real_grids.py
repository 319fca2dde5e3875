"""Trends of real climate model grids, early against late, beside randomised trends.

    python tests/validation/trend_real_grids.py [--figure FILE.svg] [--json]

Annual mean air temperature over North America, scenarios A1B and E1, 1860-2099 (package
``iris-sample-data``), 1860-1920 against 1980-2099. Prints the table of docs/trend.md and, with
``--figure``, draws its figure. With ``--json`` the last line is one JSON object with a key per
figure of the table, such as A1B_late_mean_trend.
"""

from __future__ import annotations

import argparse
import json
from pathlib import Path

import iris_sample_data
import numpy as np
import pandas as pd
import xarray as xr
from stook.grids.cells import cell_areas
from stook.trend.field import EVERYWHERE
from stook.trend.pixels import Domain, MapTrends, Quantity, map_trends
from stook.trend.series import TrendOptions

SCENARIOS = ("A1B", "E1")
PERIODS = {"early": (1860, 1920), "late": (1980, 2099)}
OPTIONS = TrendOptions(seed=1860, count=999, minimum_years=20)


def temperature(scenario: str) -> xr.DataArray:
    """Return annual means, K, dims (year, lat, lon), latitude ascending."""
    path = Path(iris_sample_data.path) / f"{scenario}_north_america.nc"
    coder = xr.coders.CFDatetimeCoder(use_cftime=True)
    with xr.open_dataset(path, decode_times=coder) as dataset:
        series = dataset["air_temperature"].load()
    series = series.assign_coords(time=[date.year for date in series["time"].values])
    names = {"time": "year", "latitude": "lat", "longitude": "lon"}
    return series.rename(names).sortby("lat").astype(np.float64)


def trends(scenario: str) -> MapTrends:
    """Return the trends of every cell."""
    series = temperature(scenario)
    lat, lon = (
        np.append(axis - np.diff(axis)[0] / 2, axis[-1] + np.diff(axis)[0] / 2)
        for axis in (series["lat"].values, series["lon"].values)
    )
    shape = (series.sizes["lat"], series.sizes["lon"])
    whole = np.zeros(shape, dtype=np.int8)
    domain = Domain(whole, 100 * cell_areas(lat, lon), whole.astype(int), ["North America"])
    quantity = Quantity("tas", "annual mean air temperature", "degC")
    return map_trends(series, whole, quantity, domain, PERIODS, OPTIONS, 64)


def table(found: dict[str, MapTrends]) -> pd.DataFrame:
    """Return one row a scenario and period."""
    rows = []
    for scenario, one in found.items():
        fields = one.field[one.field["region"] == EVERYWHERE].set_index("period")
        for period in PERIODS:
            row, grids = fields.loc[period], one.grids.sel(period=period)
            rows.append(
                {
                    "scenario": scenario,
                    "period": period,
                    "mean_trend": row["mean_trend"],
                    "mean_trend_lag1": row["mean_trend_lag1"],
                    "mean_trend_p": row["mean_trend_p"],
                    "cell_lag1": float(grids["lag1_tas"].mean()),
                    "share_significant": row["share_significant"],
                    "share_shuffled": float((grids["p_shuffle_tas"] <= OPTIONS.level).mean()),
                    "share_random_p95": row["share_random_p95"],
                    "share_p": row["share_p"],
                    "share_discovered": float((grids["significant_tas"] == 1).mean()),
                }
            )
    return pd.DataFrame(rows)


def draw(found: dict[str, MapTrends], path: Path) -> None:
    """Draw the distribution of cell trends over area against the randomised one."""
    import matplotlib as mpl
    from matplotlib.figure import Figure

    mpl.rcParams["svg.hashsalt"] = "stook"
    figure = Figure(figsize=(8.6, 5.2), layout="constrained")
    axes = figure.subplots(len(SCENARIOS), len(PERIODS), sharex=True, sharey="row")
    for row, scenario in zip(axes, SCENARIOS, strict=True):
        for cell, (period, (first, last)) in zip(row, PERIODS.items(), strict=True):
            shares = found[scenario].distribution
            shares = shares[shares["period"] == period]
            for kind, style in (
                ("observed", {"color": "#0072B2", "alpha": 0.5, "fill": True}),
                ("randomised", {"color": "#1f2a30", "linestyle": "--"}),
            ):
                part = shares[shares["kind"] == kind]
                edges = np.append(part["bin_low"], part["bin_high"].iloc[-1])
                density = 100 * part["area_share"] / np.diff(edges) / 10
                label = {"observed": "model", "randomised": "randomised, AR(1)"}[kind]
                cell.stairs(density, edges, label=label, **style)
            cell.set_title(f"{scenario}, {first}\N{EN DASH}{last}", loc="left", fontsize=10)
            cell.axvline(0, color="#6b767d", linewidth=0.7)
        row[0].set_ylabel("% of area per 0.1 K")
    for cell in axes[-1]:
        cell.set_xlabel("trend of annual mean temperature, K per decade")
        cell.set_xlim(-0.7, 1.2)
    axes[0, 0].legend(frameon=False, fontsize=9)
    path.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(path, metadata={"Date": None})


def main() -> None:
    """Print the table; draw the figure if asked to."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--figure", type=Path)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    found = {scenario: trends(scenario) for scenario in SCENARIOS}
    rows = table(found)
    print(
        "| scenario | period | mean trend, K/decade | its lag-1 | its p | mean lag-1 of cells | "
        "area significant, AR(1) | cells, shuffled | 95th percentile of randomised fields | "
        "field p | cells by false discovery rate |"
    )
    print("|---" * 11 + "|")
    for _, row in rows.iterrows():
        shares = (f"{100 * row[name]:.0f} %" for name in rows.columns if name.startswith("share_s"))
        significant, shuffled = shares
        print(
            f"| {row['scenario']} | {PERIODS[row['period']][0]}-{PERIODS[row['period']][1]} "
            f"| {row['mean_trend']:+.3f} | {row['mean_trend_lag1']:.2f} "
            f"| {row['mean_trend_p']:.3f} | {row['cell_lag1']:.2f} | {significant} | {shuffled} "
            f"| {100 * row['share_random_p95']:.0f} % | {row['share_p']:.3f} "
            f"| {100 * row['share_discovered']:.0f} % |"
        )
    if given.figure:
        draw(found, given.figure)
    if given.json:
        names = rows.columns[2:]
        print(
            json.dumps(
                {
                    f"{row['scenario']}_{row['period']}_{name}": round(float(row[name]), 4)
                    for _, row in rows.iterrows()
                    for name in names
                }
            )
        )


if __name__ == "__main__":
    main()
