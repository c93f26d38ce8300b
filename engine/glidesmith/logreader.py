"""A session's log read back: checked line by line, whatever it holds, with nothing of it kept in memory.

Nothing in a log makes the reader open another file or write anywhere: presets, phrases and cycles are in the
log itself, and names of files in it are only names.
"""

import json
import os
import stat
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any

from glidesmith import __version__
from glidesmith.console import Slot, Source
from glidesmith.content import cycle_from_json, phrase_from_json, preset_from_json
from glidesmith.errors import GlidesmithError, LogError
from glidesmith.listening import HIGHEST_CEILING_DB, LOWEST_CEILING_DB, LOWEST_LEVEL_DB
from glidesmith.logbook import FORMAT, VERSION
from glidesmith.moves import SLOTS, Move, move_from_dict
from glidesmith.program import HIGHEST_RATE, LOWEST_RATE
from glidesmith.text import file_name, printable, shown

MOST_LINE_BYTES = 64_000_000
"""Of one line: a phrase of 100,000 notes takes 5 million."""

MOST_LOG_BYTES = 8_000_000_000
LONGEST_S = 86_400.0
"""How long a session may be to be replayed: a day."""

_COMMANDS = ("swap", "match", "play", "stop", "panic", "note", "release", "level")


@dataclass(frozen=True, slots=True)
class Header:
    """What a session began with. ``slots`` goes by number; ``warnings`` are lines for the user."""

    sample_rate: int
    slots: Mapping[int, Slot]
    loop: bool
    match: bool
    level_db: float
    fade: bool
    ceiling_db: float
    warnings: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Entry:
    """One line: a move at sample ``at``, and the command that was ``sent`` after it, if one was."""

    line: int
    at: int
    move: Move
    sent: str | None


@dataclass(frozen=True, slots=True)
class Capture:
    """Samples ``begin`` to under ``end`` that went to a file; their digest, and how many were lost."""

    begin: int
    end: int
    file: str
    audio_sha256: str | None
    lost: int


@dataclass(frozen=True, slots=True)
class Outline:
    """What a log is about: its captures in order, and how many samples were played in all.

    ``ended`` is False where the session was cut short; ``samples`` is then where the last move was taken.
    """

    captures: tuple[Capture, ...]
    samples: int
    ended: bool


