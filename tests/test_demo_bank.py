"""The demo bank: every preset does what its comment says, and together they cover what the engine can do."""

import re
import struct
from fractions import Fraction
from functools import cache
from itertools import pairwise
from pathlib import Path

import mido
import numpy as np
import pytest
import soundfile

from commands import run
from compose_phrases import STATEMENT, bend, compositions, controller, track, variable_length
from conftest import PHRASES, PRESETS
from glidesmith.keyboard import LEGATO, PRESS, RETURN, key_changes
from glidesmith.measuring import Facts, measure
from glidesmith.phrase import Phrase, load_phrase
from glidesmith.preset import Preset, load_preset
from glidesmith.rendering import Rendering, render
from glidesmith.settings import LAWS, TIMINGS, WAVES

SAMPLE_RATE = 48_000
NAMES = sorted(path.stem for path in PRESETS.glob("*.toml"))
MIDI_NAMES = sorted(path.stem for path in PHRASES.glob("*.mid"))
EVERY_PRESET = pytest.mark.parametrize("name", NAMES)


@cache
def preset_of(name: str) -> Preset:
    return load_preset(PRESETS / f"{name}.toml")


@cache
def phrase_of(name: str) -> Phrase:
    source = preset_of(name).phrase
    assert source is not None
    return load_phrase(source.file, source.track, source.channel)


@cache
def rendering_of(name: str) -> Rendering:
    return render(preset_of(name), phrase_of(name), SAMPLE_RATE, trace=True)


@cache
def facts_of(name: str) -> Facts:
    return measure(preset_of(name), phrase_of(name))


def decibels(value: float) -> float:
    return 20.0 * float(np.log10(value))


# Every preset


@EVERY_PRESET
def test_a_preset_renders_at_a_modest_level_without_a_complaint(name):
    rendering, end_s = rendering_of(name), float(phrase_of(name).end)
    assert rendering.clipped == 0
    assert rendering.warnings == ()
    assert np.isfinite(rendering.audio).all()
    assert -16.0 < decibels(np.abs(rendering.audio).max()) < -6.0
    assert 6.0 < end_s < 14.0
    assert end_s <= rendering.audio.size / SAMPLE_RATE < end_s + 5.0


def test_all_files_pass_the_check_command():
    result = run("check", PRESETS, PHRASES)
    assert result.exit_code == 0
    assert f"{len(NAMES) + len(list(PHRASES.iterdir()))} files checked" in result.stdout


@EVERY_PRESET
def test_a_preset_begins_by_saying_what_to_listen_for(name):
    text = (PRESETS / f"{name}.toml").read_text("utf-8")
    heading = text.partition("\n\n")[0].splitlines()
    assert 2 <= len(heading) <= 4
    assert all(line.startswith("# ") for line in heading)
    assert max(map(len, text.splitlines())) <= 110


def test_titles_are_all_different():
    assert len({preset_of(name).title for name in NAMES}) == len(NAMES)


def test_every_file_says_that_it_is_invented():
    for path in [*PRESETS.rglob("*.*"), *PHRASES.iterdir()]:
        content = path.read_bytes()
        said = (
            " ".join(content.decode("utf-8").replace("\n# ", " ").split()) if path.suffix == ".toml" else ""
        )
        assert STATEMENT.encode() in content or 'the invented radio play "The Night Ferry"' in said, path


# The bank as a whole


def test_the_bank_has_every_law_timing_wave_and_glide_mode():
    presets = [preset_of(name) for name in NAMES]
    assert len(presets) >= 8
    assert {preset.pitch.slew.law for preset in presets} == set(LAWS)
    assert len({preset.gain.law for preset in presets}) >= 4
    assert {preset.pitch.slew.timing for preset in presets} == set(TIMINGS)
    assert {p.pitch.slew.timing for p in presets if p.pitch.slew.law == "linear"} == set(TIMINGS)
    assert {preset.oscillator.wave for preset in presets} == set(WAVES)
    assert {preset.pitch.glide for preset in presets} == {"always", "overlap", "never"}
    assert any(p.oscillator.wave == "pulse" and p.oscillator.width == 0.5 for p in presets)
    assert any(p.oscillator.wave == "pulse" and p.oscillator.width <= 0.1 for p in presets)


