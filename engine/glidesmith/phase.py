"""The oscillator's phase: the exact integral of its frequency, as whole-number increments.

The frequency is g = 2^(s V + o) cycles a sample, with s octaves per volt and o octaves at 0 V. Over a sample
in the middle of a glide its integral is the trapezoid's with the first Euler-Maclaurin correction (Abramowitz
and Stegun, 23.1.30),

    (g0 + g1)/2 + (g0' − g1')/12,        g' = g s ln 2 V'   per sample,

whose error is of the fourth order in the sample's length. Where the correction is not small (fast glides, and
the samples in which something happens) the integral is taken by Gauss-Legendre quadrature in steps that adapt
(Abramowitz and Stegun, 25.4.30, 3 points checked by 5). Increments are then rounded to 2^-62 of a cycle and
summed as whole numbers, which is exact.
"""

from typing import Any

import numpy as np

from glidesmith.compiled import inlined, kernel, vector_kernel
from glidesmith.elementary import exp2
from glidesmith.oscillator import CYCLE
from glidesmith.slew import HELD, SOFT, glide_time, glide_volts

_LN_2 = 0.6931471805599453
_UNITS_PER_CYCLE = float(CYCLE)
_SMOOTH = 3e-9
_TOLERANCE = 1e-10
_SHORTEST = 1e-9


@inlined
def phase_units(cycles: float) -> int:
    """The part of a cycle beyond whole cycles, in phase units."""
    return int((cycles - np.floor(cycles)) * _UNITS_PER_CYCLE)


@inlined
def stepped_volts(settings: Any, volts: float) -> float:
    """The glissando: the nearest step of a grid at 0 V, where the preset has one."""
    steps = settings.steps_per_octave
    if steps == 0.0:
        return volts
    return np.floor(volts * steps + 0.5) / steps


@inlined
def cycles_per_sample(settings: Any, volts: float) -> float:
    """The frequency in cycles a sample at a pitch voltage."""
    return exp2(volts * settings.octaves_per_volt + settings.octaves_at_zero)


@inlined
def _gauss_3(settings: Any, glide: Any, begin: float, length: float) -> float:
    middle, half = begin + 0.5 * length, 0.5 * length
    inner = 0.7745966692414834 * half
    ends = cycles_per_sample(settings, glide_volts(glide, middle - inner))
    ends += cycles_per_sample(settings, glide_volts(glide, middle + inner))
    centre = cycles_per_sample(settings, glide_volts(glide, middle))
    return half * (0.5555555555555556 * ends + 0.8888888888888888 * centre)


@inlined
def _gauss_5(settings: Any, glide: Any, begin: float, length: float) -> float:
    middle, half = begin + 0.5 * length, 0.5 * length
    near, far = 0.5384693101056831 * half, 0.9061798459386640 * half
    inner = cycles_per_sample(settings, glide_volts(glide, middle - near))
    inner += cycles_per_sample(settings, glide_volts(glide, middle + near))
    outer = cycles_per_sample(settings, glide_volts(glide, middle - far))
    outer += cycles_per_sample(settings, glide_volts(glide, middle + far))
    centre = cycles_per_sample(settings, glide_volts(glide, middle))
    return half * (0.4786286704993665 * inner + 0.2369268850561891 * outer + 0.5688888888888889 * centre)


@kernel
def _smooth_cycles(settings: Any, glide: Any, begin: float, end: float) -> float:
    """The integral over a stretch of one glide without a kink, from ``begin`` to ``end`` seconds into it."""
    step_s = settings.step_s
    total = 0.0
    length = end - begin
    while begin < end:
        length = min(length, end - begin)
        fine = _gauss_5(settings, glide, begin, length)
        if (
            abs(fine - _gauss_3(settings, glide, begin, length)) <= _TOLERANCE * step_s
            or length < _SHORTEST * step_s
        ):
            total += fine
            begin = end if length >= end - begin else begin + length
            length *= 2.0
        else:
            length *= 0.5
    return total / step_s


@kernel
def _soft_cycles(settings: Any, glide: Any, begin: float, end: float) -> float:
    """The same for `soft`, cut about its knee, which may be too short for any node to see."""
    total = 0.0
    for place in (-30.0, -8.0, -2.0, 0.0, 2.0, 8.0, 30.0):
        cut = min(max((glide.depth + place) / glide.pace, begin), end)
        total += _smooth_cycles(settings, glide, begin, cut)
        begin = cut
    return total + _smooth_cycles(settings, glide, begin, end)


@kernel
def _stepped_cycles(settings: Any, glide: Any, begin: float, end: float) -> float:
    """The same for a glissando: each step's frequency for as long as the glide is nearest to it."""
    steps = settings.steps_per_octave
    step = np.floor(glide_volts(glide, begin) * steps + 0.5)
    last = np.floor(glide_volts(glide, end) * steps + 0.5)
    direction = 1.0 if last > step else -1.0
    total = 0.0
    while step != last:
        crossing = min(max(glide_time(glide, (step + 0.5 * direction) / steps), begin), end)
        total += (crossing - begin) * cycles_per_sample(settings, step / steps)
        begin = crossing
        step += direction
    total += (end - begin) * cycles_per_sample(settings, last / steps)
    return total / settings.step_s


@kernel
def glide_cycles(settings: Any, glide: Any, begin: float, end: float) -> float:
    """Cycles that pass from ``begin`` to ``end`` seconds into a glide, its end as a kink included."""
    if end <= begin:
        return 0.0
    if settings.steps_per_octave > 0.0:
        return _stepped_cycles(settings, glide, begin, end)
    held = min(max(glide.lasts, begin), end)
    total = 0.0
    if held > begin and glide.law != HELD:
        if glide.law == SOFT:
            total = _soft_cycles(settings, glide, begin, held)
        else:
            total = _smooth_cycles(settings, glide, begin, held)
    if end > held:
        total += (end - held) / settings.step_s * cycles_per_sample(settings, glide.target)
    return total


@vector_kernel
def smooth_increments(settings: Any, volts: Any, rates: Any, cycles: Any, bends: Any, increments: Any) -> int:
    """Increments of the samples between the instants of one glide; returns how many need more than this.

    ``volts``, ``rates``, and the scratch ``cycles`` and ``bends`` are (n + 1,), ``increments`` (n,) in phase
    units. A sample whose correction is not small gets a negative increment: it is for `glide_cycles` to find.
    """
    per_volt, at_zero, bend = settings.octaves_per_volt, settings.octaves_at_zero, 0.0
    bend = settings.octaves_per_volt * settings.step_s * (_LN_2 / 12.0)
    for i in range(volts.size):
        g = exp2(volts[i] * per_volt + at_zero)
        cycles[i] = g
        bends[i] = g * (rates[i] * bend)
    rough = 0
    for i in range(increments.size):
        correction = bends[i] - bends[i + 1]
        passed = 0.5 * (cycles[i] + cycles[i + 1]) + correction
        is_rough = not abs(correction) <= _SMOOTH
        increments[i] = np.int64(-1) if is_rough else np.int64((passed - np.floor(passed)) * _UNITS_PER_CYCLE)
        rough += int(is_rough)
    return rough
