"""Phrases: the notes that a patch is auditioned with, from TOML files and Standard MIDI Files.

Times are exact: TOML's decimals are read as rationals and MIDI's ticks go through the tempo map as whole
numbers, so that notes that abut do abut. Seconds are `fractions.Fraction`.
"""

import os
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import TYPE_CHECKING, Any

from glidesmith.errors import PhraseError, SettingError
from glidesmith.text import (
    Mistakes,
    decoded,
    file_name,
    read_bytes,
    shortened,
    shown,
    suggestion,
    toml_mapping,
)
from glidesmith.units import note_number, spoken_duration

if TYPE_CHECKING:
    from glidesmith.preset import Preset

MOST_NOTES = 100_000
"""The most notes that a phrase may have."""

LONGEST_S = 7200.0
"""How long a phrase may be unless the limit is raised: two hours."""

LOWEST_BPM, HIGHEST_BPM = 10, 1000
DEFAULT_BPM = 120

MOST_MIDI_BYTES = 16_000_000
MOST_TOML_BYTES = 8_000_000
_MIDI_SUFFIXES = (".mid", ".midi", ".smf", ".kar", ".rmi")
_KEYS = ("title", "tempo_bpm", "notes")
_NOTE_KEYS = ("at", "lasts", "note", "velocity")
_EXAMPLE = 'notes = [{ at = 0.0, lasts = 1.0, note = "D3" }]'
_MOST_DIGITS = 400


@dataclass(frozen=True, slots=True)
class Note:
    """One note, in exact seconds with start < end; MIDI ``number`` 0 to 127, ``velocity`` 0 to 1."""

    start: Fraction
    end: Fraction
    number: int
    velocity: float = 1.0


@dataclass(frozen=True, slots=True)
class Phrase:
    """Notes in the order in which the file lists them; in a MIDI file by tick, then by place in the file.

    ``ignored`` says in readable lines what the file holds that has no effect. ``tempo_bpm`` is the tempo at
    the start, None where the file counts time without beats.
    """

    title: str
    notes: tuple[Note, ...]
    ignored: tuple[str, ...] = ()
    path: Path | None = None
    tempo_bpm: float | None = None

    @property
    def end(self) -> Fraction:
        """When the last note ends, in exact seconds."""
        return max((note.end for note in self.notes), default=Fraction(0))

    def content_hash(self) -> str:
        """SHA-256, in hexadecimal, of the exact notes in their order; title and file don't count."""
        import hashlib

        digest = hashlib.sha256()
        for note in self.notes:
            digest.update(f"{note.start} {note.end} {note.number} {note.velocity.hex()}\n".encode("ascii"))
        return digest.hexdigest()


def load_phrase(
    path: str | os.PathLike[str],
    track: int | None = None,
    channel: int | None = None,
    longest_s: float = LONGEST_S,
) -> Phrase:
    """Read a phrase file, a Standard MIDI File or TOML as its content says.

    ``track`` (from 1) and ``channel`` (1 to 16) choose among the notes of a MIDI file; channel 10 is left
    out unless asked for. ``longest_s`` is how long the phrase may be, in seconds.

    Raises PhraseError, a line for each mistake, each naming the file.
    """
    path = Path(path)
    return parse_phrase_file(read_bytes(path, MOST_MIDI_BYTES, PhraseError), path, track, channel, longest_s)


def parse_phrase_file(
    data: bytes,
    path: Path,
    track: int | None = None,
    channel: int | None = None,
    longest_s: float = LONGEST_S,
) -> Phrase:
    """What `load_phrase` makes of a file's content; ``path`` is its name. Raises PhraseError."""
    if data.startswith((b"MThd", b"RIFF")) or path.suffix.lower() in _MIDI_SUFFIXES:
        from glidesmith.midi import read_midi

        return read_midi(data, path, track, channel, longest_s)
    where = file_name(path)
    if len(data) > MOST_TOML_BYTES:
        raise PhraseError(f"{where}: is over {MOST_TOML_BYTES:,} bytes of text; split the phrase")
    if track is not None or channel is not None:
        raise PhraseError(f"{where}: is no MIDI file, so no track or channel can be chosen; leave them out")
    return parse_phrase(decoded(data, where, PhraseError), path, longest_s)


def load_preset_phrase(
    preset: "Preset",
    track: int | None = None,
    channel: int | None = None,
    longest_s: float = LONGEST_S,
) -> Phrase:
    """The phrase that a preset names; ``track`` and ``channel`` take the place of the preset's own.

    Raises PhraseError where it can't be used, each line naming the preset and its key as well as the file;
    SettingError where the preset names none.
    """
    prefix = f"{preset.where}: " if preset.where else ""
    named = preset.phrase
    if named is None:
        raise SettingError(f"{prefix}names no phrase; add [phrase] with file to it")
    track = named.track if track is None else track
    channel = named.channel if channel is None else channel
    try:
        return load_phrase(named.file, track, channel, longest_s)
    except PhraseError as problem:
        raise PhraseError(*(f"{prefix}phrase.file: {line}" for line in problem.lines)) from None


def parse_phrase(text: str, path: Path | None = None, longest_s: float = LONGEST_S) -> Phrase:
    """Read the text of a TOML phrase. Raises PhraseError, a line for each mistake."""
    where = file_name(path) if path else ""
    mapping = toml_mapping(text, where, PhraseError, parse_float=_exact)
    mistakes = Mistakes(where)
    for name, value in mapping.items():
        if name not in _KEYS:
            mistakes.add(_unknown("", name, value, _KEYS, mistakes))
    title = _title(mapping, path, mistakes)
    tempo_bpm = _tempo(mapping, mistakes)
    notes = _notes(mapping, Fraction(60) / tempo_bpm, mistakes)
    mistakes.raise_as(PhraseError)
    require_length(max(note.end for note in notes), longest_s, where)
    return Phrase(title, notes, (), path, float(tempo_bpm))


