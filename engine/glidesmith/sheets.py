"""Listening sheets: the JSON files in which a comparison page saves rounds of blind listening.

A file holds one sheet, or all that a browser has kept of a set. A sheet is believed only where it says one
thing throughout: hashes that are hashes, answers that add up to the number of correct ones, a probability
that is theirs. Sheets come from other people's machines: their size is bounded, and whatever they hold is
told in a line.
"""

import json
import math
import unicodedata
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from glidesmith.binomial import MOST_TRIALS, guessing_probability
from glidesmith.errors import GlidesmithError
from glidesmith.text import decoded, printable, read_bytes, shortened, shown

SHEET_KIND = "glidesmith listening sheet"
SHEETS_KIND = "glidesmith listening sheets"
SHEET_VERSION = 1
MOST_SHEET_BYTES = 10_000_000
MOST_SHEETS = 1000
MOST_CANDIDATES = 256
MOST_EARLIER = 100_000

_LONGEST_NAME = 100
_LONGEST_ID = 64
_LONGEST_EXCERPT_S = 1e6
_MOST_LISTED = 1000
_HASH_DIGITS = 64
_HEXADECIMAL = frozenset("0123456789abcdef")
_PROBABILITY_AGREEMENT = 1e-6


class SheetError(GlidesmithError, ValueError):
    """A listening sheet that can't be used."""


@dataclass(frozen=True, slots=True)
class EarlierRound:
    """What a sheet tells of a round that was begun before it on the same device.

    ``pair`` are the settings' hashes of A and B, and ``labels`` their names; both are empty for preferences.
    ``set`` is empty where the page didn't save it.
    """

    id: str
    test: str
    listener: str
    made: str
    finished: bool
    answered: int
    planned: int
    pair: frozenset[str]
    labels: tuple[str, ...]
    set: str = ""


@dataclass(frozen=True, slots=True)
class Earlier:
    """How many rounds of the set were begun on the device before, and the latest of them, in order."""

    count: int = 0
    rounds: tuple[EarlierRound, ...] = ()


@dataclass(frozen=True, slots=True)
class AbxSheet:
    """One round of A/B/X. ``pair`` are the settings' hashes and ``labels`` the names of A and B.

    ``excerpt_s``: what was heard of the phrase, from and to, in seconds. It is None, ``id`` is empty, and
    ``earlier`` tells of no rounds, where the page didn't save them.
    """

    path: Path
    set: str
    listener: str
    made: str
    finished: bool
    id: str
    earlier: Earlier
    excerpt_s: tuple[float, float] | None
    pair: tuple[str, str]
    labels: tuple[str, str]
    planned: int
    trials: int
    correct: int
    seconds: float


@dataclass(frozen=True, slots=True)
class Judgement:
    """Two candidates' hashes, and the one that was preferred; None for neither."""

    pair: tuple[str, str]
    preferred: str | None


@dataclass(frozen=True, slots=True)
class PreferenceSheet:
    """One round of preferences. ``labels`` are the candidates' names by their settings' hashes."""

    path: Path
    set: str
    listener: str
    made: str
    finished: bool
    id: str
    earlier: Earlier
    excerpt_s: tuple[float, float] | None
    labels: Mapping[str, str]
    judgements: tuple[Judgement, ...]


Sheet = AbxSheet | PreferenceSheet


def read_sheet(path: Path) -> Sheet:
    """Read a listening sheet and check that it says one thing throughout.

    Raises SheetError, one line: no such file, no listening sheet, damaged or inconsistent.
    """
    return _sheet(path, printable(str(path)), _content(path))


def read_sheets(path: Path) -> tuple[list[Sheet], list[SheetError]]:
    """The sheets of a file that holds one or several, and an error of one line for each that is no good.

    Raises SheetError, one line, where the file itself is none.
    """
    where, content = printable(str(path)), _content(path)
    if not isinstance(content, dict) or content.get("kind") != SHEETS_KIND:
        return [_sheet(path, where, content)], []
    _check_version(where, content)
    rows = content.get("sheets")
    if not isinstance(rows, list) or not 1 <= len(rows) <= MOST_SHEETS:
        raise SheetError(f"{where}: is damaged: its sheets are not a list of 1 to {MOST_SHEETS:,}")
    sheets: list[Sheet] = []
    errors: list[SheetError] = []
    for number, row in enumerate(rows, 1):
        try:
            sheets.append(_sheet(path, f"{where}: sheet {number}", row))
        except SheetError as problem:
            errors.append(problem)
    return sheets, errors


