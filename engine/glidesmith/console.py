"""The console: slots with presets and phrases, and what every move does to them.

It is a model in plain Python: it opens no file, starts no thread, reads no clock, and the same moves in the
same order always make the same state. A move that makes no sense is refused with the lines that a preset file
would get, and changes nothing.

Turning one setting takes along what a user would expect of it, and what goes along is part of the move: a law
that can't have a fixed time sets the timing back to the law's own; an envelope, converter or drone that is
turned on again has its last values; the wave ``file`` brings back the slot's last cycle.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from pathlib import Path
from typing import Any

from glidesmith.errors import PresetError, SettingError
from glidesmith.moves import HIGHEST_PERCENT, LOWEST_PERCENT, SLOTS, Move
from glidesmith.phrase import Phrase
from glidesmith.preset import Preset
from glidesmith.settings import KEY, KEYS, LEAVES, find_key, resolved_timing
from glidesmith.text import shown, suggestion
from glidesmith.undoing import Steps
from glidesmith.units import HIGHEST_NOTE, note_name

SWITCHED_TABLES = ("envelope", "converter", "drone")
"""The optional tables, which are turned on and off as a whole."""

_USUAL: dict[str, dict[str, object]] = {
    "envelope": {"attack": 0.01, "decay": 0.2, "sustain": 0.6, "release": 0.3},
    "converter": {"bits": 12},
    "drone": {},
}
_PERCENT_STEPS = 1000


@dataclass(slots=True)
class Source:
    """Where a slot's settings came from, which all its later states share.

    ``path`` is the file that the slot belongs to, None where it belongs to none; ``origin`` the file whose
    comments a save keeps; ``saved`` the settings as they were loaded or saved last, for telling what has
    changed; ``on_disk`` what the file said then.
    """

    path: Path | None = None
    origin: Path | None = None
    saved: Preset | None = None
    on_disk: Preset | None = None


@dataclass(frozen=True, slots=True)
class Slot:
    """One slot: its settings, its phrase, the samples of its cycle, and what was turned off in it.

    ``cycle`` is float64, little-endian; ``kept`` has the last values of tables that are off, by name, and
    under ``"oscillator"`` the last cycle's file and samples.
    """

    name: str
    preset: Preset
    phrase: Phrase
    cycle: bytes | None
    source: Source
    kept: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Bank:
    """All that undo brings back: the slots, ``SLOTS`` of them, empty ones None; tempo and transposition."""

    slots: tuple[Slot | None, ...]
    tempo_percent: float = 100.0
    semitones: int = 0

    def with_slot(self, number: int, slot: Slot) -> "Bank":
        """The same bank with another slot."""
        slots = (*self.slots[: number - 1], slot, *self.slots[number:])
        return replace(self, slots=slots)


@dataclass(frozen=True, slots=True)
class View:
    """One slot as it is to be heard, all that a deck must know of it. ``tempo`` is 1 at the phrase's own."""

    slot: int
    preset: Preset
    phrase: Phrase
    cycle: bytes | None
    tempo: Fraction
    semitones: int
    loop: bool
    gain_db: float


