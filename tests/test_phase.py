"""The phase against the exact integral of the frequency, by quadrature of the laws as DESIGN prints them."""

from fractions import Fraction

import numpy as np
import pytest

from conftest import LONG
from glidesmith.program import compile_program
from glidesmith.slew import LAWS
from glidesmith.voice import Voice
from making import make_phrase, make_preset

WITHIN_CYCLES = 1e-4
"""DESIGN section 5: over a 10-minute phrase of 2,400 mixed glides."""

NODES, WEIGHTS = np.polynomial.legendre.leggauss(40)


def quadrature(frequency, begin, end, kinks=()):
    """The integral of ``frequency``, Gauss-Legendre of order 40 on intervals graded towards ``begin``, cut at
    ``kinks``.
    """
    edges = begin + (end - begin) * np.concatenate([[0.0], 2.0 ** -np.arange(40.0, -1.0, -1.0)])
    edges = np.unique(np.concatenate([edges, [k for k in kinks if begin < k < end]]))
    middle, half = (edges[1:] + edges[:-1]) / 2, (edges[1:] - edges[:-1]) / 2
    return (half[:, None] * WEIGHTS * frequency(middle[:, None] + half[:, None] * NODES)).sum()


def output(law, side, origin, target, k, b, c):
    """(volts as a function of time, when it ends), straight from the printed table."""
    span = target - origin
    sign = np.sign(span)
    if side == 0 or span == 0:
        return (lambda t: np.full_like(t, target)), 0.0
    if law == "linear":
        return (lambda t: origin + sign * np.minimum(t / side, abs(span))), side * abs(span)
    if law == "rc":
        return (lambda t: target - span * np.exp(-t / side)), np.inf
    if law in ("log", "exp"):
        b = b if law == "log" else -b
        lasts = abs(np.exp(b * target) - np.exp(b * origin)) / abs(b) * side
        inner = lambda t: np.exp(b * origin) + sign * b * np.minimum(t, lasts) / side  # noqa: E731
        return (lambda t: np.log(inner(t)) / b), lasts
    if law == "soft":
        return (lambda t: target - c * np.arcsinh(np.sinh(span / c) * np.exp(-t / (c * side)))), np.inf
    if law == "curve":
        return (lambda t: origin + span * np.expm1(-k * np.minimum(t / side, 1)) / np.expm1(-k)), side
    return (lambda t: origin + span * (1 - np.cos(np.pi * np.minimum(t / side, 1))) / 2), side


def expected_cycles(slews, notes, low_hz, span_s):
    """Cycles of a phrase of (start, number, index of slew) from 0 to ``span_s``, first note sounding from
    0.
    """
    total, volts = 0.0, notes[0][1] / 12
    for i, (start, number, which) in enumerate(notes):
        end = notes[i + 1][0] if i + 1 < len(notes) else span_s
        law, rise, fall, k, b, c = slews[which]
        target = number / 12
        course, lasts = output(law, rise if target > volts else fall, volts, target, k, b, c)
        total += quadrature(lambda t: low_hz * 2.0 ** course(t), 0.0, float(end - start), [lasts])  # noqa: B023
        volts = float(course(np.array(float(end - start))))
    return total


def played_phase(preset, phrase, rate, samples):
    voice = Voice(compile_program(preset, phrase, rate))
    voice.play(np.empty(samples, np.float32))
    return float(voice._state["phase"][0]) / 2.0**62


@pytest.mark.parametrize("law", LAWS)
def test_phase_stays_with_the_integral_over_many_fast_and_slow_glides(law):
    """2,400 glides in 10 minutes over all laws when run long.

    A share of it otherwise, with the same bound.
    """
    generator = np.random.default_rng(LAWS.index(law))
    count = 2400 if LONG else 240
    step = Fraction(600, 2400)
    worst = 0.0
    for rise, fall in ((0.0, 1.0), (1e-5, 3e-4), (1e-3, 0.01), (0.03, 0.2)):
        k, b, c = (
            float(generator.uniform(-8, 8)),
            float(generator.uniform(0.1, 2)),
            float(generator.uniform(0.01, 1)),
        )
        slew = {"law": law, "rise": rise, "fall": fall, "curvature": k, "bend": b, "knee": c}
        numbers = (np.cumsum(generator.integers(1, 36, count)) % 36) - 12  # no note twice in a row
        starts = [i * step + Fraction(int(generator.integers(0, 9999)), 1_000_003) for i in range(count)]
        starts[0] = Fraction(0)
        rows = [(s, s + step * 4, 60 + int(n)) for s, n in zip(starts, numbers, strict=True)]
        span_s = count * step
        notes = [(s, int(n), 0) for s, n in zip(starts, numbers, strict=True)]
        cycles = expected_cycles([(law, rise, fall, k, b, c)], notes, 440 * 2 ** (-9 / 12), span_s)
        phase = played_phase(make_preset(pitch=slew), make_phrase(*rows), 48_000, int(span_s * 48_000))
        worst = max(worst, abs((phase - cycles + 0.5) % 1.0 - 0.5))
    assert worst < WITHIN_CYCLES


