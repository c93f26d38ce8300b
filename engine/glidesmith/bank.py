"""A bank: the presets below a folder, what is played with each, and what each output is called.

Nothing is read here but folders; hidden files and folders are left out. Links to folders are followed, each
real folder once, so that links that go round in a circle come to an end.
"""

import os
import re
import stat
import unicodedata
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace
from fnmatch import translate
from itertools import product
from math import prod
from pathlib import Path
from typing import TYPE_CHECKING

from glidesmith.errors import OutputError, SettingError
from glidesmith.partfile import output_error
from glidesmith.text import file_name, printable, shortened, shown, suggestion

if TYPE_CHECKING:
    from glidesmith.candidates import Axes

PRESET_SUFFIX = ".toml"
OUTPUT_SUFFIX = ".wav"

MOST_VARIATIONS = 100_000
"""Of one preset."""

Stamp = tuple[int, int]
"""A file's size in bytes and when it was last changed, in nanoseconds: looked at before its content."""


@dataclass(frozen=True, slots=True)
class Found:
    """A file that may be a preset.

    ``name`` is its path below the bank's folder, with forward slashes, ``place`` its path. Without a
    ``stamp`` it can't be looked at: a link that leads nowhere, for instance.
    """

    name: str
    place: str
    stamp: Stamp | None

    @property
    def path(self) -> Path:
        """Where it is."""
        return Path(self.place)

    def beside(self, link: str) -> str:
        """The path of a file that it names, relative to its own folder."""
        return os.path.join(os.path.dirname(self.place), link)  # noqa: PTH118, PTH120 - for speed


def stamp_of(path: str | os.PathLike[str]) -> Stamp | None:
    """The stamp of a regular file, links followed; None where there is none."""
    try:
        facts = os.stat(path)  # noqa: PTH116 - called for every file of a bank; a Path costs ten times that
    except (OSError, ValueError):
        return None
    return (facts.st_size, facts.st_mtime_ns) if stat.S_ISREG(facts.st_mode) else None


class Choice:
    """Which files of a bank are taken, by patterns with ``*``, ``?`` and ``[…]``.

    A pattern is compared with the path below the bank's folder, with each folder and file name in it, and
    with the path of each folder above the file: ``drafts`` names a folder or a file anywhere.
    """

    def __init__(self, include: Iterable[str] = (), exclude: Iterable[str] = ()) -> None:
        """One pattern may be given as it is. Raises SettingError for an empty one, or what is no text."""
        self._include, self._exclude = _pattern("include", include), _pattern("exclude", exclude)

    def takes(self, name: str) -> bool:
        """Whether a file of that name is taken."""
        if self._include is None and self._exclude is None:
            return True
        parts = name.split("/")
        names = [*parts, *("/".join(parts[:count]) for count in range(2, len(parts) + 1))]
        included = self._include is None or any(map(self._include.fullmatch, names))
        return included and not (self._exclude is not None and any(map(self._exclude.fullmatch, names)))


def _pattern(option: str, texts: Iterable[str]) -> "re.Pattern[str] | None":
    patterns = [text.strip("/").removeprefix("./") for text in as_texts(option, texts)]
    if not all(patterns):
        raise SettingError(f'{option}: a pattern is empty; give one, as "leads/*" or "draft-*.toml"')
    return re.compile("|".join(translate(pattern) for pattern in patterns)) if patterns else None


def as_texts(what: str, given: object) -> tuple[str, ...]:
    """Texts, of which one alone need not stand in a list. Raises SettingError for anything else."""
    texts = (given,) if isinstance(given, str) else tuple(given) if isinstance(given, Iterable) else (given,)
    for text in texts:
        if not isinstance(text, str):
            raise SettingError(f'{what} {shown(text)}: give text, as "leads/*"')
    return texts


