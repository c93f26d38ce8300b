"""The facts about glides, DESIGN section 8, one by one, against formulas worked out by hand and scipy."""

import json
import math

import numpy as np
import pytest
from scipy.optimize import brentq

from conftest import LONG
from glidesmith import SettingError, render
from glidesmith.facts import table
from glidesmith.measuring import measure
from laws import printed_volts, solved_volts
from making import make_phrase, make_preset, random_phrase

WITHIN_S = 1e-6
"""DESIGN section 8: facts agree to 1 µs."""

CLOSE_S = 1e-9
"""What closed forms really agree to, in seconds."""

ENVELOPE = {"attack": 0.05, "decay": 0.2, "sustain": 0.4, "release": 0.1}


OCTAVE_UP = make_phrase((0, 1, 60), (1, 9, 72))
OCTAVE_DOWN = make_phrase((0, 1, 72), (1, 9, 60))


def glide_of(pitch, phrase=OCTAVE_UP, tolerance_cents=5.0, **tables):
    """The facts of the first glide under a pitch table."""
    return measure(make_preset(pitch=pitch, **tables), phrase, tolerance_cents).glides[0]


def test_the_json_has_exactly_the_keys_of_the_design_in_their_order():
    facts = measure(
        make_preset(title="Lead"),
        make_phrase((0, 1, 50), ("0.5", 2, 57), (3, 4, 50), title="Line"),
        7,
        44_100,
    )
    said = json.loads(json.dumps(facts.as_dict(), allow_nan=False))
    assert list(said) == ["preset", "phrase", "tolerance_cents", "sample_rate", "glides", "gates"]
    assert [said[k] for k in ("preset", "phrase", "tolerance_cents", "sample_rate")] == [
        "Lead",
        "Line",
        7.0,
        44_100,
    ]
    assert list(said["glides"][0]) == [
        "note", "start_s", "from", "to", "interval_semitones", "landing_s", "midpoint_s", "rise_10_90_s",
        "max_rate_semitones_per_s", "short_by_cents", "in_tune_fraction",
    ]  # fmt: skip
    assert list(said["gates"][0]) == [
        "note", "start_s", "attack_10_90_s", "peak", "peak_loss_db", "gap_db", "edge_click",
    ]  # fmt: skip
    first = said["glides"][0]
    assert (first["note"], first["start_s"], first["from"], first["to"]) == (1, 0.5, "D3", "A3")
    assert first["interval_semitones"] == 7.0
    assert [g["interval_semitones"] for g in said["glides"]] == [7.0, -7.0]
    assert [(g["note"], g["start_s"]) for g in said["gates"]] == [(0, 0.0), (2, 3.0)]
    assert type(said["gates"][0]["edge_click"]) is bool


@pytest.mark.parametrize("tolerance", [0, -1, 0.001, 1201, math.nan, math.inf, "5", True, None])
def test_a_tolerance_out_of_range_is_told_in_one_line(tolerance):
    with pytest.raises(SettingError, match=r"^tolerance .*0\.01 to 1200") as caught:
        measure(make_preset(), OCTAVE_UP, tolerance)
    assert len(caught.value.lines) == 1


def test_a_sample_rate_out_of_range_is_an_error():
    with pytest.raises(SettingError, match="sample rate"):
        measure(make_preset(), OCTAVE_UP, sample_rate=100)


def test_there_is_an_entry_for_every_change_of_the_target_after_the_first_note_and_for_a_return():
    phrase = make_phrase((0, 4, 60), (1, 3, 64), (2, "2.5", 67), (5, 6, 67))
    found = [(g.note, g.start_s, g.from_note, g.to_note) for g in measure(make_preset(), phrase).glides]
    assert found == [
        (1, 1.0, "C4", "E4"),
        (2, 2.0, "E4", "G4"),
        (1, 2.5, "G4", "E4"),
        (0, 3.0, "E4", "C4"),
        (3, 5.0, "C4", "G4"),
    ]


@pytest.mark.parametrize("glide", ["always", "overlap", "never"])
def test_a_repeated_pitch_is_no_change(glide):
    phrase = make_phrase((0, 1, 60), (1, 2, 60), ("2.5", 3, 60), ("2.9", 4, 60))
    assert measure(make_preset(pitch={"glide": glide}), phrase).glides == ()


