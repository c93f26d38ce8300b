"""Writes the demo bank's Standard MIDI Files and its single-cycle WAV, byte for byte as they are kept.

    python tests/compose_phrases.py

The music is invented for the invented radio play "The Night Ferry", and every file says so. The bytes are put
together here, after the Standard MIDI Files 1.0 specification and the RIFF WAVE format, since libraries write
neither running status nor an SMPTE division.
"""

import math
import struct
from collections.abc import Iterable
from pathlib import Path

from conftest import PHRASES, PRESETS

STATEMENT = 'Invented for the invented radio play "The Night Ferry".'
TICKS_PER_BEAT = 480

Event = tuple[int, bytes]
"""The tick at which an event stands, and its bytes, status included."""

TEXT, NAME, END_OF_TRACK, TEMPO, TIME_SIGNATURE = 0x01, 0x03, 0x2F, 0x51, 0x58
MODULATION, LEVEL, SUSTAIN_PEDAL = 1, 7, 64
RELEASE_VELOCITY = 64

# Beats at which a note starts, beats that it lasts, MIDI note number, velocity.

# A cycle holds the partials of a bell, whose strike note is the tenth: B flat 1 (34) is heard as D5.
BELL = [
    (0, 0.25, 34, 118),
    (1.5, 0.125, 34, 72),
    (4, 0.25, 34, 124),
    (4.75, 0.125, 34, 56),
    (5.5, 0.25, 29, 100),
    (8, 0.25, 34, 112),
    (9.5, 0.125, 34, 64),
    (9.75, 0.125, 34, 88),
    (10.5, 0.5, 29, 104),
]

# Two blasts, each ending in the fall of a fog horn that runs out of air: the low note is pressed while the
# high one is still held.
HORN = [(0.5, 3.25, 41, 112), (3.5, 1, 34, 112), (6.5, 3.25, 41, 120), (9.5, 1.5, 34, 120)]

# Pistons: repeated low notes, slurred runs up, the octave that the flywheel throws.
ENGINE_BASS = [
    (0, 0.375, 38, 112),
    (0.5, 0.375, 38, 72),
    (1, 0.375, 45, 100),
    (1.5, 0.375, 38, 72),
    (2, 0.375, 38, 112),
    (2.5, 0.625, 41, 84),
    (3, 0.625, 43, 92),
    (3.5, 0.5, 45, 100),
    (4, 0.375, 38, 112),
    (4.5, 0.375, 38, 72),
    (5, 0.375, 46, 100),
    (5.5, 0.375, 38, 72),
    (6, 0.375, 38, 112),
    (6.5, 0.625, 45, 84),
    (7, 0.625, 43, 92),
    (7.5, 0.5, 41, 100),
    (8, 4, 38, 116),
    (8.5, 0.5, 50, 104),
    (9.5, 0.5, 48, 104),
    (10.5, 0.5, 46, 104),
    (11.5, 0.5, 45, 104),
    (12, 0.5, 38, 112),
    (12.5, 0.5, 38, 72),
    (13, 0.5, 41, 100),
    (13.5, 0.5, 43, 72),
    (14, 1.25, 45, 112),
    (15, 1.25, 33, 120),
    (16, 3, 38, 104),
]

# The tune that is heard from the deck above, over the engine.
DECK_TUNE = [
    (0, 2.25, 62, 84),
    (2, 2.25, 65, 92),
    (4, 1.25, 64, 80),
    (5, 1.25, 67, 92),
    (6, 1.75, 69, 100),
    (8, 2.25, 74, 112),
    (10, 1.25, 72, 100),
    (11, 1.25, 69, 92),
    (12, 2.25, 70, 96),
    (14, 2, 67, 84),
    (16, 3, 69, 88),
]

HULL_KNOCKS = [(beat, 0.125, 37, 60 + 8 * (beat % 4)) for beat in range(0, 16, 2)]

# Microseconds per beat: the engine gathers way to 120 beats a minute and is rung down.
ENGINE_TEMPOS = [(0, 625_000), (4, 576_923), (8, 535_714), (12, 500_000), (16, 600_000), (17, 750_000)]