def find_presets(
    folder: Path, choice: Choice, output: Path | None = None
) -> tuple[list[Found], list[OutputError]]:
    """The files that may be presets in a folder and below, in order of their names, and what can't be read.

    The folder ``output``, where it lies below, is left out. Raises SettingError where ``folder`` is none.
    """
    found: list[Found] = []
    unread: list[OutputError] = []
    seen = {_identity(output)} - {_identity(folder), None}
    waiting, links = [("", str(folder))], list[tuple[str, str]]()
    while waiting or links:
        prefix, path = waiting.pop() if waiting else links.pop(0)
        identity = _identity(path)
        if identity is not None and identity in seen:
            continue
        seen.add(identity)
        try:
            with os.scandir(path) as entries:
                inner, further = _sorted_in(entries, prefix, choice, found)
        except OSError as problem:
            if not prefix:
                raise _no_folder(folder, problem) from None
            unread.append(_unread(path, problem))
            continue
        waiting += inner
        links += further
    return sorted(found, key=lambda each: each.name), unread


def _sorted_in(
    entries: "Iterable[os.DirEntry[str]]", prefix: str, choice: Choice, found: list[Found]
) -> tuple[list[tuple[str, str]], list[tuple[str, str]]]:
    """Add a folder's presets to ``found``; its folders, and its links to folders, as (prefix, path)."""
    inner: list[tuple[str, str]] = []
    links: list[tuple[str, str]] = []
    for entry in sorted(entries, key=lambda entry: entry.name):
        name = entry.name
        if name.startswith("."):
            continue
        if _is_folder(entry):
            (links if entry.is_symlink() else inner).append((f"{prefix}{name}/", entry.path))
        elif name.lower().endswith(PRESET_SUFFIX) and choice.takes(prefix + name):
            found.append(Found(prefix + name, entry.path, _entry_stamp(entry)))
    return inner, links


def _is_folder(entry: "os.DirEntry[str]") -> bool:
    try:
        return entry.is_dir()
    except OSError:  # links that go round in a circle
        return False


def _entry_stamp(entry: "os.DirEntry[str]") -> Stamp | None:
    try:
        facts = entry.stat()
    except OSError:
        return None
    return (facts.st_size, facts.st_mtime_ns) if stat.S_ISREG(facts.st_mode) else None


def _identity(path: str | os.PathLike[str] | None) -> tuple[int, int] | None:
    try:
        facts = os.stat(path) if path is not None else None  # noqa: PTH116 - as in stamp_of
    except (OSError, ValueError):
        return None
    return (facts.st_dev, facts.st_ino) if facts is not None else None


def is_gone(folder: Path, name: str) -> bool:
    """Whether there is surely no file of that name below a bank's folder any more.

    One that can't be looked at is not gone, nor what stood behind a link that leads nowhere at the moment: a
    disk may come back.
    """
    path = folder / name
    try:
        path.lstat()
    except (FileNotFoundError, NotADirectoryError):
        inner = path.parents[: name.count("/")]
        return not any(above.is_symlink() and not above.exists() for above in inner)
    except (OSError, ValueError):
        return False
    return False


def _no_folder(folder: Path, problem: OSError) -> SettingError:
    name = file_name(folder)
    if isinstance(problem, NotADirectoryError):
        return SettingError(f"{name}: is a file; give the folder that holds the presets")
    if isinstance(problem, FileNotFoundError):
        return SettingError(f"{name}: there is no such folder; check its name")
    said = printable(problem.strerror or str(problem))
    return SettingError(f"{name}: can't be read ({said}); check its permissions")


def _unread(path: str, problem: OSError) -> OutputError:
    said = printable(problem.strerror or str(problem))
    return OutputError(f"{file_name(path)}: can't be read ({said}); check its permissions, or leave it out")


# What is varied


@dataclass(frozen=True, slots=True)
class Variation:
    """What is changed in each preset: checked settings by dotted key, and a plain name made of them."""

    name: str
    changes: tuple[tuple[str, object], ...]

    def plain(self) -> dict[str, object]:
        """The changes, fit for JSON; a file goes by its name, since manifests are handed on."""
        if not self.changes:
            return {}
        from glidesmith.settings import KEY

        return {
            key: Path(str(value)).name if KEY[key].kind == "file" else KEY[key].plain(value)
            for key, value in self.changes
        }


