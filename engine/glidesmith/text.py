"""Text that comes in from files and goes out to people: bounded reading, safe printing, whole writing.

Whatever a file holds, what is printed of it is short and printable, what is read of it is bounded, and what
is written appears whole or not at all.
"""

import os
import re
import stat
import tomllib
from collections.abc import Callable, Iterable, Mapping
from fractions import Fraction
from pathlib import Path
from typing import Any

from glidesmith.errors import GlidesmithError

LONGEST_SHOWN = 60
"""How many characters of a value an error message quotes."""

MOST_MISTAKES = 20
"""How many mistakes of one file are told in full; the rest are counted."""

_DEEP_KEY = re.compile(
    r"""(?mx) (?: ^ | [{,\[] ) [ \t]*+ \[{0,2}+ [ \t]*+
        (?: (?:[\w-]++ | "(?:[^"\\\n]|\\.)*+" | '[^'\n]*+') [ \t]*+ \. [ \t]*+ ){16}"""
)
_LONGEST_COMPARED = 64


def printable(text: str) -> str:
    """The same text with everything that is not a printable character escaped, as ``\\n`` or ``\\x1b``.

    Control characters, line separators, characters that reverse the writing direction and halves of surrogate
    pairs could hide or forge what a terminal shows.
    """
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)


def shortened(text: str, longest: int = LONGEST_SHOWN) -> str:
    """The printable form of a text, cut to ``longest`` characters with an ellipsis at the end."""
    head = printable(text[: longest + 1])
    return head if len(head) <= longest else head[: longest - 1] + "…"


def shown(value: object) -> str:
    """A value as an error message quotes it: in TOML's notation, printable and short, whatever it is."""
    if isinstance(value, str):
        return f'"{shortened(value)}"'
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        return str(value) if value.bit_length() <= 128 else f"a number of {value.bit_length():,} bits"
    if isinstance(value, Fraction):
        return _shown_fraction(value)
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, list | tuple):
        return "an array"
    if value is None:
        return "nothing"
    return shortened(str(value))


def _shown_fraction(value: Fraction) -> str:
    try:
        return repr(float(value))
    except OverflowError:
        return "a number over 1e308" if value > 0 else "a number under -1e308"


def nearest(name: str, choices: Iterable[str]) -> str | None:
    """The choice that a mistyped name most likely means, or None."""
    if len(name) > _LONGEST_COMPARED:
        return None
    from difflib import get_close_matches

    lowered = {choice.lower(): choice for choice in choices}
    found = get_close_matches(name.lower(), list(lowered), n=1, cutoff=0.6)
    return lowered[found[0]] if found else None


def suggestion(name: str, choices: Iterable[str]) -> str:
    """`` (did you mean "rise"?)`` when a choice is near, else nothing."""
    found = nearest(name, choices)
    return f' (did you mean "{found}"?)' if found else ""


class Mistakes:
    """The mistakes of one file, a line each, all told at once."""

    def __init__(self, where: str = "") -> None:
        self._prefix = f"{where}: " if where else ""
        self._lines: list[str] = []
        self._untold = 0

    def __bool__(self) -> bool:
        return bool(self._lines)

    @property
    def full(self) -> bool:
        """True once further mistakes are only counted; then spare the work of wording them."""
        return len(self._lines) >= MOST_MISTAKES

    def add(self, line: str) -> None:
        """Note one mistake; beyond the first twenty they are only counted."""
        if self.full:
            self._untold += 1
        else:
            self._lines.append(self._prefix + line)

    def raise_as(self, error: Callable[..., GlidesmithError]) -> None:
        """Raise the error with a line for each mistake; do nothing when there are none."""
        if not self._lines:
            return
        lines = list(self._lines)
        if self._untold:
            lines.append(f"{self._prefix}and {self._untold:,} more mistakes like these")
        raise error(*lines)


def read_bytes(path: Path, most_bytes: int, error: Callable[[str], GlidesmithError]) -> bytes:
    """The content of a regular file of at most ``most_bytes`` bytes.

    Folders, devices and pipes are refused before anything is read from them, so nothing here waits for ever.

    Raises ``error`` with one line that names the file and says how to mend it.
    """
    name = printable(str(path))
    try:
        data = _regular_bytes(path, most_bytes + 1)
    except _NotRegularError as problem:
        raise error(f"{name}: {problem}") from None
    except FileNotFoundError:
        raise error(f"{name}: there is no such file; check its name and folder") from None
    except OSError as problem:
        reason = printable(problem.strerror or str(problem))
        raise error(f"{name}: can't be read ({reason}); check its name and permissions") from None
    except ValueError:
        raise error(f"{name}: is not a name that a file can have; check it") from None
    if len(data) > most_bytes:
        raise error(f"{name}: is over {most_bytes:,} bytes, the most that is read; is it the right file?")
    return data


class _NotRegularError(Exception):
    """What stands under a name is not a regular file."""


