"""The candidates of a comparison set: where their settings come from, what they and their files are called.

They come from the values of one or more keys in all combinations, from a sheet that names them one by one, or
from several presets. A sheet is TOML; each table is a candidate that says what it changes in the preset, by
the same keys as a preset has:

    title = "Which law for the lead?"

    [as-it-is]

    [slow-exp]
    pitch.law = "exp"
    pitch.rise = "120 ms"
"""

import math
import re
import unicodedata
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import count, product
from pathlib import Path
from typing import Any

from glidesmith.errors import PresetError, SettingError
from glidesmith.preset import Preset, settings_hash
from glidesmith.settings import KEY, Key, find_key, suggested_key
from glidesmith.text import Mistakes, decoded, printable, read_bytes, shortened, shown, toml_mapping
from glidesmith.units import format_time, note_name

MOST_CANDIDATES = 16
"""How many candidates a set has at most, unless more are asked for."""

LARGEST_SET = 256
"""How many may be asked for."""

MOST_SHEET_BYTES = 1_000_000

Axes = Mapping[str, tuple[object, ...]]
"""The checked values of each key that is varied, by dotted name, in the order in which they were given."""

_LONGEST_LABEL = 100
_LONGEST_FILE_NAME = 60
_SPEAKS_FOR_ITSELF = ("pitch.law", "oscillator.wave")
_PLAIN_TABLES = ("pitch", "oscillator")
_UNIT_ENDINGS = {"dB": " db", "Hz": " hz", "V": " volts"}


@dataclass(frozen=True, slots=True)
class Candidate:
    """One candidate: its ``label`` for people, its preset, and the settings that set it apart.

    ``varied`` goes by dotted keys and is fit for JSON.
    """

    label: str
    preset: Preset
    varied: Mapping[str, object]

    @property
    def digest(self) -> str:
        """SHA-256, in hexadecimal, of the candidate's settings."""
        return settings_hash(self.preset)


def axes_from_texts(texts: Iterable[str]) -> Axes:
    """The axes that a command line gives as ``KEY=A,B,C``, each value with its unit if it has one.

    A value in double quotes may hold commas. Paths count from the working folder, as they do for a shell.
    Raises SettingError with a line a mistake.
    """
    mistakes = Mistakes()
    axes: dict[str, tuple[object, ...]] = {}
    for text in texts:
        name, equals, values = text.partition("=")
        name = name.strip()
        if not equals:
            mistakes.add(f"--vary {shown(text)}: give a key and its values, as pitch.law=rc,exp,cosine")
        elif name in axes:
            mistakes.add(f"--vary {shortened(name)}: is given twice; give all its values in one --vary")
        elif (key := _key_to_vary(name, mistakes)) is not None:
            parts = [part.strip() for part in _split(values)]
            found = _checked_axis(key, parts, key.parse, mistakes)
            axes[name] = tuple(_anchored(key, value, Path()) for value in found)
    mistakes.raise_as(SettingError)
    return axes


def axes_from_values(vary: Mapping[str, Sequence[object]]) -> Axes:
    """The axes that Python gives: values as in a preset by dotted key.

    Raises SettingError with a line a mistake.
    """
    mistakes = Mistakes()
    axes: dict[str, tuple[object, ...]] = {}
    for name, values in vary.items():
        key = _key_to_vary(name, mistakes)
        if key is None:
            continue
        if isinstance(values, str | bytes | Mapping) or not isinstance(values, Iterable):
            mistakes.add(f"{name} = {shown(values)}: give a list of values to vary it")
            continue
        axes[name] = _checked_axis(key, list(values), key.check, mistakes)
    mistakes.raise_as(SettingError)
    return axes


def _anchored(key: Key, value: object, folder: Path) -> object:
    """A path as seen from a folder other than the preset's own; any other value as it is."""
    return str((folder / str(value)).expanduser().absolute()) if key.kind == "file" else value


def _split(values: str) -> list[str]:
    """The parts between commas; double quotes hold a comma together."""
    import csv

    try:
        return next(csv.reader([values], skipinitialspace=True, strict=True), []) or [""]
    except csv.Error:
        return values.split(",")


def _key_to_vary(name: object, mistakes: Mistakes) -> Key | None:
    try:
        key = find_key(name if isinstance(name, str) else str(name))
    except SettingError as problem:
        mistakes.add(str(problem))
        return None
    if (reason := _not_varied(key)) is not None:
        mistakes.add(f"can't vary {key.name}: {reason}")
        return None
    return key


