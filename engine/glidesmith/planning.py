"""What a batch has to make: for each preset, phrase and variation the order for what is not current.

Presets are looked at one after the other, when the next order is asked for; what can't be ordered is told and
left out.
"""

import math
import os
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from functools import lru_cache
from pathlib import Path

from glidesmith.bank import (
    AS_IT_IS,
    Choice,
    Collisions,
    Found,
    NamePattern,
    Variation,
    as_texts,
    default_pattern,
    find_presets,
    phrase_names,
    variations,
)
from glidesmith.currency import Inputs, agrees, is_phrase, origin_of
from glidesmith.desk import Desk
from glidesmith.errors import GlidesmithError, PhraseError, PresetError, SettingError
from glidesmith.manifest import InputFacts, OutputFacts, Record
from glidesmith.outcome import Failed, Outcome
from glidesmith.production import Options, Order
from glidesmith.text import file_name, read_bytes, shown

LOWEST_LUFS, HIGHEST_LUFS = -70.0, 0.0
_MOST_COLLISIONS = 5
_MOST_TRACKS = 65_535
"""What the header of a MIDI file can count."""


@dataclass(frozen=True, slots=True)
class Request:
    """What a batch is asked for, checked."""

    folder: Path
    output: Path
    choice: Choice
    phrases: tuple[Path, ...]
    track: int | None
    channel: int | None
    longest_s: float
    variations: tuple[Variation, ...]
    pattern: NamePattern
    options: Options
    force: bool = False
    verify: bool = False


def checked_request(
    folder: str | os.PathLike[str],
    output: str | os.PathLike[str],
    phrases: Iterable[str | os.PathLike[str]],
    chosen: tuple[int | None, int | None, float],
    vary: Mapping[str, Sequence[object]] | None,
    name: str | None,
    patterns: tuple[Iterable[str], Iterable[str]],
    options: Options,
    force: bool = False,
    verify: bool = False,
) -> Request:
    """What `batch` is asked for. Raises SettingError."""
    bank, target = _path("folder", folder), _path("output", output)
    paths = _phrase_paths(phrases)
    _check_choice(*chosen)
    if not paths and chosen[:2] != (None, None):
        raise SettingError("track and channel choose among the notes of a phrase: give the phrase too")
    phrase_names(paths)
    varied = _varied(vary)
    several = len(varied) > 1 or bool(varied[0].changes)
    if name is None:
        name = default_pattern(len(paths) > 1, several)
    pattern = NamePattern(*as_texts("name", (name,)))
    choice = Choice(*(as_texts(*each) for each in zip(("include", "exclude"), patterns, strict=True)))
    return Request(
        bank, target, choice, paths, *chosen, varied, pattern,
        _checked_options(options), force, verify,
    )  # fmt: skip


def _path(what: str, given: object) -> Path:
    if not isinstance(given, str | os.PathLike):
        raise SettingError(f"{what} {shown(given)}: give a path")
    path = os.fspath(given)
    if not isinstance(path, str):
        raise SettingError(f"{what} {shown(given)}: give a path as text")
    return Path(path)


def _phrase_paths(given: object) -> tuple[Path, ...]:
    """The phrases, of which one alone need not stand in a list."""
    if isinstance(given, str | os.PathLike) or not isinstance(given, Iterable):
        return (_path("phrases", given),)
    return tuple(_path("phrases", each) for each in given)


def _check_choice(track: object, channel: object, longest_s: object) -> None:
    for what, value, most in (("track", track, _MOST_TRACKS), ("channel", channel, 16)):
        is_whole = isinstance(value, int) and not isinstance(value, bool)
        if value is not None and not (is_whole and 1 <= value <= most):  # type: ignore[operator]
            raise SettingError(f"{what} {shown(value)}: give a whole number, 1 to {most:,}")
    is_number = isinstance(longest_s, int | float) and not isinstance(longest_s, bool)
    if not is_number or not 0.0 < longest_s < math.inf:  # type: ignore[operator]
        raise SettingError(f"longest_s {shown(longest_s)}: give seconds above 0; 7200 is usual")


