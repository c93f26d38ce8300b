"""Phrases from Standard MIDI Files: formats 0 and 1, any division, any tempo map.

The source is the MIDI Manufacturers Association's "Standard MIDI Files 1.0". `mido` decodes the messages.
Chunks, delta times, running status and the division are read here: mido 1.3.3 takes an SMPTE division for a
negative number of ticks, forgets the delta time of meta events it does not know, refuses escape packets and
files with other chunks, and has no bound on what a damaged length makes it do.

Decisions where the standard leaves room:

- A note-off ends the earliest note still sounding on its channel and key, within its track: first in, first
  out.
- A note that is never ended ends with its track. A note without length is dropped, and said to be.
- Running status goes on after meta events and system-exclusive packets. The standard ends it there, but
  many files rely on it, and a file that keeps to the standard reads the same.
- Tempo changes count wherever they stand; with an SMPTE division they have no meaning.
"""

from bisect import bisect_right
from collections import Counter, deque
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from fractions import Fraction
from functools import lru_cache
from pathlib import Path
from typing import Any

from glidesmith.errors import PhraseError
from glidesmith.phrase import LONGEST_S, MOST_NOTES, Note, Phrase, require_length
from glidesmith.text import counted, file_name, shortened

MOST_EVENTS = 1_000_000
"""The most events that are read of one file."""

PERCUSSION_CHANNEL = 10
_DEFAULT_TEMPO_US = 500_000
_MOST_LISTED = 8
_META, _SYSEX, _ESCAPE = 0xFF, 0xF0, 0xF7
_TRACK_NAME, _END_OF_TRACK, _TEMPO = 0x03, 0x2F, 0x51
_FRAME_S = {24: Fraction(1, 24), 25: Fraction(1, 25), 29: Fraction(1001, 30_000), 30: Fraction(1, 30)}
_DATA_BYTES = {0x80: 2, 0x90: 2, 0xA0: 2, 0xB0: 2, 0xC0: 1, 0xD0: 1, 0xE0: 2}
_MESSAGES = {
    "pitchwheel": ("pitch bend", "pitch bends"),
    "program_change": ("program change", "program changes"),
    "aftertouch": ("channel aftertouch message", "channel aftertouch messages"),
    "polytouch": ("key aftertouch message", "key aftertouch messages"),
}

Fail = Callable[[str], PhraseError]


def read_midi(
    data: bytes,
    path: Path | None = None,
    track: int | None = None,
    channel: int | None = None,
    longest_s: float = LONGEST_S,
) -> Phrase:
    """The phrase in the bytes of a Standard MIDI File.

    ``track`` counts from 1 in the file's order, ``channel`` is 1 to 16; without ``channel``, all but
    channel 10, which is percussion by convention. ``longest_s`` bounds what the file claims to last,
    silence included. Velocity is the note-on's divided by 127.

    Raises PhraseError with one line.
    """
    prefix = f"{file_name(path)}: " if path else ""

    def fail(line: str) -> PhraseError:
        return PhraseError(prefix + line)

    header = _read_header(data, fail)
    chunks, remarks = _track_chunks(data, header, fail)
    choice = _Choice(track, channel, len(chunks), fail)
    tracks = _read_tracks(data, chunks, choice, fail)
    clock = _Clock(header, [tempo for each in tracks for tempo in each.tempos])
    require_length(clock.seconds(max(each.end_tick for each in tracks)), longest_s, prefix[:-2])
    found = sorted((note for each in tracks for note in each.notes), key=lambda note: note.order)
    if not found:
        raise fail(_nothing_chosen(tracks, choice))
    notes = tuple(
        Note(clock.seconds(note.order[0]), clock.seconds(note.end), note.number, note.velocity / 127)
        for note in found
    )
    ignored = (*_ignored(tracks, choice, header), *remarks)
    return Phrase(_title(tracks, choice, path), notes, ignored, path, clock.first_tempo_bpm)


