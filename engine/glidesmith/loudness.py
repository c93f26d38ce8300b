"""Loudness and true peak by Recommendation ITU-R BS.1770-5 (2023).

Loudness (Annex 1): each channel is K-weighted (a high shelf, then a high-pass), squared and averaged over
blocks of 400 ms that overlap by three quarters; the channels' means are added with their weights, and
L = −0.691 + 10 log10(sum). The integrated loudness averages the blocks that are louder than −70 LUFS and less
than 10 LU below the average of those. Momentary loudness looks back over 400 ms, short-term loudness over
3 s, both without a gate (EBU Tech 3341, section 2; from memory); here they are renewed every 10 ms.

True peak (Annex 2): the largest magnitude of the signal interpolated at least four times, and to 192 kHz at
least. From 48 kHz on the interpolator is the recommendation's own; below, where more than four times are
needed, it is a least-squares design that is closer to the ideal. The signal's own samples count as well,
since the curve passes through them.

The filters run sample by sample, so the borders of the blocks that are handed in change no bit. Samples and
filter memory too small to matter are set to zero, so that silence never turns into denormal numbers, which
processors handle slowly.
"""

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from glidesmith.compiled import inlined, kernel, vector_kernel
from glidesmith.elementary import fma
from glidesmith.errors import SettingError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

LOWEST_RATE_HZ, HIGHEST_RATE_HZ = 8_000, 384_000
LARGEST_SAMPLE = 1e15
"""Samples beyond it (300 dB over full scale) are refused: single precision could overflow between samples."""

ABSOLUTE_GATE_LUFS, RELATIVE_GATE_LU = -70.0, -10.0
CHANNEL_WEIGHTS = (1.0, 1.0, 1.0, 1.41, 1.41)
"""Left, right, centre, left surround, right surround (BS.1770, Annex 1, table 3)."""

SHELF_48 = ((1.53512485958697, -2.69169618940638, 1.19839281085285), (-1.69065929318241, 0.73248077421585))
"""The pre-filter at 48 kHz: b0, b1, b2 and a1, a2 with a0 = 1 (BS.1770, Annex 1, table 1)."""

HIGH_PASS_48 = ((1.0, -2.0, 1.0), (-1.99004745483398, 0.99007225036621))
"""The RLB filter at 48 kHz (BS.1770, Annex 1, table 2)."""

INTERPOLATOR = (
    (14, 90, -161, 272, -487, 1125, 7964, -838, 390, -218, 122, -68),
    (-239, 240, -424, 730, -1364, 3810, 6388, -1641, 832, -477, 271, -155),
)
"""Phases 0 and 1 of the four, in 8192nds; 2 and 3 are their mirror images (BS.1770, Annex 2; from memory)."""

_STEPS_A_SECOND, _STEPS_A_GATING_HOP, _STEPS_A_BLOCK, _STEPS_SHORT_TERM = 100, 10, 40, 300
_PIECE, _STRETCH, _TAPS = 512, 96, 16
_HISTORY = _TAPS - 1
# Memory is looked at every 10 ms, in which the shelf alone decays by 1e-32: its square is never denormal.
_QUIET_SAMPLE, _QUIET_MEMORY = np.float32(1e-24), 1e-30
_MAGNITUDE = np.int32(0x7FFFFFFF)

METER = np.dtype(
    [
        ("sample_rate", np.int64),
        ("frames", np.int64),
        ("steps", np.int64),
        ("step_ends", np.int64),
        ("shelf", np.float64, (4,)),
        ("high_pass", np.float64, (2,)),
        ("sample_peak", np.float32),
        ("true_peak", np.float32),
        ("interpolator_gain", np.float32),
    ],
    align=True,
)
"""A meter's settings and counters: frames taken, whole steps of 10 ms, and the frame at which the next ends.

``shelf``: b1/b0, b2/b0, a1, a2; ``high_pass``: a1, a2. ``interpolator_gain``: the largest sum of a phase's
taps' magnitudes, which bounds what lies between samples.
"""