@pytest.mark.parametrize(
    ("side", "knee", "low", "high", "rate"),
    [(1e-5, 0.001, 60, 84, 48_000), (5e-6, 0.001, 36, 108, 44_100), (4.2e-6, 0.001, 48, 108, 48_000)],
)
def test_a_knee_too_short_for_the_quadrature_to_see_is_still_counted(side, knee, low, high, rate):
    """2,400 `soft` glides up and down, whose landing takes 10 ns; the same bound as for mixed glides."""
    count, step = 2400, Fraction(1, 40)
    starts = [i * step + (Fraction(i * 37 % 999, 1_000_003) if i else 0) for i in range(count)]
    numbers = [high if i % 2 else low for i in range(count)]
    rows = [(s, s + step * 4, n) for s, n in zip(starts, numbers, strict=True)]
    zero_hz, low_v, high_v = 440 * 2 ** (-9 / 12), (low - 60) / 12, (high - 60) / 12
    excess = {}
    for origin, target in ((low_v, high_v), (high_v, low_v)):
        course, _ = output("soft", side, origin, target, 0.0, 1.0, np.longdouble(knee))
        landed = side * (abs(target - origin) + 60 * knee)
        cuts = side * (abs(target - origin) + knee * np.arange(-60.0, 60.0, 0.5))
        gone = quadrature(lambda t, c=course: zero_hz * 2.0 ** c(t), 0.0, landed, cuts)
        excess[target] = float(gone - zero_hz * 2.0**target * landed)
    cycles = 0.0
    for i, start in enumerate(starts):
        lasts = (starts[i + 1] if i + 1 < count else count * step) - start
        volts = high_v if i % 2 else low_v
        cycles += zero_hz * 2.0**volts * float(lasts) + (excess[volts] if i else 0.0)
    slew = {"law": "soft", "rise": side, "fall": side, "knee": knee}
    phase = played_phase(make_preset(pitch=slew), make_phrase(*rows), rate, int(count * step * rate))
    assert abs((phase - cycles + 0.5) % 1.0 - 0.5) < WITHIN_CYCLES


def test_the_phase_goes_on_right_where_a_note_is_too_high_to_sound():
    """Note 127 with 0 V at C-1 and 100 cents an octave too wide: 23.1 kHz, 2.9 cycles a sample at 8 kHz."""
    preset = make_preset(tuning={"zero_volts": "C-1", "scale_error_cents_per_octave": 100.0})
    hz = 440 * 2 ** (-69 / 12) * 2 ** (127 / 12 * (1 + 100 / 1200))
    phase = played_phase(preset, make_phrase((0, 1, 127)), 8000, 4000)
    assert abs((phase - hz / 2 + 0.5) % 1.0 - 0.5) < 1e-6


@pytest.mark.parametrize("steps", [12, 5])
def test_a_glissando_steps_between_samples(steps):
    """A linear glide of an octave in 1 s spends 1/steps s on each step (the first and last half as long)."""
    preset = make_preset(pitch={"law": "linear", "rise": 1.0, "fall": 1.0, "steps_per_octave": steps})
    phrase = make_phrase((0, 1, 60), ("1/3", 2, 72))
    zero_hz = 440 * 2 ** (-9 / 12)
    shares = np.array([0.5, *np.ones(steps - 1), 0.5]) / steps
    cycles = zero_hz * (1 / 3 + (shares * 2.0 ** (np.arange(steps + 1) / steps)).sum() + 2.0 * (1 / 6))
    phase = played_phase(preset, phrase, 44_100, 44_100 * 3 // 2)
    assert abs((phase - cycles + 0.5) % 1 - 0.5) < 1e-6
