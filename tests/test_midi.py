"""Standard MIDI Files, written out byte by byte and held against the standard's own examples.

The examples come from "Standard MIDI Files 1.0" (MIDI Manufacturers Association), from memory; that their
chunk lengths agree with their bytes was counted.
"""

import contextlib
import random
import tracemalloc
from fractions import Fraction
from io import BytesIO
from pathlib import Path

import mido
import pytest

from conftest import LONG
from glidesmith.errors import PhraseError
from glidesmith.midi import MOST_EVENTS, _variable_length, read_midi
from glidesmith.phrase import MOST_NOTES, Note, Phrase, load_phrase

TEMPO_120 = "00 FF 51 03 07 A1 20"
END = "00 FF 2F 00"


def chunk(name: bytes, body: bytes) -> bytes:
    return name + len(body).to_bytes(4, "big") + body


def midi(*tracks: str | bytes, division: int = 96, form: int = 1, count: int | None = None) -> bytes:
    """A file of tracks given as hexadecimal text or as bytes."""
    bodies = [bytes.fromhex(track) if isinstance(track, str) else track for track in tracks]
    number = len(bodies) if count is None else count
    head = b"".join(value.to_bytes(2, "big") for value in (form, number, division))
    return chunk(b"MThd", head) + b"".join(chunk(b"MTrk", body) for body in bodies)


def notes(*tracks: str | bytes, **options: int) -> list[tuple[Fraction, Fraction, int]]:
    return [(note.start, note.end, note.number) for note in read_midi(midi(*tracks, **options)).notes]


def refusal(data: bytes, **choice: object) -> str:
    with pytest.raises(PhraseError) as caught:
        read_midi(data, Path("a.mid"), **choice)  # type: ignore[arg-type]
    (line,) = caught.value.lines
    assert line.startswith("a.mid: ")
    assert line.isprintable()
    return line


FORMAT_0 = bytes.fromhex(
    "4D 54 68 64 00 00 00 06 00 00 00 01 00 60 4D 54 72 6B 00 00 00 3B"
    "00 FF 58 04 04 02 18 08 00 FF 51 03 07 A1 20 00 C0 05 00 C1 2E 00 C2 46"
    "00 92 30 60 00 3C 60 60 91 43 40 60 90 4C 20 81 40 82 30 40 00 3C 40 00 81 43 40 00 80 4C 40"
    "00 FF 2F 00"
)
FORMAT_1 = bytes.fromhex(
    "4D 54 68 64 00 00 00 06 00 01 00 04 00 60"
    "4D 54 72 6B 00 00 00 14 00 FF 58 04 04 02 18 08 00 FF 51 03 07 A1 20 83 00 FF 2F 00"
    "4D 54 72 6B 00 00 00 10 00 C0 05 81 40 90 4C 20 81 40 4C 00 00 FF 2F 00"
    "4D 54 72 6B 00 00 00 0F 00 C1 2E 60 91 43 40 82 20 43 00 00 FF 2F 00"
    "4D 54 72 6B 00 00 00 15 00 C2 46 00 92 30 60 00 3C 60 83 00 30 00 00 3C 00 00 FF 2F 00"
)


@pytest.mark.parametrize("data", [FORMAT_0, FORMAT_1], ids=["format 0", "format 1"])
def test_the_standards_examples(data: bytes) -> None:
    """Four notes that begin at 0, 0, 1 and 2 beats of half a second and end together after four."""
    assert read_midi(data) == Phrase(
        "untitled",
        (
            Note(Fraction(0), Fraction(2), 48, 96 / 127),
            Note(Fraction(0), Fraction(2), 60, 96 / 127),
            Note(Fraction(1, 2), Fraction(2), 67, 64 / 127),
            Note(Fraction(1), Fraction(2), 76, 32 / 127),
        ),
        ("3 program changes",),
        None,
        120.0,
    )


