"""The converter: codes, clipping and ticks, in exact numbers."""

from fractions import Fraction

import pytest

from glidesmith.converter import converted_volts, held_time
from glidesmith.preset import Converter


@pytest.mark.parametrize(("bits", "span"), [(4, 10.0), (8, 10.24), (12, 10.0), (16, 5.0), (24, 20.0)])
def test_every_voltage_comes_out_at_the_nearest_code(bits, span):
    converter = Converter(bits, span, 0.0)
    step = Fraction(span) / 2**bits
    for code in {-(2 ** (bits - 1)), -3, -1, 0, 1, 2 ** (bits - 1) - 1}:
        for share in (-0.49, 0.0, 0.49):
            held, clipped = converted_volts(converter, float((code + Fraction(share)) * step))
            assert held == pytest.approx(float(code * step), abs=1e-15)
            assert not clipped


def test_a_12_bit_converter_over_10_volts_steps_by_2_93_cents():
    """10 V / 4096 = 2.44 mV, and 1 V is 1200 cents (1 V/oct, common practice)."""
    held = {converted_volts(Converter(12, 10.0, 0.0), v / 12)[0] for v in range(-12, 13)}
    errors = [abs(h - round(h * 12) / 12) * 1200 for h in held]
    assert 0.5 < max(errors) <= 10 / 4096 * 1200 / 2


@pytest.mark.parametrize(
    ("volts", "held"), [(5.0, 5.0 - 10 / 16), (9.0, 5.0 - 10 / 16), (-5.0, -5.0), (-7.0, -5.0)]
)
def test_outside_the_span_it_clips_and_says_so(volts, held):
    assert converted_volts(Converter(4, 10.0, 0.0), volts) == (held, volts != -5.0)


def test_changes_wait_for_the_next_tick():
    converter = Converter(12, 10.0, 1000.0)
    assert held_time(converter, Fraction(1, 3)) == Fraction(334, 1000)
    assert held_time(converter, Fraction(334, 1000)) == Fraction(334, 1000)
    assert held_time(Converter(12, 10.0, 0.0), Fraction(1, 3)) == Fraction(1, 3)