@dataclass(frozen=True, slots=True)
class _Header:
    """The header chunk. ``tick_s`` is the length of a tick where the division is SMPTE's, else None."""

    format: int
    track_count: int
    ticks_per_beat: int
    tick_s: Fraction | None
    end: int


def _read_header(data: bytes, fail: Fail) -> _Header:
    if data[:4] == b"RIFF":
        raise fail("is MIDI wrapped in RIFF; export it as a plain Standard MIDI File (.mid)")
    if data[:4] != b"MThd":
        raise fail(
            "is not a Standard MIDI File (it does not begin with MThd); export it as one, format 0 or 1"
        )
    if len(data) < 14:
        raise fail("is truncated inside its header; copy or export it again")
    size = int.from_bytes(data[4:8], "big")
    file_format, track_count, division = (int.from_bytes(data[i : i + 2], "big") for i in (8, 10, 12))
    if size < 6:
        damaged = counted(size, "byte", "bytes")
        raise fail(f"has a damaged header of {damaged} where 6 belong; export it again")
    if file_format == 2:
        raise fail(
            "is of format 2, patterns without a common time; export each pattern as a file of format 0 or 1"
        )
    if file_format > 2:
        raise fail(f"is of format {file_format}, which does not exist; export it as format 0 or 1")
    if track_count == 0:
        raise fail("announces no tracks; export it again")
    ticks_per_beat, tick_s = _read_division(division, fail)
    return _Header(file_format, track_count, ticks_per_beat, tick_s, 8 + size)


def _read_division(division: int, fail: Fail) -> tuple[int, Fraction | None]:
    """Ticks per beat, or with the top bit set minus the frames per second over the ticks per frame.

    29 stands for 30 drop-frame, which runs at 30000/1001 frames per second.
    """
    if division == 0:
        raise fail("counts no ticks in a beat; export it again")
    if division < 0x8000:
        return division, None
    frames, ticks = 256 - (division >> 8), division & 0xFF
    if frames not in _FRAME_S or ticks == 0:
        found = f"{counted(frames, 'frame', 'frames')} a second of {counted(ticks, 'tick', 'ticks')}"
        raise fail(
            f"counts time in {found}, where 24, 25, 29 or 30 frames "
            "and at least one tick are possible; export it again"
        )
    return 0, _FRAME_S[frames] / ticks


def _track_chunks(data: bytes, header: _Header, fail: Fail) -> tuple[list[tuple[int, int]], list[str]]:
    """Where each announced track begins and ends, and remarks on what else the file holds."""
    chunks: list[tuple[int, int]] = []
    at, others = header.end, 0
    while len(chunks) < header.track_count:
        begin = at + 8
        if begin > len(data):
            raise fail(
                f"is truncated: it announces {counted(header.track_count, 'track', 'tracks')} "
                f"and holds {len(chunks):,}; "
                "copy or export it again"
            )
        at = begin + int.from_bytes(data[at + 4 : begin], "big")
        if data[begin - 8 : begin - 4] != b"MTrk":
            others += 1
            continue
        if at > len(data):
            raise fail(
                f"is truncated: track {len(chunks) + 1} claims {counted(at - begin, 'byte', 'bytes')} "
                f"and the file has {len(data) - begin:,} left; copy or export it again"
            )
        chunks.append((begin, at))
    remarks = [counted(others, "chunk that is no track", "chunks that are no tracks")] if others else []
    if at < len(data):
        remarks.append(counted(len(data) - at, "byte after the last track", "bytes after the last track"))
    return chunks, remarks


@dataclass(frozen=True, slots=True)
class _Choice:
    """What the user asked to hear: one track or all, one channel or all but percussion."""

    track: int | None
    channel: int | None
    track_count: int
    fail: Fail

    def __post_init__(self) -> None:
        if self.channel is not None and not 1 <= self.channel <= 16:
            raise self.fail(f"channel {self.channel} was asked for; channels are 1 to 16")
        if self.track is not None and not 1 <= self.track <= self.track_count:
            there = f"tracks 1 to {self.track_count:,}" if self.track_count > 1 else "only track 1"
            raise self.fail(f"track {self.track} was asked for; the file has {there}")

    def has_track(self, number: int) -> bool:
        return self.track is None or self.track == number

    def has_channel(self, number: int) -> bool:
        return number != PERCUSSION_CHANNEL if self.channel is None else number == self.channel