@pytest.mark.parametrize(
    ("value", "written"),
    [
        (0x00000000, "00"),
        (0x00000040, "40"),
        (0x0000007F, "7F"),
        (0x00000080, "81 00"),
        (0x00002000, "C0 00"),
        (0x00003FFF, "FF 7F"),
        (0x00004000, "81 80 00"),
        (0x00100000, "C0 80 00"),
        (0x001FFFFF, "FF FF 7F"),
        (0x00200000, "81 80 80 00"),
        (0x08000000, "C0 80 80 00"),
        (0x0FFFFFFF, "FF FF FF 7F"),
    ],
)
def test_variable_length_quantities_of_the_standards_table(value: int, written: str) -> None:
    data = bytes.fromhex(written)

    def damaged(at: int, reason: str) -> PhraseError:
        return PhraseError(reason)

    assert _variable_length(data, 0, len(data), damaged) == (value, len(data))
    with pytest.raises(PhraseError, match="does not end"):
        _variable_length(data, 0, len(data) - 1, damaged)


def test_a_fifth_byte_is_damage() -> None:
    assert "does not end" in refusal(midi("80 80 80 80 00 90 3C 40"))


def test_running_status_goes_on_until_the_next_status() -> None:
    assert notes(f"00 90 3C 40 60 3C 00 00 3E 40 60 3E 00 00 80 3C 00 {END}") == [
        (Fraction(0), Fraction(1, 2), 60),
        (Fraction(1, 2), Fraction(1), 62),
    ]


def test_running_status_survives_meta_events_and_packets() -> None:
    assert notes(f"00 90 3C 40 60 FF 01 01 41 00 3E 40 00 F0 02 01 F7 60 3C 00 00 3E 00 {END}") == [
        (Fraction(0), Fraction(1), 60),
        (Fraction(1, 2), Fraction(1), 62),
    ]


def test_note_on_with_velocity_0_is_a_note_off_and_release_velocity_has_no_effect() -> None:
    assert notes(f"00 90 3C 40 60 90 3C 00 {END}") == notes(f"00 90 3C 40 60 80 3C 7F {END}")


def test_velocity_is_a_share_of_127() -> None:
    phrase = read_midi(midi(f"00 90 3C 01 60 3C 00 00 3C 7F 60 3C 00 {END}"))
    assert [note.velocity for note in phrase.notes] == [1 / 127, 1.0]


def test_overlapping_notes_on_one_key_end_first_in_first_out() -> None:
    """On at 0, on at 96, off at 192, off at 288 ticks: the first off ends the first note."""
    assert notes(f"00 90 3C 40 60 3C 50 60 3C 00 60 3C 00 {END}") == [
        (Fraction(0), Fraction(1), 60),
        (Fraction(1, 2), Fraction(3, 2), 60),
    ]


def test_a_key_repeated_at_one_tick_abuts_in_either_order() -> None:
    off_first = notes(f"00 90 3C 40 60 3C 00 00 3C 40 60 3C 00 {END}")
    on_first = notes(f"00 90 3C 40 60 3C 40 00 3C 00 60 3C 00 {END}")
    assert off_first == on_first == [(Fraction(0), Fraction(1, 2), 60), (Fraction(1, 2), Fraction(1), 60)]


def test_notes_of_other_channels_and_tracks_are_not_mistaken_for_each_other() -> None:
    assert notes(f"00 90 3C 40 60 81 3C 00 60 80 3C 00 {END}", f"30 80 3C 00 {END}") == [
        (Fraction(0), Fraction(1), 60)
    ]


def test_a_note_never_ended_ends_with_its_track() -> None:
    phrase = read_midi(midi("00 90 3C 40 60 90 3E 40 60 FF 2F 00", "00 FF 01 00 87 00 FF 2F 00"))
    assert [note.end for note in phrase.notes] == [1, 1]
    assert phrase.ignored == ("2 missing note-offs (their notes end with the track)",)
    without_end_of_track = read_midi(midi("00 90 3C 40 60 B0 07 40"))
    assert without_end_of_track.notes[0].end == Fraction(1, 2)


