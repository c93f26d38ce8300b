"""What a batch remembers in its output folder.

``manifest.jsonl`` is for people and scripts: a line that says what it is, then a record (JSON) for each
output, sorted by name, without clock times. It is written when a run ends, whole.

``.glidesmith-batch`` is the batch's own journal: which outputs were begun, the records of those made since
the manifest was written, and the sizes and times of files, by which the next run sees without reading them
that nothing has changed. It is also the lock that keeps a second batch out, which dies with the process that
holds it. Where it is lost or damaged, the next run reads and hashes instead; nothing else depends on it.
"""

import contextlib
import errno
import hashlib
import json
import os
import stat
import sys
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import NoneType
from typing import IO, Any

from glidesmith.bank import Stamp, is_inside, stamp_of
from glidesmith.errors import OutputError
from glidesmith.partfile import PartFile, output_error
from glidesmith.text import file_name, shown

if sys.platform == "win32":
    import msvcrt
else:
    import fcntl

MANIFEST_FILE = "manifest.jsonl"
JOURNAL_FILE = ".glidesmith-batch"
KIND, VERSION = "glidesmith batch", 1
JOURNAL_KIND = "glidesmith batch journal"

_NUMBER, _LEVEL = (int, float), (int, float, NoneType)
_KINDS: dict[str, type | tuple[type, ...]] = {
    "item": str,
    "title": str,
    "preset": str,
    "phrase": str,
    "varied": dict,
    "engine": str,
    "settings_sha256": str,
    "phrase_sha256": str,
    "options": dict,
    "sources": dict,
    "without_effect": list,
    "file_sha256": str,
    "bytes": int,
    "frames": int,
    "sample_rate": int,
    "depth": (int, str),
    "gain_db": _NUMBER,
    "lufs": _LEVEL,
    "true_peak_dbtp": _LEVEL,
    "peak_db": _LEVEL,
    "clipped": int,
    "glides": int,
    "never_lands": list,
    "edge_clicks": int,
    "warnings": list,
    "curve": list,
}
_GLIDE_KINDS: dict[str, type | tuple[type, ...]] = {
    "note": int, "start_s": _NUMBER, "from": str, "to": str, "short_by_cents": _NUMBER
}  # fmt: skip
_LOCKED_BYTE = 1 << 62
_DAMAGED = (ValueError, TypeError, KeyError, RecursionError, OverflowError)

_LONGEST_LINE = 1 << 24
"""Bytes: more than a record of a phrase with a hundred thousand glides that never land."""

_LARGEST = 1e15
"""No figure of a record is so large; what is made of figures stays finite and exact below it."""

_LONGEST_HEAD = 1 << 16

Record = dict[str, Any]


def line_of(facts: Any) -> bytes:
    """Facts as one line of JSON in plain ASCII."""
    return json.dumps(facts, allow_nan=False, separators=(",", ":")).encode("ascii") + b"\n"


def checked_record(record: object) -> Record:
    """A record in which everything is there, and what it should be. Raises ValueError for anything else."""
    if not isinstance(record, dict) or not _has(record, _KINDS) or not is_inside(record["item"]):
        raise ValueError("no record")
    json.dumps(record, allow_nan=False)
    _require_measured(record)
    glides = all(isinstance(glide, dict) and _has(glide, _GLIDE_KINDS) for glide in record["never_lands"])
    points = all(isinstance(point, list) and len(point) == 2 for point in record["curve"])
    numbers = points and all(isinstance(value, _NUMBER) for point in record["curve"] for value in point)
    texts = all(isinstance(line, str) for line in record["warnings"])
    if not (glides and numbers and texts and record["sample_rate"] > 0):
        raise ValueError("no record")
    return record


def _require_measured(value: object) -> None:
    """Raise ValueError where any number in a record is out of reason."""
    if isinstance(value, dict):
        value = list(value.values())
    if isinstance(value, list):
        for each in value:
            _require_measured(each)
    elif isinstance(value, int | float) and not -_LARGEST <= value <= _LARGEST:
        raise ValueError("no record")