class LogReader:
    """Reads one log; use it as a context manager.

    Raises LogError, one line that names the file, from every method.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self.where = file_name(path)
        self._file = _opened(Path(path), self.where)
        try:
            size = os.fstat(self._file.fileno()).st_size
            if size > MOST_LOG_BYTES:
                raise self._error(f"is over {MOST_LOG_BYTES:,} bytes, the most that is read")
            self._size = size  # what is written on meanwhile is left alone
            self.header = self._read_header()
        except BaseException:
            self._file.close()
            raise

    def __enter__(self) -> "LogReader":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._file.close()

    def outline(self) -> Outline:
        """Look through the whole log for its captures and its end."""
        captures: list[Capture] = []
        last, ended = 0, False
        for number, line in self._lines():
            if line.get("do") == "capture":
                captures.append(self._capture(line, number))
                last = max(last, captures[-1].end)
            else:
                last = max(last, self._stamp(line, number))
            ended = ended or line.get("do") == "end"
        return Outline(tuple(captures), last, ended)

    def entries(self) -> Iterator[Entry]:
        """The moves, in the order in which they count."""
        for number, line in self._lines():
            if line.get("do") not in ("capture", "end"):
                yield self._entry(line, number)

    def error(self, line: int, reason: str) -> LogError:
        """What is wrong in one line."""
        return self._error(f"line {line:,}: {reason}")

    def _error(self, reason: str) -> LogError:
        return LogError(f"{self.where}: {reason}")

    def _raw_lines(self) -> Iterator[tuple[int, bytes]]:
        self._file.seek(0)
        number, read = 0, 0
        while read < self._size:
            number += 1
            data = self._file.readline(min(MOST_LINE_BYTES + 1, self._size - read))
            read += len(data)
            if not data.endswith(b"\n"):
                if len(data) > MOST_LINE_BYTES:
                    raise self.error(number, f"is over {MOST_LINE_BYTES:,} bytes; is it the right file?")
                raise self.error(number, "is cut off; take it out to replay what stands before it")
            yield number, data

    def _lines(self) -> Iterator[tuple[int, dict[str, Any]]]:
        """All lines after the header."""
        lines = self._raw_lines()
        next(lines)
        for number, data in lines:
            yield number, self._object(data, number)

    def _object(self, data: bytes, number: int) -> dict[str, Any]:
        try:
            found = json.loads(data.decode("utf-8"), parse_constant=_no_constant)
        except (ValueError, RecursionError):
            raise self.error(number, "is not JSON; the log is damaged") from None
        if not isinstance(found, dict):
            raise self.error(number, "is no JSON object; the log is damaged")
        return found

    def _stamp(self, line: Mapping[str, Any], number: int, name: str = "at") -> int:
        value = line.get(name)
        most = LONGEST_S * self.header.sample_rate
        if type(value) is not int or value < 0:
            raise self.error(number, f"{name} = {shown(value)}: must be a whole number of samples")
        if value > most:
            raise self.error(number, f"{name} = {shown(value)}: is over {most:,.0f} samples, a day's worth")
        return value

    def _entry(self, line: dict[str, Any], number: int) -> Entry:
        at, sent = self._stamp(line, number), line.get("sent")
        if sent is not None and sent not in _COMMANDS:
            raise self.error(number, f"sent = {shown(sent)}: must be one of {', '.join(_COMMANDS)}")
        values = {name: value for name, value in line.items() if name not in ("at", "sent")}
        try:
            return Entry(number, at, move_from_dict(values), sent)
        except GlidesmithError as problem:
            raise self.error(number, problem.lines[0]) from None

    def _capture(self, line: Mapping[str, Any], number: int) -> Capture:
        begin, end = self._stamp(line, number, "from"), self._stamp(line, number, "to")
        if begin > end:
            raise self.error(number, f"from = {begin}: is after to = {end}")
        file, digest, lost = line.get("file"), line.get("audio_sha256"), line.get("lost", 0)
        known = digest if isinstance(digest, str) and len(digest) == 64 else None
        name = printable(file) if isinstance(file, str) else ""
        return Capture(begin, end, name, known, lost if type(lost) is int else 0)

    def _read_header(self) -> Header:
        first = next(self._raw_lines(), None)
        if first is None:
            raise self._error("is empty, so it is no session log")
        try:
            head = json.loads(first[1].decode("utf-8"), parse_constant=_no_constant)
        except (ValueError, RecursionError):
            head = None
        if not isinstance(head, dict) or head.get("format") != FORMAT:
            raise self._error("is no session log; give the .log.jsonl beside a capture, or one made by --log")
        version = head.get("version")
        if type(version) is not int or version < 1:
            raise self._error(f"version = {shown(version)}: must be a whole number; the log is damaged")
        if version > VERSION:
            raise self._error(
                f"is a log of version {shown(version)}, and this Glidesmith reads up to {VERSION}; update it"
            )
        try:
            return _header(head)
        except GlidesmithError as problem:
            raise self.error(1, problem.lines[0]) from None


def _header(head: Mapping[str, Any]) -> Header:
    rate, options = head.get("sample_rate"), head.get("options")
    if type(rate) is not int or not LOWEST_RATE <= rate <= HIGHEST_RATE:
        raise LogError(f"sample_rate = {shown(rate)}: must be {LOWEST_RATE} to {HIGHEST_RATE}")
    if not isinstance(options, Mapping):
        raise LogError(f"options = {shown(options)}: must be an object")
    engine = head.get("engine")
    warnings: tuple[str, ...] = ()
    if engine != __version__:
        made = printable(engine) if isinstance(engine, str) and len(engine) < 40 else "another version"
        warnings = (f"was made by Glidesmith {made}, and this is {__version__}: samples may differ",)
    return Header(
        rate,
        _slots(head),
        _flag(options, "loop"),
        _flag(options, "match"),
        _decibels(options, "level_db", LOWEST_LEVEL_DB, 0.0),
        _flag(options, "fade"),
        _decibels(options, "ceiling_db", LOWEST_CEILING_DB, HIGHEST_CEILING_DB),
        warnings,
    )


def _slots(head: Mapping[str, Any]) -> dict[int, Slot]:
    contents, slots = head.get("phrases"), head.get("slots")
    if not isinstance(contents, list) or not 1 <= len(contents) <= SLOTS:
        raise LogError(f"phrases: must be a list of 1 to {SLOTS} phrases")
    phrases = [phrase_from_json(content) for content in contents]
    if not isinstance(slots, Mapping) or "1" not in slots:
        raise LogError("slots: must be an object with slot 1")
    found = {}
    for name, content in slots.items():
        if name not in {str(number) for number in range(1, SLOTS + 1)} or not isinstance(content, Mapping):
            raise LogError(f"slots: {shown(name)} must be the number of a slot, 1 to {SLOTS}")
        place = content.get("phrase")
        if type(place) is not int or not 0 <= place < len(phrases):
            raise LogError(f"slot {name}: phrase = {shown(place)}: must be the place of a phrase in the log")
        preset = preset_from_json(content.get("preset"))
        cycle = content.get("cycle")
        if (preset.oscillator.wave == "file") != (cycle is not None):
            raise LogError(
                f"slot {name}: its cycle's samples must be there with the wave file, and only then"
            )
        samples = None if cycle is None else cycle_from_json(cycle)
        title = content.get("name")
        slot = Slot(title if isinstance(title, str) else "", preset, phrases[place], samples, Source())
        found[int(name)] = slot
    if set(found) != set(range(1, len(found) + 1)):
        raise LogError("slots: their numbers must follow each other from 1")
    return dict(sorted(found.items()))


def _flag(options: Mapping[str, Any], name: str) -> bool:
    value = options.get(name)
    if not isinstance(value, bool):
        raise LogError(f"options: {name} = {shown(value)}: must be true or false")
    return value


def _decibels(options: Mapping[str, Any], name: str, lowest: float, highest: float) -> float:
    value = options.get(name)
    if isinstance(value, bool) or not isinstance(value, int | float) or not lowest <= value <= highest:
        raise LogError(f"options: {name} = {shown(value)}: must be {lowest:g} to {highest:g} dB")
    return float(value)


def _no_constant(name: str) -> float:
    raise ValueError(name)


def _opened(path: Path, where: str) -> Any:
    """The file, unless it is anything but a regular one; nothing here waits."""
    flags = os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0)
    reason = "is no regular file; give the name of a session's log"
    try:
        if stat.S_ISREG(path.stat().st_mode):
            return os.fdopen(os.open(path, flags), "rb")
    except FileNotFoundError:
        reason = "there is no such file; check its name and folder"
    except OSError as problem:
        reason = f"can't be read ({printable(problem.strerror or str(problem))}); check its permissions"
    except ValueError:
        reason = "is not a name that a file can have; check it"
    raise LogError(f"{where}: {reason}")
