"""The loudness meter against ITU-R BS.1770-5, EBU Tech 3341, an independent meter and plain twins.

Outside sources: the filters' table and the 997 Hz reading of BS.1770; the signals and tolerances of Tech 3341
(shared/reference/ebu-tech-3341.csv, from memory of their published description); `pyloudnorm` with the filter
class DeMan; sines, whose true peak is known in closed form.
"""

import csv
import math
from fractions import Fraction

import numpy as np
import pyloudnorm
import pytest
from numpy.typing import NDArray
from scipy.signal import freqz, sosfilt

from conftest import REFERENCE
from glidesmith.errors import SettingError
from glidesmith.loudness import (
    Loudness,
    LoudnessMeter,
    interpolator,
    k_weighting,
    measure_loudness,
    meter_block,
    sliding_sums,
)

RATES = (8_000, 11_025, 22_050, 32_000, 44_100, 48_000, 88_200, 96_000, 192_000, 384_000)
CASES = list(
    csv.DictReader(
        line
        for line in (REFERENCE / "ebu-tech-3341.csv").read_text(encoding="utf-8").splitlines()
        if not line.startswith("#")
    )
)
Samples = NDArray[np.float64]


def sine(
    seconds: float, hz: float, rate: int = 48_000, amplitude: float = 1.0, phase_degrees: float = 0
) -> Samples:
    place = np.arange(round(seconds * rate))
    return amplitude * np.sin(2 * np.pi * hz / rate * place + math.radians(phase_degrees))


def faded(x: Samples, frames: int = 480) -> Samples:
    ramp = 0.5 - 0.5 * np.cos(np.pi * np.arange(frames) / frames)
    y = x.copy()
    y[:frames] *= ramp
    y[-frames:] *= ramp[::-1]
    return y