def test_a_jump_to_the_pitch_being_glided_to_is_no_change_but_lands_it():
    phrase = make_phrase((0, 1, 60), ("0.9", "1.1", 72), ("1.2", 2, 72))
    glides = measure(make_preset(pitch={"law": "linear", "rise": 5.0, "glide": "overlap"}), phrase).glides
    assert len(glides) == 1
    assert glides[0].landing_s == pytest.approx(0.3, abs=CLOSE_S)


def test_rc_by_hand():
    up = glide_of({"law": "rc", "rise": 0.2, "fall": 0.1})
    assert up.landing_s == pytest.approx(0.2 * math.log(1200 / 5), abs=CLOSE_S)
    assert up.midpoint_s == pytest.approx(0.2 * math.log(2), abs=CLOSE_S)
    assert up.rise_10_90_s == pytest.approx(0.2 * math.log(9), abs=CLOSE_S)
    assert up.max_rate_semitones_per_s == pytest.approx(12 / 0.2)
    assert up.short_by_cents == 0.0
    down = glide_of({"law": "rc", "rise": 0.2, "fall": 0.1}, OCTAVE_DOWN)
    assert down.landing_s == pytest.approx(0.1 * math.log(1200 / 5), abs=CLOSE_S)
    assert down.max_rate_semitones_per_s == pytest.approx(12 / 0.1)


@pytest.mark.parametrize(("constants", "percent"), [(1, 63.2), (2, 86.5), (3, 95.0), (4, 98.2), (5, 99.3)])
def test_rc_takes_as_many_time_constants_as_the_handbook_says(constants, percent):
    """The step response of an RC circuit, any electronics handbook; the percentages are rounded to 0.1."""
    latest = glide_of({"law": "rc", "rise": 0.2}, tolerance_cents=12 * (100 - percent + 0.05)).landing_s
    earliest = glide_of({"law": "rc", "rise": 0.2}, tolerance_cents=12 * (100 - percent - 0.05)).landing_s
    assert latest <= constants * 0.2 <= earliest


def test_rc_rises_in_two_point_two_time_constants():
    """Handbook: the rise time from 10 to 90 % of an RC circuit is 2.2 time constants (2.197)."""
    assert glide_of({"law": "rc", "rise": 0.2}).rise_10_90_s == pytest.approx(2.2 * 0.2, rel=2e-3)


T_UP, T_DOWN = 0.8, 0.5
E = 5.0 / 1200.0


def by_linear(t, share):
    return t * share


def by_log(b, begin, end, t):
    """|exp(b y) − exp(b y0)| T/b: the table's step solved for the time."""
    return lambda share: abs(math.exp(b * (begin + share * (end - begin))) - math.exp(b * begin)) / abs(b) * t


def by_soft(c, t):
    """sinh(e/c) falls as exp(−t/(c T))."""
    return lambda share: c * t * math.log(math.sinh(1.0 / c) / math.sinh((1.0 - share) / c))


def by_curve(k, t):
    return lambda share: -t * math.log1p(share * math.expm1(-k)) / k


def by_cosine(t):
    return lambda share: t * math.acos(1.0 - 2.0 * share) / math.pi


UP, DOWN = (OCTAVE_UP, T_UP, 0.0, 1.0), (OCTAVE_DOWN, T_DOWN, 1.0, 0.0)
LAWS = [
    ("linear", {}, UP, lambda s: T_UP * s, 1 / T_UP),
    ("linear", {"timing": "fixed"}, DOWN, lambda s: T_DOWN * s, 1 / T_DOWN),
    ("log", {"bend": 1.5}, UP, by_log(1.5, 0, 1, T_UP), 1 / T_UP),
    ("log", {"bend": 1.5}, DOWN, by_log(1.5, 1, 0, T_DOWN), 1 / T_DOWN),
    ("exp", {"bend": 0.7}, UP, by_log(-0.7, 0, 1, T_UP), math.exp(0.7) / T_UP),
    ("exp", {"bend": 0.7}, DOWN, by_log(-0.7, 1, 0, T_DOWN), math.exp(0.7) / T_DOWN),
    ("soft", {"knee": 0.3}, UP, by_soft(0.3, T_UP), math.tanh(1 / 0.3) / T_UP),
    ("soft", {"knee": 0.002}, DOWN, lambda s: T_DOWN * s, 1 / T_DOWN),
    ("curve", {"curvature": 4.0}, UP, by_curve(4.0, T_UP), 4 / (1 - math.exp(-4)) / T_UP),
    ("curve", {"curvature": -4.0}, DOWN, by_curve(-4.0, T_DOWN), 4 / (1 - math.exp(-4)) / T_DOWN),
    ("curve", {"curvature": 0.0, "timing": "rate"}, UP, lambda s: T_UP * s, 1 / T_UP),
    ("cosine", {}, UP, by_cosine(T_UP), math.pi / 2 / T_UP),
    ("cosine", {"timing": "rate"}, DOWN, by_cosine(T_DOWN), math.pi / 2 / T_DOWN),
]