# The call and the answer in International Morse code (Recommendation ITU-R M.1677-1): a dash is three dots
# long, the space between the marks of a letter one, between letters three, between words seven.
MORSE = {"F": "..-.", "E": ".", "R": ".-.", "Y": "-.--"}
DOT_MS = 120
CALL, CALL_NOTE, ANSWER, ANSWER_NOTE = "FERRY", 77, "R", 70

# Partials of the cycle, as numbers of its own fundamental, which is silent: a bell's hum, prime, tierce (a
# minor third), quint and nominal stand as 5 : 10 : 12 : 15 : 20 (common practice of bell founders).
BELL_PARTIALS = {
    5: 0.40,
    10: 0.80,
    12: 1.0,
    15: 0.25,
    20: 0.90,
    25: 0.30,
    27: 0.20,
    30: 0.45,
    40: 0.25,
    52: 0.10,
}
CYCLE_SAMPLES, CYCLE_RATE, CYCLE_PEAK = 2048, 48_000, 30_000


def variable_length(value: int) -> bytes:
    """Seven bits a byte, the highest first, the top bit set on all but the last."""
    parts = [value & 0x7F]
    while value := value >> 7:
        parts.append(value & 0x7F | 0x80)
    return bytes(reversed(parts))


def meta(kind: int, content: bytes) -> bytes:
    return bytes((0xFF, kind)) + variable_length(len(content)) + content


def controller(channel: int, number: int, value: int) -> bytes:
    return bytes((0xB0 | channel - 1, number, value))


def bend(channel: int, value: int) -> bytes:
    """A pitch bend, 0 to 16,383 with 8,192 in the middle; the low seven bits come first."""
    return bytes((0xE0 | channel - 1, value & 0x7F, value >> 7))


def note_events(
    notes: Iterable[tuple[float, float, int, int]], channel: int, explicit_off: bool
) -> list[Event]:
    """Note-ons, each ended by a note-off, or by a note-on of velocity 0, which running status can shorten."""
    status_on, status_off = 0x90 | channel - 1, 0x80 | channel - 1
    events = []
    for start, length, number, velocity in notes:
        begin, end = _ticks(start), _ticks(start + length)
        off = (status_off, number, RELEASE_VELOCITY) if explicit_off else (status_on, number, 0)
        events += [(begin, bytes((status_on, number, velocity))), (end, bytes(off))]
    return events


def track(events: Iterable[Event], running_status: bool) -> bytes:
    """A track chunk. At one tick events keep their order, but notes end before others begin.

    With ``running_status`` a channel message leaves its status out where it is that of the message before it
    and no meta event stands between, as the specification allows.
    """
    body, last_tick, running = bytearray(), 0, 0
    ordered = sorted(events, key=lambda event: (event[0], not _ends_note(event[1])))
    for tick, content in ordered:
        shortened = running_status and content[0] == running
        body += variable_length(tick - last_tick) + content[shortened:]
        last_tick, running = tick, content[0] if content[0] < 0xF0 else 0
    body += variable_length(0) + meta(END_OF_TRACK, b"")
    return b"MTrk" + struct.pack(">I", len(body)) + body


def midi_file(file_format: int, division: int, tracks: list[bytes]) -> bytes:
    return b"MThd" + struct.pack(">IHHH", 6, file_format, len(tracks), division) + b"".join(tracks)


def _ticks(beats: float) -> int:
    ticks = beats * TICKS_PER_BEAT
    if ticks != int(ticks):
        raise ValueError(f"beat {beats} falls between two ticks")
    return int(ticks)


def _ends_note(content: bytes) -> bool:
    kind = content[0] & 0xF0
    return kind == 0x80 or (kind == 0x90 and content[2] == 0)


def _heading(name: str) -> list[Event]:
    return [(0, meta(NAME, name.encode())), (0, meta(TEXT, STATEMENT.encode()))]


def _tempo(beat: float, tempo_us: int) -> Event:
    return _ticks(beat), meta(TEMPO, struct.pack(">I", tempo_us)[1:])


def fog_signals() -> bytes:
    """Format 0 with running status: the bell on channel 1, the horn on channel 2; 72 beats a minute."""
    events = [*_heading("Fog signals"), _tempo(0, 833_333)]
    events += [(0, controller(1, LEVEL, 100)), (0, controller(2, LEVEL, 90))]
    # A horn player's habits, which one voice with a glide of its own has no use for.
    events += [(_ticks(beat), controller(2, MODULATION, value)) for beat, value in ((1, 20), (2, 60), (3, 0))]
    events += [(_ticks(beat), bend(2, value)) for beat, value in ((3.5, 8192), (4, 6000), (4.5, 8192))]
    events += note_events(BELL, 1, explicit_off=False) + note_events(HORN, 2, explicit_off=False)
    return midi_file(0, TICKS_PER_BEAT, [track(events, running_status=True)])


