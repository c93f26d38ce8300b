"""The engine's own arithmetic against numpy's and against exact rationals."""

from fractions import Fraction

import numpy as np

from glidesmith.compiled import vector_kernel
from glidesmith.elementary import exp2, fma


@vector_kernel
def _powers(exponents, out):
    for i in range(out.size):
        out[i] = exp2(exponents[i])


@vector_kernel
def _fused(a, b, c, out):
    for i in range(out.size):
        out[i] = fma(a[i], b[i], c[i])


def powers(exponents):
    out = np.empty_like(exponents)
    _powers(exponents, out)
    return out


def test_powers_of_two_are_within_two_units_in_the_last_place():
    """Reference: extended precision `numpy.exp2`; 4e-16 is under two units of 2^-52."""
    exponents = np.random.default_rng(1).uniform(-1022, 1023, 200_000)
    exact = np.exp2(exponents.astype(np.longdouble))
    assert np.abs(powers(exponents) / exact - 1).max() < 4e-16


def test_whole_powers_are_exact():
    exponents = np.arange(-1022.0, 1024.0)
    assert (powers(exponents) == np.ldexp(1.0, exponents.astype(int))).all()


def test_nothing_is_ever_denormal():
    assert (powers(np.array([-1e9, -1023.0, -np.inf])) == 2.0**-1022).all()


def test_the_result_is_the_same_alone_and_in_a_row():
    exponents = np.random.default_rng(2).uniform(-40, 40, 67)
    alone = [powers(exponents[i : i + 1])[0] for i in range(67)]
    assert (powers(exponents) == alone).all()


def test_fused_products_are_rounded_once():
    """IEEE 754-2008, 5.4.1: the exact a b + c, rounded to nearest; checked with rational numbers."""
    a, b, c = np.random.default_rng(3).uniform(-2, 2, (3, 500))
    out = np.empty_like(a)
    _fused(a, b, c, out)
    exact = [float(Fraction(x) * Fraction(y) + Fraction(z)) for x, y, z in zip(a, b, c, strict=True)]
    assert (out == exact).all()
    assert (out != a * b + c).any()