@pytest.mark.parametrize(
    ("law", "more", "way", "time_of", "fastest"), LAWS, ids=lambda v: v if isinstance(v, str) else ""
)
def test_every_law_by_hand(law, more, way, time_of, fastest):
    phrase = way[0]
    found = glide_of({"law": law, "rise": T_UP, "fall": T_DOWN, **more}, phrase)
    near = 1e-5 if more.get("knee") == 0.002 else CLOSE_S  # a small knee is all but linear
    assert found.midpoint_s == pytest.approx(time_of(0.5), abs=near)
    assert found.rise_10_90_s == pytest.approx(time_of(0.9) - time_of(0.1), abs=near)
    if near == CLOSE_S:
        assert found.landing_s == pytest.approx(time_of(1.0 - E), abs=near)
    assert found.max_rate_semitones_per_s == pytest.approx(12.0 * fastest, rel=1e-9)
    assert found.short_by_cents == 0.0
    assert found.in_tune_fraction == pytest.approx(1.0 - found.landing_s / 8.0, abs=1e-12)


def test_log_takes_longer_than_linear_and_exp_less_between_0_v_and_any_positive_voltage():
    """DESIGN section 4; a circuit's output fed back to its own rate."""
    longer, plain, less = (glide_of({"law": law, "rise": 0.1}).landing_s for law in ("log", "linear", "exp"))
    assert longer > plain > less


@pytest.mark.parametrize("seed", range(60 if LONG else 20))
def test_random_glides_against_the_printed_form_and_brentq(seed):
    generator = np.random.default_rng(seed)
    law = ("linear", "rc", "log", "exp", "soft", "curve", "cosine")[seed % 7]
    pitch = {
        "law": law,
        "rise": float(10 ** generator.uniform(-3, 0)),
        "fall": float(10 ** generator.uniform(-3, 0)),
        "bend": float(10 ** generator.uniform(-2, 0.3)),
        "knee": float(10 ** generator.uniform(-1.5, 0.3)),
        "curvature": float(generator.uniform(-9, 9)),
    }
    low, high = generator.choice(np.arange(40, 90), 2, replace=False)
    phrase = make_phrase((0, 1, int(low)), (1, 4000, int(high)))
    found = measure(make_preset(pitch=pitch), phrase, tolerance_cents=12.0).glides[0]
    begin, end = (int(low) - 60) / 12, (int(high) - 60) / 12
    course = printed_volts(pitch, begin, end)

    def when(level):
        return brentq(
            lambda t: (float(course(t)) - level) * (1 if end > begin else -1), 0.0, 3999.0, xtol=1e-13
        )

    shares = [when(begin + share * (end - begin)) for share in (0.1, 0.5, 0.9)]
    assert found.midpoint_s == pytest.approx(shares[1], abs=WITHIN_S)
    assert found.rise_10_90_s == pytest.approx(shares[2] - shares[0], abs=WITHIN_S)
    assert found.landing_s == pytest.approx(when(end - math.copysign(0.01, end - begin)), abs=WITHIN_S)


def test_what_does_not_happen_before_the_next_change_is_none_and_short_by_says_how_far_off():
    """rc, T = 0.4 s, an octave up, 0.2 s until the next change: 1 − exp(−0.5) = 39 % of the way."""
    phrase = make_phrase((0, 1, 60), (1, 2, 72), ("1.2", 4, 60))
    first, second = measure(make_preset(pitch={"law": "rc", "rise": 0.4, "fall": 0.1}), phrase).glides
    assert (first.landing_s, first.midpoint_s, first.rise_10_90_s) == (None, None, None)
    assert first.short_by_cents == pytest.approx(1200 * math.exp(-0.5), abs=1e-9)
    assert first.in_tune_fraction == 0.0
    assert second.landing_s == pytest.approx(0.1 * math.log(1200 * (1 - math.exp(-0.5)) / 5), abs=CLOSE_S)


