"""The waves' Fourier series, the tables made of them, and single cycles from WAV files."""

import math
import os
import random
import struct
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
import soundfile
from numpy.typing import NDArray

import oracle
from conftest import LONG
from glidesmith.errors import SettingError
from glidesmith.oscillator import HIGHEST_SHARE, LEVELS_PER_OCTAVE, oscillate
from glidesmith.wavetable import (
    COARSE_FADE,
    COARSE_STEP,
    FADE,
    FINE_LEVELS,
    IMAGES_DB,
    MOST_PARTIALS,
    _fill_table,
    build_wavetables,
    check_cycle,
    partial_gain,
    partials,
    read_cycle,
    table_gains,
)

WAVES = [
    ("sine", 0.5),
    ("triangle", 0.5),
    ("saw", 0.5),
    ("pulse", 0.05),
    ("pulse", 0.3),
    ("pulse", 0.5),
    ("pulse", 0.95),
]


def seeded_cycle(length: int, seed: int = 7) -> NDArray[np.float64]:
    """A cycle with all the harmonics it has room for, falling by about 6 dB an octave, and with a mean."""
    rng = np.random.default_rng(seed)
    k = np.arange(1, length // 2 + 1)
    spectrum = np.exp(2j * np.pi * rng.random(k.size)) * rng.uniform(0.3, 1.0, k.size) / k
    return 0.2 + 0.4 * np.fft.irfft(np.concatenate([[0.0], spectrum]), length) * length / 4.0


@pytest.mark.parametrize(("wave", "width"), WAVES)
def test_oracle_series(wave: str, width: float) -> None:
    """The oracle's series against the defining integrals by 40-point Gauss-Legendre; 1e-12."""
    cosines, sines = oracle.fourier_series(wave, width, 12)
    kinks = [0.0, 0.25, width, 0.75, 1.0] if wave != "saw" else [0.0, 0.5, 1.0]
    nodes, weights = np.polynomial.legendre.leggauss(40)
    for k in range(1, 13):
        total = 0j
        for low, high in pairwise(sorted(kinks)):
            p = 0.5 * (low + high) + 0.5 * (high - low) * nodes
            y = oracle.naive_wave(wave, width, p) * np.exp(-2j * np.pi * k * p)
            total += (high - low) * np.sum(weights * y)
        assert total == pytest.approx(cosines[k - 1] - 1j * sines[k - 1], abs=1e-12)


@pytest.mark.parametrize(("wave", "width"), WAVES)
def test_partials_are_the_fourier_series(wave: str, width: float) -> None:
    """Every partial against the handbook's series (oracle.py), 1e-12 of full scale; Re(c e^{iθ}) is a cos + b
    sin for c = a - ib.
    """
    cosines, sines = oracle.fourier_series(wave, width, 3000)
    found = partials(wave, width, None, 3000)
    assert found.dtype == np.complex128
    np.testing.assert_allclose(found, cosines - 1j * sines, atol=1e-12)


@pytest.mark.parametrize("length", [8, 9, 600, 601])
def test_cycle_partials(length: int) -> None:
    """A recorded cycle against the defining sums of the discrete Fourier transform, 1e-12; it goes through
    its own samples.
    """
    cycle = seeded_cycle(length)
    found = partials("file", 0.5, cycle, 1000)
    cosines, sines = oracle.cycle_series(cycle, 1000)
    np.testing.assert_allclose(found, cosines - 1j * sines, atol=1e-12)
    p = np.arange(length) / length
    through = sum(np.real(found[k - 1] * np.exp(2j * np.pi * k * p)) for k in range(1, length // 2 + 1))
    centred = cycle - cycle.mean()
    np.testing.assert_allclose(through, centred / np.abs(centred).max(), atol=1e-11)


def test_fewer_partials_are_the_same_partials() -> None:
    cycle = seeded_cycle(600)
    np.testing.assert_array_equal(partials("file", 0.5, cycle, 20), partials("file", 0.5, cycle, 300)[:20])
    assert partials("saw", 0.5, None, 0).shape == (0,)


@pytest.mark.parametrize("length", [8, 600])
def test_level_and_mean_of_a_cycle_do_not_matter(length: int) -> None:
    cycle = seeded_cycle(length)
    np.testing.assert_allclose(
        partials("file", 0.5, cycle, 40), partials("file", 0.5, 0.01 * cycle - 3.0, 40), atol=1e-12
    )


def test_partial_gain_falls_softly() -> None:
    """1 from 18 48ths of an octave down, 0 from one up, falling between, its slope without a step. At 16, 17
    and 18 kHz (at 44.1 kHz) the slope over a hertz has grown as the distance from 15 kHz to a power near 2.
    """
    hertz = np.linspace(12_000.0, 20_000.0, 80_001)
    gains = partial_gain(LEVELS_PER_OCTAVE * np.log2(HIGHEST_SHARE * 44_100 / hertz))
    assert np.all(gains[hertz <= 15_302.0] == 1.0)
    assert np.all(gains[hertz >= 19_561.0] == 0.0)
    slopes = -np.diff(gains) / 0.1
    assert slopes.min() >= 0.0
    assert np.abs(np.diff(slopes)).max() < 1e-6
    distance = np.array([1.0, 2.0, 3.0])
    found = np.interp(15_000.0 + 1000.0 * distance, hertz[1:], slopes)
    power = np.diff(np.log(found)) / np.diff(np.log(distance))
    assert np.all((power > 1.5) & (power < 2.5)), power


def test_no_table_holds_a_partial_over_the_table_above() -> None:
    """A table's partials lie under 0.45 of the rate even for a fundamental as high as the table above is for,
    and one more would not; each has the gain of its own depth.
    """
    for depth in range(1, 673):
        step, fade = (1, FADE) if depth <= FINE_LEVELS else (COARSE_STEP, COARSE_FADE)
        gains, above = table_gains(depth), 2.0 ** ((step - depth) / LEVELS_PER_OCTAVE)
        assert gains.size * above < 1.0
        assert (gains.size + 1) * above >= 1.0 - 1e-9
        for k in {1, 2, gains.size // 2, gains.size} & set(range(1, gains.size + 1)):
            wanted = partial_gain(np.array([depth - LEVELS_PER_OCTAVE * math.log2(k)]), fade)
            assert gains[k - 1] == pytest.approx(wanted[0], abs=1e-12)
    assert table_gains(0).size == 0
    assert table_gains(672).size < MOST_PARTIALS


@pytest.mark.parametrize(("wave", "width"), [*WAVES, ("file", 0.5)])
def test_every_table_is_its_partial_sum(wave: str, width: float) -> None:
    """Each table, read at its depth at 2,003 phases, against the sum of its partials.

    RMS within the images' bound, and 1e-7 for float32's rounding. The images are the variance 1/630 - 1/900
    of the interpolation's error; with its mean, which changes the partials' levels, it is 1/630: √(10/3) =
    1.83 times. Twice is allowed.
    """
    cycle = seeded_cycle(600) if wave == "file" else None
    tables = build_wavetables(wave, width, cycle, 60.0, 48_000)
    phases = ((np.arange(2003) + 0.37) / 2003 * oracle.CYCLE).astype(np.int64)
    series = oracle.fourier_series(wave, width, 512) if cycle is None else oracle.cycle_series(cycle, 512)
    out = np.empty(phases.size, np.float32)
    for depth in [*range(0, FINE_LEVELS, 7), *range(FINE_LEVELS, tables.lowest_level + 1, COARSE_STEP)]:
        heights = np.full(phases.size, -depth / LEVELS_PER_OCTAVE)
        oscillate(phases, heights, tables.levels, tables.cells, out)
        gains = table_gains(depth)
        sounding = (gains * series[0][: gains.size], gains * series[1][: gains.size])
        wanted = oracle.sum_of_sines(phases, sounding)
        error = math.sqrt(np.mean((out - wanted) ** 2))
        assert error <= 2.0 * 10.0 ** (IMAGES_DB / 20.0) * math.sqrt(np.mean(wanted**2)) + 1e-7


def test_cells_join() -> None:
    """A cell ends with the value and slope that the next begins with, to float32's rounding."""
    tables = build_wavetables("saw", 0.5, None, 100.0, 48_000)
    level = tables.levels[260]
    cubics = tables.cells.view(np.float32).reshape(-1, 4).astype(np.float64)
    table = cubics[level["start"] : level["start"] + (1 << (62 - level["shift"]))]
    following = np.roll(table, -1, axis=0)
    scale = np.abs(table).sum(axis=1).max()
    np.testing.assert_allclose(table.sum(axis=1), following[:, 0], atol=4e-7 * scale)
    np.testing.assert_allclose(table @ [0.0, 1.0, 2.0, 3.0], following[:, 1], atol=2e-6 * scale)


def test_depths_that_sound_alike_share_a_table() -> None:
    """A sine needs a table for each of its gains, and below them one that is read alone. A square wave's is
    read alone where no odd partial's gain differs from one depth to the next.
    """
    sine = build_wavetables("sine", 0.5, None, 40.0, 48_000)
    begin, end = FADE
    assert sine.cells.size == 2 * (1 + (begin - end) * 256)
    below = sine.levels[begin + 1 :]
    for name in ("start", "upper_start"):
        assert set(below[name]) == {1 + (begin - end - 1) * 256}
    assert set(below["from_depth"]) == {begin}
    assert set(below["to_depth"]) == {math.inf}
    square = build_wavetables("pulse", 0.5, None, 40.0, 48_000)
    for level in range(FINE_LEVELS):
        odd, before = table_gains(level + 1)[::2], table_gains(level)[::2]
        alike = odd.size == before.size and np.array_equal(odd, before)
        row = square.levels[level + 1]
        assert (row["start"] == row["upper_start"]) == alike


@pytest.mark.parametrize(("wave", "width"), WAVES)
def test_levels_are_described_without_gaps(wave: str, width: float) -> None:
    """One level's lower table is the next one's upper; over the depths that two tables serve, one level and
    below the fine ones four, the weight goes from 1 to 0.
    """
    rows = build_wavetables(wave, width, None, 40.0, 48_000).levels
    same = [name for name in rows.dtype.names or () if name not in ("zero_depth", "slope")]
    assert rows[0].tolist() == (-math.inf, rows[0]["to_depth"], 0.0, 0.0, 0, 62, 0, 62)
    for above, row in pairwise(rows):
        if above["to_depth"] == row["from_depth"]:
            assert above["start"] == row["upper_start"]
            assert above["shift"] == row["upper_shift"]
        else:
            assert all(above[name] == row[name] for name in same)
    for level, row in enumerate(rows[1:]):
        assert row["from_depth"] <= level < row["to_depth"]
        if row["start"] != row["upper_start"]:
            step = 1 if level < FINE_LEVELS else COARSE_STEP
            assert row["to_depth"] - row["from_depth"] == step
            assert row["to_depth"] == row["zero_depth"]
            assert row["slope"] == 1.0 / step
    assert rows[-1]["to_depth"] == math.inf


def test_tables_do_not_depend_on_range_or_rate() -> None:
    """What a level sounds like is the same whichever other levels were built and for whatever rate."""
    small = build_wavetables("pulse", 0.3, None, 300.0, 44_100)
    large = build_wavetables("pulse", 0.3, None, 30.0, 96_000)
    assert small.lowest_level < large.lowest_level
    np.testing.assert_array_equal(small.cells, large.cells[: small.cells.size])
    np.testing.assert_array_equal(small.levels[:-1], large.levels[: small.levels.size - 1])


@pytest.mark.parametrize("lowest_hz", [8.0, 8.1759, 39.9, 40.0, 1000.0, 30_000.0])
@pytest.mark.parametrize("sample_rate", [22_050, 48_000, 192_000])
def test_levels_reach_the_lowest_frequency(lowest_hz: float, sample_rate: float) -> None:
    """The lowest frequency lies in a level that was built, so that all its partials up to 0.45 of the rate
    may sound.
    """
    tables = build_wavetables("sine", 0.5, None, lowest_hz, sample_rate)
    depth = LEVELS_PER_OCTAVE * math.log2(HIGHEST_SHARE * sample_rate / lowest_hz)
    assert tables.lowest_level >= math.floor(depth)
    assert tables.lowest_level <= max(depth, 0.0) + 25.0
    assert tables.levels.size == tables.lowest_level + 2


def test_lowest_level_is_bounded() -> None:
    """Under 8 Hz at 192 kHz nothing more is built: at most 16,384 partials."""
    assert build_wavetables("sine", 0.5, None, 1e-6, 384_000).lowest_level == 672


def test_tables_are_kept() -> None:
    first = build_wavetables("saw", 0.2, None, 100.0, 48_000)
    assert build_wavetables("saw", 0.4, None, 100.0, 48_000) is first
    assert build_wavetables("pulse", 0.2, None, 100.0, 48_000) is not first
    cycle = seeded_cycle(64)
    kept = build_wavetables("file", 0.5, cycle, 100.0, 48_000)
    assert build_wavetables("file", 0.5, cycle.copy(), 100.0, 48_000) is kept
    assert build_wavetables("file", 0.5, seeded_cycle(64, seed=8), 100.0, 48_000) is not kept


def test_tables_hold_no_negative_zero() -> None:
    """-0 would make a table read alone differ in one bit from the same table blended with itself."""
    for wave in ("sine", "triangle", "saw", "pulse"):
        values = build_wavetables(wave, 0.5, None, 200.0, 48_000).cells.view(np.float32)[0::4]
        assert not np.any((values == 0.0) & np.signbit(values))
    faint = np.ones((256, 4), np.float32)
    _fill_table(faint, np.array([-1e-60 + 0j]), 256)
    assert not faint[:, 0].any()
    assert not np.signbit(faint[:, 0]).any()


@pytest.mark.parametrize(
    ("wave", "width", "cycle", "names"),
    [
        ("square", 0.5, None, "wave: 'square'; choose one of sine, triangle, saw, pulse, file"),
        ("pulse", 0.04, None, "width: 0.04; give 0.05 to 0.95"),
        ("pulse", math.nan, None, "width: nan; give 0.05 to 0.95"),
        ("file", 0.5, None, "oscillator.file: missing"),
        ("file", 0.5, np.zeros(7), "7 samples; one cycle has 8 to 65,536"),
        ("file", 0.5, np.zeros((8, 2)), "8×2 samples"),
        ("file", 0.5, np.full(8, 0.5), "silent"),
        ("file", 0.5, np.array([1.0, math.nan] * 4), "NaN or an infinity"),
        ("file", 0.5, np.array([1.7e308] * 7 + [-1.7e308]), "samples up to"),
    ],
)
def test_what_is_no_wave(wave: str, width: float, cycle: NDArray[np.float64] | None, names: str) -> None:
    for attempt in (
        lambda: partials(wave, width, cycle, 10),
        lambda: build_wavetables(wave, width, cycle, 100.0, 48_000),
    ):
        with pytest.raises(SettingError) as caught:
            attempt()
        assert names in str(caught.value)
        assert len(caught.value.lines) == 1


@pytest.mark.parametrize("lowest_hz", [0.0, -1.0, math.nan, math.inf])
def test_lowest_frequency_must_be_one(lowest_hz: float) -> None:
    with pytest.raises(SettingError, match="lowest frequency"):
        build_wavetables("saw", 0.5, None, lowest_hz, 48_000)


@pytest.mark.parametrize(
    ("subtype", "tolerance"), [("PCM_16", 2e-4), ("PCM_24", 1e-6), ("FLOAT", 2e-7), ("DOUBLE", 1e-15)]
)
def test_cycle_is_read(tmp_path: Path, subtype: str, tolerance: float) -> None:
    """Samples come back, to the format's resolution on a peak stretched to 1, with mean 0."""
    cycle = seeded_cycle(600)
    path = tmp_path / "cycle.wav"
    soundfile.write(path, cycle, 48_000, subtype)
    found = read_cycle(path)
    centred = cycle - cycle.mean()
    assert found.dtype == np.float64
    assert found.mean() == pytest.approx(0.0, abs=1e-15)
    assert np.abs(found).max() == 1.0
    np.testing.assert_allclose(found, centred / np.abs(centred).max(), atol=tolerance)


def test_channels_are_averaged(tmp_path: Path) -> None:
    path = tmp_path / "cycle.wav"
    left, right = seeded_cycle(64, 1), seeded_cycle(64, 2)
    soundfile.write(path, np.stack([left, right], axis=1), 44_100, "DOUBLE")
    both = (left + right) / 2.0
    centred = both - both.mean()
    np.testing.assert_allclose(read_cycle(str(path)), centred / np.abs(centred).max(), atol=1e-15)


def test_extended_and_big_wav_headers_are_wav(tmp_path: Path) -> None:
    for kind in ("WAVEX", "RF64"):
        path = tmp_path / f"{kind}.wav"
        soundfile.write(path, seeded_cycle(64), 48_000, "FLOAT", format=kind)
        assert read_cycle(path).shape == (64,)


def _refusal(path: Path | str) -> str:
    with pytest.raises(SettingError) as caught:
        read_cycle(path)
    message = str(caught.value)
    assert message.isprintable()
    assert message.startswith("oscillator.file: ")
    assert message.count("oscillator.file") == 1
    assert message.count("; ") == 1
    return message


@pytest.mark.parametrize(
    ("samples", "subtype", "reason"),
    [
        (np.zeros(7), "FLOAT", "7 samples; one cycle has 8 to 65,536"),
        (np.zeros(0), "FLOAT", "0 samples"),
        (seeded_cycle(65_537), "PCM_16", "65,537 samples"),
        (np.zeros(100), "PCM_16", "silent"),
        (np.full(100, 0.5), "PCM_16", "silent"),
        (np.stack([seeded_cycle(64), -seeded_cycle(64)], axis=1), "DOUBLE", "silent"),
        (np.array([0.5, math.nan] * 8), "FLOAT", "NaN or an infinity"),
        (np.array([0.5, -math.inf] * 8), "FLOAT", "NaN or an infinity"),
    ],
)
def test_wav_files_that_are_no_cycle(
    tmp_path: Path, samples: NDArray[np.float64], subtype: str, reason: str
) -> None:
    path = tmp_path / "cycle.wav"
    soundfile.write(path, samples, 48_000, subtype)
    message = _refusal(path)
    assert reason in message
    assert "cycle.wav" in message


def test_longest_and_shortest_cycle_are_read(tmp_path: Path) -> None:
    for length in (8, 65_536):
        path = tmp_path / "cycle.wav"
        soundfile.write(path, seeded_cycle(length), 48_000, "DOUBLE")
        assert read_cycle(path).size == length


def test_files_that_are_no_wav(tmp_path: Path) -> None:
    assert "no such file" in _refusal(tmp_path / "missing.wav")
    assert "is a folder" in _refusal(tmp_path)
    assert "device or a pipe" in _refusal("/dev/zero")
    assert "cycle.wav" in _refusal(str(tmp_path / "cycle.wav"))
    for name, content in {
        "empty.wav": b"",
        "text.wav": b"title = 'no sound at all'\n",
        "cut.wav": b"RIFF\x00\x00",
        "raw.raw": bytes(4000),
    }.items():
        (tmp_path / name).write_bytes(content)
        assert "not a WAV file" in _refusal(tmp_path / name)
    (tmp_path / "head.wav").write_bytes(b"RIFF\x24\x00\x00\x00WAVEfmt ")
    assert "can't be read as WAV" in _refusal(tmp_path / "head.wav")
    soundfile.write(tmp_path / "other.wav", seeded_cycle(600), 48_000, "PCM_16", format="FLAC")
    assert "not a WAV file" in _refusal(tmp_path / "other.wav")


def test_names_are_printed_safely(tmp_path: Path) -> None:
    assert "\\x1b[31m" in _refusal(tmp_path / "a\x1b[31m\ncycle.wav")
    assert "oscillator.file" in _refusal("nul\0byte.wav")
    assert "oscillator.file" in _refusal("x" * 5000)


def test_a_named_pipe_is_not_waited_for(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.wav")
    assert "device or a pipe" in _refusal(tmp_path / "pipe.wav")


def test_a_missing_cycle_is_told_in_one_clean_line_that_names_the_preset(tmp_path: Path) -> None:
    with pytest.raises(SettingError) as caught:
        read_cycle("nope.wav", "lead.toml")
    assert caught.value.lines == (
        "lead.toml: oscillator.file: nope.wav: there is no such file; check its name and folder",
    )
    (tmp_path / "text.wav").write_text("no sound")
    with pytest.raises(SettingError) as caught:
        read_cycle(tmp_path / "text.wav", "lead.toml")
    assert str(caught.value) == (
        f"lead.toml: oscillator.file: {tmp_path / 'text.wav'}: is not a WAV file; export the cycle as WAV"
    )


@pytest.mark.parametrize("kind", ["WAV", "WAVEX", "RF64", "RIFX"])
@pytest.mark.parametrize("missing", [1, 2, 200, 400])
def test_a_wav_with_less_than_its_header_claims_is_refused(tmp_path: Path, kind: str, missing: int) -> None:
    path = tmp_path / "cycle.wav"
    options = {"format": "WAV", "endian": "BIG"} if kind == "RIFX" else {"format": kind}
    soundfile.write(path, seeded_cycle(100), 48_000, "FLOAT", **options)
    whole = path.read_bytes()
    end = whole.index(b"data") + 8 + 400
    path.write_bytes(whole[:end])
    assert read_cycle(path).size == 100
    path.write_bytes(whole[: end - missing])
    assert f"is cut off: it claims 400 bytes of samples and has {400 - missing}; copy" in _refusal(path)


def test_an_enormous_size_in_the_64_bit_header_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "cycle.wav"
    ds64 = b"ds64" + struct.pack("<IQQQI", 28, 500, 2**63, 2**61, 0)
    pcm = b"fmt " + struct.pack("<IHHIIHH", 16, 1, 1, 48_000, 96_000, 2, 16)
    samples = b"data\xff\xff\xff\xff" + bytes(range(200))
    path.write_bytes(b"RF64\xff\xff\xff\xffWAVE" + ds64 + pcm + samples)
    assert "claims 9,223,372,036,854,775,808 bytes of samples and has 200" in _refusal(path)


def test_a_wav_of_open_length_goes_to_its_end(tmp_path: Path) -> None:
    """What is written into a pipe can't say its length: 0xFFFFFFFF, by common practice."""
    path = tmp_path / "cycle.wav"
    soundfile.write(path, seeded_cycle(100), 48_000, "PCM_16")
    whole = bytearray(path.read_bytes())
    at = whole.index(b"data") + 4
    whole[4:8] = whole[at : at + 4] = b"\xff" * 4
    path.write_bytes(whole)
    assert read_cycle(path).size == 100


def test_a_wav_is_known_by_its_content_whatever_its_name(tmp_path: Path) -> None:
    path = tmp_path / "cycle.raw"
    soundfile.write(path, seeded_cycle(100), 48_000, "FLOAT", format="WAV")
    assert read_cycle(path).size == 100


def test_a_recording_of_minutes_is_not_read(tmp_path: Path) -> None:
    path = tmp_path / "long.wav"
    path.write_bytes(bytes(16_000_001))
    assert "over 16,000,000 bytes, the most that is read; cut the recording" in _refusal(path)


def test_one_sample_is_one(tmp_path: Path) -> None:
    path = tmp_path / "cycle.wav"
    soundfile.write(path, np.zeros(1), 48_000, "FLOAT")
    assert ": 1 sample; one cycle has 8 to 65,536: cut" in _refusal(path)
    with pytest.raises(SettingError, match="cycle: 1 sample; one cycle"):
        check_cycle(np.zeros(1))
    with pytest.raises(SettingError, match="cycle: 2×9 samples; one cycle"):
        check_cycle(np.zeros((2, 9)))


def test_damaged_wav_files(tmp_path: Path) -> None:
    """Random bytes changed, cut off or repeated: a cycle by the rules, or one line."""
    path = tmp_path / "cycle.wav"
    soundfile.write(path, seeded_cycle(100), 48_000, "FLOAT")
    sound = path.read_bytes()
    random_source, lines = random.Random(5), set[str]()
    for _ in range(10_000 if LONG else 400):
        damaged = bytearray(sound)
        for _ in range(random_source.randint(1, 4)):
            where = random_source.randrange(len(damaged) if random_source.random() < 0.3 else 60)
            damaged[where] = random_source.choice([0, 0xFF, 0x7F, 0x80, random_source.randrange(256)])
        if random_source.random() < 0.3:
            del damaged[random_source.randrange(len(damaged)) :]
        path.write_bytes(damaged)
        try:
            cycle = read_cycle(path)
        except SettingError as error:
            lines.update(error.lines)
        else:
            assert 8 <= cycle.size <= 65_536
            assert np.abs(cycle).max() == 1.0
    assert len(lines) > 5
    assert all(line.isprintable() and "cycle.wav" in line for line in lines)