def test_notes_without_length_are_dropped_and_listed() -> None:
    phrase = read_midi(midi(f"00 90 3C 40 00 3C 00 00 3E 40 60 3E 00 00 90 40 40 {END}"))
    assert [note.number for note in phrase.notes] == [62]
    assert phrase.ignored == ("2 notes without length",)
    line = refusal(midi(f"00 90 3C 40 00 3C 00 {END}"))
    assert line == (
        "a.mid: has no notes with a length: its only note ends where it starts; "
        "lengthen them and export it again"
    )
    two = midi(f"00 91 3C 40 00 3C 00 00 3E 40 00 3E 00 {END}", f"00 90 3C 40 60 3C 00 {END}")
    assert refusal(two, track=1, channel=2) == (
        "a.mid: has no notes with a length on track 1 and channel 2: all 2 end where they start; "
        "lengthen them and export it again"
    )


def test_notes_come_by_tick_then_by_place_in_the_file() -> None:
    data = midi(
        f"60 90 3C 40 00 3E 40 60 3E 00 00 3C 00 {END}", f"00 90 40 40 60 41 40 60 40 00 00 41 00 {END}"
    )
    assert [note.number for note in read_midi(data).notes] == [64, 60, 62, 65]


def test_tempo_changes_are_exact() -> None:
    """461,538 and 333,333 microseconds a beat, 480 ticks a beat; every change in the middle of a note."""
    tempo = "00 FF 51 03 07 0A E2 83 60 FF 51 03 05 16 15 83 60 FF 51 03 07 A1 20 00 FF 2F 00"
    line = f"81 70 90 3C 40 83 60 3C 00 00 3E 40 83 60 3E 00 {END}"
    first = Fraction(461_538, 1_000_000)
    second = Fraction(333_333, 1_000_000)
    assert notes(tempo, line, division=480) == [
        (first / 2, first + second / 2, 60),
        (first + second / 2, first + second + Fraction(1, 4), 62),
    ]
    assert read_midi(midi(tempo, line, division=480)).tempo_bpm == 60e6 / 461_538


def test_without_a_tempo_it_is_120_until_the_first_change() -> None:
    """Common to the standard: 120 beats a minute where no tempo is given."""
    phrase = read_midi(midi(f"60 FF 51 03 0F 42 40 00 90 3C 40 60 3C 00 {END}"))
    assert (phrase.notes[0].start, phrase.notes[0].end) == (Fraction(1, 2), Fraction(3, 2))
    assert phrase.tempo_bpm == 120.0


def test_of_two_tempos_at_one_tick_the_later_listed_counts() -> None:
    assert notes(f"{TEMPO_120} 00 FF 51 03 0F 42 40 00 90 3C 40 60 3C 00 {END}")[0][1] == 1
    later_track = f"{TEMPO_120} 00 90 3C 40 60 3C 00 {END}"
    assert notes(f"00 FF 51 03 0F 42 40 {END}", later_track)[0][1] == Fraction(1, 2)
    assert notes(later_track, f"00 FF 51 03 0F 42 40 {END}")[0][1] == 1


def test_tempo_changes_count_in_whichever_track_and_whatever_is_chosen() -> None:
    data = midi(f"00 90 3C 40 60 3C 00 {END}", f"00 FF 51 03 0F 42 40 {END}")
    assert read_midi(data, track=1).notes[0].end == 1


@pytest.mark.parametrize("event", ["00 FF 51 03 00 00 00", "00 FF 51 02 07 A1", "00 FF 51 00"])
def test_tempo_changes_without_a_tempo_are_left_out(event: str) -> None:
    phrase = read_midi(midi(f"{event} 00 90 3C 40 60 3C 00 {END}"))
    assert phrase.notes[0].end == Fraction(1, 2)
    assert phrase.ignored == ("1 tempo change without a tempo",)


@pytest.mark.parametrize(
    ("division", "tick_s"),
    [
        (0xE728, Fraction(1, 1000)),  # -25 and 40: the standard's own millisecond division
        (0xE850, Fraction(1, 24 * 80)),
        (0xE764, Fraction(1, 2500)),
        (0xE304, Fraction(1001, 30_000 * 4)),  # -29 is 30 drop-frame, 29.97 frames a second
        (0xE2FF, Fraction(1, 30 * 255)),
    ],
)
def test_smpte_divisions(division: int, tick_s: Fraction) -> None:
    """Minus the frames per second in the upper byte, ticks per frame in the lower; tempo is no matter."""
    data = midi(f"00 FF 51 03 0F 42 40 87 68 90 3C 40 87 68 3C 00 {END}", division=division)
    phrase = read_midi(data)
    assert (phrase.notes[0].start, phrase.notes[0].end) == (1000 * tick_s, 2000 * tick_s)
    assert phrase.tempo_bpm is None
    assert phrase.ignored == ("1 tempo change (time is counted in frames)",)


