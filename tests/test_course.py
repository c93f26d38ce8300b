"""Courses: closed forms through a phrase, against `solve_ivp`, against samples, and by their own rules."""

from fractions import Fraction
from itertools import pairwise

import numpy as np
import pytest

from conftest import LONG
from glidesmith import Slew, render
from glidesmith.course import follow, gain_courses, heard_octaves, pitch_course, stepped
from glidesmith.program import gate_changes, pitch_changes, slew_of
from laws import printed_rate, printed_volts, solved_stretch, solved_volts
from making import make_phrase, make_preset, random_phrase

WITHIN_VOLTS = 1e-9
"""DESIGN section 4, for pitch, and for gain without an envelope."""

WITHIN_LEVEL = 1e-6
"""DESIGN section 4, for gain with an envelope, of `solve_ivp`."""

BY_RATE = [
    {"law": "linear", "rise": 0.21, "fall": 0.13},
    {"law": "rc", "rise": 0.08, "fall": 0.05},
    {"law": "log", "rise": 0.2, "fall": 0.11, "bend": 0.8},
    {"law": "exp", "rise": 0.3, "fall": 0.4, "bend": 0.7},
    {"law": "soft", "rise": 0.15, "fall": 0.2, "knee": 0.2},
]
TIMED = [
    {"law": "linear", "rise": 0.21, "fall": 0.13, "timing": "fixed"},
    {"law": "curve", "rise": 0.2, "fall": 0.3, "curvature": 4.0},
    {"law": "curve", "rise": 0.2, "fall": 0.3, "curvature": -3.0, "timing": "rate"},
    {"law": "cosine", "rise": 0.2, "fall": 0.3},
]
TARGETS = [(0, 0.25), ("0.1", 1.0), ("0.21", -0.5), ("0.3", 0.75), ("0.55", 0.0), ("1.5", 0.5)]
"""Interrupted glides, up and down; the last but one arrives."""


def followed(settings, targets=TARGETS):
    return follow(Slew(**settings), targets[0][1], [(Fraction(t), v, False) for t, v in targets[1:]])


@pytest.mark.parametrize("settings", BY_RATE, ids=lambda s: s["law"])
def test_interrupted_glides_are_what_solve_ivp_makes_of_them(settings):
    times = np.linspace(0.0, 2.0, 201)
    solved = solved_volts(settings, [(float(Fraction(t)), v) for t, v in TARGETS], list(times))
    within = (
        3e-9 if settings["law"] in ("linear", "log", "exp") else WITHIN_VOLTS
    )  # the sign is softened over 1 nV
    assert np.abs(followed(settings).at(times) - solved).max() < within


@pytest.mark.parametrize("settings", TIMED, ids=lambda s: f"{s['law']} {s.get('timing', '')}")
def test_an_interrupted_timed_glide_starts_afresh_from_where_it_is(settings):
    course, y = followed(settings), TARGETS[0][1]
    for (begin, target), (end, _) in zip(TARGETS[1:], [*TARGETS[2:], (2, None)], strict=True):
        times = np.linspace(float(Fraction(begin)), float(Fraction(end)), 50)
        expected = printed_volts(settings, y, target)(times - times[0])
        assert np.abs(course.at(times) - expected).max() < WITHIN_VOLTS
        y = float(expected[-1])


def test_a_course_is_left_continuous_and_a_jump_is_two_values_at_one_moment():
    course = follow(Slew("linear", 1.0, 1.0), 0.0, [(Fraction(1), 0.5, True), (Fraction(2), 1.0, False)])
    assert course.at([0.5, 1.0, np.nextafter(1.0, 2.0), 2.0, 2.25, 9.0]).tolist() == [
        0.0,
        0.0,
        0.5,
        0.5,
        0.75,
        1.0,
    ]
    times, values = course.corners(0.0, 3.0)
    assert values[times == 1.0].tolist() == [0.0, 0.5]
    assert (np.diff(times) >= 0.0).all()


@pytest.mark.parametrize("settings", BY_RATE + TIMED, ids=lambda s: f"{s['law']} {s.get('timing', '')}")
def test_stretches_cover_the_time_each_in_one_direction_and_tell_when_a_level_is_reached(settings):
    course = followed(settings)
    stretches = list(course.stretches(0.05, 3.0))
    assert stretches[0].begin_s == 0.05
    assert stretches[-1].end_s == 3.0
    assert [s.end_s for s in stretches[:-1]] == [s.begin_s for s in stretches[1:]]
    for stretch in stretches:
        inner = course.at(stretch.moments(20)[1:-1])
        values = np.array([stretch.first, *inner, stretch.last])
        assert (np.sign(stretch.last - stretch.first) * np.diff(values) >= -1e-15).all()
        assert stretch.moves == (stretch.first != stretch.last)
        for level in np.linspace(stretch.first, stretch.last, 7)[1:-1] if stretch.moves else ():
            at = stretch.time_at(level)
            assert stretch.begin_s < at < stretch.end_s
            assert course.at([at])[0] == pytest.approx(level, abs=1e-12)


