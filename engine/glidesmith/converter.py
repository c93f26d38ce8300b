"""The digital sequencer's converter: pitch voltages in steps, held from tick to tick."""

import math
from fractions import Fraction
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from glidesmith.preset import Converter


def converted_volts(converter: "Converter", volts: float) -> tuple[float, bool]:
    """The nearest of the converter's steps, and whether the voltage was clipped to its range.

    The steps are those of a bipolar converter: 2^bits codes, ``span_volts``/2^bits apart, from -span/2 to one
    step under +span/2 (two's complement).
    """
    step = converter.span_volts / 2**converter.bits
    code = math.floor(volts / step + 0.5)
    half = 2 ** (converter.bits - 1)
    held = min(max(code, -half), half - 1)
    return held * step, held != code


def held_time(converter: "Converter", time: Fraction) -> Fraction:
    """The tick at which a change at ``time`` seconds comes through.

    The first of k/``rate_hz`` not before it.
    """
    if converter.rate_hz == 0.0:
        return time
    rate = Fraction(converter.rate_hz)
    return math.ceil(time * rate) / rate
