"""Listening sheets: the JSON files in which a comparison page saves one round of blind listening.

A sheet is believed only where it says one thing throughout: hashes that are hashes, answers that add up to
the number of correct ones, a probability that is theirs. Sheets come from other people's machines: their size
is bounded, and whatever they hold is told in a line.
"""

import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from glidesmith.binomial import MOST_TRIALS, guessing_probability
from glidesmith.errors import GlidesmithError
from glidesmith.text import decoded, printable, read_bytes, shortened, shown

SHEET_KIND = "glidesmith listening sheet"
SHEET_VERSION = 1
MOST_SHEET_BYTES = 1_000_000
MOST_CANDIDATES = 256

_LONGEST_NAME = 100
_HASH_DIGITS = 64
_HEXADECIMAL = frozenset("0123456789abcdef")
_PROBABILITY_AGREEMENT = 1e-6


class SheetError(GlidesmithError, ValueError):
    """A listening sheet that can't be used."""


@dataclass(frozen=True, slots=True)
class AbxSheet:
    """One round of A/B/X. ``pair`` are the settings' hashes and ``labels`` the names of A and B."""

    path: Path
    set: str
    listener: str
    made: str
    finished: bool
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
    labels: Mapping[str, str]
    judgements: tuple[Judgement, ...]


Sheet = AbxSheet | PreferenceSheet


def read_sheet(path: Path) -> Sheet:
    """Read a listening sheet and check that it says one thing throughout.

    Raises SheetError, one line: no such file, no listening sheet, damaged or inconsistent.
    """
    where = printable(str(path))
    text = decoded(read_bytes(path, MOST_SHEET_BYTES, SheetError), where, SheetError)
    try:
        content = json.loads(text, parse_constant=_no_constant)
    except RecursionError:
        raise SheetError(f"{where}: is nested far too deeply for a listening sheet") from None
    except ValueError as problem:
        raise SheetError(f"{where}: is damaged: no JSON ({shortened(str(problem), 80)})") from None
    if not isinstance(content, dict) or content.get("kind") != SHEET_KIND:
        raise SheetError(f'{where}: is no listening sheet (its kind is not "{SHEET_KIND}")')
    if content.get("version") != SHEET_VERSION or isinstance(content.get("version"), bool):
        found = shown(content.get("version"))
        raise SheetError(f"{where}: is a sheet of version {found}; this reads version {SHEET_VERSION}")
    try:
        return _checked_sheet(path, _Fields(content))
    except _FaultError as fault:
        raise SheetError(f"{where}: is damaged or inconsistent: {fault}") from None


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
    made = fields.text("made")
    try:
        datetime.fromisoformat(made)
    except ValueError:
        raise _FaultError(f"made is {shown(made)}, not a date and time") from None
    listener = " ".join(shortened(fields.text("listener"), _LONGEST_NAME).split())
    shared = {
        "path": path,
        "set": fields.digest("set"),
        "listener": listener,
        "made": made,
        "finished": fields.flag("finished"),
    }
    test = fields.text("test")
    if test == "abx":
        return _abx_sheet(shared, fields)
    if test == "preference":
        return _preference_sheet(shared, fields)
    raise _FaultError(f'test is {shown(test)}, not "abx" or "preference"')


def _abx_sheet(shared: dict[str, Any], fields: _Fields) -> AbxSheet:
    pair = tuple(_digest(value, "pair") for value in fields.rows("pair", 2))
    labels = tuple(shortened(str(value), _LONGEST_NAME) for value in fields.rows("labels", 2))
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
    seen: dict[object, Path] = {}
    for path in paths:
        where = printable(str(path))
        try:
            sheet = read_sheet(path)
        except SheetError as problem:
            errors.append(problem)
            continue
        twin = seen.setdefault(_identity(sheet), path)
        if sheets and sheet.set != sheets[0].set:
            first = printable(str(sheets[0].path))
            errors.append(SheetError(f"{where}: is of another set than {first}; tally each set by itself"))
        elif twin is not path:
            errors.append(SheetError(f"{where}: is the same round as {printable(str(twin))}; give it once"))
        else:
            sheets.append(sheet)
    return sheets, errors


def _identity(sheet: Sheet) -> object:
    """What two copies of one sheet have in common."""
    heard: object = None
    if isinstance(sheet, AbxSheet):
        heard = (frozenset(sheet.pair), sheet.trials, sheet.correct, sheet.seconds)
    else:
        heard = sheet.judgements
    return (sheet.set, sheet.listener.strip().casefold(), _instant(sheet.made), heard)


def _instant(made: str) -> float:
    """The moment that a date and time names, however it is written; one without a zone counts as UTC."""
    moment = datetime.fromisoformat(made)
    return (moment if moment.tzinfo else moment.replace(tzinfo=UTC)).timestamp()
