"""Whether an output is still what would be made: of inputs and outputs, what is remembered is compared first.

A file whose size and time are those remembered is taken to hold what it held; any other is read and hashed.
So a run in which nothing has changed reads no preset, and a file that was only touched costs its hash. None
of this needs numpy or compiled code.
"""

import hashlib
import json
import os
import stat
import time
from collections import OrderedDict
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from glidesmith import __version__
from glidesmith.bank import Found, Stamp, Variation, stamp_of
from glidesmith.errors import GlidesmithError, PhraseError, PresetError
from glidesmith.manifest import InputFacts, Record
from glidesmith.production import Options, PhraseFile
from glidesmith.text import decoded, file_name, read_bytes, toml_mapping

if TYPE_CHECKING:
    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset

RECIPE = ("engine", "title", "settings_sha256", "phrase_sha256", "options")
"""What of a record settles every byte of its output."""

_UNTRUSTED = -1
_JUST_NOW_NS = 100_000_000
"""A file changed so lately may change again within the same tick of its file system's clock."""

_MOST_PHRASES = 16
_HASHED_BYTES = 1 << 20
_PHRASE_KEYS = frozenset({"notes", "tempo_bpm"})
_PRESET_KEYS = frozenset({"pitch", "gain"})


def origin_of(options: Options, variation: Variation, inputs: Mapping[str, str], choice: object) -> str:
    """SHA-256 of all that an item is made from, as far as it is known without reading any file.

    ``inputs`` are the hashes of its input files, ``choice`` the track and channel of its phrase, and how long
    it may be.
    """
    told = [__version__, options.as_dict(), variation.plain(), inputs, choice]
    return hashlib.sha256(json.dumps(told, sort_keys=True).encode("ascii")).hexdigest()


def agrees(record: Record, heading: Mapping[str, Any]) -> bool:
    """Whether the output that a record tells of is the one that an order with that heading would make."""
    return all(record.get(name) == heading[name] for name in RECIPE)


def file_digest(path: Path) -> str | None:
    """SHA-256 of a regular file, None where there is none; no link is followed."""
    try:
        if not stat.S_ISREG(path.lstat().st_mode):
            return None
        digest = hashlib.sha256()
        with path.open("rb") as file:
            while block := file.read(_HASHED_BYTES):
                digest.update(block)
    except OSError:
        return None
    return digest.hexdigest()


def output_stamp(path: str | os.PathLike[str]) -> Stamp | None:
    """The stamp of an output; None where there is none, or something else than a file."""
    try:
        facts = os.lstat(path)
    except (OSError, ValueError):
        return None
    return (facts.st_size, facts.st_mtime_ns) if stat.S_ISREG(facts.st_mode) else None


