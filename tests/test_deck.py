"""The live deck against the renderer, against closed forms, and against itself in other blocks."""

import math
import random
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from glidesmith.commands import Level, Match, Note, Panic, Play, Release, Stop, Swap
from glidesmith.deck import COMMANDS_HELD, HEARD_SAMPLES, Deck, DeckFullError
from glidesmith.errors import SettingError
from glidesmith.listening import FAINT
from glidesmith.phrase import Note as PhraseNote
from glidesmith.phrase import Phrase
from glidesmith.rendering import render
from glidesmith.snapshot import moved_phrase, snapshot_of
from making import make_phrase, make_preset

RATE = 48_000
FADE = 480


def preset(level_db=-12.0, oscillator=None, pitch=None, **tables):
    """`make_preset`, with slew settings of the pitch said without their table."""
    slew = {key: tables.pop(key) for key in ("law", "rise", "fall") if key in tables}
    return make_preset(
        oscillator={"level_db": level_db, **(oscillator or {})}, pitch={**slew, **(pitch or {})}, **tables
    )


def phrase(*rows, tempo):
    """Notes of (beat, beats, number) at a tempo."""
    beat = Fraction(60, tempo)
    notes = [
        (Fraction(str(at)) * beat, Fraction(str(at + lasts)) * beat, number) for at, lasts, number in rows
    ]
    return replace(make_phrase(*notes), tempo_bpm=float(tempo))


def slowed(settings, gain):
    return settings.changed({f"gain.{key}": value for key, value in gain.items()})


LINE = phrase((0, 1, 50), (0.8, 0.7, 57), (2, 1, 52), tempo=120)
"""Overlapping and separate notes, 1.5 s, and so long is a round of it: three beats."""

PRESETS = {
    "rc": preset(),
    "linear": preset(law="linear", rise=0.3, fall=0.2),
    "cosine": preset(law="cosine", rise=0.11, fall=0.23),
    "soft": preset(law="soft", rise=0.5, fall=0.3),
    "overlap": preset(pitch={"glide": "overlap"}),
    "never": preset(pitch={"glide": "never"}),
    "steps": preset(law="log", rise=0.2, fall=0.2, pitch={"steps_per_octave": 12}),
    "envelope": preset(envelope={"attack": 0.05, "decay": 0.2, "sustain": 0.6, "release": 0.3}),
    "retrigger": preset(
        envelope={
            "attack": 0.3, "decay": 0.2, "sustain": 0.6, "release": 0.9, "shape": "rc", "retrigger": True
        },
    ),
    "decibel": preset(amplifier={"law": "decibel", "range_db": 60.0, "velocity_db": 12.0}),
    "drone": preset(drone={"note": "D2", "level_db": -30.0}),
    "converter": preset(converter={"bits": 8, "span_volts": 10.0}),
    "error": preset(tuning={"scale_error_cents_per_octave": 7.0}),
    "gate": preset(gain={"rise": 0.0, "fall": 0.0}),
    "cut": preset(gain={"rise": 0.01, "fall": 0.0}),
    "stopped": preset(envelope={"attack": 0.02, "decay": 0.1, "sustain": 0.6, "release": 0.0}),
    "pulse": preset(oscillator={"wave": "pulse", "width": 0.3}),
}  # fmt: skip


def plain_deck(**options):
    """A deck whose listening stage changes nothing."""
    return Deck(RATE, **{"level_db": 0.0, "fade": False, "ceiling_db": -1.0, **options})


def played(deck, count, block=509):
    """The next ``count`` samples, asked for in blocks of one size or of those that a function gives."""
    out = np.zeros(count, np.float32)
    at = 0
    while at < count:
        size = block if isinstance(block, int) else block()
        deck.play(out[at : at + size])
        at += size
    return out


def started(settings, notes=LINE, deck=None, **options):
    deck = deck or plain_deck()
    deck.send(Swap(snapshot_of(settings, notes, RATE, **options)))
    deck.send(Play())
    return deck


def unrolled(notes, rounds, length):
    """The phrase several times over, each ``length`` samples after the one before."""
    later = tuple(
        PhraseNote(
            n.start + Fraction(r * length, RATE), n.end + Fraction(r * length, RATE), n.number, n.velocity
        )
        for r in range(rounds)
        for n in notes.notes
    )
    return Phrase("", later, tempo_bpm=notes.tempo_bpm)


