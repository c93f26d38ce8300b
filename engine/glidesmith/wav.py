"""WAV files: rendered audio, and control voltages.

The file is written here rather than by a library for four reasons: samples are rounded, not floored; a float
file holds no time of day, so the same settings give the same bytes; the file becomes RF64 only when its size
needs it; and what goes wrong on the disk can be told in the system's own words. An independent reader
(libsndfile) checks each file before it takes its name.

Layout (Microsoft and IBM, "Multimedia Programming Interface and Data Specifications 1.0", 1991, chapter 3;
EBU Tech 3306, "RF64", for the reserved ``JUNK`` chunk that turns into ``ds64`` beyond 4 GB): JUNK or ds64,
fmt, fact (float only), LIST INFO (title, comment, software), data.
"""

import struct
from collections.abc import Callable
from pathlib import Path
from typing import BinaryIO, Literal, TypeAlias, cast

import numpy as np
from numpy.typing import NDArray

from glidesmith import __version__
from glidesmith.errors import OutputError, SettingError
from glidesmith.outlet import Outlet
from glidesmith.partfile import PartFile
from glidesmith.sink import Sink
from glidesmith.text import printable

Depth: TypeAlias = Literal[16, 24, "float"]
Samples: TypeAlias = NDArray[np.float32] | NDArray[np.float64]

DEPTHS: tuple[Depth, ...] = (16, 24, "float")
RIFF_LIMIT_BYTES = 0xFFFF_FFFF
"""The largest size that a RIFF header can state; RF64 takes over beyond it."""

FULL_GAIN_VOLTS = 10.0
"""The control voltage of an amplifier that is fully open, unless the output's full scale is lower."""

DC_CAUTION = (
    "carries DC voltages: never play it to loudspeakers or headphones, and check the voltage range of the "
    "input that receives it by its maker's data first"
)

_UNKNOWN = 0xFFFF_FFFF
_PCM, _IEEE_FLOAT = 1, 3
_BLOCK_FRAMES = 16_384
_VOLTS_LIMIT = 20.0


class Dither:
    """Triangular dither of ±1 step, the same for the same seed whatever the lengths of the blocks.

    The sum of two uniform values of one step each makes the error's mean and power independent of the signal
    (Lipshitz, Wannamaker and Vanderkooy, "Quantization and dither: a theoretical survey", J. Audio Eng. Soc.
    40, 1992; from memory). Drawn from the raw output of PCG64, which numpy promises never to change.
    """

    def __init__(self, seed: int = 0) -> None:
        if isinstance(seed, bool) or not isinstance(seed, int) or seed < 0:
            raise SettingError(f"dither seed {seed!r}: give a whole number, 0 or more")
        self._bits = np.random.PCG64(seed)

    def steps(self, shape: tuple[int, ...]) -> NDArray[np.float64]:
        """The next values in steps: float64 of ``shape``, over -1 and under 1, multiples of 2^-32."""
        raw = np.asarray(self._bits.random_raw(shape), dtype=np.uint64)
        high = (raw >> np.uint64(32)).astype(np.int64)
        low = (raw & np.uint64(0xFFFF_FFFF)).astype(np.int64)
        return (high - low).astype(np.float64) * 2.0**-32


def quantise(
    block: Samples, depth: Depth, dither: Dither | None = None
) -> tuple[NDArray[np.int32] | NDArray[np.float32], int]:
    """Round samples to what a file of some depth holds.

    Parameters
    ----------
    block : float32 or float64 (n,) or (n, channels)
        Samples; full scale is ±1.
    depth : 16, 24 or "float"
        Bits of a two's-complement integer, or IEEE 754 single precision.
    dither : Dither, optional
        Added before rounding; integers only.

    Returns
    -------
    codes : int32, or float32 for "float", of the block's shape
        x·2^(depth - 1) to the nearest, ties to even, within what the depth holds: +1 itself takes the top
        code, one step below full scale, since two's complement has none for it.
    clipped : int
        How many samples lay beyond ±1 and were held there.

    Raises
    ------
    OutputError
        For a sample that is not finite.
    """
    if not np.isfinite(block).all():
        raise OutputError(
            "a sample is not finite (NaN or infinite); a file can't hold it, so nothing is written"
        )
    clipped = int(np.count_nonzero(np.abs(block) > 1.0))
    if depth == "float":
        return np.clip(block, -1.0, 1.0).astype(np.float32), clipped
    full = 1 << (depth - 1)
    steps = block * np.float64(full)
    if dither is not None:
        steps += dither.steps(block.shape)
    np.rint(steps, out=steps)
    np.clip(steps, -full, full - 1, out=steps)
    return steps.astype(np.int32), clipped