def _content(path: Path) -> object:
    where = printable(str(path))
    text = decoded(read_bytes(path, MOST_SHEET_BYTES, SheetError), where, SheetError)
    try:
        content: object = json.loads(text, parse_constant=_no_constant)
    except RecursionError:
        raise SheetError(f"{where}: is nested far too deeply for a listening sheet") from None
    except ValueError as problem:
        raise SheetError(f"{where}: is damaged: no JSON ({shortened(str(problem), 80)})") from None
    return content


def _sheet(path: Path, where: str, content: object) -> Sheet:
    if not isinstance(content, dict) or content.get("kind") != SHEET_KIND:
        raise SheetError(f'{where}: is no listening sheet (its kind is not "{SHEET_KIND}")')
    _check_version(where, content)
    try:
        return _checked_sheet(path, _Fields(content))
    except _FaultError as fault:
        raise SheetError(f"{where}: is damaged or inconsistent: {fault}") from None


def _check_version(where: str, content: Mapping[str, object]) -> None:
    version = content.get("version")
    if version != SHEET_VERSION or isinstance(version, bool):
        raise SheetError(
            f"{where}: is a sheet of version {shown(version)}; this reads version {SHEET_VERSION}"
        )


def _no_constant(name: str) -> None:
    raise ValueError(f"{name} is no number")


class _FaultError(Exception):
    """What is wrong with a sheet, without its name."""


class _Fields:
    """The fields of one JSON object, each asked for by the kind that it must have."""

    def __init__(self, content: object, where: str = "") -> None:
        self._where = f"{where}: " if where else ""
        if not isinstance(content, dict):
            raise _FaultError(f"{where or 'it'} is {shown(content)}, not an object")
        self._content = content

    def _get(self, name: str, kind: Any, words: str) -> Any:
        value = self._content.get(name)
        if name not in self._content:
            raise _FaultError(f"{self._where}{name} is missing")
        if not isinstance(value, kind) or (isinstance(value, bool) and kind is not bool):
            raise _FaultError(f"{self._where}{name} is {shown(value)}, not {words}")
        return value

    def text(self, name: str) -> str:
        return str(self._get(name, str, "text"))

    def flag(self, name: str) -> bool:
        return bool(self._get(name, bool, "true or false"))

    def whole(self, name: str, low: int, high: int) -> int:
        value = int(self._get(name, int, "a whole number"))
        if not low <= value <= high:
            raise _FaultError(f"{self._where}{name} is {shown(value)}, outside {low:,} to {high:,}")
        return value

    def number(self, name: str) -> float:
        value = self._get(name, int | float, "a number")
        try:
            number = float(value)
        except OverflowError:
            number = math.inf
        if not 0.0 <= number < math.inf:
            raise _FaultError(f"{self._where}{name} is {shown(value)}, not a finite number from 0")
        return number

    def rows(self, name: str, most: int) -> list[Any]:
        rows: list[Any] = self._get(name, list, "a list")
        if len(rows) > most:
            raise _FaultError(f"{self._where}{name} has {len(rows):,} entries, and the most is {most:,}")
        return rows

    def moment(self, name: str) -> str:
        made = self.text(name)
        try:
            datetime.fromisoformat(made)
        except ValueError:
            raise _FaultError(f"{self._where}{name} is {shown(made)}, not a date and time") from None
        return made

    def name(self, name: str) -> str:
        """What people call something: short, and without spaces and ways of writing that don't show."""
        text = unicodedata.normalize("NFC", self.text(name))
        return " ".join(shortened(text, _LONGEST_NAME).split())

    def names(self, name: str, most: int) -> tuple[str, ...]:
        return tuple(shortened(str(value), _LONGEST_NAME) for value in self.rows(name, most))

    def id(self) -> str:
        text = self.text("id")
        if not (0 < len(text) <= _LONGEST_ID and text.isascii() and text.isprintable()):
            raise _FaultError(f"{self._where}id is {shown(text)}, not 1 to {_LONGEST_ID} plain characters")
        return text

    def stretch(self, name: str) -> tuple[float, float]:
        """Two times in seconds, the later one last, to the millisecond, as the page tells them."""
        ends = self.rows(name, 2)
        numbers = [each for each in ends if isinstance(each, int | float) and not isinstance(each, bool)]
        if len(numbers) != 2 or not 0.0 <= numbers[0] < numbers[1] <= _LONGEST_EXCERPT_S:
            told = " to ".join(shown(each) for each in ends)
            raise _FaultError(f"{self._where}{name} is {told}, not two times in seconds, in order")
        return round(float(numbers[0]), 3), round(float(numbers[1]), 3)

    def part(self, name: str) -> "_Fields":
        return _Fields(self._content[name], f"{self._where}{name}")

    def has(self, name: str) -> bool:
        return name in self._content

    def digest(self, name: str) -> str:
        return _digest(self.text(name), f"{self._where}{name}")

    def choice(self, name: str, high: int) -> int | None:
        """An index up to ``high``, or None for null."""
        return None if name in self._content and self._content[name] is None else self.whole(name, 0, high)