class TestSameChain:
    @pytest.mark.parametrize("name", PRESETS)
    def test_one_round_is_the_render_to_the_bit(self, name):
        expected = render(PRESETS[name], LINE, RATE).audio
        deck = started(PRESETS[name], loop=False)
        np.testing.assert_array_equal(played(deck, expected.size), expected)
        assert not played(deck, 1000).any()
        assert deck.state().mode == "stopped"

    @pytest.mark.parametrize("name", PRESETS)
    def test_a_loop_is_the_render_of_the_phrase_written_out(self, name):
        length = snapshot_of(PRESETS[name], LINE, RATE).loop_samples
        assert length == 1.5 * RATE
        expected = render(PRESETS[name], unrolled(LINE, 4, length), RATE).audio[: 3 * length]
        np.testing.assert_array_equal(played(started(PRESETS[name]), 3 * length), expected)

    @pytest.mark.parametrize("block", [1, 7, 64, 509, 4096])
    def test_any_block_size_gives_the_same(self, block):
        count = 80_000 if block > 1 else 20_000
        expected = played(started(PRESETS["retrigger"]), count, 512)
        np.testing.assert_array_equal(played(started(PRESETS["retrigger"]), count, block), expected)

    def test_deeper_tables_for_played_keys_change_no_bit_of_a_phrase(self):
        high = phrase((0, 1, 86), (1, 1, 93), tempo=120)
        for wave in ("saw", "triangle", "pulse"):
            settings = preset(oscillator={"wave": wave})
            expected = render(settings, high, RATE).audio
            np.testing.assert_array_equal(
                played(started(settings, high, loop=False), expected.size), expected
            )


def random_command(chance, presets):
    kind = chance.choice(
        ["swap"] * 8 + ["note"] * 3 + ["release", "play", "play", "stop", "level", "match", "panic"]
    )
    if kind == "swap":
        settings = chance.choice(presets)
        snapshot = snapshot_of(
            settings,
            LINE,
            RATE,
            tempo=Fraction(chance.choice([50, 100, 100, 137]), 100),
            transpose=chance.choice([0, 0, 5, -7]),
            loop=chance.random() < 0.8,
            slot=chance.randrange(8),
            gain_db=chance.choice([0.0, -6.0, 3.0]),
        )
        volts = chance.choice([math.nan, 0.25])
        return Swap(snapshot, chance.choice(["now", "loop"]), chance.random() < 0.5, volts)
    return {
        "note": Note(
            chance.uniform(-1, 1), chance.random() < 0.3, chance.random(), chance.random() < 0.5, 37.5
        ),
        "release": Release(),
        "play": Play(),
        "stop": Stop(),
        "level": Level(chance.uniform(-40, 0)),
        "match": Match(chance.randrange(8), chance.uniform(-12, 6)),
        "panic": Panic(),
    }[kind]


@pytest.mark.parametrize("seed", range(6))
def test_the_same_commands_at_the_same_samples_give_the_same_bits(seed):
    """What replay rests on: a session in random blocks, told again from the stamps in other blocks."""
    chance = random.Random(seed)
    presets = list(PRESETS.values())
    deck = Deck(RATE)
    deck.send(Swap(snapshot_of(presets[0], LINE, RATE)))
    commands, heard, stamps = [], [], []
    commands.append(Swap(snapshot_of(presets[0], LINE, RATE)))
    for _ in range(220):
        if chance.random() < 0.5:
            command = random_command(chance, presets)
            commands.append(command)
            deck.send(command)
        heard.append(played(deck, chance.choice([1, 17, 64, 300, 512, 1500, 2048]), 2048))
        stamps += deck.taken()
    played(deck, 2000)
    stamps += deck.taken()
    assert [number for number, _ in stamps] == list(range(len(commands)))
    first = np.concatenate(heard)
    assert np.isfinite(first).all()
    assert np.abs(first).max() <= 10 ** (-6 / 20)
    assert np.abs(first).max() > 0.0

    again, parts, at = Deck(RATE), [], 0
    for number, stamp in stamps:
        parts.append(played(again, stamp - at, lambda: chance.choice([1, 64, 333, 1024])))
        at = stamp
        again.send(commands[number])
    np.testing.assert_array_equal(np.concatenate(parts)[: first.size], first[:at])
    again_rest = played(again, first.size - at) if first.size > at else np.zeros(0, np.float32)
    np.testing.assert_array_equal(again_rest, first[at:])


