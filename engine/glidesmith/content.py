"""Presets, phrases and single cycles as JSON carries them, and back: exact, checked, and with no file opened.

A preset is what its file said; a phrase is its notes, times as rationals in text; a cycle is its samples.
What comes in may be damaged or forged: everything is checked as strictly as a file of its own, and names of
files in it are only names."""

import base64
import binascii
from collections.abc import Mapping
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np

from glidesmith.errors import SettingError
from glidesmith.phrase import HIGHEST_BPM, LONGEST_S, MOST_NOTES, Note, Phrase, require_length
from glidesmith.preset import Preset, preset_from_mapping
from glidesmith.text import shown
from glidesmith.units import HIGHEST_NOTE

LONGEST_CYCLE = 65_536
"""Samples."""

_LONGEST_TEXT = 4096
_LONGEST_FRACTION = 200


def preset_as_json(preset: Preset) -> dict[str, Any]:
    """What the preset's file said, and the file's name."""
    given = preset.given if preset.given is not None else preset.changed({}).given
    return {"path": None if preset.path is None else str(preset.path), "settings": given}


def preset_from_json(value: object) -> Preset:
    """The preset that `preset_as_json` made; the file is not read. Raises SettingError, a line a mistake."""
    mapping = _object(value, "preset", ("settings",), ("path",))
    path, settings = mapping.get("path"), mapping["settings"]
    if not isinstance(settings, Mapping):
        raise SettingError(f"settings = {shown(settings)}: must be a preset's tables")
    return preset_from_mapping(settings, "", None if path is None else Path(_text(path, "path")))


def phrase_as_json(phrase: Phrase) -> dict[str, Any]:
    """A phrase with every time as the rational that it is, as ``"1/3"``, in seconds."""
    return {
        "title": phrase.title,
        "path": None if phrase.path is None else str(phrase.path),
        "tempo_bpm": phrase.tempo_bpm,
        "notes": [[str(note.start), str(note.end), note.number, note.velocity] for note in phrase.notes],
    }


def phrase_from_json(value: object) -> Phrase:
    """The phrase that `phrase_as_json` made. Raises SettingError in one line."""
    mapping = _object(value, "phrase", ("notes",), ("title", "path", "tempo_bpm"))
    tempo, path, notes = mapping.get("tempo_bpm"), mapping.get("path"), mapping["notes"]
    if tempo is not None and not (_is_number(tempo) and 0 < tempo <= 100 * HIGHEST_BPM):
        raise SettingError(f"tempo_bpm = {shown(tempo)}: must be beats a minute")
    if not isinstance(notes, list) or not 1 <= len(notes) <= MOST_NOTES:
        raise SettingError(f"notes: must be a list of 1 to {MOST_NOTES:,} notes")
    read = tuple(_note(row, number) for number, row in enumerate(notes, 1))
    require_length(max(note.end for note in read), LONGEST_S, "phrase")
    return Phrase(
        _text(mapping.get("title", ""), "title"),
        read,
        (),
        None if path is None else Path(_text(path, "path")),
        None if tempo is None else float(tempo),
    )


def cycle_as_json(cycle: bytes) -> str:
    """A cycle's samples, little-endian float64, as base64."""
    return base64.b64encode(cycle).decode("ascii")


def cycle_from_json(value: object) -> bytes:
    """The samples that `cycle_as_json` made; they are a fit cycle. Raises SettingError in one line."""
    from glidesmith.wavetable import check_cycle

    if not isinstance(value, str) or len(value) > 4 * (8 * LONGEST_CYCLE // 3 + 1):
        raise SettingError(f"cycle: must be up to {LONGEST_CYCLE:,} samples as base64")
    try:
        cycle = base64.b64decode(value, validate=True)
    except (binascii.Error, ValueError):
        raise SettingError("cycle: is not base64") from None
    if len(cycle) % 8:
        raise SettingError(f"cycle: has {len(cycle):,} bytes, and samples have 8 each")
    with np.errstate(all="ignore"):
        check_cycle(np.frombuffer(cycle, "<f8"))
    return cycle


def _note(row: object, number: int) -> Note:
    if isinstance(row, list) and len(row) == 4:
        start, end, key, velocity = _fraction(row[0]), _fraction(row[1]), row[2], row[3]
        whole = type(key) is int and 0 <= key <= HIGHEST_NOTE
        soft = _is_number(velocity) and 0 <= velocity <= 1
        if start is not None and end is not None and 0 <= start < end and whole and soft:
            return Note(start, end, key, float(velocity))
    raise SettingError(
        f'note {number}: must be [start, end, number, velocity], with seconds in text as "1/3", '
        "start before end"
    )


def _fraction(value: object) -> Fraction | None:
    """The rational of a text of sane length without an exponent, which could be far larger than its text."""
    if not isinstance(value, str) or len(value) > _LONGEST_FRACTION or "e" in value.lower():
        return None
    try:
        return Fraction(value)
    except (ValueError, ZeroDivisionError):
        return None


def _object(value: object, what: str, needed: tuple[str, ...], others: tuple[str, ...]) -> Mapping[str, Any]:
    if not isinstance(value, Mapping):
        raise SettingError(f"{what} = {shown(value)}: must be an object with {', '.join(needed)}")
    missing = [name for name in needed if name not in value]
    unknown = [name for name in value if name not in needed + others]
    if missing or unknown:
        found = f"{missing[0]} is missing" if missing else f"there is no such key as {shown(unknown[0])}"
        raise SettingError(f"{what}: {found}; it has {', '.join(needed + others)}")
    return value


def _text(value: object, name: str) -> str:
    if not isinstance(value, str) or len(value) > _LONGEST_TEXT or "\0" in value:
        raise SettingError(f"{name} = {shown(value)}: must be text of up to {_LONGEST_TEXT:,} letters")
    return value


def _is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)
