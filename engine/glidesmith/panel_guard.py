"""Who may speak to the panel, what it may write to, and how refusals are told.

The panel's server listens on 127.0.0.1 alone, but every page in the user's browser can reach that address,
and so can every program on the machine. So each request must name the server by an exact host (which defeats
a name that is made to resolve to 127.0.0.1), carry the token of this run, and, where a browser says which
page sends it, come from the panel's own. Files are written inside the folders named at the start and nowhere
else.
"""

import os
import re
import secrets
import threading
import time
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path

from glidesmith.errors import OutputError
from glidesmith.text import file_name, shown

TOKEN_BYTES = 24
MOST_FILES = 400
"""How many files of a folder are offered."""

MOST_TOLD = 12
"""How many refusals are told in a row."""

PRESET_SUFFIXES = (".toml",)
PHRASE_SUFFIXES = (".toml", ".mid", ".midi", ".smf")

_LONGEST_PATH = 1024
_HEAD_BYTES = 1 << 16
_TELLING = re.compile(rb"(?m)^[ \t]*(\[[ \t]*(pitch|gain)[ \t]*\]|\[\[[ \t]*notes|notes[ \t]*=)")


class RefusedError(Exception):
    """A request that is not answered; the text says why, in a line. ``status`` is the HTTP status."""

    def __init__(self, line: str, status: int = 403) -> None:
        super().__init__(line)
        self.status = status


class Guard:
    """Knows the token, the hosts and the origins that a panel on a port answers to."""

    def __init__(self, port: int, token: str | None = None, hosts: Iterable[str] = ()) -> None:
        self.token = secrets.token_urlsafe(TOKEN_BYTES) if token is None else token
        self.hosts = frozenset((f"127.0.0.1:{port}", f"localhost:{port}", *hosts))
        self.origins = frozenset(f"http://{host}" for host in self.hosts)

    def check(self, headers: Mapping[str, str], token: str | None, origin_needed: bool) -> None:
        """Raise RefusedError unless a request's headers and token are right.

        A WebSocket's opening always says its origin (RFC 6455, section 10.2); the page itself, which a person
        opens, need not.
        """
        host, origin = headers.get("Host", ""), headers.get("Origin")
        if host not in self.hosts:
            raise RefusedError(f"the host {shown(host)} is none of {', '.join(sorted(self.hosts))}")
        if origin not in self.origins and (origin_needed or origin is not None):
            raise RefusedError(f"a page of {shown(origin)} asked, which is not the panel's own")
        if not secrets.compare_digest((token or "").encode("utf-8", "replace"), self.token.encode("ascii")):
            raise RefusedError(f"the token is {'wrong' if token else 'missing'}; open the address as printed")


class Refusals:
    """Tells refusals, a line each; after ``most`` of them within ``every_s`` the rest are only counted."""

    def __init__(
        self,
        tell: Callable[[str], None],
        most: int = MOST_TOLD,
        every_s: float = 10.0,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._tell, self._most, self._every_s, self._clock = tell, most, every_s, clock
        self._lock = threading.Lock()
        self._since, self._told, self._untold = clock(), 0, 0

    def add(self, line: str) -> None:
        """Tell one refusal, or count it."""
        with self._lock:
            self._begin_anew()
            self._told += 1
            if self._told <= self._most:
                self._tell(f"panel: refused: {line}")
            else:
                self._untold += 1

    def _begin_anew(self) -> None:
        now = self._clock()
        if now - self._since < self._every_s:
            return
        if self._untold:
            self._tell(f"panel: refused {self._untold:,} more in the same way")
        self._since, self._told, self._untold = now, 0, 0


class Folders:
    """The folders that a panel may write to, and those that it may only read; links are followed before.

    Files are offered from all of them. Relative names start from the first.
    """

    def __init__(
        self, folders: Iterable[str | os.PathLike[str]], read_only: Iterable[str | os.PathLike[str]] = ()
    ) -> None:
        self.folders = _resolved(folders)
        self.readable = _resolved((*self.folders, *read_only))

    def inside(self, text: str, *suffixes: str, writing: bool = False) -> Path:
        """The full path of a file named by a panel, if it may be there.

        Raises OutputError where it lies outside all folders, has another suffix than those, or is no path.
        """
        folders = self.folders if writing else self.readable
        if not text.strip() or "\0" in text or len(text) > _LONGEST_PATH:
            raise OutputError(f"{shown(text)}: is not the path of a file")
        if not text.lower().endswith(suffixes):
            raise OutputError(f"{file_name(text)}: must end in {' or '.join(suffixes)}")
        try:
            path = (self.folders[0] / text).resolve()
        except (OSError, RuntimeError, ValueError):
            raise OutputError(f"{file_name(text)}: is not a path that can be followed") from None
        if not any(path.is_relative_to(folder) for folder in folders):
            allowed = ", ".join(file_name(folder) for folder in folders)
            does = "write to" if writing else "read"
            raise OutputError(
                f"{file_name(text)}: lies outside the folders that the panel may {does}: {allowed}; "
                "they are where it was started, those of its presets and, for reading alone, that of the "
                "phrase heard then, unless `folders` names others"
            )
        return path

    def files(self) -> tuple[list[str], list[str]]:
        """The presets and the phrases that stand in the folders, by their full paths; at most 400 each.

        A TOML file is what its first table or key says; whether it is sound is told when it is loaded.
        """
        presets: list[str] = []
        phrases: list[str] = []
        for folder in self.readable:
            for name in _names_in(folder):
                if name.lower().endswith(PRESET_SUFFIXES):
                    kind = _kind_of(folder / name)
                    (presets if kind == "preset" else phrases if kind == "phrase" else []).append(
                        str(folder / name)
                    )
                elif name.lower().endswith(PHRASE_SUFFIXES):
                    phrases.append(str(folder / name))
        return presets[:MOST_FILES], phrases[:MOST_FILES]


def _resolved(folders: Iterable[str | os.PathLike[str]]) -> tuple[Path, ...]:
    return tuple(dict.fromkeys(Path(folder).resolve() for folder in folders))


def _names_in(folder: Path) -> list[str]:
    try:
        with os.scandir(folder) as entries:
            return sorted(entry.name for entry in entries if entry.is_file())
    except OSError:
        return []


def _kind_of(path: Path) -> str:
    try:
        with path.open("rb") as file:
            head = file.read(_HEAD_BYTES)
    except OSError:
        return ""
    found = _TELLING.search(head)
    return "" if found is None else "phrase" if b"notes" in found[0] else "preset"
