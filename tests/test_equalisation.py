"""Equal durations: the reference glide takes as long under every law, by the laws as DESIGN prints them.

The durations are found anew here, by root-finding on the printed laws (`scipy.optimize.brentq`); tolerance
1 µs.
"""

import math
from fractions import Fraction

import pytest
from scipy.optimize import brentq

from glidesmith import SettingError, measure
from glidesmith.candidates import axes_from_values, varied_candidates
from glidesmith.equalisation import (
    Equality,
    equalised,
    equality,
    median_note,
    reference_time,
    remaining_differences,
)
from laws import printed_volts
from making import make_phrase, make_preset

AGREE_S = 1e-6
LAWS = ("linear", "rc", "log", "exp", "soft", "curve", "cosine")
SHAPES = {
    "linear": [{}, {"timing": "fixed"}],
    "rc": [{}],
    "log": [{}, {"bend": 3.0}],
    "exp": [{}, {"bend": 0.3}],
    "soft": [{}, {"knee": 0.02}],
    "curve": [{"curvature": 4.0}, {"curvature": -3.0, "timing": "rate"}],
    "cosine": [{}, {"timing": "rate"}],
}


def table(preset):
    slew = preset.pitch.slew
    return {
        "law": slew.law,
        "rise": slew.rise,
        "fall": slew.fall,
        "timing": slew.timing,
        "bend": slew.bend,
        "knee": slew.knee,
        "curvature": slew.curvature,
    }


def found_time(preset, mode, origin, target, cents=5.0):
    """The duration of a glide between two voltages, from the printed law alone."""
    volts = printed_volts(table(preset), origin, target)
    way = target - origin

    def when(level):
        return brentq(lambda t: (float(volts(t)) - level) * way, 0.0, 1000.0, xtol=1e-13, rtol=1e-14)

    if mode == "midpoint":
        return when(origin + 0.5 * way)
    if mode == "rise":
        return when(origin + 0.9 * way) - when(origin + 0.1 * way)
    return when(target - math.copysign(cents / 1200.0, way))


def every_law(base):
    for law in LAWS:
        for shape in SHAPES[law]:
            yield base.changed({"pitch.law": law, **{f"pitch.{key}": value for key, value in shape.items()}})


def under_each_law(base):
    presets = list(every_law(base))
    return varied_candidates(presets, axes_from_values({}), 16)


@pytest.mark.parametrize("mode", ["landing", "midpoint", "rise"])
@pytest.mark.parametrize(("note", "interval"), [(60, 12.0), (43, 7.0), (81, 19.0), (57, 0.5)])
def test_the_reference_glide_takes_as_long_under_every_law(mode, note, interval):
    base = make_preset(pitch={"law": "rc", "rise": 0.06, "fall": 0.11})
    equal = Equality(mode, interval, note)
    low, high = (note - 60) / 12.0, (note + interval - 60) / 12.0
    wanted = found_time(base, mode, low, high), found_time(base, mode, high, low)
    assert wanted[0] != pytest.approx(wanted[1], rel=0.1), "up and down are apart"
    for candidate in equalised(base, under_each_law(base), equal):
        up = found_time(candidate.preset, mode, low, high)
        down = found_time(candidate.preset, mode, high, low)
        assert abs(up - wanted[0]) < AGREE_S, candidate.label
        assert abs(down - wanted[1]) < AGREE_S, candidate.label


def test_what_is_measured_agrees():
    """The facts of a phrase that makes the reference glide say the same."""
    base = make_preset(pitch={"rise": 0.08, "fall": 0.05}, tuning={"zero_volts": "A3"})
    phrase = make_phrase((0, 20, 50), (20, 40, 57), (40, 60, 50))
    wanted = [glide.landing_s for glide in measure(base, phrase).glides]
    for candidate in equalised(base, under_each_law(base), Equality("landing", 7.0, 50)):
        landed = [glide.landing_s for glide in measure(candidate.preset, phrase).glides]
        assert landed == pytest.approx(wanted, abs=AGREE_S)


