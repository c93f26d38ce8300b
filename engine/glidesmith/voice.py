"""The voice: the whole chain from two lists of events to samples, in passes over short chunks.

    pitch events ─► glide ─► [steps] ─► phase ─► wave ──┐
    gate events ─► [envelope] ─► gain slew ─► amplifier ─┴─► level, ceiling ─► out

Live and offline run this and nothing else. What is carried from chunk to chunk is the `VOICE` record; each
value is computed from the event before it or summed in whole numbers, so that where a chunk ends leaves no
trace in the samples.
"""

import math
from collections import namedtuple
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.amplifier import amplifier_control, fill_gain
from glidesmith.compiled import inlined, kernel, vector_kernel
from glidesmith.envelope import WALK, fill_control, walk_reset
from glidesmith.oscillator import CYCLE, HIGHEST_SHARE, advance_phase, oscillate
from glidesmith.phase import (
    cycles_per_sample,
    glide_cycles,
    phase_units,
    smooth_increments,
    stepped_volts,
)
from glidesmith.slew import GLIDE, fill_glide, glide_begin, glide_hold, glide_time, glide_volts

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from glidesmith.program import Program

CHUNK = 512
"""Samples a pass. Short enough for the scratch arrays to stay in the processor's first cache."""

QUIET = 10.0 ** (-90.0 / 20.0)
"""A render is over when the gain stays under this: -90 dB."""

_NEVER = 1 << 62
_PHASE_MASK = CYCLE - 1
_RADIANS_PER_UNIT = 2.0 * np.pi / CYCLE
_OCTAVES_TO_TOP = -math.log2(HIGHEST_SHARE)
_DRONE_FADE_S = 0.02
_LARGEST_FLOAT32 = 3.4028234663852886e38

VOICE = np.dtype(
    [
        ("sample", np.int64),
        ("sounded", np.int64),
        ("phase", np.int64),
        ("pitch_event", np.int64),
        ("pitch_sample", np.int64),
        ("pitch_fraction", np.float64),
        ("pitch", GLIDE),
        ("gate_event", np.int64),
        ("gain_sample", np.int64),
        ("gain_fraction", np.float64),
        ("gain", GLIDE),
        ("walk", WALK),
        ("clipped", np.int64),
        ("broken", np.int64),
        ("peak", np.float64),
    ],
    align=True,
)
"""All that a voice remembers: the sample it is at, its phase, the glide in hand and since when, and what it
had to clip.

``sounded`` counts the samples made; ``sample``, the place in the program, goes back where a loop does.
``broken`` counts samples that were not finite and were silenced; it stays 0.
"""

Scratch = namedtuple(
    "Scratch", "volts rates cycles bends increments phases heights control unslewed gain wave"
)
Traces = namedtuple("Traces", "pitch_volts gain_control gain")
Events = namedtuple("Events", "pitch gate")
Tables = namedtuple("Tables", "levels cells")


@inlined
def elapsed_s(settings: Any, since: int, fraction: float, sample: int, beyond: float) -> float:
    """Seconds from an anchor (``since`` + ``fraction``) to ``sample`` + ``beyond``."""
    return (float(sample - since) + (beyond - fraction)) * settings.step_s


@inlined
def next_sample(events: Any, index: int) -> int:
    """The sample of event ``index``, or one that never comes."""
    return events[index].sample if index < events.size else _NEVER


@kernel
def take_pitch_event(settings: Any, voice: Any, event: Any) -> None:
    """Let the pitch begin its next glide, or jump, from where it is at the event."""
    glide = voice.pitch
    if not event.jump and event.volts == glide.target:
        return
    if event.jump:
        glide_hold(glide, event.volts)
    else:
        elapsed = elapsed_s(settings, voice.pitch_sample, voice.pitch_fraction, event.sample, event.fraction)
        glide_begin(glide, settings.pitch, glide_volts(glide, elapsed), event.volts)
    voice.pitch_sample = event.sample
    voice.pitch_fraction = event.fraction