class Console:
    """The model behind a session; see the module.

    ``slots`` are 1 to 8; the first one is current. ``current`` sounds, ``waiting`` is to follow it at the
    loop's start, None where none is.
    """

    def __init__(
        self, slots: Sequence[Slot], *, loop: bool = True, match: bool = True, level_db: float = -30.0
    ) -> None:
        if not 1 <= len(slots) <= SLOTS:
            raise SettingError(f"{len(slots)} slots: give 1 to {SLOTS} presets")
        self.bank = Bank((*slots, *(None,) * (SLOTS - len(slots))))
        self.current = 1
        self.waiting: int | None = None
        self.loop = loop
        self.match = match
        self.level_db = level_db
        self.gains_db: dict[int, float] = {}
        self.steps: Steps[Bank] = Steps()

    def slot(self, number: int) -> Slot:
        """A slot that is not empty. Raises SettingError."""
        found = self.bank.slots[number - 1] if 1 <= number <= SLOTS else None
        if found is None:
            raise SettingError(f"slot {number} is empty: load a preset into it, or copy one")
        return found

    def filled(self) -> list[int]:
        """The numbers of the slots that are not empty."""
        return [number for number, slot in enumerate(self.bank.slots, 1) if slot is not None]

    def view(self, number: int) -> View:
        """What is to be heard of a slot."""
        slot = self.slot(number)
        gain_db = self.gains_db.get(number, 0.0) if self.match else 0.0
        return View(
            number,
            slot.preset,
            slot.phrase,
            slot.cycle,
            exact_tempo(self.bank.tempo_percent),
            self.bank.semitones,
            self.loop,
            gain_db,
        )

    def apply(self, move: Move) -> None:
        """Do what a move says. Raises SettingError, a line a mistake; nothing has changed then."""
        _ACTIONS[move.do](self, move)

    def _change(self, bank: Bank, gesture: object = None) -> None:
        self.steps.add(self.bank, gesture)
        self.bank = bank

    def _set(self, move: Move) -> None:
        number, key = move["slot"], move["key"]
        changed = with_setting(self.slot(number), key, move["value"], move.get("cycle"))
        gesture = move.get("gesture")
        token = None if gesture is None else ("set", number, key, gesture)
        self._change(self.bank.with_slot(number, changed), token)

    def _load(self, move: Move) -> None:
        preset: Preset = move["preset"]
        old = self.bank.slots[move["slot"] - 1]
        phrase = move.get("phrase") or (old or self.slot(self.current)).phrase
        _check_range(phrase, self.bank.semitones)
        slot = Slot(
            move.get("name") or "",
            preset,
            phrase,
            _cycle_of(preset, move.get("cycle")),
            Source(preset.path, preset.path, preset, preset),
        )
        self._change(self.bank.with_slot(move["slot"], slot))

    def _copy(self, move: Move) -> None:
        slot = self.slot(move["source"])
        if move["slot"] == move["source"]:
            raise SettingError(f"slot {move['slot']} can't be copied to itself: name another slot")
        copied = Source(None, slot.source.origin, slot.source.saved)
        self._change(self.bank.with_slot(move["slot"], replace(slot, source=copied)))

    def _undo(self, move: Move) -> None:
        bank = self.steps.undo(self.bank)
        if bank is None:
            raise SettingError("there is nothing to undo")
        self._restore(bank)

    def _redo(self, move: Move) -> None:
        bank = self.steps.redo(self.bank)
        if bank is None:
            raise SettingError("there is nothing to redo")
        self._restore(bank)

    def _restore(self, bank: Bank) -> None:
        self.bank = bank
        if bank.slots[self.current - 1] is None:
            self.current = self.filled()[0]
        if self.waiting is not None and bank.slots[self.waiting - 1] is None:
            self.waiting = None

    def _select(self, move: Move) -> None:
        number = move["slot"]
        self.slot(number)
        self.steps.end_gesture()
        if move["when"] == "now":
            self.current, self.waiting = number, None
        else:
            self.waiting = None if number == self.current else number

    def _arrive(self, move: Move) -> None:
        if move["slot"] == self.waiting:
            self.current, self.waiting = move["slot"], None

    def _tempo(self, move: Move) -> None:
        percent = round(move["percent"] * _PERCENT_STEPS) / _PERCENT_STEPS
        percent = min(max(percent, LOWEST_PERCENT), HIGHEST_PERCENT)
        self._change(replace(self.bank, tempo_percent=percent), _token(move))

    def _transpose(self, move: Move) -> None:
        for number in self.filled():
            _check_range(self.slot(number).phrase, move["semitones"])
        self._change(replace(self.bank, semitones=move["semitones"]), _token(move))

    def _phrase(self, move: Move) -> None:
        phrase, only = move["phrase"], move.get("slot")
        _check_range(phrase, self.bank.semitones)
        bank = self.bank
        for number in self.filled() if only is None else (only,):
            bank = bank.with_slot(number, replace(self.slot(number), phrase=phrase))
        self._change(bank)

    def _loop(self, move: Move) -> None:
        self.loop = move["on"]

    def _match(self, move: Move) -> None:
        self.match = move["on"]

    def _match_gain(self, move: Move) -> None:
        self.slot(move["slot"])
        self.gains_db[move["slot"]] = float(move["gain_db"])

    def _level(self, move: Move) -> None:
        self.level_db = float(move["level_db"])

    def _nothing(self, move: Move) -> None:
        """Transport and keys change no setting: see `glidesmith.cueing`."""


_ACTIONS: dict[str, Callable[[Console, Move], None]] = {
    "set": Console._set,
    "load": Console._load,
    "copy": Console._copy,
    "undo": Console._undo,
    "redo": Console._redo,
    "select": Console._select,
    "arrive": Console._arrive,
    "tempo": Console._tempo,
    "transpose": Console._transpose,
    "phrase": Console._phrase,
    "loop": Console._loop,
    "match": Console._match,
    "match_gain": Console._match_gain,
    "level": Console._level,
    **dict.fromkeys(("pass_on", "play", "stop", "panic", "key_down", "key_up"), Console._nothing),
}


def exact_tempo(percent: float) -> Fraction:
    """A tempo in thousandths of a per cent as the exact factor that it is."""
    return Fraction(round(percent * _PERCENT_STEPS), 100 * _PERCENT_STEPS)


def with_setting(slot: Slot, key: str, value: object, cycle: bytes | None = None) -> Slot:
    """A slot with one setting moved, and what goes along with it.

    ``key`` is dotted, or the name of an optional table: True, or a mapping of some of its values, turns it
    on, None or False off. None under any other key puts its default back. ``cycle`` has the samples that go
    with ``oscillator.file``. Raises SettingError, a line a mistake.
    """
    changes = _changes(slot, key, value)
    preset = _changed(slot.preset, changes)
    kept = _kept(slot, preset)
    if "oscillator.file" in changes and key != "oscillator.file":
        cycle = slot.kept["oscillator"][1]
    elif key != "oscillator.file":
        cycle = slot.cycle
    return replace(slot, preset=preset, cycle=_cycle_of(preset, cycle), kept=kept)


