"""Presets: TOML files with a patch's settings, read, checked against the table of keys, and written back.

    preset = load_preset("presets/night-ferry-lead.toml")
    slower = preset.changed({"pitch.rise": "120 ms"})
    save_preset("presets/night-ferry-lead.toml", {"pitch.rise": "120 ms"})

All mistakes of a file are told at once, a line each. Writing back keeps comments, order and formatting.
"""

import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from glidesmith.errors import PresetError, SettingError
from glidesmith.settings import (
    KEY,
    KEYS,
    LEAVES,
    PROGRESS_LAWS,
    TABLES,
    Key,
    is_timed,
    resolved_timing,
    suggested_key,
)
from glidesmith.text import (
    Mistakes,
    decoded,
    edited_toml,
    file_name,
    read_bytes,
    shortened,
    shown,
    suggestion,
    toml_mapping,
    write_whole,
)
from glidesmith.units import format_time, note_name

MOST_PRESET_BYTES = 1_000_000
_MOST_HASHED_BYTES = 64_000_000


@dataclass(frozen=True, slots=True)
class Oscillator:
    """The tone. ``width`` is the pulse's high part of a cycle; ``file`` goes with the wave ``"file"``."""

    wave: str
    width: float
    level_db: float
    file: Path | None


@dataclass(frozen=True, slots=True)
class SlewSettings:
    """One slew stage. ``rise`` and ``fall`` are seconds; ``timing`` is settled: ``"rate"`` or ``"fixed"``."""

    law: str
    rise: float
    fall: float
    timing: str
    bend: float
    knee: float
    curvature: float


@dataclass(frozen=True, slots=True)
class Pitch:
    """The pitch slew, which notes glide (``"always"``, ``"overlap"``, ``"never"``), glissando steps or 0."""

    slew: SlewSettings
    glide: str
    steps_per_octave: int


@dataclass(frozen=True, slots=True)
class Envelope:
    """The envelope before the gain slew: seconds, ``sustain`` 0 to 1, ``shape`` ``"linear"`` or ``"rc"``."""

    attack: float
    decay: float
    sustain: float
    release: float
    shape: str
    retrigger: bool


@dataclass(frozen=True, slots=True)
class Amplifier:
    """The law, ``"linear"`` or ``"decibel"`` over ``range_db``, and how far velocity lowers the gate."""

    law: str
    range_db: float
    velocity_db: float


@dataclass(frozen=True, slots=True)
class Tuning:
    """What volts mean: A4 in Hz, the MIDI number of the note at 0 V, the tracking error."""

    a4_hz: float
    zero_volts: int
    scale_error_cents_per_octave: float


@dataclass(frozen=True, slots=True)
class Converter:
    """The digital sequencer's converter; ``rate_hz`` 0 means that it is set at once."""

    bits: int
    span_volts: float
    rate_hz: float


@dataclass(frozen=True, slots=True)
class Drone:
    """A sine on a MIDI note number."""

    note: int
    level_db: float


@dataclass(frozen=True, slots=True)
class PhraseSource:
    """Where the phrase comes from; ``track`` counts from 1, ``channel`` is 1 to 16, None leaves them open."""

    file: Path
    track: int | None
    channel: int | None


@dataclass(frozen=True, slots=True)
class Preset:
    """One patch, checked. Files are paths from the working folder, already joined to the preset's own folder.

    ``given`` is what the file said, table by table, before defaults; `changed` starts from it.
    """

    title: str
    oscillator: Oscillator
    pitch: Pitch
    gain: SlewSettings
    envelope: Envelope | None
    amplifier: Amplifier
    tuning: Tuning
    converter: Converter | None
    drone: Drone | None
    phrase: PhraseSource | None
    path: Path | None = None
    given: Mapping[str, Any] | None = field(default=None, repr=False, compare=False)

    def settings(self) -> dict[str, object]:
        """Every setting in force, by dotted key, fit for JSON.

        Notes are names; times are seconds; a file is ``"sha256:"`` and the digest of its content, or its
        path where it can't be read. Optional tables that are left out have no keys here, nor have keys
        without a value.
        """
        return {
            name: _fingerprint(value) if isinstance(value, Path) else value
            for name, value in self.values().items()
        }

    def values(self) -> dict[str, object]:
        """The same by dotted key, with files as paths; none is opened."""
        return {key.name: key.plain(value) for key, value in _values_of(self)}

    def changed(self, changes: Mapping[str, object]) -> "Preset":
        """The same preset with other values, checked by the same rules; None takes a key or a table out.

        ``changes`` goes by dotted keys. A timing that was left to the law follows the new law, and a wave
        other than ``"file"`` drops the file of the old one. Raises PresetError.
        """
        base = _mapping_of(self) if self.given is None else self.given
        wave = changes.get("oscillator.wave", "file")
        dropped: dict[str, object] = {} if wave == "file" else {"oscillator.file": None}
        return preset_from_mapping(_with_changes(base, {**dropped, **changes}), self.where, self.path)

    @property
    def where(self) -> str:
        """How messages name the preset: its path, printable and not too long, or nothing without one."""
        return file_name(self.path) if self.path else ""

    def unused(self) -> tuple[str, ...]:
        """The settings that the file gives and that have no effect with the others, a readable line each.

        For example ``"pitch.bend has no effect with law rc; it counts for log and exp"``. Defaults and
        presets that come from no file or mapping have none.
        """
        values = {key.name: value for key, value in _values_of(self)}
        lines = []
        for key in KEYS:
            if key.counts_for is None or not _is_given(key, self.given or {}):
                continue
            other, useful = key.counts_for
            if values[other] not in useful:
                said = f"{KEY[other].leaf} {values[other]}"
                lines.append(f"{key.name} has no effect with {said}; it counts for {' and '.join(useful)}")
        return tuple(lines)


