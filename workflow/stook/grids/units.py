"""Units inside Stook, and conversion to them through UDUNITS, once, at the boundary."""

from __future__ import annotations

import re
from pathlib import Path

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

_LARGE = 1024.0  # two points of a straight line, far apart: the slope keeps all its digits
_TEMPERATURES = ("tas", "tasmin", "tasmax")
_TEMPERATURE_ALIASES = {
    name: unit
    for unit, names in {
        "degC": ("c", "degc", "deg c", "degrees c", "°c"),
        "degF": ("f", "degf", "deg f", "degrees f", "°f"),
    }.items()
    for name in names
}
_UNEVEN = re.compile(r"month|\bmon\b", re.IGNORECASE)


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
    if not unit or not unit.strip():
        raise InputError(f"{path}: {variable} has no units attribute; it must convert to {wanted}")
    source = _parse(unit, variable, path)
    target = Unit(wanted)
    density = 1.0
    if variable == "pr" and source.is_convertible("kg m-2 s-1"):
        density = 1.0 / _MASS_FLUX_PER_RATE
        source = source * Unit("m3 kg-1")
    if not source.is_convertible(target):
        raise InputError(f"{path}: {variable} has unit {unit!r}, not convertible to {wanted}")
    offset, large = (float(source.convert(value, target)) for value in (0.0, _LARGE))
    return (large - offset) / _LARGE * density, offset * density


def _parse(unit: str, variable: str, path: Path | str) -> Unit:
    if _UNEVEN.search(unit):
        raise InputError(
            f"{path}: {variable} has unit {unit!r}; months differ in length, "
            f"divide by the days of each month and give {INSIDE_UNITS[variable]}"
        )
    name = unit.strip().lower()
    if variable in _TEMPERATURES:
        unit = _TEMPERATURE_ALIASES.get(name, unit)
    try:
        return Unit(unit)
    except ValueError:
        raise InputError(
            f"{path}: {variable} has unit {unit!r}, which UDUNITS does not know; "
            f"it must convert to {INSIDE_UNITS[variable]}"
        ) from None
