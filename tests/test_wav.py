"""WAV files against exact arithmetic and three independent readers: libsndfile, SciPy and Python's own."""

import io
import os
import random
import signal
import struct
import subprocess
import sys
import threading
import time
import wave
from fractions import Fraction

import numpy as np
import pytest
import scipy.io.wavfile
import soundfile

from conftest import LONG
from glidesmith import __version__
from glidesmith.errors import OutputError, SettingError
from glidesmith.wav import RIFF_LIMIT_BYTES, CvWriter, Dither, WavSink, quantise, write_cv

RATE = 48_000


def noise(frames, channels=1, seed=1):
    return np.random.default_rng(seed).uniform(-1, 1, (frames, channels)).astype(np.float32)


def written(target, audio, block=4096, **options):
    with WavSink(target, RATE, audio.shape[1], **options) as sink:
        for start in range(0, len(audio), block):
            sink.write(audio[start : start + block])
    return sink


def exactly(value, depth) -> int:
    """The code of a sample by exact rational arithmetic; Python rounds a rational's ties to even."""
    full = 2 ** (depth - 1)
    return min(max(round(Fraction(float(value)) * full), -full), full - 1)


def awkward_samples(depth, dtype):
    """Samples on and beside the borders between codes and the ends of the range, and at random."""
    generator = np.random.default_rng(depth)
    full = 2.0 ** (depth - 1)
    codes = generator.integers(-full, full, 2000)
    ties = ((codes + 0.5) / full).astype(dtype)
    ends = np.array([0.0, -0.0, 1.0, -1.0, 1e-45, -1e-45, 0.5 / full, 1.5 / full, 1 - 0.5 / full], dtype)
    samples = np.concatenate([ties, ends, -ends, generator.uniform(-1.5, 1.5, 2000).astype(dtype)])
    return np.concatenate([samples, np.nextafter(samples, dtype(-2)), np.nextafter(samples, dtype(2))])


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize("depth", [16, 24])
def test_samples_are_rounded_to_the_nearest_code(depth, dtype):
    """Every code equals that of exact rational arithmetic, ties to even (IEEE 754's default)."""
    samples = awkward_samples(depth, dtype)
    codes, clipped = quantise(samples, depth)
    assert codes.dtype == np.int32
    np.testing.assert_array_equal(codes, [exactly(x, depth) for x in samples])
    assert clipped == sum(abs(Fraction(float(x))) > 1 for x in samples)


@pytest.mark.parametrize("depth", [16, 24])
def test_rounding_has_no_bias(depth):
    """Flooring would make the mean error half a step; the bound is five standard errors of a uniform one."""
    samples = noise(200_000)[:, 0] * np.float32(0.9)
    codes, _ = quantise(samples, depth)
    error = codes - samples.astype(np.float64) * 2 ** (depth - 1)
    assert abs(error.mean()) < 5 * np.sqrt(1 / 12 / len(samples))


def test_float_keeps_every_sample_and_holds_what_is_over():
    samples = np.array([0.1, -1.0, 1.0, 1.25, -3.0, 1e-45], np.float32)
    kept, clipped = quantise(samples, "float")
    assert kept.dtype == np.float32
    np.testing.assert_array_equal(kept, np.array([0.1, -1.0, 1.0, 1.0, -1.0, 1e-45], np.float32))
    assert clipped == 2


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("depth", [16, 24, "float"])
def test_what_is_not_finite_never_reaches_a_file(tmp_path, bad, depth):
    audio = noise(100)
    audio[50] = bad
    with pytest.raises(OutputError, match="not finite") as error:
        written(tmp_path / "a.wav", audio, depth=depth)
    assert len(error.value.lines) == 1
    assert list(tmp_path.iterdir()) == []


def test_dither_is_triangular():
    """Mean 0 and variance 1/6 of a step squared: the sum of two uniform values of a step each (textbook)."""
    steps = Dither(3).steps((400_000,))
    assert abs(steps.mean()) < 5 * np.sqrt(1 / 6 / len(steps))
    assert steps.var() == pytest.approx(1 / 6, rel=0.01)
    assert -1 < steps.min() < -0.98
    assert 0.98 < steps.max() < 1
    counts = np.histogram(steps, bins=np.linspace(-1, 1, 9))[0] / len(steps)
    np.testing.assert_allclose(counts, np.array([1, 3, 5, 7, 7, 5, 3, 1]) / 32, atol=0.003)