class MeterArrays(NamedTuple):
    """What a meter remembers beside its record; the caller owns it, nothing is allocated while metering.

    Shapes: taps (pairs, 2, 8); windows (channels, 15 + 512); lanes (96,); weights and sums (channels,);
    memory (channels, 4); squares (steps,), a ring of the weighted sums of squares of the steps of 10 ms. The
    weights hold the filters' constant factors too.
    """

    taps: "NDArray[np.float32]"
    windows: "NDArray[np.float32]"
    lanes: "NDArray[np.float32]"
    weights: "NDArray[np.float64]"
    memory: "NDArray[np.float64]"
    sums: "NDArray[np.float64]"
    squares: "NDArray[np.float64]"


@dataclass(frozen=True, slots=True)
class Loudness:
    """What was measured; silence is −inf.

    ``gated`` is False for less than one block of 400 ms: ``integrated_lufs`` is then that of all there is,
    without gates. The largest momentary and short-term loudness are None before 400 ms and 3 s are over.
    """

    integrated_lufs: float
    gated: bool
    true_peak_dbtp: float
    sample_peak_dbfs: float
    momentary_max_lufs: float | None
    short_term_max_lufs: float | None


def k_weighting(sample_rate: float) -> "NDArray[np.float64]":
    """The K-weighting at ``sample_rate`` Hz: two rows b0, b1, b2, a0, a1, a2 as in `scipy.signal.sosfilt`.

    At 48 kHz the recommendation's own figures. For other rates each filter is carried back to its analogue
    prototype by the inverse bilinear transform and forth again at the new rate, warped so that its natural
    frequency (1682 Hz of the shelf, 38 Hz of the high-pass) stays where it is. The gain in the high-pass's
    pass band (0.043 dB) is part of the prototype and stays too. Low rates compress the top of the shelf's
    slope: a tone of 997 Hz reads 0.20 LU less at 8 kHz, 0.05 at 16 kHz, under 0.01 from 32 kHz on.
    """
    if sample_rate == 48_000:
        return np.array([[*b, 1.0, *a] for b, a in (SHELF_48, HIGH_PASS_48)])
    return np.array([_carried_over(b, (1.0, *a), sample_rate) for b, a in (SHELF_48, HIGH_PASS_48)])


def _carried_over(b: "Sequence[float]", a: "Sequence[float]", sample_rate: float) -> "NDArray[np.float64]":
    """A 48 kHz filter at another rate.

    With s = (1 − 1/z)/(1 + 1/z), c0 + c1/z + c2/z² becomes (c0 − c1 + c2) s² + 2 (c0 − c2) s + c0 + c1 + c2,
    and tan(π f/rate) is the natural frequency f in units of s.
    """
    warped_48 = math.sqrt((a[0] + a[1] + a[2]) / (a[0] - a[1] + a[2]))
    ratio = warped_48 / math.tan(math.atan(warped_48) * 48_000 / sample_rate)
    rows = []
    for c0, c1, c2 in (b, a):
        square, linear, constant = (c0 - c1 + c2) * ratio**2, 2 * (c0 - c2) * ratio, c0 + c1 + c2
        rows.append((square + linear + constant, 2 * (constant - square), square - linear + constant))
    return np.array([*rows[0], *rows[1]]) / rows[1][0]


def interpolator(sample_rate: int) -> "NDArray[np.float64]":
    """The taps that find the values between samples, shape (phases, 16), for a signal at ``sample_rate`` Hz.

    From 48 kHz on BS.1770's four phases of 12 taps, with two zeros at either end. Below, the phases k/n with
    n = ⌈192000/rate⌉ and 0 < k < n, each the least-squares fit to a delay over the lower 88 % of the band.
    """
    times = max(4, math.ceil(192_000 / sample_rate))
    if times == 4:
        first, second = (np.array(row) / 8192 for row in INTERPOLATOR)
        return np.pad([first, second, second[::-1], first[::-1]], ((0, 0), (2, 2)))
    band, place = 0.88, np.arange(_TAPS)
    normal = np.sinc(band * (place[:, None] - place))
    wanted = [np.sinc(band * (place - (_TAPS / 2 - k / times))) for k in range(1, times)]
    # Rounded, so that the last bits of a solver's arithmetic don't matter.
    return np.round(np.linalg.solve(normal, np.transpose(wanted)).T * 2**20) / 2**20


