"""The sound card's callback in compiled code: `transport.play_deck` behind PortAudio's C interface.

What may never happen in it: Python, a lock, an allocation, a file, an exception. PortAudio's
``PaStreamCallback`` (portaudio.h) gets what it needs through its user data: a table of the addresses of all
that the transport works on. It counts its calls, the underflows that PortAudio tells of, and how long each
call took: its thread's processor time, in a histogram, and the longest by the clock on the wall.
"""

import sys
import time
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numba import types

from glidesmith.compiled import callback_function, inlined, kernel
from glidesmith.envelope import GATE_EVENT
from glidesmith.exchange import view_float32, view_float64, view_int64, view_of
from glidesmith.listening import LISTENING
from glidesmith.program import PITCH_EVENT
from glidesmith.transport import CHANNEL, COMMAND, DECK, PLACE, ROW, STATE, Parts, play_deck
from glidesmith.voice import Scratch

if TYPE_CHECKING:
    from numpy.typing import NDArray

MONO = 2048
"""Frames made at a time, whatever the device asks for."""

BIN_US = 0.25
BINS = 8192
"""The histogram of processor time: up to 2 ms in steps of a quarter microsecond; the last bin is open."""

COUNTERS = np.dtype(
    [
        ("frames", np.int64),
        ("callbacks", np.int64),
        ("underflows", np.int64),
        ("last_block", np.int64),
        ("worst_wall_ns", np.int64),
        ("worst_cpu_ns", np.int64),
    ],
    align=True,
)
"""What the callback counts."""

_UNDERFLOW = 4  # paOutputUnderflow, portaudio.h
_HAS_CLOCKS = sys.platform != "win32"
_CPU_CLOCK = int(getattr(time, "CLOCK_THREAD_CPUTIME_ID", 3))
_WALL_CLOCK = int(getattr(time, "CLOCK_MONOTONIC", 1))
_LONG = types.uint32 if sys.platform == "win32" else types.uint64

_clock_gettime = types.ExternalFunction("clock_gettime", types.int32(types.int32, types.int64))
_view_deck = view_of(DECK)
_view_channels = view_of(CHANNEL)
_view_places = view_of(PLACE)
_view_pitch_events = view_of(PITCH_EVENT)
_view_gate_events = view_of(GATE_EVENT)
_view_listening = view_of(LISTENING)
_view_commands = view_of(COMMAND)
_view_rows = view_of(ROW)
_view_states = view_of(STATE)
_view_counters = view_of(COUNTERS)

_PARTS, _SCRATCH = len(Parts._fields) - 1, len(Scratch._fields)
_COUNTERS, _HISTOGRAM, _MONO, _CLOCK = (2 * (_PARTS + _SCRATCH + i) for i in range(4))
_CHANNELS = 2 * (_PARTS + _SCRATCH + 4)


@inlined
def _now_ns(clock: int, timespec: Any) -> int:
    """A clock of POSIX (clock_gettime, IEEE Std 1003.1) in nanoseconds; 0 where there is none."""
    if not _HAS_CLOCKS:
        return 0
    _clock_gettime(np.int32(clock), np.int64(timespec.ctypes.data))
    return timespec[0] * 1_000_000_000 + timespec[1]  # type: ignore[no-any-return]


@inlined
def _scratch_at(table: Any) -> Any:
    at = 2 * _PARTS
    return Scratch(
        view_float64(table[at], table[at + 1]),
        view_float64(table[at + 2], table[at + 3]),
        view_float64(table[at + 4], table[at + 5]),
        view_float64(table[at + 6], table[at + 7]),
        view_int64(table[at + 8], table[at + 9]),
        view_int64(table[at + 10], table[at + 11]),
        view_float64(table[at + 12], table[at + 13]),
        view_float64(table[at + 14], table[at + 15]),
        view_float64(table[at + 16], table[at + 17]),
        view_float64(table[at + 18], table[at + 19]),
        view_float32(table[at + 20], table[at + 21]),
    )


@inlined
def _parts_at(table: Any) -> Any:
    return Parts(
        _view_deck(table[0], table[1]),
        _view_channels(table[2], table[3]),
        _view_places(table[4], table[5]),
        _view_pitch_events(table[6], table[7]),
        _view_gate_events(table[8], table[9]),
        _view_listening(table[10], table[11]),
        _view_commands(table[12], table[13]),
        view_int64(table[14], table[15]),
        _view_rows(table[16], table[17]),
        _view_states(table[18], table[19]),
        view_float32(table[20], table[21]),
        view_int64(table[22], table[23]),
        view_float32(table[24], table[25]),
        _scratch_at(table),
    )


@kernel
def _interleave(mono: Any, out: Any, first: Any, channels: int) -> None:
    """The same samples in every channel of a device's buffer."""
    at = first * channels
    for i in range(mono.size):
        for _ in range(channels):
            out[at] = mono[i]
            at += 1


