"""A slot saved as a preset file: comments kept, whole or not at all, and never over somebody else's file."""

import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from glidesmith.console import Slot
from glidesmith.errors import OutputError, PresetError, SettingError
from glidesmith.preset import Preset, load_preset, save_preset, update_preset_text
from glidesmith.settings import KEY, KEYS, TABLES
from glidesmith.text import file_name, write_whole


def save_slot(slot: Slot, path: Path | None, replace: bool) -> tuple[Path, Preset]:
    """Write a slot's settings to ``path``, by default to the file that it was loaded from.

    Comments, order and formatting are those of the file that the settings came from. A file that is there is
    written over without ``replace`` only if the slot was loaded from it and it is still as it was then.
    Returns the file and the preset that it now holds.

    Raises SettingError, PresetError or OutputError, one line, with nothing written.
    """
    target = slot.source.path if path is None else path
    if target is None:
        raise SettingError("the slot belongs to no file yet: give the name of one")
    if not replace:
        _require_own(slot, target)
    origin = slot.source.origin
    if origin is None or not origin.is_file():
        return target, _save_anew(slot, target)
    changes = _changes(load_preset(origin).given or {}, slot.preset, target)
    return target, save_preset(target, changes, origin)


def _require_own(slot: Slot, target: Path) -> None:
    if not os.path.lexists(target):
        return
    own = slot.source.path
    if own is None or os.path.realpath(own) != os.path.realpath(target):
        raise OutputError(f"{file_name(target)}: is there already; choose another name, or replace it")
    try:
        untouched = load_preset(target) == slot.source.on_disk
    except PresetError:
        untouched = False
    if not untouched:
        raise OutputError(
            f"{file_name(target)}: no longer says what was loaded from it; save under another name, or "
            "replace it"
        )


def _save_anew(slot: Slot, target: Path) -> Preset:
    """A preset that came from no file that is there: its text is made here."""
    text = update_preset_text("", _changes({}, slot.preset, target), target)
    write_whole(target, text.encode("utf-8"))
    return load_preset(target)


def _changes(old: Mapping[str, Any], preset: Preset, target: Path) -> dict[str, object]:
    """What makes a file that says ``old`` say what the preset says, by dotted keys; None takes out."""
    given = preset.given or {}
    changes: dict[str, object] = {
        table.name: None for table in TABLES if table.name in old and table.name not in given
    }
    for key in KEYS:
        was, is_now = _value(old, key.name), _value(given, key.name)
        if is_now is None:
            if was is not None and key.table not in changes:
                changes[key.name] = None
        elif key.kind == "file":
            file = preset.oscillator.file if key.table == "oscillator" else _phrase_file(preset)
            if was != is_now and file is not None:
                changes[key.name] = _as_seen_from(target, file, str(is_now))
        elif was is None or KEY[key.name].check(was) != KEY[key.name].check(is_now):
            changes[key.name] = is_now
    return changes


def _value(mapping: Mapping[str, Any], name: str) -> Any:
    table, _, leaf = name.rpartition(".")
    return mapping.get(table, {}).get(leaf) if table else mapping.get(leaf)


def _phrase_file(preset: Preset) -> Path | None:
    return None if preset.phrase is None else preset.phrase.file


def _as_seen_from(target: Path, file: Path, said: str) -> str:
    """A file's name as the preset at ``target`` gives it: absolute where it was, else relative to it."""
    if Path(said).is_absolute():
        return said
    return Path(os.path.relpath(file.absolute(), target.parent.absolute())).as_posix()