def test_each_of_the_figures_is_none_on_its_own():
    """linear, 1 s an octave: half-way at 0.5 s, 90 % at 0.9 s, within 5 cents at 0.9958 s."""
    ends = {"0.45": (0, 0, 0), "0.55": (1, 0, 0), "0.92": (1, 1, 0), "0.999": (1, 1, 1)}
    for after, happens in ends.items():
        phrase = make_phrase((0, 1, 60), (1, 1 + float(after), 72), (1 + float(after), 9, 60))
        found = glide_of({"law": "linear", "rise": 1.0}, phrase)
        assert (
            tuple(v is not None for v in (found.midpoint_s, found.rise_10_90_s, found.landing_s)) == happens
        )


def test_the_last_notes_glide_must_land_before_its_gate_closes_though_it_goes_on():
    phrase = make_phrase((0, 1, 60), (1, "1.2", 72))
    found = glide_of({"law": "linear", "rise": 0.3}, phrase)
    assert found.landing_s is None
    assert found.short_by_cents == pytest.approx(400.0, abs=1e-9)


def test_a_glide_may_land_after_its_gate_closed_when_another_note_comes_later():
    found = glide_of({"law": "linear", "rise": 0.4}, make_phrase((0, 1, 60), (1, "1.2", 72), (3, 4, 60)))
    assert found.landing_s == pytest.approx(0.4 * (1 - E), abs=CLOSE_S)
    assert (found.short_by_cents, found.in_tune_fraction) == (0.0, 0.0)


@pytest.mark.parametrize(
    "pitch",
    [{"glide": "never"}, {"glide": "overlap"}, {"rise": 0.0, "fall": 0.0}, {"law": "cosine", "rise": 0.0}],
)
def test_a_jump_lands_at_once_and_has_no_rate(pitch):
    found = glide_of(pitch)
    assert (found.landing_s, found.midpoint_s, found.rise_10_90_s) == (0.0, 0.0, 0.0)
    assert (found.max_rate_semitones_per_s, found.short_by_cents, found.in_tune_fraction) == (0.0, 0.0, 1.0)


@pytest.mark.parametrize("law", ["linear", "rc", "log", "exp", "soft"])
def test_a_glide_interrupted_in_the_middle_against_solve_ivp(law):
    """From C4 towards C5, turned at 0.1 s towards F3: its interval runs from the output at the turn."""
    pitch = {"law": law, "rise": 0.3, "fall": 0.4, "bend": 0.6, "knee": 0.3}
    phrase = make_phrase((0, 1, 60), (1, 2, 72), ("1.1", 6, 53))
    found = measure(make_preset(pitch=pitch), phrase).glides[1]
    target = -7 / 12
    course = printed_volts(pitch, float(printed_volts(pitch, 0.0, 1.0)(0.1)), target)
    turn = float(solved_volts(pitch, [(0.0, 0.0), (1e-12, 1.0)], [0.1])[0])
    way = target - turn
    levels = {found.midpoint_s: turn + 0.5 * way, found.landing_s: target + E}
    for at, level in levels.items():
        around = [at - WITHIN_S, at + WITHIN_S]
        before, after = solved_volts(pitch, [(0.0, turn), (1e-12, target)], around)
        assert before > level > after
    tenth = float(brentq(lambda t: course(t) - (turn + 0.1 * way), 0.0, 5.0, xtol=1e-13))
    around = [tenth + found.rise_10_90_s - WITHIN_S, tenth + found.rise_10_90_s + WITHIN_S]
    before, after = solved_volts(pitch, [(0.0, turn), (1e-12, target)], around)
    assert before > turn + 0.9 * way > after
    assert found.interval_semitones == -19.0


def test_a_timed_glide_interrupted_in_the_middle_by_hand():
    """cosine, 0.4 s: turned at half-way (0.2 s), it has 0.4 s again for the half octave back."""
    phrase = make_phrase((0, 1, 60), (1, 2, 72), ("1.2", 6, 60))
    found = measure(make_preset(pitch={"law": "cosine", "rise": 0.4, "fall": 0.4}), phrase).glides[1]
    assert found.midpoint_s == pytest.approx(0.2, abs=CLOSE_S)
    assert found.landing_s == pytest.approx(0.4 * math.acos(2 * 5 / 600 - 1) / math.pi, abs=CLOSE_S)
    assert found.max_rate_semitones_per_s == pytest.approx(6 * math.pi / 2 / 0.4)