@pytest.mark.parametrize("level", [0.0, 0.25, 0.5, 3.3])
def test_dithered_error_has_the_same_mean_and_power_at_every_level(level):
    """Triangular dither (textbook): mean 0, variance 1/4 of a step squared, whatever the signal."""
    samples = np.full(400_000, level / 2**15)
    codes, _ = quantise(samples, 16, Dither(7))
    error = codes - level
    assert abs(error.mean()) < 5 * np.sqrt(1 / 4 / len(samples))
    assert error.var() == pytest.approx(1 / 4, rel=0.01)


def test_dithered_samples_are_still_rounded_to_the_nearest():
    samples = noise(5000)[:, 0].astype(np.float64)
    codes, _ = quantise(samples, 16, Dither(5))
    steps = Dither(5).steps(samples.shape)
    wanted = [round(Fraction(x) * 2**15 + Fraction(d)) for x, d in zip(samples, steps, strict=True)]
    np.testing.assert_array_equal(codes, np.clip(wanted, -(2**15), 2**15 - 1))


@pytest.mark.parametrize("depth", [16, 24, "float"])
@pytest.mark.parametrize("seed", [None, 11])
def test_the_file_does_not_depend_on_the_block_size(tmp_path, depth, seed):
    if depth == "float" and seed is not None:
        seed = None
    audio = noise(40_000, 2)
    files = []
    for block in (7, 64, 509, 40_000):
        path = tmp_path / f"{block}.wav"
        written(path, audio, block, depth=depth, dither_seed=seed)
        files.append(path.read_bytes())
    assert len(set(files)) == 1


def test_a_seed_repeats_the_dither_and_another_changes_it(tmp_path):
    def file(seed):
        written(tmp_path / "a.wav", noise(1000), depth=16, dither_seed=seed)
        return (tmp_path / "a.wav").read_bytes()

    assert file(1) == file(1)
    assert file(1) != file(2)
    assert file(1) != file(None)


@pytest.mark.parametrize("limit_bytes", [RIFF_LIMIT_BYTES, 20], ids=["RIFF", "RF64"])
@pytest.mark.parametrize("channels", [1, 2])
@pytest.mark.parametrize("frames", [0, 1, 3, 50_001])
@pytest.mark.parametrize("depth", [16, 24, "float"])
def test_libsndfile_reads_every_sample_back(tmp_path, depth, frames, channels, limit_bytes):
    audio = noise(frames, channels)
    path = tmp_path / "a.wav"
    sink = written(path, audio, depth=depth, limit_bytes=limit_bytes)
    assert sink.clipped == 0
    with soundfile.SoundFile(path) as file:
        assert file.format == ("WAV" if limit_bytes == RIFF_LIMIT_BYTES else "RF64")
        assert file.subtype == {16: "PCM_16", 24: "PCM_24", "float": "FLOAT"}[depth]
        assert (file.samplerate, file.channels) == (RATE, channels)
        found = file.read(dtype="float64", always_2d=True)
    codes, _ = quantise(audio, depth)
    np.testing.assert_array_equal(found, codes if depth == "float" else codes / 2.0 ** (depth - 1))


