"""The oscillator's waves as Fourier series, and the tables it reads them from.

A wave is a function of the phase p, 0 to 1 over a cycle, and spans -1 to 1 before it is band-limited:

========  ==============================================================================================
sine      sin(2πp)
triangle  from 0 up to 1 at p = 1/4, down to -1 at 3/4, back to 0
saw       2p - 1
pulse     1 for p < width, else -1; its mean is removed and the rest not stretched: 0.05 reaches 1.9
file      one cycle of a recording, its mean removed and stretched to a peak of 1, through its own samples
========  ==============================================================================================

The series of the first four stand in any handbook (Bronshtein and Semendyayev, table of Fourier expansions;
from memory); the last is the discrete Fourier transform of the cycle.
"""

import io
import math
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from glidesmith.errors import SettingError
from glidesmith.oscillator import HIGHEST_SHARE, LEVEL, LEVELS_PER_OCTAVE
from glidesmith.text import counted, file_name, printable, read_bytes

if TYPE_CHECKING:
    from numpy.typing import NDArray

WAVES = ("sine", "triangle", "saw", "pulse", "file")
NARROWEST, WIDEST = 0.05, 0.95
SHORTEST_CYCLE, LONGEST_CYCLE = 8, 65_536

MOST_PARTIALS = 16_384
"""Of the lowest table: enough for all partials under 0.45 of the rate down to 8 Hz at 192 kHz."""

IMAGES_DB = -115.0
"""At most the power of the images that interpolation makes of the partials, against the wave's power."""

FADE = (18, 1)
"""The depths between which a partial fades: at a rate of 44.1 kHz from 15.3 to 19.6 kHz."""

FINE_LEVELS = 7 * LEVELS_PER_OCTAVE
"""Down to here a table stands at every level; below, no single partial near the end is loud, and fewer do."""

COARSE_STEP = 4
"""Levels from table to table below the fine ones."""

COARSE_FADE = (15, 4)
"""As `FADE`, for these tables: from 16.0 to 18.7 kHz."""

_LOWEST_LEVEL = LEVELS_PER_OCTAVE * int(math.log2(MOST_PARTIALS))
_LEVELS_TOGETHER = 24
_SMALLEST_BITS = 8
_NO_PARTIAL = 1e-12
_SILENT = 1e-6
_WAV_MARKS = (b"RIFF", b"RIFX", b"RF64")
MOST_WAV_BYTES = 16_000_000
_UNKNOWN_SIZE = 0xFFFFFFFF
_TO_MEND_LENGTH = "cut the recording to a single cycle"


@dataclass(frozen=True, eq=False)
class Wavetables:
    """One wave's tables, to be read by `glidesmith.oscillator`. They are shared: never write to them.

    Parameters
    ----------
    wave : str
        The wave's name.
    lowest_level : int
        The last level that is there; frequencies under it are served by it.
    levels : LEVEL (lowest_level + 2,)
        The levels, after one record of silence.
    cells : int64 (2 · cells,)
        Each cell of each table as two words, which hold four float32: the coefficients c0 to c3 of the cubic.
    """

    wave: str
    lowest_level: int
    levels: "NDArray[Any]"
    cells: "NDArray[np.int64]"


def partial_gain(depths: "NDArray[np.float64]", fade: tuple[int, int] = FADE) -> "NDArray[np.float64]":
    """The gain of a partial at a depth of its own, in levels under 0.45 of the sample rate.

    1 - (6x³ - x¹⁸)/5, where x goes from 0 to 1 between the two depths of ``fade``. The second is as far under
    height 0 as a table stands under the one above, so that their blend is silent from height 0 on.

    Where a glide starts or stops suddenly, a fading partial's amplitude has a corner, and so sidebands that
    fall as slope/distance²: their energy under 15 kHz goes with slope²/distance³. So the fade starts near
    15 kHz (at a rate of 44.1 kHz, where it is tightest), its slope grows about as the distance from there
    squared, and only at the very end goes to 0. Found by trying many exponents and lengths for the least
    energy of the worst partial.
    """
    begin, end = fade
    x = np.clip((begin - depths) / (begin - end), 0.0, 1.0)
    cube = x * x * x
    return np.asarray(1.0 - cube * (6.0 - np.square(np.square(cube)) * cube) / 5.0, dtype=np.float64)


def table_gains(depth: int) -> "NDArray[np.float64]":
    """The gains of the partials in the table at a whole depth: all that are over 0, from the first up."""
    fade = FADE if depth <= FINE_LEVELS else COARSE_FADE
    count = math.ceil(2.0 ** ((depth - fade[1]) / LEVELS_PER_OCTAVE) - 1e-9) - 1
    return partial_gain(depth - LEVELS_PER_OCTAVE * np.log2(np.arange(1, count + 1)), fade)


