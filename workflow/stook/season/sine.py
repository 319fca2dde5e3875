"""Degree days of one day by a single sine, as arithmetic only: the same bits wherever it stands.

Vectorised arcsines of array libraries may differ in the last bit with the place of a value in its
array. This one is a polynomial of exactly rounded operations in a fixed order, so that a compiler
may run it on several values at once without changing any.
"""

from __future__ import annotations

import math

from numba import njit

from stook.yields.exponential import fused

_HALF_PI = math.pi / 2

# (asin(s) / s - 1) / s**2 as a polynomial in s**2, 0 to 1/4, by interpolation at Chebyshev nodes;
# the relative error of asin(s) is below 1e-16 (tests/season/test_season_sine.py).
_A0 = 0.1666666666666665
_A1 = 0.07500000000020764
_A2 = 0.044642857103423646
_A3 = 0.03038194736709848
_A4 = 0.02237204763174451
_A5 = 0.017355259955786323
_A6 = 0.013929652902326633
_A7 = 0.011875494382636922
_A8 = 0.007802949477353317
_A9 = 0.016035514349148825
_A10 = -0.01074905033969781
_A11 = 0.028169218060881414


@njit(cache=True, nogil=True, inline="always")
def arccosine(x: float) -> float:  # pragma: no cover - compiled
    """Return acos(x) for x in -1..1, radians (scalar kernel).

    Up to 1/2 it is pi/2 - asin(x); beyond, twice the arcsine of sqrt((1 - abs(x)) / 2).
    """
    size = abs(x)
    inner = size < 0.5
    t = x * x if inner else 0.5 * (1.0 - size)
    s = size if inner else math.sqrt(t)
    t2 = t * t
    t4 = t2 * t2
    low = fused(fused(_A3, t, _A2), t2, fused(_A1, t, _A0))
    middle = fused(fused(_A7, t, _A6), t2, fused(_A5, t, _A4))
    high = fused(fused(_A11, t, _A10), t2, fused(_A9, t, _A8))
    p = fused(fused(high, t4, middle), t4, low)
    arcsine = fused(s * t, p, s)
    angle = _HALF_PI - arcsine if inner else 2.0 * arcsine  # of the absolute value
    return math.pi - angle if x < 0.0 else angle


@njit(cache=True, nogil=True, inline="always")
def part_above(excess: float, half: float) -> float:  # pragma: no cover - compiled
    """Return degree days of a day whose sine crosses the threshold (scalar kernel).

    Parameters
    ----------
    excess
        Mean of tasmin and tasmax less the threshold, degC; between -half and half.
    half
        Half of tasmax - tasmin, degC; above zero.

    Notes
    -----
    Baskerville & Emin 1969, Ecology 50, 514-517: with angle = asin(-excess / half),
    (excess (pi/2 - angle) + half cos(angle)) / pi.
    """
    ratio = -excess / half
    root = math.sqrt((half - excess) * (half + excess))
    return fused(excess, arccosine(ratio), root) * (1.0 / math.pi)