AS_IT_IS = Variation("", ())


def variations(axes: "Axes") -> tuple[Variation, ...]:
    """Every combination of the axes' values, the last axis turning fastest; without axes, the preset itself.

    Raises SettingError where there are too many, or two could not be told apart by name.
    """
    count = prod(len(values) for values in axes.values())
    if count > MOST_VARIATIONS:
        raise SettingError(
            f"{count:,} combinations of each preset, and the most is {MOST_VARIATIONS:,}; vary fewer values"
        )
    if not axes:
        return (AS_IT_IS,)
    made = [_variation(dict(zip(axes, values, strict=True))) for values in product(*axes.values())]
    names = [variation.name for variation in made]
    if len(set(names)) < len(names):
        width = len(str(count))
        made = [
            Variation(f"{number:0{width}d}-{each.name}".rstrip("-"), each.changes)
            for number, each in enumerate(made, 1)
        ]
    return tuple(made)


def _variation(changes: dict[str, object]) -> Variation:
    from glidesmith.candidates import plain_name, settings_text

    return Variation(plain_name(settings_text(changes)), tuple(changes.items()))


# What outputs are called


PLACEHOLDERS = ("folder", "preset", "phrase", "values")
_BRACES = re.compile(r"\{([^{}]*)\}|([{}])")
_FOLDER_ABOVE = "{folder}/"


class NamePattern:
    """How an output is named, below the output folder: text with placeholders in braces.

    ``{folder}`` is the preset's folder below the bank's (nothing at its top), ``{preset}`` and ``{phrase}``
    are the names of the two files without their suffix, ``{values}`` names what is varied. ``.wav`` is added
    where it is missing.
    """

    def __init__(self, text: str) -> None:
        """Raises SettingError, a line, for a pattern that can't be meant."""
        self.text = text
        self.fields = {_placeholder(text, *found.groups()) for found in _BRACES.finditer(text)}
        example = dict.fromkeys(PLACEHOLDERS, "x")
        checked_name(self.fill(**example), f"name = {shown(text)}")
        _require_portable(self.text, f"name = {shown(text)}")

    def fill(self, folder: str, preset: str, phrase: str, values: str) -> str:
        """The name of one output, with forward slashes, not checked yet."""
        text = self.text if folder else self.text.replace(_FOLDER_ABOVE, "")
        parts = {"folder": folder, "preset": preset, "phrase": phrase, "values": values}
        name = _BRACES.sub(lambda found: parts[found[1]], text)
        return name if name.lower().endswith(OUTPUT_SUFFIX) else name + OUTPUT_SUFFIX

    def name(self, preset: str, phrase: str, values: str) -> str:
        """The name of the output for a preset's name below the bank, a phrase's path and a variation.

        Raises SettingError where that is no name inside the output folder.
        """
        folder, _, file = preset.rpartition("/")
        played = phrase.rpartition("/")[2]
        return checked_name(self.fill(folder, _stem(file), _stem(played), values), preset)


def _stem(file: str) -> str:
    return os.path.splitext(file)[0]  # noqa: PTH122 - called for every item; a Path costs ten times that


def default_pattern(with_phrase: bool, with_values: bool) -> str:
    """The pattern where none is given: the bank's own folders and names, and what sets outputs apart."""
    return "{folder}/{preset}" + "_{phrase}" * with_phrase + "_{values}" * with_values


def _placeholder(text: str, name: str | None, brace: str | None) -> str:
    if brace is not None:
        raise SettingError(f"name = {shown(text)}: a brace has no partner; placeholders are {_listed()}")
    if name not in PLACEHOLDERS:
        near = suggestion(str(name), PLACEHOLDERS)
        raise SettingError(
            f"name = {shown(text)}: there is no {{{shortened(str(name))}}}{near}; "
            f"placeholders are {_listed()}"
        )
    return name


