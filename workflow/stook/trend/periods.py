"""The periods trends are taken over."""

from __future__ import annotations

import numpy as np

from stook.assessment.schema import Assessment

WHOLE = "all"
"""Name of the period used when the assessment names none: the whole series."""

LARGEST_UNCOVERED = 1
"""Years of a period a simulation may lack: the first season of a crop that crosses the year."""


def trend_periods(assessment: Assessment, years: np.ndarray) -> dict[str, tuple[int, int]]:
    """Return the periods of an assessment, or the whole series as `WHOLE`.

    Parameters
    ----------
    assessment
        Its ``trend.periods`` are used.
    years
        int, the years of the series.
    """
    named: dict[str, tuple[int, int]] = dict(assessment.trend.periods)
    return named or {WHOLE: (int(years[0]), int(years[-1]))}


def is_covered(period: tuple[int, int], years: np.ndarray) -> bool:
    """Return whether a series covers a period, but for one season at most."""
    first, last = period
    inside = np.count_nonzero((years >= first) & (years <= last))
    return bool(last - first + 1 - inside <= LARGEST_UNCOVERED)
