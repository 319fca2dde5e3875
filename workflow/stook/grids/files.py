"""NetCDF and table files of our own: written to a temporary name, renamed when complete."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pandas as pd
import xarray as xr

from stook.errors import ResultsError

Codec = Literal["zstd", "zlib"]
TIME_CHUNK = 1825
PIXEL_CHUNK = 10
_CHUNKS = {"time": TIME_CHUNK, "lat": PIXEL_CHUNK, "lon": PIXEL_CHUNK}
CF_TIME = xr.coders.CFDatetimeCoder(use_cftime=True)


def temporary_name(path: Path) -> Path:
    """Return the hidden name a file is written to before it gets its own."""
    return path.with_name(f".{path.name}.{os.getpid()}.part")


def open_result(path: Path, chunks: Mapping[str, Any] | None = None) -> xr.Dataset:
    """Open a NetCDF file of a results folder; times are cftime, reading is lazy.

    Parameters
    ----------
    path
        The file.
    chunks
        Dask chunks by dimension (see `pixel_chunks`); None reads lazily without Dask.

    Raises
    ------
    ResultsError
        If it is missing or cannot be read.
    """
    try:
        return xr.open_dataset(path, engine="netcdf4", chunks=chunks, decode_times=CF_TIME)
    except FileNotFoundError:
        raise ResultsError(f"{path}: no such file; run the stage that makes it") from None
    except (OSError, ValueError) as error:
        raise ResultsError(f"{path}: cannot be read ({error}); delete it and run again") from None


def pixel_chunks(dataset: xr.Dataset, block_mb: float, values_per_pixel: int) -> dict[str, int]:
    """Return Dask chunks that hold whole series: time in one piece, few pixels.

    Parameters
    ----------
    dataset
        Has dimensions lat and lon.
    block_mb
        Largest size of a block in MiB, counted at 4 bytes a value.
    values_per_pixel
        Values of one pixel in one block, all variables together.

    Returns
    -------
    dict
        Chunks for every dimension; lat and lon in multiples of the file's own chunks.
    """
    pixels = max(1, int(block_mb * 2**20 / (4 * max(1, values_per_pixel))))
    columns = min(dataset.sizes["lon"], max(1, pixels // PIXEL_CHUNK))
    if columns > PIXEL_CHUNK:
        columns -= columns % PIXEL_CHUNK
    rows = min(dataset.sizes["lat"], max(1, min(PIXEL_CHUNK, pixels // columns)))
    chunks = {str(name): -1 for name in dataset.dims}
    return chunks | {"lat": rows, "lon": columns}


def chunked_like(grid: xr.DataArray, layers: Sequence[xr.DataArray]) -> list[xr.DataArray]:
    """Return layers (lat, lon) in the blocks of a lazy grid; as they are if it is not lazy."""
    sizes = grid.chunksizes
    if not sizes:
        return list(layers)
    return [one.chunk({d: sizes[d] for d in ("lat", "lon")}) for one in layers]


def encoding(dataset: xr.Dataset, codec: Codec = "zlib") -> dict[str, dict[str, Any]]:
    """Return the NetCDF encoding of a dataset: compressed data, plain coordinates.

    Floating-point data keep their type; their missing value is NaN. Daily series are chunked
    1825 days x 10 x 10 pixels (measured: see docs/performance.md).
    """
    result: dict[str, dict[str, Any]] = {}
    for name in dataset.variables:
        variable = dataset[name]
        if name in dataset.coords or str(name).endswith("_bnds"):
            result[str(name)] = {"_FillValue": None}
            continue
        options: dict[str, Any] = {"_FillValue": None}
        if variable.dtype.kind == "f":
            options["_FillValue"] = variable.dtype.type(np.nan)
        if variable.ndim and variable.dtype.kind in "fiu":
            options |= {"compression": codec, "complevel": 1, "shuffle": codec == "zlib"}
            options["chunksizes"] = tuple(
                min(size, _CHUNKS.get(str(dim), 64))
                for dim, size in zip(variable.dims, variable.shape, strict=True)
            )
        result[str(name)] = options
    return result


def delayed_netcdf(dataset: xr.Dataset, path: Path, codec: Codec = "zlib") -> Any:
    """Write the header of a NetCDF-4 file and return the delayed writing of its data."""
    bare = dataset.drop_encoding()
    time = bare.variables.get("time")
    options = encoding(bare, codec)
    if time is not None and time.dtype == object:
        options["time"] |= {"units": "days since 1850-01-01", "dtype": "float64"}
        if "time_bnds" in bare:
            options["time_bnds"] |= {"units": "days since 1850-01-01", "dtype": "float64"}
    return bare.to_netcdf(path, engine="netcdf4", format="NETCDF4", encoding=options, compute=False)


def write_table(frame: pd.DataFrame, path: Path) -> None:
    """Write a table as Parquet or CSV, by the file's suffix (no temporary name of its own).

    Raises
    ------
    ValueError
        If the suffix is neither ``.parquet`` nor ``.csv``.
    """
    kind = next((s for s in (".parquet", ".csv") if s in path.suffixes or path.suffix == s), "")
    match kind:
        case ".parquet":
            frame.to_parquet(path, index=False)
        case ".csv":
            frame.to_csv(path, index=False)
        case _:
            raise ValueError(f"{path}: a table is .parquet or .csv")


def read_table(path: Path) -> pd.DataFrame:
    """Read a table of a results folder.

    Raises
    ------
    ResultsError
        If it is missing or cannot be read.
    """
    try:
        return pd.read_parquet(path) if path.suffix == ".parquet" else pd.read_csv(path)
    except FileNotFoundError:
        raise ResultsError(f"{path}: no such file; run the stage that makes it") from None
    except (OSError, ValueError) as error:
        raise ResultsError(f"{path}: cannot be read ({error}); delete it and run again") from None
