"""Compare the files of two results folders value by value, in the part both have."""

from __future__ import annotations

import re
from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from stook.assessment.layout import Layout
from stook.ensemble.summary import TOTAL
from stook.grids.files import PIXEL_CHUNK, open_result, read_table
from stook.trend.field import EVERYWHERE

FILE_COLUMNS = [
    *("file", "status", "compared", "differing", "one_missing"),
    *("variable", "largest_difference", "where", "value_a", "value_b"),
]
"""status is identical, different, not comparable, only in A or only in B; compared, differing and
one_missing count values; the rest is the largest difference of one value."""

PIXEL_COLUMNS = ["file", "variable", "lat", "lon", "where", "value_a", "value_b", "difference"]
"""difference is B less A, in the unit of the variable, where it is largest at that pixel."""

PIXEL_VARIABLES = {"yields": "yield", "ensemble": "change_p50"}
"""Variable by stage whose pixels are listed."""

_TILE = re.compile(r"(tile|transfer|evaluation)-\d+\.nc$")
_KEYS = (
    *("crop", "system", "region", "simulation", "model", "scenario", "realisation", "horizon"),
    *("draw", "year", "variable", "season", "stage", "statistic", "quantity", "period", "kind"),
    *("bin_low", "bin_high"),
)
_WHOLE_RUN = re.compile(r"(evaluation|_distribution|/joint)\.parquet$")
_BLOCK_VALUES = 4_000_000


def files_of(root: Path, stages: tuple[str, ...]) -> dict[str, list[Path]]:
    """Return the result files by name, the tiles of one grid under one name."""
    result: dict[str, list[Path]] = {}
    for stage in stages:
        for path in sorted((root / stage).rglob("*")):
            if path.suffix in (".nc", ".parquet", ".csv") and not path.name.startswith("."):
                name = _TILE.sub(r"\1.nc", path.relative_to(root).as_posix())
                result.setdefault(name, []).append(path)
    return result


@dataclass(frozen=True)
class Scope:
    """The part of the grid both runs have computed.

    Attributes
    ----------
    layers
        Per run, ``computed`` and ``main_region`` (lat, lon) of its layers and its regions; None
        where it has none.
    same_part
        Whether both computed the same regions.
    """

    layers: tuple[xr.Dataset | None, xr.Dataset | None]
    same_part: bool

    @classmethod
    def of(cls, a: Path, b: Path, same_part: bool) -> Scope:
        """Return what two results folders have in common."""
        found: list[xr.Dataset | None] = []
        for root in (a, b):
            path = Layout(root).layers
            if not path.is_file():
                found.append(None)
                continue
            with open_result(path) as layers:
                found.append(layers[["computed", "main_region", "region"]].load())
        return cls((found[0], found[1]), same_part)

    def mask(self, dataset: xr.Dataset) -> xr.DataArray:
        """Return where both have computed values, bool (lat, lon); True without a grid."""
        if not {"lat", "lon"} <= set(dataset.dims):
            return xr.DataArray(True)
        here = {name: dataset[name].values for name in ("lat", "lon")}
        sizes = tuple(len(values) for values in here.values())
        result = xr.DataArray(np.ones(sizes, dtype=bool), here, ("lat", "lon"))
        if self.same_part:
            return result
        for layers in self.layers:
            if layers is not None:
                result &= layers["computed"].reindex(here, fill_value=0) == 1
        return result

    def same_main_region(self, mask: xr.DataArray) -> xr.DataArray:
        """Return where, of a mask, the pixel is judged among those of the same region."""
        one, other = self.layers
        if self.same_part or mask.ndim == 0 or one is None or other is None:
            return mask
        named = [_main_names(layers, mask) for layers in (one, other)]
        return mask & (named[0] == named[1])


def _main_names(layers: xr.Dataset, mask: xr.DataArray) -> np.ndarray:
    """Return the name of the main region of each pixel, empty for none."""
    names = np.append(layers["region"].values.astype(object), "")
    places = layers["main_region"].reindex(lat=mask["lat"], lon=mask["lon"], fill_value=-1)
    found: np.ndarray = names[places.values]
    return found


@dataclass
class _Largest:
    """Counts, and the largest difference found so far."""

    compared: int = 0
    differing: int = 0
    one_missing: int = 0
    size: float = 0.0
    detail: tuple[Any, ...] = ("", np.nan, "", np.nan, np.nan)

    def row(self, name: str) -> dict[str, Any]:
        """Return the row of a file in the table of files."""
        status = "different" if self.differing else "identical"
        counts = (self.compared, self.differing, self.one_missing)
        return dict(zip(FILE_COLUMNS, (name, status, *counts, *self.detail), strict=True))


