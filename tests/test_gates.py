"""The facts about gates, DESIGN section 8, one by one, against formulas worked out by hand and scipy."""

import math
from fractions import Fraction

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.optimize import brentq

from conftest import LONG
from glidesmith import Slew
from glidesmith.amplifier import amplifier_record
from glidesmith.course import follow, gain_courses
from glidesmith.gates import CLICK_S, _largest_move
from glidesmith.measuring import measure
from glidesmith.program import gate_changes
from making import make_phrase, make_preset

WITHIN_S = 1e-6
"""DESIGN section 8: facts agree to 1 µs."""

CLOSE_S = 1e-9
"""What closed forms really agree to, in seconds."""


def gates_of(gain, phrase, **tables):
    return measure(make_preset(gain=gain, **tables), phrase).gates


ONE_SECOND = make_phrase((0, 1, 60))


def test_attack_by_hand():
    assert gates_of({"law": "linear", "rise": 0.1}, ONE_SECOND)[0].attack_10_90_s == pytest.approx(
        0.08, abs=CLOSE_S
    )
    assert gates_of({"law": "cosine", "rise": 0.1}, ONE_SECOND)[0].attack_10_90_s == pytest.approx(
        0.1 * (math.acos(-0.8) - math.acos(0.8)) / math.pi, abs=CLOSE_S
    )
    settled = gates_of({"law": "rc", "rise": 0.02}, ONE_SECOND)[0]
    assert settled.attack_10_90_s == pytest.approx(0.02 * math.log(9), abs=CLOSE_S)
    assert settled.peak == pytest.approx(1.0, abs=1e-12)
    assert gates_of({"law": "linear", "rise": 0.0}, ONE_SECOND)[0].attack_10_90_s == 0.0


def test_attack_is_of_the_gain_after_the_amplifiers_law():
    """decibel, 60 dB, linear control: gain g at u = ln(1 + 999 g)/ln 1000."""
    found = gates_of(
        {"law": "linear", "rise": 0.1}, ONE_SECOND, amplifier={"law": "decibel", "range_db": 60.0}
    )[0]
    control = [math.log(1 + 999 * gain) / math.log(1000) for gain in (0.1, 0.9)]
    assert found.attack_10_90_s == pytest.approx(0.1 * (control[1] - control[0]), abs=CLOSE_S)


def test_a_slewed_gate_is_an_attack_decay_envelope_that_a_short_gate_does_not_fill():
    """Common practice, with rc: a gate of T reaches 63.2 %, and loses 20 log10(1/0.632) = 3.98 dB."""
    found = gates_of({"law": "rc", "rise": 0.2, "fall": 0.1}, make_phrase((0, "0.2", 60), (1, "1.2", 60)))[0]
    peak = 1 - math.exp(-1)
    assert found.peak == pytest.approx(peak, abs=1e-12)
    assert found.peak_loss_db == pytest.approx(-20 * math.log10(peak), abs=1e-9)
    assert found.peak_loss_db == pytest.approx(3.98, abs=0.01)
    # 10 and 90 % of the way to its own peak
    assert found.attack_10_90_s == pytest.approx(
        0.2 * math.log((1 - 0.1 * peak) / (1 - 0.9 * peak)), abs=CLOSE_S
    )
    assert found.gap_db == pytest.approx(20 * math.log10(math.exp(-0.8 / 0.1)), abs=1e-3)


def test_peak_loss_in_decibels_goes_through_the_amplifiers_law():
    found = gates_of(
        {"law": "linear", "rise": 0.2}, make_phrase((0, "0.1", 60)), amplifier={"law": "decibel"}
    )[0]
    gain = (10 ** (60 * 0.5 / 20) - 1) / 999
    assert found.peak == pytest.approx(gain, rel=1e-9)
    assert found.peak_loss_db == pytest.approx(-20 * math.log10(gain), abs=1e-9)


def test_attack_starts_from_the_gain_at_gate_on():
    """linear fall 1 s: after a gap of 0.5 s the gain is 0.5; then up with 0.2 s a level."""
    found = gates_of({"law": "linear", "rise": 0.2, "fall": 1.0}, make_phrase((0, 1, 60), ("1.5", 3, 60)))[1]
    assert found.attack_10_90_s == pytest.approx(0.8 * 0.1, abs=CLOSE_S)