class TestSwapping:
    @pytest.mark.parametrize("name", ["rc", "cosine", "envelope", "retrigger", "steps", "drone"])
    @pytest.mark.parametrize("at", [100, 38_500, 39_000, 50_000, 80_000])
    def test_to_the_same_settings_changes_no_bit(self, name, at):
        expected = played(started(PRESETS[name]), 100_000)
        for smooth in (True, False):
            deck = started(PRESETS[name])
            first = played(deck, at)
            deck.send(Swap(snapshot_of(PRESETS[name], LINE, RATE), smooth=smooth))
            got = np.concatenate([first, played(deck, 100_000 - at)])
            # While two equal signals are blended, the weights' sum may round.
            tolerance = 0.0 if smooth else 2e-7
            np.testing.assert_allclose(got, expected, rtol=0, atol=tolerance)
            np.testing.assert_array_equal(got[at + FADE :], expected[at + FADE :])

    def test_new_times_take_the_glide_on_from_where_it_is(self):
        """rc: y' = (x - y)/T. From the swap on, y = x + (y0 - x) exp(-t/T) with the new T: 1e-12 V."""
        long, short = preset(rise=0.2, fall=0.2), preset(rise=0.05, fall=0.05)
        deck = started(long)
        at = 43_200  # 0.1 s into the glide to A3, which begins at 0.4 s
        played(deck, 19_200 + 4_800)
        cursor, _ = deck.rows(0)
        deck.send(Swap(snapshot_of(short, LINE, RATE), smooth=True))
        played(deck, 4_800)
        _, rows = deck.rows(cursor)
        at = 24_000
        origin, target = -10 / 12, -3 / 12
        there = target + (origin - target) * math.exp(-0.1 / 0.2)
        times = (rows["sample"] - at) / RATE
        np.testing.assert_allclose(
            rows["pitch_volts"], target + (there - target) * np.exp(-times / 0.05), rtol=0, atol=1e-12
        )

    def test_a_timed_glide_keeps_the_share_of_its_time_that_was_left(self):
        """DESIGN: a timed glide keeps 1 - p of its new duration. Half of 0.2 s gone, half of 0.4 s to go."""
        deck = started(preset(law="cosine", rise=0.2, fall=0.2))
        played(deck, 19_200 + 4_800)
        cursor, _ = deck.rows(0)
        deck.send(Swap(snapshot_of(preset(law="cosine", rise=0.4, fall=0.4), LINE, RATE), smooth=True))
        played(deck, 12_000)
        _, rows = deck.rows(cursor)
        times = (rows["sample"] - 24_000) / RATE
        arrives = times[np.flatnonzero(rows["pitch_volts"] == rows["target_volts"])[0]]
        assert 0.2 <= arrives <= 0.2 + 1 / 250

    @pytest.mark.parametrize("glide", ["never", "overlap", "always"])
    def test_at_the_very_end_of_a_round_the_next_one_has_begun(self, glide):
        settings = preset(pitch={"glide": glide})
        deck = started(settings)
        played(deck, 72_000, 1_000)
        deck.send(Swap(snapshot_of(settings, LINE, RATE), smooth=True))
        expected = played(started(settings), 100_000)[72_000:]
        np.testing.assert_array_equal(played(deck, 28_000), expected)
        assert deck.state().round == 1

    def test_a_swap_for_the_loop_s_start_sent_at_it_comes_at_once(self):
        deck = started(PRESETS["rc"])
        played(deck, 72_000, 1_000)
        deck.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE, slot=5), when="loop"))
        played(deck, 1)
        assert (deck.state().sounding_slot, deck.state().waiting_slot) == (5, -1)

    def test_another_wave_is_blended_in_over_10_ms(self):
        """The two renders of the same pitch, blended by a raised cosine: to float32's rounding."""
        saw, pulse = preset(), preset(oscillator={"wave": "pulse", "width": 0.2})
        at = 30_000
        deck = started(saw)
        first = played(deck, at)
        deck.send(Swap(snapshot_of(pulse, LINE, RATE)))
        got = played(deck, 4_000)
        before = played(started(saw), at + 4_000)[at:]
        after = played(started(pulse), at + 4_000)[at:]
        weight = np.ones(4_000)
        weight[:FADE] = 0.5 - 0.5 * np.cos(np.pi * np.arange(FADE) / FADE)
        np.testing.assert_allclose(got, after * weight + before * (1 - weight), rtol=0, atol=1e-7)
        np.testing.assert_array_equal(first, played(started(saw), at))

    def test_at_the_loop_s_start(self):
        deck = started(preset(level_db=-20.0))
        played(deck, 10_000)
        deck.send(Swap(snapshot_of(preset(level_db=-14.0), LINE, RATE, slot=3), when="loop"))
        rest = played(deck, 72_000 - 10_000)
        np.testing.assert_array_equal(rest, played(started(preset(level_db=-20.0)), 72_000)[10_000:])
        assert (deck.state().waiting_slot, deck.state().sounding_slot) == (3, 0)
        played(deck, 1)
        assert (deck.state().slot, deck.state().waiting_slot) == (3, -1)
        got = played(deck, 30_000)
        expected = played(started(preset(level_db=-14.0)), 72_000 + 30_001)[72_001:]
        np.testing.assert_array_equal(got[FADE:], expected[FADE:])

    @pytest.mark.parametrize("pair", [("rc", "envelope"), ("envelope", "rc"), ("rc", "retrigger")])
    def test_pitch_and_control_are_continuous(self, pair):
        """From row to row, 4 ms, neither goes further than its slew could: rc of 60 ms over an octave at
        most, linear of 200 ms for the whole level.
        """
        slow = {"law": "linear", "rise": 0.2, "fall": 0.2}
        before, after = (slowed(PRESETS[name], slow) for name in pair)
        chance = random.Random(5)
        for at in [chance.randrange(1000, 70_000) for _ in range(12)]:
            deck = started(before)
            played(deck, at)
            deck.send(Swap(snapshot_of(after, LINE, RATE, transpose=chance.choice([0, 3]))))
            played(deck, 4_000)
            _, rows = deck.rows(0)
            assert np.abs(np.diff(rows["pitch_volts"])).max() <= 1 - math.exp(-0.004 / 0.06)
            assert np.abs(np.diff(rows["control"])).max() <= 0.02 + 1e-12

    @pytest.mark.parametrize("at", [21_000, 30_000])
    def test_another_tuning_is_continuous_in_pitch_though_not_in_volts(self, at):
        """0 V on C5, not C4: every voltage is a volt lower, and nothing is to be heard, in a glide or out
        of one. The blend and the phase's last place may round.
        """
        deck = started(PRESETS["rc"])
        played(deck, at)
        deck.send(Swap(snapshot_of(preset(tuning={"zero_volts": "C5"}), LINE, RATE)))
        expected = played(started(PRESETS["rc"]), at + 20_000)[at:]
        np.testing.assert_allclose(played(deck, 20_000), expected, rtol=0, atol=1e-5)

    def test_a_higher_reference_is_glided_to(self):
        """A4 from 440 to 466.16 Hz while D3 is held: rc over a semitone, from the old pitch on; 1e-12 V."""
        deck = started(PRESETS["rc"])
        played(deck, 19_000 - 19_000 % 192)
        cursor, _ = deck.rows(0)
        deck.send(Swap(snapshot_of(preset(tuning={"a4_hz": 466.16}), LINE, RATE)))
        played(deck, 192)
        _, rows = deck.rows(cursor)
        assert rows["pitch_volts"][0] == pytest.approx(-10 / 12 - math.log2(466.16 / 440), abs=1e-12)
        assert rows["target_volts"][0] == pytest.approx(-10 / 12)

    def test_tempo_keeps_the_place_in_the_phrase(self):
        deck = started(PRESETS["rc"])
        played(deck, 24_000)
        deck.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE, tempo=Fraction(2))))
        played(deck, 1)
        assert deck.state().position == 12_001
        deck.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE, tempo=Fraction(1, 2))))
        played(deck, 999)  # the fade before goes first
        deck.play(np.zeros(1, np.float32))
        assert deck.state().position == (12_000 + 1_000) * 4 + 1 or deck.state().position > 48_000

    def test_loop_off_ends_as_the_render_does(self):
        deck = started(PRESETS["rc"])
        played(deck, 20_000)
        deck.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE, loop=False), smooth=True))
        expected = render(PRESETS["rc"], LINE, RATE).audio[20_000:]
        np.testing.assert_array_equal(played(deck, expected.size), expected)
        assert deck.state().mode == "phrase"
        played(deck, 1)
        assert deck.state().mode == "stopped"