def _digest(value: object, name: str) -> str:
    if not isinstance(value, str) or len(value) != _HASH_DIGITS or not _HEXADECIMAL.issuperset(value):
        raise _FaultError(f"{name} is {shown(value)}, not {_HASH_DIGITS} hexadecimal digits")
    return value


def _checked_sheet(path: Path, fields: _Fields) -> Sheet:
    shared = {
        "path": path,
        "set": fields.digest("set"),
        "listener": fields.name("listener"),
        "made": fields.moment("made"),
        "finished": fields.flag("finished"),
        "id": fields.id() if fields.has("id") else "",
        "earlier": _earlier(fields.part("earlier")) if fields.has("earlier") else Earlier(),
        "excerpt_s": fields.stretch("excerpt_s") if fields.has("excerpt_s") else None,
    }
    test = fields.text("test")
    if test == "abx":
        return _abx_sheet(shared, fields)
    if test == "preference":
        return _preference_sheet(shared, fields)
    raise _FaultError(f'test is {shown(test)}, not "abx" or "preference"')


def _earlier(fields: _Fields) -> Earlier:
    rows = fields.rows("rounds", _MOST_LISTED)
    rounds = tuple(_earlier_round(_Fields(row, f"earlier round {n}")) for n, row in enumerate(rows, 1))
    count = fields.whole("count", 0, MOST_EARLIER)
    if count < len(rounds):
        raise _FaultError(f"it tells of {count} earlier rounds, and lists {len(rounds)}")
    return Earlier(count, rounds)


def _earlier_round(fields: _Fields) -> EarlierRound:
    pair = fields.rows("pair", 2) if fields.has("pair") else []
    return EarlierRound(
        id=fields.id(),
        test=fields.name("test"),
        listener=fields.name("listener"),
        made=fields.moment("made"),
        finished=fields.flag("finished"),
        answered=fields.whole("answered", 0, MOST_CANDIDATES**2),
        planned=fields.whole("planned", 0, MOST_CANDIDATES**2),
        pair=frozenset(_digest(value, "pair") for value in pair),
        labels=fields.names("labels", 2) if fields.has("labels") else (),
        set=fields.digest("set") if fields.has("set") else "",
    )


def _abx_sheet(shared: dict[str, Any], fields: _Fields) -> AbxSheet:
    pair = tuple(_digest(value, "pair") for value in fields.rows("pair", 2))
    labels = fields.names("labels", 2)
    if len(pair) != 2 or len(labels) != 2:
        raise _FaultError("pair and labels name not two candidates each")
    if pair[0] == pair[1]:
        raise _FaultError("both candidates of its pair are the same")
    planned = fields.whole("trials_planned", 1, MOST_TRIALS)
    rows = fields.rows("trials", MOST_TRIALS)
    trials = [_Fields(row, f"trial {number}") for number, row in enumerate(rows, 1)]
    right = sum(trial.whole("x", 0, 1) == trial.whole("answer", 0, 1) for trial in trials)
    seconds = sum(trial.number("seconds") for trial in trials)
    correct = fields.whole("correct", 0, MOST_TRIALS)
    if correct != right:
        raise _FaultError(f"it says {correct} correct, and its trials have {right}")
    if len(trials) > planned:
        raise _FaultError(f"{planned} trials were planned, and it has {len(trials)}")
    if shared["finished"] != (len(trials) == planned):
        said = "finished" if shared["finished"] else "not finished"
        raise _FaultError(f"it says {said}, with {len(trials)} of {planned} trials")
    stated = fields.number("probability") if shared["finished"] else None
    exact = guessing_probability(right, planned) if shared["finished"] else None
    if stated is not None and exact is not None and abs(stated - exact) > _PROBABILITY_AGREEMENT:
        raise _FaultError(f"it says a probability of {stated:.6g}, and its trials have {exact:.6g}")
    return AbxSheet(
        **shared,
        pair=(pair[0], pair[1]),
        labels=(labels[0], labels[1]),
        planned=planned,
        trials=len(trials),
        correct=right,
        seconds=seconds,
    )