@pytest.mark.parametrize("division", [0, 0xE700, 0xE628, 0x8028, 0xFF01])
def test_impossible_divisions(division: int) -> None:
    line = refusal(midi(f"00 90 3C 40 60 3C 00 {END}", division=division))
    assert ("of 1 tick, " if division == 0xFF01 else "ticks") in line
    assert ("1 frame a" if division == 0xFF01 else "s") in line


def test_channel_10_is_left_out_unless_asked_for() -> None:
    data = midi(f"00 90 3C 40 00 99 23 40 00 99 24 40 60 90 3C 00 00 99 23 00 00 24 00 {END}")
    phrase = read_midi(data)
    assert [note.number for note in phrase.notes] == [60]
    assert phrase.ignored == ("2 notes on channel 10, percussion by convention",)
    assert [note.number for note in read_midi(data, channel=10).notes] == [35, 36]
    assert read_midi(data, channel=10).ignored == ()


def test_tracks_and_channels_are_chosen_counting_from_1() -> None:
    data = midi(
        f"00 FF 03 04 4C 65 61 64 00 90 3C 40 60 3C 00 {END}",
        f"00 91 3E 40 00 9F 40 40 60 91 3E 00 00 9F 40 00 {END}",
    )
    assert [note.number for note in read_midi(data).notes] == [60, 62, 64]
    assert [note.number for note in read_midi(data, track=1).notes] == [60]
    assert [note.number for note in read_midi(data, track=2).notes] == [62, 64]
    assert [note.number for note in read_midi(data, channel=2).notes] == [62]
    assert [note.number for note in read_midi(data, track=2, channel=16).notes] == [64]
    assert refusal(data, track=0) == "a.mid: track 0 was asked for; the file has tracks 1 to 2"
    assert refusal(data, track=3) == "a.mid: track 3 was asked for; the file has tracks 1 to 2"
    assert refusal(data, channel=0) == "a.mid: channel 0 was asked for; channels are 1 to 16"
    assert refusal(data, channel=17) == "a.mid: channel 17 was asked for; channels are 1 to 16"
    assert refusal(data, track=1, channel=2) == (
        "a.mid: has no notes with a length on track 1 and channel 2; the notes are in "
        'track 1 "Lead" (1 on channel 1); track 2 (1 on channel 2, 1 on channel 16); choose among these'
    )
    alone = midi(f"00 90 3C 40 60 3C 00 {END}")
    assert refusal(alone, track=2) == "a.mid: track 2 was asked for; the file has only track 1"


def test_percussion_alone_says_how_to_hear_it() -> None:
    line = refusal(midi(f"00 99 23 40 60 23 00 {END}"))
    assert "track 1 (1 on channel 10)" in line
    assert line.endswith("; channel 10, percussion by convention, is played only when asked for")


def test_what_has_no_effect_is_listed_in_words() -> None:
    data = midi(
        "00 B0 07 40 00 01 20 00 07 41 00 E0 00 40 00 E0 01 40 00 C0 05 00 D0 22 00 A0 3C 10"
        f"00 F0 03 7E 7F F7 00 F7 02 F8 FE 00 B1 40 7F 00 90 3C 40 60 3C 00 00 3C 00 {END}",
        f"00 B0 0B 01 00 C3 01 {END}",
    )
    assert read_midi(data).ignored == (
        "5 controller changes (controller 1, 7, 11, 64)",
        "2 pitch bends",
        "2 program changes",
        "1 channel aftertouch message",
        "1 key aftertouch message",
        "2 system-exclusive messages",
        "1 note-off without its note",
    )
    assert read_midi(data, track=1, channel=1).ignored[0] == "3 controller changes (controller 1, 7)"


def test_many_controllers_are_listed_in_part() -> None:
    body = "".join(f"00 B0 {number:02X} 00" for number in range(20))
    assert read_midi(midi(f"{body} 00 90 3C 40 60 3C 00 {END}")).ignored == (
        "20 controller changes (controller 0, 1, 2, 3, 4, 5, 6, 7 and others)",
    )