@kernel
def take_gate_event(settings: Any, voice: Any, event: Any) -> None:
    """The same for the gain, without an envelope: the gate's level is the slew's target."""
    glide = voice.gain
    if event.level == glide.target:
        return
    elapsed = elapsed_s(settings, voice.gain_sample, voice.gain_fraction, event.sample, event.fraction)
    glide_begin(glide, settings.gain, glide_volts(glide, elapsed), event.level)
    voice.gain_sample = event.sample
    voice.gain_fraction = event.fraction


@kernel
def _split_sample(settings: Any, voice: Any, events: Any, sample: int) -> float:
    """Cycles in one sample in which events happen: each stretch between them on its own."""
    cycles = 0.0
    begin = 0.0
    while True:
        end = 1.0
        more = next_sample(events, voice.pitch_event) == sample
        if more:
            end = events[voice.pitch_event].fraction
        since, fraction = voice.pitch_sample, voice.pitch_fraction
        cycles += glide_cycles(
            settings,
            voice.pitch,
            elapsed_s(settings, since, fraction, sample, begin),
            elapsed_s(settings, since, fraction, sample, end),
        )
        if not more:
            return cycles
        take_pitch_event(settings, voice, events[voice.pitch_event])
        voice.pitch_event += 1
        begin = end


@inlined
def _gliding_samples(settings: Any, glide: Any, since: int, fraction: float, sample: int, most: int) -> int:
    """How many of the next ``most`` instants, from ``sample`` on, lie before the glide's end.

    The division only guesses; each instant's own elapsed time decides, so that the answer for an instant is
    the same from wherever it is asked.
    """
    left = glide.lasts / settings.step_s - (float(sample - since) - fraction)
    count = int(min(max(np.ceil(left), 0.0), float(most)))
    while count > 0 and elapsed_s(settings, since, fraction, sample + count - 1, 0.0) >= glide.lasts:
        count -= 1
    while count < most and elapsed_s(settings, since, fraction, sample + count, 0.0) < glide.lasts:
        count += 1
    return count


@kernel
def _hold_pitch(settings: Any, voice: Any, scratch: Any, at: int, count: int) -> None:
    """``count`` samples at the glide's target."""
    volts = voice.pitch.target
    increment = phase_units(cycles_per_sample(settings, stepped_volts(settings, volts)))
    scratch.volts[at : at + count] = volts
    scratch.increments[at : at + count] = increment


@inlined
def _volts_at(settings: Any, voice: Any, sample: int) -> float:
    elapsed = elapsed_s(settings, voice.pitch_sample, voice.pitch_fraction, sample, 0.0)
    return glide_volts(voice.pitch, elapsed)


@kernel
def _single_sample(settings: Any, voice: Any, sample: int) -> int:
    """The increment of one sample inside one glide, by quadrature or by its steps."""
    begin = elapsed_s(settings, voice.pitch_sample, voice.pitch_fraction, sample, 0.0)
    end = elapsed_s(settings, voice.pitch_sample, voice.pitch_fraction, sample, 1.0)
    return phase_units(glide_cycles(settings, voice.pitch, begin, end))


@kernel
def _step_pitch(settings: Any, voice: Any, scratch: Any, at: int, sample: int, count: int) -> None:
    """A glissando's increments.

    A sample that stays on one step is plain, one that crosses to another is split.
    """
    for i in range(at, at + count):
        here = stepped_volts(settings, scratch.volts[i])
        if here == stepped_volts(settings, scratch.volts[i + 1]):
            scratch.increments[i] = phase_units(cycles_per_sample(settings, here))
        else:
            scratch.increments[i] = _single_sample(settings, voice, sample + i - at)