def _varied(vary: Mapping[str, Sequence[object]] | None) -> tuple[Variation, ...]:
    if not vary:
        return (AS_IT_IS,)
    from glidesmith.candidates import axes_from_values

    return variations(axes_from_values(vary))


def _checked_options(options: Options) -> Options:
    _in_range("sample rate", options.sample_rate, 8_000, 384_000, "hertz; 48000 is usual")
    if options.sample_rate != int(options.sample_rate):
        raise SettingError(f"sample rate {options.sample_rate!r}: give whole hertz, as 48000")
    if options.depth not in (16, 24, "float"):
        raise SettingError(f'depth {shown(options.depth)}: give 16, 24 or "float"')
    _in_range("tolerance", options.tolerance_cents, 0.01, 1200.0, "cents; 5 is usual")
    lufs = options.loudness_lufs
    if lufs is not None:
        _in_range("loudness", lufs, LOWEST_LUFS, HIGHEST_LUFS, "LUFS; -23 is usual")
        if not options.meter:
            raise SettingError("loudness is asked for, and no meter is to run: leave one of the two out")
    return Options(
        int(options.sample_rate),
        options.depth,
        None if lufs is None else float(lufs),
        bool(options.meter),
        float(options.tolerance_cents),
    )


def _in_range(what: str, value: object, lowest: float, highest: float, unit: str) -> None:
    is_number = isinstance(value, int | float) and not isinstance(value, bool)
    if not is_number or not lowest <= value <= highest:  # type: ignore[operator]
        raise SettingError(f"{what} {shown(value)}: give {lowest:g} to {highest:g} {unit}")


class Survey:
    """The presets that a request is about, as they are found in the bank's folder."""

    def __init__(self, request: Request) -> None:
        """Raises SettingError where there are none, or two items would be written to one file."""
        self.request = request
        self.presets, self.unread = find_presets(request.folder, request.choice, request.output)
        self.alike: list[str] = []
        if not self.presets and not self.unread:
            raise SettingError(
                f"{file_name(request.folder)}: holds no preset that is taken: no .toml file in it or below"
            )
        self._require_distinct()

    @property
    def items_each(self) -> int:
        """How many items are made of a preset."""
        return max(len(self.request.phrases), 1) * len(self.request.variations)

    def _require_distinct(self) -> None:
        request = self.request
        if not request.phrases and "phrase" in request.pattern.fields:
            return  # names are known only once the presets were read
        names, counts = Collisions(), lru_cache(maxsize=None)(_may_be_preset)
        for name, whose, found in self._names():
            names.add(name, whose, found, counts)
            if len(names.same) == _MOST_COLLISIONS:
                break
        if names.same:
            raise SettingError(*names.same)
        self.alike = [
            f"{names}: only some file systems tell these names apart; on others the second can't be made"
            for names in names.alike[:_MOST_COLLISIONS]
        ]

    def _names(self) -> Iterator[tuple[str, str, Found]]:
        """Each item's name, what it is made of, and the file that may be its preset."""
        request = self.request
        for found in self.presets:
            for phrase in request.phrases or (Path(),):
                for variation in request.variations:
                    name = request.pattern.name(found.name, phrase.as_posix(), variation.name)
                    yield name, made_of(found, phrase.name, variation), found


def _may_be_preset(found: Found) -> bool:
    """Whether a file may be a preset; only a list of notes that can be read as one surely is none."""
    from glidesmith.preset import MOST_PRESET_BYTES

    try:
        return not is_phrase(read_bytes(found.path, MOST_PRESET_BYTES, PresetError))
    except PresetError:
        return True


def made_of(found: Found, phrase: str, variation: Variation) -> str:
    """What an item is made of, in words."""
    return " with ".join(part for part in (found.name, phrase, variation.name) if part)


