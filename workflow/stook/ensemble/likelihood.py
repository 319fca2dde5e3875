"""Calibrated likelihood words, always beside their number.

Mastrandrea et al. (2010), Guidance note for lead authors of the IPCC fifth assessment report on
consistent treatment of uncertainties. A share of ensemble members is not by itself a likelihood:
the members are neither a random nor an exhaustive sample of what may come.
"""

from __future__ import annotations

import math

CAUTION = "a share of ensemble members is not by itself a likelihood"
"""What must stand wherever a word stands."""

_AT_LEAST = (
    (0.99, "virtually certain"),
    (0.95, "extremely likely"),
    (0.90, "very likely"),
    (0.66, "likely"),
)
_MORE_LIKELY_THAN_NOT = 0.50
_AS_LIKELY_AS_NOT = 0.33
_AT_MOST = (
    (0.01, "exceptionally unlikely"),
    (0.05, "extremely unlikely"),
    (0.10, "very unlikely"),
)
_DIGITS = 12  # a sum of weights that is 0.66 but for rounding is 0.66


def likelihood_word(share: float) -> str | None:
    """Return the word for a share of members, the narrowest of the scale's ranges that holds it.

    The ranges of the scale lie inside each other (likely is 66-100 %, very likely 90-100 %), and
    "more likely than not" (over 50 to 100 %) overlaps "about as likely as not" (33 to 66 %), where
    the former says more. The ends of a range belong to it.

    Parameters
    ----------
    share
        0 to 1; NaN gives None.

    Examples
    --------
    >>> likelihood_word(0.92), likelihood_word(0.5), likelihood_word(0.05)
    ('very likely', 'about as likely as not', 'extremely unlikely')
    """
    if not math.isfinite(share):
        return None
    share = round(share, _DIGITS)
    for cut, word in _AT_LEAST:
        if share >= cut:
            return word
    for cut, word in _AT_MOST:
        if share <= cut:
            return word
    if share > _MORE_LIKELY_THAN_NOT:
        return "more likely than not"
    return "about as likely as not" if share >= _AS_LIKELY_AS_NOT else "unlikely"


def direction(share_decrease: float) -> tuple[str | None, str | None]:
    """Return the word, and what it is about: a decrease, or an increase where fewer than half fall.

    Examples
    --------
    >>> direction(0.97), direction(0.08)
    (('extremely likely', 'decrease'), ('very likely', 'increase'))
    """
    if not math.isfinite(share_decrease):
        return None, None
    if round(share_decrease, _DIGITS) >= _MORE_LIKELY_THAN_NOT:
        return likelihood_word(share_decrease), "decrease"
    return likelihood_word(1 - share_decrease), "increase"