def _mirrored_pairs(phases: "NDArray[np.float64]") -> "NDArray[np.float32]":
    """Even and odd halves of the phases' taps, (pairs, 2, 8): each pair of mirror images from its first half.

    With p and m the sums and differences of samples equally far from the middle, the two phases give
    Σ even p ± Σ odd m, of which the larger magnitude is |Σ even p| + |Σ odd m|.
    """
    first = phases[: (len(phases) + 1) // 2]
    halves = np.stack([first + first[:, ::-1], first - first[:, ::-1]], axis=1)[:, :, : _TAPS // 2] / 2
    return np.pad(halves, ((0, len(halves) % 2), (0, 0), (0, 0))).astype(np.float32)


@vector_kernel
def _largest_bits(samples: Any) -> Any:
    """The largest magnitude, as the bits of a float32, which are in the order of the magnitudes.

    More than those of infinity mean that there is something that is no number.
    """
    largest = np.int32(0)
    for i in range(samples.size):
        largest = max(largest, np.float32(samples[i]).view(np.int32) & _MAGNITUDE)
    return largest


@vector_kernel
def _take(source: Any, target: Any) -> None:
    """Copy samples; those under -480 dBFS count as zero."""
    for i in range(source.size):
        x = source[i]
        target[i] = x if abs(x) >= _QUIET_SAMPLE else np.float32(0.0)


@inlined
def _half_sum(t: Any, p: Any) -> Any:
    return abs(
        ((t[0] * p[0] + t[1] * p[1]) + (t[2] * p[2] + t[3] * p[3]))
        + ((t[4] * p[4] + t[5] * p[5]) + (t[6] * p[6] + t[7] * p[7]))
    )


@inlined
def _taps_of(row: Any) -> Any:
    return row[0], row[1], row[2], row[3], row[4], row[5], row[6], row[7]


@vector_kernel
def _interpolate(x: Any, taps: Any, lanes: Any) -> None:
    """Raise ``lanes`` to the magnitudes between the samples of ``x`` (15 + 96 at most), by two pairs."""
    for pair in range(0, taps.shape[0], 2):
        even, odd = _taps_of(taps[pair, 0]), _taps_of(taps[pair, 1])
        next_even, next_odd = _taps_of(taps[pair + 1, 0]), _taps_of(taps[pair + 1, 1])
        for i in range(x.size - 15):
            p0, m0 = x[i] + x[i + 15], x[i] - x[i + 15]
            p1, m1 = x[i + 1] + x[i + 14], x[i + 1] - x[i + 14]
            p2, m2 = x[i + 2] + x[i + 13], x[i + 2] - x[i + 13]
            p3, m3 = x[i + 3] + x[i + 12], x[i + 3] - x[i + 12]
            p4, m4 = x[i + 4] + x[i + 11], x[i + 4] - x[i + 11]
            p5, m5 = x[i + 5] + x[i + 10], x[i + 5] - x[i + 10]
            p6, m6 = x[i + 6] + x[i + 9], x[i + 6] - x[i + 9]
            p7, m7 = x[i + 7] + x[i + 8], x[i + 7] - x[i + 8]
            p, m = (p0, p1, p2, p3, p4, p5, p6, p7), (m0, m1, m2, m3, m4, m5, m6, m7)
            first = _half_sum(even, p) + _half_sum(odd, m)
            second = _half_sum(next_even, p) + _half_sum(next_odd, m)
            larger = first if first > second else second
            lanes[i] = larger if larger > lanes[i] else lanes[i]


@inlined
def _add_squares(total: float, x: Any, meter: Any, memory: Any) -> float:
    """``total`` and the squares of the K-weighted ``x``, one after the other.

    Both filters are in direct form II. Their constant factors are part of the channels' weights, which leaves
    the high-pass the numerator 1 − 2/z + 1/z², the difference of two differences.
    """
    b1, b2, a1, a2 = meter.shelf[0], meter.shelf[1], -meter.shelf[2], -meter.shelf[3]
    c1, c2 = -meter.high_pass[0], -meter.high_pass[1]
    v1, v2, w1, w2 = memory[0], memory[1], memory[2], memory[3]
    last_rise = w1 - w2
    for i in range(x.size):
        v = fma(a1, v1, fma(a2, v2, np.float64(x[i])))
        shelved = fma(b1, v1, fma(b2, v2, v))
        w = fma(c1, w1, fma(c2, w2, shelved))
        rise = w - w1
        weighted = rise - last_rise
        total = fma(weighted, weighted, total)
        v2, v1, w2, w1, last_rise = v1, v, w1, w, rise
    memory[0], memory[1], memory[2], memory[3] = v1, v2, w1, w2
    return total


@inlined
def _raise_peaks(window: Any, meter: Any, arrays: Any) -> None:
    """Peaks of the samples of ``window`` and between them.

    A stretch is left out where its largest sample times the interpolator's gain can't exceed the peak so far
    (the hundred-thousandth more than covers the rounding of 16 products), so leaving it out changes nothing.
    """
    for begin in range(0, window.size - _HISTORY, _STRETCH):
        stretch = window[begin : min(begin + _STRETCH + _HISTORY, window.size)]
        largest = np.int32(_largest_bits(stretch)).view(np.float32)
        meter.sample_peak = max(meter.sample_peak, largest)
        meter.true_peak = max(meter.true_peak, largest)
        if largest * meter.interpolator_gain * np.float32(1.00001) > meter.true_peak:
            _interpolate(stretch, arrays.taps, arrays.lanes)
            between = np.int32(_largest_bits(arrays.lanes)).view(np.float32)
            meter.true_peak = max(meter.true_peak, between)


@inlined
def _end_step(meter: Any, arrays: Any) -> None:
    """Add up the channels of a step of 10 ms, clear memory too small to matter, set the next step's end."""
    total = 0.0
    for channel in range(arrays.sums.size):
        total += arrays.weights[channel] * arrays.sums[channel]
        arrays.sums[channel] = 0.0
        for i in range(4):
            if abs(arrays.memory[channel, i]) < _QUIET_MEMORY:
                arrays.memory[channel, i] = 0.0
    arrays.squares[meter.steps % arrays.squares.size] = total
    meter.steps += 1
    meter.step_ends = _step_border(meter.steps + 1, meter.sample_rate)


@inlined
def _step_border(step: Any, sample_rate: Any) -> Any:
    """The frame nearest to ``step`` hundredths of a second."""
    return (step * sample_rate + 50) // 100


@kernel
def meter_block(meter: Any, arrays: Any, block: Any) -> None:
    """Meter ``block``, float32 (channels, frames), finite and within `LARGEST_SAMPLE`.

    It allocates nothing, takes no lock and raises nothing, so an audio thread may call it.
    """
    done = 0
    while done < block.shape[1]:
        count = min(block.shape[1] - done, meter.step_ends - meter.frames, _PIECE)
        meter.frames += count
        for channel in range(block.shape[0]):
            window = arrays.windows[channel, : _HISTORY + count]
            _take(block[channel, done : done + count], window[_HISTORY:])
            arrays.sums[channel] = _add_squares(
                arrays.sums[channel], window[_HISTORY:], meter, arrays.memory[channel]
            )
            _raise_peaks(window, meter, arrays)
            for i in range(_HISTORY):
                window[i] = window[i + count]
        if meter.frames == meter.step_ends:
            _end_step(meter, arrays)
        done += count


class LoudnessMeter:
    """Loudness and true peak of a signal that comes block by block.

    ``sample_rate`` in whole Hz, 8000 to 384000. ``weights``: one factor a channel for its part in the
    loudness (0 leaves it out, as BS.1770 does with the low-frequency channel), by default `CHANNEL_WEIGHTS`
    for up to five channels in their order there. `SettingError` for other values.

    The record ``meter`` and ``arrays`` are all that the kernel `meter_block` needs, so that another thread
    can run it: there ``arrays.squares`` is a ring that keeps the newest steps of 10 ms.
    """

    def __init__(self, sample_rate: int, channels: int = 1, weights: "Sequence[float] | None" = None) -> None:
        self.sample_rate = _checked_rate(sample_rate)
        self._weights = _checked_weights(channels, weights)
        self.reset()

    def reset(self) -> None:
        """Forget everything heard."""
        phases, (shelf, high_pass) = interpolator(self.sample_rate), k_weighting(self.sample_rate)
        self.meter = np.zeros(1, METER)
        self.meter["sample_rate"] = self.sample_rate
        self.meter["step_ends"] = self._border(1)
        self.meter["shelf"] = [*shelf[1:3] / shelf[0], *shelf[4:]]
        self.meter["high_pass"] = high_pass[4:]
        self.meter["interpolator_gain"] = np.abs(phases).sum(axis=1).max()
        channels = len(self._weights)
        self.arrays = MeterArrays(
            taps=_mirrored_pairs(phases),
            windows=np.zeros((channels, _HISTORY + _PIECE), np.float32),
            lanes=np.zeros(_STRETCH, np.float32),
            weights=self._weights * (shelf[0] * high_pass[0]) ** 2,
            memory=np.zeros((channels, 4)),
            sums=np.zeros(channels),
            squares=np.zeros(60 * _STEPS_A_SECOND),
        )

    def add(self, block: "ArrayLike") -> None:
        """Meter the next block: floats, full scale ±1, shape (frames,) or (frames, channels).

        Measured in single precision. `SettingError` for another shape or type and for samples that are not
        finite or lie beyond `LARGEST_SAMPLE`; nothing of such a block is metered.
        """
        samples = _checked_block(block, len(self._weights))
        self._make_room(samples.shape[1])
        meter_block(self.meter[0], self.arrays, samples)

    def momentary_lufs(self) -> float | None:
        """Loudness of the last 400 ms that end on a hundredth of a second, or None before there are any."""
        return self._recent_lufs(_STEPS_A_BLOCK)

    def short_term_lufs(self) -> float | None:
        """Loudness of the last 3 s that end on a hundredth of a second, or None before there are any."""
        return self._recent_lufs(_STEPS_SHORT_TERM)

    def result(self) -> Loudness:
        """What was measured so far, as if silence followed."""
        integrated, gated = self._integrated()
        return Loudness(
            integrated_lufs=integrated,
            gated=gated,
            true_peak_dbtp=_decibels(self._true_peak()),
            sample_peak_dbfs=_decibels(float(self.meter["sample_peak"][0])),
            momentary_max_lufs=self._largest_lufs(_STEPS_A_BLOCK),
            short_term_max_lufs=self._largest_lufs(_STEPS_SHORT_TERM),
        )

    def _border(self, step: Any) -> Any:
        return (step * self.sample_rate + 50) // _STEPS_A_SECOND

    def _make_room(self, frames: int) -> None:
        """Let the ring of steps hold all that it will be given, so that nothing in it is ever replaced."""
        needed = (int(self.meter["frames"][0]) + frames) * _STEPS_A_SECOND // self.sample_rate + 1
        squares = self.arrays.squares
        if needed > squares.size:
            grown = np.zeros(max(needed, 2 * squares.size))
            grown[: squares.size] = squares
            self.arrays = self.arrays._replace(squares=grown)

    def _means(self, width: int, hop: int = 1) -> "NDArray[np.float64]":
        """Weighted mean squares over ``width`` steps of 10 ms, every ``hop`` steps."""
        steps = int(self.meter["steps"][0])
        sums = sliding_sums(self.arrays.squares[:steps], width)[::hop]
        begins = np.arange(sums.size) * hop
        means: NDArray[np.float64] = sums / (self._border(begins + width) - self._border(begins))
        return means

    def _recent_lufs(self, width: int) -> float | None:
        steps = int(self.meter["steps"][0])
        if steps < width:
            return None
        frames = self._border(steps) - self._border(steps - width)
        return _lufs(sliding_sums(self.arrays.squares[steps - width : steps], width)[0] / frames)

    def _largest_lufs(self, width: int) -> float | None:
        means = self._means(width)
        return _lufs(means.max()) if means.size else None

    def _integrated(self) -> tuple[float, bool]:
        """Integrated loudness and whether it is gated (BS.1770, Annex 1, equations 3 to 7)."""
        means = self._means(_STEPS_A_BLOCK, _STEPS_A_GATING_HOP)
        if not means.size:
            return self._ungated_lufs(), False
        loud = means[means > 10 ** ((ABSOLUTE_GATE_LUFS + 0.691) / 10)]
        if loud.size:
            loud = loud[loud > loud.mean() * 10 ** (RELATIVE_GATE_LU / 10)]
        return _lufs(loud.mean()) if loud.size else -math.inf, True

    def _ungated_lufs(self) -> float:
        frames, steps = int(self.meter["frames"][0]), int(self.meter["steps"][0])
        total = self.arrays.squares[:steps].sum() + self.arrays.weights @ self.arrays.sums
        return _lufs(total / frames) if frames else -math.inf

    def _true_peak(self) -> float:
        """The true peak with what lies between the last samples and the silence after them."""
        tail = np.zeros((len(self._weights), 2 * _HISTORY), np.float32)
        tail[:, :_HISTORY] = self.arrays.windows[:, :_HISTORY]
        lanes = self.arrays.lanes.copy()
        for row in tail:
            _interpolate(row, self.arrays.taps, lanes)
        return float(max(self.meter["true_peak"][0], lanes.max()))


def measure_loudness(audio: "ArrayLike", sample_rate: int) -> Loudness:
    """Loudness and true peak of ``audio``: floats, full scale ±1, shape (frames,) or (frames, channels).

    Up to five channels: left, right, centre, left surround, right surround. Errors as those of
    `LoudnessMeter`.
    """
    samples = np.asarray(audio)
    meter = LoudnessMeter(sample_rate, samples.shape[1] if samples.ndim == 2 else 1)
    meter.add(samples)
    return meter.result()


def sliding_sums(values: "NDArray[np.float64]", width: int) -> "NDArray[np.float64]":
    """Sums of every ``width`` neighbours, shape (n − width + 1,), or (0,).

    Put together from sums of 1, 2, 4, … neighbours: a running total would lose what is quiet
    after what was loud.
    """
    count = values.size - width + 1
    if count <= 0:
        return np.zeros(0)
    total, place, size, sums = np.zeros(count), 0, 1, values
    while True:
        if width & size:
            total += sums[place : place + count]
            place += size
        if 2 * size > width:
            return total
        sums = sums[:-size] + sums[size:]
        size *= 2


def _lufs(mean_square: float) -> float:
    """BS.1770, Annex 1, equation 2; −inf for nothing."""
    return -0.691 + 10 * math.log10(mean_square) if mean_square > 0 else -math.inf


def _decibels(magnitude: float) -> float:
    return 20 * math.log10(magnitude) if magnitude > 0 else -math.inf


def _checked_rate(sample_rate: int) -> int:
    whole = not isinstance(sample_rate, bool) and isinstance(sample_rate, int | np.integer)
    if not whole or not LOWEST_RATE_HZ <= sample_rate <= HIGHEST_RATE_HZ:
        raise SettingError(
            f"sample rate {sample_rate!r}: loudness is measured at a whole number of hertz from "
            f"{LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ}"
        )
    return int(sample_rate)


def _checked_weights(channels: int, weights: "Sequence[float] | None") -> "NDArray[np.float64]":
    if isinstance(channels, bool) or not isinstance(channels, int | np.integer) or channels < 1:
        raise SettingError(f"channels {channels!r}: give a whole number, 1 or more")
    if weights is None:
        if channels > len(CHANNEL_WEIGHTS):
            raise SettingError(
                f"channels {channels}: the order is known for up to {len(CHANNEL_WEIGHTS)} only; "
                "give a weight for each channel"
            )
        weights = CHANNEL_WEIGHTS[:channels]
    try:
        given = np.array(weights, np.float64)
    except (TypeError, ValueError):
        given = np.zeros(0)
    if given.shape != (channels,) or not np.all(np.isfinite(given) & (given >= 0)):
        raise SettingError(f"channel weights {weights!r}: give {channels} finite numbers, 0 or more")
    return given


def _checked_block(block: "ArrayLike", channels: int) -> "NDArray[np.float32]":
    """The block as `meter_block` takes it, a row a channel."""
    given = np.asarray(block)
    if given.dtype.kind != "f":
        raise SettingError(f"audio of type {given.dtype}: give floats with full scale at ±1")
    if given.ndim == 1 and channels == 1:
        given = given[:, None]
    if given.ndim != 2 or given.shape[1] != channels:
        raise SettingError(f"audio of shape {given.shape}: give (frames, {channels}), one column a channel")
    with np.errstate(over="ignore"):
        samples = np.ascontiguousarray(given.T, np.float32)
    if np.int32(_largest_bits(samples.reshape(-1))).view(np.float32) <= LARGEST_SAMPLE:
        return samples
    frame, channel = np.argwhere(~(np.abs(samples.T) <= LARGEST_SAMPLE))[0]
    raise SettingError(
        f"audio, frame {frame}, channel {channel + 1}: the sample is {given[frame, channel]}; give finite "
        f"samples within ±{LARGEST_SAMPLE:g}"
    )