def require_length(end: Fraction, longest_s: float, where: str) -> None:
    """Raise PhraseError where a phrase is longer than allowed; nothing here costs more for a longer one."""
    if end > longest_s:
        prefix = f"{where}: " if where else ""
        raise PhraseError(
            f"{prefix}lasts {spoken_duration(end)}, and the longest allowed is {spoken_duration(longest_s)}; "
            "shorten it or raise the limit"
        )


class _Unreadable(str):
    """A number in a file that no exact value is made of; it fails the checks, quoted as it was written."""

    __slots__ = ()


def _exact(text: str) -> object:
    """A TOML decimal as the rational it says, where that is of a sane size."""
    plain = text.replace("_", "").lower()
    exponent = plain.partition("e")[2]
    try:
        if len(plain) <= _MOST_DIGITS and abs(int(exponent or 0)) <= _MOST_DIGITS:
            return Fraction(plain)
    except ValueError:
        pass  # inf and nan
    return _Unreadable(text)


def _is_number(value: object) -> bool:
    return isinstance(value, int | Fraction) and not isinstance(value, bool)


def _quoted(value: object) -> str:
    return shortened(value) if isinstance(value, _Unreadable) else shown(value)


def _unknown(place: str, name: str, value: object, names: tuple[str, ...], mistakes: Mistakes) -> str:
    near = "" if mistakes.full else suggestion(name, names) or f"; a phrase has {', '.join(names)}"
    return f"{place}{shortened(name)} = {_quoted(value)}: there is no such key{near}"


def _title(mapping: Mapping[str, Any], path: Path | None, mistakes: Mistakes) -> str:
    title = mapping.get("title", path.stem if path else "untitled")
    if isinstance(title, str) and not isinstance(title, _Unreadable):
        return title
    mistakes.add(f"title = {_quoted(title)}: must be text, in quotes")
    return ""


def _tempo(mapping: Mapping[str, Any], mistakes: Mistakes) -> Fraction:
    tempo = mapping.get("tempo_bpm", DEFAULT_BPM)
    if _is_number(tempo) and LOWEST_BPM <= tempo <= HIGHEST_BPM:
        return Fraction(tempo)
    mistakes.add(
        f"tempo_bpm = {_quoted(tempo)}: must be beats a minute, a number from {LOWEST_BPM} to {HIGHEST_BPM:,}"
    )
    return Fraction(DEFAULT_BPM)


def _notes(mapping: Mapping[str, Any], beat_s: Fraction, mistakes: Mistakes) -> tuple[Note, ...]:
    entries = mapping.get("notes")
    if entries is None:
        mistakes.add(f"notes is missing: list what is played, as {_EXAMPLE}")
    elif not isinstance(entries, list):
        mistakes.add(f"notes = {_quoted(entries)}: must be a list, as {_EXAMPLE}")
    elif not entries:
        mistakes.add(f"notes is empty: a phrase needs at least one, as {_EXAMPLE}")
    elif len(entries) > MOST_NOTES:
        mistakes.add(f"notes has {len(entries):,} entries, and the most is {MOST_NOTES:,}; split the phrase")
    else:
        count = len(entries)
        return tuple(
            note
            for index, entry in enumerate(entries, 1)
            if (note := _note(entry, f"note {index} of {count}", beat_s, mistakes))
        )
    return ()


def _note(entry: object, place: str, beat_s: Fraction, mistakes: Mistakes) -> Note | None:
    if not isinstance(entry, Mapping):
        example = '{ at = 0.0, lasts = 1.0, note = "D3" }'
        mistakes.add(f"{place} = {_quoted(entry)}: must be a table, as {example}")
        return None
    sound = True
    for name, value in entry.items():
        if (reason := _fault(name, value)) is not None:
            near = ""
            if reason == _NO_KEY and not mistakes.full:
                near = suggestion(name, _NOTE_KEYS) or f"; a note has {', '.join(_NOTE_KEYS)}"
            mistakes.add(f"{place}: {shortened(name)} = {_quoted(value)}: {reason}{near}")
            sound = False
    for name in _NOTE_KEYS[:3]:
        if name not in entry:
            mistakes.add(f"{place}: {name} is missing: a note gives at, lasts and note")
            sound = False
    if not sound:
        return None
    start = entry["at"] * beat_s
    end = start + entry["lasts"] * beat_s
    return Note(start, end, note_number(entry["note"]), float(entry.get("velocity", 1.0)))


_NO_KEY = "there is no such key"


def _fault(name: str, value: object) -> str | None:
    """What is wrong with one key of a note, None where nothing is."""
    if name == "note":
        try:
            note_number(value)
        except SettingError:
            return 'must be a note from C-1 to G9, as "D#3" or "Eb3", or a MIDI number from 0 to 127'
        return None
    if name not in _NOTE_KEYS:
        return _NO_KEY
    if _is_number(value):
        number: Any = value
        if (number > 0 if name == "lasts" else number >= 0) and (number <= 1 or name != "velocity"):
            return None
    return _RULES[name]


_RULES = {
    "at": "must be a number of beats, 0 or more",
    "lasts": "must be a number of beats, more than 0",
    "velocity": "must be a number from 0 to 1",
}