@pytest.mark.parametrize("settings", BY_RATE + TIMED, ids=lambda s: f"{s['law']} {s.get('timing', '')}")
def test_the_fastest_rate_is_the_largest_of_all_differences(settings):
    course = followed(settings)
    for begin, end in [(0.1, 0.21), (0.21, 0.3), (0.55, 1.5), (0.6, 0.65)]:
        times = np.linspace(begin, end, 200_001)
        slopes = np.abs(np.diff(course.at(times))) / np.diff(times)
        assert course.fastest(begin, end) == pytest.approx(slopes.max(), rel=1e-4)


def test_a_change_far_from_the_start_loses_nothing():
    shift = Fraction(7000) + Fraction(1, 3)
    late = follow(Slew("rc", 0.001, 0.001), 0.0, [(Fraction(t) + shift, v, False) for t, v in TARGETS[1:]])
    assert late.at([float(shift) + 0.2105])[0] == pytest.approx(
        followed({"law": "rc", "rise": 0.001, "fall": 0.001}).at([0.2105])[0], abs=2e-9
    )


def test_of_changes_in_one_tick_of_the_converter_the_last_counts_and_all_are_late():
    preset = make_preset(
        pitch={"rise": 0, "fall": 0}, converter={"bits": 12, "span_volts": 16.0, "rate_hz": 10.0}
    )
    phrase = make_phrase((0, "0.12", 60), ("0.12", "0.15", 72), ("0.15", "0.31", 48), ("0.31", 1, 60))
    course = pitch_course(slew_of(preset.pitch.slew), pitch_changes(preset, phrase))
    volts = course.at([0.13, 0.2, np.nextafter(0.2, 1.0), 0.4, np.nextafter(0.4, 1.0)])
    assert volts == pytest.approx([0.0, 0.0, -1.0, -1.0, 0.0], abs=1e-12)


def test_a_jump_that_the_converter_never_lets_through_is_no_place_to_glide_from():
    """At the tick at 1.1 s the pitch glides from C4 to C3; the jump to C5 before it never came through."""
    preset = make_preset(
        pitch={"law": "linear", "fall": 1.0, "glide": "overlap"},
        converter={"bits": 12, "span_volts": 16.0, "rate_hz": 10.0},
    )
    phrase = make_phrase((0, 1, 60), ("1.02", "1.06", 72), ("1.05", 4, 48))
    course = pitch_course(slew_of(preset.pitch.slew), pitch_changes(preset, phrase))
    assert course.at([1.1, 1.6]) == pytest.approx([0.0, -0.5], abs=1e-12)


def test_steps_and_tracking_error_make_of_volts_what_is_heard():
    preset = make_preset(pitch={"steps_per_octave": 4}, tuning={"scale_error_cents_per_octave": 12.0})
    assert heard_octaves(preset, [0.0, 0.13, 0.12, -0.13, 1.0]) == pytest.approx(
        [0, 0.2525, 0, -0.2525, 1.01]
    )
    assert stepped([0.125, -0.125], 4).tolist() == [0.25, 0.0]  # half-way the upper one is heard
    assert stepped([0.1234], 0).tolist() == [0.1234]


ENVELOPE = {"attack": 0.05, "decay": 0.12, "sustain": 0.55, "release": 0.2}
NOTES = [("0.01", "0.15", 60), ("0.1333", "0.3", 62), ("0.45", "0.47", 60)]


def envelope_level(shape, begin, end, lasts, t):
    """A stage of the envelope as DESIGN section 5 says it."""
    p = np.minimum(t / lasts, 1.0)
    return begin + (end - begin) * (p if shape == "linear" else (1 - np.exp(-5 * p)) / (1 - np.exp(-5)))


def expected_envelope(shape, t):
    """What the envelope of ``NOTES`` is, by hand: one gate from 0.01 to 0.3 s, one from 0.45 to 0.47 s."""

    def level(begin, end, lasts, since):
        return envelope_level(shape, begin, end, lasts, t - since)

    before = envelope_level(shape, 0.55, 0.0, 0.2, 0.15)
    peak = envelope_level(shape, before, 1.0, 0.05, 0.02)
    stages = [
        (0.01, level(0, 1, 0.05, 0.01)), (0.06, level(1, 0.55, 0.12, 0.06)), (0.3, level(0.55, 0, 0.2, 0.3)),
        (0.45, level(before, 1, 0.05, 0.45)), (0.47, level(peak, 0, 0.2, 0.47)),
    ]  # fmt: skip
    return next((value for since, value in reversed(stages) if t > since), 0.0)