def test_unknown_meta_events_keep_their_time() -> None:
    """mido 1.3.3 drops the delta time of a meta event whose type it does not know."""
    assert notes(f"60 FF 60 02 01 02 00 90 3C 40 60 FF 7E 00 00 3C 00 {END}") == [
        (Fraction(1, 2), Fraction(1), 60)
    ]


@pytest.mark.parametrize(
    "event",
    [
        "00 FF 59 02 7F 05",  # a key signature of 127 sharps
        "00 FF 59 00",
        "00 FF 58 01 04",
        "00 FF 54 05 FF FF FF FF FF",  # an SMPTE offset at 255 o'clock
        "00 FF 00 01 00",
        "00 FF 20 00",
        "00 FF 03 00",
        "00 FF 7F 00",
        "00 F7 03 F3 01 F8",  # an escape packet may hold any bytes
    ],
)
def test_damaged_meta_events_that_say_nothing_of_notes_do_no_harm(event: str) -> None:
    assert notes(f"{event} 00 90 3C 40 60 3C 00 {END}") == [(Fraction(0), Fraction(1, 2), 60)]


def test_titles_come_from_the_first_or_the_chosen_track() -> None:
    plain = f"00 90 3C 40 60 3C 00 {END}"
    named = "00 FF 03 05 46 65 72 72 79 00 FF 03 01 58 " + plain
    data = midi(named, "00 FF 03 02 51 31 " + plain, plain)
    assert read_midi(data).title == "Ferry"
    assert read_midi(data, track=2).title == "Q1"
    assert read_midi(data, Path("songs/quay.mid"), track=3).title == "quay"
    assert read_midi(midi("00 FF 03 02 C3 A9 " + plain)).title == "é"
    assert read_midi(midi("00 FF 03 01 E9 " + plain)).title == "é"
    assert read_midi(midi("00 FF 03 02 20 20 " + plain), Path("quay.mid")).title == "quay"


def test_names_with_control_characters_are_escaped_in_messages() -> None:
    line = refusal(midi(f"00 FF 03 05 1B 5B 33 31 6D 00 90 3C 40 60 3C 00 {END}"), channel=9)
    assert 'track 1 "\\x1b[31m"' in line


def test_other_chunks_and_bytes_after_the_end_are_skipped_and_listed() -> None:
    track = bytes.fromhex(f"00 90 3C 40 60 3C 00 {END}")
    head = chunk(b"MThd", bytes.fromhex("0001 0001 0060") + b"more")
    data = head + chunk(b"XFIH", b"abc") + chunk(b"MTrk", track) + chunk(b"MTrk", track)
    phrase = read_midi(data)
    assert len(phrase.notes) == 1
    assert phrase.ignored == ("1 chunk that is no track", f"{8 + len(track)} bytes after the last track")
    assert read_midi(midi(track) + b"\0").ignored == ("1 byte after the last track",)
    assert len(read_midi(midi(track + b"\xff\xff\xff")).notes) == 1


def test_a_track_may_hold_anything_after_its_end() -> None:
    assert len(notes(f"00 90 3C 40 60 3C 00 {END} FF FF 90")) == 1


def test_format_2_is_refused_with_the_reason() -> None:
    line = refusal(midi(f"00 90 3C 40 60 3C 00 {END}", form=2))
    assert "format 2, patterns without a common time" in line
    assert "format 3, which does not exist" in refusal(midi(END, form=3))