class TestKeys:
    @pytest.mark.parametrize("name", ["rc", "envelope", "retrigger", "overlap", "cosine"])
    def test_played_keys_are_a_phrase_of_the_same_notes(self, name):
        """D3, A3 over it, then both up, at whole samples: the render of that phrase, to the bit."""
        settings = PRESETS[name]
        notes = Phrase(
            "",
            (
                PhraseNote(Fraction(0), Fraction(30_000, RATE), 50),
                PhraseNote(Fraction(12_345, RATE), Fraction(40_001, RATE), 57),
            ),
        )
        expected = render(settings, notes, RATE).audio
        trigger = name == "retrigger"
        deck = plain_deck()
        deck.send(Swap(snapshot_of(settings, LINE, RATE)))
        deck.send(Note(-10 / 12, False, 1.0, True))
        parts = [played(deck, 12_345)]
        deck.send(Note(-3 / 12, settings.pitch.glide == "never", 1.0, trigger))
        parts.append(played(deck, 40_001 - 12_345))
        deck.send(Release())
        parts.append(played(deck, expected.size - 40_001))
        np.testing.assert_array_equal(np.concatenate(parts), expected)

    def test_a_key_takes_over_from_the_phrase_where_the_pitch_is(self):
        deck = started(PRESETS["rc"])
        played(deck, 21_000)
        deck.send(Note(0.5, False, 1.0, True))
        played(deck, 4_000)
        assert deck.state().mode == "keys"
        _, rows = deck.rows(0)
        assert np.abs(np.diff(rows["pitch_volts"])).max() < 0.2
        assert rows["target_volts"][-1] == 0.5
        played(deck, 200_000)
        assert deck.state().mode == "keys"

    def test_a_converter_s_ticks_hold_a_played_pitch(self):
        settings = preset(converter={"bits": 12, "span_volts": 10.0, "rate_hz": 100.0})
        deck = plain_deck()
        deck.send(Swap(snapshot_of(settings, LINE, RATE)))
        deck.send(Note(0.0, False, 1.0, True, RATE / 100))
        played(deck, 1_000)
        deck.send(Note(0.5, False, 1.0, True, RATE / 100))
        played(deck, 2_000)
        _, rows = deck.rows(0)
        moved = rows["sample"][np.flatnonzero(rows["pitch_volts"] > 0.0)[0]]
        assert 1_440 < moved <= 1_440 + 192

    def test_settings_change_under_a_held_key(self):
        deck = plain_deck()
        deck.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE)))
        deck.send(Note(0.0, False, 1.0, True))
        played(deck, 5_000)
        deck.send(Swap(snapshot_of(PRESETS["envelope"], LINE, RATE), keyed_volts=0.25))
        played(deck, 48_000)
        _, rows = deck.rows(0)
        assert rows["pitch_volts"][-1] == pytest.approx(0.25)
        assert rows["gate"][-1] == pytest.approx(0.6)
        assert np.abs(np.diff(rows["pitch_volts"][1:])).max() < 0.02

    @pytest.mark.parametrize("shape", ["linear", "rc"])
    def test_moving_an_envelope_does_not_strike_a_held_key_again(self, shape):
        """Sustain from 0.6 to 0.5 and back while a key is held: the control stays between them."""
        held = PRESETS["envelope"].changed({"envelope.shape": shape})
        deck = plain_deck()
        deck.send(Swap(snapshot_of(held, LINE, RATE)))
        deck.send(Note(0.0, False, 1.0, True))
        played(deck, 48_000)
        cursor, _ = deck.rows(0)
        for sustain in (0.5, 0.6, 0.55, 0.6):
            after = held.changed({"envelope.sustain": sustain, "envelope.shape": shape})
            deck.send(Swap(snapshot_of(after, LINE, RATE), smooth=True))
            played(deck, 2_400)
        _, rows = deck.rows(cursor)
        assert rows["control"].min() > 0.49
        assert rows["control"].max() < 0.61
        deck.send(Release())
        played(deck, 48_000)
        assert deck.rows(0)[1]["control"][-1] == 0.0

    def test_a_pitch_that_waits_for_a_tick_is_carried_into_another_tuning(self):
        converter = {"bits": 16, "span_volts": 20.0, "rate_hz": 10.0}
        low, high = (preset(converter=converter, tuning={"zero_volts": name}) for name in ("C4", "C5"))
        deck = plain_deck()
        deck.send(Swap(snapshot_of(low, LINE, RATE)))
        deck.send(Note(0.0, False, 1.0, True, RATE / 10))
        played(deck, 6_000)
        deck.send(Note(0.5, False, 1.0, False, RATE / 10))
        played(deck, 500)
        deck.send(Swap(snapshot_of(high, LINE, RATE), keyed_volts=-0.5))
        played(deck, 2_000)
        assert deck.rows(0)[1]["pitch_volts"][-1] == pytest.approx(-1.0)
        played(deck, 48_000)
        assert deck.rows(0)[1]["pitch_volts"][-1] == pytest.approx(-0.5)