@pytest.mark.parametrize("depth", [16, 24])
def test_pythons_own_reader_agrees(tmp_path, depth):
    audio = noise(1001, 2)
    written(tmp_path / "a.wav", audio, depth=depth)
    with wave.open(str(tmp_path / "a.wav")) as file:
        facts = file.getnchannels(), file.getsampwidth(), file.getframerate(), file.getnframes()
        data = file.readframes(2000)
    assert facts == (2, depth // 8, RATE, 1001)
    size = depth // 8
    values = [int.from_bytes(data[i : i + size], "little", signed=True) for i in range(0, len(data), size)]
    np.testing.assert_array_equal(np.reshape(values, (-1, 2)), quantise(audio, depth)[0])


@pytest.mark.parametrize("limit_bytes", [RIFF_LIMIT_BYTES, 20], ids=["RIFF", "RF64"])
@pytest.mark.parametrize("depth", [16, "float"])
def test_scipys_reader_agrees(tmp_path, depth, limit_bytes):
    audio = noise(1001, 2)
    written(tmp_path / "a.wav", audio, depth=depth, limit_bytes=limit_bytes)
    rate, found = scipy.io.wavfile.read(tmp_path / "a.wav")
    assert rate == RATE
    np.testing.assert_array_equal(found, quantise(audio, depth)[0])


def test_text_fields_say_what_made_the_file_and_are_escaped(tmp_path):
    written(tmp_path / "a.wav", noise(10), title="Ferry\x1b[31m\nñ", comment="Settings abc")
    with soundfile.SoundFile(tmp_path / "a.wav") as file:
        assert file.title == "Ferry\\x1b[31m\\nñ"
        assert file.comment == "Settings abc"
        assert file.software == f"Glidesmith {__version__}"


def test_a_title_cut_in_half_by_its_encoding_is_no_hindrance(tmp_path):
    written(tmp_path / "a.wav", noise(10), title="half a pair \ud800 " + "x" * 70_001)
    with soundfile.SoundFile(tmp_path / "a.wav") as file:
        assert file.frames == 10


def test_a_float_file_holds_no_time_of_day(tmp_path):
    """libsndfile would add a PEAK chunk with a time stamp, and then no two files were alike."""
    written(tmp_path / "a.wav", noise(10), depth="float")
    assert b"PEAK" not in (tmp_path / "a.wav").read_bytes()


def chunks(data):
    """The chunks of a RIFF or RF64 file by the letter of EBU Tech 3306: (name, offset, size)."""
    sizes = {}
    at = 12
    while at < len(data):
        name, size = data[at : at + 4], struct.unpack_from("<I", data, at + 4)[0]
        if name == b"ds64":
            sizes[b"data"] = struct.unpack_from("<Q", data, at + 16)[0]
        if size == 0xFFFF_FFFF:
            size = sizes[name]
        yield name, at + 8, size
        at += 8 + size + size % 2


def test_rf64_takes_over_exactly_where_a_riff_header_can_not_state_the_size(tmp_path):
    audio = noise(101)
    path = tmp_path / "a.wav"
    written(path, audio)
    whole = path.stat().st_size
    assert struct.unpack_from("<4sI", path.read_bytes()) == (b"RIFF", whole - 8)
    written(path, audio, limit_bytes=whole - 8)
    assert path.read_bytes()[:4] == b"RIFF"
    written(path, audio, limit_bytes=whole - 9)
    data = path.read_bytes()
    assert len(data) == whole
    assert struct.unpack_from("<4sI4s4sI", data) == (b"RF64", 0xFFFF_FFFF, b"WAVE", b"ds64", 28)
    assert struct.unpack_from("<QQQI", data, 20) == (whole - 8, 303, 101, 0)
    assert [(name, size) for name, _, size in chunks(data)][-1] == (b"data", 303)


@pytest.mark.parametrize("depth", [16, 24, "float"])
def test_the_header_before_the_first_sample_states_more_than_four_gigabytes(depth):
    """A stream's length is stated beforehand, so that its header can be tried without writing 4 GB."""
    frames = 2**32 // 4
    stream = io.BytesIO()
    sink = WavSink(stream, RATE, 2, depth, frames_expected=frames)
    data = stream.getvalue()
    size = frames * 2 * {16: 2, 24: 3, "float": 4}[depth]
    if size + len(data) - 8 <= 0xFFFF_FFFF:
        assert data[:4] == b"RIFF"
    else:
        assert data[:4] == b"RF64"
        assert struct.unpack_from("<QQQ", data, 20) == (len(data) + size - 8, size, frames)
    with pytest.raises(OutputError, match="0 frames came"):
        sink.close()


def test_a_file_larger_than_a_riff_header_can_state_reads_back(tmp_path):
    """Over 4 GB in long runs; otherwise over a limit of 16 MB."""
    block = noise(1 << 20, 2)
    blocks, limit_bytes = (513, RIFF_LIMIT_BYTES) if LONG else (3, 1 << 24)
    path = tmp_path / "a.wav"
    with WavSink(path, 192_000, 2, "float", limit_bytes=limit_bytes) as sink:
        for _ in range(blocks):
            sink.write(block)
    try:
        assert path.stat().st_size > limit_bytes
        with soundfile.SoundFile(path) as file:
            assert (file.format, file.frames) == ("RF64", blocks << 20)
            file.seek((blocks - 1) << 20)
            np.testing.assert_array_equal(file.read(dtype="float32", always_2d=True), block)
    finally:
        path.unlink()


def piped(audio, **options):
    """What comes out of a real pipe, which can't seek."""
    reader, writer = os.pipe()
    received = []

    def receive():
        with os.fdopen(reader, "rb") as file:
            received.append(file.read())

    thread = threading.Thread(target=receive)
    thread.start()
    with os.fdopen(writer, "wb") as stream:
        written(stream, audio, **options)
    thread.join()
    return received[0]


@pytest.mark.parametrize("depth", [16, 24, "float"])
def test_a_pipe_gets_the_same_bytes_as_a_file_when_the_length_is_known(tmp_path, depth):
    audio = noise(30_001)
    written(tmp_path / "a.wav", audio, depth=depth)
    assert piped(audio, depth=depth, frames_expected=30_001) == (tmp_path / "a.wav").read_bytes()


def test_a_pipe_of_unknown_length_states_the_largest_size_and_is_read():
    audio = noise(1000)
    data = piped(audio, depth=16)
    assert struct.unpack_from("<I", data, 4) == (0xFFFF_FFFF,)
    found, _ = soundfile.read(io.BytesIO(data), dtype="int16", always_2d=True)
    np.testing.assert_array_equal(found, quantise(audio, 16)[0])


def test_what_is_over_the_ceiling_is_counted(tmp_path):
    audio = noise(1000) * np.float32(1.25)
    sink = written(tmp_path / "a.wav", audio)
    assert sink.clipped == np.count_nonzero(np.abs(audio) > 1) > 0


@pytest.mark.parametrize("rate", [0, -1, 48_000.5, 48_000.0, float("nan"), True, "48000", 2**32])
def test_a_rate_that_the_format_can_not_hold_is_refused(tmp_path, rate):
    with pytest.raises(SettingError, match="sample rate") as error:
        WavSink(tmp_path / "a.wav", rate)
    assert len(error.value.lines) == 1
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("rate", [8_000, 22_050, 384_000])
def test_unusual_rates_are_kept(tmp_path, rate):
    with WavSink(tmp_path / "a.wav", rate) as sink:
        sink.write(noise(10))
    assert soundfile.info(tmp_path / "a.wav").samplerate == rate


@pytest.mark.parametrize(
    ("options", "reason"),
    [
        ({"depth": 20}, "depth 20"),
        ({"depth": "16"}, "depth '16'"),
        ({"channels": 3}, "3 channels"),
        ({"depth": "float", "dither_seed": 1}, "no meaning"),
        ({"dither_seed": -1}, "dither seed -1"),
        ({"dither_seed": True}, "dither seed True"),
    ],
)
def test_what_the_format_can_not_hold_is_refused(tmp_path, options, reason):
    with pytest.raises(SettingError, match=reason):
        WavSink(tmp_path / "a.wav", RATE, **options)
    assert list(tmp_path.iterdir()) == []


_WRITER = """
import sys
from pathlib import Path
import numpy as np
from glidesmith.wav import WavSink

target, seed = Path(sys.argv[1]), int(sys.argv[2])
print("ready", flush=True)
while True:
    audio = np.random.default_rng(seed).uniform(-1, 1, 30_000 + seed).astype(np.float32)
    with WavSink(target, 48_000, title=f"take {seed}") as sink:
        for start in range(0, len(audio), 1000):
            sink.write(audio[start : start + 1000])
    seed += 1
"""


def test_a_writer_killed_at_any_moment_leaves_a_whole_file(tmp_path):
    """The old take or the new one, never a part of either; and the next writer is not hindered."""
    target = tmp_path / "take.wav"
    moments = random.Random(5)
    written(target, noise(1000), title="take 0")
    for turn in range(60 if LONG else 8):
        process = subprocess.Popen(
            [sys.executable, "-c", _WRITER, str(target), str(1000 * turn)], stdout=subprocess.PIPE
        )
        assert process.stdout.readline() == b"ready\n"
        time.sleep(moments.uniform(0.0, 0.1))
        process.send_signal(signal.SIGKILL)
        process.communicate()
        with soundfile.SoundFile(target) as file:
            seed = int(file.title.removeprefix("take "))
            found = file.read(dtype="float32", always_2d=True)
        if seed:
            audio = np.random.default_rng(seed).uniform(-1, 1, 30_000 + seed).astype(np.float32)
            np.testing.assert_array_equal(found[:, 0], quantise(audio, 24)[0] / np.float32(2**23))
        else:
            assert len(found) in (1000, 30_000)
        assert {path.name for path in tmp_path.iterdir()} <= {"take.wav", "take.wav.part"}
    written(target, noise(500))
    assert soundfile.info(target).frames == 500
    assert list(tmp_path.iterdir()) == [target]


# Control voltages


def curves(frames=5000):
    time_s = np.arange(frames) / RATE
    return 2.0 * np.sin(40 * time_s), np.clip(time_s * 20, 0, 1)


@pytest.mark.parametrize("full_scale_volts", [10.0, 5.0, 12.5])
@pytest.mark.parametrize("depth", [24, "float"])
def test_control_voltages_read_back_to_a_step(tmp_path, depth, full_scale_volts):
    """Left pitch at 1 V/oct, right 10 V fully open or the full scale if lower; to a step of 24 bits."""
    pitch, gain = curves()
    assert write_cv(tmp_path / "cv.wav", pitch, gain, RATE, full_scale_volts, depth=depth) == ()
    found, rate = soundfile.read(tmp_path / "cv.wav")
    assert rate == RATE
    volts = found * full_scale_volts
    step = full_scale_volts / 2**23
    np.testing.assert_allclose(volts[:, 0], pitch, atol=step, rtol=0)
    np.testing.assert_allclose(volts[:, 1], gain * min(10.0, full_scale_volts), atol=1.01 * step, rtol=0)


def test_voltages_beyond_the_full_scale_are_held_counted_and_told(tmp_path):
    pitch = np.array([0.0, 4.9, 5.0, 5.1, -6.25])
    (warning,) = write_cv(tmp_path / "cv.wav", pitch, np.zeros(5), RATE, 5.0)
    assert "2 samples" in warning
    assert "5 V" in warning
    assert "6.250 V" in warning
    found, _ = soundfile.read(tmp_path / "cv.wav")
    np.testing.assert_allclose(found[:, 0] * 5, [0, 4.9, 5, 5, -5], atol=2e-6)


def test_the_text_field_cautions_about_dc_and_says_the_scale(tmp_path):
    write_cv(tmp_path / "cv.wav", *curves(), RATE, 12.0, title="Ferry", comment="Settings abc")
    with soundfile.SoundFile(tmp_path / "cv.wav") as file:
        assert file.title == "Ferry"
        for words in ("DC", "never", "loudspeakers", "headphones", "12 V", "1 V/oct", "Settings abc"):
            assert words in file.comment


def test_control_voltages_do_not_depend_on_the_block_size(tmp_path):
    pitch, gain = curves()
    write_cv(tmp_path / "whole.wav", pitch, gain, RATE)
    with CvWriter(tmp_path / "parts.wav", RATE) as writer:
        for start in range(0, len(pitch), 7):
            writer.write(pitch[start : start + 7], gain[start : start + 7])
    assert (tmp_path / "parts.wav").read_bytes() == (tmp_path / "whole.wav").read_bytes()


@pytest.mark.parametrize("volts", [0.0, -5.0, 21.0, float("nan"), float("inf")])
def test_a_full_scale_that_no_output_has_is_refused(tmp_path, volts):
    with pytest.raises(SettingError, match="full scale"):
        CvWriter(tmp_path / "cv.wav", RATE, volts)
    assert list(tmp_path.iterdir()) == []


def test_a_voltage_that_is_not_finite_is_refused(tmp_path):
    with pytest.raises(OutputError, match="not finite"):
        write_cv(tmp_path / "cv.wav", np.array([0.0, np.nan]), np.zeros(2), RATE)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("full_scale_volts", [5.0, 7.3, 10.0])
def test_control_voltages_are_rounded_once(tmp_path, full_scale_volts):
    """Against exact rationals: the code nearest to v / full scale * 2^23."""
    rng = np.random.default_rng(7)
    pitch = rng.uniform(-full_scale_volts, full_scale_volts, 2000)
    gain = rng.uniform(0.0, 1.0, 2000)
    write_cv(tmp_path / "cv.wav", pitch, gain, 48_000, full_scale_volts)
    codes = soundfile.read(tmp_path / "cv.wav", dtype="int32")[0] >> 8
    full = Fraction(full_scale_volts)
    gain_scale = min(Fraction(10), full) / full
    top = 2**23 - 1
    assert codes[:, 0].tolist() == [min(round(Fraction(v) / full * 2**23), top) for v in pitch]
    assert codes[:, 1].tolist() == [min(round(Fraction(g) * gain_scale * 2**23), top) for g in gain]