@pytest.mark.parametrize("shape", ["linear", "rc"])
@pytest.mark.parametrize("settings", BY_RATE, ids=lambda s: s["law"])
def test_a_slewed_envelope_is_what_solve_ivp_makes_of_it(shape, settings):
    quick = {**settings, "rise": settings["rise"] / 5, "fall": settings["fall"]}
    preset = make_preset(envelope={**ENVELOPE, "shape": shape}, gain=quick)
    unslewed, slewed = gain_courses(preset, gate_changes(preset, make_phrase(*NOTES)))
    times = np.linspace(0.0, 1.0, 101)
    assert unslewed.at(times) == pytest.approx([expected_envelope(shape, t) for t in times], abs=1e-12)
    # Where the output meets the envelope the equation has a kink that a solver must not step over.
    kinks = np.unique([0.0, 0.01, 0.06, 0.18, 0.3, 0.45, 0.47, 1.0, *slewed.starts_s])
    kinks = kinks[np.append(True, np.diff(kinks) > 1e-7) & (kinks <= 1.0)]
    y, solved = 0.0, []
    for begin, end in pairwise(kinks):
        wanted = [t for t in times if begin < t <= end]
        found = solved_stretch(
            lambda t, v: [printed_rate(quick, expected_envelope(shape, max(t, begin + 1e-12)), v[0])],  # noqa: B023
            begin, end, y, sorted({*wanted, end}),
        )  # fmt: skip
        solved += list(found.y[0][: len(wanted)])
        y = found.y[0][-1]
    assert np.abs(slewed.at(times[1:]) - solved).max() < WITHIN_LEVEL


@pytest.mark.parametrize("sample_rate", [22_050, 48_000])
def test_courses_are_what_the_voice_makes_samples_of(sample_rate):
    generator = np.random.default_rng(5)
    for seed in range(12 if LONG else 4):
        gain = {**BY_RATE[seed % 5], "rise": 0.02}
        preset = make_preset(
            pitch=[*BY_RATE, *TIMED][int(generator.integers(9))], gain=gain, amplifier={"velocity_db": 12.0},
            **({"envelope": ENVELOPE} if seed % 2 else {}),
        )  # fmt: skip
        phrase = random_phrase(2, seed)
        rendering = render(preset, phrase, sample_rate, trace=True, tail_s=1.0)
        times = np.arange(rendering.audio.size) / sample_rate
        pitch = pitch_course(slew_of(preset.pitch.slew), pitch_changes(preset, phrase))
        control = gain_courses(preset, gate_changes(preset, phrase))[1]
        assert np.abs(pitch.at(times) - rendering.pitch_volts).max() < WITHIN_VOLTS
        assert np.abs(control.at(times) - rendering.gain_control).max() < WITHIN_VOLTS


def test_a_slewed_envelopes_stretches_cover_the_time_each_in_one_direction():
    preset = make_preset(envelope={**ENVELOPE, "shape": "rc"}, gain={"law": "rc", "rise": 0.03, "fall": 0.04})
    course = gain_courses(preset, gate_changes(preset, make_phrase(*NOTES)))[1]
    stretches = list(course.stretches(0.0, 2.0))
    assert (stretches[0].begin_s, stretches[-1].end_s) == (0.0, 2.0)
    for before, stretch in pairwise(stretches):
        assert before.end_s == stretch.begin_s
        assert before.last == pytest.approx(stretch.first, abs=1e-9)  # nothing jumps here
    for stretch in stretches:
        values = course.at(stretch.moments(10)[1:-1])
        assert (np.sign(stretch.last - stretch.first) * np.diff(values) >= -1e-10).all()
        if stretch.moves:
            middle = 0.5 * (stretch.first + stretch.last)
            assert course.at([stretch.time_at(middle)])[0] == pytest.approx(middle, abs=1e-9)


def test_an_envelope_and_a_slew_that_are_immediate_jump():
    preset = make_preset(
        envelope={"attack": 0, "decay": 0, "sustain": 0.5, "release": 0},
        gain={"law": "linear", "rise": 0, "fall": 0},
    )
    _, slewed = gain_courses(preset, gate_changes(preset, make_phrase(("0.25", "0.5", 60))))
    assert slewed.at([0.25, 0.26, 0.5, 0.51]).tolist() == [0.0, 0.5, 0.5, 0.0]
    firsts = [(s.begin_s, s.first) for s in slewed.stretches(0.0, 1.0)]
    assert (0.5, 0.0) in [(round(t, 6), v) for t, v in firsts]