def check_cycle(cycle: "NDArray[np.float64]", where: str = "cycle") -> "NDArray[np.float64]":
    """One cycle with its mean removed and stretched to a peak of 1; SettingError where it is no cycle."""
    if cycle.ndim != 1 or not SHORTEST_CYCLE <= cycle.size <= LONGEST_CYCLE:
        raise SettingError(
            f"{where}: {_length_text(cycle.shape)}; one cycle has {SHORTEST_CYCLE} to "
            f"{LONGEST_CYCLE:,}: {_TO_MEND_LENGTH}"
        )
    if not np.isfinite(cycle).all():
        raise SettingError(f"{where}: holds a NaN or an infinity; export the cycle again as finite samples")
    with np.errstate(over="ignore"):
        centred = cycle - cycle.mean()
    peak = float(np.abs(centred).max())
    if not math.isfinite(peak):
        raise SettingError(
            f"{where}: samples up to {np.abs(cycle).max():g}; export the cycle again at -1 to 1"
        )
    if peak < _SILENT:
        raise SettingError(
            f"{where}: silent (peak {peak:g} without its mean); choose a cycle with a sound in it"
        )
    return np.asarray(centred / peak, dtype=np.float64)


def _length_text(shape: tuple[int, ...]) -> str:
    if len(shape) == 1:
        return counted(shape[0], "sample", "samples")
    return f"{'×'.join(map(str, shape))} samples"


def read_cycle(path: str | Path, where: str = "") -> "NDArray[np.float64]":
    """Read one cycle from a WAV file.

    Parameters
    ----------
    path : str or Path
        A WAV file of 8 to 65,536 samples; several channels are averaged. Its sample rate has no meaning here.
    where : str
        What begins an error's line: the preset that names the file, if one does.

    Returns
    -------
    float64 (n,)
        The cycle, its mean removed, peak 1.

    Raises
    ------
    SettingError
        One line: no such file, no WAV file, cut off, too short, too long, silent or not finite.
    """

    def refuse(line: str) -> SettingError:
        return SettingError(f"{_cycle_prefix(where)}: {line}")

    place = Path(path)
    return parse_cycle(read_bytes(place, MOST_WAV_BYTES, refuse, _TO_MEND_LENGTH), place, where)


def _cycle_prefix(where: str) -> str:
    return f"{where}: oscillator.file" if where else "oscillator.file"


def parse_cycle(data: bytes, path: Path, where: str = "") -> "NDArray[np.float64]":
    """What `read_cycle` makes of a file's content; ``path`` is its name. Raises SettingError."""
    import soundfile

    begin_with_name = f"{_cycle_prefix(where)}: {file_name(path)}"
    _check_wav(data, begin_with_name)
    try:
        with soundfile.SoundFile(io.BytesIO(data)) as wav:
            if not SHORTEST_CYCLE <= wav.frames <= LONGEST_CYCLE:
                raise SettingError(
                    f"{begin_with_name}: {_length_text((wav.frames,))}; one cycle has {SHORTEST_CYCLE} to "
                    f"{LONGEST_CYCLE:,}: {_TO_MEND_LENGTH}"
                )
            samples = wav.read(dtype="float64", always_2d=True)
    except (soundfile.SoundFileError, OSError) as error:
        reason = printable(str(getattr(error, "error_string", error))).rstrip(".")
        raise SettingError(
            f"{begin_with_name}: can't be read as WAV ({reason}); export it again as WAV"
        ) from None
    with np.errstate(invalid="ignore", over="ignore"):
        cycle = samples.mean(axis=1)
    return check_cycle(cycle, begin_with_name)


def _check_wav(data: bytes, where: str) -> None:
    """Refuse what is no WAV file before the library for sound files guesses, and samples that are cut off.

    A data chunk of 0xFFFFFFFF bytes in a plain WAV goes on to the end of the file: that is what programs
    write that don't know the length beforehand.
    """
    if data[:4] not in _WAV_MARKS or data[8:12] != b"WAVE":
        raise SettingError(f"{where}: is not a WAV file; export the cycle as WAV")
    order: Literal["big", "little"] = "big" if data[:4] == b"RIFX" else "little"
    begin, long_size = 20, _UNKNOWN_SIZE
    while begin <= len(data):
        name = data[begin - 8 : begin - 4]
        size = int.from_bytes(data[begin - 4 : begin], order)
        if name == b"ds64":  # EBU Tech 3306: the 64-bit sizes of the file and of its data
            long_size = int.from_bytes(data[begin + 8 : begin + 16], order)
        if name == b"data":
            claimed = long_size if size == _UNKNOWN_SIZE else size
            if claimed != _UNKNOWN_SIZE and claimed > len(data) - begin:
                raise SettingError(
                    f"{where}: is cut off: it claims {counted(claimed, 'byte', 'bytes')} of samples and has "
                    f"{len(data) - begin:,}; copy or export it again"
                )
            return
        begin += size + size % 2 + 8


