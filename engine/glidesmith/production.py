"""One item of a batch made: a preset's phrase rendered, metered, measured and written, and the record of it.

An `Order` holds all that goes into an item, so that whoever produces it needs nothing else but the place it
goes to: this process, one beside it, or a machine that never sees the folder of presets. The same order gives
the same bytes and the same record wherever it is produced. Nothing here knows of batches.
"""

import contextlib
import errno
import hashlib
import math
import os
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeAlias

from glidesmith import __version__
from glidesmith.errors import GlidesmithError, OutputError
from glidesmith.outlet import Outlet
from glidesmith.partfile import is_leftover, output_error
from glidesmith.text import printable

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from glidesmith.course import GlideCourse
    from glidesmith.facts import Facts
    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset
    from glidesmith.program import Program
    from glidesmith.rendering import Report
    from glidesmith.wav import Depth

    Audio = NDArray[np.float32]

CEILING_DBTP = -1.0
"""No true peak is brought over this (EBU R 128)."""

CURVE_POINTS = 48

_HEADROOM_DB = 0.01
_CLOSE_LU = 0.005
_MOST_PASSES = 6
_FAINT_DBTP, _LIFTED_DBTP = -40.0, -6.0
_BLOCK = 1 << 20
"""Samples made at a time: some 7 MB beside the tables, whatever the length of the phrase."""

_MOST_HELD = 1 << 24
"""Samples kept in memory where they are needed more than once; longer phrases are rendered again."""


@dataclass(frozen=True, slots=True)
class Options:
    """What a batch is asked for whatever the preset.

    ``sample_rate`` in Hz; ``depth`` 16, 24 or "float"; ``loudness_lufs`` is what all are brought to, or None;
    ``meter`` says whether loudness and true peak are measured; ``tolerance_cents`` is as in `measure`.
    """

    sample_rate: int = 48_000
    depth: "Depth" = 24
    loudness_lufs: float | None = None
    meter: bool = True
    tolerance_cents: float = 5.0

    def as_dict(self) -> dict[str, Any]:
        """Fit for JSON."""
        return {
            "sample_rate": self.sample_rate,
            "depth": self.depth,
            "loudness_lufs": self.loudness_lufs,
            "meter": self.meter,
            "tolerance_cents": self.tolerance_cents,
        }


@dataclass(frozen=True, slots=True)
class PhraseFile:
    """A phrase file's content and how it is read; ``sha256`` is that of the notes (`Phrase.content_hash`)."""

    name: str
    sha256: str
    track: int | None
    channel: int | None
    longest_s: float
    data: bytes = field(compare=False, repr=False)


@dataclass(frozen=True, slots=True)
class Order:
    """One item to be made.

    ``item`` is the output's name in its place, with forward slashes, as ``preset`` and ``sources`` are names
    as seen from the bank; ``sources`` gives each input file's SHA-256. ``varied`` are the settings that
    differ from the preset file's, by dotted key. ``without_effect`` says in readable lines what of the inputs
    has none. ``cycle`` is the content of the oscillator's file.
    """

    item: str
    preset: str
    patch: "Preset"
    settings_sha256: str
    phrase: PhraseFile
    varied: Mapping[str, object]
    sources: Mapping[str, str]
    without_effect: tuple[str, ...]
    options: Options
    cycle: bytes | None = field(default=None, repr=False)

    def heading(self) -> dict[str, Any]:
        """What a record says that is known before the item is made, fit for JSON."""
        return {
            "item": self.item,
            "title": self.patch.title,
            "preset": self.preset,
            "phrase": self.phrase.name,
            "varied": dict(self.varied),
            "engine": __version__,
            "settings_sha256": self.settings_sha256,
            "phrase_sha256": self.phrase.sha256,
            "options": self.options.as_dict(),
            "sources": dict(self.sources),
            "without_effect": list(self.without_effect),
        }


@dataclass(frozen=True, slots=True)
class Failure:
    """An item that was not made, and why, a line a mistake.

    ``fatal``: the place takes nothing more, so that there is no use in trying other items.
    """

    lines: tuple[str, ...]
    fatal: bool = False


class Draft(Outlet):
    """A file on its way to a place: it gets its name, whole, when it is closed, and not at all otherwise."""

    @abstractmethod
    def write(self, data: bytes | memoryview) -> None:
        """Append bytes. Raises OutputError."""