def test_there_is_no_attack_without_a_rise():
    """Velocity takes the second gate 20 dB under the first, which has left the gain at 0.9: it falls."""
    phrase = make_phrase((0, 1, 60, 1.0), ("1.1", 3, 60, 0.0))
    quiet = gates_of({"law": "linear", "rise": 0.1, "fall": 1.0}, phrase, amplifier={"velocity_db": 20.0})[1]
    assert quiet.attack_10_90_s is None
    assert quiet.peak == pytest.approx(0.9, abs=1e-12)
    assert quiet.peak_loss_db == pytest.approx(
        20 * math.log10(0.1 / 0.9), abs=1e-9
    )  # a gain, since it starts above


def test_velocity_and_legato_notes_move_the_gates_level():
    """A gate's unslewed peak is the loudest of its notes."""
    phrase = make_phrase((0, 2, 60, 0.5), (1, 3, 64, 1.0))
    gates = gates_of({"law": "linear", "rise": 0.1}, phrase, amplifier={"velocity_db": 40.0})
    assert len(gates) == 1
    assert (gates[0].peak, gates[0].peak_loss_db) == (pytest.approx(1.0), pytest.approx(0.0, abs=1e-9))
    soft = gates_of(
        {"law": "linear", "rise": 0.1}, make_phrase((0, 2, 60, 0.5)), amplifier={"velocity_db": 40.0}
    )[0]
    assert soft.peak == pytest.approx(0.1)
    assert soft.attack_10_90_s == pytest.approx(0.8 * 0.1 * 0.1, abs=CLOSE_S)


def test_the_gap_is_the_lowest_gain_against_the_lower_of_the_adjacent_peaks():
    """linear fall 1 s, 0.6 s apart: down to 0.4, against peaks of 1 and of 0.5 (6.02 dB less velocity)."""
    loud = gates_of({"law": "linear", "rise": 0.1, "fall": 1.0}, make_phrase((0, 1, 60), ("1.6", 3, 60)))
    assert loud[0].gap_db == pytest.approx(20 * math.log10(0.4), abs=1e-9)
    assert loud[1].gap_db is None
    phrase = make_phrase((0, 1, 60, 1.0), ("1.6", 3, 60, 0.5))
    uneven = gates_of(
        {"law": "linear", "rise": 0.1, "fall": 1.0}, phrase, amplifier={"velocity_db": 40 * math.log10(2)}
    )
    assert uneven[0].gap_db == pytest.approx(20 * math.log10(0.4 / 0.5), abs=1e-9)


def test_a_silent_gap_is_minus_200_db_and_gates_that_abut_have_no_gap():
    silent = gates_of({"law": "linear", "rise": 0.1, "fall": 0.1}, make_phrase((0, 1, 60), (2, 3, 60)))
    assert silent[0].gap_db == -200.0
    at_once = gates_of({"law": "linear", "rise": 0.1, "fall": 0.0}, make_phrase((0, 1, 60), ("1.01", 3, 60)))
    assert at_once[0].gap_db == -200.0
    abutting = gates_of({"law": "linear", "rise": 0.1, "fall": 0.1}, make_phrase((0, 1, 60), (1, 3, 60)))
    assert abutting[0].gap_db == 0.0
    phrase = make_phrase((0, 1, 60, 1.0), (1, 3, 60, 0.5))
    down = gates_of(
        {"law": "linear", "rise": 0.1, "fall": 0.0}, phrase, amplifier={"velocity_db": 40 * math.log10(2)}
    )
    assert (down[0].gap_db, down[1].peak) == (pytest.approx(0.0, abs=1e-9), pytest.approx(0.5))


def clicks(gain, phrase=ONE_SECOND, **tables):
    return [gate.edge_click for gate in gates_of(gain, phrase, **tables)]


@pytest.mark.parametrize(
    ("rise", "fall", "expected"), [(4.9, 9, True), (5.1, 9, False), (9, 4.9, True), (9, 5.1, False)]
)
def test_a_linear_edge_clicks_under_five_milliseconds(rise, fall, expected):
    """Common practice, as DESIGN has it: over 10 % within 0.5 ms; linear goes 10 % in a tenth of its time."""
    assert clicks({"law": "linear", "rise": rise / 1000, "fall": fall / 1000}) == [expected]