def compare_file(
    name: str, a: list[Path], b: list[Path], scope: Scope, pixels: int
) -> tuple[dict[str, Any], pd.DataFrame]:
    """Compare one file, or the tiles of one grid.

    Parameters
    ----------
    name
        Its name, from `files_of`.
    a, b
        Its paths in both runs.
    scope
        The part both have.
    pixels
        Pixels to list of yields and ensemble grids.

    Returns
    -------
    dict
        A row of `FILE_COLUMNS`.
    DataFrame
        The pixels with the largest difference, `PIXEL_COLUMNS`.
    """
    if not scope.same_part and _WHOLE_RUN.search(name):
        row = {"file": name, "status": "not comparable", "compared": 0, "differing": 0}
        return row, pd.DataFrame(columns=PIXEL_COLUMNS)
    if name.endswith(".nc"):
        return _compare_grids(name, a, b, scope, pixels)
    return _compare_tables(name, a[0], b[0], scope), pd.DataFrame(columns=PIXEL_COLUMNS)


# Tables.


def _compare_tables(name: str, a: Path, b: Path, scope: Scope) -> dict[str, Any]:
    """Compare the rows both tables have; of runs of other parts, no row over the whole run."""
    one, other = read_table(a), read_table(b)
    if "region" in one and "region" in other and not scope.same_part:
        one, other = (t[~t["region"].isin([EVERYWHERE, TOTAL])] for t in (one, other))
    one, other, keys = _with_keys(one, other)
    values = [str(column) for column in one if column in other and column not in keys]
    both = one[[*keys, *values]].merge(other[[*keys, *values]], on=keys, suffixes=("_a", "_b"))
    found = _Largest()
    if scope.same_part:
        found.differing = found.one_missing = len(one) + len(other) - 2 * len(both)
    for value in values:
        left, right = both[f"{value}_a"].to_numpy(), both[f"{value}_b"].to_numpy()
        place = _count(left, right, np.ones(len(both), dtype=bool), found)
        if place is not None:
            position, difference = place
            where = ", ".join(str(both[key].iloc[position]) for key in keys[:-1])
            found.size = abs(difference)
            found.detail = (value, difference, where, left[position], right[position])
    return found.row(name)


def _with_keys(
    one: pd.DataFrame, other: pd.DataFrame
) -> tuple[pd.DataFrame, pd.DataFrame, list[str]]:
    """Return the tables and the columns that tell their rows apart.

    Columns that name things come first; if they do not suffice, the first others that do, and the
    number of the row among its equals.
    """
    categories = {
        str(name): "str" for name in one if isinstance(one[name].dtype, pd.CategoricalDtype)
    }
    tables = [one.astype(categories), other.astype({k: "str" for k in categories if k in other})]
    common = [str(name) for name in one if name in other]
    keys = [key for key in _KEYS if key in common]
    for column in common:
        if not tables[0].duplicated(keys or None).any():
            break
        before = tables[0].duplicated(keys).sum() if keys else len(one)
        if column not in keys and tables[0].duplicated([*keys, column]).sum() < before:
            keys.append(column)
    numbered = [
        table.assign(row=table.groupby(keys, dropna=False, sort=False).cumcount())
        if keys
        else table.assign(row=np.arange(len(table)))
        for table in tables
    ]
    return numbered[0], numbered[1], [*keys, "row"]


def _count(
    a: np.ndarray, b: np.ndarray, there: np.ndarray, found: _Largest
) -> tuple[int, float] | None:
    """Count into `found`; return flat place and size of a difference larger than any before."""
    if a.dtype.kind not in "fiub" or b.dtype.kind not in "fiub":
        equal = pd.Series(a.ravel()).eq(pd.Series(b.ravel())).to_numpy()
        equal = equal | (pd.isna(a.ravel()) & pd.isna(b.ravel()))
        there = there.ravel()
        found.compared += int(there.sum())
        found.differing += int((there & ~equal).sum())
        return None
    left, right = a.astype(np.float64), b.astype(np.float64)
    missing_a, missing_b = np.isnan(left), np.isnan(right)
    differing = there & (left != right) & ~(missing_a & missing_b)
    found.compared += int(there.sum())
    found.differing += int(differing.sum())
    found.one_missing += int((differing & (missing_a != missing_b)).sum())
    with np.errstate(invalid="ignore"):
        difference = right - left
    size = np.where(differing & np.isfinite(difference), np.abs(difference), 0.0)
    if not size.size or size.max() <= found.size:
        return None
    place = int(size.argmax())
    return place, float(difference.ravel()[place])


# Grids.


def _compare_grids(
    name: str, a: list[Path], b: list[Path], scope: Scope, pixels: int
) -> tuple[dict[str, Any], pd.DataFrame]:
    wanted = PIXEL_VARIABLES.get(name.split("/")[0]) if pixels else None
    found, listed = _Largest(), [pd.DataFrame(columns=PIXEL_COLUMNS)]
    with ExitStack() as stack:
        both = [_open(paths, stack) for paths in (a, b)]
        one, other = xr.align(*both, join="inner", copy=False)
        if not all(one.sizes.values()):
            row = {"file": name, "status": "not comparable", "compared": 0, "differing": 0}
            return row, listed[0]
        if scope.same_part and (one.sizes != both[0].sizes or other.sizes != both[1].sizes):
            found.differing += 1
            found.detail = ("coordinates", np.nan, "", np.nan, np.nan)
        mask = scope.mask(one)
        for variable in map(str, one.data_vars):
            if variable not in other or _is_local(variable, both):
                continue
            # A pixel's false discovery rate is that of its main region.
            judged = variable.startswith("significant")
            there = scope.same_main_region(mask) if judged else mask
            for blocks in _blocks(one[variable], other[variable], there):
                difference = _compare_block(variable, *blocks, found)
                if variable == wanted:
                    listed.append(_largest_pixels(difference, *blocks[:2], pixels))
    filled = [table for table in listed if not table.empty] or listed[:1]
    largest = pd.concat(filled, ignore_index=True).assign(file=name, variable=wanted)
    order = largest["difference"].abs().sort_values(ascending=False, kind="stable").index
    return found.row(name), largest.loc[order[:pixels], PIXEL_COLUMNS]