class Place(ABC):
    """Where items go, by names with forward slashes."""

    @abstractmethod
    def begin(self, name: str) -> Draft:
        """Begin a file; folders above it are made. Raises OutputError."""


class LocalPlace(Place):
    """A folder on this machine.

    A file is written as ``NAME.part`` beside its name, without being forced to the disk: that a process is
    killed costs nothing that has its name already, and what a power cut may cost is told by its size. No two
    processes write to one place at a time; who uses it sees to that.
    """

    def __init__(self, root: Path) -> None:
        self.root = root

    def begin(self, name: str) -> Draft:
        """Begin a file; folders above it are made. Raises OutputError."""
        return _LocalDraft(self.root, name)


_NEW = (
    os.O_WRONLY
    | os.O_CREAT
    | os.O_EXCL
    | getattr(os, "O_CLOEXEC", 0)
    | getattr(os, "O_BINARY", 0)
    | getattr(os, "O_NOFOLLOW", 0)
)


class _LocalDraft(Draft):
    def __init__(self, root: Path, name: str) -> None:
        target = root / name
        self._root, self._target, self._part = root, target, target.with_name(f"{target.name}.part")
        self._descriptor = -1
        try:
            self._descriptor = self._opened()
        except OSError as problem:
            raise self._error(problem) from None
        except ValueError:
            name = printable(str(target))
            raise OutputError(f"{name}: is not a name that a file can have; check it") from None

    def _opened(self) -> int:
        try:
            return os.open(self._part, _NEW, 0o666)
        except FileNotFoundError:
            if not self._root.is_dir():
                raise
            self._target.parent.mkdir(parents=True, exist_ok=True)
        except FileExistsError:
            if not is_leftover(self._part):
                raise OutputError(
                    f"{printable(str(self._part))}: is in the way, and is not left over from a batch; "
                    "move it elsewhere first"
                ) from None
            self._part.unlink()
        return os.open(self._part, _NEW, 0o666)

    def write(self, data: bytes | memoryview) -> None:
        view = memoryview(data)
        try:
            while view:
                view = view[os.write(self._descriptor, view) :]
        except OSError as problem:
            raise self._error(problem) from None

    def close(self) -> None:
        try:
            os.close(self._descriptor)
            self._descriptor = -1
            os.replace(self._part, self._target)  # noqa: PTH105 - a Path would be made and thrown away
        except OSError as problem:
            self._unlink()
            raise self._error(problem) from None

    def abandon(self) -> None:
        if self._descriptor >= 0:
            with contextlib.suppress(OSError):
                os.close(self._descriptor)
            self._descriptor = -1
            self._unlink()

    def _unlink(self) -> None:
        with contextlib.suppress(OSError):
            self._part.unlink()

    def _error(self, problem: OSError) -> OutputError:
        error = output_error(str(self._target), problem)
        error.errno = error.errno or problem.errno
        return error


class StoppedError(Exception):
    """Production was told to stop; nothing of the item is left."""


def produce(order: Order, place: Place, stop: Callable[[], bool] | None = None) -> dict[str, Any]:
    """Make one item, and its record, fit for JSON.

    ``stop`` is asked now and then whether to give up, at the latest right before the file gets its name; then
    StoppedError is raised.

    Raises
    ------
    SettingError, PhraseError
        Where the order can't be rendered.
    OutputError
        Where the place can't take the file; what was there under its name is unchanged.
    """
    from glidesmith.course import pitch_course
    from glidesmith.measuring import measure_program
    from glidesmith.program import slew_of

    program = _program(order)
    course = pitch_course(slew_of(order.patch.pitch.slew), program.pitch_changes)
    facts = measure_program(program, course, order.options.tolerance_cents)
    take = _Take(program, stop or _never)
    level, file = _written(order, place, take)
    report = take.report
    return {
        **order.heading(),
        **file,
        "frames": program.length,
        "sample_rate": program.sample_rate,
        "depth": order.options.depth,
        "gain_db": level.gain_db,
        "lufs": _finite(level.lufs),
        "true_peak_dbtp": _finite(level.true_peak_dbtp),
        "peak_db": _finite(report.peak_db + level.gain_db),
        "clipped": report.clipped,
        **_landing(facts),
        "edge_clicks": sum(gate.edge_click for gate in facts.gates),
        "warnings": [*report.warnings, *level.warnings],
        "curve": _curve(order.patch, course, program.length / program.sample_rate),
    }


Outcome: TypeAlias = dict[str, Any] | Failure
"""The record of an item that was made, or why it was not."""