def test_the_fastest_moment_counts_only_where_it_comes_before_the_next_change():
    """cosine is fastest half-way, at 0.2 s; after 0.1 s its rate is sin(π/4) of that."""
    phrase = make_phrase((0, 1, 60), (1, 2, 72), ("1.1", 6, 60))
    found = measure(make_preset(pitch={"law": "cosine", "rise": 0.4, "fall": 0.4}), phrase).glides[0]
    assert found.max_rate_semitones_per_s == pytest.approx(12 * math.pi / 2 / 0.4 * math.sin(math.pi / 4))


def test_a_converters_grid_may_be_out_of_tune_for_good():
    """6 bits over 10 V: steps of 0.15625 V; E4 (4/12 V) becomes 0.3125 V, 25 cents flat."""
    phrase = make_phrase((0, 1, 60), (1, 3, 64))
    coarse = {"converter": {"bits": 6, "span_volts": 10.0}}
    found = glide_of({"glide": "never"}, phrase, 5.0, **coarse)
    assert (found.landing_s, found.in_tune_fraction) == (None, 0.0)
    assert found.short_by_cents == pytest.approx(25.0, abs=1e-9)
    assert glide_of({"glide": "never"}, phrase, 24.9, **coarse).landing_s is None
    assert glide_of({"glide": "never"}, phrase, 25.0, **coarse).landing_s == 0.0
    slow = glide_of({"law": "rc", "rise": 0.2}, phrase, 30.0, **coarse)
    assert slow.landing_s == pytest.approx(0.2 * math.log(375 / 5), abs=CLOSE_S)
    assert slow.midpoint_s == pytest.approx(0.2 * math.log(2), abs=CLOSE_S)  # of its own interval, 375 cents
    assert slow.interval_semitones == 4.0


def test_passing_through_is_in_tune_but_no_landing():
    """E4 becomes 375 cents up, and a glide down to it passes ±5 cents; linear, 1 s an octave."""
    phrase = make_phrase((0, 1, 72), (1, 3, 64))
    found = glide_of({"law": "linear", "fall": 1.0}, phrase, 5.0, converter={"bits": 6, "span_volts": 10.0})
    assert found.landing_s is None
    assert found.short_by_cents == pytest.approx(25.0, abs=1e-9)
    assert found.in_tune_fraction == pytest.approx(10 / 1200 / 2.0, abs=1e-12)


def test_a_converter_that_holds_delays_all_but_the_rate():
    """10 ticks a second: a change at 1.03 s comes through at 1.1 s."""
    phrase = make_phrase((0, 2, 60), ("1.03", 9, 72))
    held = {"converter": {"bits": 12, "span_volts": 16.0, "rate_hz": 10.0}}
    jump = glide_of({"glide": "never"}, phrase, **held)
    assert (jump.landing_s, jump.midpoint_s) == (
        pytest.approx(0.07, abs=CLOSE_S),
        pytest.approx(0.07, abs=CLOSE_S),
    )
    assert jump.rise_10_90_s == 0.0
    glide = glide_of({"law": "rc", "rise": 0.2}, phrase, **held)
    assert glide.landing_s == pytest.approx(0.07 + 0.2 * math.log(240), abs=CLOSE_S)
    assert glide.rise_10_90_s == pytest.approx(0.2 * math.log(9), abs=CLOSE_S)


def test_a_held_glides_own_interval_begins_where_the_change_comes_through():
    """linear, up at 2 V/s: turned at 1.13 s, which comes through at 1.2 s, at 0.4 V; then down at 1 V/s."""
    phrase = make_phrase((0, 1, 60), (1, 2, 72), ("1.13", 9, 60))
    held = {"converter": {"bits": 12, "span_volts": 16.0, "rate_hz": 10.0}}
    found = measure(make_preset(pitch={"law": "linear", "rise": 0.5, "fall": 1.0}, **held), phrase).glides[1]
    assert found.midpoint_s == pytest.approx(0.07 + 0.2, abs=CLOSE_S)
    assert found.rise_10_90_s == pytest.approx(0.8 * 0.4, abs=CLOSE_S)
    assert found.max_rate_semitones_per_s == pytest.approx(12.0)


