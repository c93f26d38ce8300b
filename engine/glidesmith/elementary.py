"""Arithmetic in a form that compilers turn into vector code and that gives every machine the same bits.

The platform's own `exp2` is a call per sample, and its last bit differs from one system to the next. This one is plain
multiplying and adding, so that a loop over it fills whole vector registers. Products that are added are fused
(IEEE 754-2008, 5.4.1, fusedMultiplyAdd: rounded once), by name and not at the compiler's discretion: a fused operation is defined
to the last bit, whether the processor has one or a library stands in for it.
"""

from typing import Any

import numpy as np
from numba import types
from numba.extending import intrinsic

from glidesmith.compiled import inlined

_LOWEST = -1022.0


@intrinsic  # type: ignore[untyped-decorator]
def fma(typing_context: Any, a: Any, b: Any, c: Any) -> Any:
    """a b + c in double precision, rounded once. Compiled code only."""

    def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.fma(*arguments)

    return types.float64(types.float64, types.float64, types.float64), build


@inlined
def exp2(exponent: float) -> float:
    """2 to the power ``exponent``; relative error under 4e-16 for exponents from -1022 to 1023.

    Below -1022 the result is that of -1022 (2.2e-308), so that no denormal number is ever made. The exponent is
    split into a whole number and a remainder of at most 1/2 either way, whose power is the Taylor series of
    exp(r ln 2) to the 14th order (Abramowitz and Stegun, 4.2.1), evaluated by Horner's rule.
    """
    held = max(exponent, _LOWEST)
    whole = np.floor(held + 0.5)
    r = (held - whole) * 0.6931471805599453
    series = fma(r, 1.0 / 87178291200.0, 1.0 / 6227020800.0)
    series = fma(r, series, 1.0 / 479001600.0)
    series = fma(r, series, 1.0 / 39916800.0)
    series = fma(r, series, 1.0 / 3628800.0)
    series = fma(r, series, 1.0 / 362880.0)
    series = fma(r, series, 1.0 / 40320.0)
    series = fma(r, series, 1.0 / 5040.0)
    series = fma(r, series, 1.0 / 720.0)
    series = fma(r, series, 1.0 / 120.0)
    series = fma(r, series, 1.0 / 24.0)
    series = fma(r, series, 1.0 / 6.0)
    series = fma(r, series, 0.5)
    series = fma(r, series, 1.0)
    series = fma(r, series, 1.0)
    return series * np.int64((np.int64(whole) + 1023) << 52).view(np.float64)