def test_exactly_a_tenth_in_half_a_millisecond_is_no_click():
    assert clicks({"law": "linear", "rise": 0.005, "fall": 0.005}) == [False]


def test_an_rc_edge_clicks_where_its_first_half_millisecond_takes_a_tenth():
    """1 − exp(−0.5 ms/T) = 0.1 at T = 0.5 ms/ln(10/9) = 4.7456 ms; the fall as well as the rise."""
    limit = 0.0005 / math.log(10 / 9)
    for side, other in (("rise", "fall"), ("fall", "rise")):
        assert clicks({"law": "rc", side: limit * 0.999, other: 0.05}) == [True]
        assert clicks({"law": "rc", side: limit * 1.001, other: 0.05}) == [False]


def test_a_cosine_edge_clicks_in_its_middle():
    """The steepest 0.5 ms of a cosine of duration D take sin(π 0.5 ms/(2 D)) of it."""
    limit = math.pi * 0.0005 / (2 * math.asin(0.1))
    assert clicks({"law": "cosine", "rise": limit * 0.9999, "fall": 0.1}) == [True]
    assert clicks({"law": "cosine", "rise": limit * 1.0001, "fall": 0.1}) == [False]


def test_in_decibels_the_steepest_part_is_at_the_top():
    """60 dB, linear control: the last 0.5 ms of a rise T take 1 − (1000^(1 − 0.5 ms/T) − 1)/999."""
    limit = brentq(lambda t: 1 - (1000 ** (1 - 0.0005 / t) - 1) / 999 - 0.1, 0.005, 1.0)
    decibel = {"amplifier": {"law": "decibel", "range_db": 60.0}}
    for side, other in (("rise", "fall"), ("fall", "rise")):
        assert clicks({"law": "linear", side: limit * 0.9999, other: 1.0}, **decibel) == [True]
        assert clicks({"law": "linear", side: limit * 1.0001, other: 1.0}, **decibel) == [False]


def test_a_fall_that_ends_fast_clicks_at_its_end():
    """log falls fastest near 0, at 1/T; a curve of −5 speeds up likewise."""
    end = 1 - 0.0005 / 0.02 * 5 / math.expm1(5)
    assert end > 0.9  # its beginning is no click
    assert clicks({"law": "curve", "curvature": -5.0, "rise": 1.0, "fall": 0.02}) == [True]
    limit = 3 * 0.0005 / math.expm1(0.3)  # log: the last δ seconds take ln(1 + b δ/T)/b
    assert clicks({"law": "log", "bend": 3.0, "rise": 0.05, "fall": limit * 0.9999}) == [True]
    assert clicks({"law": "log", "bend": 3.0, "rise": 0.05, "fall": limit * 1.0001}) == [False]


@pytest.mark.parametrize("side", ["rise", "fall"])
def test_an_immediate_edge_clicks(side):
    assert clicks({"law": "rc", "rise": 0.1, "fall": 0.1} | {side: 0.0}) == [True]


@pytest.mark.parametrize(("apart", "expected"), [("0.0004", True), ("0.0006", False)])
def test_moves_within_half_a_millisecond_add_up_across_events(apart, expected):
    """Two legato jumps of 6 and 7 % of the peak: each alone is no click."""
    velocity = [1 + 20 * math.log10(level) / 60 for level in (0.87, 0.93)]
    # A first gate leaves the gain just at 0.87 for the second one, so that its opening is no click either.
    second = f"{1.1 + float(apart):.4f}"
    phrase = make_phrase(
        ("0", "0.05", 60, 1.0),
        ("0.063", 3, 60, velocity[0]),
        ("1.1", 3, 62, velocity[1]),
        (second, 3, 64, 1.0),
    )
    found = clicks({"law": "linear", "rise": 0.0, "fall": 0.1}, phrase, amplifier={"velocity_db": 60.0})
    assert found[1] is expected


