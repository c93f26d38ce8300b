"""The folder of a comparison set: what may be in it, what of an earlier run is still good, what has to go.

A folder holds one set: the WAVs, ``comparison.json`` and ``index.html``. All are written beside their final
names first and take them together at the end: ``comparison.json`` before the others, so that after a power
cut it says what belongs there, and the next run finds by the samples' hash which files are not yet so.
"""

import hashlib
import json
import os
import re
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from glidesmith.errors import GlidesmithError, OutputError
from glidesmith.partfile import PartFile, is_leftover, output_error
from glidesmith.text import printable, read_bytes, shortened, shown

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

KIND = "glidesmith comparison"
SHEET_KINDS = ("glidesmith listening sheet", "glidesmith listening sheets")
VERSION = 1
FACTS_FILE, PAGE_FILE = "comparison.json", "index.html"

_MOST_FACTS_BYTES = 500_000_000
_MOST_SHEET_BYTES = 10_000_000
_LEFT_BY_SYSTEMS = ("Thumbs.db", "ehthumbs.db", "desktop.ini", "Icon\r")
_OWN_WAV = re.compile(r"[0-9]{2,3}(?:-[a-z0-9.-]*)?\.wav")
_MOST_NAMED = 3
_HEAD_BYTES = 200
_MOST_DECIBELS = 1000.0


@dataclass(frozen=True, slots=True)
class Rendered:
    """What was measured of a candidate as rendered, before its gain."""

    lufs: float
    true_peak_dbtp: float
    gated: bool
    sha256: str

    def as_dict(self) -> dict[str, object]:
        """Fit for JSON."""
        return {
            "lufs": self.lufs,
            "true_peak_dbtp": self.true_peak_dbtp,
            "gated": self.gated,
            "sha256": self.sha256,
        }


@dataclass(frozen=True, slots=True)
class Earlier:
    """A candidate of the set in the folder: its ``entry`` in ``comparison.json``, and what is used of it."""

    file: str
    settings_sha256: str
    audio_sha256: str
    rendered: Rendered
    entry: Mapping[str, Any]