def engine_room() -> bytes:
    """Format 1: the tempo map, the bass on channel 1, the tune on 2, the hull's knocks on 10."""
    conductor = [*_heading("Engine room"), (0, meta(TIME_SIGNATURE, bytes((4, 2, 24, 8))))]
    conductor += [_tempo(beat, tempo_us) for beat, tempo_us in ENGINE_TEMPOS]
    bass = _heading("Engine bass") + note_events(ENGINE_BASS, 1, explicit_off=False)
    tune = _heading("Tune from the deck") + note_events(DECK_TUNE, 2, explicit_off=True)
    tune += [(_ticks(6), controller(2, SUSTAIN_PEDAL, 127)), (_ticks(7.75), controller(2, SUSTAIN_PEDAL, 0))]
    knocks = _heading("Hull knocks") + note_events(HULL_KNOCKS, 10, explicit_off=True)
    tracks = [track(conductor, False), track(bass, True), track(tune, False), track(knocks, False)]
    return midi_file(1, TICKS_PER_BEAT, tracks)


def _morse_events(text: str, number: int, start_ms: int) -> tuple[list[Event], int]:
    """A word's events from ``start_ms`` on, in ticks of a millisecond, and when its last mark ends."""
    events: list[Event] = []
    at = end = start_ms
    for letter in text:
        for mark in MORSE[letter]:
            end = at + (DOT_MS if mark == "." else 3 * DOT_MS)
            events += [(at, bytes((0x90, number, 100))), (end, bytes((0x80, number, RELEASE_VELOCITY)))]
            at = end + DOT_MS
        at = end + 3 * DOT_MS
    return events, end


def wireless_cabin() -> bytes:
    """Format 0 with an SMPTE division: 25 frames a second of 40 ticks make a tick a millisecond."""
    call, end_ms = _morse_events(CALL, CALL_NOTE, 0)
    answer, _ = _morse_events(ANSWER, ANSWER_NOTE, end_ms + 7 * DOT_MS)
    events = [*_heading("Wireless cabin"), (0, controller(1, LEVEL, 100)), *call, *answer]
    return midi_file(0, (256 - 25) << 8 | 40, [track(events, running_status=False)])


def bell_cycle() -> bytes:
    """A WAV of one cycle, 16 bit, with the statement as its comment."""
    cycle = [
        sum(
            # Phases that grow with the square of the order spread the partials over the cycle.
            level * math.sin(2 * math.pi * (number * sample / CYCLE_SAMPLES + order**2 / 20))
            for order, (number, level) in enumerate(BELL_PARTIALS.items())
        )
        for sample in range(CYCLE_SAMPLES)
    ]
    peak = max(map(abs, cycle))
    samples = struct.pack(f"<{CYCLE_SAMPLES}h", *(round(CYCLE_PEAK * value / peak) for value in cycle))
    comment = STATEMENT.encode() + b"\0"
    comment += b"\0" * (len(comment) % 2)
    layout = struct.pack("<HHIIHH", 1, 1, CYCLE_RATE, 2 * CYCLE_RATE, 2, 16)
    content = b"WAVE" + _chunk(b"fmt ", layout) + _chunk(b"data", samples)
    content += _chunk(b"LIST", b"INFO" + _chunk(b"ICMT", comment))
    return _chunk(b"RIFF", content)


def _chunk(name: bytes, content: bytes) -> bytes:
    return name + struct.pack("<I", len(content)) + content


def compositions() -> dict[Path, bytes]:
    """What is written, by where it stands."""
    return {
        PHRASES / "fog-signals.mid": fog_signals(),
        PHRASES / "engine-room.mid": engine_room(),
        PHRASES / "wireless-cabin.mid": wireless_cabin(),
        PRESETS / "cycles" / "fog-bell.wav": bell_cycle(),
    }


if __name__ == "__main__":
    for path, content in compositions().items():
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(content)
        print(path, len(content), "bytes")