def _has(facts: Record, kinds: Mapping[str, type | tuple[type, ...]]) -> bool:
    return all(name in facts and isinstance(facts[name], kind) for name, kind in kinds.items())


@dataclass(frozen=True, slots=True)
class Line:
    """Where a record stands in a file, and what is asked of it most often."""

    file: IO[bytes]
    offset: int
    length: int
    preset: str
    file_sha256: str
    never_land: int

    @classmethod
    def of(cls, record: Record, file: IO[bytes], offset: int, length: int) -> "Line":
        """The place of a record whose JSON stands there."""
        return cls(file, offset, length, record["preset"], record["file_sha256"], len(record["never_lands"]))

    def text(self) -> bytes:
        """The record as it stands."""
        self.file.seek(self.offset)
        return self.file.read(self.length)

    def record(self) -> Record:
        """The record itself."""
        found: Record = json.loads(self.text())
        return found


class Records:
    """The records of a folder by output, on disk: a place in memory is kept of each, and no more."""

    def __init__(self, file: IO[bytes] | None = None) -> None:
        """``file`` is closed with the records."""
        self._lines: dict[str, Line] = {}
        self._file = file

    def __contains__(self, item: object) -> bool:
        return item in self._lines

    def __len__(self) -> int:
        return len(self._lines)

    def __iter__(self) -> Iterator[Record]:
        """The records, sorted by the outputs' names."""
        for item in self.items():
            yield self._lines[item].record()

    def lines(self) -> Iterator[Line]:
        """Where the records stand, sorted by the outputs' names."""
        for item in self.items():
            yield self._lines[item]

    def items(self) -> list[str]:
        """The outputs' names, sorted."""
        return sorted(self._lines)

    def line(self, item: str) -> Line | None:
        """Where the record of an output stands, if there is one."""
        return self._lines.get(item)

    def put(self, item: str, line: Line) -> None:
        """Note where the record of an output stands, in place of an earlier one."""
        self._lines[item] = line

    def drop(self, item: str) -> None:
        """Forget an output."""
        self._lines.pop(item, None)

    def close(self) -> None:
        """Let the manifest's file go; the records can't be read any more."""
        if self._file is not None:
            self._file.close()


def read_manifest(path: Path, known: Stamp | None = None) -> tuple[Records, list[str]]:
    """The records of a manifest, none where there is no such file, and a line for each that is damaged.

    Records are taken at their word where the file has the stamp ``known``, with which it was written. Raises
    OutputError for a file that is no manifest, or one of a newer version.
    """
    try:
        file = _opened(path)
    except FileNotFoundError:
        return Records(), []
    except OSError as problem:
        raise output_error(str(path), problem) from None
    try:
        return _read_lines(file, file_name(path), known is not None and stamp_of(path) == known)
    except BaseException:
        file.close()
        raise


def _opened(path: Path) -> IO[bytes]:
    """A regular file to be read, no link, pipe or device. Raises OSError."""
    flags = os.O_RDONLY | getattr(os, "O_CLOEXEC", 0) | getattr(os, "O_BINARY", 0)
    flags |= getattr(os, "O_NOFOLLOW", 0) | getattr(os, "O_NONBLOCK", 0)
    file = os.fdopen(os.open(path, flags), "rb")
    if not stat.S_ISREG(os.fstat(file.fileno()).st_mode):
        file.close()
        raise OSError(errno.EINVAL, "it is no regular file")
    return file


def _lines_of(file: IO[bytes]) -> Iterator[tuple[bytes, int]]:
    """The lines from where a file stands, and how long each is; one that is too long comes empty."""
    while text := file.readline(_LONGEST_LINE):
        length = len(text)
        while not text.endswith(b"\n") and (more := file.readline(_LONGEST_LINE)):
            text, length = b"" if not more.endswith(b"\n") else b"\n", length + len(more)
        yield (text if length == len(text) else b""), length


