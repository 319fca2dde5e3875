"""What every section of the assessment file shares: strict keys, names, years."""

from __future__ import annotations

import re
from typing import Annotated

from pydantic import AfterValidator, BaseModel, ConfigDict

_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9.-]*")


def _plain_name(name: str) -> str:
    if not _NAME.fullmatch(name):
        raise ValueError(f"name {name!r} may hold letters, digits, '-' and '.' only")
    return name


def _ordered_years(years: tuple[int, int]) -> tuple[int, int]:
    if years[1] < years[0]:
        raise ValueError(f"years {years[0]} to {years[1]} run backwards")
    return years


Name = Annotated[str, AfterValidator(_plain_name)]
Years = Annotated[tuple[int, int], AfterValidator(_ordered_years)]


class Section(BaseModel):
    """A mapping of the file: unknown keys are refused, values do not change."""

    model_config = ConfigDict(extra="forbid", frozen=True)