def load_preset(path: str | os.PathLike[str]) -> Preset:
    """Read and check a preset file. Raises PresetError with one line a mistake, each naming the file."""
    path = Path(path)
    return parse_preset(_read_text(path), path)


def parse_preset(text: str, path: Path | None = None) -> Preset:
    """Check a preset's text; ``path`` is where it stands or will stand. Raises PresetError."""
    where = file_name(path) if path else ""
    return preset_from_mapping(toml_mapping(text, where, PresetError), where, path)


def preset_from_mapping(mapping: Mapping[str, Any], where: str = "", path: Path | None = None) -> Preset:
    """Check settings that are already nested dictionaries, as TOML gives them.

    ``where`` begins every error line; files are relative to the folder of ``path``, or to the working folder.

    Raises PresetError with all mistakes, a line each.
    """
    mistakes = Mistakes(where)
    values = _checked_values(mapping, mistakes)
    _check_together(values, mapping, mistakes)
    mistakes.raise_as(PresetError)
    return _assembled(values, mapping, path)


def settings_hash(preset: Preset) -> str:
    """SHA-256, in hexadecimal, of everything that a preset says about the sound, whatever the notes.

    Title and phrase don't count; the content of the oscillator's file does.
    """
    import hashlib
    import json

    heard = {name: value for name, value in preset.settings().items() if name in KEY and _is_heard(KEY[name])}
    canonical = json.dumps(heard, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(canonical.encode("ascii")).hexdigest()


def _is_given(key: Key, mapping: Mapping[str, Any]) -> bool:
    table = mapping.get(key.table)
    return isinstance(table, Mapping) and key.leaf in table


def _is_heard(key: Key) -> bool:
    return key.name != "title" and key.table != "phrase"


def update_preset_text(text: str, changes: Mapping[str, object], path: Path | None = None) -> str:
    """A preset's text with some values changed and all else kept: comments, order, spacing, line ends.

    ``changes`` goes by dotted keys; times may be given with units and are written as given; missing keys
    and tables are added; None takes a key or an optional table out. A value that is already there stays as
    it was written.

    Raises PresetError where the changed preset would not be valid.
    """
    where = file_name(path) if path else ""
    mapping = toml_mapping(text, where, PresetError)
    wanted = preset_from_mapping(_with_changes(mapping, changes), where, path)
    try:
        written = edited_toml(text, _edits(mapping, changes))
        kept = parse_preset(written, path) == wanted
    except Exception:  # whatever its layout does to the editor, the file stays and the user gets a line
        kept = False
    if not kept:
        prefix = f"{where}: " if where else ""
        raise PresetError(
            f"{prefix}is laid out so that {shortened(', '.join(changes))} can't be changed "
            "with all else kept; change it by hand"
        )
    return written


def save_preset(
    path: str | os.PathLike[str], changes: Mapping[str, object], source: str | os.PathLike[str] | None = None
) -> Preset:
    """Change values in a preset file as `update_preset_text` does, and return the preset as it now is.

    With ``source`` the changed preset is written to ``path`` and the source stays; relative files in it are
    then written relative to the new folder. A file appears whole or not at all.

    Raises PresetError where the source or the outcome is not valid, OutputError where it can't be written.
    """
    path = Path(path)
    origin = path if source is None else Path(source)
    text = _read_text(origin)
    moved = _moved_files(text, origin, path)
    written = update_preset_text(text, {**moved, **changes}, path)
    if written != text or origin != path:
        write_whole(path, written.encode("utf-8"))
    return parse_preset(written, path)


def _moved_files(text: str, origin: Path, path: Path) -> dict[str, object]:
    """The relative files of a preset as seen from another folder."""
    old_folder, new_folder = origin.parent.absolute(), path.parent.absolute()
    if old_folder == new_folder:
        return {}
    mapping = toml_mapping(text, file_name(origin), PresetError)
    moved: dict[str, object] = {}
    for key in KEYS:
        table = mapping.get(key.table)
        file = table.get(key.leaf) if key.kind == "file" and isinstance(table, dict) else None
        if isinstance(file, str) and not Path(file).is_absolute():
            moved[key.name] = Path(os.path.relpath(old_folder / file, new_folder)).as_posix()
    return moved


def _read_text(path: Path) -> str:
    data = read_bytes(path, MOST_PRESET_BYTES, PresetError)
    return decoded(data, file_name(path), PresetError)


def _checked_values(mapping: Mapping[str, Any], mistakes: Mistakes) -> dict[str, Any]:
    """Every key of every table that is there or has defaults; mistaken values are left out."""
    values: dict[str, Any] = {}
    for name, content in mapping.items():
        if name in LEAVES:
            _check_table(name, content, values, mistakes)
        elif name == "title":
            _check_key(KEY[name], content, values, mistakes)
        else:
            _tell_unknown(name, content, mistakes)
    for table in TABLES:
        if table.name not in mapping and table.presence == "required":
            mistakes.add(f"[{table.name}] is missing: every preset has one, with at least rise and fall")
        elif isinstance(mapping.get(table.name, {}), Mapping) and (
            table.name in mapping or table.presence == "default"
        ):
            _fill_in(table.name, mapping.get(table.name, {}), values, mistakes)
    return values


def _check_table(table: str, content: object, values: dict[str, Any], mistakes: Mistakes) -> None:
    if not isinstance(content, Mapping):
        mistakes.add(f"{table} = {shown(content)}: must be one table, begun by [{table}]")
        return
    for leaf, value in content.items():
        key = KEY.get(f"{table}.{leaf}")
        if key is None:
            _tell_unknown(f"{table}.{leaf}", value, mistakes)
        else:
            _check_key(key, value, values, mistakes)


def _check_key(key: Key, value: object, values: dict[str, Any], mistakes: Mistakes) -> None:
    try:
        values[key.name] = key.check(value)
    except SettingError as problem:
        mistakes.add(str(problem))


def _tell_unknown(name: str, value: object, mistakes: Mistakes) -> None:
    if mistakes.full:
        mistakes.add("")
    elif isinstance(value, Mapping):
        mistakes.add(f"[{shortened(name)}] is no table of a preset{suggestion(name, LEAVES)}")
    else:
        mistakes.add(f"{shortened(name)} = {shown(value)}: there is no such key{suggested_key(name)}")


def _fill_in(table: str, content: Mapping[str, Any], values: dict[str, Any], mistakes: Mistakes) -> None:
    for leaf in LEAVES[table]:
        key = KEY[f"{table}.{leaf}"]
        if leaf in content:
            continue
        if key.required:
            mistakes.add(f"{key.name} is missing: [{table}] must give it, and it {key.rule}")
        else:
            values[key.name] = key.default


def _check_together(values: dict[str, Any], mapping: Mapping[str, Any], mistakes: Mistakes) -> None:
    """The rules between keys; timing is settled on the way."""
    for stage in ("pitch", "gain"):
        law = values.get(f"{stage}.law")
        if law is None:
            continue
        try:
            values[f"{stage}.timing"] = resolved_timing(law, values.get(f"{stage}.timing"))
        except SettingError as problem:
            mistakes.add(f"{stage}.{problem}")
    _check_moving_target(values, mapping, mistakes)
    _check_wave_file(values, mistakes)


def _check_moving_target(values: dict[str, Any], mapping: Mapping[str, Any], mistakes: Mistakes) -> None:
    law, timing = values.get("gain.law"), values.get("gain.timing")
    if "envelope" not in mapping or law is None or timing is None or not is_timed(law, timing):
        return
    said = f'gain.law = "{law}"' if law in PROGRESS_LAWS else f'gain.timing = "{timing}"'
    mistakes.add(
        f"{said}: has no meaning with an [envelope]: a timed glide starts afresh whenever its target moves, "
        "and the envelope always moves it; take [envelope] out, or use linear by rate, rc, log, exp or soft"
    )


def _check_wave_file(values: dict[str, Any], mistakes: Mistakes) -> None:
    if "oscillator.wave" not in values or "oscillator.file" not in values:
        return
    wave, file = values["oscillator.wave"], values["oscillator.file"]
    if wave == "file" and file is None:
        mistakes.add('oscillator.file is missing: wave = "file" plays one cycle from a WAV; name it here')
    elif wave != "file" and file is not None:
        mistakes.add(
            f'oscillator.file = {shown(file)}: the wave is "{wave}", which has no file; '
            'write wave = "file" or take file out'
        )


def _assembled(values: dict[str, Any], mapping: Mapping[str, Any], path: Path | None) -> Preset:
    def part(table: str) -> dict[str, Any]:
        leaves = LEAVES[table]
        return {leaf: _joined(KEY[f"{table}.{leaf}"], values[f"{table}.{leaf}"], path) for leaf in leaves}

    pitch = part("pitch")
    glide, steps = pitch.pop("glide"), pitch.pop("steps_per_octave")
    return Preset(
        title=values.get("title", path.stem if path else "untitled"),
        oscillator=Oscillator(**part("oscillator")),
        pitch=Pitch(SlewSettings(**pitch), glide, steps),
        gain=SlewSettings(**part("gain")),
        envelope=Envelope(**part("envelope")) if "envelope" in mapping else None,
        amplifier=Amplifier(**part("amplifier")),
        tuning=Tuning(**part("tuning")),
        converter=Converter(**part("converter")) if "converter" in mapping else None,
        drone=Drone(**part("drone")) if "drone" in mapping else None,
        phrase=PhraseSource(**part("phrase")) if "phrase" in mapping else None,
        path=path,
        given=_copied(mapping),
    )


def _joined(key: Key, value: Any, path: Path | None) -> Any:
    if key.kind != "file" or value is None:
        return value
    return path.parent / value if path else Path(value)


def _copied(mapping: Mapping[str, Any]) -> dict[str, Any]:
    return {
        name: dict(content) if isinstance(content, Mapping) else content for name, content in mapping.items()
    }


def _values_of(preset: Preset) -> Iterator[tuple[Key, Any]]:
    """Each key that has a value in this preset, with it."""
    for key in KEYS:
        part: Any = getattr(preset, key.table) if key.table else preset
        if key.table == "pitch" and key.leaf in SlewSettings.__dataclass_fields__:
            part = part.slew
        value = None if part is None else getattr(part, key.leaf)
        if value is not None:
            yield key, value


def _mapping_of(preset: Preset) -> dict[str, Any]:
    """What a file would say to give this preset, with files as absolute paths and without idle defaults."""
    changes = {
        key.name: str(value.absolute()) if isinstance(value, Path) else key.plain(value)
        for key, value in _values_of(preset)
        if key.counts_for is None or value != key.default
    }
    return _with_changes({}, changes)


def _with_changes(mapping: Mapping[str, Any], changes: Mapping[str, object]) -> dict[str, Any]:
    changed = _copied(mapping)
    for name, value in changes.items():
        table, _, leaf = name.rpartition(".")
        holder = changed.setdefault(table, {}) if table and value is not None else changed.get(table, {})
        holder = holder if table else changed
        if not isinstance(holder, dict):
            continue
        if value is None:
            holder.pop(leaf, None)
        else:
            holder[leaf] = os.fspath(value) if isinstance(value, os.PathLike) else value
    return changed


def _fingerprint(path: Path) -> str:
    import hashlib

    try:
        data = read_bytes(path, _MOST_HASHED_BYTES, PresetError)
    except PresetError:
        return path.as_posix()
    return f"sha256:{hashlib.sha256(data).hexdigest()}"


def _edits(mapping: Mapping[str, Any], changes: Mapping[str, object]) -> dict[str, object]:
    """What has to be written: values in the notation that the file uses, without those already there."""
    edits: dict[str, object] = {}
    for name, value in changes.items():
        table, _, leaf = name.rpartition(".")
        old = mapping.get(table, {}).get(leaf) if table else mapping.get(leaf)
        value = os.fspath(value) if isinstance(value, os.PathLike) else value
        if value is None or old is None or not _same(KEY[name], old, value):
            edits[name] = None if value is None else _as_written(KEY[name], value, old)
    return edits


def _same(key: Key, old: object, new: object) -> bool:
    try:
        return key.check(old) == key.check(new)
    except SettingError:
        return False


def _as_written(key: Key, value: object, old: object) -> object:
    if key.kind == "time" and isinstance(value, int | float) and isinstance(old, str):
        return format_time(value)
    if key.kind == "note" and isinstance(value, int) and not isinstance(old, int):
        return note_name(value)
    return value