@dataclass(frozen=True, slots=True)
class _TickNote:
    """A note in ticks. ``order`` is its start, its track and its place there."""

    order: tuple[int, int, int]
    end: int
    number: int
    velocity: int


@dataclass(slots=True)
class _Track:
    """What one track holds: the chosen notes, the tempo changes, and counts of all else."""

    number: int
    name: str = ""
    end_tick: int = 0
    notes: list[_TickNote] = field(default_factory=list)
    tempos: list[tuple[int, int]] = field(default_factory=list)
    note_ons: Counter[int] = field(default_factory=Counter)
    """By channel, chosen or not."""
    controllers: Counter[int] = field(default_factory=Counter)
    ignored: Counter[tuple[str, str]] = field(default_factory=Counter)
    """What has no effect, by its name in singular and plural."""


def _read_tracks(data: bytes, chunks: list[tuple[int, int]], choice: _Choice, fail: Fail) -> list[_Track]:
    tracks: list[_Track] = []
    events = notes = 0
    for number, (begin, end) in enumerate(chunks, 1):
        reader = _TrackReader(_Track(number), choice)
        for tick, status, content in _events(data, begin, end, number, fail):
            events += 1
            if events > MOST_EVENTS:
                raise fail(f"has over {MOST_EVENTS:,} events, the most that is read; split it")
            if reader.take(tick, status, content):
                notes += 1
                if notes > MOST_NOTES:
                    raise fail(
                        f"has over {MOST_NOTES:,} notes, the most there may be; choose a track or split it"
                    )
        tracks.append(reader.finished())
    return tracks


def _events(data: bytes, begin: int, end: int, track: int, fail: Fail) -> Iterator[tuple[int, int, bytes]]:
    """Tick, status and content of each event of a track, in order, up to its end-of-track event.

    The content of a meta event begins with its type; that of a channel message is its data bytes.
    """

    def damaged(at: int, reason: str) -> PhraseError:
        return fail(
            f"is damaged in track {track}, byte {at:,} of the file: {reason}; copy or export it again"
        )

    at, tick, running = begin, 0, 0
    while at < end:
        delta, at = _variable_length(data, at, end, damaged)
        tick += delta
        if at == end:
            raise damaged(at, "a delta time without an event")
        status = data[at]
        if status >= 0x80:
            at += 1
        elif running:
            status = running
        else:
            raise damaged(at, "data before any status")
        if status < 0xF0:
            running = status
            stop = at + _DATA_BYTES[status & 0xF0]
            content = data[at:stop]
            if stop > end or not content.isascii():
                raise damaged(at, "a message with missing or impossible data")
        elif status in (_META, _SYSEX, _ESCAPE):
            length, content_at = _variable_length(data, at + (status == _META), end, damaged)
            stop = content_at + length
            if stop > end:
                claimed = counted(length, "byte", "bytes")
                raise damaged(at, f"an event that claims {claimed}, more than its track has left")
            content = (data[at : at + 1] if status == _META else b"") + data[content_at:stop]
        else:
            raise damaged(at, f"status 0x{status:02X}, which no file may hold")
        at = stop
        yield tick, status, content
        if status == _META and content[0] == _END_OF_TRACK:
            return


def _variable_length(
    data: bytes, at: int, end: int, damaged: Callable[[int, str], PhraseError]
) -> tuple[int, int]:
    """A variable-length quantity of at most four bytes, seven bits in each, and where it ends."""
    value = 0
    for place in range(at, min(at + 4, end)):
        byte = data[place]
        value = value << 7 | byte & 0x7F
        if byte < 0x80:
            return value, place + 1
    raise damaged(at, "a length or delta time that does not end")


@lru_cache(maxsize=4096)
def _decoded(raw: bytes) -> Any:
    from mido import Message

    return Message.from_bytes(raw)