def _regular_bytes(path: Path, most_bytes: int) -> bytes:
    _require_regular(path.stat().st_mode)
    with os.fdopen(os.open(path, _READ_FLAGS), "rb") as file:
        _require_regular(os.fstat(file.fileno()).st_mode)
        return file.read(most_bytes)


def _require_regular(mode: int) -> None:
    if stat.S_ISDIR(mode):
        raise _NotRegularError("is a folder; give the name of a file")
    if not stat.S_ISREG(mode):
        raise _NotRegularError("is a device or a pipe; give the name of a file on disk")


_READ_FLAGS = (
    os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_CLOEXEC", 0) | getattr(os, "O_BINARY", 0)
)


def decoded(data: bytes, where: str, error: Callable[[str], GlidesmithError]) -> str:
    """The bytes of a text file as text; line ends are left as they are.

    Raises ``error`` with one line where they are not plain UTF-8.
    """
    prefix = f"{where}: " if where else ""
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise error(f"{prefix}is written in UTF-16; save it as UTF-8")
    if data.startswith(b"\xef\xbb\xbf"):
        raise error(f"{prefix}starts with a byte-order mark; save it as UTF-8 without one")
    if b"\0" in data:
        raise error(f"{prefix}holds NUL bytes, so it is not a text file; is it the right file?")
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError as problem:
        line = data.count(b"\n", 0, problem.start) + 1
        found = f"byte 0x{data[problem.start]:02X} in line {line:,}"
        raise error(f"{prefix}is not UTF-8 ({found}); save it as UTF-8") from None


def toml_mapping(
    text: str,
    where: str,
    error: Callable[[str], GlidesmithError],
    parse_float: Callable[[str], object] = float,
) -> dict[str, Any]:
    """What a TOML text says, as nested dictionaries.

    Raises ``error`` with one line where it is not TOML, or nested so deeply that reading it would take for
    ever.
    """
    prefix = f"{where}: " if where else ""
    too_deep = f"{prefix}has tables or arrays nested far too deeply; none needs more than two levels"
    if _DEEP_KEY.search(text):
        raise error(too_deep)
    try:
        return tomllib.loads(text, parse_float=parse_float)
    except RecursionError:
        raise error(too_deep) from None
    except tomllib.TOMLDecodeError as problem:
        raise error(f"{prefix}is not valid TOML: {shortened(str(problem), 200)}") from None
    except ValueError:
        raise error(f"{prefix}holds a whole number of thousands of digits; write a sensible one") from None


def edited_toml(text: str, edits: Mapping[str, object]) -> str:
    """A TOML text with some values replaced, added or (None) taken out, and comments, order and spacing kept.

    ``edits`` goes by ``"table.key"``, or by ``"key"`` at the top; None under a table's name takes the whole
    table out. New keys stand after the last key of their table, new tables at the end. Where the layout is
    unusual, the outcome may not say what was asked: read it again and compare. Raises whatever the editor
    of TOML texts raises.
    """
    import tomlkit

    document = tomlkit.parse(text)
    for name, value in edits.items():
        table, _, leaf = name.rpartition(".")
        if value is None:
            _take_out(document, table, leaf)
            continue
        if table and table not in document:
            document[table] = tomlkit.table()
        _put(document[table] if table else document, leaf, value)
    written = tomlkit.dumps(document)
    if "\r\n" in text and text.count("\r\n") == text.count("\n"):
        written = written.replace("\r\n", "\n").replace("\n", "\r\n")
    return written


def _put(holder: Any, leaf: str, value: object) -> None:
    """Set a key; a new one goes after the last key of its table, before what introduces the next table."""
    from tomlkit.items import Table

    is_new = leaf not in holder
    holder[leaf] = value
    if not is_new or not isinstance(holder, Table):
        return
    body = holder.value.body
    last = _last_key(body[:-1])
    if last >= 0 and body[-1][0] is not None and body[-1][0].key == leaf:
        body.insert(last + 1, body.pop())


def _take_out(document: Any, table: str, leaf: str) -> None:
    """Remove a key, or a table; the comments at a table's end introduce the next one, and stay."""
    from tomlkit.items import Table

    holder = document.get(table, {}) if table else document
    if leaf not in holder:
        return
    item = holder[leaf]
    at = next((i for i, (key, _) in enumerate(document.body) if key is not None and key.key == leaf), 0)
    holder.remove(leaf)
    if table or not isinstance(item, Table):
        return
    remarks = item.value.body[_last_key(item.value.body) + 1 :]
    earlier = [entry for _, entry in document.body[:at] if isinstance(entry, Table)]
    if earlier:
        earlier[-1].value.body.extend(remarks)
    else:
        document.body[at:at] = remarks


def _last_key(body: list[tuple[Any, Any]]) -> int:
    return max((index for index, (key, _) in enumerate(body) if key is not None), default=-1)


def write_whole(path: Path, data: bytes) -> None:
    """Write a file so that it is seen whole or not at all; where that fails, what was there is untouched.

    Raises OutputError with one line.
    """
    from glidesmith.partfile import PartFile

    file = PartFile(path)
    try:
        file.write(data)
    except BaseException:
        file.abandon()
        raise
    file.close()