def _read_lines(file: IO[bytes], name: str, is_trusted: bool) -> tuple[Records, list[str]]:
    records, damaged = Records(file), list[str]()
    check_head(file.readline(_LONGEST_HEAD), name)
    offset = file.tell()
    for number, (text, length) in enumerate(_lines_of(file), 2):
        try:
            record = json.loads(text)
            if not is_trusted:
                checked_record(record)
            records.put(record["item"], Line.of(record, file, offset, len(text.rstrip())))
        except _DAMAGED:
            damaged.append(f"{name}: line {number:,} is damaged; what it listed is made again")
        offset += length
    return records, damaged


def check_head(text: bytes, name: str) -> None:
    """Raise OutputError where a file that begins with that line is no manifest, or one of a newer version."""
    try:
        head = json.loads(text)
        kind, version = head["kind"], head["version"]
    except _DAMAGED:
        kind = version = None
    if kind != KIND:
        raise OutputError(
            f"{name}: is not the manifest of a batch, and would be overwritten; move it elsewhere, or choose "
            "another folder"
        )
    if version != VERSION:
        raise OutputError(
            f"{name}: is of version {shown(version)}, and this Glidesmith knows {VERSION}; use the one that "
            "wrote it, or choose another folder"
        )


def write_manifest(path: Path, records: Records) -> None:
    """Write a manifest, whole or not at all. Raises OutputError."""
    file = PartFile(path)
    try:
        file.write(line_of({"kind": KIND, "version": VERSION}))
        for line in records.lines():
            file.write(line.text() + b"\n")
    except BaseException:
        file.abandon()
        raise
    file.close()


@dataclass(frozen=True, slots=True)
class InputFacts:
    """What was found in an input file when it had that stamp.

    ``kind`` is "preset", "notes" for a list of notes that stands among the presets, or "file" where nobody
    has asked yet. For a preset ``links`` are the phrase file's path, track and channel, and the oscillator's
    file, as the preset names them, relative to it.
    """

    stamp: Stamp
    sha256: str
    kind: str = "file"
    links: tuple[str | None, int | None, int | None, str | None] | None = None


@dataclass(frozen=True, slots=True)
class OutputFacts:
    """An output as it was written: its stamp, its hash, and the hash of all that it was made from."""

    stamp: Stamp
    file_sha256: str
    origin: str


@dataclass(frozen=True, slots=True)
class SummaryFacts:
    """The summary as it was written: its stamp, its hash, and that of its title and the failures it names."""

    stamp: Stamp
    file_sha256: str
    told: str


