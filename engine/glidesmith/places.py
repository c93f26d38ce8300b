"""Places that several machines write to at a time: a shared folder, or any address that `fsspec` knows.

A file gets its name when it is whole. Unlike in `glidesmith.production.LocalPlace` nobody else is kept out:
the same file may be written twice at once, since a cluster may run a task again, so each writer has a part
file of its own, and whoever is last takes the name with the same bytes. Object stores show a file only when
it is whole; there no part file is needed. What names a place to people never holds a password or a query.
"""

import contextlib
import hashlib
import os
import re
import secrets
import stat
from abc import abstractmethod
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import IO, Any
from urllib.parse import unquote

from glidesmith.errors import GlidesmithError, OutputError, SettingError
from glidesmith.partfile import begins_as_ours, is_leftover, output_error
from glidesmith.production import Draft, Place
from glidesmith.text import printable, shortened

WHOLE_PROTOCOLS = frozenset({"s3", "s3a", "gs", "gcs", "abfs", "abfss", "az", "adl", "oss", "oci", "tos"})
"""Object stores, where a file appears when its writer closes it and not before."""

_PART = re.compile(r"\.[0-9a-f]{8}\.part\Z")
_URL = re.compile(r"([A-Za-z][A-Za-z0-9+.-]*)://")
_HEAD_BYTES = 1 << 16
_BLOCK_BYTES = 1 << 20
_SHORTEST_SECRET = 3
_LONGEST_SAID = 200


class SharedPlace(Place):
    """A place that many write to. It can be sent to other machines; ``label`` names it to people."""

    label: str

    @abstractmethod
    def begin(self, name: str) -> Draft:
        """Begin a file; folders above it are made. Raises OutputError."""

    @abstractmethod
    def read(self, name: str) -> bytes | None:
        """What a small file holds; None where there is none. Raises OutputError."""

    @abstractmethod
    def remove(self, name: str) -> None:
        """Remove a file, if it is there. Raises OutputError."""

    @abstractmethod
    def sweep(self) -> int:
        """Remove part files that writers left who were killed; how many there were.

        Only while nobody writes: what is being written would be lost, though never what has its name.
        """

    def refresh(self, name: str) -> None:
        """Have this machine look anew for a file that another one has written."""

    def put(self, name: str, data: bytes) -> None:
        """Write a whole small file. Raises OutputError."""
        with self.begin(name) as draft:
            draft.write(data)


def shared_place(output: str | os.PathLike[str]) -> SharedPlace:
    """The place that a path or an address names.

    Raises SettingError for an address that `fsspec` does not know or lacks a library for.
    """
    text = os.fspath(output)
    folder = folder_at(text)
    return RemotePlace(text) if folder is None else SharedFolder(folder)


def folder_at(output: str) -> Path | None:
    """The folder of this machine that a path or an address names; None for an address elsewhere."""
    found = _URL.match(output.rsplit("::", 1)[-1])
    if found is None:
        return Path(output).absolute()
    if found[1].lower() in ("file", "local") and "::" not in output:
        return Path(unquote(output[found.end() :])).absolute()
    return None


def without_credentials(address: str) -> str:
    """An address without user, password, query and fragment, for people and for files."""
    links = (re.sub(r"(://)[^/]*@", r"\1", link) for link in address.split("::"))
    return "::".join(re.split(r"[?#]", link, maxsplit=1)[0] for link in links)


def scrubbed(text: str, address: str) -> str:
    """A text that may quote an address, without that address's secrets."""
    for secret in sorted(_secrets_of(address), key=len, reverse=True):
        text = text.replace(secret, "…")
    return re.sub(r"://[^/\s]*@", "://", text)


def _secrets_of(address: str) -> Iterator[str]:
    parts = [found[1] for found in re.finditer(r"://([^/]*)@", address)]
    parts += [found[1] for found in re.finditer(r"[?#]([^:]*)", address)]
    for part in parts:
        values = [part, *re.split(r"[:&;]", part), *(value.partition("=")[2] for value in part.split("&"))]
        for value in values:
            if len(value) >= _SHORTEST_SECRET:
                yield value
                yield unquote(value)


def _part_name(name: str) -> str:
    return f"{name}.{secrets.token_hex(4)}.part"


# A folder