def test_a_change_that_never_comes_through_moves_nothing():
    phrase = make_phrase((0, 2, 60), ("1.02", "1.05", 72), ("1.06", 3, 48))
    held = {"converter": {"bits": 12, "span_volts": 16.0, "rate_hz": 10.0}}
    first = measure(make_preset(pitch={"law": "rc", "rise": 0.2}, **held), phrase).glides[0]
    assert (first.landing_s, first.midpoint_s, first.max_rate_semitones_per_s) == (None, None, 0.0)
    assert first.short_by_cents == pytest.approx(1200.0)


def test_glissando_steps_land_when_the_last_step_is_taken():
    """Semitone steps: the step to the target is taken half a semitone before it; up and down."""
    for phrase, t in ((OCTAVE_UP, 0.2), (OCTAVE_DOWN, 0.1)):
        found = glide_of({"law": "rc", "rise": 0.2, "fall": 0.1, "steps_per_octave": 12}, phrase)
        assert found.landing_s == pytest.approx(t * math.log(12 / 0.5), abs=CLOSE_S)
        assert found.midpoint_s == pytest.approx(t * math.log(2), abs=CLOSE_S)  # of the slew, under the steps


def test_steps_off_the_note_never_land():
    """Five steps an octave: E4, 400 cents up, is nearest to the step at 480."""
    phrase = make_phrase((0, 1, 60), (1, 3, 64))
    found = glide_of({"law": "linear", "rise": 0.2, "steps_per_octave": 5}, phrase)
    assert (found.landing_s, found.in_tune_fraction) == (None, 0.0)
    assert found.short_by_cents == pytest.approx(80.0, abs=1e-9)
    wide = glide_of({"law": "linear", "rise": 0.6, "steps_per_octave": 5}, phrase, 80.0)
    assert wide.landing_s == pytest.approx(0.6 * 0.3, abs=CLOSE_S)  # the step from 240 to 480 is taken at 360


def test_tracking_error_counts_from_the_note_at_0_volts():
    """10 cents an octave sharp: C5 is 10 cents off, C4 is in tune."""
    off = {"tuning": {"scale_error_cents_per_octave": 10.0}}
    never = glide_of({"law": "rc", "rise": 0.2}, OCTAVE_UP, 5.0, **off)
    assert (never.landing_s, never.short_by_cents) == (None, pytest.approx(10.0, abs=1e-6))
    # heard is 1210 (1 − exp(−t/T)) cents: it passes 1195 and 1205
    passing = 0.2 * math.log((1210 - 1195) / (1210 - 1205))
    assert never.in_tune_fraction == pytest.approx(passing / 8.0, abs=1e-9)
    lands = glide_of({"law": "rc", "rise": 0.2}, OCTAVE_UP, 15.0, **off)
    assert lands.landing_s == pytest.approx(0.2 * math.log(1210 / 25), abs=CLOSE_S)
    assert glide_of({"law": "rc", "fall": 0.1}, OCTAVE_DOWN, 5.0, **off).landing_s == pytest.approx(
        0.1 * math.log(1210 / 5), abs=CLOSE_S
    )
    zero_at_c5 = {"tuning": {"scale_error_cents_per_octave": 10.0, "zero_volts": "C5"}}
    assert glide_of({"law": "rc", "rise": 0.2}, OCTAVE_UP, 5.0, **zero_at_c5).landing_s is not None


@pytest.mark.parametrize("tolerance", [0.01, 1.0, 5.0, 50.0, 1200.0])
def test_the_tolerance_moves_the_landing(tolerance):
    found = glide_of({"law": "linear", "rise": 2.0}, OCTAVE_UP, tolerance)
    assert found.landing_s == pytest.approx(2.0 * (1 - tolerance / 1200), abs=CLOSE_S)


def test_a_target_just_at_the_tolerance_is_in_tune():
    found = glide_of({"glide": "never"}, OCTAVE_UP, 10.0, tuning={"scale_error_cents_per_octave": 10.0})
    assert found.landing_s == 0.0


def test_the_in_tune_fraction_is_of_the_notes_gate_time():
    """linear, 0.6 s: lands at 0.6 (1 − 5/1200); the gate closes 1 s after the change."""
    found = glide_of({"law": "linear", "rise": 0.6}, make_phrase((0, 1, 60), (1, 2, 72), (5, 6, 60)))
    assert found.in_tune_fraction == pytest.approx(1.0 - 0.6 * (1 - E), abs=1e-12)


