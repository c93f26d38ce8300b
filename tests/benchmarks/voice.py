"""The whole voice against a plain C loop: saw, rc pitch slew, linear gain slew, 60 s at 48 kHz, events
included.

The yardstick (plain_voice.c) is what one would write in an afternoon: its two-sample polynomial BLEP aliases
at -41 to -53 dB while gliding, where the engine stays under -90 dB, and its events fall on whole samples,
where the engine's fall between.
"""

import ctypes
import shutil
import subprocess
import tempfile
from fractions import Fraction
from pathlib import Path

import numpy as np
from pairing import paired

from glidesmith.program import Program, compile_program
from glidesmith.voice import Voice
from making import make_phrase, make_preset

SAMPLE_RATE = 48_000
TIME_CONSTANT, RISE, FALL = 0.06, 0.004, 0.08
FLAGS = (["-O3"], ["-O3", "-march=native"])


class Event(ctypes.Structure):
    """As plain_voice.c has it."""

    _fields_ = (("sample", ctypes.c_long), ("volts", ctypes.c_double), ("gate", ctypes.c_double))


def make_program(seconds: int) -> Program:
    """Four notes a second over three octaves, one in three overlapping the next.

    Every start between two samples.
    """
    generator = np.random.default_rng(1)
    starts = [Fraction(i, 4) + Fraction(1, 700) for i in range(seconds * 4)]
    lasts = [Fraction(27 if i % 3 == 0 else 22, 100) for i in range(len(starts))]
    rows = [
        (s, s + t, int(n))
        for s, t, n in zip(starts, lasts, generator.integers(45, 81, len(starts)), strict=True)
    ]
    slew = {"law": "rc", "rise": TIME_CONSTANT, "fall": TIME_CONSTANT}
    preset = make_preset(pitch=slew, gain={"law": "linear", "rise": RISE, "fall": FALL})
    return compile_program(preset, make_phrase(*rows), SAMPLE_RATE)


def c_events(program: Program) -> "ctypes.Array[Event]":
    """The program's events as the C loop takes them."""
    volts, gate = program.pitch_changes[0].volts, 0.0
    merged: dict[int, list[float]] = {0: [volts, gate]}
    rows = [(float(c.time), "volts", c.volts) for c in program.pitch_changes]
    rows += [(float(c.time), "gate", c.level) for c in program.gate_changes]
    for time, kind, value in sorted(rows):
        volts, gate = (value, gate) if kind == "volts" else (volts, value)
        merged[round(time * SAMPLE_RATE)] = [volts, gate]
    return (Event * len(merged))(*(Event(n, *row) for n, row in sorted(merged.items())))


def built(compiler: str, flags: list[str], folder: Path) -> ctypes.CDLL:
    """The yardstick, compiled."""
    source = Path(__file__).with_name("plain_voice.c")
    library = folder / f"plain{len(flags)}.so"
    subprocess.run([compiler, *flags, "-shared", "-fPIC", source, "-o", library, "-lm"], check=True)
    return ctypes.CDLL(str(library))


def c_loop(library: ctypes.CDLL, program: Program, out: np.ndarray):
    """A call that runs the yardstick over the program's length."""
    events = c_events(program)
    numbers = [SAMPLE_RATE, 440.0 * 2.0 ** (-9 / 12), TIME_CONSTANT, RISE, FALL, 10 ** (-12 / 20)]
    arguments = [events, ctypes.c_size_t(len(events)), *map(ctypes.c_double, numbers)]
    place = out.ctypes.data_as(ctypes.POINTER(ctypes.c_float))
    return lambda: library.plain_voice(*arguments, place, ctypes.c_size_t(out.size))


def report(runs: int, scale: float) -> list[str]:
    """The ratio for each set of flags, a line each."""
    compiler = shutil.which("gcc") or shutil.which("cc")
    if compiler is None:
        return ["voice: no C compiler here; install Debian's gcc to compare"]
    version = subprocess.run(
        [compiler, "--version"], capture_output=True, text=True, check=True
    ).stdout.splitlines()[0]
    program = make_program(max(int(60 * scale), 2))
    out, plain = np.empty(program.length, np.float32), np.empty(program.length, np.float32)
    voice = Voice(program)

    def play() -> None:
        voice.reset()
        voice.play(out)

    lines = []
    with tempfile.TemporaryDirectory() as folder:
        for flags in FLAGS:
            loop = c_loop(built(compiler, flags, Path(folder)), program, plain)
            pair = paired(play, loop, runs)
            what = f"voice / C loop ({version}, {' '.join(flags)})"
            lines.append(pair.line(what, "at most 2.0, aim 1.0", program.length * 1e-9, "ns a sample"))
    likeness = np.corrcoef(np.abs(out), np.abs(plain))[0, 1]
    lines.append(
        f"  (the two outputs' magnitudes correlate by {likeness:.3f}: the same phrase, not the same sound)"
    )
    return lines