def test_the_bank_has_every_part_of_the_chain():
    presets = [preset_of(name) for name in NAMES]
    envelopes = [preset.envelope for preset in presets]
    assert None in envelopes
    assert {envelope.shape for envelope in envelopes if envelope} == {"linear", "rc"}
    assert {envelope.retrigger for envelope in envelopes if envelope} == {False, True}
    assert {preset.amplifier.law for preset in presets} == {"linear", "decibel"}
    assert any(preset.amplifier.velocity_db > 0.0 for preset in presets)
    assert any(preset.converter and preset.converter.rate_hz > 0.0 for preset in presets)
    assert any(preset.pitch.steps_per_octave > 0 for preset in presets)
    assert any(preset.tuning.scale_error_cents_per_octave != 0.0 for preset in presets)
    assert any(preset.drone for preset in presets)
    assert any(preset.pitch.slew.rise > preset.pitch.slew.fall > 0.0 for preset in presets)
    assert any(0.0 < preset.pitch.slew.rise < preset.pitch.slew.fall for preset in presets)


def test_every_phrase_and_every_cycle_is_used():
    played = {preset_of(name).phrase.file.resolve() for name in NAMES}
    assert played == {path.resolve() for path in PHRASES.iterdir()}
    cycles = {preset_of(name).oscillator.file for name in NAMES} - {None}
    assert {cycle.resolve() for cycle in cycles} == {path.resolve() for path in PRESETS.rglob("*.wav")}


# The phrases


def test_the_composed_files_are_the_ones_that_the_script_writes():
    written = compositions()
    assert set(written) == {*PHRASES.glob("*.mid"), *PRESETS.rglob("*.wav")}
    for path, content in written.items():
        assert path.read_bytes() == content, path


@pytest.mark.parametrize("name", ["fog-signals", "engine-room"])
def test_midi_notes_are_where_an_independent_reader_finds_them(name):
    """`mido` 1.3.3 as the oracle: its own tempo map and running status, in floating-point seconds."""
    path = PHRASES / f"{name}.mid"
    sounding, expected, now = {}, [], 0.0
    for message in mido.MidiFile(path):
        now += message.time
        if message.type not in ("note_on", "note_off") or message.channel == 9:
            continue
        key = (message.channel, message.note)
        if message.type == "note_on" and message.velocity:
            sounding[key] = (now, message.velocity)
        else:
            begin, velocity = sounding.pop(key)
            expected.append((begin, now, message.note, velocity / 127))
    found = [(float(n.start), float(n.end), n.number, n.velocity) for n in load_phrase(path).notes]
    assert sounding == {}
    assert np.array(sorted(found)) == pytest.approx(np.array(sorted(expected)), abs=1e-9)


def test_the_wireless_cabin_sends_morse_code():
    """Recommendation ITU-R M.1677-1, part I: the signs, and spaces of one, three and seven dots."""
    letters = {"..-.": "F", ".": "E", ".-.": "R", "-.--": "Y"}
    notes = load_phrase(PHRASES / "wireless-cabin.mid").notes
    dot_s = min(note.end - note.start for note in notes)
    assert dot_s == Fraction(120, 1000)
    text, marks = "", ""
    for note, following in zip(notes, (*notes[1:], None), strict=True):
        marks += {1: ".", 3: "-"}[(note.end - note.start) / dot_s]
        space = (following.start - note.end) / dot_s if following else 7
        if space > 1:
            text, marks = text + letters[marks] + {3: "", 7: " "}[space], ""
    assert text == "FERRY R "