def unused_keys(preset: Preset) -> list[str]:
    """The keys that have no effect with the other settings, as the panel greys them out."""
    values = preset.values()
    return [
        key.name
        for key in KEYS
        if key.counts_for is not None and values.get(key.counts_for[0]) not in key.counts_for[1]
    ]


def _changed(preset: Preset, changes: Mapping[str, object]) -> Preset:
    try:
        return preset.changed(changes)
    except PresetError as problem:
        prefix = f"{preset.where}: "  # the file is not to blame
        raise SettingError(*(line.removeprefix(prefix) for line in problem.lines)) from None


def _changes(slot: Slot, key: str, value: object) -> dict[str, object]:
    """What a moved setting changes, by dotted keys."""
    if key in SWITCHED_TABLES:
        return _switched(slot, key, value)
    if key in LEAVES or key not in KEY:
        raise SettingError(_no_setting(key))
    if KEY[key].table == "phrase":
        raise SettingError(f"{key}: a phrase is loaded as a whole; it is no setting that moves")
    _require_table(slot.preset, KEY[key].table)
    changes = {key: value}
    if KEY[key].leaf == "law" and KEY[key].table in ("pitch", "gain"):
        changes |= _timing_along(slot.preset, KEY[key].table, value)
    if key == "oscillator.file" and value is not None:
        changes["oscillator.wave"] = "file"
    if key == "oscillator.wave" and value == "file" and slot.preset.oscillator.file is None:
        changes |= {"oscillator.file": kept[0]} if (kept := slot.kept.get("oscillator")) else {}
    return changes


def _no_setting(key: str) -> str:
    if key in LEAVES:
        return f"{key}: is a table; move one of its keys, {', '.join(LEAVES[key])}"
    try:
        find_key(key)
    except SettingError as problem:
        return str(problem)
    return f"{shown(key)} is no setting{suggestion(key, KEY)}"


def _require_table(preset: Preset, table: str) -> None:
    if table in SWITCHED_TABLES and getattr(preset, table) is None:
        raise SettingError(f"{table}: is off; turn it on before its settings are moved")


def _timing_along(preset: Preset, stage: str, law: object) -> dict[str, object]:
    given = (preset.given or {}).get(stage, {}).get("timing")
    try:
        resolved_timing(str(law), given)
    except SettingError:
        return {f"{stage}.timing": None}
    return {}


def _switched(slot: Slot, table: str, value: object) -> dict[str, object]:
    """A table turned off, or on with the values it had last, or some that are usual."""
    if value is None or value is False:
        return {table: None}
    if value is not True and not isinstance(value, Mapping):
        raise SettingError(f"{table} = {shown(value)}: must be true or false, or a table of its settings")
    values: dict[str, object] = dict((slot.preset.given or {}).get(table, {}))
    if getattr(slot.preset, table) is None:
        values = {**_USUAL[table], **slot.kept.get(table, {})}
        if table == "drone":
            values.setdefault("note", note_name(slot.phrase.notes[0].number))
    values |= value if isinstance(value, Mapping) else {}
    return {f"{table}.{leaf}": item for leaf, item in values.items()}


def _kept(slot: Slot, preset: Preset) -> Mapping[str, Any]:
    """What the slot will know of the tables, and of the cycle, that the change turned off."""
    kept = dict(slot.kept)
    for table in SWITCHED_TABLES:
        if getattr(preset, table) is None and getattr(slot.preset, table) is not None:
            kept[table] = dict((slot.preset.given or {}).get(table, {}))
    if preset.oscillator.file is None and slot.preset.oscillator.file is not None:
        kept["oscillator"] = ((slot.preset.given or {})["oscillator"]["file"], slot.cycle)
    return kept if kept != slot.kept else slot.kept


def _cycle_of(preset: Preset, cycle: bytes | None) -> bytes | None:
    """The samples that go with the preset: those of its file, none with another wave."""
    if preset.oscillator.wave != "file":
        return None
    if cycle is None:
        raise SettingError("oscillator.file: its samples are missing")
    return cycle


def _token(move: Move) -> object:
    gesture = move.get("gesture")
    return None if gesture is None else (move.do, gesture)


def _check_range(phrase: Phrase, semitones: int) -> None:
    """Raise SettingError where a transposition takes a note beyond the MIDI range, which no note name has."""
    numbers = [note.number for note in phrase.notes]
    for number in (min(numbers), max(numbers)):
        if not 0 <= number + semitones <= HIGHEST_NOTE:
            raise SettingError(
                f"transposition {semitones:+d}: takes {note_name(number)} of phrase "
                f"{shown(phrase.title)} out of the range C-1 to G9; transpose it by less"
            )
