"""What a session keeps of what is heard: the capture, the meters, and the log that gives it again.

All of it is fed by one thread from the deck's ring; what it writes to disk never holds up a move or the
sound.
"""

import os
import threading
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from glidesmith.capture import Capture
from glidesmith.errors import GlidesmithError, OutputError, SettingError
from glidesmith.logbook import log_beside
from glidesmith.meters import Meters
from glidesmith.text import counted, file_name

if TYPE_CHECKING:
    from glidesmith.deck import Deck
    from glidesmith.dispatch import Noted
    from glidesmith.logbook import Logbook

_LEAST_METERED = 960


class Recorder:
    """Reads what was heard, and writes captures and the log.

    Every method may be called by any thread; `listen` is called often by one.
    """

    def __init__(self, deck: "Deck", logbook: "Logbook") -> None:
        self._deck = deck
        self._logbook = logbook
        self._lock = threading.Lock()
        self._cursor = 0
        self._capture: Capture | None = None
        self._meters = Meters(deck.sample_rate)
        self._closed = False

    @property
    def capturing(self) -> bool:
        """Whether a capture goes on."""
        return self._capture is not None

    @property
    def seconds(self) -> float:
        """How long the capture is so far, in seconds; 0 without one."""
        capture = self._capture
        return 0.0 if capture is None else capture.seconds

    def state(self) -> dict[str, Any] | None:
        """The capture as a session's state has it."""
        capture = self._capture
        if capture is None:
            return None
        return {"path": str(capture.path), "seconds": capture.seconds, "lost": capture.lost}

    def readings(self) -> dict[str, float | None]:
        """The meters."""
        with self._lock:
            return self._meters.readings()

    def listen(self, take_noted: "Callable[[], Iterable[Noted]]") -> list[str]:
        """Log moves, and fetch what was heard; lines for the user where something went wrong."""
        with self._lock:
            return [*self._log(take_noted()), *self._fetch()]

    def require_free(self, path: Path, replace: bool, kept: Iterable[Path]) -> None:
        """Raise where a capture to ``path`` would replace a file: any without ``replace``, these never."""
        named = {os.path.realpath(file) for file in kept} | {os.path.realpath(self._logbook.path)}
        written = (path, log_beside(path)) if self._logbook.private else (path,)
        if named & {os.path.realpath(file) for file in written}:
            raise OutputError(f"{file_name(path)}: is in use in this session; choose another name")
        for file in written:
            if not replace and os.path.lexists(file):
                raise OutputError(f"{file_name(file)}: is there already; choose another name, or replace it")

    def start(self, path: Path) -> None:
        """Begin a capture with the next sample."""
        with self._lock:
            if self._capture is not None:
                raise SettingError(f"{file_name(self._capture.path)} is being captured to; end that first")
            self._fetch(least=1)
            self._capture = Capture(path, self._deck.sample_rate, self._cursor)

    def require_capture(self) -> None:
        """Raise SettingError where nothing is being captured."""
        if self._capture is None:
            raise SettingError("nothing is being captured")

    def stop(self, take_noted: "Callable[[], Iterable[Noted]]") -> dict[str, Any]:
        """End the capture and put its log beside it; its facts.

        The last samples are fetched first and what the deck took after that, so that the log has all that the
        samples hang on.
        """
        with self._lock:
            self.require_capture()
            lines = self._fetch()
            capture, self._capture = self._capture, None
            if capture is None:
                raise OutputError(*lines)
            lines = self._log(take_noted())
            entry = capture.finish()
            log, more = self._log_capture(capture.path, entry)
        return {
            "path": str(capture.path),
            "log": None if log is None else str(log),
            "warnings": [*lines, *more],
            "sample_rate": self._deck.sample_rate,
            "frames": capture.frames,
            "seconds": capture.seconds,
            **{name: entry[name] for name in ("from", "to", "lost", "audio_sha256")},
        }

    def _log_capture(self, path: Path, entry: dict[str, Any]) -> tuple[Path | None, list[str]]:
        """Log a capture and copy a private log beside it; the log, and what went wrong."""
        if self._logbook.broken:
            return None, ["this capture has no log: an earlier line of it could not be written"]
        try:
            self._logbook.write(entry)
            self._logbook.flush()
            if not self._logbook.private:
                return self._logbook.path, []
            log = log_beside(path)
            self._logbook.copy(log)
        except GlidesmithError as problem:
            return None, list(problem.lines)
        return log, []

    def close(self) -> None:
        """Write the log's end and close it."""
        with self._lock:
            if self._closed:
                return
            self._closed = True
            if self._capture is not None:
                self._capture.abandon()
                self._capture = None
            try:
                self._logbook.write({"at": self._deck.sample, "do": "end"})
            finally:
                self._logbook.close()

    def _log(self, noted: "Iterable[Noted]") -> list[str]:
        try:
            wrote = False
            for entry in noted:
                self._logbook.write_move(entry.at, entry.move, entry.sent)
                wrote = True
            if wrote:
                self._logbook.flush()
        except GlidesmithError as problem:
            return [*problem.lines, "the session goes on without a log; what is captured can't be replayed"]
        return []

    def _fetch(self, least: int = _LEAST_METERED) -> list[str]:
        """Fetch what was heard since last time, for the capture and the meters, if it is enough to bother."""
        if self._deck.sample - self._cursor < (least if self._capture is None else 1):
            return []
        self._cursor, samples, lost = self._deck.heard(self._cursor)
        self._meters.add(samples)
        if self._capture is None:
            return []
        try:
            self._capture.add(samples, lost)
        except GlidesmithError as problem:
            self._capture.abandon()
            self._capture = None
            return [*problem.lines, "the capture has ended, and no file is left of it"]
        if lost:
            return [
                f"{counted(lost, 'sample is', 'samples are')} missing from the capture: the disk was too slow"
            ]
        return []