def test_the_midi_files_differ_in_format_and_division():
    headers = {name: (PHRASES / f"{name}.mid").read_bytes()[8:14] for name in MIDI_NAMES}
    found = {name: struct.unpack(">HHH", header) for name, header in headers.items()}
    assert found == {
        "engine-room": (1, 4, 480),
        "fog-signals": (0, 1, 480),
        "wireless-cabin": (0, 1, 0xE728),
    }


def test_the_midi_files_hold_what_has_no_effect():
    assert load_phrase(PHRASES / "fog-signals.mid").ignored == (
        "5 controller changes (controller 1, 7)",
        "3 pitch bends",
    )
    assert any("channel 10" in line for line in load_phrase(PHRASES / "engine-room.mid").ignored)


def test_the_tempo_map_bends_the_time():
    starts = [note.start for note in load_phrase(PHRASES / "engine-room.mid", channel=1).notes]
    assert starts[1] - starts[0] == Fraction(625_000, 2_000_000)
    assert starts[-1] - starts[-2] == Fraction(500_000, 1_000_000)
    assert starts[-2] - starts[-3] == Fraction(500_000, 1_000_000)


def test_running_status_shortens_and_stops_at_meta_events():
    """Standard MIDI Files 1.0: running status may be used within a track and is cancelled by meta events."""
    on, off, text = bytes((0x90, 60, 64)), bytes((0x90, 60, 0)), b"\xff\x01\x00"
    end = "00 ff2f00"
    for running_status, events, body in (
        (True, [(0, on), (1, off)], "00 903c40 01 3c00"),
        (False, [(0, on), (1, off)], "00 903c40 01 903c00"),
        (True, [(0, on), (1, text), (2, off)], "00 903c40 01 ff0100 01 903c00"),
        (True, [(0, on), (1, on), (1, off)], "00 903c40 01 3c00 00 3c40"),
    ):
        expected = bytes.fromhex(body + end)
        assert track(events, running_status) == b"MTrk" + struct.pack(">I", len(expected)) + expected


@pytest.mark.parametrize(("value", "content"), [(0, "00"), (127, "7f"), (128, "8100"), (16_383, "ff7f")])
def test_variable_lengths_are_those_of_the_specification(value, content):
    """Standard MIDI Files 1.0, the table of variable-length quantities."""
    assert variable_length(value) == bytes.fromhex(content)


def test_controllers_and_bends_are_read_back():
    """`mido` as the oracle."""
    assert mido.Message.from_bytes(controller(2, 64, 127)).dict()["value"] == 127
    assert mido.Message.from_bytes(bend(2, 6000)).pitch == 6000 - 8192


def test_the_ferry_line_holds_what_glides_are_judged_by():
    phrase = load_phrase(PHRASES / "ferry-line.toml")
    changes = list(key_changes(phrase.notes))
    kinds = [change.kind for change in changes]
    sounding = [change for change in changes if change.kind in (PRESS, LEGATO, RETURN)]
    numbers = [phrase.notes[change.note].number for change in sounding]
    leaps = np.abs(np.diff(numbers))
    starts = [note.start for note in phrase.notes]
    assert (phrase.title, phrase.tempo_bpm) == ("Ferry line", 96.0)
    assert {LEGATO, RETURN} <= set(kinds)
    assert {0, 1, 2, 12, 19} <= set(leaps)
    assert any(note.end in starts for note in phrase.notes)
    beat_s = Fraction(60, 96)
    quick = [b - a for a, b in pairwise(starts) if b - a <= beat_s / 8]
    assert len(quick) >= 10


# What the comments claim, from the facts

CLAIMS = [
    # The preset, the note that the glide goes to, the fact, the figure and its decimals.
    ("night-ferry-lead", 1, "landing_s", 0.296, 3),
    ("night-ferry-lead", 12, "landing_s", 0.493, 3),
    ("night-ferry-lead", 24, "short_by_cents", 141, 0),
    ("winch-constant-rate", 13, "landing_s", 0.379, 3),
    ("winch-constant-rate", 1, "landing_s", 0.139, 3),
    ("winch-constant-rate", 5, "landing_s", 0.019, 3),
    ("winch-constant-time", 13, "max_rate_semitones_per_s", 79, 0),
    ("engine-room-bass", 17, "landing_s", 0.133, 3),
    ("engine-room-bass", 16, "landing_s", 0.213, 3),
    ("fog-horn", 1, "midpoint_s", 0.604, 3),
    ("harbour-siren", 1, "landing_s", 1.03, 2),
    ("harbour-siren", 2, "landing_s", 1.59, 2),
    ("far-lighthouse", 1, "landing_s", 2.22, 2),
    ("far-lighthouse", 4, "landing_s", 1.15, 2),
]