@pytest.mark.parametrize(
    ("data", "said"),
    [
        (b"", "is not a Standard MIDI File"),
        (b"MThd", "is truncated inside its header"),
        (b"MThd\0\0\0\x06\0\x01\0\x01\0", "is truncated inside its header"),
        (b"title = 'x'", "is not a Standard MIDI File"),
        (b"RIFF\0\0\0\0RMIDdata", "is MIDI wrapped in RIFF; export it as a plain Standard MIDI File"),
        (b"MThd\0\0\0\x04\0\x01\0\x01\0\x60", "has a damaged header of 4 bytes"),
        (b"MThd\xff\xff\xff\xff\0\x01\0\x01\0\x60MTrk", "is truncated: it announces 1 track and holds 0"),
        (midi(count=0), "announces no tracks"),
        (midi(END, count=3), "is truncated: it announces 3 tracks and holds 1"),
        (midi(END), "has no notes; export it with the notes in it"),
        (FORMAT_1[:-1], "is truncated: track 4 claims 21 bytes and the file has 20 left"),
        (b"MThd\0\0\0\x01\0\x01\0\x01\0\x60", "has a damaged header of 1 byte where"),
        (midi("00 F0 01"), "is damaged in track 1, byte 24 of the file: an event that claims 1 byte, more"),
        (midi("00"), "is damaged in track 1, byte 23 of the file: a delta time without an event"),
        (midi("00 3C 40"), "is damaged in track 1, byte 23 of the file: data before any status"),
        (midi("00 90 3C"), "is damaged in track 1, byte 24 of the file: a message with missing"),
        (midi("00 90 3C 80"), "is damaged in track 1, byte 24 of the file: a message with missing"),
        (midi("00 F8"), "is damaged in track 1, byte 24 of the file: status 0xF8"),
        (midi("00 F1 01"), "is damaged in track 1, byte 24 of the file: status 0xF1"),
        (midi("00 FF"), "is damaged in track 1, byte 25 of the file: a length or delta time that"),
        (midi("00 FF 01 05 41"), "is damaged in track 1, byte 24 of the file: an event that claims 5 bytes"),
        (midi("00 F0 FF FF FF 7F"), "is damaged in track 1, byte 24 of the file: an event that claims 268"),
        (midi("00 FF 01 80 80 80 80 80"), "is damaged in track 1"),
    ],
    ids=range(23),
)
def test_damage_gets_one_line(data: bytes, said: str) -> None:
    assert refusal(data).startswith("a.mid: " + said)


def test_every_truncation_is_told() -> None:
    for data in (FORMAT_0, FORMAT_1):
        for length in range(len(data)):
            assert refusal(data[:length]).startswith("a.mid: ")


def test_a_few_bytes_that_claim_days_are_refused_without_work() -> None:
    """Some 52,000 days: 16,777,215 microseconds a beat, one tick a beat, and the longest delta time."""
    body = "00 FF 51 03 FF FF FF 00 90 3C 40 FF FF FF 7F 3C 00 00 FF 2F 00"
    data = midi(body, division=1, form=0)
    assert len(data) <= 44
    tracemalloc.start()
    try:
        line = refusal(data)
        assert tracemalloc.get_traced_memory()[1] < 1_000_000
    finally:
        tracemalloc.stop()
    assert "lasts 52,124 days, and the longest allowed is 2 h" in line
    assert read_midi(data, longest_s=1e10).end == Fraction(268_435_455 * 16_777_215, 1_000_000)


def test_silence_counts_towards_the_length() -> None:
    data = midi("00 90 3C 40 60 3C 00 FF FF FF 7F FF 2F 00")
    assert "days" in refusal(data)


def test_the_length_limit_includes_its_end() -> None:
    data = midi(f"00 90 3C 40 60 3C 00 {END}")
    assert read_midi(data, longest_s=0.5).end == Fraction(1, 2)
    assert "lasts 500 ms, and the longest allowed is 499 ms" in refusal(data, longest_s=0.499)


def test_a_million_notes_are_refused_before_they_are_all_read(monkeypatch: pytest.MonkeyPatch) -> None:
    from glidesmith import midi as midi_module

    pairs = 1_000_000 if LONG else 2_000
    if not LONG:
        monkeypatch.setattr(midi_module, "MOST_NOTES", 1_000)
    data = midi(bytes.fromhex("00 90 3C 40 01 3C 00") + bytes.fromhex("00 3C 40 01 3C 00") * (pairs - 1))
    assert f"has over {midi_module.MOST_NOTES:,} notes" in refusal(data)
    assert (MOST_NOTES, MOST_EVENTS) == (100_000, 1_000_000)