@kernel
def _glide_pitch(settings: Any, voice: Any, scratch: Any, at: int, sample: int, count: int) -> None:
    """``count`` samples inside a glide, all of whose instants and the next one lie before its end."""
    volts = scratch.volts[at : at + count + 1]
    rates = scratch.rates[: count + 1]
    fill_glide(voice.pitch, sample - voice.pitch_sample, voice.pitch_fraction, settings.step_s, volts, rates)
    if settings.steps_per_octave > 0.0:
        _step_pitch(settings, voice, scratch, at, sample, count)
        return
    increments = scratch.increments[at : at + count]
    rough = smooth_increments(
        settings, volts, rates, scratch.cycles[: count + 1], scratch.bends[: count + 1], increments
    )
    if rough:
        for i in range(count):
            if increments[i] < 0:
                increments[i] = _single_sample(settings, voice, sample + i)


@kernel
def _follow_pitch(settings: Any, voice: Any, events: Any, scratch: Any, count: int) -> None:
    """Fill pitch voltages (before steps) and phase increments for the next ``count`` samples."""
    at: Any = np.int64(0)  # as a literal it would have every callee compiled for 0 too
    while at < count:
        sample = voice.sample + at
        glide = voice.pitch
        if next_sample(events, voice.pitch_event) == sample:
            scratch.volts[at] = _volts_at(settings, voice, sample)
            scratch.increments[at] = phase_units(_split_sample(settings, voice, events, sample))
            at += 1
            continue
        most = min(count - at, next_sample(events, voice.pitch_event) - sample)
        inside = _gliding_samples(settings, glide, voice.pitch_sample, voice.pitch_fraction, sample, most + 1)
        if inside > 1:
            _glide_pitch(settings, voice, scratch, at, sample, inside - 1)
            at += inside - 1
        elif inside == 1:
            scratch.volts[at] = _volts_at(settings, voice, sample)
            scratch.increments[at] = _single_sample(settings, voice, sample)
            at += 1
        else:
            _hold_pitch(settings, voice, scratch, at, most)
            at += most


@kernel
def _follow_gate(settings: Any, voice: Any, events: Any, scratch: Any, count: int) -> None:
    """Fill the gain control for the next ``count`` samples, without an envelope."""
    at = 0
    control = scratch.control
    while at < count:
        sample = voice.sample + at
        while next_sample(events, voice.gate_event) < sample:
            take_gate_event(settings, voice, events[voice.gate_event])
            voice.gate_event += 1
        glide = voice.gain
        most = min(count - at, next_sample(events, voice.gate_event) + 1 - sample)
        inside = _gliding_samples(settings, glide, voice.gain_sample, voice.gain_fraction, sample, most)
        fill_glide(
            glide,
            sample - voice.gain_sample,
            voice.gain_fraction,
            settings.step_s,
            control[at : at + inside],
            scratch.rates[:inside],
        )
        control[at + inside : at + most] = glide.target
        at += most


@vector_kernel
def _fill_heights(settings: Any, volts: Any, heights: Any) -> None:
    """Octaves of each sample's frequency above 0.45 of the sample rate, and the pitch as stepped."""
    per_volt = settings.octaves_per_volt
    above = settings.octaves_at_zero + _OCTAVES_TO_TOP
    steps = settings.steps_per_octave
    if steps > 0.0:
        for i in range(heights.size):
            volts[i] = np.floor(volts[i] * steps + 0.5) / steps
    for i in range(heights.size):
        heights[i] = volts[i] * per_volt + above


@kernel
def _mix_drone(settings: Any, sounded: int, left: int, out: Any) -> None:
    """Add the drone, faded over its first and last 20 ms; ``left`` samples of the program are to come."""
    fade = max(_DRONE_FADE_S / settings.step_s, 1.0)
    increment = settings.drone_increment
    for i in range(out.size):
        n = sounded + i
        edge = min(min(float(n), float(left - 1 - i)) / fade, 1.0)
        phase = (n * increment) & _PHASE_MASK
        out[i] += np.float32(settings.drone_level * max(edge, 0.0) * np.sin(phase * _RADIANS_PER_UNIT))


@vector_kernel
def _amplify(level: float, wave: Any, gain: Any, out: Any) -> None:
    for i in range(out.size):
        out[i] = np.float32(wave[i] * (gain[i] * level) + 0.0)  # + 0 so that silence is never -0


