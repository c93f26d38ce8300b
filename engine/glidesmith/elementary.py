"""Arithmetic in a form that compilers turn into vector code and that gives every machine the same bits.

The platform's own `exp2` is a call per sample, and its last bit differs from one system to the next. This one
is plain multiplying and adding, so that a loop over it fills whole vector registers. Products that are added
are fused (IEEE 754-2008, 5.4.1, fusedMultiplyAdd: rounded once), by name and not at the compiler's
discretion: a fused operation is defined to the last bit, whether the processor has one or a library stands in
for it.
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

    Below -1022 the result is that of -1022 (2.2e-308), so that no denormal number is ever made. The exponent
    is split into a whole number and a remainder r of at most 1/2 either way; (2^r − 1)/r is the polynomial of
    the tenth order through the Chebyshev points of that interval (Abramowitz and Stegun, 25.4.38, for the
    points), 1.3e-17 off at most.
    """
    held = max(exponent, _LOWEST)
    whole = np.floor(held + 0.5)
    r = held - whole
    series: float = fma(r, 4.4549605981865186e-10, 7.072585949269223e-09)
    series = fma(r, series, 1.0178062445845774e-07)
    series = fma(r, series, 1.321544258792169e-06)
    series = fma(r, series, 1.525273382983612e-05)
    series = fma(r, series, 0.0001540353044173605)
    series = fma(r, series, 0.0013333558146416936)
    series = fma(r, series, 0.009618129107606888)
    series = fma(r, series, 0.0555041086648216)
    series = fma(r, series, 0.24022650695910097)
    series = fma(r, series, 0.6931471805599453)
    return fma(r, series, 1.0) * np.int64((np.int64(whole) + 1023) << 52).view(np.float64)
