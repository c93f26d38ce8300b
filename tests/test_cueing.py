"""What the deck is told.

Snapshots only where something is to be heard of them, and in place where it can be.
"""

import pytest

from glidesmith.commands import Match, Note, Panic, Play, Release, Stop, Swap
from glidesmith.console import Console
from glidesmith.cueing import Cues
from glidesmith.moves import make_move
from glidesmith.slotting import filled_slot
from making import make_phrase, make_preset

PHRASE = make_phrase(("0", "1/2", 60), ("1/2", "1", 67))
ENVELOPE = {"attack": 0.01, "decay": 0.1, "sustain": 0.5, "release": 0.1}


@pytest.fixture
def desk() -> Console:
    presets = [make_preset(), make_preset(oscillator={"wave": "sine"}), make_preset(envelope=ENVELOPE)]
    return Console([filled_slot(preset, PHRASE, "") for preset in presets])


@pytest.fixture
def cues(desk) -> Cues:
    cues = Cues(48_000)
    assert isinstance(cues.next(desk), Swap)
    return cues


def do(desk: Console, kind: str, **values) -> None:
    desk.apply(make_move(kind, **values))


def test_nothing_is_told_twice(desk, cues):
    assert cues.next(desk) is None
    do(desk, "set", slot=1, key="title", value="Another")
    do(desk, "set", slot=2, key="pitch.rise", value=1.0)
    do(desk, "match_gain", slot=2, gain_db=-3.0)
    assert cues.next(desk) is None


@pytest.mark.parametrize(
    ("key", "value", "smooth"),
    [
        ("pitch.rise", 0.5, True),
        ("pitch.law", "cosine", True),
        ("pitch.knee", 0.5, True),
        ("gain.fall", 0.5, True),
        ("pitch.glide", "never", False),
        ("pitch.steps_per_octave", 12, False),
        ("oscillator.level_db", -20.0, False),
        ("amplifier.law", "decibel", False),
        ("tuning.a4_hz", 442.0, False),
        ("converter", True, False),
        ("drone", True, False),
        ("envelope", True, False),
    ],
)
def test_only_slews_go_on_in_place(desk, cues, key, value, smooth):
    do(desk, "set", slot=1, key=key, value=value)
    command = cues.next(desk)
    assert isinstance(command, Swap)
    assert command.smooth is smooth
    assert command.when == "now"
    assert command.snapshot.slot == 1
    assert cues.next(desk) is None


def test_envelope_times_go_on_in_place(desk, cues):
    do(desk, "select", slot=3, when="now")
    cues.next(desk)
    do(desk, "set", slot=3, key="envelope.decay", value=0.4)
    command = cues.next(desk)
    assert isinstance(command, Swap)
    assert command.smooth


@pytest.mark.parametrize(
    ("kind", "values"),
    [
        ("tempo", {"percent": 90}),
        ("transpose", {"semitones": 2}),
        ("loop", {"on": False}),
        ("phrase", {"phrase": make_phrase(("0", "1", 50))}),
    ],
)
def test_what_moves_the_phrase_is_cross_faded(desk, cues, kind, values):
    do(desk, kind, **values)
    command = cues.next(desk)
    assert isinstance(command, Swap)
    assert not command.smooth


def test_a_gain_alone_needs_no_snapshot(desk, cues):
    do(desk, "match_gain", slot=1, gain_db=-6.0)
    assert cues.next(desk) == Match(1, -6.0)
    do(desk, "match", on=False)
    assert cues.next(desk) == Match(1, 0.0)
    do(desk, "set", slot=1, key="pitch.rise", value=0.2)
    do(desk, "match", on=True)
    command = cues.next(desk)
    assert isinstance(command, Swap)
    assert command.snapshot.gain_db == -6.0


def test_another_gain_comes_with_a_cross_fade(desk, cues):
    """What goes on in place has its gain approached slowly: a far quieter slot would begin too loud."""
    do(desk, "copy", source=1, slot=2)
    do(desk, "set", slot=2, key="pitch.rise", value=0.2)
    do(desk, "select", slot=2, when="now")
    same = cues.next(desk)
    assert isinstance(same, Swap)
    assert same.smooth
    do(desk, "match_gain", slot=1, gain_db=-12.0)
    for when in ("now", "loop"):
        do(desk, "select", slot=2, when="now")
        cues.next(desk)
        do(desk, "select", slot=1, when=when)
        other = cues.next(desk)
        assert isinstance(other, Swap)
        assert (other.when, other.smooth, other.snapshot.gain_db) == (when, False, -12.0)


def test_a_slot_that_waits_is_told_again_after_the_one_that_sounds(desk, cues):
    do(desk, "select", slot=2, when="loop")
    command = cues.next(desk)
    assert isinstance(command, Swap)
    assert (command.when, command.snapshot.slot) == ("loop", 2)
    assert cues.next(desk) is None
    do(desk, "set", slot=1, key="pitch.rise", value=0.2)
    told = [cues.next(desk), cues.next(desk), cues.next(desk)]
    assert [(c.when, c.snapshot.slot) for c in told if isinstance(c, Swap)] == [("now", 1), ("loop", 2)]
    assert told[2] is None


def test_a_slot_that_no_longer_waits_is_called_off(desk, cues):
    do(desk, "select", slot=2, when="loop")
    cues.next(desk)
    do(desk, "select", slot=1, when="now")
    command = cues.next(desk)
    assert isinstance(command, Swap)
    assert (command.when, command.snapshot.slot) == ("now", 1)
    assert cues.next(desk) is None


def test_a_slot_that_has_arrived_is_not_told_again(desk, cues):
    do(desk, "select", slot=2, when="loop")
    cues.next(desk)
    do(desk, "arrive", slot=2)
    cues.arrive()
    assert cues.next(desk) is None


def test_transport_and_keys_are_told_at_once(desk, cues):
    def told(kind: str, **values):
        return cues.at_once(make_move(kind, **values))

    assert [told(kind) for kind in ("play", "stop", "panic")] == [Play(), Stop(), Panic()]
    note = told("key_down", note=72, velocity=1.0)
    assert isinstance(note, Note)
    assert (note.volts, note.jump) == (1.0, True)
    assert told("key_down", note=72, velocity=1.0) is None
    do(desk, "select", slot=3, when="now")
    command = cues.next(desk)
    assert isinstance(command, Swap)
    assert command.keyed_volts == 1.0
    assert told("key_up", note=72) == Release()