def _open(paths: list[Path], stack: ExitStack) -> xr.Dataset:
    """Open the tiles of one grid as one, lazily."""
    parts = [stack.enter_context(open_result(path, {})) for path in paths]
    if len(parts) == 1:
        return parts[0]
    return xr.concat(parts, "lat", data_vars="minimal", join="exact")


def _is_local(variable: str, both: list[xr.Dataset]) -> bool:
    """Tell whether a variable counts in a list of regions that is not the same in both."""
    if variable != "main_region" or "region" not in both[0]:
        return variable.endswith("_bnds")
    one, other = ([str(name) for name in dataset["region"].values] for dataset in both)
    return one != other


def _blocks(
    a: xr.DataArray, b: xr.DataArray, mask: xr.DataArray
) -> Iterator[tuple[xr.DataArray, xr.DataArray, xr.DataArray]]:
    """Yield both and the mask in loaded blocks of pixels, all years together."""
    b = b.transpose(*a.dims)
    if "lat" not in a.dims or "lon" not in a.dims:
        yield a.load(), b.load(), xr.DataArray(True)
        return
    deep = a.size // (a.sizes["lat"] * a.sizes["lon"])
    width = max(1, _BLOCK_VALUES // (deep * PIXEL_CHUNK * PIXEL_CHUNK)) * PIXEL_CHUNK
    for top in range(0, a.sizes["lat"], PIXEL_CHUNK):
        for left in range(0, a.sizes["lon"], width):
            part = {"lat": slice(top, top + PIXEL_CHUNK), "lon": slice(left, left + width)}
            yield a.isel(part).load(), b.isel(part).load(), mask.isel(part)


def _compare_block(
    variable: str, a: xr.DataArray, b: xr.DataArray, mask: xr.DataArray, found: _Largest
) -> xr.DataArray:
    """Count the differences of one block into `found`; return them, 0 where there is none."""
    there = mask.broadcast_like(a).transpose(*a.dims).values
    place = _count(a.values, b.values, there, found)
    if place is not None:
        position, found.size = place[0], abs(place[1])
        index = np.unravel_index(position, a.shape)
        names = zip(a.dims, index, strict=True)
        where = ", ".join(f"{dim} {_label(a, str(dim), int(at))}" for dim, at in names)
        values = float(a.values[index]), float(b.values[index])
        found.detail = (variable, place[1], where, *values)
    if a.dtype.kind != "f":
        return xr.zeros_like(a, dtype=np.float64)
    difference = (b.astype(np.float64) - a.astype(np.float64)).where(there, 0.0)
    return difference.fillna(0.0)


def _label(array: xr.DataArray, dimension: str, place: int) -> str:
    if dimension not in array.coords:
        return str(place)
    value = array[dimension].values[place]
    return f"{value:g}" if isinstance(value, np.floating) else str(value)


def _largest_pixels(
    difference: xr.DataArray, a: xr.DataArray, b: xr.DataArray, pixels: int
) -> pd.DataFrame:
    """Return the pixels of a block with the largest difference of any year or horizon."""
    deep = [str(dim) for dim in a.dims if dim not in ("lat", "lon")]
    order = (*deep, "lat", "lon")
    grids = [grid.transpose(*order) for grid in (difference, a, b)]
    flat = [grid.values.reshape(-1, a.sizes["lat"] * a.sizes["lon"]) for grid in grids]
    steps = np.abs(flat[0]).argmax(axis=0)
    columns = np.arange(flat[0].shape[1])
    sizes = flat[0][steps, columns]
    chosen = np.argsort(-np.abs(sizes), kind="stable")[:pixels]
    chosen = chosen[sizes[chosen] != 0]
    depth = tuple(a.sizes[dim] for dim in deep)
    rows = []
    for pixel in chosen:
        row, column = divmod(int(pixel), a.sizes["lon"])
        places = zip(deep, np.unravel_index(int(steps[pixel]), depth), strict=True)
        rows.append(
            {
                "lat": float(a["lat"][row]),
                "lon": float(a["lon"][column]),
                "where": ", ".join(f"{dim} {_label(a, dim, int(at))}" for dim, at in places),
                "value_a": flat[1][steps[pixel], pixel],
                "value_b": flat[2][steps[pixel], pixel],
                "difference": sizes[pixel],
            }
        )
    return pd.DataFrame(rows, columns=PIXEL_COLUMNS)
