"""Offline rendering: a program played into a sink, or into memory."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from glidesmith.program import Program, compile_program
from glidesmith.voice import Traces, Voice

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset
    from glidesmith.sink import Sink

BLOCK = 16_384
"""Samples handed to a sink at a time."""


@dataclass(frozen=True)
class Report:
    """What there is to say about a render: how long, how loud, what was clipped, and warnings in words."""

    frames: int
    sample_rate: int
    peak_db: float
    clipped: int
    warnings: tuple[str, ...]

    @property
    def seconds(self) -> float:
        """The length in seconds."""
        return self.frames / self.sample_rate


@dataclass(frozen=True)
class Rendering:
    """A phrase as rendered, in memory.

    ``audio`` is float32 (n,), within ±1. With a trace, ``pitch_volts`` (V, after glissando steps),
    ``gain_control`` (0 to 1, after the gain slew) and ``gain`` (after the amplifier's law) are float64 (n,);
    otherwise None.
    """

    audio: "NDArray[np.float32]"
    sample_rate: int
    report: Report
    pitch_volts: "NDArray[np.float64] | None" = None
    gain_control: "NDArray[np.float64] | None" = None
    gain: "NDArray[np.float64] | None" = None

    @property
    def clipped(self) -> int:
        """Samples held at the ceiling of 0 dBFS."""
        return self.report.clipped

    @property
    def warnings(self) -> tuple[str, ...]:
        """What the listener should know, a line each."""
        return self.report.warnings


def report_of(program: Program, voice: Voice) -> Report:
    """What there is to say about a program that a voice has played to its end."""
    warnings = list(program.warnings)
    if voice.clipped:
        over_db = 20.0 * np.log10(voice.peak)
        warnings.append(
            f"{voice.clipped} samples were clipped at 0 dBFS ({over_db:.1f} dB over); lower "
            "oscillator.level_db by as much"
        )
    if program.cut_off:
        warnings.append(
            "the gain was still over -90 dB after the tail and is cut off there; raise the tail, or shorten "
            "gain.fall or the envelope's release"
        )
    peak_db = 20.0 * np.log10(min(voice.peak, 1.0)) if voice.peak > 0.0 else -np.inf
    return Report(voice.sample, program.sample_rate, float(peak_db), voice.clipped, tuple(warnings))


def stream(
    program: Program,
    sink: "Sink",
    progress: Callable[[int, int], None] | None = None,
    watch: Callable[[Traces], None] | None = None,
) -> Report:
    """Play a program into a sink, in blocks, and leave the sink open.

    ``progress``, where given, is called after each block with the samples made and the samples in all;
    ``watch`` with the block's control signals, float64 (n,) each, which the next block overwrites.
    """
    voice = Voice(program)
    block = np.empty(BLOCK, np.float32)
    signals = _room_for_traces(BLOCK if watch else 0)
    while voice.sample < program.length:
        part = block[: min(BLOCK, program.length - voice.sample)]
        seen = Traces(*(signal[: part.size] for signal in signals))
        voice.play(part, seen)
        sink.write(part)
        if watch is not None:
            watch(seen)
        if progress is not None:
            progress(voice.sample, program.length)
    return report_of(program, voice)


def _room_for_traces(count: int) -> Traces:
    return Traces(*(np.empty(count) for _ in Traces._fields))


def render_program(program: Program, trace: bool = False) -> Rendering:
    """Play a whole program into memory; see `render`."""
    voice = Voice(program)
    audio = np.empty(program.length, np.float32)
    if not trace:
        voice.play(audio)
        return Rendering(audio, program.sample_rate, report_of(program, voice))
    traces = _room_for_traces(program.length)
    voice.play(audio, traces)
    return Rendering(audio, program.sample_rate, report_of(program, voice), *traces)


def render(
    preset: "Preset", phrase: "Phrase", sample_rate: int = 48_000, trace: bool = False, tail_s: float = 30.0
) -> Rendering:
    """Render a preset's phrase.

    Parameters
    ----------
    preset, phrase
        As `load_preset` and `load_phrase` give them.
    sample_rate : int
        Hz, 8,000 to 384,000.
    trace : bool
        Whether to return the control signals too.
    tail_s : float
        The longest time in seconds, 0 to 3600, that the sound may go on after the last gate. A render ends
        when the gain stays under -90 dB.

    Returns
    -------
    Rendering
        ``audio`` float32 (n,) and, with ``trace``, ``pitch_volts``, ``gain_control`` and ``gain``, float64
        (n,). The same bits for the same settings on one machine, whatever the block size or the number of
        threads.

    Raises
    ------
    SettingError
        For a rate or a tail out of range, and for an oscillator file that can't be used.
    """
    return render_program(compile_program(preset, phrase, sample_rate, tail_s), trace)