class SharedFolder(SharedPlace):
    """A folder that is there, and that all machines see under one path."""

    def __init__(self, root: Path) -> None:
        self.root = root
        self.label = printable(str(root))

    def begin(self, name: str) -> Draft:
        """Begin a file; folders above it are made. Raises OutputError."""
        return _FolderDraft(self.root, name)

    def read(self, name: str) -> bytes | None:
        """What a small file holds; None where there is none. Raises OutputError."""
        try:
            return (self.root / name).read_bytes()
        except FileNotFoundError:
            return None
        except OSError as problem:
            raise output_error(str(self.root / name), problem) from None

    def remove(self, name: str) -> None:
        """Remove a file, if it is there. Raises OutputError."""
        try:
            (self.root / name).unlink(missing_ok=True)
        except OSError as problem:
            raise output_error(str(self.root / name), problem) from None

    def refresh(self, name: str) -> None:
        """Have this machine look anew for a file that another one has written.

        A network file system may remember for a while that there was no such file, until its folder is read.
        """
        path = self.root / name
        if not os.path.lexists(path):
            with contextlib.suppress(OSError), os.scandir(path.parent) as entries:
                next(entries, None)

    def sweep(self) -> int:
        """Remove part files that writers left who were killed; how many there were. No link is followed."""
        swept = 0
        for folder, _, names in os.walk(self.root):
            for name in names:
                part = Path(folder, name)
                if _PART.search(name) and is_leftover(part):
                    with contextlib.suppress(OSError):
                        part.unlink()
                        swept += 1
        return swept


class _FolderDraft(Draft):
    def __init__(self, root: Path, name: str) -> None:
        self._target = root / name
        self._part = self._target.with_name(_part_name(self._target.name))
        self._descriptor = -1
        self._size = 0
        with self._told():
            try:
                self._descriptor = self._opened()
            except FileNotFoundError:
                if not root.is_dir():  # it was taken away, and is not made again behind anybody's back
                    raise
                self._target.parent.mkdir(parents=True, exist_ok=True)
                self._descriptor = self._opened()

    def _opened(self) -> int:
        flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_CLOEXEC", 0)
        return os.open(self._part, flags | getattr(os, "O_BINARY", 0), 0o666)

    def write(self, data: bytes | memoryview) -> None:
        view = memoryview(data).cast("B")
        self._size += len(view)
        with self._told():
            while view:
                view = view[os.write(self._descriptor, view) :]

    def close(self) -> None:
        try:
            with self._told():
                found = os.fstat(self._descriptor)
                if stat.S_ISREG(found.st_mode) and found.st_size != self._size:
                    raise OSError(f"{found.st_size:,} bytes of {self._size:,} arrived")
                os.close(self._descriptor)
                self._descriptor = -1
                os.replace(self._part, self._target)  # noqa: PTH105 - a Path would be made and thrown away
        except BaseException:
            self.abandon()
            raise

    def abandon(self) -> None:
        if self._descriptor >= 0:
            with contextlib.suppress(OSError):
                os.close(self._descriptor)
            self._descriptor = -1
        with contextlib.suppress(OSError):
            self._part.unlink(missing_ok=True)

    @contextlib.contextmanager
    def _told(self) -> Iterator[None]:
        try:
            yield
        except OSError as problem:
            error = output_error(str(self._target), problem)
            error.errno = error.errno or problem.errno
            raise error from None
        except ValueError:
            raise OutputError(
                f"{printable(str(self._target))}: is not a name that a file can have; check it"
            ) from None


# An address


