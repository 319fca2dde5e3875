"""The exponential of the yields stage: the same bits for the same value, wherever it stands.

Vectorised exponentials of array libraries may differ in the last bit with the place of a value in
its array, and scalar ones of C libraries with the machine. This one is made of additions,
multiplications and fused multiply-additions, each rounded exactly (IEEE 754), in a fixed order,
so that a compiler may run it on several values at once without changing any.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit, types
from numba.extending import intrinsic

_PER_LOG2 = 1.4426950408889634  # 1 / log(2)
_LOG2_HIGH = 6.93147180369123816490e-01  # log(2) in two parts: the high one has trailing zeros
_LOG2_LOW = 1.90821492927058770002e-10
_ROUND = 6755399441055744.0  # 1.5 * 2**52: adding it leaves the whole number in the low bits
_BIAS = 1023  # of the exponent of a float64
_HIGHEST, _LOWEST = 709.0, -708.0

# (exp(r) - 1 - r) / r**2 by interpolation at Chebyshev nodes of -log(2)/2..log(2)/2; the relative
# error of exp(r) is below 2e-17 (tests/yields/test_yields_exponential.py).
_C0 = 0.5000000000000001
_C1 = 0.16666666666666669
_C2 = 0.04166666666662399
_C3 = 0.008333333333330051
_C4 = 0.0013888888917281794
_C5 = 0.00019841269863105968
_C6 = 2.480152119021773e-05
_C7 = 2.7557268378684192e-06
_C8 = 2.7620138719733994e-07
_C9 = 2.5100424157005067e-08


@intrinsic
def fused(typingcontext: Any, a: Any, b: Any, c: Any) -> Any:
    """Return ``a * b + c`` rounded once (IEEE 754 fused multiply-add; scalar kernel)."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.fma(*arguments)

    return types.float64(types.float64, types.float64, types.float64), generate


@njit(cache=True, nogil=True, inline="always")
def exponential(x: float) -> float:  # pragma: no cover - compiled
    """Return exp(x), off by one unit in the last place at most (scalar kernel).

    Above 709 it is infinite, below -708 zero; a missing value stays missing.
    """
    shifted = fused(x, _PER_LOG2, _ROUND)
    k = shifted - _ROUND
    r = fused(-k, _LOG2_LOW, fused(-k, _LOG2_HIGH, x))
    p = fused(_C9, r, _C8)
    p = fused(p, r, _C7)
    p = fused(p, r, _C6)
    p = fused(p, r, _C5)
    p = fused(p, r, _C4)
    p = fused(p, r, _C3)
    p = fused(p, r, _C2)
    p = fused(p, r, _C1)
    p = fused(p, r, _C0)
    p = 1.0 + fused(p, r * r, r)
    power = np.int64((np.float64(shifted).view(np.int64) + _BIAS) << 52)
    y = p * power.view(np.float64)
    if x > _HIGHEST:
        y = np.inf
    if x < _LOWEST:
        y = 0.0
    return y