def test_events_are_bounded_too(monkeypatch: pytest.MonkeyPatch) -> None:
    from glidesmith import midi as midi_module

    monkeypatch.setattr(midi_module, "MOST_EVENTS", 1_000)
    assert "has over 1,000 events" in refusal(
        midi(bytes.fromhex("00 B0 07 40") + bytes.fromhex("00 07 40") * 1_000)
    )
    many = [bytes.fromhex("00 B0 07 40")] * 1_001
    assert "has over 1,000 events" in refusal(midi(*many))


@pytest.mark.parametrize("event", ["00 07 40", "00 3C 00", "00 3C 40", "00 FF 01 00", "00 FF 51 03 00 00 01"])
def test_large_files_are_read_in_bounded_memory(event: str) -> None:
    size, most = (6_000_000, 120_000_000) if LONG else (60_000, 12_000_000)
    read_midi(FORMAT_0)  # what importing costs is not counted
    repeated = bytes.fromhex(event)
    data = midi(bytes.fromhex("00 90 3C 40") + repeated * (size // len(repeated)) + bytes.fromhex("60 3C 00"))
    tracemalloc.start()
    try:
        with contextlib.suppress(PhraseError):
            read_midi(data)
        assert tracemalloc.get_traced_memory()[1] < most
    finally:
        tracemalloc.stop()


def random_song(seed: int) -> tuple[bytes, list[tuple[Fraction, Fraction, int, float]]]:
    """A song written by mido, and its notes timed by walking tick by tick through the tempo map."""
    rng = random.Random(seed)
    division = rng.choice([1, 24, 96, 480, 960])
    length = 400
    tempo_at = {rng.randrange(length): rng.randrange(200_000, 1_500_000) for _ in range(rng.randrange(6))}
    clock, now, tempo = [], Fraction(0), 500_000
    for tick in range(length + 1):
        clock.append(now)
        tempo = tempo_at.get(tick, tempo)
        now += Fraction(tempo, 1_000_000 * division)
    file = mido.MidiFile(type=1, ticks_per_beat=division)
    tempo_track = mido.MidiTrack()
    file.tracks.append(tempo_track)
    last = 0
    for tick, value in sorted(tempo_at.items()):
        tempo_track.append(mido.MetaMessage("set_tempo", tempo=value, time=tick - last))
        last = tick
    expected = []
    for track_number in range(rng.randrange(1, 4)):
        track, last = mido.MidiTrack(), 0
        file.tracks.append(track)
        tick = 0
        for place in range(rng.randrange(1, 12)):
            tick += rng.randrange(10)
            end, number, velocity = tick + rng.randrange(1, 20), rng.randrange(128), rng.randrange(1, 128)
            track.append(mido.Message("note_on", channel=3, note=number, velocity=velocity, time=tick - last))
            track.append(mido.Message("pitchwheel", channel=3, pitch=99))
            track.append(mido.Message("note_off", channel=3, note=number, time=end - tick))
            expected.append((tick, track_number, place, (clock[tick], clock[end], number, velocity / 127)))
            last = tick = end
    out = BytesIO()
    file.save(file=out)
    return out.getvalue(), [row[3] for row in sorted(expected, key=lambda row: row[:3])]


def test_files_that_mido_writes_read_as_what_was_meant() -> None:
    for seed in range(2000 if LONG else 60):
        data, expected = random_song(seed)
        found = [(note.start, note.end, note.number, note.velocity) for note in read_midi(data).notes]
        assert found == expected, seed


def test_load_phrase_reads_midi_by_its_content(tmp_path: Path) -> None:
    file = tmp_path / "quay.bin"
    file.write_bytes(FORMAT_1)
    phrase = load_phrase(file, track=3)
    assert phrase.title == "quay"
    assert phrase.path == file
    assert [note.number for note in phrase.notes] == [67]
    with pytest.raises(PhraseError, match="the longest allowed is 1 s"):
        load_phrase(file, longest_s=1.0)


def test_all_velocities_and_keys_come_through() -> None:
    body = b"".join(bytes([0, 0x90, key, max(key, 1), 1, 0x80, key, 0]) for key in range(128))
    found = read_midi(midi(body)).notes
    assert [note.number for note in found] == list(range(128))
    assert [note.velocity for note in found] == [max(key, 1) / 127 for key in range(128)]