class SetFolder:
    """A folder that a set is to be written to.

    Raises OutputError where the folder can't be used at all; `require_free` says whether it may be.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.name = printable(str(path))
        self.facts: Mapping[str, Any] | None = None
        self.earlier: dict[str, Earlier] = {}
        self.problem = ""
        self._is_damaged_set = False
        self._others: list[str] = []
        self._stamp = _stamp(path / FACTS_FILE)
        try:
            _require_no_dead_link(path)
            if path.exists():
                self._look()
        except OSError as problem:
            raise output_error(str(path), problem) from None
        except ValueError:
            raise OutputError(f"{self.name}: is not a name that a folder can have; check it") from None

    def _look(self) -> None:
        names = sorted(entry.name for entry in os.scandir(self.path))
        if FACTS_FILE in names:
            _require_no_dead_link(self.path / FACTS_FILE)
            try:
                self.facts, self.earlier = _read_facts(self.path / FACTS_FILE)
            except GlidesmithError as problem:
                self.problem = str(problem)
                self._is_damaged_set = KIND.encode() in _read_head(self.path / FACTS_FILE)
        own = {earlier.file for earlier in self.earlier.values()}
        if self.facts is not None:
            own |= {FACTS_FILE, PAGE_FILE}
        self._others = [name for name in names if name not in own and not self._is_bystander(name)]

    def _is_bystander(self, name: str) -> bool:
        """Hidden files, those that desktops leave in every folder, part files of a killed run, and listening
        sheets may be there.
        """
        left = name.startswith(".") or name in _LEFT_BY_SYSTEMS or _is_part(name)
        return left or _is_sheet(self.path / name)

    def require_free(self, ground: Mapping[str, object], settings: Sequence[str]) -> None:
        """Raise OutputError where a set may not be written here without being told to replace.

        It may where the folder is empty, or holds a set of the same ``ground`` (phrase, rate and so on) with
        no candidate that is not among ``settings`` (hashes).
        """
        way_out = "choose another folder, or write there all the same with --replace"
        if self.problem:
            raise OutputError(f"{self.problem}; {way_out}")
        if self._others:
            raise OutputError(f"{self.name}: holds something else ({self._named_others()}); {way_out}")
        if self.facts is None:
            return
        reason = self._other_ground(ground)
        gone = [found.entry["label"] for digest, found in self.earlier.items() if digest not in settings]
        if not reason and gone:
            reason = f"{len(gone)} of its candidates would go, as {shown(gone[0])}"
        if reason:
            count = f"{len(self.earlier)} candidates"
            title = shown(self.facts["title"])
            raise OutputError(f"{self.name}: holds another set ({title}, {count}; {reason}); {way_out}")

    def require_names_free(self, names: Collection[str]) -> None:
        """Raise OutputError where a file of no set has one of the ``names`` of the set to come."""
        taken = [name for name in self._others if name in names]
        if taken and not self._is_damaged_set:
            raise OutputError(
                f"{self.name}: {shown(taken[0])} belongs to no comparison set and would be overwritten; move "
                "it elsewhere, or choose another folder"
            )

    def _other_ground(self, ground: Mapping[str, object]) -> str:
        assert self.facts is not None
        for name, value in ground.items():
            if self.facts.get(name) != value:
                return f"its {_GROUND_WORDS[name]} is another"
        return ""

    def has_ground(self, ground: Mapping[str, object]) -> bool:
        """Whether what is here was rendered from the same phrase at the same rate by the same engine."""
        return self.facts is not None and all(self.facts.get(name) == value for name, value in ground.items())

    def changed_wavs(self) -> list[str]:
        """WAVs of a set that was finished whose samples are not those written. One that is gone is none."""
        if not os.path.lexists(self.path / PAGE_FILE):
            return []
        return [
            earlier.file
            for earlier in self.earlier.values()
            if os.path.lexists(self.path / earlier.file) and self.untouched_codes(earlier) is None
        ]

    def untouched_codes(self, earlier: Earlier) -> "NDArray[np.int32] | None":
        """The samples of a candidate's WAV as 24-bit numbers; None where they are not those written."""
        import soundfile

        try:
            samples, _ = soundfile.read(str(self.path / earlier.file), dtype="int32")
        except (OSError, RuntimeError):
            return None
        codes: NDArray[np.int32] = samples >> 8
        return codes if codes_digest(codes) == earlier.audio_sha256 else None

    def outdated(self, files: Sequence[str]) -> list[Path]:
        """What a finished set of ``files`` leaves over: WAVs of the earlier set, parts of killed runs."""
        old = [earlier.file for earlier in self.earlier.values() if earlier.file not in files]
        parts = [
            entry.name for entry in os.scandir(self.path) if _is_part(entry.name) and is_leftover(Path(entry))
        ]
        return [self.path / name for name in dict.fromkeys([*old, *parts])]

    def left_warnings(self) -> tuple[str, ...]:
        """What to tell of files in the folder that belong to no set."""
        return (f"{self.name}: left as it was: {self._named_others()}",) if self._others else ()

    def _named_others(self) -> str:
        more = len(self._others) - _MOST_NAMED
        named = ", ".join(shown(name) for name in self._others[:_MOST_NAMED])
        return f"{named} and {more:,} more" if more > 0 else named

    def make(self) -> None:
        """Make the folder, and those above it, where they are missing. Raises OutputError."""
        try:
            self.path.mkdir(parents=True, exist_ok=True)
        except OSError as problem:
            raise output_error(str(self.path), problem) from None

    def begin(self) -> PartFile:
        """The facts file, begun and locked: nobody else writes a set here until it is closed or abandoned."""
        file = PartFile(self.path / FACTS_FILE)
        if _stamp(self.path / FACTS_FILE) != self._stamp:
            file.abandon()
            raise OutputError(f"{self.name}: another run wrote a set here meanwhile; run the command again")
        return file


_GROUND_WORDS = {
    "phrase": "phrase",
    "sample_rate": "sample rate",
    "engine": "engine's version",
    "equal": "choice of what is equal",
}