@pytest.mark.parametrize("up", [True, False])
def test_a_move_between_two_turns_inside_half_a_millisecond_counts(up):
    """A jump of 0.06, 0.12 back in 0.2 ms, and a jump back to 0.93: before it and after it all is at rest."""
    low, high = (0.87, 0.99) if up else (0.99, 0.87)
    events = [(Fraction(1), low, True), (Fraction(1), high, False), (Fraction(10_002, 10_000), 0.93, True)]
    course = follow(Slew("linear", 0.0002 / 0.12, 0.0002 / 0.12), 0.93, events)
    record = amplifier_record("linear", 60.0)[0]
    assert _largest_move(record, course, list(course.stretches(0.5, 2.0)), 1.0) == pytest.approx(
        0.12, abs=1e-12
    )


@pytest.mark.parametrize("seed", range(40 if LONG else 12))
def test_the_largest_move_is_that_of_a_dense_search(seed):
    """Over every 2 µs; the exact largest move is at least as large, by no more than the grid allows."""
    generator = np.random.default_rng(seed)
    law = ("linear", "rc", "log", "exp", "soft", "curve", "cosine")[seed % 7]
    enveloped = seed % 3 == 0 and seed % 7 < 5
    envelope = {"attack": 0.003, "decay": 0.004, "sustain": 0.5, "release": 0.006, "shape": "rc"}
    preset = make_preset(
        gain={
            "law": law,
            "rise": float(10 ** generator.uniform(-4, -2)),
            "fall": float(10 ** generator.uniform(-4, -2)),
            "bend": 3.0,
            "curvature": float(generator.uniform(-8, 8)),
        },
        amplifier={"law": "decibel" if seed % 2 else "linear", "velocity_db": 12.0},
        **({"envelope": envelope} if enveloped else {}),
    )  # fmt: skip
    phrase = make_phrase(("0.001", "0.0043", 60), ("0.0035", "0.009", 62, 0.4), ("0.012", "0.0121", 64))
    course = gain_courses(preset, gate_changes(preset, phrase))[1]
    record = amplifier_record(preset.amplifier.law, preset.amplifier.range_db)[0]
    times = np.arange(0.001, 0.012, 2e-6)
    control = course.at(times)
    gain = control if preset.amplifier.law == "linear" else (10 ** (3 * control) - 1) / 999
    windows = np.lib.stride_tricks.sliding_window_view(gain, round(CLICK_S / 2e-6) + 1)
    dense = float(np.ptp(windows, axis=1).max())
    found = _largest_move(record, course, list(course.stretches(0.001, 0.012)), 1.01 * dense)
    steepest = np.abs(np.diff(gain)).max()
    assert dense - 1e-9 <= found <= dense + 2 * steepest + 1e-9


ENVELOPE = {"attack": 0.05, "decay": 0.2, "sustain": 0.4, "release": 0.1}


def test_an_envelope_alone_by_hand():
    """Immediate slew: 10 to 90 % of a straight attack of 50 ms is 40 ms, and the peak is full."""
    phrase = make_phrase((0, 1, 60), ("1.05", 3, 60))
    found = gates_of({"law": "linear", "rise": 0.0, "fall": 0.0}, phrase, envelope=ENVELOPE)
    assert found[0].attack_10_90_s == pytest.approx(0.04, abs=CLOSE_S)
    assert (found[0].peak, found[0].peak_loss_db) == (pytest.approx(1.0), pytest.approx(0.0, abs=1e-9))
    assert found[0].gap_db == pytest.approx(20 * math.log10(0.2), abs=1e-6)  # half of the release from 0.4
    assert found[1].attack_10_90_s == pytest.approx(0.04, abs=CLOSE_S)
    cut = gates_of(
        {"law": "linear", "rise": 0.0, "fall": 0.0}, make_phrase((0, "0.02", 60)), envelope=ENVELOPE
    )[0]
    assert cut.peak == pytest.approx(0.4)