class _TrackReader:
    """Fills a `_Track` from its events."""

    def __init__(self, track: _Track, choice: _Choice) -> None:
        self._track = track
        self._choice = choice
        self._chosen = choice.has_track(track.number)
        self._sounding: dict[tuple[int, int], deque[tuple[int, int, int]]] = {}
        self._count = 0

    def take(self, tick: int, status: int, content: bytes) -> bool:
        """Take one event in; True where it begins a chosen note."""
        self._track.end_tick = tick
        if status == _META:
            self._take_meta(tick, content[0], content[1:])
        elif status >= 0xF0:
            self._ignore("system-exclusive message", "system-exclusive messages")
        else:
            return self._take_message(tick, _decoded(bytes((status,)) + content))
        return False

    def finished(self) -> _Track:
        """The track, with the notes that were never ended ended now."""
        for (_, number), begun in self._sounding.items():
            for start, velocity, place in begun:
                if self._add(start, self._track.end_tick, number, velocity, place):
                    self._ignore(
                        "missing note-off (its note ends with the track)",
                        "missing note-offs (their notes end with the track)",
                    )
        return self._track

    def _take_meta(self, tick: int, kind: int, content: bytes) -> None:
        if kind == _TRACK_NAME and not self._track.name:
            self._track.name = _readable(content[:1000])
        elif kind == _TEMPO:
            tempo_us = int.from_bytes(content[:3], "big") if len(content) >= 3 else 0
            if tempo_us:
                if self._track.tempos and self._track.tempos[-1][0] == tick:
                    self._track.tempos.pop()
                self._track.tempos.append((tick, tempo_us))
            else:
                self._ignore("tempo change without a tempo", "tempo changes without a tempo")

    def _take_message(self, tick: int, message: Any) -> bool:
        channel = message.channel + 1
        is_note_on: bool = message.type == "note_on" and message.velocity > 0
        if is_note_on:
            self._track.note_ons[channel] += 1
        if not (self._chosen and self._choice.has_channel(channel)):
            return False
        if is_note_on:
            begun = self._sounding.setdefault((channel, message.note), deque())
            begun.append((tick, message.velocity, self._count))
            self._count += 1
        elif message.type in ("note_on", "note_off"):
            self._end_note(tick, channel, message.note)
        elif message.type == "control_change":
            self._track.controllers[message.control] += 1
        else:
            self._ignore(*_MESSAGES[message.type])
        return is_note_on

    def _end_note(self, tick: int, channel: int, number: int) -> None:
        begun = self._sounding.get((channel, number))
        if begun:
            start, velocity, place = begun.popleft()
            self._add(start, tick, number, velocity, place)
        else:
            self._ignore("note-off without its note", "note-offs without their notes")

    def _add(self, start: int, end: int, number: int, velocity: int, place: int) -> bool:
        """Keep a note, and say whether it has a length to be kept for."""
        if end > start:
            order = (start, self._track.number, place)
            self._track.notes.append(_TickNote(order, end, number, velocity))
        else:
            self._ignore("note without length", "notes without length")
        return end > start

    def _ignore(self, one: str, several: str) -> None:
        if self._chosen:
            self._track.ignored[one, several] += 1


def _readable(content: bytes) -> str:
    """Text of a meta event: UTF-8 where it is that, else Latin-1."""
    try:
        return content.decode("utf-8").strip()
    except UnicodeDecodeError:
        return content.decode("latin-1").strip()