class TestPanic:
    def test_it_waits_for_nothing(self):
        deck = started(PRESETS["rc"])
        played(deck, 30_000)
        for _ in range(20):
            deck.send(Play())
        deck.send(Level(-40.0))
        number = deck.send(Panic())
        got = played(deck, 3_000, 64)
        assert not got[96:].any()
        stamps = dict(deck.taken())
        assert stamps[number] == 30_000
        assert deck.state().mode == "stopped"
        played(deck, 48_000)
        assert deck.state().level_db == pytest.approx(-40.0)

    def test_what_is_sent_after_it_is_played_after_it(self):
        deck = started(PRESETS["rc"])
        played(deck, 30_000)
        deck.send(Panic())
        deck.send(Play())
        assert played(deck, 3_000, 64)[200:].any()
        assert deck.state().mode == "phrase"

    @pytest.mark.parametrize("gains_db", [(-60.0, -3.0), (-3.0, -60.0)])
    def test_in_the_midst_of_a_fade_it_makes_nothing_louder_and_no_click(self, gains_db):
        """Between two samples no more than the saw's own edge at the gain that is heard."""
        loud = [preset(level_db=max(gain, -60.0), oscillator={"wave": "sine"}) for gain in gains_db]
        deck = started(loud[0])
        played(deck, 30_000)
        deck.send(Swap(snapshot_of(loud[1], LINE, RATE)))
        before = played(deck, 240 if gains_db[0] > gains_db[1] else 8, 8)
        deck.send(Panic())
        got = np.concatenate([before, played(deck, 300, 4)])
        assert not got[before.size + 96 :].any()
        steepest = 0.71 * 2 * np.pi * 440 / RATE
        assert np.abs(np.diff(got)).max() < 1.3 * steepest
        if gains_db[0] < gains_db[1]:
            assert np.abs(got).max() < 0.05

    def test_just_after_a_stop(self):
        deck = started(PRESETS["rc"])
        played(deck, 30_000)
        deck.send(Stop())
        played(deck, 48)
        deck.send(Panic())
        assert not played(deck, 1_000)[96:].any()


