"""What there is to show of a session: its state, facts and curves, as JSON carries them."""

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.amplifier import amplifier_record, fill_gain
from glidesmith.console import unused_keys
from glidesmith.snapshot import loop_length_s, moved_phrase

if TYPE_CHECKING:
    from glidesmith.console import Console, Slot, View

_TRANSFER_POINTS = 65

Line = list[list[float]]


def state_of(
    console: "Console", lufs: Mapping[int, float | None], revisions: Mapping[int, int]
) -> dict[str, Any]:
    """The console's part of a session's state."""
    undo, redo = console.steps.depth
    percent = console.bank.tempo_percent
    return {
        "slots": [
            _slot_state(number, console.slot(number), console, lufs.get(number), revisions.get(number, 0))
            for number in console.filled()
        ],
        "current": console.current,
        "waiting_slot": console.waiting,
        "loop": console.loop,
        "tempo_percent": percent,
        "transpose": console.bank.semitones,
        "level_db": console.level_db,
        "match": console.match,
        "undo": undo,
        "redo": redo,
    }


def phrase_state(view: "View", sample_rate: int) -> dict[str, Any]:
    """The phrase of a slot as it is heard: lengths in seconds at the present tempo."""
    phrase = moved_phrase(view.phrase, view.tempo, view.semitones)
    loop_samples = -(-loop_length_s(phrase) * sample_rate // 1)
    return {
        "title": phrase.title,
        "path": None if phrase.path is None else str(phrase.path),
        "length_s": float(phrase.end),
        "loop_s": float(loop_samples / sample_rate),
        "notes": len(phrase.notes),
        "tempo_bpm": phrase.tempo_bpm,
    }


def facts_of(view: "View", sample_rate: int) -> dict[str, Any]:
    """The facts of a slot's phrase as it is heard, as ``measure --json`` has them."""
    from glidesmith.measuring import measure

    phrase = moved_phrase(view.phrase, view.tempo, view.semitones)
    return measure(view.preset, phrase, sample_rate=sample_rate).as_dict()


def lines_of(view: "View", sample_rate: int) -> dict[str, Any]:
    """The curves of a slot's phrase, points (s, value) from the closed forms, over one round.

    As `glidesmith.curves` has them. In a loop they are those of the second round, and so of all that follow:
    its first note comes from the last one. ``transfer`` is the amplifier's law, points (control, gain).
    """
    from glidesmith.curves import curves

    phrase = moved_phrase(view.phrase, view.tempo, view.semitones)
    if not view.loop:
        end_s = float(phrase.end)
        found: dict[str, Any] = dict(curves(view.preset, phrase, end_s))
    else:
        samples = -(-loop_length_s(phrase) * sample_rate // 1)
        end_s = float(samples / sample_rate)
        twice = _repeated(phrase, samples / sample_rate)
        found = {name: _from(line, end_s) for name, line in curves(view.preset, twice, 2.0 * end_s).items()}
    return {**found, "end_s": end_s, "loop": view.loop, "transfer": _transfer(view)}


def _repeated(phrase: Any, after_s: Any) -> Any:
    from dataclasses import replace

    again = tuple(replace(note, start=note.start + after_s, end=note.end + after_s) for note in phrase.notes)
    return replace(phrase, notes=(*phrase.notes, *again))


def _from(line: Line, begin_s: float) -> Line:
    """The part of a line from a moment on, whose time then counts from there."""
    kept = [[time - begin_s, value] for time, value in line if time >= begin_s]
    before = [point for point in line if point[0] < begin_s]
    if before and (not kept or kept[0][0] > 0.0):
        (t0, v0), (t1, v1) = before[-1], next(point for point in line if point[0] >= begin_s)
        kept.insert(0, [0.0, v0 + (v1 - v0) * (begin_s - t0) / (t1 - t0)])
    return kept


def _transfer(view: "View") -> Line:
    control = np.linspace(0.0, 1.0, _TRANSFER_POINTS)
    gain = np.empty_like(control)
    amplifier = view.preset.amplifier
    fill_gain(amplifier_record(amplifier.law, amplifier.range_db)[0], control, gain)
    return [[float(x), float(y)] for x, y in zip(control, gain, strict=True)]


def _slot_state(
    number: int, slot: "Slot", console: "Console", lufs: float | None, revision: int
) -> dict[str, Any]:
    preset, source = slot.preset, slot.source
    return {
        "number": number,
        "name": slot.name,
        "title": preset.title,
        "settings": {
            name: value if isinstance(value, bool | int | float) else str(value)
            for name, value in preset.values().items()
        },
        "given": {
            f"{table}.{leaf}": value
            for table, content in (preset.given or {}).items()
            if isinstance(content, Mapping)
            for leaf, value in content.items()
        },
        "unused": unused_keys(preset),
        "changed": source.saved is None or preset != source.saved,
        "path": None if source.path is None else str(source.path),
        "match_gain_db": console.gains_db.get(number, 0.0) if console.match else 0.0,
        "lufs": lufs,
        "facts_revision": revision,
    }