@vector_kernel
def _largest(out: Any) -> float:
    """The largest magnitude in ``out``; not a number where a sample is not.

    Magnitudes of IEEE 754 numbers are in the order of their bits, and not-a-number comes after infinity;
    whole numbers are compared in whole registers where floating-point ones, for the sake of not-a-number,
    would not be.
    """
    largest = np.int32(0)
    for i in range(out.size):
        largest = max(largest, np.int32(np.float32(out[i]).view(np.int32) & np.int32(0x7FFFFFFF)))
    return float(np.int32(largest).view(np.float32))


@kernel
def _limit(voice: Any, out: Any) -> None:
    """The ceiling of 0 dBFS; what has to be clipped or was not finite is counted."""
    largest = _largest(out)
    if largest <= 1.0:
        voice.peak = max(voice.peak, largest)
        return
    for i in range(out.size):
        size = float(abs(out[i]))
        if not size <= _LARGEST_FLOAT32:
            out[i] = np.float32(0.0)
            voice.broken += 1
        elif size > 1.0:
            out[i] = np.float32(1.0) if out[i] > 0.0 else np.float32(-1.0)
            voice.clipped += 1
            voice.peak = max(voice.peak, size)


@kernel
def play_chunk(settings: Any, voice: Any, events: Any, tables: Any, scratch: Any, out: Any) -> None:
    """Make the next ``out.size`` samples, at most `CHUNK`; the passes leave their results in ``scratch``."""
    count = out.size
    _follow_pitch(settings, voice, events.pitch, scratch, count)
    control, gain = scratch.control[:count], scratch.gain[:count]
    if settings.enveloped:
        fill_control(
            voice.walk,
            settings.gain,
            settings.envelope,
            events.gate,
            settings.sample_rate,
            voice.sample,
            control,
            scratch.unslewed[:count],
        )
    else:
        _follow_gate(settings, voice, events.gate, scratch, count)
    fill_gain(settings.amplifier, control, gain)
    volts, heights = scratch.volts[:count], scratch.heights[:count]
    _fill_heights(settings, volts, heights)
    phases, wave = scratch.phases[:count], scratch.wave[:count]
    voice.phase = advance_phase(scratch.increments[:count], voice.phase, phases)
    oscillate(phases, heights, tables.levels, tables.cells, wave)
    _amplify(settings.level, wave, gain, out)
    if settings.drone_level > 0.0:
        _mix_drone(settings, voice.sounded, settings.length - voice.sample, out)
    _limit(voice, out)
    voice.sample += count
    voice.sounded += count


@vector_kernel
def _copy(source: Any, out: Any) -> None:
    for i in range(out.size):
        out[i] = source[i]


@kernel
def play(settings: Any, voice: Any, events: Any, tables: Any, scratch: Any, out: Any, traces: Any) -> None:
    """Make the next ``out.size`` samples, float32; fill the traces (float64) that are as long as ``out``.

    Runs on the audio thread: no allocation, no lock, no Python, and a bounded time a sample.
    """
    settings, voice = settings[0], voice[0]
    for first in range(0, out.size, CHUNK):
        end = min(first + CHUNK, out.size)
        play_chunk(settings, voice, events, tables, scratch, out[first:end])
        if traces.pitch_volts.size:
            _copy(scratch.volts, traces.pitch_volts[first:end])
            _copy(scratch.control, traces.gain_control[first:end])
            _copy(scratch.gain, traces.gain[first:end])


@kernel
def reset(settings: Any, voice: Any) -> None:
    """Back to the first sample: the pitch on the first note, the gate closed."""
    voice.sample = 0
    voice.sounded = 0
    voice.phase = 0
    voice.pitch_event = 0
    voice.pitch_sample = 0
    voice.pitch_fraction = 0.0
    glide_hold(voice.pitch, settings.first_volts)
    voice.gate_event = 0
    voice.gain_sample = 0
    voice.gain_fraction = 0.0
    glide_hold(voice.gain, 0.0)
    walk_reset(voice.walk)
    voice.clipped = 0
    voice.broken = 0
    voice.peak = 0.0