def _listed() -> str:
    return ", ".join(f"{{{name}}}" for name in PLACEHOLDERS)


def checked_name(name: str, where: str) -> str:
    """An output's name, if it lies inside the output folder; else a SettingError, begun by ``where``."""
    parts = name.split("/")
    if "\0" in name or (os.sep != "/" and (os.sep in name or ":" in name)):
        raise SettingError(f"{printable(where)}: {shown(name)} is not a name that a file can have")
    if any(part in ("", ".", "..") for part in parts):
        raise SettingError(
            f"{printable(where)}: {shown(name)} does not name a file inside the output folder; give a name "
            "without .., and without a slash at its beginning"
        )
    return name


_RESERVED = re.compile(r"(con|prn|aux|nul|com[1-9]|lpt[1-9])(\..*)?", re.IGNORECASE)


def _require_portable(name: str, where: str) -> None:
    """Raise SettingError for a name that some systems can't have: outputs are handed on."""
    if any(ord(letter) < 32 or ord(letter) == 127 for letter in name):
        raise SettingError(f"{printable(where)}: holds a control character; leave it out")
    for part in name.split("/"):
        if _RESERVED.fullmatch(part):
            raise SettingError(f"{printable(where)}: {shown(part)} names a device on Windows; choose another")
        if part.endswith((".", " ")):
            raise SettingError(f"{printable(where)}: {shown(part)} ends with a dot or a space; leave it out")


def is_inside(name: object) -> bool:
    """Whether something is an output's name inside the output folder, as manifests have it."""
    try:
        is_name = isinstance(name, str) and name == checked_name(name, "")
    except SettingError:
        return False
    return is_name and str(name).lower().endswith(OUTPUT_SUFFIX)


def folded(name: str) -> str:
    """A name as a file system sees it that tells neither case nor the ways to write an accent apart."""
    if name.isascii():
        return name.casefold()
    return unicodedata.normalize("NFC", unicodedata.normalize("NFD", name).casefold())


class Collisions:
    """What outputs are called, each given with what it is made of: whether two are called the same.

    ``same`` has a line for each output whose name an earlier one has, ``alike`` for each whose name differs
    from an earlier one's in case or in the way to write an accent alone.
    """

    def __init__(self) -> None:
        self.same: list[str] = []
        self.alike: list[str] = []
        self._first: dict[str, tuple[str, str, str]] = {}

    def add(self, name: str, whose: str, found: Found, counts: Callable[[Found], bool]) -> None:
        """Note a name; where there is a collision, ``counts`` is asked whether it is a preset's."""
        key = folded(name)
        first = self._first.get(key)
        if first is None:
            self._first[key] = (name, whose, found.place)
        elif first[1] != whose and counts(found):
            if not counts(replace(found, place=first[2])):
                self._first[key] = (name, whose, found.place)
            elif os.path.normcase(first[0]) == os.path.normcase(name):
                self.same.append(f"{shown(first[1])} and {shown(whose)} would both write {shown(name)}")
            else:
                self.alike.append(f"{shown(first[0])} and {shown(name)}")


def phrase_names(phrases: Sequence[Path]) -> list[str]:
    """What each of several phrases is called in an output's name. Raises SettingError where two are alike."""
    stems = [phrase.stem for phrase in phrases]
    for stem, phrase in zip(stems, phrases, strict=True):
        if stems.count(stem) > 1:
            raise SettingError(
                f"{file_name(phrase)}: two phrases are called {shown(stem)}, so that outputs could not be "
                "told apart; rename one, or run once for each"
            )
    return stems


def folder_made(folder: Path) -> None:
    """Make a folder, and those above it, where they are missing. Raises OutputError."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as problem:
        raise output_error(str(folder), problem) from None
    except ValueError:
        raise OutputError(f"{file_name(folder)}: is not a name that a folder can have; check it") from None