def passages(seed: int, seconds: float, rate: int) -> Samples:
    """Passages of coloured noise and tones, half a second each, of levels far apart; some of them silent."""
    generator = np.random.default_rng(seed)
    place = np.arange(rate // 2)
    parts = []
    for _ in range(int(2 * seconds)):
        noise = sosfilt([[1, 0, 0, 1, -generator.uniform(0, 0.95), 0]], generator.standard_normal(rate // 2))
        tone = np.sin(2 * np.pi * generator.uniform(40, 3_000) / rate * place)
        level = 10 ** (generator.uniform(-60, -6) / 20) * (generator.random() > 0.15)
        parts.append(level * (noise / np.abs(noise).max() + tone) / 2)
    return np.concatenate(parts).astype(np.float32).astype(np.float64)


def plain_loudness(x: Samples, rate: int) -> float:
    """Integrated loudness of one channel as BS.1770 writes it: blocks of 400 ms every 100 ms, both gates."""
    squares = sosfilt(k_weighting(rate), x) ** 2
    border = [(k * rate + 5) // 10 for k in range(10 * x.size // rate + 2)]
    means = np.array([squares[a:b].mean() for a, b in zip(border, border[4:], strict=False) if b <= x.size])
    means = means[-0.691 + 10 * np.log10(np.maximum(means, 1e-300)) > -70]
    loud = means[means > means.mean() / 10]
    return float(-0.691 + 10 * np.log10(loud.mean()))


def plain_true_peak(x: Samples, rate: int) -> float:
    between = max(np.abs(np.convolve(x, row)).max() for row in interpolator(rate))
    return float(20 * np.log10(max(between, np.abs(x).max())))


# The filters


def test_at_48_khz_the_filters_are_those_of_the_recommendation():
    """BS.1770, Annex 1, tables 1 and 2, digit by digit."""
    assert k_weighting(48_000).tolist() == [
        [1.53512485958697, -2.69169618940638, 1.19839281085285, 1, -1.69065929318241, 0.73248077421585],
        [1, -2, 1, 1, -1.99004745483398, 0.99007225036621],
    ]


def test_the_carried_over_filters_meet_the_table_at_48_khz():
    """The same transform that serves the other rates, a nanohertz away; tolerance: rounding."""
    np.testing.assert_allclose(k_weighting(48_000.000_000_001), k_weighting(48_000), rtol=0, atol=5e-14)


@pytest.mark.parametrize("rate", RATES)
def test_the_weighting_is_the_same_curve_at_every_rate(rate):
    """Up to an eighth of the rate the bilinear transform bends it by 0.25 dB at most against 48 kHz."""
    hz = np.array([20, 38, 100, 400, 997, 1_681, 3_000, 8_000, 16_000], float)
    hz = hz[hz < rate / 8]
    ours, theirs = (
        sum(20 * np.log10(np.abs(freqz(row[:3], row[3:], hz, fs=r)[1])) for row in k_weighting(r))
        for r in (rate, 48_000)
    )
    assert np.abs(ours - theirs).max() < 0.25


@pytest.mark.parametrize("rate", RATES)
def test_a_full_scale_sine_reads_minus_3_01(rate):
    """BS.1770, Annex 1: 0 dBFS, 997 Hz in one channel reads -3.01 LKFS; 0.01 LU from 32 kHz on.

    Below, the documented bend of the shelf: 0.2 LU at 8 kHz, falling with the square of the rate and faster.
    """
    tolerance = 0.01 if rate >= 32_000 else 0.01 + 0.2 * (8_000 / rate) ** 2
    assert measure_loudness(sine(2, 997, rate), rate).integrated_lufs == pytest.approx(-3.01, abs=tolerance)


# EBU Tech 3341


def segments(case: dict[str, str], n: int) -> Samples:
    parts = []
    for part in case["segments"].split():
        level, length = part.split(":")
        factors = [n if factor == "n" else float(factor) for factor in length.split("*")]
        amplitude = 0.0 if level == "silence" else 10 ** (float(level) / 20)
        parts.append(sine(math.prod(factors), 1_000, amplitude=amplitude))
    return np.tile(np.concatenate(parts), int(case["repeats"]))


def loudness_signal(case: dict[str, str], n: int = 0) -> Samples:
    tone = segments(case, n)
    return np.stack([tone * 10 ** (float(db) / 20) for db in case["channels"].split()], axis=1)


def cases(*quantities: str) -> list[object]:
    return [pytest.param(case, id=case["case"]) for case in CASES if case["quantity"] in quantities]


def agrees(case: dict[str, str], reading: float | None) -> bool:
    expected, below, above = (float(case[key]) for key in ("expected", "below", "above"))
    return reading is not None and expected - below <= reading <= expected + above


@pytest.mark.parametrize("case", cases("integrated"))
def test_tech_3341_integrated(case):
    assert agrees(case, measure_loudness(loudness_signal(case), 48_000).integrated_lufs)


@pytest.mark.parametrize("case", cases("momentary", "short_term"))
def test_tech_3341_constant_once_the_window_is_full(case):
    x, meter, readings = loudness_signal(case), LoudnessMeter(48_000, 2), []
    for begin in range(0, len(x), 4_800):
        meter.add(x[begin : begin + 4_800])
        readings.append(getattr(meter, case["quantity"] + "_lufs")())
    full = readings[30 if case["quantity"] == "short_term" else 10 :]
    assert len(full) > 50
    assert all(agrees(case, reading) for reading in full)


@pytest.mark.parametrize("case", cases("momentary_max", "short_term_max"))
def test_tech_3341_maxima_wherever_the_tone_begins(case):
    for n in range(20):
        result = measure_loudness(loudness_signal(case, n), 48_000)
        assert agrees(case, getattr(result, case["quantity"] + "_lufs")), n


def true_peak_signal(case: dict[str, str]) -> Samples:
    """Sines of the stated phase; for cases 20 to 23 a transient of the same kind, from memory."""
    frequency, amplitude, phase = (
        float(Fraction(case["frequency"])),
        float(case["amplitude"]),
        float(case["phase"]),
    )
    if int(case["case"]) < 20:
        return faded(sine(1, frequency * 48_000, amplitude=amplitude, phase_degrees=phase))
    from_peak = np.arange(48_000) - 24_000 + phase / 4
    carrier = np.cos(2 * np.pi * frequency * from_peak)
    pulse = np.where(np.abs(from_peak) < 6, 0.5 + 0.5 * np.cos(np.pi * from_peak / 6), 0)
    return faded(carrier * (amplitude + (1 - amplitude) * pulse))


@pytest.mark.parametrize("case", cases("true_peak"))
def test_tech_3341_true_peak(case):
    assert agrees(case, measure_loudness(true_peak_signal(case), 48_000).true_peak_dbtp)


def test_all_the_cases_are_there():
    assert [int(case["case"]) for case in CASES] == [1, 2, 3, 4, 5, 6, 9, 10, 12, 13, *range(15, 24)]


# An independent meter, and plain twins


@pytest.mark.parametrize("rate", [44_100, 48_000, 96_000])
@pytest.mark.parametrize("seed", range(4))
def test_an_independent_meter_agrees(rate, seed):
    """`pyloudnorm`, filters of class DeMan: 0.1 LU. (Its high-pass keeps its numerator at any rate.)"""
    x = passages(seed, 8, rate)
    theirs = pyloudnorm.Meter(rate, filter_class="DeMan").integrated_loudness(x)
    assert measure_loudness(x, rate).integrated_lufs == pytest.approx(theirs, abs=0.1)


def test_five_channels_agree_with_an_independent_meter():
    x = np.stack([passages(seed, 6, 48_000) for seed in range(5)], axis=1)
    theirs = pyloudnorm.Meter(48_000, filter_class="DeMan").integrated_loudness(x)
    assert measure_loudness(x, 48_000).integrated_lufs == pytest.approx(theirs, abs=0.02)


@pytest.mark.parametrize("rate", [8_000, 11_025, 44_100, 48_000, 192_000])
@pytest.mark.parametrize("seed", [11, 12])
def test_the_kernels_equal_their_plain_twins(rate, seed):
    """Loudness to 1e-9 LU. True peak to 2e-6 dB: its products are in single precision."""
    x = passages(seed, 4, rate)
    result = measure_loudness(x, rate)
    assert result.integrated_lufs == pytest.approx(plain_loudness(x, rate), abs=1e-9)
    assert result.true_peak_dbtp == pytest.approx(plain_true_peak(x, rate), abs=2e-6)
    assert result.sample_peak_dbfs == pytest.approx(20 * np.log10(np.abs(x).max()), abs=1e-9)


def test_leaving_stretches_out_misses_no_peak():
    """A short burst of the worst case for the bound, the signs of the taps, at every place of a stretch."""
    taps = interpolator(48_000)
    worst = np.sign(taps[np.abs(taps).sum(axis=1).argmax()])[::-1]
    for place in range(400, 400 + 97):
        x = 0.2 * np.random.default_rng(place).standard_normal(1_500).clip(-2, 2)
        x[100] = 1.0
        x[place : place + 16] = 0.55 * worst
        x = x.astype(np.float32).astype(np.float64)
        peak = plain_true_peak(x, 48_000)
        assert peak > 20 * math.log10(0.55 * 2)
        assert measure_loudness(x, 48_000).true_peak_dbtp == pytest.approx(peak, abs=2e-6)


# True peak


def test_the_recommendations_interpolator_passes_the_audible_band():
    """The decimals of BS.1770, Annex 2, phases 0 and 1 (from memory), the others mirrored.

    Within 0.25 dB up to 20 kHz, from our own calculation of what the taps do.
    """
    printed = [
        "0.0017089843750 0.0109863281250 -0.0196533203125 0.0332031250000 -0.0594482421875 0.1373291015625 "
        "0.9721679687500 -0.1022949218750 0.0476074218750 -0.0266113281250 0.0148925781250 -0.0083007812500",
        "-0.0291748046875 0.0292968750000 -0.0517578125000 0.0891113281250 -0.1665039062500 0.4650878906250 "
        "0.7797851562500 -0.2003173828125 0.1015625000000 -0.0582275390625 0.0330810546875 -0.0189208984375",
    ]
    first, second = ([float(tap) for tap in row.split()] for row in printed)
    for rate in (48_000, 96_000, 384_000):
        rows = interpolator(rate)[:, 2:14]
        assert rows.tolist() == [first, second, second[::-1], first[::-1]]
    for row in rows:
        gain = np.abs(freqz(row, 1, np.linspace(10, 20_000, 500), fs=48_000)[1])
        assert np.abs(20 * np.log10(gain)).max() < 0.25


def delay_error(rows: Samples, delays: Samples, band: float) -> float:
    w = np.linspace(0, np.pi * band, 400)
    return float(
        max(
            np.abs(freqz(row, 1, w)[1] - np.exp(-1j * w * delay)).max()
            for row, delay in zip(rows, delays, strict=True)
        )
    )


@pytest.mark.parametrize("rate", [8_000, 11_025, 16_000, 22_050, 32_000, 44_100, 47_999])
@pytest.mark.parametrize("band", [0.5, 20 / 24, 20 / 22.05])
def test_designed_interpolators_are_no_worse_than_the_recommendations(rate, band):
    """Distance from an ideal delay, over half of the band, 20 kHz of 24, and 20 kHz of 22.05."""
    rows = interpolator(rate)
    times = len(rows) + 1
    assert times * rate >= 192_000
    ours = delay_error(rows, 8 - np.arange(1, times) / times, band)
    theirs = delay_error(interpolator(48_000), 7.5 + np.array([3, 1, -1, -3]) / 8, band)
    assert ours <= theirs


@pytest.mark.parametrize("rate", RATES)
def test_a_peak_between_samples_is_found(rate):
    """A quarter of the rate at 45 degrees: the curve rises 3.01 dB over its samples (+0.2/-0.4 dB)."""
    result = measure_loudness(faded(sine(0.5, rate / 4, rate, phase_degrees=45)), rate)
    assert result.sample_peak_dbfs == pytest.approx(-3.0103, abs=1e-3)
    assert -0.4 <= result.true_peak_dbtp <= 0.2


@pytest.mark.parametrize("rate", RATES)
def test_the_peak_of_any_sine_in_the_lower_part_of_the_band(rate):
    """Sines below 0.4 of the rate, any phase: +0.25 dB for the ripple, -0.7 dB for ripple and grid.

    Half a step off the grid of four times the rate, cos(0.4 π/4) is -0.43 dB.
    """
    generator = np.random.default_rng(rate)
    for _ in range(20):
        x = faded(sine(0.25, generator.uniform(0.01, 0.4) * rate, rate, 0.7, generator.uniform(0, 360)))
        over = measure_loudness(x, rate).true_peak_dbtp - 20 * math.log10(0.7)
        assert -0.7 <= over <= 0.25


def test_the_samples_themselves_count():
    """The recommendation's four phases fall beside the samples; a lone sample would read 0.25 dB less."""
    x = np.zeros(1_000)
    x[500] = 1
    assert measure_loudness(x, 48_000).true_peak_dbtp == 0


def test_the_curve_after_the_last_sample_counts():
    x = np.zeros(600)
    x[-2:] = 0.9
    result = measure_loudness(x, 48_000)
    assert result.true_peak_dbtp > result.sample_peak_dbfs + 0.5
    assert result.true_peak_dbtp == pytest.approx(plain_true_peak(x.astype(np.float32), 48_000), abs=2e-6)


# Blocks


@pytest.mark.parametrize("rate", [11_025, 48_000, 96_000])
@pytest.mark.parametrize("size", [1, 7, 64, 509])
def test_block_borders_change_no_bit(rate, size):
    x = np.stack([passages(21, 3.5, rate), passages(22, 3.5, rate)], axis=1)[: 3 * rate + 1_234]
    meter, readings = LoudnessMeter(rate, 2), []
    for begin in range(0, len(x), size):
        meter.add(x[begin : begin + size])
        if begin // size % 50 == 0:
            readings.append(meter.result())  # looking changes nothing
    assert meter.result() == measure_loudness(x, rate)
    assert len(readings) > 1


def test_live_readings_look_back_over_the_last_steps():
    """Against a plain filter and plain means; 400 ms and 3 s that end on the last whole 10 ms."""
    x = passages(5, 5, 48_000)[: 48_000 * 5 - 300]
    squares = sosfilt(k_weighting(48_000), x) ** 2
    meter = LoudnessMeter(48_000)
    meter.add(x)
    end = x.size // 480 * 480
    for reading, length in ((meter.momentary_lufs(), 19_200), (meter.short_term_lufs(), 144_000)):
        expected = -0.691 + 10 * np.log10(squares[end - length : end].mean())
        assert reading == pytest.approx(expected, abs=1e-9)
    begins = range(0, end - 144_000 + 1, 480)
    largest = max(squares[begin : begin + 144_000].mean() for begin in begins)
    assert meter.result().short_term_max_lufs == pytest.approx(-0.691 + 10 * np.log10(largest), abs=1e-9)


def test_there_is_no_live_reading_before_its_window_is_full():
    meter = LoudnessMeter(48_000)
    meter.add(sine(0.399, 1_000))
    assert (meter.momentary_lufs(), meter.short_term_lufs()) == (None, None)
    assert meter.result().momentary_max_lufs is None
    meter.add(sine(0.001, 1_000))
    assert meter.momentary_lufs() == meter.result().momentary_max_lufs != None  # noqa: E711
    assert meter.result().short_term_max_lufs is None


def test_reset_forgets_everything():
    meter = LoudnessMeter(48_000)
    meter.add(passages(1, 2, 48_000))
    meter.reset()
    meter.add(passages(2, 2, 48_000))
    assert meter.result() == measure_loudness(passages(2, 2, 48_000), 48_000)


def test_a_small_ring_keeps_the_newest_steps():
    """The kernel with a ring of the caller's own, as an audio thread uses it."""
    x = passages(6, 4, 48_000).astype(np.float32)[None, :]
    whole, ring = LoudnessMeter(48_000), LoudnessMeter(48_000)
    whole.add(x[0])
    arrays = ring.arrays._replace(squares=np.zeros(300))
    meter_block(ring.meter[0], arrays, x)
    assert np.roll(arrays.squares, -100).tolist() == whole.arrays.squares[100:400].tolist()


def test_a_minute_and_more_has_room():
    x = np.zeros(8_000 * 130, np.float32)
    x[: 8_000 * 10] = sine(10, 500, 8_000)
    x[-8_000 * 10 :] = sine(10, 500, 8_000)
    meter = LoudnessMeter(8_000)
    for begin in range(0, x.size, 8_000 * 13):
        meter.add(x[begin : begin + 8_000 * 13])
    both, one = meter.result().integrated_lufs, measure_loudness(x[: 8_000 * 11], 8_000).integrated_lufs
    assert both == pytest.approx(one, abs=0.02)
    assert meter.arrays.squares[:900].min() > 0


@pytest.mark.parametrize("width", [1, 2, 3, 7, 40, 300])
@pytest.mark.parametrize("count", [0, 1, 39, 40, 41, 320])
def test_sliding_sums(width, count):
    values = np.random.default_rng(7).random(count)
    plain = [values[i : i + width].sum() for i in range(count - width + 1)]
    np.testing.assert_allclose(sliding_sums(values, width), plain, rtol=1e-13)


# Silence, short signals, quiet ones


@pytest.mark.parametrize("frames", [0, 1, 1_000, 48_000 * 4])
def test_silence_is_minus_infinity(frames):
    result = measure_loudness(np.zeros(frames), 48_000)
    assert result.integrated_lufs == result.true_peak_dbtp == result.sample_peak_dbfs == -math.inf
    assert result.gated == (frames > 19_200)


@pytest.mark.parametrize("frames", [1, 100, 4_800, 19_199])
def test_less_than_a_block_is_measured_whole_and_without_gates(frames):
    x = sine(1, 997)[:frames] + 0.1
    squares = sosfilt(k_weighting(48_000), x.astype(np.float32)) ** 2
    result = measure_loudness(x, 48_000)
    assert not result.gated
    assert result.integrated_lufs == pytest.approx(-0.691 + 10 * np.log10(squares.mean()), abs=1e-9)


def test_one_block_is_gated():
    assert measure_loudness(sine(0.4, 997), 48_000).gated
    assert measure_loudness(1e-5 * sine(0.4, 997), 48_000).integrated_lufs == -math.inf


def test_the_absolute_gate_is_at_minus_70():
    """BS.1770: blocks at or under -70 LUFS don't count; a 997 Hz sine reads 3.01 LU under its peak."""
    x = 10 ** (-66.99 / 20) * sine(2, 997)
    assert measure_loudness(10 ** (0.1 / 20) * x, 48_000).integrated_lufs == pytest.approx(-69.9, abs=0.02)
    assert measure_loudness(10 ** (-0.1 / 20) * x, 48_000).integrated_lufs == -math.inf


def test_no_state_becomes_denormal():
    """In the silence after a sound, where the poles are fastest and slowest; denormal samples too."""
    for rate in (8_000, 48_000, 384_000):
        meter, smallest = LoudnessMeter(rate), np.finfo(float).tiny
        meter.add(sine(0.1, 997, rate))
        for tail in (np.zeros(rate // 100), np.full(rate // 100, 1e-40)):
            for _ in range(500):
                meter.add(tail)
                state = np.concatenate([meter.arrays.memory.ravel(), meter.arrays.squares[:1_500]])
                assert np.all((state == 0) | (np.abs(state) > smallest))
        assert not meter.arrays.memory.any()
        assert not meter.arrays.windows.any()


# Bad input


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, 1e16, 1e39])
def test_samples_that_are_no_numbers_are_refused_and_leave_no_trace(bad):
    meter, x = LoudnessMeter(48_000, 2), np.zeros((1_000, 2))
    x[123, 1] = bad
    with pytest.raises(SettingError, match=r"frame 123, channel 2: .*; give finite samples within ±1e\+15"):
        meter.add(x)
    assert meter.result() == LoudnessMeter(48_000, 2).result()


@pytest.mark.parametrize(
    ("given", "word"),
    [
        (np.zeros(10, np.int16), "int16"),
        (np.zeros(10, complex), "complex"),
        (np.zeros((10, 3)), "shape"),
        (np.zeros(10), "shape"),
        (np.zeros(()), "shape"),
    ],
)
def test_other_shapes_and_types_are_refused(given, word):
    with pytest.raises(SettingError, match=word):
        LoudnessMeter(48_000, 2).add(given)


@pytest.mark.parametrize("rate", [7_999, 384_001, 48_000.0, True, "48000"])
def test_other_sample_rates_are_refused(rate):
    with pytest.raises(SettingError, match="sample rate"):
        LoudnessMeter(rate)


@pytest.mark.parametrize(
    ("channels", "weights"),
    [(0, None), (6, None), (True, None), (2, [1]), (1, [math.nan]), (1, [-1]), (1, "a")],
)
def test_other_channels_and_weights_are_refused(channels, weights):
    with pytest.raises(SettingError, match="channel"):
        LoudnessMeter(48_000, channels, weights)


def test_a_weight_of_nought_leaves_a_channel_out_of_the_loudness_only():
    quiet, loud = 0.1 * sine(1, 997), sine(1, 60)
    meter = LoudnessMeter(48_000, 2, [1, 0])
    meter.add(np.stack([quiet, loud], axis=1))
    alone = measure_loudness(quiet, 48_000)
    assert meter.result().integrated_lufs == alone.integrated_lufs
    assert meter.result().sample_peak_dbfs == pytest.approx(0, abs=1e-4)


def test_what_is_measured_is_a_plain_record():
    result = measure_loudness(sine(1, 997), 48_000)
    assert isinstance(result, Loudness)
    with pytest.raises(AttributeError):
        result.gated = False  # type: ignore[misc]