class _Clock:
    """From ticks to exact seconds, through the tempo map or by frames."""

    def __init__(self, header: _Header, tempos: list[tuple[int, int]]) -> None:
        """``tempos`` are ticks and microseconds per beat in file order; at one tick the later one counts."""
        self._ticks, self._steps, self._steps_per_tick = [0], [0], [1]
        self.first_tempo_bpm: float | None = None
        if header.tick_s is not None:
            self._step_s = header.tick_s
            return
        self._step_s = Fraction(1, 1_000_000 * header.ticks_per_beat)
        self._steps_per_tick = [_DEFAULT_TEMPO_US]
        for tick, tempo_us in sorted(tempos, key=lambda tempo: tempo[0]):
            passed = (tick - self._ticks[-1]) * self._steps_per_tick[-1]
            self._steps.append(self._steps[-1] + passed)
            self._ticks.append(tick)
            self._steps_per_tick.append(tempo_us)
        self.first_tempo_bpm = 60e6 / self._steps_per_tick[bisect_right(self._ticks, 0) - 1]

    def seconds(self, tick: int) -> Fraction:
        """When a tick comes."""
        at = bisect_right(self._ticks, tick) - 1
        return (self._steps[at] + (tick - self._ticks[at]) * self._steps_per_tick[at]) * self._step_s


def _title(tracks: list[_Track], choice: _Choice, path: Path | None) -> str:
    """The chosen track's name, else the first one's, which names the whole piece."""
    name = tracks[(choice.track or 1) - 1].name
    return name or (path.stem if path else "untitled")


def _ignored(tracks: list[_Track], choice: _Choice, header: _Header) -> tuple[str, ...]:
    """What the chosen tracks hold that has no effect, in readable lines."""
    chosen = [track for track in tracks if choice.has_track(track.number)]
    lines = []
    percussion = sum(track.note_ons[PERCUSSION_CHANNEL] for track in chosen)
    if percussion and choice.channel is None:
        lines.append(f"{counted(percussion, 'note', 'notes')} on channel 10, percussion by convention")
    controllers = sum((track.controllers for track in chosen), Counter[int]())
    if controllers:
        numbers = sorted(controllers)
        listed = ", ".join(map(str, numbers[:_MOST_LISTED])) + (
            " and others" if len(numbers) > _MOST_LISTED else ""
        )
        changes = counted(controllers.total(), "controller change", "controller changes")
        lines.append(f"{changes} (controller {listed})")
    if header.tick_s is not None and (tempos := sum(len(track.tempos) for track in tracks)):
        lines.append(
            counted(
                tempos,
                "tempo change (time is counted in frames)",
                "tempo changes (time is counted in frames)",
            )
        )
    others = sum((track.ignored for track in chosen), Counter[tuple[str, str]]())
    lines += [counted(number, *names) for names, number in others.items()]
    return tuple(lines)


def _nothing_chosen(tracks: list[_Track], choice: _Choice) -> str:
    """Why no note is left, and where there are some."""
    with_notes = [track for track in tracks if track.note_ons]
    if not with_notes:
        return "has no notes; export it with the notes in it"
    asked = [f"track {choice.track}"] if choice.track is not None else []
    asked += [f"channel {choice.channel}"] if choice.channel is not None else []
    if empty := _chosen_count(tracks, choice):
        place = f" on {' and '.join(asked)}" if asked else ""
        ends = "its only note ends where it starts" if empty == 1 else f"all {empty:,} end where they start"
        return f"has no notes with a length{place}: {ends}; lengthen them and export it again"
    listed = "; ".join(_where_notes_are(track) for track in with_notes[:_MOST_LISTED])
    more = " and more tracks" if len(with_notes) > _MOST_LISTED else ""
    hint = "; choose among these"
    if choice.channel is None and any(track.note_ons[PERCUSSION_CHANNEL] for track in with_notes):
        hint = "; channel 10, percussion by convention, is played only when asked for"
    searched = " and ".join(asked) or "channels 1 to 9 and 11 to 16"
    return f"has no notes with a length on {searched}; the notes are in {listed}{more}{hint}"


def _chosen_count(tracks: list[_Track], choice: _Choice) -> int:
    """How many notes begin on the chosen tracks and channels."""
    return sum(
        count
        for track in tracks
        if choice.has_track(track.number)
        for channel, count in track.note_ons.items()
        if choice.has_channel(channel)
    )


def _where_notes_are(track: _Track) -> str:
    name = f' "{shortened(track.name, 30)}"' if track.name else ""
    channels = ", ".join(
        f"{count:,} on channel {channel}" for channel, count in sorted(track.note_ons.items())
    )
    return f"track {track.number}{name} ({channels})"
