"""Files that appear whole or not at all.

What is written goes to ``NAME.part`` beside the target, is forced to the disk and only then takes the
target's name, so that a writer that fails or is killed never touches what was there. The part file is always
a new one, and locked while it is written: two writers of one target can't mix. One that a killed writer left
behind is removed, if it is empty or begins as what is written here does; anything else under its name is
refused.
"""

import contextlib
import errno
import os
import stat
from collections.abc import Callable
from pathlib import Path
from typing import BinaryIO

from glidesmith.errors import OutputError
from glidesmith.outlet import Outlet
from glidesmith.text import printable

try:
    import fcntl
except ImportError:  # there is no such lock on Windows
    fcntl = None  # type: ignore[assignment]

_WAYS_OUT = {
    errno.ENOSPC: "the disk is full; free some space or write elsewhere",
    errno.EDQUOT: "your share of the disk is used up; free some space or write elsewhere",
    errno.EFBIG: "the file would be larger than the system allows; write elsewhere or shorten it",
    errno.EACCES: "you may not write there; choose another folder or change its permissions",
    errno.EPERM: "you may not write there; choose another folder or change its permissions",
    errno.EROFS: "that file system is read-only; write elsewhere",
    errno.ENOENT: "its folder does not exist; make it first",
    errno.ENOTDIR: "what should be its folder is a file; check the path",
    errno.EISDIR: "is a folder; give the name of a file in it",
    errno.ENAMETOOLONG: "the name is too long for the file system; shorten it",
    errno.EPIPE: "the reader went away before the end; what it got is not whole",
    errno.ELOOP: "symbolic links go round in a circle; check the path",
}

_SAFELY = getattr(os, "O_NOFOLLOW", 0) | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0)

_HEAD_BYTES = 65_536
_BEGINNINGS = (b"RIFF", b"RF64", b"<?xml", b"\x89PNG", b"<!doctype html>", b"{")
"""Of audio, pictures, pages and facts; each also names Glidesmith near its beginning."""
_TRACE_BEGINNING = b"time_s,target_volts,pitch_volts,"


def output_error(name: str, problem: OSError) -> OutputError:
    """The line that tells a user why ``name`` can't be written and how to mend it."""
    if isinstance(problem, OutputError):
        return problem
    reason = _WAYS_OUT.get(problem.errno or 0)
    if reason is None:
        said = printable(problem.strerror or str(problem))
        reason = f"can't be written ({said}); check the disk and the path"
    return OutputError(f"{printable(name)}: {reason}")


