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
# 1.5 * 2**52, which leaves a whole number in the low bits, plus the bias of a float64's exponent
_ROUND = 6755399441055744.0 + 1023.0
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


def _fused(typingcontext: Any, a: Any, b: Any, c: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.fma(*arguments)

    return types.float64(types.float64, types.float64, types.float64), generate


fused: Any = intrinsic(_fused)
"""``fused(a, b, c)`` is ``a * b + c`` rounded once (IEEE 754; scalar kernel)."""


@njit(cache=True, nogil=True, inline="always")
def exponential(x: float) -> float:  # pragma: no cover - compiled
    """Return exp(x), off by one unit in the last place at most (scalar kernel).

    x is held within -708 to 709; a missing value stays missing. The polynomial is summed in pairs
    (Estrin's scheme), which leaves little to wait for.
    """
    x = _HIGHEST if x > _HIGHEST else x
    x = _LOWEST if x < _LOWEST else x
    shifted: float = fused(x, _PER_LOG2, _ROUND)
    k = shifted - _ROUND
    r = fused(-k, _LOG2_LOW, fused(-k, _LOG2_HIGH, x))
    r2 = r * r
    r4 = r2 * r2
    p = fused(fused(_C9, r, _C8), r4, fused(fused(_C7, r, _C6), r2, fused(_C5, r, _C4)))
    p = fused(p, r4, fused(fused(_C3, r, _C2), r2, fused(_C1, r, _C0)))
    p = fused(fused(p, r, 1.0), r, 1.0)
    power = np.int64(np.float64(shifted).view(np.int64) << 52)
    return p * power.view(np.float64)