def _packed(codes: NDArray[np.int32] | NDArray[np.float32], depth: Depth) -> bytes:
    """Interleaved little-endian bytes, as the data chunk holds them."""
    if depth == 16:
        return codes.astype("<i2").tobytes()
    if depth == "float":
        return codes.astype("<f4").tobytes()
    return codes.astype("<i4").reshape(-1, 1).view(np.uint8)[:, :3].tobytes()


def _chunk(name: bytes, content: bytes) -> bytes:
    return name + struct.pack("<I", len(content)) + content + b"\0" * (len(content) % 2)


def _text_chunks(title: str, comment: str) -> bytes:
    fields = ((b"INAM", title), (b"ICMT", comment), (b"ISFT", f"Glidesmith {__version__}"))
    content = b"".join(
        _chunk(name, printable(text).encode("utf-8", "replace") + b"\0") for name, text in fields if text
    )
    return _chunk(b"LIST", b"INFO" + content)


class _Format:
    """The bytes before the samples: of one length, whatever the number of frames turns out to be."""

    def __init__(self, sample_rate: int, channels: int, depth: Depth, title: str, comment: str) -> None:
        self.sample_rate = sample_rate
        self.channels = channels
        self.depth = depth
        self.frame_bytes = channels * (4 if depth == "float" else depth // 8)
        self._text = _text_chunks(title, comment)

    def header(self, frames: int | None, limit_bytes: int = RIFF_LIMIT_BYTES) -> bytes:
        """The header; with None, the sizes of a stream whose length nobody knows yet."""
        body = self._body(frames)
        if frames is None:
            return self._riff(body, _UNKNOWN, _UNKNOWN)
        data_bytes = frames * self.frame_bytes
        riff_bytes = 4 + 36 + len(body) + 8 + data_bytes + data_bytes % 2
        if riff_bytes <= limit_bytes:
            return self._riff(body, riff_bytes, data_bytes)
        ds64 = struct.pack("<QQQI", riff_bytes, data_bytes, frames, 0)
        start = b"RF64" + struct.pack("<I", _UNKNOWN) + b"WAVE" + _chunk(b"ds64", ds64)
        return start + body + b"data" + struct.pack("<I", _UNKNOWN)

    @staticmethod
    def _riff(body: bytes, riff_bytes: int, data_bytes: int) -> bytes:
        start = b"RIFF" + struct.pack("<I", riff_bytes) + b"WAVE" + _chunk(b"JUNK", b"\0" * 28)
        return start + body + b"data" + struct.pack("<I", data_bytes)

    def _body(self, frames: int | None) -> bytes:
        tag, bits = (_IEEE_FLOAT, 32) if self.depth == "float" else (_PCM, self.depth)
        rate_bytes = self.sample_rate * self.frame_bytes
        form = struct.pack(
            "<HHIIHH", tag, self.channels, self.sample_rate, rate_bytes, self.frame_bytes, bits
        )
        if tag == _PCM:
            return _chunk(b"fmt ", form) + self._text
        counted = _UNKNOWN if frames is None else min(frames, _UNKNOWN)
        fact = _chunk(b"fact", struct.pack("<I", counted))
        return _chunk(b"fmt ", form + b"\0\0") + fact + self._text

    def check(self, name: str, frames: int) -> Callable[[BinaryIO], None]:
        """A reader that raises OutputError when libsndfile finds something else than was written."""

        def read_back(file: BinaryIO) -> None:
            import soundfile

            try:
                found = soundfile.info(file)
                facts = (found.frames, found.samplerate, found.channels)
            except soundfile.SoundFileError as problem:
                raise OutputError(
                    f"{printable(name)}: can't be read back ({problem}); write it again"
                ) from None
            if facts != (frames, self.sample_rate, self.channels):
                raise OutputError(f"{printable(name)}: reads back as {facts}, not as written; write it again")

        return read_back


def wav_header(sample_rate: int, depth: Depth, frames: int, title: str = "", comment: str = "") -> bytes:
    """What `WavSink` puts before the samples of a file of one channel and ``frames`` frames."""
    return _Format(_checked_rate(sample_rate, 1), 1, depth, title, comment).header(frames)


def _checked_rate(sample_rate: int, channels: int) -> int:
    """The rate itself where a WAV's header can state it, and the bytes of one second."""
    most = 0xFFFF_FFFF // (4 * channels)
    whole = isinstance(sample_rate, int | np.integer) and not isinstance(sample_rate, bool)
    if not whole or not 1 <= sample_rate <= most:
        raise SettingError(
            f"sample rate {sample_rate!r}: a WAV holds 1 to {most:,} whole hertz; 48000 is usual"
        )
    return int(sample_rate)


class WavSink(Sink):
    """Writes a WAV file that appears whole or not at all; RF64 when it has to be larger than 4 GB.

    Parameters
    ----------
    target : Path or binary stream
        The file. A stream, such as standard output, gets the bytes as they come and is not closed.
    sample_rate : int
        Hz.
    channels : int
        1 or 2.
    depth : 16, 24 or "float"
    title, comment : str
        Go into the file's text fields with control characters escaped; the version of Glidesmith goes beside.
    dither_seed : int, optional
        Adds triangular dither with this seed before rounding to 16 or 24 bits.
    frames_expected : int, optional
        The length, where it is known: a stream's header states it. Without it a stream states the largest
        size, as is usual for streams of unknown length. A file's header is corrected at the end in any case.
    name : str, optional
        What messages call the target.
    limit_bytes : int
        The size from which RF64 is used; for tests.

    Raises
    ------
    SettingError
        For a rate, depth, number of channels or dither that the format can't hold.
    OutputError
        When the target can't be written, here or from any method; one line, and what was there is unchanged.
    """

    def __init__(
        self,
        target: Path | BinaryIO,
        sample_rate: int,
        channels: int = 1,
        depth: Depth = 24,
        *,
        title: str = "",
        comment: str = "",
        dither_seed: int | None = None,
        frames_expected: int | None = None,
        name: str | None = None,
        limit_bytes: int = RIFF_LIMIT_BYTES,
    ) -> None:
        if channels not in (1, 2):
            raise SettingError(f"{channels!r} channels: a WAV is written with 1 or 2")
        if depth not in DEPTHS:
            raise SettingError(f'depth {depth!r}: give 16, 24 or "float"')
        if dither_seed is not None and depth == "float":
            raise SettingError('dither: has no meaning for depth "float", which is not rounded to steps')
        super().__init__(channels)
        self.clipped = 0
        self._dither = None if dither_seed is None else Dither(dither_seed)
        self._format = _Format(_checked_rate(sample_rate, channels), channels, depth, title, comment)
        self._limit_bytes = limit_bytes
        self._expected = frames_expected
        self._held = np.empty((_BLOCK_FRAMES, channels))
        self._held_frames = 0
        self._file = PartFile(target, name)
        try:
            self._file.write(self._format.header(frames_expected, limit_bytes))
        except BaseException:
            self._file.abandon()
            raise

    def write(self, block: Samples) -> None:
        """As any sink, or in float64: samples are rounded once, to the file's depth."""
        super().write(cast("NDArray[np.float32]", block))

    def _take(self, block: NDArray[np.float32]) -> None:
        taken = 0
        while taken < len(block):
            part = block[taken : taken + _BLOCK_FRAMES - self._held_frames]
            self._held[self._held_frames : self._held_frames + len(part)] = part
            self._held_frames += len(part)
            taken += len(part)
            if self._held_frames == _BLOCK_FRAMES:
                self._flush()

    def _flush(self) -> None:
        depth = self._format.depth
        codes, clipped = quantise(self._held[: self._held_frames], depth, self._dither)
        self.clipped += clipped
        self._held_frames = 0
        self._file.write(_packed(codes, depth))

    def _finish(self) -> None:
        try:
            self._flush()
            if self.frames * self._format.frame_bytes % 2:
                self._file.write(b"\0")
            if self._file.whole:
                self._file.rewrite(0, self._format.header(self.frames, self._limit_bytes))
            elif self._expected not in (None, self.frames):
                raise OutputError(
                    f"{printable(self._file.name)}: {self.frames:,} frames came, not the {self._expected:,} "
                    "that its header states; write it again"
                )
            self._file.close(self._format.check(self._file.name, self.frames))
        except BaseException:
            self._discard()
            raise

    def _discard(self) -> None:
        self._file.abandon()


class CvWriter(Outlet):
    """Writes control voltages as a WAV of two channels, for an interface that passes DC.

    Left: pitch volts at 1 V/oct. Right: the gain control, 10 V when fully open, or the full scale where that
    is lower. A sample of 1.0 is ``full_scale_volts``. Voltages beyond it are held there, counted and told in
    ``warnings``.

    Parameters
    ----------
    target, sample_rate, title, comment, frames_expected, name
        As in `WavSink`; the caution about DC is added to the comment.
    full_scale_volts : float
        The voltage that the interface puts out for a sample of 1.0; over 0, up to 20.
    depth : 24 or "float"

    Raises
    ------
    SettingError, OutputError
        As in `WavSink`.
    """

    def __init__(
        self,
        target: Path | BinaryIO,
        sample_rate: int,
        full_scale_volts: float = 10.0,
        depth: Depth = 24,
        *,
        title: str = "",
        comment: str = "",
        frames_expected: int | None = None,
        name: str | None = None,
    ) -> None:
        if not 0.0 < full_scale_volts <= _VOLTS_LIMIT:
            raise SettingError(
                f"full scale {full_scale_volts!r} V: give your output's, over 0 and up to {_VOLTS_LIMIT:g} V"
            )
        self.full_scale_volts = float(full_scale_volts)
        self.full_gain_volts = min(FULL_GAIN_VOLTS, self.full_scale_volts)
        self._beyond = 0
        self._furthest_volts = 0.0
        scale = (
            f"Left: pitch at 1 V/oct. Right: gain control, {self.full_gain_volts:g} V fully open. "
            f"Full scale: {self.full_scale_volts:g} V."
        )
        self._sink = WavSink(
            target,
            sample_rate,
            2,
            depth,
            title=title,
            comment=f"Control voltages; this file {DC_CAUTION}. {scale} {comment}".rstrip(),
            frames_expected=frames_expected,
            name=name,
        )

    def write(self, pitch_volts: NDArray[np.float64], gain_control: NDArray[np.float64]) -> None:
        """Take the next frames: volts, and the gain control from 0 to 1, each float64 (n,)."""
        frames = np.empty((len(pitch_volts), 2))
        np.divide(pitch_volts, self.full_scale_volts, out=frames[:, 0])
        np.multiply(gain_control, self.full_gain_volts / self.full_scale_volts, out=frames[:, 1])
        size = np.abs(frames)
        self._beyond += int(np.count_nonzero(size > 1.0))
        furthest_volts = float(size.max(initial=0.0)) * self.full_scale_volts
        self._furthest_volts = max(self._furthest_volts, furthest_volts)
        self._sink.write(frames)

    @property
    def warnings(self) -> tuple[str, ...]:
        """What the user must know, a line each: voltages that did not fit."""
        if not self._beyond:
            return ()
        return (
            f"control voltage: {self._beyond:,} samples are held at the full scale of "
            f"{self.full_scale_volts:g} V (the furthest asked for is {self._furthest_volts:.3f} V); "
            "give your output's full scale, or move tuning.zero_volts",
        )

    def close(self) -> None:
        """Finish the file."""
        self._sink.close()

    def abandon(self) -> None:
        """Remove what was begun."""
        self._sink.abandon()


def write_cv(
    target: Path | BinaryIO,
    pitch_volts: NDArray[np.float64],
    gain_control: NDArray[np.float64],
    sample_rate: int,
    full_scale_volts: float = 10.0,
    *,
    depth: Depth = 24,
    title: str = "",
    comment: str = "",
) -> tuple[str, ...]:
    """Write whole control signals, each float64 (n,); see `CvWriter`. Returns its warnings."""
    writer = CvWriter(
        target,
        sample_rate,
        full_scale_volts,
        depth,
        title=title,
        comment=comment,
        frames_expected=len(pitch_volts),
    )
    with writer:
        for start in range(0, len(pitch_volts), _BLOCK_FRAMES):
            part = slice(start, start + _BLOCK_FRAMES)
            writer.write(pitch_volts[part], gain_control[part])
    return writer.warnings