class TestListening:
    def test_starts_30_db_down_and_fades_in(self):
        """6 dB in 50 ms from -70 dB on: 120 dB a second (the issue's own figures)."""
        deck = started(PRESETS["rc"], deck=Deck(RATE))
        got = played(deck, 40_000)
        chain = played(started(PRESETS["rc"]), 40_000)
        loud = np.abs(chain) > 0.01
        times = np.flatnonzero(loud) + 1
        gains = np.minimum(-70.0 + 120.0 * times / RATE, -30.0)
        np.testing.assert_allclose(got[loud], chain[loud] * 10 ** (gains / 20), rtol=2e-6)

    def test_a_raised_level_rises_by_6_db_in_50_ms(self):
        deck = started(PRESETS["rc"], deck=Deck(RATE, level_db=-30.0, fade=False, ceiling_db=-1.0))
        played(deck, 2_000)
        deck.send(Level(0.0))
        got = played(deck, 4_800)
        chain = played(started(PRESETS["rc"]), 6_800)[2_000:]
        gain = got[np.abs(chain) > 0.01] / chain[np.abs(chain) > 0.01]
        assert 20 * np.log10(gain[-1] / gain[0]) == pytest.approx(12.0, abs=0.05)
        assert gain.max() < 10 ** (-17.9 / 20)

    def test_no_sample_is_over_the_ceiling_and_the_limiter_comes_back_slowly(self):
        loud = preset(level_db=0.0)
        deck = started(loud, deck=Deck(RATE, level_db=0.0, fade=False, ceiling_db=-6.0))
        got = played(deck, 60_000)
        assert np.abs(got).max() <= 10 ** (-6 / 20)
        assert np.abs(got).max() > 10 ** (-6.1 / 20)
        chain = played(started(loud, deck=Deck(RATE, level_db=0.0, fade=False, ceiling_db=-1.0)), 60_000)
        heard = np.abs(chain) > 0.05
        gain = np.maximum.accumulate(np.where(heard, got / np.where(heard, chain, 1.0), 0.0))
        assert gain.max() <= 1.0 + 1e-6
        assert deck.state().gain_reduction_db > 3.0

    def test_under_the_ceiling_not_one_bit_changes(self):
        chain = render(PRESETS["rc"], LINE, RATE).audio
        deck = started(PRESETS["rc"], loop=False, deck=plain_deck(ceiling_db=-6.0))
        np.testing.assert_array_equal(played(deck, chain.size), chain)

    def test_a_louder_slot_s_gain_rises_slowly_and_a_quieter_one_s_is_there_with_it(self):
        deck = started(PRESETS["rc"], gain_db=-12.0)
        played(deck, 20_000)
        deck.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE, gain_db=0.0)))
        got = played(deck, 10_000)
        chain = played(started(PRESETS["rc"]), 30_000)[20_000:]
        heard = np.abs(chain) > 0.01
        gain_db = 20 * np.log10(got[heard] / chain[heard])
        times = np.flatnonzero(heard) / RATE
        assert np.all(gain_db <= -12.0 + 120.0 * times + 0.1)
        assert gain_db[-1] == pytest.approx(0.0, abs=1e-5)
        deck.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE, gain_db=-12.0)))
        got = played(deck, 2_000)
        chain = played(started(PRESETS["rc"]), 32_000)[30_000:]
        heard = np.abs(chain) > 0.01
        assert np.all(20 * np.log10(got[heard] / chain[heard])[np.flatnonzero(heard) > FADE] < -11.99)

    def test_a_smooth_swap_to_a_quieter_slot_does_not_jump(self):
        """A falling gain is down 40 dB in 20 ms: 0.0417 dB a sample."""
        deck = started(PRESETS["rc"])
        played(deck, 30_000)
        deck.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE, gain_db=-6.0), smooth=True))
        got = played(deck, 2_000)
        chain = played(started(PRESETS["rc"]), 32_000)[30_000:]
        heard = np.abs(chain) > 0.01
        falls_db = np.diff(20 * np.log10(got[heard] / chain[heard])) / np.diff(np.flatnonzero(heard))
        assert falls_db.min() > -0.0418
        assert got[-1] == pytest.approx(chain[-1] * 10 ** (-6 / 20), rel=1e-6)

    def test_level_and_match_raised_together_rise_by_6_db_in_50_ms(self):
        deck = started(PRESETS["rc"], gain_db=-20.0, deck=plain_deck(level_db=-20.0))
        played(deck, 20_000)
        deck.send(Level(0.0))
        deck.send(Match(0, 0.0))
        got = played(deck, 40_000)
        chain = played(started(PRESETS["rc"]), 60_000)[20_000:]
        heard = np.abs(chain) > 0.01
        rises_db = 20 * np.log10(got[heard] / chain[heard])
        allowed = -40.0 + 120.0 * (np.flatnonzero(heard) + 1) / RATE
        assert np.all(rises_db <= allowed + 0.001)
        assert rises_db[-1] == pytest.approx(0.0, abs=1e-5)

    def test_a_match_reaches_the_slot_that_it_names(self):
        deck = started(PRESETS["rc"], slot=2)
        played(deck, 20_000)
        deck.send(Match(1, -20.0))
        deck.send(Match(2, -6.0))
        played(deck, 5_000)
        got = played(deck, 5_000)
        chain = played(started(PRESETS["rc"]), 30_000)[25_000:]
        np.testing.assert_allclose(got, chain * 10 ** (-6 / 20), rtol=1e-6, atol=1e-9)

    def test_panic_is_silent_within_2_ms_and_fades_in_again(self):
        deck = started(PRESETS["rc"])
        played(deck, 30_000)
        deck.send(Panic())
        got = played(deck, 5_000)
        assert got[:90].any()
        assert not got[96:].any()
        assert deck.state().mode == "stopped"
        deck.send(Play())
        got = played(deck, 500)
        chain = played(started(PRESETS["rc"]), 500)
        assert np.abs(got).max() <= np.abs(chain).max() * FAINT * 10 ** (120 * 500 / RATE / 20) * 1.001
        assert got.any()

    def test_stop_and_play_again(self):
        deck = started(PRESETS["rc"])
        played(deck, 30_000)
        deck.send(Stop())
        assert not played(deck, 5_000)[FADE:].any()
        deck.send(Play())
        np.testing.assert_array_equal(played(deck, 5_000), played(started(PRESETS["rc"]), 5_000))