class Journal:
    """The journal of an output folder: what it says, and the lock, from `hold` to `close`."""

    def __init__(self, folder: Path) -> None:
        self.path = folder / JOURNAL_FILE
        self.inputs: dict[str, InputFacts] = {}
        self.outputs: dict[str, OutputFacts] = {}
        self.begun: set[str] = set()
        self.lines: dict[str, Line] = {}
        self.manifest: Stamp | None = None
        self.summary: SummaryFacts | None = None
        self.is_clean = True
        self._file: IO[bytes] | None = None
        self._reading: IO[bytes] | None = None
        self._identity: tuple[int, int] | None = None

    def read(self) -> None:
        """Take in what the file says, if there is one.

        ``lines`` gets the records made since the manifest was written, ``manifest`` is its stamp.
        """
        self.lines.clear()
        if self._file is not None:
            self._take_in(self._file)
            return
        with contextlib.suppress(OSError):
            self._reading = _opened(self.path)
            self._take_in(self._reading)

    def _take_in(self, file: IO[bytes]) -> None:
        file.seek(0)
        offset, digest, settled = 0, hashlib.sha256(), False
        ended = True
        for text, length in _lines_of(file):
            try:
                facts = json.loads(text)
                if "settled" in facts:
                    settled = facts["settled"] == digest.hexdigest()
                else:
                    self._take_line(facts, file, offset, length)
            except (*_DAMAGED, AttributeError, IndexError):
                self.is_clean = False
            digest.update(text)
            offset, ended = offset + length, text.endswith(b"\n")
        if not ended and self._file is not None:
            file.write(b"\n")
        if not settled:
            self._distrust()

    def _distrust(self) -> None:
        """What is said of files is damaged, so they are to be read again; the names of outputs are kept."""
        self.begun.update(self.outputs)
        self.inputs.clear()
        for item in self.outputs.keys() - self.lines.keys():
            del self.outputs[item]
        self.manifest, self.summary, self.is_clean = None, None, False

    def _take_line(self, facts: Any, file: IO[bytes], offset: int, length: int) -> None:
        if "begun" in facts:
            self.begun.add(_inside(facts["begun"]))
            self.is_clean = False
        elif "made" in facts:
            record = checked_record(facts["made"])
            item, head = record["item"], length - len(_MADE_END)
            begin = _made_begin(facts)
            self.lines[item] = Line.of(record, file, offset + begin, head - begin)
            self.outputs[item] = OutputFacts(_stamp(facts), record["file_sha256"], str(facts["origin"]))
            self.is_clean = False
        elif "output" in facts:
            found = OutputFacts(_stamp(facts), str(facts["file_sha256"]), str(facts["origin"]))
            self.outputs[_inside(facts["output"])] = found
        elif "input" in facts:
            found_links = _links(facts["links"])
            self.inputs[str(facts["input"])] = InputFacts(
                _stamp(facts), str(facts["sha256"]), str(facts["kind_of_file"]), found_links
            )
        elif "manifest" in facts:
            self.manifest = _stamp(facts)
        elif "summary" in facts:
            self.summary = SummaryFacts(_stamp(facts), str(facts["file_sha256"]), str(facts["told"]))
        elif facts.get("kind") != JOURNAL_KIND:
            raise ValueError(facts)

    def hold(self) -> None:
        """Open the file, made where it is missing, and lock it. Raises OutputError where that can't be."""
        flags = os.O_RDWR | os.O_CREAT | getattr(os, "O_CLOEXEC", 0) | getattr(os, "O_BINARY", 0)
        flags |= getattr(os, "O_NOFOLLOW", 0) | getattr(os, "O_NONBLOCK", 0)
        try:
            descriptor = os.open(self.path, flags, 0o666)
        except OSError as problem:
            if self.path.is_symlink():
                raise self._in_the_way() from None
            raise output_error(str(self.path.parent), problem) from None
        if not stat.S_ISREG(os.fstat(descriptor).st_mode):
            os.close(descriptor)
            raise self._in_the_way()
        self._file = os.fdopen(descriptor, "r+b")
        try:
            _lock(descriptor, self.path.parent)
            facts = os.fstat(descriptor)
            self._require_own(facts)
        except BaseException:
            self.close()
            raise
        self._identity = (facts.st_dev, facts.st_ino)
        if not facts.st_size:
            self._append(_HEAD)

    def _require_own(self, facts: os.stat_result) -> None:
        assert self._file is not None
        if not stat.S_ISREG(facts.st_mode) or self._file.read(len(_HEAD)) not in (b"", _HEAD):
            raise self._in_the_way()

    def _in_the_way(self) -> OutputError:
        name = file_name(self.path)
        return OutputError(f"{name}: is in the way, and is not a batch's journal; move it elsewhere first")

    @property
    def is_held(self) -> bool:
        """Whether the file is locked, and still stands where it stood."""
        try:
            facts = self.path.lstat()
        except OSError:
            return False
        return self._identity == (facts.st_dev, facts.st_ino)

    def begin(self, item: str) -> None:
        """Note that an output is going to be written: from now on a file of that name is the batch's own."""
        if item not in self.begun:
            self.begun.add(item)
            self._append(line_of({"begun": item}))

    def made(self, record: Record, facts: OutputFacts, records: Records) -> None:
        """Note an output with its record."""
        told = {**_stamped(facts.stamp), "origin": facts.origin}
        text, begin = line_of({**told, "made": record}), _made_begin(told)
        offset = self._append(text)
        assert self._file is not None
        length = len(text) - len(_MADE_END) - begin
        records.put(record["item"], Line.of(record, self._file, offset + begin, length))
        self.outputs[record["item"]] = facts

    def _append(self, text: bytes) -> int:
        """Write a line at the end; where it begins. Raises OutputError."""
        assert self._file is not None
        try:
            offset = self._file.seek(0, os.SEEK_END)
            self._file.write(text)
            self._file.flush()
        except OSError as problem:
            raise output_error(str(self.path), problem) from None
        return offset

    def settle(self, manifest: Path, begun: Iterable[str] = ()) -> None:
        """Write the file anew, once the manifest holds all records: stamps alone are left in it.

        What is still ``begun`` is an output that is there, and of which there is no record.

        In place, since the lock is on the file itself. Raises OutputError.
        """
        assert self._file is not None
        self.manifest = stamp_of(manifest)
        try:
            self._file.seek(0)
            self._file.truncate()
            digest = hashlib.sha256()
            for line in self._lines():
                digest.update(line)
                self._file.write(line)
            self._file.write(line_of({"settled": digest.hexdigest()}))
            self._file.writelines(line_of({"begun": item}) for item in begun)
            self._file.flush()
        except OSError as problem:
            raise output_error(str(self.path), problem) from None
        self.begun = set(begun)
        self.lines.clear()
        self.is_clean = not self.begun

    def _lines(self) -> Iterator[bytes]:
        yield _HEAD
        if self.manifest is not None:
            yield line_of({"manifest": MANIFEST_FILE, **_stamped(self.manifest)})
        if self.summary is not None:
            known = {"file_sha256": self.summary.file_sha256, "told": self.summary.told}
            yield line_of({"summary": True, **_stamped(self.summary.stamp), **known})
        for name, source in sorted(self.inputs.items()):
            facts = {"sha256": source.sha256, "kind_of_file": source.kind, "links": source.links}
            yield line_of({"input": name, **_stamped(source.stamp), **facts})
        for name, output in sorted(self.outputs.items()):
            told = {"file_sha256": output.file_sha256, "origin": output.origin}
            yield line_of({"output": name, **_stamped(output.stamp), **told})

    def close(self) -> None:
        """Let the file, and with it the lock, go."""
        for file in (self._file, self._reading):
            if file is not None:
                with contextlib.suppress(OSError):
                    file.close()
        self._file = self._reading = None