class Inputs:
    """A bank's input files: what was remembered of them, and what is found by reading where that won't do.

    ``known`` goes by the files' names as seen from the bank, and is kept up to date; ``changed`` says whether
    it was. Between two runs nothing is remembered of files but that.
    """

    def __init__(self, folder: Path, known: dict[str, InputFacts], reread: bool) -> None:
        self.known, self.changed = known, False
        self._folder, self._reread = folder, reread
        self._contents: OrderedDict[str, bytes] = OrderedDict()
        self._seen: dict[str, tuple[str, InputFacts]] = {}
        self._phrases: OrderedDict[tuple[object, ...], tuple[PhraseFile, Phrase]] = OrderedDict()
        self._patch: tuple[str, Preset] | None = None

    def preset(self, found: Found) -> InputFacts:
        """What is known of a preset's file. Raises PresetError where it can't be read, or is none."""
        kept = self.known.get(found.name)
        if kept is not None and (kept.kind == "file" or self._reread):
            kept = None
        if kept is not None and kept.stamp == found.stamp:
            return kept
        from glidesmith.preset import MOST_PRESET_BYTES, parse_preset

        data = read_bytes(found.path, MOST_PRESET_BYTES, PresetError)
        sha256 = hashlib.sha256(data).hexdigest()
        stamp = _trusted(found.stamp)
        if kept is not None and kept.sha256 == sha256:
            facts = replace(kept, stamp=stamp)
        elif is_phrase(data):
            facts = InputFacts(stamp, sha256, "notes")
        else:
            text = decoded(data, file_name(found.path), PresetError)
            patch = parse_preset(text, found.path)
            self._patch = (sha256, patch)
            facts = InputFacts(stamp, sha256, "preset", _links(patch))
        self._keep(found.name, facts)
        return facts

    def patch(self, found: Found, facts: InputFacts) -> "Preset":
        """A preset itself. Raises PresetError, also where the file has changed since it was looked at."""
        from glidesmith.preset import MOST_PRESET_BYTES, parse_preset

        if self._patch is None or self._patch[0] != facts.sha256 or self._patch[1].path != found.path:
            data = read_bytes(found.path, MOST_PRESET_BYTES, PresetError)
            if hashlib.sha256(data).hexdigest() != facts.sha256:
                raise PresetError(f"{file_name(found.path)}: changed while it was read; run again")
            patch = parse_preset(decoded(data, file_name(found.path), PresetError), found.path)
            self._patch = (facts.sha256, patch)
        return self._patch[1]

    def file(self, path: str, error: type[GlidesmithError]) -> tuple[str, InputFacts]:
        """The name, as seen from the bank, and the facts of a phrase or an oscillator's file.

        Raises ``error`` where it can't be read.
        """
        seen = self._seen.get(path)
        if seen is not None:
            return seen
        name = self._name(path)
        kept, stamp = self.known.get(name), stamp_of(path)
        if kept is not None and kept.stamp == stamp and not self._reread:
            facts = kept
        else:
            sha256 = hashlib.sha256(self.content(path, error)).hexdigest()
            facts = InputFacts(_trusted(stamp), sha256)
            if kept is not None and kept.sha256 == sha256:
                facts = replace(kept, stamp=facts.stamp)
            self._keep(name, facts)
        self._seen[path] = (name, facts)
        return name, facts

    def content(self, path: str, error: type[GlidesmithError]) -> bytes:
        """What a phrase or an oscillator's file holds. Raises ``error`` where it can't be read."""
        data = self._contents.get(path)
        if data is None:
            from glidesmith.phrase import MOST_MIDI_BYTES

            data = self._contents[path] = read_bytes(Path(path), MOST_MIDI_BYTES, error)
            if path in self._seen and hashlib.sha256(data).hexdigest() != self._seen[path][1].sha256:
                raise error(f"{file_name(path)}: changed while it was read; run again")
            if len(self._contents) > _MOST_PHRASES:
                self._contents.popitem(last=False)
        return data

    def phrase(
        self, path: str, track: int | None, channel: int | None, longest_s: float
    ) -> "tuple[PhraseFile, Phrase]":
        """A phrase, read once however many presets play it. Raises PhraseError."""
        key = (path, track, channel, longest_s)
        found = self._phrases.get(key)
        if found is None:
            from glidesmith.phrase import parse_phrase_file

            data = self.content(path, PhraseError)
            phrase = parse_phrase_file(data, Path(path), track, channel, longest_s)
            name = self._name(path)
            file = PhraseFile(name, phrase.content_hash(), track, channel, longest_s, data)
            found = self._phrases[key] = (file, phrase)
            if len(self._phrases) > _MOST_PHRASES:
                self._phrases.popitem(last=False)
        return found

    def _name(self, path: str) -> str:
        try:
            return Path(os.path.relpath(path, self._folder)).as_posix()
        except ValueError:  # on another drive of Windows
            return Path(path).absolute().as_posix()

    def _keep(self, name: str, facts: InputFacts) -> None:
        if self.known.get(name) != facts:
            self.known[name] = facts
            self.changed = True


def _trusted(stamp: Stamp | None) -> Stamp:
    """A stamp as it is remembered: never equal to any other where the file was changed just now."""
    if stamp is None or abs(time.time_ns() - stamp[1]) < _JUST_NOW_NS:
        return (0 if stamp is None else stamp[0], _UNTRUSTED)
    return stamp


def is_phrase(data: bytes) -> bool:
    """Whether a TOML file is a list of notes and no preset."""
    try:
        keys = toml_mapping(decoded(data, "", PhraseError), "", PhraseError).keys()
    except GlidesmithError:
        return False
    return bool(keys & _PHRASE_KEYS) and not keys & _PRESET_KEYS


def _links(patch: "Preset") -> tuple[str | None, int | None, int | None, str | None]:
    """What a preset names: its phrase's file, track and channel, and its oscillator's file."""
    given = patch.given or {}
    cycle = given.get("oscillator", {}).get("file")
    if patch.phrase is None:
        return None, None, None, cycle
    return given["phrase"]["file"], patch.phrase.track, patch.phrase.channel, cycle
