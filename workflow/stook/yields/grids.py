"""Yields of pixels and years from season indices, labelled."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import xarray as xr

from stook.grids.files import chunked_like
from stook.grids.missing import Reason, reason_attributes
from stook.season.definition import YEAR_ATTRIBUTES
from stook.yields.kernels import TERMS_AT_ONCE, padded, term_effects, yield_ratios
from stook.yields.response import Response
from stook.yields.response_terms import response_columns, term_slices
from stook.yields.technology import TECHNOLOGY

BASELINE_SHARE = 2 / 3
"""Least share of the baseline years that need a value (a choice of this program)."""


@dataclass(frozen=True)
class _Model:
    """What a block needs besides its values."""

    response: Response
    coefficients: np.ndarray
    baseline: np.ndarray
    fewest: int


def yield_grids(
    indices: xr.Dataset,
    baseline_yield: xr.DataArray,
    reason: xr.DataArray,
    response: Response,
    coefficients: np.ndarray,
    baseline: tuple[int, int],
    technology: pd.Series | None = None,
) -> xr.Dataset:
    """Return yield ratio, yield, the effect of each term and the extrapolation flags.

    Parameters
    ----------
    indices
        Season indices (year, lat, lon) by the names the response uses, and ``reason`` (lat, lon);
        lazy in blocks of pixels with all years, or not.
    baseline_yield
        t ha-1 (lat, lon).
    reason
        int8 (lat, lon); a pixel is computed where it is 0.
    response
        The response.
    coefficients
        float64, shape (k,), in document order.
    baseline
        First and last year of the baseline.
    technology
        Factor of the yield by year; none where it is constant.

    Returns
    -------
    Dataset
        yield_ratio (1), yield (t ha-1), effect_<term> (change of log yield, or t ha-1 under a
        level link) float64 (year, lat, lon); extrapolated, integer bits (year, lat, lon), the
        first index of the document is bit 1; reason int8 (lat, lon); with a technology path,
        technology (year), which is in the yield and in nothing else.
    """
    years = indices["year"].values
    inside = (years >= baseline[0]) & (years <= baseline[1])
    fewest = int(np.ceil(BASELINE_SHARE * (baseline[1] - baseline[0] + 1)))
    model = _Model(response, np.asarray(coefficients, dtype=np.float64), inside, fewest)
    names = response.used_indices
    grids = [indices[name] for name in names]
    layers = chunked_like(grids[0], [baseline_yield, reason, indices["reason"]])
    effects = len(response.terms)
    results = xr.apply_ufunc(
        _block,
        *layers,
        *grids,
        kwargs={"model": model},
        input_core_dims=[[]] * len(layers) + [["year"]] * len(grids),
        output_core_dims=[["year"]] * (effects + 3) + [[]],
        output_dtypes=[np.float64] * (effects + 2) + [_flag_type(response), np.int8],
        dask="parallelized",
        join="exact",
    )
    attributes = _attributes(response)
    data = {
        name: grid.transpose("year", "lat", "lon").assign_attrs(attributes[name])
        for name, grid in zip(attributes, results[:-1], strict=True)
    }
    data["reason"] = results[-1].assign_attrs(reason_attributes())
    if technology is not None:
        data |= _with_technology(data["yield"], technology.loc[years])
    dataset = xr.Dataset(data).drop_vars("crop_system", errors="ignore")
    return dataset.assign_coords(year=("year", years, YEAR_ATTRIBUTES))


def _with_technology(yields: xr.DataArray, technology: pd.Series) -> dict[str, xr.DataArray]:
    """Return the yield under a technology path, and the path (year)."""
    factor = xr.DataArray(technology.to_numpy(), dims="year")
    scaled = (yields * factor).assign_attrs(yields.attrs)
    scaled.attrs["comment"] = (
        "baseline yield times yield_ratio times technology; harvested area as in the baseline"
    )
    return {
        "yield": scaled,
        TECHNOLOGY: factor.assign_attrs(long_name="technology factor", units="1"),
    }


def _block(*arrays: np.ndarray, model: _Model) -> tuple[np.ndarray, ...]:
    """Return ratio, yield, effects, flags (lat, lon, year) and reason (lat, lon) of a block."""
    shape = arrays[0].shape
    baseline_yield, reason, season_reason = (one.ravel() for one in arrays[:3])
    names = model.response.used_indices
    years = len(model.baseline)
    there = np.flatnonzero(reason == int(Reason.VALID))
    index = {
        name: np.ascontiguousarray(grid.reshape(-1, years)[there], dtype=np.float64)
        for name, grid in zip(names, arrays[3:], strict=True)
    }
    design = np.stack(response_columns(model.response, index), -1)
    valid = np.isfinite(design).all(axis=-1)
    ratio, found = _ratios(model, design, valid)
    found = np.where(valid.any(axis=1) | (season_reason[there] == 0), found, season_reason[there])
    valid &= (found == int(Reason.VALID))[:, None]
    effects = _effects(model, design, valid)
    flags = _flags(model.response, index, valid)
    why = reason.astype(np.int8)
    why[there] = found
    values = [ratio, ratio * baseline_yield[there, None], *effects]
    grids = [_spread(one, there, shape, np.nan) for one in values]
    return (*grids, _spread(flags, there, shape, 0), why.reshape(shape))


def _ratios(model: _Model, design: np.ndarray, valid: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    size = len(model.coefficients)
    column = np.zeros((padded(size, TERMS_AT_ONCE), 1))
    column[:size, 0] = model.coefficients
    response = model.response
    return yield_ratios(
        design,
        valid,
        model.baseline,
        column,
        response.intercept,
        response.link == "log",
        model.fewest,
    )


def _effects(model: _Model, design: np.ndarray, valid: np.ndarray) -> np.ndarray:
    slices = term_slices(model.response).values()
    starts = np.array([0, *(part.stop for part in slices)], dtype=np.int64)
    return term_effects(design, valid, model.baseline, model.coefficients, starts)


def _flags(response: Response, index: dict[str, np.ndarray], valid: np.ndarray) -> np.ndarray:
    """Return a bit per index of the document: set where it lies outside its estimation range."""
    flags = np.zeros(valid.shape, dtype=_flag_type(response))
    for bit, name in enumerate(response.indices):
        if name in index:
            low, high = response.estimation_range[name]
            outside = (index[name] < low) | (index[name] > high)
            flags[valid & outside] |= flags.dtype.type(1 << bit)
    return flags


def _flag_type(response: Response) -> type[np.signedinteger]:
    """Return int16; a response of more than 15 indices needs more bits."""
    return np.int16 if len(response.indices) <= 15 else np.int64


def _spread(
    values: np.ndarray, there: np.ndarray, shape: tuple[int, ...], fill: float
) -> np.ndarray:
    """Return values (pixel, year) of some pixels as (lat, lon, year)."""
    result = np.full((int(np.prod(shape)), values.shape[1]), fill, dtype=values.dtype)
    result[there] = values
    return result.reshape(*shape, -1)


def _attributes(response: Response) -> dict[str, dict[str, object]]:
    """Return the attributes of the grids with years, in the order a block returns them."""
    unit = "1" if response.link == "log" else "t ha-1"
    what = "change of log yield" if response.link == "log" else "change of the predicted yield"
    attributes: dict[str, dict[str, object]] = {
        "yield_ratio": {"long_name": "yield over the mean of the baseline years", "units": "1"},
        "yield": {
            "long_name": f"{response.crop} yield, {response.system}",
            "units": "t ha-1",
            "comment": "baseline yield times yield_ratio; harvested area as in the baseline",
        },
    }
    for name, term in response.terms.items():
        indices = " and ".join(term.used)
        attributes[f"effect_{name}"] = {
            "long_name": f"effect of {indices} ({term.form}) against its baseline mean",
            "units": unit,
            "comment": what,
        }
    kind = _flag_type(response)
    names = list(response.indices)
    attributes["extrapolated"] = {
        "long_name": "indices outside their estimation range",
        "comment": {
            "flag": "the response is followed beyond the range",
            "hold": "marginal effects are held beyond the range",
        }[response.extrapolation],
        "flag_masks": np.array([1 << bit for bit in range(len(names))], dtype=kind),
        "flag_meanings": " ".join(f"{name}_outside" for name in names),
    }
    return attributes