@kernel
def _count(counters: Any, histogram: Any, frames: int, flags: int, cpu_ns: int, wall_ns: int) -> None:
    counters.frames += frames
    counters.callbacks += 1
    counters.last_block = frames
    if flags & _UNDERFLOW:
        counters.underflows += 1
    counters.worst_wall_ns = max(counters.worst_wall_ns, wall_ns)
    counters.worst_cpu_ns = max(counters.worst_cpu_ns, cpu_ns)
    histogram[min(np.int64(float(cpu_ns) / (1000.0 * BIN_US)), histogram.size - 1)] += 1


@kernel
def fill(table: Any, output: Any, frames: Any, flags: Any) -> None:
    """Fill a device's buffer, ``frames`` × channels interleaved float32 at the address ``output``."""
    timespec = view_int64(table[_CLOCK], table[_CLOCK + 1])
    cpu, wall = _now_ns(_CPU_CLOCK, timespec), _now_ns(_WALL_CLOCK, timespec)
    channels = table[_CHANNELS]
    parts = _parts_at(table)
    mono = view_float32(table[_MONO], table[_MONO + 1])
    out = view_float32(output, frames * channels)
    done = np.int64(0)
    while done < frames:
        count = min(frames - done, mono.size)
        play_deck(parts, mono[:count])
        _interleave(mono[:count], out, done, channels)
        done += count
    cpu, wall = _now_ns(_CPU_CLOCK, timespec) - cpu, _now_ns(_WALL_CLOCK, timespec) - wall
    counters = _view_counters(table[_COUNTERS], table[_COUNTERS + 1])[0]
    _count(counters, view_int64(table[_HISTOGRAM], table[_HISTOGRAM + 1]), frames, flags, cpu, wall)


def _raw(source: int, output: int, frames: int, time_info: int, flags: int, table: int) -> int:
    """PaStreamCallback, with its pointers as whole numbers; returns paContinue."""
    fill(view_int64(table, _CHANNELS + 1), np.int64(output), np.int64(frames), np.int64(flags))
    return 0


_SIGNATURE = types.int32(types.intp, types.intp, _LONG, types.intp, _LONG, types.intp)


@dataclass(frozen=True, slots=True)
class Counters:
    """What the callback counted. Times are in microseconds: of its thread's processor time the median, the
    99.9th percentile and the longest, and the longest by the clock on the wall; 0 where none is told.
    """

    frames: int
    callbacks: int
    underflows: int
    last_block: int
    median_us: float
    p999_us: float
    worst_us: float
    worst_wall_us: float


class Callback:
    """The compiled callback of one deck, with the memory behind it; keep it for as long as a stream runs."""

    def __init__(self, parts: Parts) -> None:
        self._counters = np.zeros(1, COUNTERS)
        self._histogram = np.zeros(BINS, np.int64)
        self._mono = np.zeros(MONO, np.float32)
        self._clock = np.zeros(2, np.int64)
        held = [*parts[:-1], *parts.scratch, self._counters, self._histogram, self._mono, self._clock]
        self._table = np.zeros(_CHANNELS + 1, np.int64)
        for place, array in enumerate(held):
            assert array.flags.c_contiguous
            self._table[2 * place : 2 * place + 2] = array.ctypes.data, array.size
        self._held = held
        self._function: Any = None

    def addresses(self, channels: int) -> tuple[int, int]:
        """The addresses of the callback and of its user data, for a stream of ``channels`` channels."""
        if self._function is None:
            self._function = callback_function(_SIGNATURE)(_raw)
        self._table[_CHANNELS] = channels
        return int(self._function.address), int(self._table.ctypes.data)

    def fill(self, out: "NDArray[np.float32]", underflow: bool = False) -> None:
        """The same from Python, for platforms on which PortAudio can't call compiled code directly: fill
        ``out``, float32 (frames, channels), contiguous."""
        self._table[_CHANNELS] = out.shape[1]
        fill(self._table, out.ctypes.data, out.shape[0], _UNDERFLOW if underflow else 0)

    def counters(self) -> Counters:
        """What was counted so far."""
        row = self._counters[0]
        return Counters(
            int(row["frames"]),
            int(row["callbacks"]),
            int(row["underflows"]),
            int(row["last_block"]),
            self._percentile(0.5),
            self._percentile(0.999),
            float(row["worst_cpu_ns"]) / 1000.0,
            float(row["worst_wall_ns"]) / 1000.0,
        )

    def _percentile(self, part: float) -> float:
        """The upper border of the bin in which a part of the calls is reached; 0 without calls."""
        sums = np.cumsum(self._histogram)
        if sums[-1] == 0 or not _HAS_CLOCKS:
            return 0.0
        place = int(np.searchsorted(sums, part * sums[-1]))
        if place == BINS - 1:
            return float(self._counters["worst_cpu_ns"][0]) / 1000.0
        return (place + 1) * BIN_US