class TestRings:
    def test_what_was_heard_comes_back_whole(self):
        deck = started(PRESETS["rc"])
        out = played(deck, 50_000)
        cursor, heard, lost = deck.heard(0)
        assert (cursor, lost) == (50_000, 0)
        np.testing.assert_array_equal(heard, out)
        more = played(deck, 700)
        np.testing.assert_array_equal(deck.heard(cursor)[1], more)

    def test_what_was_not_asked_for_in_time_is_told_as_lost(self):
        deck = started(PRESETS["rc"])
        played(deck, HEARD_SAMPLES + 10, 65_536)
        _, heard, lost = deck.heard(0)
        assert lost == HEARD_SAMPLES + 10 - heard.size
        assert heard.size == HEARD_SAMPLES // 2

    def test_rows_tell_the_render_s_own_traces(self):
        """At each row's sample, the trace of a render."""
        expected = render(PRESETS["envelope"], LINE, RATE, trace=True)
        deck = started(PRESETS["envelope"], loop=False)
        played(deck, 60_000)
        _, rows = deck.rows(0)
        assert np.array_equal(rows["sample"], np.arange(rows.size) * 192)
        np.testing.assert_array_equal(rows["position"], rows["sample"])
        np.testing.assert_array_equal(rows["pitch_volts"], expected.pitch_volts[rows["sample"]])
        np.testing.assert_array_equal(rows["control"], expected.gain_control[rows["sample"]])
        np.testing.assert_array_equal(rows["gain"], expected.gain[rows["sample"]])

    def test_too_many_commands_are_refused(self):
        deck = started(PRESETS["rc"])
        for _ in range(COMMANDS_HELD - 2):
            deck.send(Level(-30.0))
        with pytest.raises(DeckFullError, match="is the device lost"):
            deck.send(Level(-30.0))
        played(deck, 10)
        deck.send(Level(-30.0))

    def test_snapshots_are_let_go_once_they_are_out_of_use(self):
        deck = started(PRESETS["rc"])
        for _ in range(300):
            deck.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE), smooth=True))
            played(deck, 64)
        held = started(PRESETS["rc"])
        for _ in range(59):
            held.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE), smooth=True))
        with pytest.raises(DeckFullError, match="snapshots"):
            held.send(Swap(snapshot_of(PRESETS["rc"], LINE, RATE), smooth=True))

    def test_nothing_is_played_before_there_is_something(self):
        with pytest.raises(DeckFullError, match="snapshot first"):
            plain_deck().send(Play())


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"level_db": 1.0}, "level 1.0 dBFS: give -90 to 0"),
        ({"level_db": math.nan}, "give -90 to 0"),
        ({"ceiling_db": 0.0}, "ceiling 0.0 dBFS: give -40 to -1"),
        ({"sample_rate": 7_999}, "8000"),
    ],
)
def test_values_out_of_range(options, said):
    with pytest.raises(SettingError, match=said):
        Deck(options.pop("sample_rate", RATE), **options)