def test_the_preset_itself_keeps_its_times_to_the_last_bit():
    base = make_preset(pitch={"rise": 0.0611, "fall": 0.0937})
    candidates = varied_candidates([base], axes_from_values({"pitch.law": ["rc", "exp"]}), 16)
    same, other = equalised(base, candidates, Equality("landing", 12.0, 60))
    assert same.preset == base
    assert (other.preset.pitch.slew.rise, other.preset.pitch.slew.fall) != (0.0611, 0.0937)


def test_nothing_changes_without_being_asked():
    base = make_preset()
    candidates = varied_candidates([base], axes_from_values({"pitch.law": ["rc", "exp"]}), 16)
    assert equalised(base, candidates, Equality()) == candidates


def test_landing_is_of_the_pitch_as_heard():
    """With steps of a semitone and an error of 4 cents an octave: a landing is the last step that counts."""
    base = make_preset(pitch={"law": "linear", "rise": 0.2, "fall": 0.2})
    stepped = base.changed(
        {"pitch.steps_per_octave": 12, "tuning.scale_error_cents_per_octave": 4.0, "converter.bits": 12}
    )
    equal = Equality("landing", 7.0, 60)
    # The step to G4 is taken half a semitone before it; the converter puts G4 on the nearest of 4096 steps.
    held = round(7.0 / 12.0 / (10.0 / 4096)) * 10.0 / 4096
    assert reference_time(stepped, equal, "rise") == pytest.approx(0.2 * 6.5 / 12.0, abs=1e-9)
    assert reference_time(base, equal, "rise") == pytest.approx(0.2 * 6.95 / 12.0, abs=1e-9)
    assert reference_time(stepped, Equality("midpoint", 7.0, 60), "rise") == pytest.approx(
        0.2 * held / 2, abs=1e-9
    )


@pytest.mark.parametrize(("interval", "note"), [(12, "G9"), (None, "G#8"), (67.5, "C4"), (120, "G0")])
def test_a_reference_glide_ends_on_a_note_that_there_is(interval, note):
    with pytest.raises(SettingError) as caught:
        equality("landing", interval, note, make_phrase((0, 1, 60)), 5.0)
    (line,) = caught.value.lines
    assert "above G9, the highest note" in line
    assert equality("landing", 12, "G8", make_phrase((0, 1, 60)), 5.0).notes("rise") == (115.0, 127.0)


def test_the_note_defaults_to_the_median_and_the_interval_to_an_octave():
    phrase = make_phrase((0, 1, 50), (1, 2, 57), (2, 3, 62), (3, 4, 51), (4, 5, 53), (5, 6, 74))
    assert median_note(phrase) == 53
    assert equality("landing", None, None, phrase, 5.0) == Equality("landing", 12.0, 53)
    assert equality("rise", 7, "D3", phrase, 5.0) == Equality("rise", 7.0, 50)
    assert equality("settings", None, None, phrase, 5.0).as_dict() == {
        "mode": "settings",
        "interval_semitones": None,
        "from": None,
    }


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("loudness", None, None), "settings, landing, midpoint, rise"),
        (("landing", 0.05, None), "within the tolerance of 5 cents"),
        (("midpoint", 0.0, None), "over 0"),
        (("landing", -7, None), "over 0"),
        (("landing", math.nan, None), "over 0"),
        (("landing", True, None), "over 0"),
        (("landing", "7", None), "over 0"),
        (("landing", 7, "H3"), "H3"),
        (("settings", 7, None), "--equal landing"),
        (("settings", None, "D3"), "--equal landing"),
    ],
)
def test_what_can_not_be_meant_is_refused(arguments, words):
    with pytest.raises(SettingError) as caught:
        equality(*arguments, make_phrase((0, 1, 60)), 5.0)
    (line,) = caught.value.lines
    assert words in line


@pytest.mark.parametrize("key", ["pitch.rise", "pitch.fall"])
def test_the_time_that_is_made_equal_can_not_be_varied(key):
    with pytest.raises(SettingError, match=key):
        equality("landing", None, None, make_phrase((0, 1, 60)), 5.0, ["pitch.law", key])


