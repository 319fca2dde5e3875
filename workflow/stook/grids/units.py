"""Units inside Stook, and conversion to them through UDUNITS, once, at the boundary."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from cf_units import Unit

from stook.errors import InputError

INSIDE_UNITS = {
    "tas": "degC",
    "tasmin": "degC",
    "tasmax": "degC",
    "pr": "mm day-1",
    "rsds": "W m-2",
    "hurs": "%",
}
"""Unit of each variable in every file that Stook writes."""

_MASS_FLUX_PER_RATE = 1000.0
"""kg m-2 of water per metre of depth (density 1000 kg m-3; common practice)."""

_ALIASES = {"mm/d": "mm day-1", "degf": "degF", "degc": "degC", "percent": "%"}


def linear_conversion(unit: str | None, variable: str, path: Path | str) -> tuple[float, float]:
    """Return scale and offset that turn a file's unit into the inside unit of a variable.

    Parameters
    ----------
    unit
        Unit as written in the file, UDUNITS.
    variable
        One of the names in `INSIDE_UNITS`.
    path
        The file, for the message.

    Returns
    -------
    scale, offset
        ``inside = scale * value + offset``.

    Raises
    ------
    InputError
        If the unit is missing, unknown or not convertible. A mass flux (kg m-2 s-1) converts to a
        depth of water at 1000 kg m-3.
    """
    wanted = INSIDE_UNITS[variable]
    if not unit:
        raise InputError(f"{path}: {variable} has no units attribute; it must convert to {wanted}")
    source = _parse(unit, variable, path)
    target = Unit(wanted)
    density = 1.0
    if variable == "pr" and source.is_convertible("kg m-2 s-1"):
        density = 1.0 / _MASS_FLUX_PER_RATE
        source = source * Unit("m3 kg-1")
    if not source.is_convertible(target):
        raise InputError(f"{path}: {variable} has unit {unit!r}, which does not convert to {wanted}")
    offset, one = (float(source.convert(value, target)) for value in (0.0, 1.0))
    return (one - offset) * density, offset * density


def _parse(unit: str, variable: str, path: Path | str) -> Unit:
    try:
        return Unit(_ALIASES.get(unit.strip().lower(), unit))
    except ValueError:
        raise InputError(
            f"{path}: {variable} has unit {unit!r}, which UDUNITS does not know; "
            f"it must convert to {INSIDE_UNITS[variable]}"
        ) from None


def to_inside(values: np.ndarray, unit: str | None, variable: str, path: Path) -> np.ndarray:
    """Return values in the inside unit of a variable, float64; see `linear_conversion`."""
    scale, offset = linear_conversion(unit, variable, path)
    return np.asarray(values, dtype=np.float64) * scale + offset