def codes_digest(codes: "NDArray[np.int32]") -> str:
    """SHA-256, in hexadecimal, of samples as whole numbers (little-endian 32-bit words)."""
    return hashlib.sha256(codes.astype("<i4").tobytes()).hexdigest()


def ground_of(facts: Mapping[str, Any]) -> dict[str, object]:
    """What candidates must share to be of one set, out of a set's facts."""
    return {name: facts[name] for name in _GROUND_WORDS}


def _require_no_dead_link(path: Path) -> None:
    """Raise OutputError for a link that leads nowhere: it exists and yet can't be written or looked into."""
    if path.is_symlink() and not path.exists():
        target = shown(str(path.readlink()))
        raise OutputError(
            f"{printable(str(path))}: is a link to {target}, which is not there; remove the link or "
            "make what it leads to"
        )


def _stamp(path: Path) -> tuple[int, int, int] | None:
    try:
        found = path.stat()
    except (OSError, ValueError):
        return None
    return found.st_ino, found.st_size, found.st_mtime_ns


def _is_part(name: str) -> bool:
    stem = name.removesuffix(".part")
    return stem != name and (
        stem in (FACTS_FILE, PAGE_FILE, f"{PAGE_FILE}.part") or _OWN_WAV.fullmatch(stem) is not None
    )


def _is_sheet(path: Path) -> bool:
    if path.suffix != ".json":
        return False
    try:
        found = json.loads(read_bytes(path, _MOST_SHEET_BYTES, GlidesmithError))
    except (GlidesmithError, ValueError, RecursionError):
        return False
    return isinstance(found, dict) and found.get("kind") in SHEET_KINDS


def _read_facts(path: Path) -> tuple[Mapping[str, Any], dict[str, Earlier]]:
    """What ``comparison.json`` says. Raises OutputError where it is none of ours, or damaged."""
    data = read_bytes(path, _MOST_FACTS_BYTES, OutputError)
    name = printable(str(path))
    try:
        facts = json.loads(data)
    except (ValueError, RecursionError):
        raise OutputError(f"{name}: is damaged (no JSON)") from None
    if not isinstance(facts, dict) or facts.get("kind") != KIND:
        raise OutputError(f"{name}: is not the facts of a comparison set")
    if facts.get("version") != VERSION:
        raise OutputError(f"{name}: is of version {shown(facts.get('version'))}, and this is {VERSION}")
    try:
        found = [_earlier(entry) for entry in facts["candidates"]]
        ground_of(facts)
        _decibels(facts["loudness"]["common_lufs"])
        facts["title"] = shortened(str(facts["title"]))
    except (KeyError, TypeError, ValueError, AttributeError):
        raise OutputError(f"{name}: is damaged (not all that a set has is there)") from None
    return facts, {earlier.settings_sha256: earlier for earlier in found}


def _read_head(path: Path) -> bytes:
    """The first bytes of a file, and none of one that can't be read."""
    try:
        with path.open("rb") as file:
            return file.read(_HEAD_BYTES)
    except OSError:
        return b""


def _decibels(value: object) -> float:
    """A level as facts tell it. Raises ValueError for anything else."""
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not abs(value) <= _MOST_DECIBELS:
        raise ValueError(value)
    return float(value)


def _earlier(entry: Mapping[str, Any]) -> Earlier:
    rendered = entry["rendered"]
    file = str(entry["file"])
    if not _OWN_WAV.fullmatch(file):
        raise ValueError(file)
    measured = Rendered(
        _decibels(rendered["lufs"]),
        _decibels(rendered["true_peak_dbtp"]),
        bool(rendered["gated"]),
        str(rendered["sha256"]),
    )
    for level in ("gain_db", "lufs", "true_peak_dbtp"):
        _decibels(entry[level])
    if not all(isinstance(line, str) for line in [entry["label"], *entry["warnings"]]):
        raise ValueError(entry["label"])
    return Earlier(file, str(entry["settings_sha256"]), str(entry["audio_sha256"]), measured, entry)