class TestSnapshot:
    def test_a_round_goes_to_the_end_of_its_last_beat(self):
        notes = phrase((0, 1, 50), (1, 1.25, 57), tempo=96)
        assert snapshot_of(PRESETS["rc"], notes, RATE).loop_samples == 3 * 60 / 96 * RATE
        doubled = snapshot_of(PRESETS["rc"], notes, RATE, tempo=Fraction(2))
        assert doubled.loop_samples == 3 * 60 / 96 * RATE / 2
        assert doubled.unit_samples == RATE / 2

    def test_without_beats_it_ends_with_the_last_note(self):
        notes = Phrase("", (PhraseNote(Fraction(0), Fraction(10_001, 10_000), 60),))
        assert snapshot_of(PRESETS["rc"], notes, RATE).loop_samples == math.ceil(1.0001 * RATE)

    def test_transposing_out_of_midi_s_notes_is_refused(self):
        with pytest.raises(SettingError, match="out of MIDI's notes 0 to 127; -50 to \\+70 fit"):
            moved_phrase(LINE, transpose=80)
        with pytest.raises(SettingError, match="tempo 0"):
            moved_phrase(LINE, tempo=Fraction(0))

    def test_a_converter_s_late_tick_comes_before_the_round_is_over(self):
        settings = preset(converter={"bits": 12, "span_volts": 10.0, "rate_hz": 10.0})
        notes = Phrase(
            "",
            (
                PhraseNote(Fraction(0), Fraction(1, 2), 60),
                PhraseNote(Fraction(91, 100), Fraction(95, 100), 62),
            ),
        )
        snapshot = snapshot_of(settings, notes, RATE)
        assert snapshot.pitch_events["sample"].max() == snapshot.loop_samples == math.ceil(0.95 * RATE)

    @pytest.mark.parametrize("loop", [True, False])
    @pytest.mark.parametrize(
        "changes",
        [
            {"pitch.rise": 0.3},
            {"pitch.law": "cosine", "gain.law": "rc", "gain.fall": 0.9},
            {"envelope.attack": 0.2, "envelope.sustain": 0.1},
            {"envelope.retrigger": False},
            {"pitch.glide": "never"},
            {"oscillator.width": 0.2, "oscillator.wave": "pulse"},
            {"tuning.a4_hz": 442.0},
            {"amplifier.velocity_db": 6.0},
            {"envelope": None},
            {"pitch.steps_per_octave": 5},
        ],
    )
    def test_what_an_earlier_one_is_used_for_changes_nothing(self, changes, loop):
        before = PRESETS["retrigger"]
        after = before.changed(changes)
        earlier = snapshot_of(before, LINE, RATE, loop=loop)
        quick = snapshot_of(after, LINE, RATE, loop=loop, earlier=earlier, slot=2, gain_db=-3.0)
        whole = snapshot_of(after, LINE, RATE, loop=loop, slot=2, gain_db=-3.0)
        for name in ("settings", "pitch_events", "later_pitch_events", "gate_events"):
            np.testing.assert_array_equal(getattr(quick, name), getattr(whole, name))
        assert quick.program.wavetables is whole.program.wavetables
        assert quick.program.cut_off == whole.program.cut_off
        assert (quick.slot, quick.gain_db, quick.loop_samples) == (2, -3.0, whole.loop_samples)
        slews_only = all(
            key.startswith(("pitch.law", "pitch.rise", "gain.", "envelope.a", "envelope.s"))
            for key in changes
        )
        assert (quick.gate_events is earlier.gate_events) == slews_only