@pytest.mark.parametrize(("name", "note", "fact", "figure", "digits"), CLAIMS)
def test_the_comments_tell_the_measured_figures(name, note, fact, figure, digits):
    glides = [glide for glide in facts_of(name).glides if glide.note == note]
    if (name, note) == ("engine-room-bass", 16):  # the held key: the first return to it, from an octave above
        glides = [glide for glide in glides if glide.from_note == "D3"]
    assert round(getattr(glides[0], fact), digits) == figure
    shown = f"{1000 * figure:g} ms" if fact.endswith("_s") and figure < 1.0 else f"{figure:g}"
    heading = (PRESETS / f"{name}.toml").read_text("utf-8").partition("\n\n")[0].replace("\n# ", " ")
    assert re.search(rf"\b{shown}\b", heading)


def test_octaves_up_take_as_long_at_constant_rate_as_at_constant_time():
    octaves = [
        next(g for g in facts_of(f"winch-constant-{t}").glides if g.note == 11) for t in ("rate", "time")
    ]
    assert octaves[0].landing_s == pytest.approx(octaves[1].landing_s, abs=1e-9)


def test_slow_glides_never_reach_the_notes_of_the_run():
    for name in ("night-ferry-lead", "winch-constant-time"):
        run_down = [glide for glide in facts_of(name).glides if 18 <= glide.note <= 28]
        assert len(run_down) == 11
        assert all(glide.landing_s is None for glide in run_down)
    assert facts_of("winch-constant-rate").never_land == ()


def test_a_clicking_key_clicks_at_every_edge_and_a_shaped_one_at_none():
    assert all(gate.edge_click for gate in facts_of("wireless-key-clicks").gates)
    shaped = facts_of("wireless-key-shaped").gates
    assert not any(gate.edge_click for gate in shaped)
    assert {round(gate.attack_10_90_s, 4) for gate in shaped} == {0.0059}


def test_clicks_are_heard_far_from_the_tone_and_shaping_removes_them():
    """The level between 4 and 8 kHz, where neither tone has anything, against the whole."""
    far_db = {}
    for name in ("wireless-key-clicks", "wireless-key-shaped"):
        audio = rendering_of(name).audio.astype(np.float64)
        power = np.abs(np.fft.rfft(audio)) ** 2
        hertz = np.fft.rfftfreq(audio.size, 1.0 / SAMPLE_RATE)
        far_db[name] = 10.0 * np.log10(power[(hertz > 4000) & (hertz < 8000)].sum() / power.sum())
    assert far_db["wireless-key-clicks"] > -50.0
    assert far_db["wireless-key-shaped"] < -100.0


def test_no_edge_clicks_but_where_the_comment_speaks_of_it():
    struck = {"wireless-key-clicks", "fog-bell"}
    clicking = {name for name in NAMES if any(gate.edge_click for gate in facts_of(name).gates)}
    assert clicking == struck


def test_short_strokes_lose_level_under_a_slow_slew():
    losses = [round(gate.peak_loss_db, 1) for gate in facts_of("fog-bell-from-the-quay").gates]
    assert max(losses) == 5.2
    assert losses[-1] == min(losses) == 0.4
    assert round(max(gate.peak_loss_db for gate in facts_of("deck-tune").gates), 1) == 3.9


