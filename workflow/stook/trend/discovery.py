"""False discovery rate: which of many local trends to call significant together."""

from __future__ import annotations

import numpy as np

UNKNOWN = -1
"""Significance of a pixel without a p-value or a family."""


def benjamini_hochberg(p: np.ndarray, alpha: float) -> np.ndarray:
    """Return which p-values are significant at a false discovery rate; ``(n) -> (n)`` bool.

    Sorted ascending, the LARGEST rank i with ``p_(i) <= alpha i / n`` is sought; it and all
    smaller ones are significant, even those above their own threshold.

    Parameters
    ----------
    p
        shape (n,), no missing values; the family is all of them.
    alpha
        The rate, 0 to 1.

    Notes
    -----
    Benjamini & Hochberg 1995, J. R. Stat. Soc. B 57:289.
    """
    if p.size == 0:
        return np.zeros(0, dtype=bool)
    ordered = np.sort(p)
    # Whole ranks: p and alpha are compared without dividing, with room for the last bit.
    passed = ordered * len(p) <= alpha * np.arange(1, len(p) + 1) * (1 + 1e-12)
    if not passed.any():
        return np.zeros(p.shape, dtype=bool)
    return p <= ordered[np.flatnonzero(passed)[-1]]


def rate_for_level(level: float) -> float:
    """Return the false discovery rate for a level of the whole map: twice the level.

    Wilks 2016, Bull. Am. Meteorol. Soc. 97:2263: for spatially correlated fields, as weather is,
    a rate of twice the global level keeps that level.
    """
    return 2.0 * level


def significant_in_families(p: np.ndarray, family: np.ndarray, level: float) -> np.ndarray:
    """Apply the false discovery rate within each family.

    Parameters
    ----------
    p
        shape (n,); NaN is missing.
    family
        int, shape (n,); negative for no family.
    level
        Level of the whole map; the rate is `rate_for_level`.

    Returns
    -------
    ndarray
        int8: 1 significant, 0 not, `UNKNOWN` where p or family is missing.
    """
    result = np.full(p.shape, UNKNOWN, dtype=np.int8)
    known = np.isfinite(p) & (family >= 0)
    for number in np.unique(family[known]):
        members = known & (family == number)
        result[members] = benjamini_hochberg(p[members], rate_for_level(level))
    return result