def partials(
    wave: str, width: float, cycle: "NDArray[np.float64] | None", count: int
) -> "NDArray[np.complex128]":
    """The Fourier series of a wave.

    Parameters
    ----------
    wave : str
        One of `WAVES`.
    width : float
        Share of the cycle for which a pulse is up, 0.05 to 0.95; other waves ignore it.
    cycle : float64 (n,) or None
        The cycle of the wave ``file``, 8 to 65,536 samples; other waves ignore it.
    count : int
        How many partials.

    Returns
    -------
    complex128 (count,)
        c with wave(p) = Σ Re(c[k - 1] · exp(2πikp)), k from 1.

    Raises
    ------
    SettingError
        For a wave, width or cycle that can't be.
    """
    k = np.arange(1, count + 1).astype(np.complex128)
    if wave == "sine":
        return np.where(k == 1, -1j, 0j)
    if wave == "triangle":
        sign = np.array([0.0, 1.0, 0.0, -1.0])[np.arange(1, count + 1) % 4]
        return -8j / math.pi**2 * sign / k**2
    if wave == "saw":
        return 2j / (math.pi * k)
    if wave == "pulse":
        if not NARROWEST <= width <= WIDEST:
            raise SettingError(f"oscillator.width: {width!r}; give {NARROWEST} to {WIDEST}")
        return 2.0 / (1j * math.pi * k) * (1.0 - np.exp(-2j * math.pi * k * width))
    if wave != "file":
        raise SettingError(f"oscillator.wave: {wave!r}; choose one of {', '.join(WAVES)}")
    if cycle is None:
        raise SettingError('oscillator.file: missing; the wave "file" needs a WAV file that holds one cycle')
    return _cycle_partials(check_cycle(np.asarray(cycle, dtype=np.float64)), count)


def _cycle_partials(cycle: "NDArray[np.float64]", count: int) -> "NDArray[np.complex128]":
    """The discrete Fourier transform; the last partial of an even length is a cosine, counted once."""
    spectrum = np.fft.rfft(cycle) * (2.0 / cycle.size)
    if cycle.size % 2 == 0:
        spectrum[-1] = spectrum[-1].real / 2.0
    found = np.zeros(count, dtype=np.complex128)
    kept = min(count, spectrum.size - 1)
    found[:kept] = spectrum[1 : kept + 1]
    return found


def build_wavetables(
    wave: str, width: float, cycle: "NDArray[np.float64] | None", lowest_hz: float, sample_rate: float
) -> Wavetables:
    """A wave's tables for all frequencies from ``lowest_hz`` up.

    The tables don't depend on the sample rate, and no table on which others are there: ``lowest_hz`` and
    ``sample_rate`` only settle how far down they go. The tables for the highest frequencies are small and
    always there. What was built lately is kept.

    Parameters
    ----------
    wave, width, cycle
        As for `partials`.
    lowest_hz : float
        The lowest frequency to be sounded with all its partials, over 0. Still lower ones sound, with fewer.
    sample_rate : float
        Hz.

    Raises
    ------
    SettingError
        As `partials`.
    """
    if not (0.0 < lowest_hz < math.inf and 0.0 < sample_rate < math.inf):
        raise SettingError(
            f"lowest frequency {lowest_hz!r} Hz at {sample_rate!r} Hz: give finite ones over 0"
        )
    depth = LEVELS_PER_OCTAVE * math.log2(HIGHEST_SHARE * sample_rate / lowest_hz)
    together = math.ceil(max(depth, 1.0) / _LEVELS_TOGETHER) * _LEVELS_TOGETHER
    key = None
    if wave == "file" and cycle is not None:
        key = check_cycle(np.asarray(cycle, dtype=np.float64)).tobytes()
    return _wavetables(wave, float(width) if wave == "pulse" else 0.5, key, min(together, _LOWEST_LEVEL))


