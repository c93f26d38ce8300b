"""Moves: everything that can be done to a session while it plays, each a small record that JSON can carry.

A move says what was asked, not how: the panel, the terminal and a log that is replayed use the same ones, by
the names in `KINDS`. What a move means is settled in `glidesmith.console`.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

from glidesmith.content import (
    cycle_as_json,
    cycle_from_json,
    phrase_as_json,
    phrase_from_json,
    preset_as_json,
    preset_from_json,
)
from glidesmith.errors import GlidesmithError, SettingError
from glidesmith.listening import LOWEST_LEVEL_DB
from glidesmith.text import shown, suggestion
from glidesmith.units import HIGHEST_NOTE

SLOTS = 8
"""How many slots there are; they are counted from 1."""

LOWEST_PERCENT, HIGHEST_PERCENT = 10.0, 400.0
MOST_SEMITONES = 24
LOWEST_GAIN_DB = -60.0

_LONGEST_TEXT = 4096
_MOST_ENTRIES = 64


@dataclass(frozen=True, slots=True)
class Move:
    """One move.

    ``do`` is its kind, ``values`` its fields; presets, phrases and cycles in them are objects.
    """

    do: str
    values: Mapping[str, Any] = field(default_factory=dict)

    def __getitem__(self, name: str) -> Any:
        return self.values[name]

    def get(self, name: str) -> Any:
        """A field that need not be there, or None."""
        return self.values.get(name)

    @property
    def at_once(self) -> bool:
        """Whether the deck is told at once: transport, keys and level wait for no setting on its way."""
        return KINDS[self.do].at_once

    def as_dict(self) -> dict[str, Any]:
        """The move as JSON carries it."""
        encoded: dict[str, Any] = {"do": self.do}
        for name, value in self.values.items():
            encoded[name] = FIELDS[name].encode(value)
        return encoded


def make_move(do: str, **values: Any) -> Move:
    """A move with its fields checked; fields that need not be there and are None are left out.

    Raises SettingError in one line.
    """
    kind = _kind(do)
    kept = {name: value for name, value in values.items() if value is not None or name in kind.fields}
    _check_names(do, kind, kept)
    for name, value in kept.items():
        if not FIELDS[name].fits(value):
            raise SettingError(f"{name} = {shown(value)}: must be {FIELDS[name].rule}")
    return Move(do, kept)


def move_from_dict(mapping: object) -> Move:
    """The move that `Move.as_dict` made. Raises SettingError or PhraseError, a line a mistake."""
    if not isinstance(mapping, Mapping) or not isinstance(mapping.get("do"), str):
        raise SettingError(f'{shown(mapping)}: must be an object with "do", the name of a move')
    values = {name: value for name, value in mapping.items() if name != "do"}
    _check_names(mapping["do"], _kind(mapping["do"]), values)
    try:
        decoded = {name: FIELDS[name].decode(value) for name, value in values.items()}
    except GlidesmithError as problem:
        raise SettingError(*(f"{mapping['do']}: {line}" for line in problem.lines)) from None
    return make_move(mapping["do"], **decoded)


def _kind(do: str) -> "Kind":
    kind = KINDS.get(do)
    if kind is None:
        raise SettingError(f"there is no move {shown(do)}{suggestion(do, KINDS)}")
    return kind


def _check_names(do: str, kind: "Kind", values: Mapping[str, Any]) -> None:
    missing = [name for name in kind.fields if name not in values]
    if missing:
        raise SettingError(f"{do}: {missing[0]} is missing")
    for name in values:
        if name not in kind.fields and name not in kind.optional:
            raise SettingError(f"{do}: there is no {shown(name)} to it")


def _same(value: Any) -> Any:
    return value


@dataclass(frozen=True, slots=True)
class Field:
    """One field of a move: what fits, and how JSON carries it."""

    rule: str
    fits: Callable[[Any], bool]
    encode: Callable[[Any], Any] = _same
    decode: Callable[[Any], Any] = _same


@dataclass(frozen=True, slots=True)
class Kind:
    """One kind of move: the fields that it must have and those that it may have."""

    fields: tuple[str, ...] = ()
    optional: tuple[str, ...] = ()
    at_once: bool = False


def _whole(low: int, high: int, what: str) -> Field:
    return Field(f"{what}, {low} to {high}", lambda value: type(value) is int and low <= value <= high)


def _number(low: float, high: float, what: str) -> Field:
    def fits(value: object) -> bool:
        return isinstance(value, int | float) and not isinstance(value, bool) and low <= value <= high

    return Field(f"{what}, {low:g} to {high:g}", fits)


def _one_of(*choices: str) -> Field:
    return Field(" or ".join(f'"{choice}"' for choice in choices), lambda value: value in choices)


def _is_flag(value: object) -> bool:
    return isinstance(value, bool)


def _is_text(value: object) -> bool:
    return isinstance(value, str) and len(value) <= _LONGEST_TEXT


def _is_value(value: object) -> bool:
    """A setting's value as JSON carries it: its own rule is for the preset keys' table to check."""
    if isinstance(value, Mapping):
        return len(value) <= _MOST_ENTRIES and all(
            _is_text(name) and not isinstance(item, Mapping) and _is_value(item)
            for name, item in value.items()
        )
    if isinstance(value, float):
        return math.isfinite(value)
    return value is None or isinstance(value, bool | int) or _is_text(value)


def _is_instance(name: str) -> Callable[[object], bool]:
    return lambda value: type(value).__name__ == name


FIELDS: dict[str, Field] = {
    "slot": _whole(1, SLOTS, "the number of a slot"),
    "source": _whole(1, SLOTS, "the number of a slot"),
    "key": Field("a dotted preset key", _is_text),
    "value": Field("a value as in a preset", _is_value),
    "gesture": _whole(0, 2**53, "a whole number"),
    "when": _one_of("now", "loop"),
    "on": Field("true or false", _is_flag),
    "name": Field("text", _is_text),
    "percent": _number(LOWEST_PERCENT, HIGHEST_PERCENT, "per cent of the phrase's own tempo"),
    "semitones": _whole(-MOST_SEMITONES, MOST_SEMITONES, "whole semitones"),
    "level_db": _number(LOWEST_LEVEL_DB, 0.0, "decibels under full scale"),
    "gain_db": _number(LOWEST_GAIN_DB, 0.0, "decibels"),
    "note": _whole(0, HIGHEST_NOTE, "a MIDI note number"),
    "velocity": _number(0.0, 1.0, "a number"),
    "preset": Field("a preset", _is_instance("Preset"), preset_as_json, preset_from_json),
    "phrase": Field("a phrase", _is_instance("Phrase"), phrase_as_json, phrase_from_json),
    "cycle": Field("the samples of a cycle", _is_instance("bytes"), cycle_as_json, cycle_from_json),
}
"""What each field of a move may hold."""

KINDS: dict[str, Kind] = {
    "set": Kind(("slot", "key", "value"), ("gesture", "cycle")),
    "load": Kind(("slot", "preset"), ("name", "phrase", "cycle")),
    "copy": Kind(("source", "slot")),
    "undo": Kind(),
    "redo": Kind(),
    "select": Kind(("slot", "when")),
    "arrive": Kind(("slot",)),
    "tempo": Kind(("percent",), ("gesture",)),
    "transpose": Kind(("semitones",), ("gesture",)),
    "phrase": Kind(("phrase",), ("slot",)),
    "loop": Kind(("on",)),
    "match": Kind(("on",)),
    "match_gain": Kind(("slot", "gain_db")),
    "pass_on": Kind(),
    "level": Kind(("level_db",), at_once=True),
    "play": Kind(at_once=True),
    "stop": Kind(at_once=True),
    "panic": Kind(at_once=True),
    "key_down": Kind(("note", "velocity"), at_once=True),
    "key_up": Kind(("note",), at_once=True),
}
"""Every move. ``arrive``: the slot that waited for the loop's start sounds now; ``pass_on``: nothing moves,
the deck is told what it has not been told yet."""