Runner: TypeAlias = Callable[[Iterator[Order], Place], Iterator[tuple[int, Outcome]]]
"""What makes items: yields the number of each order, from 0, and its outcome, in whatever order they come.

It asks for orders as it can use them, and only from the thread that iterates over it.
"""


def run_here(orders: Iterator[Order], place: Place) -> Iterator[tuple[int, Outcome]]:
    """A `Runner` in this process, one item after the other."""
    for number, order in enumerate(orders):
        yield number, attempt(order, place)


class _Nowhere(Draft, Place):
    """A place that keeps nothing."""

    def begin(self, name: str) -> Draft:
        return self

    def write(self, data: bytes | memoryview) -> None:
        pass

    def close(self) -> None:
        pass

    def abandon(self) -> None:
        pass


def get_ready() -> None:
    """Load, or compile, what making an item needs: a process that then forks shares it with its children."""
    from glidesmith.phrase import parse_phrase
    from glidesmith.preset import preset_from_mapping

    slew = {"law": "rc", "rise": 0.01, "fall": 0.01}
    envelope = {"attack": 0.01, "decay": 0.01, "sustain": 0.5, "release": 0.01}
    text = 'notes = [{ at = 0, lasts = 0.1, note = "C4" }, { at = 0.05, lasts = 0.1, note = "D4" }]'
    file = PhraseFile("ready.toml", parse_phrase(text).content_hash(), None, None, 1.0, text.encode("ascii"))
    for tables in ({}, {"envelope": envelope}):
        patch = preset_from_mapping({"pitch": slew, "gain": slew, **tables})
        produce(Order("ready.wav", "", patch, "", file, {}, {}, (), Options()), _Nowhere())


_FATAL = frozenset({errno.ENOSPC, errno.EDQUOT, errno.EROFS, errno.EIO})


def attempt(order: Order, place: Place, stop: Callable[[], bool] | None = None) -> dict[str, Any] | Failure:
    """As `produce`, but what goes wrong with the item is returned. Raises StoppedError alone."""
    try:
        return produce(order, place, stop)
    except OutputError as problem:
        return Failure(problem.lines, problem.errno in _FATAL)
    except GlidesmithError as problem:
        return Failure(problem.lines)
    except MemoryError:
        return Failure((f"{printable(order.preset)}: there is not enough memory for it; shorten the phrase",))


def _never() -> bool:
    return False