def test_the_in_tune_fraction_ends_with_the_next_change():
    found = glide_of({"law": "linear", "rise": 0.2}, make_phrase((0, 1, 60), (1, 6, 72), (2, 3, 60)))
    assert found.in_tune_fraction == pytest.approx(1.0 - 0.2 * (1 - E), abs=1e-12)


@pytest.mark.parametrize("enveloped", [False, True])
def test_facts_agree_whatever_the_sample_rate(enveloped):
    tables = {"envelope": {"attack": 0.02, "decay": 0.1, "sustain": 0.5, "release": 0.1}} if enveloped else {}
    preset = make_preset(pitch={"law": "soft"}, gain={"law": "rc", "rise": 0.01}, **tables)
    phrase = random_phrase(3, 8)
    first, *others = (
        measure(preset, phrase, 5.0, rate).as_dict() for rate in (44_100, 48_000, 96_000, 11_025)
    )
    for other in others:
        for kind in ("glides", "gates"):
            for one, two in zip(first[kind], other[kind], strict=True):
                assert list(one.values()) == pytest.approx(list(two.values()), abs=WITHIN_S)


def test_landings_are_where_the_rendered_pitch_has_them():
    """End to end: counted in samples of the voice's own trace, which can't be better than one sample."""
    preset, rate = make_preset(pitch={"law": "curve", "curvature": 3.0, "rise": 0.2, "fall": 0.15}), 48_000
    phrase = random_phrase(4, 3)
    volts = render(preset, phrase, rate, trace=True).pitch_volts
    facts = measure(preset, phrase, 5.0, rate)
    ends = [*(g.start_s for g in facts.glides[1:]), float(phrase.end)]
    lands = 0
    for glide, end in zip(facts.glides, ends, strict=True):
        begin = math.ceil(glide.start_s * rate)
        inside = volts[begin : math.ceil(end * rate)]
        off = np.abs(1200 * inside - 100 * (phrase.notes[glide.note].number - 60)) > 5.0
        if glide.landing_s is None:
            assert off[-1]
        else:
            lands += 1
            counted = begin + (np.flatnonzero(off)[-1] + 1 if off.any() else 0)
            assert counted / rate == pytest.approx(glide.start_s + glide.landing_s, abs=1.01 / rate)
    assert 0 < lands < len(facts.glides)


def test_random_presets_give_finite_facts_within_their_ranges():
    generator = np.random.default_rng(31)
    for seed in range(200 if LONG else 40):
        law = ("linear", "rc", "log", "exp", "soft", "curve", "cosine")[seed % 7]
        times = [float(t) if t > 1e-5 else 0.0 for t in 10.0 ** generator.uniform(-6, 1.5, 4)]
        preset = make_preset(
            pitch={
                "law": law, "rise": times[0], "fall": times[1], "bend": float(10 ** generator.uniform(-2, 1)),
                "glide": str(generator.choice(["always", "overlap", "never"])),
                "steps_per_octave": int(generator.choice([0, 0, 7, 12, 96])),
            },
            gain={"law": law, "rise": times[2], "fall": times[3], "knee": float(generator.uniform(0.001, 2))},
            amplifier={"law": str(generator.choice(["linear", "decibel"])), "velocity_db": 60.0},
            tuning={"scale_error_cents_per_octave": float(generator.uniform(-100, 100))},
            **({"converter": {"bits": 7, "rate_hz": 25.0}} if seed % 3 == 0 else {}),
            **({"envelope": {**ENVELOPE, "retrigger": True}} if seed % 2 and seed % 7 < 5 else {}),
        )  # fmt: skip
        phrase = random_phrase(2, seed, shortest=0.0002, longest=0.2)
        facts = measure(preset, phrase, float(10 ** generator.uniform(-2, 2)))
        assert json.dumps(facts.as_dict(), allow_nan=False)
        for glide in facts.glides:
            assert 0.0 <= glide.in_tune_fraction <= 1.0
            assert (glide.landing_s is None) or glide.short_by_cents == 0.0
            assert glide.max_rate_semitones_per_s >= 0.0
        for gate in facts.gates:
            assert 0.0 <= gate.peak <= 1.0
            assert gate.gap_db is None or -200.0 <= gate.gap_db <= 1e-9
            assert gate.attack_10_90_s is None or gate.attack_10_90_s >= 0.0
        assert table(facts)