def _not_varied(key: Key) -> str | None:
    if key.table == "phrase":
        return "all candidates play one phrase; choose it with --phrase, or in the preset"
    if key.name == "title":
        return "a title changes nothing that is heard; a sheet gives candidates names"
    return None


def _checked_axis(key: Key, values: Sequence[object], check: Any, mistakes: Mistakes) -> tuple[object, ...]:
    """The values by the key's rule, none of them empty and none of them there twice."""
    if not values:
        mistakes.add(f"{key.name}: no values are given to vary it")
    checked: list[object] = []
    for place, value in enumerate(values, 1):
        if value is None or value == "":
            mistakes.add(f"{key.name}: value {place} of {len(values)} is empty; it {key.rule}")
            continue
        try:
            found = check(value)
        except SettingError as problem:
            mistakes.add(str(problem))
            continue
        if found in checked:
            mistakes.add(f"{key.name} = {shown(value)}: is there twice; give each value once")
        else:
            checked.append(found)
    return tuple(checked)


def varied_candidates(presets: Sequence[Preset], axes: Axes, most: int) -> tuple[Candidate, ...]:
    """Every preset under every combination of the axes' values, the last axis turning fastest.

    Raises SettingError where there would be fewer than 2 or more than ``most``, and PresetError where a
    combination is no valid preset, a line a mistake.
    """
    counts = [len(presets), *(len(values) for values in axes.values())]
    require_fit(math.prod(counts), most, [count for count in counts if count > 1])
    names = _preset_names(presets)
    candidates: list[Candidate] = []
    changed = _Changes()
    for preset, name in zip(presets, names, strict=True):
        for values in product(*axes.values()):
            changes = dict(zip(axes, values, strict=True))
            label = _label(name if len(presets) > 1 else "", axes, changes)
            varied = _told(changes)
            candidates.append(Candidate(label, changed.made(label, preset, changes), varied))
    changed.raise_mistakes(len(candidates))
    return tuple(_with_differences(candidates) if len(presets) > 1 else _distinct_labels(candidates))


def read_sheet(preset: Preset, path: Path, most: int) -> tuple[str, tuple[Candidate, ...]]:
    """The title, which may be empty, and the candidates of a sheet file, each made from ``preset``.

    Paths count from the sheet's folder.

    Raises SettingError, a line a mistake, where the file can't be used.
    """
    where = printable(str(path))
    text = decoded(read_bytes(path, MOST_SHEET_BYTES, SettingError), where, SettingError)
    mapping = toml_mapping(text, where, SettingError)
    _require_no_preset(mapping, where)
    mistakes = Mistakes(where)
    title = mapping.pop("title", "")
    if not isinstance(title, str):
        mistakes.add(f"title = {shown(title)}: must be text, in quotes")
    tables = {
        name: {
            key: _anchored(KEY[key], value, path.parent)
            for key, value in _sheet_settings(name, table, mistakes).items()
        }
        for name, table in mapping.items()
    }
    mistakes.raise_as(SettingError)
    require_fit(len(tables), most, [], where)
    changed = _Changes(where)
    candidates = [
        Candidate(
            shortened(name.strip(), _LONGEST_LABEL), changed.made(name, preset, changes), _told(changes)
        )
        for name, changes in tables.items()
    ]
    changed.raise_mistakes(len(candidates))
    return title, tuple(_distinct_labels(candidates))


def _require_no_preset(mapping: Mapping[str, object], where: str) -> None:
    """Raise SettingError for a preset: its tables hold settings by their short names."""
    tables = {name: table for name, table in mapping.items() if name != "title"}
    short = [
        name
        for name, table in tables.items()
        if isinstance(table, Mapping) and any(f"{name}.{leaf}" in KEY for leaf in table)
    ]
    if short and len(short) == len(tables):
        raise SettingError(
            f"{where}: is a preset, not a sheet, whose tables each name a candidate; to compare presets name "
            "them one after the other, without --sheet"
        )


def _told(changes: Mapping[str, object]) -> dict[str, object]:
    """Changes as they are told: plain values, and files by name, since a set is mailed to others."""
    return {
        key: Path(str(value)).name if KEY[key].kind == "file" else KEY[key].plain(value)
        for key, value in changes.items()
    }


