"""Keys played by hand, against what `glidesmith.program` makes of the same keys in a phrase."""

import random
from fractions import Fraction

import pytest

from glidesmith.played import Keys, key_volts
from glidesmith.program import gate_changes, pitch_changes
from making import make_phrase, make_preset

RATE = 48_000
ENVELOPE = {"attack": 0.01, "decay": 0.1, "sustain": 0.5, "release": 0.1}


def random_keys(seed: int) -> list[tuple[Fraction, Fraction, int, float]]:
    """Keys pressed and released at moments of their own, none pressed while it is down."""
    draw = random.Random(seed)
    moments = [Fraction(moment, 7) for moment in draw.sample(range(400), 60)]
    rows: list[tuple[Fraction, Fraction, int, float]] = []
    for start, end in zip(moments[::2], moments[1::2], strict=True):
        begin, finish = min(start, end), max(start, end)
        note = draw.randint(40, 60)
        if all(number != note or finish < a or begin > b for a, b, number, _ in rows):
            rows.append((begin, finish, note, round(draw.random(), 3)))
    return sorted(rows)


def played(preset, rows):
    """What the keys make of the same edges, in order of time."""
    keys, found = Keys(), []
    edges = sorted(edge for a, b, note, how in rows for edge in ((a, True, note, how), (b, False, note, how)))
    for time, is_press, note, velocity in edges:
        made = keys.press(preset, RATE, note, velocity) if is_press else keys.release(preset, RATE, note)
        if made:
            found.append((time, made))
    return found


@pytest.mark.parametrize("glide", ["always", "overlap", "never"])
@pytest.mark.parametrize("retrigger", [True, False])
@pytest.mark.parametrize("seed", range(5))
def test_played_keys_make_what_a_phrase_of_them_makes(glide, retrigger, seed):
    preset = make_preset(
        pitch={"glide": glide}, envelope={**ENVELOPE, "retrigger": retrigger}, amplifier={"velocity_db": 24.0}
    )
    rows = random_keys(seed)
    found = played(preset, rows)
    phrase = make_phrase(*rows)
    gates = gate_changes(preset, phrase)
    assert [time for time, _ in found] == [change.time for change in gates]
    for (_, made), gate in zip(found, gates, strict=True):
        if gate.level == 0.0:
            assert made is True
        else:
            assert made.level == gate.level
            assert made.trigger == gate.trigger
    targets = {change.time: change for change in pitch_changes(preset, phrase)}
    for time, made in found:
        if made is not True and time in targets:
            assert made.volts == targets[time].held_volts
            assert made.jump == targets[time].jump


def test_a_key_that_is_down_does_not_go_down_again_nor_one_that_is_up():
    keys, preset = Keys(), make_preset()
    assert keys.press(preset, RATE, 60, 1.0) is not None
    assert keys.press(preset, RATE, 60, 1.0) is None
    assert keys.release(preset, RATE, 61) is False
    assert keys.release(preset, RATE, 60) is True
    assert keys.release(preset, RATE, 60) is False


def test_releasing_an_earlier_key_changes_nothing():
    keys, preset = Keys(), make_preset()
    keys.press(preset, RATE, 60, 1.0)
    keys.press(preset, RATE, 64, 1.0)
    assert keys.release(preset, RATE, 60) is False
    assert keys.release(preset, RATE, 64) is True


def test_the_first_key_is_there_at_once_and_after_a_phrase_it_glides():
    keys, preset = Keys(), make_preset()
    first = keys.press(preset, RATE, 60, 1.0)
    assert first
    assert first.jump
    keys.let_go(sounded=False)
    again = keys.press(preset, RATE, 60, 1.0)
    assert again
    assert again.jump
    keys.let_go(sounded=True)
    after = keys.press(preset, RATE, 60, 1.0)
    assert after
    assert not after.jump


def test_held_keys_are_forgotten_when_the_phrase_plays():
    keys, preset = Keys(), make_preset()
    keys.press(preset, RATE, 60, 1.0)
    assert keys.volts(preset) == 0.0
    keys.let_go(sounded=True)
    assert keys.volts(preset) is None
    assert keys.release(preset, RATE, 60) is False


def test_a_key_goes_through_the_converter_and_waits_for_its_tick():
    preset = make_preset(converter={"bits": 4, "span_volts": 16.0, "rate_hz": 50.0})
    assert key_volts(preset, 66) == 1.0  # half a volt, to the nearest of whole volts, ties up
    sounding = Keys().press(preset, RATE, 66, 1.0)
    assert sounding
    assert sounding.tick_samples == 960.0


def test_a_held_key_has_its_own_voltage_in_another_slot():
    keys = Keys()
    keys.press(make_preset(), RATE, 72, 1.0)
    assert keys.volts(make_preset(tuning={"zero_volts": "C5"})) == 0.0