class PartFile(Outlet):
    """A file being written, which takes its name when it is whole.

    Parameters
    ----------
    target : Path or binary stream
        A path takes its file whole. A stream, and a path that names a device or a pipe, can take neither a
        name nor corrections: these get the bytes as they come (``whole`` is False).
    name : str, optional
        What messages call it.

    Raises
    ------
    OutputError
        From every method, one line, when the target can't be written; what was there is unchanged then.
    """

    _part: Path | None = None
    _part_identity: tuple[int, int] | None = None
    _owned = False

    def __init__(self, target: Path | BinaryIO, name: str | None = None) -> None:
        self.name = name or str(target if isinstance(target, Path) else getattr(target, "name", "the stream"))
        self.size = 0
        if not isinstance(target, Path):
            self._file = target
            return
        try:
            self._open(target)
        except BaseException as problem:
            self.abandon()
            if isinstance(problem, OSError):
                raise self._error(problem) from None
            if isinstance(problem, ValueError):
                raise self._refused("is not a name that a file can have; check it") from None
            raise

    @property
    def whole(self) -> bool:
        """Whether the target gets the file whole at the end, and earlier bytes can be written again."""
        return self._part is not None

    def write(self, data: bytes | memoryview) -> None:
        """Append bytes."""
        view = memoryview(data)
        try:
            self._file.write(view)
        except OSError as problem:
            raise self._error(problem) from None
        self.size += view.nbytes

    def rewrite(self, offset: int, data: bytes) -> None:
        """Write bytes again that lie within what was written. Only where the target is ``whole``."""
        try:
            self._file.seek(offset)
            self._file.write(data)
            self._file.seek(0, os.SEEK_END)
        except OSError as problem:
            raise self._error(problem) from None

    def close(self, check: Callable[[BinaryIO], None] | None = None) -> None:
        """Verify the size, call ``check`` with the file, force it to the disk and give it its name."""
        try:
            self._file.flush()
            if self._part is not None:
                self._verify(check)
                os.fsync(self._file.fileno())
                if _identity(self._part) != self._part_identity:
                    raise self._refused("another process took its part file away; write it again")
                self._part.replace(self._target)
                self._part = None
            if self._owned:
                self._file.close()
        except BaseException as problem:
            self.abandon()
            if isinstance(problem, OSError):
                raise self._error(problem) from None
            raise
        self._settle()

    def abandon(self) -> None:
        """Remove what was begun. Nothing happens after ``close``."""
        with contextlib.suppress(OSError):
            if self._part is not None and _identity(self._part) == self._part_identity:
                self._part.unlink()
        self._part = None
        if self._owned:
            with contextlib.suppress(OSError):
                self._file.close()

    def __del__(self) -> None:
        self.abandon()

    def _error(self, problem: OSError) -> OutputError:
        return output_error(self.name, problem)

    def _refused(self, reason: str) -> OutputError:
        return OutputError(f"{printable(self.name)}: {reason}")

    def _open(self, path: Path) -> None:
        self._target = Path(os.path.realpath(path))  # Path.resolve words a circle of links differently
        kind = _kind(self._target)
        if kind is not None and not stat.S_ISREG(kind):
            if stat.S_ISDIR(kind):
                raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR))
            self._file = self._target.open("wb")
            self._owned = True
            return
        if kind is not None and not os.access(self._target, os.W_OK):
            raise self._refused("is read-only for you; choose another name or change its permissions")
        self._claim(self._target.with_name(f"{self._target.name}.part"))
        if kind is not None and hasattr(os, "fchmod"):
            os.fchmod(self._file.fileno(), stat.S_IMODE(kind))

    def _claim(self, part: Path) -> None:
        """Make the part file, and lock it.

        Before it is locked another writer may have taken it for a leftover: then once more.
        """
        while True:
            try:
                descriptor = os.open(part, os.O_RDWR | os.O_CREAT | os.O_EXCL | _SAFELY, 0o666)
            except FileExistsError:
                self._clear(part)
                continue
            self._file = os.fdopen(descriptor, "w+b")
            self._owned = True
            _lock(self._file, self.name)
            facts = os.fstat(descriptor)
            if _identity(part) == (facts.st_dev, facts.st_ino):
                self._part, self._part_identity = part, (facts.st_dev, facts.st_ino)
                return
            self._file.close()

    def _clear(self, part: Path) -> None:
        """Remove what a killed writer left under the part file's name; refuse whatever else is there.

        Nothing is written into it. It stays locked until its name is gone.
        """
        in_the_way = self._refused(
            f"{printable(part.name)} beside it is in the way, and is not left over from writing it; "
            "move that elsewhere first"
        )
        with contextlib.suppress(FileNotFoundError):
            if not _may_be_leftover(part.lstat()):
                raise in_the_way
            with os.fdopen(os.open(part, os.O_RDWR | _SAFELY), "rb") as file:
                _lock(file, self.name)
                if not begins_as_ours(file.read(_HEAD_BYTES)):
                    raise in_the_way
                facts = os.fstat(file.fileno())
                if _identity(part) == (facts.st_dev, facts.st_ino):
                    part.unlink()

    def _verify(self, check: Callable[[BinaryIO], None] | None) -> None:
        found = os.fstat(self._file.fileno()).st_size
        if found != self.size:
            raise self._refused(
                f"{found:,} bytes of {self.size:,} reached the disk; check it and write again"
            )
        if check is not None:
            self._file.seek(0)
            check(self._file)

    def _settle(self) -> None:
        """Force the new name to the disk, on systems where a folder can be opened."""
        if not self._owned or not hasattr(os, "O_DIRECTORY"):
            return
        with contextlib.suppress(OSError):
            folder = os.open(self._target.parent, os.O_RDONLY | os.O_DIRECTORY)
            try:
                os.fsync(folder)
            finally:
                os.close(folder)


def _kind(path: Path) -> int | None:
    try:
        return path.stat().st_mode
    except FileNotFoundError:
        return None


def _may_be_leftover(facts: os.stat_result) -> bool:
    """Whether it is a regular file of the user's own that has no other name."""
    own = not hasattr(os, "geteuid") or facts.st_uid == os.geteuid()
    return stat.S_ISREG(facts.st_mode) and facts.st_nlink == 1 and own


def is_leftover(part: Path) -> bool:
    """Whether a file under a part file's name is what a killed writer left, and not somebody's own."""
    with contextlib.suppress(OSError):
        if _may_be_leftover(part.lstat()):
            with os.fdopen(os.open(part, os.O_RDONLY | _SAFELY), "rb") as file:
                return begins_as_ours(file.read(_HEAD_BYTES))
    return False


def begins_as_ours(head: bytes) -> bool:
    """Whether a file's first bytes are those of a file that is written here, or there are none."""
    named = head.startswith(_BEGINNINGS) and b"glidesmith" in head.lower()
    return not head or named or head.startswith(_TRACE_BEGINNING)


def _lock(file: BinaryIO, name: str) -> None:
    if fcntl is None:
        return
    try:
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        raise OutputError(
            f"{printable(name)}: is being written by another process; wait for it or choose another name"
        ) from None
    except OSError:
        return  # a file system without locks: no worse than not asking


def _identity(path: Path) -> tuple[int, int] | None:
    try:
        facts = path.lstat()
    except FileNotFoundError:
        return None
    return facts.st_dev, facts.st_ino
