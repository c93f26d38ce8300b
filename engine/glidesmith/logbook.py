"""The log of a session: what it began with, and every move with the sample at which it was taken.

A log is a text of JSON objects, one a line. The first, the header, says what all needs to begin the same way:
rate and options, every slot's settings, every phrase's exact notes, the samples of single cycles. Then comes
a line a move, in the order in which they count:

    {"at": 48000, "do": "set", "slot": 1, "key": "pitch.rise", "value": 0.08, "sent": "swap"}

``at`` is the sample, counted from the deck's start. ``sent`` stands where the deck was told something after
the move, and names it; it took it at that sample. A move without ``sent`` was told with a later one, or
changed nothing that sounded. ``capture`` lines say which samples went to a file, and ``end`` how many were
played.

Lines go to the disk as they come; nothing is kept in memory.
"""

import contextlib
import json
import os
import shutil
import stat
import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any, TextIO

from glidesmith import __version__
from glidesmith.content import cycle_as_json, phrase_as_json, preset_as_json
from glidesmith.errors import OutputError
from glidesmith.partfile import output_error
from glidesmith.text import file_name

if TYPE_CHECKING:
    from glidesmith.console import Console, Slot
    from glidesmith.moves import Move
    from glidesmith.phrase import Phrase

FORMAT, VERSION = "glidesmith session log", 1
SUFFIX = ".log.jsonl"

_COPIED_BYTES = 1 << 20


def header_of(console: "Console", sample_rate: int, options: Mapping[str, Any]) -> dict[str, Any]:
    """What a session begins with, as JSON carries it. ``options`` are those of the deck."""
    phrases: list[Phrase] = []
    slots = {str(number): _slot_as_json(console.slot(number), phrases) for number in console.filled()}
    return {
        "format": FORMAT,
        "version": VERSION,
        "engine": __version__,
        "sample_rate": sample_rate,
        "options": {**options, "loop": console.loop, "match": console.match, "level_db": console.level_db},
        "slots": slots,
        "phrases": [phrase_as_json(phrase) for phrase in phrases],
    }


def _slot_as_json(slot: "Slot", phrases: "list[Phrase]") -> dict[str, Any]:
    """A slot; its phrase goes into the list, unless it is there, and is named by its place."""
    place = next((i for i, phrase in enumerate(phrases) if phrase is slot.phrase), len(phrases))
    if place == len(phrases):
        phrases.append(slot.phrase)
    cycle = {} if slot.cycle is None else {"cycle": cycle_as_json(slot.cycle)}
    return {"name": slot.name, "preset": preset_as_json(slot.preset), "phrase": place, **cycle}


class Logbook:
    """Writes a log, line by line.

    Parameters
    ----------
    path : Path, optional
        A file that is not there yet. Without it the log goes to a folder of its own that only its user can
        read, and is removed by ``close``.
    header : mapping
        As `header_of` gives it.

    Raises
    ------
    OutputError
        One line, from the constructor and from ``write``. A log that could not be written to is ``broken``
        and takes nothing more.
    """

    def __init__(self, path: Path | None, header: Mapping[str, Any]) -> None:
        self._folder: str | None = None
        self.path = path if path is not None else self._private_path()
        self.private = path is None
        self.broken = False
        self._file: TextIO | None = None
        try:
            self._file = self._opened()
            self.write(header)
            self.flush()
        except OSError as problem:
            self.close()
            raise output_error(str(self.path), problem) from None

    def write(self, line: Mapping[str, Any]) -> None:
        """Append one object."""
        if self._file is None:
            return
        try:
            self._file.write(json.dumps(line, separators=(",", ":"), allow_nan=False) + "\n")
        except OSError as problem:
            raise self._gave_up(problem) from None

    def write_move(self, at: int, move: "Move", sent: str | None) -> None:
        """Append one move, which the deck took at sample ``at`` where it was ``sent``."""
        self.write({"at": at, **move.as_dict()} | ({} if sent is None else {"sent": sent}))

    def flush(self) -> None:
        """Hand all lines to the system."""
        if self._file is None:
            return
        try:
            self._file.flush()
        except OSError as problem:
            raise self._gave_up(problem) from None

    def copy(self, target: Path) -> None:
        """Write what the log has so far to another file, which appears whole or not at all."""
        from glidesmith.partfile import PartFile

        self.flush()
        file = PartFile(target)
        try:
            with self.path.open("rb") as source:
                while data := source.read(_COPIED_BYTES):
                    file.write(data)
        except OSError as problem:
            file.abandon()
            raise output_error(str(target), problem) from None
        except BaseException:
            file.abandon()
            raise
        file.close()

    def close(self) -> None:
        """Finish; a private log is removed."""
        if self._file is not None:
            with contextlib.suppress(OSError):
                self._file.close()
            self._file = None
        if self._folder is not None:
            shutil.rmtree(self._folder, ignore_errors=True)
            self._folder = None

    def _private_path(self) -> Path:
        self._folder = tempfile.mkdtemp(prefix="glidesmith-")
        return Path(self._folder) / f"session{SUFFIX}"

    def _opened(self) -> TextIO:
        flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_NOFOLLOW", 0)
        try:
            descriptor = os.open(self.path, flags, 0o600 if self.private else 0o666)
        except FileExistsError:
            kind = "a folder" if _is_folder(self.path) else "there already"
            raise OutputError(f"{file_name(self.path)}: is {kind}; give the log another name") from None
        except ValueError:
            raise OutputError(
                f"{file_name(self.path)}: is not a name that a file can have; check it"
            ) from None
        return os.fdopen(descriptor, "w", encoding="ascii", newline="\n")

    def _gave_up(self, problem: OSError) -> OutputError:
        """Close the file: a log with a gap would not replay, so none is written on."""
        file, self._file, self.broken = self._file, None, True
        if file is not None:
            with contextlib.suppress(OSError):
                file.close()
        return output_error(str(self.path), problem)


def _is_folder(path: Path) -> bool:
    with contextlib.suppress(OSError):
        return stat.S_ISDIR(path.lstat().st_mode)
    return False


def log_beside(path: Path) -> Path:
    """The name of the log that belongs to a captured file: ``take.wav`` has ``take.log.jsonl``."""
    return path.with_name(f"{path.stem}{SUFFIX}")