def _preference_sheet(shared: dict[str, Any], fields: _Fields) -> PreferenceSheet:
    rows = [
        _Fields(row, f"candidate {n}") for n, row in enumerate(fields.rows("candidates", MOST_CANDIDATES))
    ]
    hashes = [row.digest("settings_sha256") for row in rows]
    if len(set(hashes)) != len(hashes) or len(hashes) < 2:
        raise _FaultError("its candidates are not two or more different ones")
    labels = {
        digest: shortened(row.text("label"), _LONGEST_NAME) for digest, row in zip(hashes, rows, strict=True)
    }
    most = MOST_CANDIDATES * (MOST_CANDIDATES - 1)
    judgements = [
        _judgement(_Fields(row, f"pair {number}"), hashes)
        for number, row in enumerate(fields.rows("pairs", most), 1)
    ]
    seen = [frozenset(judgement.pair) for judgement in judgements]
    if len(set(seen)) != len(seen):
        raise _FaultError("a pair of candidates is there twice")
    count = len(hashes) * (len(hashes) - 1) // 2
    if shared["finished"] and len(seen) != count:
        raise _FaultError(f"it says finished, with {len(seen)} of {count} pairs")
    return PreferenceSheet(**shared, labels=labels, judgements=tuple(judgements))


def _judgement(row: _Fields, hashes: Sequence[str]) -> Judgement:
    last = len(hashes) - 1
    first, second = row.whole("first", 0, last), row.whole("second", 0, last)
    preferred = row.choice("preferred", last)
    if first == second:
        raise _FaultError(f"candidate {first} is paired with itself")
    if preferred is not None and preferred not in (first, second):
        raise _FaultError(f"candidate {preferred} is preferred, and only {first} and {second} were heard")
    chosen = None if preferred is None else hashes[preferred]
    return Judgement((hashes[first], hashes[second]), chosen)


def accepted_sheets(paths: Sequence[Path]) -> tuple[list[Sheet], list[SheetError]]:
    """The sheets that can be added up, and an error of one line for each that can't.

    All are of the set that the first good sheet is of, and none is there twice.
    """
    sheets: list[Sheet] = []
    errors: list[SheetError] = []
    seen: dict[object, Sheet] = {}
    for path in paths:
        try:
            found, damaged = read_sheets(path)
        except SheetError as problem:
            found, damaged = [], [problem]
        errors += damaged
        for sheet in found:
            fault = _misfit(sheet, sheets, seen)
            if fault:
                errors.append(SheetError(f"{printable(str(path))}: {fault}"))
            else:
                sheets.append(sheet)
    return sheets, errors


def _misfit(sheet: Sheet, sheets: Sequence[Sheet], seen: dict[object, Sheet]) -> str | None:
    """Why a sheet can't be added to others, of which ``seen`` holds what makes each the only one."""
    heard = _heard(sheet)
    twin = seen.setdefault(heard, sheet)
    namesake = seen.setdefault((sheet.set, sheet.id), sheet) if sheet.id else sheet
    if sheets and sheet.set != sheets[0].set:
        first = printable(str(sheets[0].path))
        return f"is of another set than {first}; tally each set by itself"
    if twin is not sheet:
        return f"is the same round as {_where(twin, sheet)}; give it once"
    if namesake is not sheet:
        return f"is the same round as {_where(namesake, sheet)}, with other contents; find out which is right"
    return None


def _where(twin: Sheet, sheet: Sheet) -> str:
    return "another in this file" if twin.path is sheet.path else f"in {printable(str(twin.path))}"


def _heard(sheet: Sheet) -> object:
    """What two copies of one sheet have in common."""
    heard: object = None
    if isinstance(sheet, AbxSheet):
        heard = (frozenset(sheet.pair), sheet.trials, sheet.correct, sheet.seconds)
    else:
        heard = sheet.judgements
    return (sheet.set, sheet.listener.strip().casefold(), instant(sheet.made), heard)


def instant(made: str) -> float:
    """The moment that a date and time names, however it is written; one without a zone counts as UTC."""
    moment = datetime.fromisoformat(made)
    return (moment if moment.tzinfo else moment.replace(tzinfo=UTC)).timestamp()