_HEAD = line_of({"kind": JOURNAL_KIND, "version": VERSION})
_MADE_END = b"}\n"


def _made_begin(facts: Any) -> int:
    """Where the record begins in the line about an output that was made; it is the last thing there."""
    before = {name: facts[name] for name in ("size", "mtime_ns", "origin")}
    return len(line_of(before)) - len(_MADE_END) + len(b',"made":')


def _links(given: Any) -> tuple[str | None, int | None, int | None, str | None] | None:
    """What a preset names. Raises ValueError for anything else."""
    if given is None:
        return None
    phrase, track, channel, cycle = given
    texts, numbers = (phrase, cycle), (track, channel)
    if not (all(isinstance(each, str | None) for each in texts) and all(map(_is_count, numbers))):
        raise ValueError(given)
    return phrase, track, channel, cycle


def _is_count(value: object) -> bool:
    return isinstance(value, int | None) and not isinstance(value, bool)


def _inside(name: object) -> str:
    """An output's name, for damage must not lead out of the folder. Raises ValueError."""
    if not is_inside(name):
        raise ValueError(name)
    return str(name)


def _stamp(facts: Any) -> Stamp:
    return int(facts["size"]), int(facts["mtime_ns"])


def _stamped(stamp: Stamp) -> dict[str, int]:
    return {"size": stamp[0], "mtime_ns": stamp[1]}


def _lock(descriptor: int, folder: Path) -> None:
    """Lock a file for as long as this process has it open. Raises OutputError where another one has it."""
    try:
        if sys.platform == "win32":
            os.lseek(descriptor, _LOCKED_BYTE, os.SEEK_SET)
            msvcrt.locking(descriptor, msvcrt.LK_NBLCK, 1)
            os.lseek(descriptor, 0, os.SEEK_SET)
        else:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except (BlockingIOError, PermissionError):
        raise OutputError(
            f"{file_name(folder)}: another batch is writing to this folder; wait for it, or choose another"
        ) from None
    except OSError:
        return  # a file system without locks: no worse than not asking
