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
_LONGEST_NAME = 200
BYTE_ORDER_MARK = "\ufeff"
"""What some editors put before UTF-8 text; it is passed over in reading and kept in writing back."""


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


def file_name(path: str | os.PathLike[str]) -> str:
    """A path as messages name it: printable, and without its middle where it is very long."""
    name = printable(os.fspath(path))
    half = (_LONGEST_NAME - 1) // 2
    return name if len(name) <= _LONGEST_NAME else f"{name[:half]}…{name[-half:]}"


def counted(number: int, one: str, several: str) -> str:
    """A number with what it counts: ``"1 track"``, ``"1,200 tracks"``."""
    return f"{number:,} {one if number == 1 else several}"


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
    """The choice that a mistyped name most likely means, or None.

    That is one with at most two letters mistyped (one in names of up to four letters), else the only choice
    that is the name's beginning or begins with it: ``range`` for ``range_db``, ``sawtooth`` for ``saw``.
    """
    if len(name) > _LONGEST_COMPARED:
        return None
    meant = name.lower()
    least: tuple[int, str] | None = None
    begun = []
    for choice in choices:
        near = choice.lower()
        short, long = sorted((len(meant), len(near)))
        allowed = min(1 if long <= 4 else 2, short - 1)
        slips = _slips(meant, near) if long - short <= allowed else long
        if slips <= allowed and (least is None or slips < least[0]):
            least = (slips, choice)
        if short >= 3 and (near.startswith(meant) or meant.startswith(near)):
            begun.append(choice)
    if least is not None:
        return least[1]
    return begun[0] if len(begun) == 1 else None


def _slips(first: str, second: str) -> int:
    """How many letters are left out, added, replaced or swapped with their neighbour between two names.

    The optimal string alignment distance, by the usual table of prefixes (Damerau, "A technique for computer
    detection and correction of spelling errors", 1964; from memory).
    """
    before: list[int] = []
    last = list(range(len(second) + 1))
    for i, letter in enumerate(first, 1):
        row = [i]
        for j, other in enumerate(second, 1):
            best = min(last[j] + 1, row[j - 1] + 1, last[j - 1] + (letter != other))
            if i > 1 and j > 1 and letter == second[j - 2] and first[i - 2] == other:
                best = min(best, before[j - 2] + 1)
            row.append(best)
        before, last = last, row
    return last[-1]


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
            more = counted(self._untold, "more mistake", "more mistakes")
            lines.append(f"{self._prefix}and {more} like these")
        raise error(*lines)


def read_bytes(
    path: Path,
    most_bytes: int,
    error: Callable[[str], GlidesmithError],
    too_long: str = "is it the right file?",
) -> bytes:
    """The content of a regular file of at most ``most_bytes`` bytes; ``too_long`` says how to mend a longer.

    Folders, devices and pipes are refused before anything is read from them, so nothing here waits for ever.

    Raises ``error`` with one line that names the file and says how to mend it.
    """
    name = file_name(path)
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
        raise error(f"{name}: is over {most_bytes:,} bytes, the most that is read; {too_long}")
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
    """The bytes of a text file as text; line ends and a byte-order mark of UTF-8 are left as they are.

    Raises ``error`` with one line where they are not plain UTF-8.
    """
    prefix = f"{where}: " if where else ""
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise error(f"{prefix}is written in UTF-16; save it as UTF-8")
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
    """What a TOML text says, as nested dictionaries; a byte-order mark before it is passed over.

    Raises ``error`` with one line where it is not TOML, or nested so deeply that reading it would take for
    ever.
    """
    prefix = f"{where}: " if where else ""
    text = text.removeprefix(BYTE_ORDER_MARK)
    too_deep = f"{prefix}has tables or arrays nested far too deeply; none needs more than two levels"
    if _DEEP_KEY.search(text):
        raise error(too_deep)
    try:
        return tomllib.loads(text, parse_float=parse_float)
    except RecursionError:
        raise error(too_deep) from None
    except tomllib.TOMLDecodeError as problem:
        raise error(f"{prefix}is not valid TOML: {_toml_fault(str(problem))}") from None
    except ValueError:
        raise error(f"{prefix}holds a whole number of thousands of digits; write a sensible one") from None


_TOML_MENDING = (
    ("Cannot declare", "keep one of the two, with the keys of both"),
    ("Cannot overwrite", "a key or table is there twice; keep one of the two"),
    ("Cannot mutate", "a table is there twice; keep one of the two, with the keys of both"),
    ("Duplicate", "keep one of the two"),
    ("Unclosed array", "close it with ]"),
    ("Expected ']", "close the name with ], as in [pitch]"),
    ("string", "close the text with the quote that began it"),
    ("Expected '\"'", "close the text with the quote that began it"),
    ('Expected "\'"', "close the text with the quote that began it"),
    ("Illegal character '\\n'", "close the text with the quote that began it, in the same line"),
    ("character '", "take this character out"),
    ("date", 'write text in quotes, as "80 ms", and numbers without units, as 0.08'),
    ("Invalid value", 'write text in quotes, as "80 ms", and numbers without units, as 0.08'),
    ("Expected newline", 'write one key = value to a line, with text in quotes, as rise = "80 ms"'),
)
"""How to mend what the parser of TOML complains of, by words in its message; the first that fits."""


def _toml_fault(message: str) -> str:
    """The parser's message, and how to mend what it found."""
    if "Unescaped" in message:
        mending = "write \\\\ for a backslash, or put the text in single quotes"
    else:
        default = "write every line as [table] or key = value"
        mending = next((how for words, how in _TOML_MENDING if words in message), default)
    message = _KEY_TUPLE.sub(lambda found: f"[{'.'.join(_QUOTED.findall(found[1]))}]", message)
    return f"{shortened(message, 200)}; {mending}"


_KEY_TUPLE = re.compile(r"\(('(?:[^']|', ')*',?)\)")
_QUOTED = re.compile(r"'([^']*)'")


def edited_toml(text: str, edits: Mapping[str, object]) -> str:
    """A TOML text with some values replaced, added or (None) taken out, and comments, order and spacing kept.

    ``edits`` goes by ``"table.key"``, or by ``"key"`` at the top; None under a table's name takes the whole
    table out. New keys stand after the last key of their table, new tables at the end. Where the layout is
    unusual, the outcome may not say what was asked: read it again and compare. Raises whatever the editor
    of TOML texts raises.
    """
    import tomlkit

    mark = BYTE_ORDER_MARK if text.startswith(BYTE_ORDER_MARK) else ""
    document = tomlkit.parse(text.removeprefix(mark))
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
    return mark + written


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