def _finite(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None


@lru_cache(maxsize=16)
def _phrase(file: PhraseFile) -> "Phrase":
    from glidesmith.phrase import parse_phrase_file

    return parse_phrase_file(file.data, Path(file.name), file.track, file.channel, file.longest_s)


def _program(order: Order) -> "Program":
    from glidesmith.program import compile_program
    from glidesmith.wavetable import parse_cycle

    cycle = None
    if order.cycle is not None and order.patch.oscillator.file is not None:
        cycle = parse_cycle(order.cycle, order.patch.oscillator.file, order.patch.where)
    return compile_program(order.patch, _phrase(order.phrase), order.options.sample_rate, cycle=cycle)


def _landing(facts: "Facts") -> dict[str, Any]:
    never = [
        {
            "note": glide.note,
            "start_s": round(glide.start_s, 6),
            "from": glide.from_note,
            "to": glide.to_note,
            "short_by_cents": round(glide.short_by_cents, 3),
        }
        for glide in facts.never_land
    ]
    return {"glides": len(facts.glides), "never_lands": never}


def _curve(patch: "Preset", course: "GlideCourse", end_s: float) -> list[list[float]]:
    """The pitch as heard, as few points: time in seconds, octaves from C4."""
    import numpy as np

    from glidesmith.course import heard_octaves
    from glidesmith.curves import MIDDLE_C

    times = np.linspace(0.0, end_s, CURVE_POINTS)
    octaves = heard_octaves(patch, course.at(times)) + (patch.tuning.zero_volts - MIDDLE_C) / 12.0
    points: list[list[float]] = (np.round(np.stack([times, octaves], axis=1), 3) + 0.0).tolist()
    return points


class _Take:
    """A program's samples, block by block, as often as they are asked for; ``report`` after the first time.

    Short phrases are kept in memory if they are asked for again, long ones are rendered again.
    """

    def __init__(self, program: "Program", stop: Callable[[], bool]) -> None:
        self.program, self._stop = program, stop
        self._held: list[Audio] = []
        self.report: Report

    def blocks(self, again: bool = False) -> Iterator["Audio"]:
        """The blocks, each valid until the next; ``again`` says that they will be asked for once more."""
        if self._held:
            yield from self._held
            return
        import numpy as np

        from glidesmith.rendering import report_of
        from glidesmith.voice import Voice

        voice, length = Voice(self.program), self.program.length
        keep = again and length <= _MOST_HELD
        block = np.empty(min(length, _BLOCK), np.float32)
        held = []
        while voice.sample < length:
            self.require_wanted()
            part = block[: min(_BLOCK, length - voice.sample)]
            voice.play(part)
            if keep:
                held.append(part)
                block = np.empty(min(length - voice.sample, _BLOCK), np.float32)
            yield part
        self.report = report_of(self.program, voice)
        self._held = held

    def require_wanted(self) -> None:
        """Raise StoppedError where production was told to stop."""
        if self._stop():
            raise StoppedError


@dataclass(frozen=True, slots=True)
class _Level:
    """The gain that an item gets, and what is measured with it; None or −inf where there is nothing."""

    gain_db: float = 0.0
    lufs: float | None = None
    true_peak_dbtp: float | None = None
    warnings: tuple[str, ...] = ()


def _factor(gain_db: float) -> float:
    return math.pow(10.0, gain_db / 20.0)


def _settled(take: _Take, target_lufs: float) -> _Level:
    """The gain that brings a take to a loudness, or as near as its true peak allows.

    The meter's gate has an absolute threshold, so that loudness does not quite move with the level: it is
    measured again at the gain found.
    """
    level = _metered(take, 0.0)
    if level.true_peak_dbtp is not None and -math.inf < level.true_peak_dbtp < _FAINT_DBTP:
        level = _metered(take, _LIFTED_DBTP - level.true_peak_dbtp)
    for _ in range(_MOST_PASSES):
        assert level.lufs is not None
        assert level.true_peak_dbtp is not None
        if not math.isfinite(level.lufs):
            return _Level(0.0, None, None, ("is silent: there is no loudness to bring anywhere",))
        room = CEILING_DBTP - _HEADROOM_DB - level.true_peak_dbtp
        off = target_lufs - level.lufs
        if abs(min(off, room)) < _CLOSE_LU:
            break
        level = _metered(take, level.gain_db + min(off, room))
    if off <= room + _CLOSE_LU:
        return level
    said = f"reaches {level.lufs:.1f} LUFS, not {target_lufs:g}: its true peak allows no more"
    return replace(level, warnings=(said,))


def _metered(take: _Take, gain_db: float) -> _Level:
    """Integrated loudness and true peak of a take at a gain."""
    import numpy as np

    from glidesmith.loudness import LoudnessMeter
    from glidesmith.packing import scale

    meter = LoudnessMeter(take.program.sample_rate)
    for block in take.blocks(again=True):
        scaled = np.empty_like(block)
        scale(block, _factor(gain_db), scaled)
        meter.add(scaled)
    found = meter.result()
    return _Level(gain_db, found.integrated_lufs, found.true_peak_dbtp)


def _written(order: Order, place: Place, take: _Take) -> tuple[_Level, dict[str, Any]]:
    """Write the item's file; what was measured of it, and what there is to say of the file."""
    from glidesmith.loudness import LoudnessMeter
    from glidesmith.packing import packed
    from glidesmith.wav import wav_header

    options, target_lufs = order.options, order.options.loudness_lufs
    level = _Level() if target_lufs is None else _settled(take, target_lufs)
    meter = LoudnessMeter(options.sample_rate) if options.meter and target_lufs is None else None
    comment = f"Settings {order.settings_sha256}"
    if level.gain_db:
        comment += f", gain {level.gain_db:+.3f} dB"
    header = wav_header(options.sample_rate, options.depth, take.program.length, order.patch.title, comment)
    digest, size = hashlib.sha256(header), len(header)
    with place.begin(order.item) as draft:
        draft.write(header)
        for block in take.blocks():
            if meter is not None:
                meter.add(block)
            data = packed(block, options.depth, _factor(level.gain_db))
            digest.update(data)
            draft.write(data)
            size += data.nbytes
        if size % 2:
            digest.update(b"\0")
            draft.write(b"\0")
            size += 1
        take.require_wanted()
    if meter is not None:
        found = meter.result()
        level = _Level(0.0, found.integrated_lufs, found.true_peak_dbtp)
    return level, {"file_sha256": digest.hexdigest(), "bytes": size}