def test_the_bell_rings_down_in_even_decibels_to_silence():
    """A straight fall of the control in 3 s is 60 dB in 3 s under the decibel law, but for its last part."""
    rendering = rendering_of("fog-bell")
    closed = int(float(phrase_of("fog-bell").end) * SAMPLE_RATE) + 10
    levels = 20.0 * np.log10(rendering.gain[[closed, closed + SAMPLE_RATE]])
    assert levels[0] - levels[1] == pytest.approx(20.0, abs=0.2)


def test_the_bell_is_tuned_to_the_strike_note_of_its_cycle():
    """The tenth partial of the lower written note is D5, 587.33 Hz (equal temperament, A4 = 440 Hz)."""
    audio = rendering_of("fog-bell").audio[4800 : 4800 + SAMPLE_RATE].astype(np.float64)
    spectrum = np.abs(np.fft.rfft(audio * np.hanning(audio.size), 16 * SAMPLE_RATE))
    near = slice(16 * 560, 16 * 620)
    assert (near.start + np.argmax(spectrum[near])) / 16 == pytest.approx(587.33, abs=0.1)
    cycle, _ = soundfile.read(PRESETS / "cycles" / "fog-bell.wav")
    partials = np.abs(np.fft.rfft(cycle))
    assert np.flatnonzero(partials > 0.02 * partials.max()).tolist() == [
        5,
        10,
        12,
        15,
        20,
        25,
        27,
        30,
        40,
        52,
    ]


def test_the_worn_gear_beats_against_the_drone():
    """D5 8 cents sharp against D5: 587.33 · (2^(8/1200) − 1) = 2.72 beats a second."""
    begin, end = int(4.2 * SAMPLE_RATE), int(6.0 * SAMPLE_RATE)
    power = rendering_of("lighthouse-out-of-true").audio[begin:end].astype(np.float64) ** 2
    spectrum = np.abs(np.fft.rfft((power - power.mean()) * np.hanning(power.size), 16 * power.size))
    hertz = np.fft.rfftfreq(16 * power.size, 1.0 / SAMPLE_RATE)
    slow = hertz < 20.0
    assert hertz[slow][np.argmax(spectrum[slow])] == pytest.approx(2.72, abs=0.05)


def test_the_soft_landing_slows_its_beats_down():
    rendering = rendering_of("far-lighthouse")
    target = (74 - 60) / 12.0
    beats_hz = 587.33 * (1.0 - 2.0 ** (rendering.pitch_volts[int(3.8 * 48_000) : 6 * 48_000] - target))
    assert beats_hz[0] > 25.0
    assert 0.0 < beats_hz[-1] < 0.2
    assert (np.diff(beats_hz) < 0.0).all()


def test_the_stairs_are_steps_of_a_semitone():
    volts = rendering_of("customs-shed-stairs").pitch_volts
    assert np.abs(volts * 12 - np.round(volts * 12)).max() < 1e-9
    beat_s = 60 / 132
    climb = volts[round(9.0 * beat_s * SAMPLE_RATE) : round(10.0 * beat_s * SAMPLE_RATE)]
    steps = np.flatnonzero(np.diff(climb)) / SAMPLE_RATE
    assert len(steps) == 12
    assert np.diff(steps) == pytest.approx(0.350 / 12, abs=2e-4)


def test_the_ledger_is_out_of_tune_and_late():
    facts = facts_of("customs-shed-ledger")
    assert len(facts.never_land) == 9
    assert len(facts.glides) == 21
    assert round(max(glide.short_by_cents for glide in facts.glides)) == 22
    # Beats of 60/132 s against ticks of 40 ms: the longest wait of a change of pitch.
    waits = [-Fraction(glide.start_s).limit_denominator(10_000) % Fraction(1, 25) for glide in facts.glides]
    assert round(1000 * max(waits)) == 38


def test_the_files_stand_where_users_look_for_them():
    assert (PRESETS / "night-ferry-lead.toml").is_file()
    assert preset_of("night-ferry-lead").title == "Night ferry lead"
    assert Path("../shared/phrases/ferry-line.toml") == preset_of("night-ferry-lead").phrase.file.relative_to(
        PRESETS
    )