@lru_cache(maxsize=8)
def _wavetables(wave: str, width: float, cycle: bytes | None, lowest_level: int) -> Wavetables:
    depths = _table_depths(lowest_level)
    gains = [table_gains(depth) for depth in depths]
    series = partials(wave, width, None if cycle is None else np.frombuffer(cycle), gains[-1].size)
    series = np.where(np.abs(series) > _NO_PARTIAL, series, 0j)
    tables, numbers = _different([gain * series[: gain.size] for gain in gains])
    sizes = [0, *map(_table_bits, tables[1:])]
    starts = np.cumsum([0, *(1 << bits for bits in sizes)])
    coefficients = np.zeros((starts[-1], 4), dtype=np.float32)
    for table in range(1, len(tables)):
        _fill_table(coefficients[starts[table] : starts[table + 1]], tables[table], 1 << sizes[table])
    places = [(starts[number], 62 - sizes[number]) for number in numbers]
    levels = _describe_levels(depths, places)
    return Wavetables(wave, lowest_level, levels, coefficients.view(np.int64).reshape(-1))


def _table_depths(lowest_level: int) -> list[int]:
    """The whole depths at which tables stand, from 0 to the lowest level."""
    fine = min(FINE_LEVELS, lowest_level)
    return [*range(fine), *range(fine, lowest_level + 1, COARSE_STEP)]


def _different(
    series: "list[NDArray[np.complex128]]",
) -> "tuple[list[NDArray[np.complex128]], list[int]]":
    """The series that differ from the one before, and for each of all series the number of the kept one."""
    kept, numbers = [series[0]], [0]
    for following in series[1:]:
        size = kept[-1].size
        if not np.array_equal(kept[-1], following[:size]) or following[size:].any():
            kept.append(following)
        numbers.append(len(kept) - 1)
    return kept, numbers


def _table_bits(series: "NDArray[np.complex128]") -> int:
    """log2 of the size that a table needs to keep its images under `IMAGES_DB`.

    Between two points a step apart, the error of cubic Hermite interpolation is f''''/24 · t²(1 - t)² (Davis,
    Interpolation and Approximation, 1963, theorem 3.5.1; from memory). For a partial of x radians a step that
    is x⁴/24 of it, times a pulse train of mean 1/30, which only changes the partial's level, and variance
    1/630 - 1/900: the images.
    """
    power = np.square(np.abs(series))
    to_fourth = np.square(np.square(2.0 * math.pi * np.arange(1, series.size + 1)))
    images = np.sum(power * np.square(to_fourth)) * ((1.0 / 630.0 - 1.0 / 900.0) / 24.0**2)
    allowed = np.sum(power) * 10.0 ** (IMAGES_DB / 10.0)
    needed = (images / allowed) ** 0.125 if allowed > 0.0 else 0.0
    return math.ceil(math.log2(max(needed, 4.0 * series.size, 2.0**_SMALLEST_BITS)))


def _describe_levels(depths: list[int], places: "list[tuple[np.int64, int]]") -> "NDArray[Any]":
    """The records of all levels, from the depths at which tables stand and each one's start and shift."""
    levels = np.zeros(depths[-1] + 2, LEVEL)
    levels[0] = (-math.inf, 0.0, 0.0, 0.0, *places[0], *places[0])
    for (above, below), (upper, lower) in zip(pairwise(depths), pairwise(places), strict=True):
        levels[above + 1 : below + 1] = (above, below, below, 1.0 / (below - above), *lower, *upper)
    levels[-1] = (depths[-1], math.inf, 0.0, 0.0, *places[-1], *places[-1])
    alone = levels["start"] == levels["upper_start"]
    joined = alone[:-1] & alone[1:] & (levels["start"][:-1] == levels["start"][1:])
    for level in np.flatnonzero(joined):
        levels["from_depth"][level + 1] = levels["from_depth"][level]
    for level in np.flatnonzero(joined)[::-1]:
        levels["to_depth"][level] = levels["to_depth"][level + 1]
    return levels


def _fill_table(coefficients: "NDArray[np.float32]", series: "NDArray[np.complex128]", size: int) -> None:
    """Every cell's cubic Hermite coefficients, from the series' exact values and slopes at its borders."""
    spectra = np.zeros((2, size // 2 + 1), dtype=np.complex128)
    spectra[0, 1 : series.size + 1] = series * (size / 2.0)
    spectra[1, 1 : series.size + 1] = series * (1j * math.pi * np.arange(1, series.size + 1))
    values, slopes = np.fft.irfft(spectra, size)
    rise = np.concatenate([values[1:], values[:1]]) - values
    bend = slopes + np.concatenate([slopes[1:], slopes[:1]]) - 2.0 * rise
    coefficients[:, 0] = values
    coefficients[:, 1] = slopes
    coefficients[:, 2] = rise - slopes - bend
    coefficients[:, 3] = bend
    # Adding 0 turns -0 into 0, lest a table read alone differ in a bit from one blended with itself.
    coefficients[:, 0] += np.float32(0.0)
