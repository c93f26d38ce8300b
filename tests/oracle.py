"""The oscillator's oracle: sums of sines in double precision over the exact phase, and a meter for the rest.

Nothing here uses the engine. The series are written as in a handbook, in cosines and sines (Bronshtein and
Semendyayev, table of Fourier expansions; from memory), and `test_oracle_series` in test_wavetable.py holds
them against integrals of the naive waves. Phases are whole numbers, 2**62 to the cycle.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

CYCLE = 1 << 62
HIGHEST_SHARE = 0.45
LEVELS_PER_OCTAVE, COARSE_FROM, COARSE_STEP = 48, 336, 4
FRAME_S, HOP_S = 0.040, 0.004
BAND_HZ = (20.0, 15_000.0)
_KAISER_BETA = 20.0
_RESTART = 64

Floats = NDArray[np.float64]
Phases = NDArray[np.int64]
Series = tuple[Floats, Floats]
"""Amplitudes of the cosines and of the sines of partials 1, 2, 3 and so on."""


def naive_wave(wave: str, width: float, p: Floats) -> Floats:
    """The wave before it is band-limited, at phases p from 0 to 1."""
    if wave == "sine":
        return np.sin(2.0 * np.pi * p)
    if wave == "triangle":
        return 1.0 - 4.0 * np.abs((p + 0.25) % 1.0 - 0.5)
    if wave == "saw":
        return 2.0 * p - 1.0
    return np.where(p < width, 1.0, -1.0) - (2.0 * width - 1.0)


def fourier_series(wave: str, width: float, count: int) -> Series:
    """Fourier series of `naive_wave`: (cosines, sines), each (count,)."""
    k = np.arange(1, count + 1).astype(np.float64)
    zero = np.zeros(count)
    if wave == "sine":
        return zero, np.where(k == 1, 1.0, 0.0)
    if wave == "triangle":
        return zero, 8.0 / np.pi**2 * np.sin(0.5 * np.pi * k).round() / k**2
    if wave == "saw":
        return zero, -2.0 / (np.pi * k)
    turn = 2.0 * np.pi * (k * width % 1.0)
    return 2.0 * np.sin(turn) / (np.pi * k), 2.0 * (1.0 - np.cos(turn)) / (np.pi * k)


def cycle_series(cycle: Floats, count: int) -> Series:
    """The trigonometric polynomial through a cycle's samples, by the discrete transform's defining sums."""
    n = cycle.size
    samples = cycle - cycle.mean()
    samples = samples / np.abs(samples).max()
    cosines, sines = np.zeros(count), np.zeros(count)
    for k in range(1, min(count, n // 2) + 1):
        angle = 2.0 * np.pi * (k * np.arange(n) % n) / n
        share = 1.0 / n if 2 * k == n else 2.0 / n
        cosines[k - 1] = share * np.sum(samples * np.cos(angle))
        sines[k - 1] = share * np.sum(samples * np.sin(angle)) if 2 * k != n else 0.0
    return cosines, sines


def angle_of(phases: Phases, k: int = 1) -> Floats:
    """The angle of partial k in radians: its phase is reduced to one cycle in whole numbers first."""
    with np.errstate(over="ignore"):
        partial_phases = (phases * np.int64(k)) & np.int64(CYCLE - 1)
    return partial_phases.astype(np.float64) * (2.0 * np.pi / CYCLE)


def sum_of_sines(
    phases: Phases, series: Series, gain: Callable[[int], Floats | float] = lambda k: 1.0
) -> Floats:
    """Σ gain(k) · (cosines[k] cos kφ + sines[k] sin kφ), each angle anew from the whole-number phase every 64
    partials.
    """
    total = np.zeros(phases.size)
    cosines, sines = series
    turn = pointer = np.exp(1j * angle_of(phases))
    for k in range(1, cosines.size + 1):
        pointer = np.exp(1j * angle_of(phases, k)) if k % _RESTART == 1 else pointer * turn
        if cosines[k - 1] == 0.0 and sines[k - 1] == 0.0:
            continue
        amplitude = gain(k)
        if np.any(amplitude):
            total += amplitude * (cosines[k - 1] * pointer.real + sines[k - 1] * pointer.imag)
    return total


def level_gain(heights: Floats) -> Callable[[int], Floats]:
    """The gain of partial k where the fundamental lies at the given heights.

    The engine's documented law, written from the partial's side. At whole depths of the fundamental, in 48ths
    of an octave under 0.45 of the rate, partial k has the gain 1 - (6x³ - x¹⁸)/5, where x goes from 0 to 1 as
    the partial itself goes from 18 of them to 1 under 0.45 of the rate. Deeper than seven octaves that holds
    at every fourth depth, and the partial goes from 15 to 4. Straight lines join these gains.
    """
    depth = np.maximum(-heights * LEVELS_PER_OCTAVE, 0.0)
    step = np.where(depth < COARSE_FROM, 1.0, COARSE_STEP)
    above = np.floor(depth / step) * step

    def at(k: int, whole_depth: Floats) -> Floats:
        fine = whole_depth <= COARSE_FROM
        own_depth = whole_depth - LEVELS_PER_OCTAVE * np.log2(k)
        x = np.clip(np.where(fine, (18.0 - own_depth) / 17.0, (15.0 - own_depth) / 11.0), 0.0, 1.0)
        return np.asarray(1.0 - (6.0 * x**3 - x**18) / 5.0)

    def gain(k: int) -> Floats:
        upper, lower = at(k, above), at(k, above + step)
        return upper + (depth - above) / step * (lower - upper)

    return gain


@dataclass(frozen=True)
class Glide:
    """A pitch contour: whole-number phases and increments, frequency in Hz and height, each (n,)."""

    phases: Phases
    increments: Phases
    frequency_hz: Floats
    heights: Floats
    sample_rate: int


def contour(octaves: Floats, base_hz: float, sample_rate: int, cycles: Floats) -> Glide:
    """A glide from its octaves over ``base_hz`` and its phase in cycles, (n + 1,) for one past the end."""
    whole = np.floor(cycles)
    phases = (whole.astype(np.int64) % 4 << 62) + np.round((cycles - whole) * CYCLE).astype(np.int64)
    increments = np.diff(phases) & np.int64(CYCLE - 1)
    frequency = base_hz * 2.0**octaves
    heights = np.log2(base_hz / (HIGHEST_SHARE * sample_rate)) + octaves
    return Glide(phases[:-1] & np.int64(CYCLE - 1), increments, frequency, heights, sample_rate)


def octave_glide(
    start_hz: float, octaves: float, seconds: float, sample_rate: int, held_s: float = 0.05
) -> Glide:
    """Hold ``start_hz``, glide evenly in pitch, hold; the phase is the exact integral of the frequency."""
    t = np.arange(int((seconds + 2.0 * held_s) * sample_rate) + 1) / sample_rate - held_s
    inside = np.clip(t, 0.0, seconds)
    rate = octaves * np.log(2.0) / seconds
    end_hz = start_hz * 2.0**octaves
    cycles = start_hz * (np.minimum(t, 0.0) + held_s)
    cycles += start_hz * np.expm1(rate * inside) / rate if octaves else start_hz * inside
    cycles += end_hz * np.maximum(t - seconds, 0.0)
    return contour(inside[:-1] * octaves / seconds, start_hz, sample_rate, cycles)


def _eased_s(t_s: Floats, ease_s: float) -> Floats:
    """Integral of a ramp from 0 to 1 over ``ease_s``, whose slope is a squared Hann window: no corners."""
    share = np.clip(t_s / ease_s, 0.0, 1.0)
    turn = 2.0 * np.pi * share
    ripple = (8.0 * (np.cos(turn) - 1.0) - 0.5 * (np.cos(2.0 * turn) - 1.0)) / (24.0 * np.pi**2)
    eased: Floats = ease_s * (0.5 * share**2 + ripple) + np.maximum(t_s - ease_s, 0.0)
    return eased


def eased_glide(
    start_hz: float, octaves: float, seconds: float, sample_rate: int, ease_s: float = 0.02
) -> Glide:
    """As `octave_glide`, but it takes ``ease_s`` to get to its slope of octaves / seconds, and to stop.

    The phase is integrated by eight-point Gauss-Legendre within every sample.
    """
    held_s = 0.05
    length = int((seconds + ease_s + 2.0 * held_s) * sample_rate)

    def track(t_s: Floats) -> Floats:
        risen = _eased_s(t_s - held_s, ease_s) - _eased_s(t_s - held_s - seconds, ease_s)
        return risen * (octaves / seconds)

    nodes, weights = np.polynomial.legendre.leggauss(8)
    inside_s = (np.arange(length)[:, None] + 0.5 + 0.5 * nodes) / sample_rate
    cycles = start_hz / (2.0 * sample_rate) * (2.0 ** track(inside_s) @ weights)
    return contour(
        track(np.arange(length) / sample_rate),
        start_hz,
        sample_rate,
        np.concatenate([[0.0], np.cumsum(cycles)]),
    )


def audible_partials(glide: Glide, series: Series, edge_share: float = 0.97) -> Floats:
    """The tone's partials at constant amplitude, up to 0.97 of where the engine's end (19.2 kHz at 44.1 kHz).

    There they go in 12 ms, so that the meter itself adds nothing under 15 kHz.
    """
    edge = edge_share * HIGHEST_SHARE * glide.sample_rate
    count = int(edge / glide.frequency_hz.min())
    half = round(0.006 * glide.sample_rate)
    shape = np.hanning(2 * half + 3)[1:-1] ** 2

    def gain(k: int) -> Floats | float:
        under = k * glide.frequency_hz < edge
        if under.all() or not under.any():
            return float(under[0])
        return np.convolve(np.pad(under.astype(float), half, mode="edge"), shape / shape.sum(), "valid")

    return sum_of_sines(glide.phases, (series[0][:count], series[1][:count]), gain)


def every_partial(glide: Glide, series: Series) -> Floats:
    """The tone with the engine's documented gains: all that is to be heard, up to 0.45 of the rate."""
    count = int(HIGHEST_SHARE * glide.sample_rate / glide.frequency_hz.min()) + 1
    return sum_of_sines(glide.phases, (series[0][:count], series[1][:count]), level_gain(glide.heights))