class RemotePlace(SharedPlace):
    """A place that `fsspec` reaches: ``sftp://``, ``s3://``, ``memory://`` and whatever else is installed.

    Other machines connect anew by the address, with the credentials in it or those of their own environment.
    """

    def __init__(self, address: str) -> None:
        self.address = address
        self.label = printable(without_credentials(address))
        self._files, self._root = self._connected()
        protocol = self._files.protocol
        names = {protocol} if isinstance(protocol, str) else set(protocol)
        self.whole = bool(names & WHOLE_PROTOCOLS)
        self._made: set[str] = set()

    def __reduce__(self) -> tuple[Any, ...]:
        return RemotePlace, (self.address,)

    def __repr__(self) -> str:
        return f"RemotePlace({self.label!r})"

    def _connected(self) -> tuple[Any, str]:
        try:
            from fsspec.core import url_to_fs
        except ImportError:
            raise SettingError(
                f"{self.label}: needs fsspec; install it with `pip install 'glidesmith[cluster]'`"
            ) from None
        try:
            files, root = url_to_fs(self.address)
        except ImportError as problem:
            raise SettingError(f"{self.label}: {self._said(problem)}") from None
        except Exception as problem:
            raise SettingError(f"{self.label}: is no place to write to: {self._said(problem)}") from None
        return files, str(root).rstrip("/")

    def _said(self, problem: BaseException) -> str:
        text = str(problem) or type(problem).__name__
        return shortened(scrubbed(" ".join(text.split()), self.address), _LONGEST_SAID)

    def error(self, name: str, problem: BaseException) -> OutputError:
        """The line about a file that can't be written or read, without any secret of the address."""
        if isinstance(problem, OutputError):
            return problem
        error = OutputError(f"{self.label}/{printable(name)}: {self._said(problem)}; check the place")
        error.errno = getattr(problem, "errno", None)
        return error

    def path(self, name: str) -> str:
        """A name as the file system has it."""
        return f"{self._root}/{name}"

    @contextlib.contextmanager
    def telling(self, name: str) -> Iterator[None]:
        """What goes wrong inside is told as one line. File systems raise whatever their libraries do."""
        try:
            yield
        except GlidesmithError:
            raise
        except Exception as problem:
            raise self.error(name, problem) from None

    def begin(self, name: str) -> Draft:
        """Begin a file; folders above it are made. Raises OutputError."""
        with self.telling(name):
            if not self.whole:
                self._make_folder(self.path(name).rpartition("/")[0])
            return _RemoteDraft(self, self._files, name)

    def _make_folder(self, folder: str) -> None:
        if folder not in self._made:
            self._files.makedirs(folder, exist_ok=True)
            self._made.add(folder)

    def read(self, name: str) -> bytes | None:
        """What a small file holds; None where there is none. Raises OutputError."""
        with self.telling(name):
            self._files.invalidate_cache()
            try:
                return bytes(self._files.cat_file(self.path(name)))
            except FileNotFoundError:
                return None

    def head(self, name: str, count: int) -> bytes:
        """The first bytes of a file; none where there is no such file. Raises OutputError."""
        with self.telling(name):
            try:
                return bytes(self._files.cat_file(self.path(name), 0, count))
            except FileNotFoundError:
                return b""

    def sizes(self) -> dict[str, int]:
        """The bytes of every file below, by name. Raises OutputError."""
        with self.telling(""):
            self._files.invalidate_cache()
            try:
                found = self._files.find(self._root, detail=True)
            except FileNotFoundError:
                return {}
            return {
                str(path)[len(self._root) :].lstrip("/"): int(facts.get("size") or 0)
                for path, facts in found.items()
            }

    def digest(self, name: str) -> str | None:
        """SHA-256 of a file; None where there is none. Raises OutputError."""
        digest = hashlib.sha256()
        with self.telling(name):
            try:
                with self._files.open(self.path(name), "rb") as file:
                    while block := file.read(_BLOCK_BYTES):
                        digest.update(block)
            except FileNotFoundError:
                return None
        return digest.hexdigest()

    def send(self, path: Path, name: str) -> None:
        """Write what a file of this machine holds. Raises OutputError."""
        with path.open("rb") as file, self.begin(name) as draft:
            while block := file.read(_BLOCK_BYTES):
                draft.write(block)

    def remove(self, name: str) -> None:
        """Remove a file, if it is there. Raises OutputError."""
        with self.telling(name), contextlib.suppress(FileNotFoundError):
            self._files.rm_file(self.path(name))

    def sweep(self) -> int:
        """Remove part files that writers left who were killed; how many there were."""
        if self.whole:
            return 0
        with self.telling(""):
            self._files.invalidate_cache()
            return sum(self._swept(path) for path in self._files.find(self._root) if _PART.search(path))

    def _swept(self, path: str) -> bool:
        with contextlib.suppress(FileNotFoundError):
            if begins_as_ours(self._files.cat_file(path, 0, _HEAD_BYTES)):
                self._files.rm_file(path)
                return True
        return False


class _RemoteDraft(Draft):
    def __init__(self, place: RemotePlace, files: Any, name: str) -> None:
        self._place, self._files, self._name = place, files, name
        self._target = place.path(name)
        self._path = self._target if place.whole else _part_name(self._target)
        self._size = 0
        self._open = True
        self._file: IO[bytes] = files.open(self._path, "wb")

    def write(self, data: bytes | memoryview) -> None:
        content = bytes(data)
        self._size += len(content)
        with self._place.telling(self._name):
            self._file.write(content)

    def close(self) -> None:
        try:
            with self._place.telling(self._name):
                self._file.close()
                if not self._place.whole:
                    self._require_whole()
                    self._move()
                self._open = False
        except BaseException:
            self.abandon()
            raise

    def _require_whole(self) -> None:
        found = self._files.size(self._path)
        if found is not None and found != self._size:
            raise OSError(f"{found:,} bytes of {self._size:,} arrived")

    def _move(self) -> None:
        try:
            self._files.mv(self._path, self._target)
        except FileExistsError:  # a file system whose move replaces nothing
            self._files.rm_file(self._target)
            self._files.mv(self._path, self._target)

    def abandon(self) -> None:
        if not self._open:
            return
        self._open = False
        if self._place.whole:  # closing would make what there is of the file appear
            _quietly(getattr(self._file, "discard", _nothing))
            with contextlib.suppress(AttributeError):
                self._file.closed = True  # type: ignore[misc]
            return
        _quietly(self._file.close)
        _quietly(lambda: self._files.rm_file(self._path))


def _nothing() -> None:
    """Where a file offers no way to be thrown away."""


def _quietly(act: Callable[[], object]) -> None:
    """Clean up, whatever the file system's library may say to it."""
    with contextlib.suppress(Exception):
        act()