@kernel
def voice_reset(settings: Any, voice: Any) -> None:
    """As `reset`, for arrays of one record each."""
    reset(settings[0], voice[0])


@kernel
def _quiet_by_walk(settings: Any, voice: Any, gates: Any, latest: int, control: Any, unslewed: Any) -> int:
    """The first sample after the last gate at which the enveloped gain is under `QUIET` and falls."""
    quiet = amplifier_control(settings.amplifier, QUIET)
    first = gates[gates.size - 1].sample + 1
    while first <= latest:
        fill_control(
            voice.walk,
            settings.gain,
            settings.envelope,
            gates,
            settings.sample_rate,
            first,
            control,
            unslewed,
        )
        for i in range(control.size):
            if control[i] < quiet and unslewed[i] <= control[i]:
                return int(first + i)
        first += control.size
    return latest + 1


@kernel
def _quiet_sample(settings: Any, voice: Any, gates: Any, latest: int, control: Any, unslewed: Any) -> int:
    settings, voice = settings[0], voice[0]
    if settings.enveloped:
        return _quiet_by_walk(settings, voice, gates, latest, control, unslewed)
    for index in range(gates.size):
        take_gate_event(settings, voice, gates[index])
    quiet = amplifier_control(settings.amplifier, QUIET)
    glide = voice.gain
    after = glide_quiet_time(glide, quiet) / settings.step_s
    return int(min(float(voice.gain_sample) + voice.gain_fraction + after, float(latest))) + 1


@inlined
def glide_quiet_time(glide: Any, quiet: float) -> float:
    """Seconds until a glide towards 0 is under ``quiet``."""
    from_above = glide.origin > quiet
    return glide_time(glide, quiet) if from_above else 0.0


def quiet_sample(settings: "NDArray[Any]", gates: "NDArray[Any]", latest: int) -> int:
    """The number of samples after which the gain stays under -90 dB; more than ``latest`` if it is beyond."""
    voice = np.zeros(1, VOICE)
    voice_reset(settings, voice)
    levels = np.empty((2, 4096))
    return int(_quiet_sample(settings, voice, gates, latest, levels[0], levels[1]))


def make_scratch() -> Scratch:
    """The arrays that the passes of one voice share, allocated once."""
    size = CHUNK + 1
    kinds = {"increments": np.int64, "phases": np.int64, "wave": np.float32}
    return Scratch(*(np.zeros(size, kinds.get(name, np.float64)) for name in Scratch._fields))


class Voice:
    """One program being played, a block at a time."""

    def __init__(self, program: "Program") -> None:
        self._settings = program.settings
        self._events = Events(program.pitch_events, program.gate_events)
        tables = program.wavetables
        self._tables = Tables(tables.levels, tables.cells)
        self._scratch = make_scratch()
        self._state = np.zeros(1, VOICE)
        self.reset()

    def reset(self) -> None:
        """Back to the first sample."""
        voice_reset(self._settings, self._state)

    @property
    def sample(self) -> int:
        """The next sample to be made."""
        return int(self._state["sample"][0])

    @property
    def clipped(self) -> int:
        """How many samples had to be held at 0 dBFS so far."""
        return int(self._state["clipped"][0])

    @property
    def peak(self) -> float:
        """The largest magnitude so far, before the ceiling."""
        return float(self._state["peak"][0])

    def play(self, out: "NDArray[np.float32]", traces: Traces | None = None) -> None:
        """Fill ``out`` (n,) with the next n samples, and the arrays (n,) of ``traces`` with the controls
        behind them.
        """
        if traces is None:
            traces = _NO_TRACES
        play(self._settings, self._state, self._events, self._tables, self._scratch, out, traces)


_NO_TRACES = Traces(np.zeros(0), np.zeros(0), np.zeros(0))