def _sheet_settings(name: str, table: object, mistakes: Mistakes) -> dict[str, object]:
    """What one table of a sheet changes, by dotted keys."""
    if not isinstance(table, Mapping):
        mistakes.add(
            f"{shortened(name)} = {shown(table)}: must be a table of settings, begun by "
            f"[{shortened(name)}], that names a candidate"
        )
        return {}
    if not name.strip():
        mistakes.add('[""]: a candidate needs a name')
    changes: dict[str, object] = {}
    for dotted, value in _flattened(table):
        key = KEY.get(dotted)
        where = f"[{shortened(name)}] {shortened(dotted)}"
        if key is None:
            mistakes.add(f"{where} = {shown(value)}: there is no such key{suggested_key(dotted)}")
        elif (reason := _not_varied(key)) is not None:
            mistakes.add(f"{where}: can't vary: {reason}")
        elif dotted in changes:
            mistakes.add(f"{where}: is given twice")
        else:
            try:
                changes[dotted] = key.check(value)
            except SettingError as problem:
                mistakes.add(f"[{shortened(name)}] {problem}")
    return changes


def _flattened(table: Mapping[str, object]) -> Iterator[tuple[str, object]]:
    for name, value in table.items():
        if isinstance(value, Mapping):
            yield from ((f"{name}.{leaf}", inner) for leaf, inner in value.items())
        else:
            yield name, value


def check_most(most: object) -> int:
    """``most`` itself where it is a number of candidates that may be asked for. Raises SettingError."""
    if isinstance(most, bool) or not isinstance(most, int) or not 2 <= most <= LARGEST_SET:
        raise SettingError(f"most = {shown(most)}: give how many candidates there may be, 2 to {LARGEST_SET}")
    return most


def require_fit(count: int, most: int, factors: Sequence[int], where: str = "") -> None:
    """Raise SettingError where ``count`` candidates are too few or too many."""
    prefix = f"{where}: " if where else ""
    if count < 2:
        raise SettingError(
            f"{prefix}{'no candidates' if count < 1 else 'only one candidate'}: a comparison needs two or "
            "more; vary a key with several values (--vary KEY=A,B), name several presets, or give a sheet "
            "(--sheet)"
        )
    if count <= most:
        return
    many = f"{' × '.join(map(str, factors))} = {count:,}" if len(factors) > 1 else f"{count:,}"
    way_out = f"raise the limit with --most {count}" if count <= LARGEST_SET else "give fewer values"
    raise SettingError(f"{prefix}{many} candidates, and at most {most} are made; {way_out}")


class _Changes:
    """Makes changed presets and gathers what is wrong with them, so that it is told once."""

    def __init__(self, where: str = "") -> None:
        self._prefix = f"{where}: " if where else ""
        self._labels: dict[str, list[str]] = {}

    def made(self, label: str, preset: Preset, changes: Mapping[str, object]) -> Preset:
        try:
            return preset.changed(changes) if changes else preset
        except PresetError as problem:
            for line in problem.lines:
                self._labels.setdefault(line, []).append(label)
            return preset

    def raise_mistakes(self, count: int) -> None:
        """Raise PresetError with each mistake and the first candidate that has it."""
        mistakes = Mistakes()
        for line, labels in self._labels.items():
            whose = "" if len(labels) == count else f"candidate {shown(labels[0])}: "
            others = len(labels) - 1 if whose else 0
            more = f" (and {others} more candidate{'s' * (others > 1)})" if others else ""
            mistakes.add(f"{self._prefix}{whose}{line}{more}")
        mistakes.raise_as(PresetError)


def _preset_names(presets: Sequence[Preset]) -> list[str]:
    """A name for each preset that no other has: its title, else the name of its file, else its path."""
    titles = [printable(preset.title) for preset in presets]
    stems = [printable(preset.path.stem) if preset.path else "" for preset in presets]
    return [
        title
        if title.strip() and titles.count(title) == 1
        else stem
        if stem and stems.count(stem) == 1
        else str(preset.path)
        for preset, title, stem in zip(presets, titles, stems, strict=True)
    ]


def _label(name: str, axes: Axes, changes: Mapping[str, object]) -> str:
    """What sets a candidate apart, in a few words: ``"rc, rise 60 ms"``."""
    told = settings_text({key: value for key, value in changes.items() if len(axes[key]) > 1})
    return shortened(": ".join(part for part in (name, told) if part), _LONGEST_LABEL)