def _frames(signal: Floats, sample_rate: int) -> Floats:
    length, hop = round(FRAME_S * sample_rate), round(HOP_S * sample_rate)
    window = np.kaiser(length, _KAISER_BETA)
    return np.lib.stride_tricks.sliding_window_view(signal, length)[::hop] * window


def leftover_db(signal: NDArray[np.floating], tone: Floats, sample_rate: int) -> float:
    """What is left without the tone, from 20 Hz to 15 kHz, against the signal, in the worst 40 ms frame.

    Frames every 4 ms, under a Kaiser window whose side lobes lie under -150 dB.
    """
    signal = np.asarray(signal, dtype=np.float64)
    rest = _frames(signal - tone, sample_rate)
    size = 1 << (rest.shape[1] - 1).bit_length()
    power = np.abs(np.fft.rfft(rest, size)) ** 2
    frequency = np.fft.rfftfreq(size, 1.0 / sample_rate)
    inside = (frequency >= BAND_HZ[0]) & (frequency <= BAND_HZ[1])
    found = 2.0 * power[:, inside].sum(axis=1) / size
    whole = (_frames(signal, sample_rate) ** 2).sum(axis=1)
    return float(10.0 * np.log10((found / whole).max() + 1e-30))


def inharmonic_db(signal: NDArray[np.floating], glide: Glide, series: Series) -> float:
    """The meter: energy that belongs to no harmonic, 20 Hz to 15 kHz, against the signal, worst 40 ms frame.

    Every partial is subtracted at its exact phase and its constant amplitude from the Fourier series, so
    that a harmonic of the wrong level counts too, and so do the sidebands of a partial that the engine
    fades. Where a glide starts or stops suddenly, the partials that the meter leaves out (see
    `audible_partials`) add sidebands of their own frequency's corner: `test_meter_has_a_floor_far_below`
    says how little.
    """
    return leftover_db(signal, audible_partials(glide, series), glide.sample_rate)