def test_a_slewed_envelopes_peak_and_attack_against_solve_ivp():
    """rc of 30 ms behind a straight attack of 50 ms and decay of 200 ms: solved with events for the peak."""
    rise, fall = 0.03, 0.045
    found = gates_of({"law": "rc", "rise": rise, "fall": fall}, ONE_SECOND, envelope=ENVELOPE)[0]

    def envelope(t):
        return t / 0.05 if t <= 0.05 else 1.0 - 0.6 * (t - 0.05) / 0.2

    def slope(t, y):
        return [(envelope(t) - y[0]) / (rise if envelope(t) > y[0] else fall)]

    up = solve_ivp(slope, (0, 0.05), [0.0], "DOP853", rtol=1e-12, atol=1e-13, dense_output=True)

    def meets(t, y):
        return envelope(t) - y[0]

    meets.terminal = True
    on = solve_ivp(
        slope, (0.05, 0.2), [up.y[0][-1]], "DOP853", rtol=1e-12, atol=1e-13, dense_output=True, events=meets
    )
    peak = float(on.y_events[0][0][0])
    assert found.peak == pytest.approx(peak, abs=1e-9)
    assert found.peak_loss_db == pytest.approx(-20 * math.log10(peak), abs=1e-7)
    y = lambda t: (up if t <= 0.05 else on).sol(t)[0]  # noqa: E731
    latest = float(on.t_events[0][0])
    tenth = brentq(lambda t: y(t) - 0.1 * peak, 1e-6, latest, xtol=1e-12)
    ninth = brentq(lambda t: y(t) - 0.9 * peak, 1e-6, latest, xtol=1e-12)
    assert found.attack_10_90_s == pytest.approx(ninth - tenth, abs=WITHIN_S)


@pytest.mark.parametrize("law", ["linear", "rc", "log", "exp", "soft"])
def test_a_slewed_envelope_is_slower_and_its_peak_lower(law):
    """Common practice of the trade (DESIGN section 14)."""
    plain = gates_of({"law": "linear", "rise": 0.0, "fall": 0.0}, ONE_SECOND, envelope=ENVELOPE)[0]
    slewed = gates_of({"law": law, "rise": 0.1, "fall": 0.1}, ONE_SECOND, envelope=ENVELOPE)[0]
    assert slewed.peak < plain.peak
    assert slewed.peak_loss_db > 0.2
    assert slewed.attack_10_90_s > plain.attack_10_90_s


def test_a_peak_may_come_after_the_gate_has_closed():
    """A gate of 10 ms, released in 0.5 s: a slow linear rise goes on until it meets the release."""
    envelope = {"attack": 0.0, "decay": 0.0, "sustain": 1.0, "release": 0.5}
    found = gates_of(
        {"law": "linear", "rise": 0.5, "fall": 0.1}, make_phrase((0, "0.01", 60)), envelope=envelope
    )[0]
    # up with t/0.5 from 0, down with 1 − (t − 0.01)/0.5: they meet at t = 0.255
    assert found.peak == pytest.approx(0.51, abs=1e-9)
    assert found.attack_10_90_s == pytest.approx(0.8 * 0.255, abs=CLOSE_S)


def test_a_gap_is_lowest_where_the_gate_closes_when_the_gain_goes_on_rising():
    """The same gate: 0.02 when it closes, 0.5 when the next one opens 5 ms after its peak of 0.51."""
    envelope = {"attack": 0.0, "decay": 0.0, "sustain": 1.0, "release": 0.5}
    phrase = make_phrase((0, "0.01", 60), ("0.26", 2, 60))
    found = gates_of({"law": "linear", "rise": 0.5, "fall": 0.1}, phrase, envelope=envelope)[0]
    assert found.gap_db == pytest.approx(20 * math.log10(0.02 / 0.51), abs=1e-6)


def test_a_gate_that_never_sounds_has_finite_facts():
    silent = {"attack": 0.0, "decay": 0.0, "sustain": 0.0, "release": 0.0}
    found = gates_of({"law": "rc", "rise": 0.1}, make_phrase((0, 1, 60), (2, 3, 60)), envelope=silent)
    assert [(g.peak, g.peak_loss_db, g.attack_10_90_s, g.edge_click) for g in found] == [
        (0.0, 0.0, None, False)
    ] * 2
    assert [g.gap_db for g in found] == [0.0, None]


@pytest.mark.parametrize(("attack", "expected"), [(0.0049, True), (0.0051, False)])
def test_an_envelopes_edge_clicks_as_a_gates_does(attack, expected):
    envelope = {"attack": attack, "decay": 0.1, "sustain": 1.0, "release": 0.1}
    assert clicks({"law": "linear", "rise": 0.0, "fall": 0.0}, envelope=envelope) == [expected]