def settings_text(changes: Mapping[str, object]) -> str:
    """Checked settings by dotted key, in a few words: ``"rc, rise 60 ms"``."""
    return ", ".join(
        f"{_key_text(key)} {_value_text(KEY[key], value)}".strip() for key, value in changes.items()
    )


def _key_text(name: str) -> str:
    """A key as a label says it: short, and with no two keys alike."""
    if name in _SPEAKS_FOR_ITSELF:
        return ""
    key = KEY[name]
    leaf = key.leaf.replace("_", " ").removesuffix(_UNIT_ENDINGS.get(key.unit, "\0"))
    if key.leaf == "law":
        return key.table
    return leaf if key.table in _PLAIN_TABLES else f"{key.table} {leaf}"


def _value_text(key: Key, value: object) -> str:
    if key.kind == "time" and isinstance(value, float):
        return format_time(value)
    if key.kind == "note" and isinstance(value, int):
        return note_name(value)
    if key.kind == "flag":
        return "on" if value else "off"
    if isinstance(value, float):
        number = repr(value).removesuffix(".0")
        return f"{number} {key.unit}".rstrip()
    if key.kind == "file":
        return Path(str(value)).name
    return printable(str(value))


def _with_differences(candidates: Sequence[Candidate]) -> list[Candidate]:
    """Candidates of several presets, with every setting that is not the same in all of them as ``varied``."""
    settings = [heard_settings(candidate.preset) for candidate in candidates]
    keys = dict.fromkeys(key for found in settings for key in found)
    differing = [key for key in keys if any(found.get(key) != settings[0].get(key) for found in settings)]
    return _distinct_labels(
        [
            replace(candidate, varied={key: found.get(key) for key in differing})
            for candidate, found in zip(candidates, settings, strict=True)
        ]
    )


def heard_settings(preset: Preset) -> dict[str, object]:
    """The settings that a candidate is made of, by dotted key, fit for JSON: all but its title and phrase."""
    return {
        name: value
        for name, value in preset.settings().items()
        if name != "title" and not name.startswith("phrase.")
    }


def _distinct_labels(candidates: Sequence[Candidate]) -> list[Candidate]:
    """The same candidates; labels that more than one has get a number, such that no two are alike."""
    labels = [candidate.label for candidate in candidates]
    taken = {label for label in labels if labels.count(label) == 1}
    if len(taken) == len(labels):
        return list(candidates)
    distinct: list[Candidate] = []
    for number, candidate in enumerate(candidates, 1):
        label = candidate.label
        if labels.count(label) > 1:
            label = next(told for n in count(number) if (told := f"{label} ({n})") not in taken)
            taken.add(label)
        distinct.append(replace(candidate, label=label))
    return distinct


def require_different(candidates: Sequence[Candidate]) -> None:
    """Raise SettingError where two candidates have the same settings: there is nothing to compare then."""
    seen: dict[str, Candidate] = {}
    mistakes = Mistakes()
    for candidate in candidates:
        first = seen.setdefault(candidate.digest, candidate)
        if first is not candidate:
            mistakes.add(
                f"candidates {shown(first.label)} and {shown(candidate.label)} have the same settings; "
                "leave one of them out"
            )
    mistakes.raise_as(SettingError)


def file_name(number: int, label: str, count: int = 0) -> str:
    """The name of a candidate's WAV: ``"01-rc-rise-60ms.wav"``; sorts by number, plain on any file system."""
    width = max(2, len(str(count)))
    plain = plain_name(label)
    return f"{number:0{width}d}{'-' if plain else ''}{plain}.wav"


def plain_name(label: str) -> str:
    """A label as part of a file's name: small ASCII letters, digits, dots and hyphens, and not too long."""
    plain = label.replace("µ", "u").replace("μ", "u").replace("#", "sharp")
    plain = unicodedata.normalize("NFKD", plain).encode("ascii", "ignore").decode("ascii").lower()
    plain = re.sub(r"(?<![0-9a-z.])-(?=[0-9.])", "minus", plain)
    plain = re.sub(r"(?<=[0-9.]) (?=(?:us|ms|s|db|hz|v|cents)\b)", "", plain)
    return re.sub(r"(?:[^a-z0-9.]|\.(?![0-9]))+", "-", plain)[:_LONGEST_FILE_NAME].strip("-.")
