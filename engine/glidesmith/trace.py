"""Traces: what the control signals did, sample by sample, as CSV for any program that draws or computes.

The columns are ``time_s``, ``target_volts``, ``pitch_volts``, ``gate``, ``gain_control`` and ``gain``.
Numbers are written with as many digits as it takes to read back the very same double.
"""

import math
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO

import numpy as np
from numpy.typing import NDArray

from glidesmith.errors import SettingError
from glidesmith.outlet import Outlet
from glidesmith.partfile import PartFile

if TYPE_CHECKING:
    from glidesmith.program import Program

Signal = NDArray[np.float64]

COLUMNS = ("time_s", "target_volts", "pitch_volts", "gate", "gain_control", "gain")
_CHUNK_ROWS = 16_384


class TraceWriter(Outlet):
    """Writes a trace, a block at a time, in a file that appears whole or not at all.

    Parameters
    ----------
    target : Path or binary stream
    sample_rate : int
        Hz; row n stands for the time n / ``sample_rate``.
    name : str, optional
        What messages call the target.

    Raises
    ------
    OutputError
        When the target can't be written, here or from any method; one line, and what was there is unchanged.
    """

    def __init__(self, target: Path | BinaryIO, sample_rate: int, *, name: str | None = None) -> None:
        if sample_rate < 1:
            raise SettingError(f"sample rate {sample_rate!r}: give a whole number of hertz; 48000 is usual")
        self.sample_rate = sample_rate
        self.rows = 0
        self._file = PartFile(target, name)
        try:
            self._file.write((",".join(COLUMNS) + "\n").encode())
        except BaseException:
            self._file.abandon()
            raise

    def write(
        self, target_volts: Signal, pitch_volts: Signal, gate: Signal, gain_control: Signal, gain: Signal
    ) -> None:
        """Append rows; each column float64 (n,)."""
        columns = (target_volts, pitch_volts, gate, gain_control, gain)
        if len({len(column) for column in columns}) != 1:
            raise ValueError(f"columns of unequal lengths: {[len(column) for column in columns]}")
        for start in range(0, len(gain), _CHUNK_ROWS):
            self._write_rows([column[start : start + _CHUNK_ROWS] for column in columns])

    def _write_rows(self, columns: Sequence[Signal]) -> None:
        count = len(columns[0])
        time_s = np.arange(self.rows, self.rows + count) / self.sample_rate
        texts = [list(map(repr, time_s.tolist())), *map(_texts, columns)]
        rows = "\n".join(map(",".join, zip(*texts, strict=True)))
        self._file.write((rows + "\n").encode())
        self.rows += count

    def close(self) -> None:
        """Finish the file."""
        self._file.close()

    def abandon(self) -> None:
        """Remove what was begun."""
        self._file.abandon()


def _texts(column: Signal) -> list[str]:
    """The shortest text of each number that reads back the same; a run of equal numbers is worded once."""
    bits = np.ascontiguousarray(column, dtype=np.float64).view(np.int64)
    starts = np.flatnonzero(np.concatenate(([True], bits[1:] != bits[:-1])))
    if len(starts) > len(column) // 2:
        return list(map(repr, column.tolist()))
    words = np.array(list(map(repr, column[starts].tolist())), dtype=object)
    return list(np.repeat(words, np.diff(starts, append=len(column))))


def write_trace(
    target: Path | BinaryIO,
    sample_rate: int,
    target_volts: Signal,
    pitch_volts: Signal,
    gate: Signal,
    gain_control: Signal,
    gain: Signal,
) -> None:
    """Write whole signals, each float64 (n,), as a trace; see `TraceWriter`."""
    with TraceWriter(target, sample_rate) as writer:
        writer.write(target_volts, pitch_volts, gate, gain_control, gain)


class HeldSignals:
    """What a program asks of the slews: the pitch's target in volts and the gate's level.

    Sample n has the value that holds from n / fs on, as in ``x`` of `Slew.run`; a change between two samples
    shows from the later one. The target is the phrase's own, before the converter.
    """

    def __init__(self, program: "Program") -> None:
        pitch, gate = program.pitch_changes, program.gate_changes
        rate = program.sample_rate
        self._pitch_samples = np.array([math.ceil(c.time * rate) for c in pitch], dtype=np.int64)
        self._gate_samples = np.array([math.ceil(c.time * rate) for c in gate], dtype=np.int64)
        self._volts = np.array([pitch[0].volts, *(c.volts for c in pitch)])
        self._levels = np.array([0.0, *(c.level for c in gate)])

    def target_volts(self, start: int, count: int) -> Signal:
        """The target at samples ``start`` to ``start + count - 1``, float64; at first the first note's."""
        return self._at(self._pitch_samples, self._volts, start, count)

    def gate(self, start: int, count: int) -> Signal:
        """The gate's level, 0 to 1, at samples ``start`` to ``start + count - 1``, float64."""
        return self._at(self._gate_samples, self._levels, start, count)

    @staticmethod
    def _at(samples: NDArray[np.int64], values: Signal, start: int, count: int) -> Signal:
        held: Signal = values[np.searchsorted(samples, np.arange(start, start + count), side="right")]
        return held