@pytest.mark.parametrize(
    ("changes", "equal", "words"),
    [
        ({"pitch.rise": 0.0}, Equality("landing", 12.0, 60), "pitch.rise is 0: the pitch jumps"),
        ({"pitch.fall": 0.0}, Equality("rise", 12.0, 60), "pitch.fall is 0: the pitch jumps"),
        ({"converter.bits": 4}, Equality("landing", 12.0, 60), "never lands"),
        ({"converter.bits": 4}, Equality("midpoint", 1.0, 61), "the same step for both ends"),
        ({"pitch.steps_per_octave": 5}, Equality("landing", 7.0, 60), "never lands"),
        ({"tuning.scale_error_cents_per_octave": 20.0}, Equality("landing", 12.0, 60), "never lands"),
        ({"pitch.law": "log", "pitch.bend": 10.0}, Equality("rise", 60.0, 60), "outside 0 or 1 µs to 60 s"),
        ({"pitch.law": "exp", "pitch.bend": 10.0}, Equality("rise", 60.0, 0), "outside 0 or 1 µs to 60 s"),
        ({"pitch.law": "exp", "pitch.bend": 10.0}, Equality("rise", 60.0, 67), "outside 0 or 1 µs to 60 s"),
    ],
)
def test_a_candidate_whose_time_can_not_be_made_equal_is_named_with_the_reason(changes, equal, words):
    base = make_preset()
    candidates = varied_candidates([base, base.changed(changes)], axes_from_values({}), 16)
    with pytest.raises(SettingError) as caught:
        equalised(base, candidates, equal)
    for line in caught.value.lines:
        assert line.startswith('candidate "')
        assert f"can't have an equal {equal.mode}" in line
    assert any(words in line for line in caught.value.lines)


def test_a_preset_that_jumps_has_nothing_to_make_equal():
    base = make_preset(pitch={"rise": 0.0})
    candidates = varied_candidates([base], axes_from_values({"pitch.law": ["rc", "exp"]}), 16)
    with pytest.raises(SettingError, match=r"the preset has no landing to make equal: pitch\.rise is 0"):
        equalised(base, candidates, Equality("landing", 12.0, 60))


def test_a_coarse_step_in_tune_from_its_start_has_no_landing():
    stepped = make_preset(pitch={"steps_per_octave": 1})
    with pytest.raises(SettingError, match="in tune from its start"):
        reference_time(stepped, Equality("landing", 2.0, 59), "rise", tolerance_cents=150.0)


PHRASE = make_phrase(
    (0, 3, 60), (3, 6, 72), (6, 9, 60), (9, 12, 67), (12, 15, 60), (15, Fraction("15.27"), 67)
)


def test_what_still_differs_is_listed_and_what_is_equal_is_not():
    base = make_preset()
    (exp,) = equalised(
        base,
        varied_candidates([base], axes_from_values({"pitch.law": ["exp", "log"]}), 16)[:1],
        Equality("landing", 12.0, 60),
    )
    facts = measure(exp.preset, PHRASE), measure(base, PHRASE)
    lines = remaining_differences(*facts, "landing")
    assert [line.partition(":")[0] for line in lines] == ["C4 to G4 (+7, 2 times)", "G4 to C4 (-7)"]
    # By the printed laws: T such that an octave up lands as soon as under rc, then seven semitones.
    volts = 1.0 - 5.0 / 1200.0
    time = 0.06 * math.log(1200.0 / 5.0) / -math.expm1(-volts)
    lands = time * -math.expm1(-(7.0 / 12.0 - 5.0 / 1200.0))
    assert f"lands after {1000.0 * lands:.4g} ms, " in lines[0]
    assert f"the preset after {60.0 * math.log(700.0 / 5.0):.4g} ms or never" in lines[0]
    assert remaining_differences(facts[1], facts[1], "landing") == []
    assert remaining_differences(*facts, "settings") == []
    assert remaining_differences(*facts, "rise") != []


def test_the_largest_difference_comes_first():
    base = make_preset(pitch={"law": "linear", "rise": 0.1, "fall": 0.1})
    other = base.changed({"pitch.timing": "fixed"})
    phrase = make_phrase((0, 3, 60), (3, 6, 62), (6, 9, 74), (9, 12, 79))
    lines = remaining_differences(measure(other, phrase), measure(base, phrase), "midpoint")
    assert [line.partition(" (")[0] for line in lines] == ["C4 to D4", "D5 to G5"]
    assert "is half-way after 50 ms, the preset after 8.333 ms" in lines[0]