@dataclass(frozen=True, slots=True)
class _Source:
    """A phrase as one preset plays it; ``prefix`` begins a line about what is wrong with it."""

    path: str
    name: str
    track: int | None
    channel: int | None
    facts: InputFacts
    prefix: str


@dataclass(frozen=True, slots=True)
class _Item:
    """One output: its name, and all that it is made from, by names and hashes."""

    name: str
    found: Found
    facts: InputFacts
    source: _Source
    variation: Variation
    cycle: str | None
    hashes: Mapping[str, str]
    origin: str


class Plan:
    """The orders of one run.

    ``planned`` has the items thought of, by name as the desk tells names apart; ``changed`` says whether a
    record was changed without its output being made again.
    """

    def __init__(self, survey: Survey, desk: Desk, outcome: Outcome, count: Callable[[int], None]) -> None:
        """``count`` is told of items that need not, or can't, be made.

        Raises PhraseError where a phrase that all are to play can't be read.
        """
        self._survey, self._desk, self._outcome, self._count = survey, desk, outcome, count
        self._request = survey.request
        self.total = len(survey.presets) * survey.items_each
        self.planned: dict[str, str] = {}
        self.inputs = Inputs(self._request.folder, desk.journal.inputs, self._request.verify)
        self.changed = False
        for phrase in self._request.phrases:
            self.inputs.file(str(phrase), PhraseError)

    def fail(self, preset: str, item: str, lines: tuple[str, ...], count: int = 1) -> None:
        """Tell of items that can't be made."""
        self._outcome.failed.append(Failed(preset, item, lines))
        self._count(count)

    def orders(self) -> Iterator[tuple[Order, str]]:
        """The orders for what is not current, each with its origin."""
        for found in self._survey.presets:
            try:
                facts = self.inputs.preset(found)
            except PresetError as problem:
                self.fail(found.name, "", problem.lines, self._survey.items_each)
                continue
            if facts.kind != "preset":
                self.total -= self._survey.items_each
                self._count(0)
                continue
            for phrase in self._request.phrases or (None,):
                yield from self._orders_with(found, facts, phrase)

    def _orders_with(
        self, found: Found, facts: InputFacts, phrase: Path | None
    ) -> Iterator[tuple[Order, str]]:
        """The orders for a preset and a phrase, its own one where None is given."""
        try:
            source = self._source(found, facts, phrase)
        except GlidesmithError as problem:
            self.fail(found.name, "", problem.lines, len(self._request.variations))
            return
        for variation in self._request.variations:
            name = ""
            try:
                name = self._named(found, source, variation)
                item = self._item(name, found, facts, source, variation)
                order = None if self._stands(item) else self._order(item)
                if order is not None and not self._still_stands(item, order):
                    self._desk.require_writable(name, order.settings_sha256)
                else:
                    order = None
            except GlidesmithError as problem:
                self.fail(found.name, name, problem.lines)
                continue
            if order is not None:
                yield order, item.origin
            else:
                self._outcome.current += 1
                self._count(1)

    def _source(self, found: Found, facts: InputFacts, chosen: Path | None) -> _Source:
        request = self._request
        if chosen is not None:
            name, known = self.inputs.file(str(chosen), PhraseError)
            return _Source(chosen.as_posix(), name, request.track, request.channel, known, "")
        assert facts.links is not None
        named, track, channel, _ = facts.links
        if named is None:
            raise SettingError(
                f"{file_name(found.path)}: names no phrase; give one with --phrase FILE, or add [phrase] "
                "with file to the preset"
            )
        prefix = f"{file_name(found.path)}: phrase.file: "
        path = found.beside(named)
        with _beginning(prefix):
            name, known = self.inputs.file(path, PhraseError)
        return _Source(path, name, track, channel, known, prefix)

    def _named(self, found: Found, source: _Source, variation: Variation) -> str:
        name = self._request.pattern.name(found.name, source.path, variation.name)
        whose = made_of(found, source.path.rpartition("/")[2], variation)
        first = self.planned.setdefault(self._desk.key(name), whose)
        if first != whose:
            raise SettingError(f"{shown(first)} and {shown(whose)} would both write {shown(name)}")
        return name

    def _item(
        self, name: str, found: Found, facts: InputFacts, source: _Source, variation: Variation
    ) -> _Item:
        hashes = {found.name: facts.sha256, source.name: source.facts.sha256}
        cycle = _cycle_path(found, facts, variation)
        if cycle is not None:
            with _beginning(f"{file_name(found.path)}: oscillator.file: "):
                cycle_name, known = self.inputs.file(cycle, PresetError)
            hashes[cycle_name] = known.sha256
        choice = (source.track, source.channel, self._request.longest_s)
        origin = origin_of(self._request.options, variation, hashes, choice)
        return _Item(name, found, facts, source, variation, cycle, hashes, origin)

    def _order(self, item: _Item) -> Order:
        """What is to be made of an item's files as they are now."""
        from glidesmith.preset import settings_hash

        source, patch = item.source, self.inputs.patch(item.found, item.facts)
        if item.variation.changes:
            patch = patch.changed(dict(item.variation.changes))
        with _beginning(source.prefix):
            file, phrase = self.inputs.phrase(
                source.path, source.track, source.channel, self._request.longest_s
            )
        ignored = (f"ignored in the phrase: {line}" for line in phrase.ignored)
        return Order(
            item.name,
            item.found.name,
            patch,
            settings_hash(patch),
            file,
            item.variation.plain(),
            item.hashes,
            (*patch.unused(), *ignored),
            self._request.options,
            None if item.cycle is None else self.inputs.content(item.cycle, PresetError),
        )

    def _stands(self, item: _Item) -> bool:
        """Whether an output is there, made from the same inputs, by what is remembered of them all."""
        line, known = self._desk.records.line(item.name), self._desk.journal.outputs.get(item.name)
        if self._request.force or line is None or known is None:
            return False
        same = known.origin == item.origin and known.file_sha256 == line.file_sha256
        return same and self._desk.is_whole(item.name, known, self._request.verify)

    def _still_stands(self, item: _Item, order: Order) -> bool:
        """Whether the output that is there is the one ordered; its record is brought up to date then."""
        line = self._desk.records.line(item.name)
        if self._request.force or line is None:
            return False
        record, heading = line.record(), order.heading()
        stamp = self._desk.stamp(item.name)
        if stamp is None or not agrees(record, heading):
            return False
        known, facts = (
            self._desk.journal.outputs.get(item.name),
            OutputFacts(stamp, line.file_sha256, item.origin),
        )
        is_known = known is not None and replace(known, origin=item.origin) == facts
        if (self._request.verify or not is_known) and self._desk.digest(item.name) != line.file_sha256:
            return False
        if not self._outcome.dry_run:
            self._keep({**record, **heading}, record, facts)
        return True

    def _keep(self, record: Record, before: Record, facts: OutputFacts) -> None:
        """Keep a record that may have changed in what it says of the inputs, and how its output looks."""
        if record != before:
            self._desk.journal.made(record, facts, self._desk.records)
            self.changed = True
        else:
            self._desk.journal.outputs[record["item"]] = facts
            self.inputs.changed = True


def _cycle_path(found: Found, facts: InputFacts, variation: Variation) -> str | None:
    """The oscillator's file, after what is varied."""
    assert facts.links is not None
    changes = dict(variation.changes)
    named = facts.links[3] if changes.get("oscillator.wave", "file") == "file" else None
    named = changes.get("oscillator.file", named)  # type: ignore[assignment]
    return None if named is None else found.beside(named)


@contextmanager
def _beginning(prefix: str) -> Iterator[None]:
    """What goes wrong with a file inside is told with what names the file."""
    try:
        yield
    except (PhraseError, PresetError) as problem:
        raise type(problem)(*(f"{prefix}{line}" for line in problem.lines)) from None
