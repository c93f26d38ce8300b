"""One candidate on its way into a comparison set: rendered, measured, brought to the common loudness.

Loudness and true peak are those of ITU-R BS.1770, target and ceiling those of EBU R 128.

All clips of a set are equally long: silence follows the shorter ones, and the longest too, for as long as a
gating block still holds some of its sound. So every sound is in as many blocks as any other, however it ends,
every meter finds the same blocks, and a clip's length tells nothing.
"""

import hashlib
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from io import BytesIO
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.candidates import Candidate, heard_settings
from glidesmith.errors import SettingError
from glidesmith.rendering import render_program
from glidesmith.setfolder import Earlier, Rendered, SetFolder, codes_digest
from glidesmith.text import shortened, shown
from glidesmith.wav import quantise

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from glidesmith.facts import Facts
    from glidesmith.program import Program

    Audio = NDArray[np.float32]

TARGET_LUFS = -23.0
"""The loudness that all candidates get where their peaks allow it."""

CEILING_DBTP = -1.0
"""Every true peak stays under this."""

FLAC_HIGHEST_ODD_HZ = 65_535
"""Up to here FLAC has every rate, beyond only multiples of 10 (RFC 9639, "sample rate bits"; from memory)."""

_HOPS_A_SECOND, _HOPS_A_BLOCK = 10, 4
_HEADROOM_DB = 0.01
_CLOSE_LU = 0.005
_LARGE_GAIN_DB = 30.0
_MOST_PASSES = 6
_FAINT = 0.01
_NO_RENDER = Rendered(-math.inf, -math.inf, True, "")
_NO_CODES = np.zeros(0, np.int32)


@dataclass(frozen=True, slots=True)
class Span:
    """How long all clips of a set are, and how all are metered.

    ``frames``: of every WAV, a whole number of the meter's hops of 100 ms. ``gated``: as BS.1770 has it, else
    by the energy over ``metered_frames`` without gates.
    """

    frames: int
    gated: bool
    metered_frames: int


def common_span(lengths: Sequence[int], sample_rate: int) -> Span:
    """The span of clips that are ``lengths`` frames long as rendered.

    The gate is left out for all where any is shorter than its block of 400 ms: it would leave some of one
    clip's sound out and all of another's in, and what is heard side by side must be metered in one way.
    """
    longest = max(lengths)
    hops = -(-longest * _HOPS_A_SECOND // sample_rate) + _HOPS_A_BLOCK - 1
    frames = (hops * sample_rate + _HOPS_A_SECOND // 2) // _HOPS_A_SECOND
    gated = min(lengths) * _HOPS_A_SECOND >= _HOPS_A_BLOCK * sample_rate
    return Span(frames, gated, frames if gated else longest)


def check_rate(sample_rate: int) -> None:
    """Raise SettingError for a rate that the page's audio can't have."""
    if sample_rate > FLAC_HIGHEST_ODD_HZ and sample_rate % 10:
        below = sample_rate - sample_rate % 10
        raise SettingError(
            f"sample rate {sample_rate} Hz: the page holds its audio as FLAC, which has rates over "
            f"{FLAC_HIGHEST_ODD_HZ:,} Hz in multiples of 10 only; take {below} or {below + 10}"
        )


class Take:
    """One candidate, its WAV's name, and what is known of it; `measure` and `finish` fill in the rest.

    ``rendered`` is the audio's own loudness and peak; ``gain_db``, ``lufs`` and ``true_peak_dbtp`` are of the
    WAV, ``codes`` int32 (n,) its samples as 24-bit numbers and ``flac`` the same compressed. ``kept`` is the
    earlier run's entry where its samples were still good.
    """

    def __init__(
        self,
        candidate: Candidate,
        file: str,
        program: "Program",
        facts: "Facts",
        differs: Sequence[str],
        lines: dict[str, Any],
        span: Span,
    ) -> None:
        self.candidate, self.label, self.digest = candidate, candidate.label, candidate.digest
        self.file = file
        self.sample_rate, self.span = program.sample_rate, span
        self.facts, self.differs, self.lines = facts, list(differs), lines
        self.rendered = _NO_RENDER
        self.gain_db = 0.0
        self.lufs = self.true_peak_dbtp = -math.inf
        self.codes = _NO_CODES
        self.flac = b""
        self.kept: Earlier | None = None
        self.warnings: tuple[str, ...] = ()
        self._program = program
        self._audio: Audio | None = None

    def measure(self, earlier: Earlier | None) -> None:
        """Settle the loudness and peak as rendered: from an earlier run, else by rendering.

        Raises SettingError for silence.
        """
        if earlier is not None:
            self.rendered = earlier.rendered
        else:
            audio = self._rendered_audio()
            digest = hashlib.sha256(audio[: self._program.length].astype("<f4").tobytes()).hexdigest()
            self.rendered = _measured(audio, self.sample_rate, self.span, self.label, digest)

    def finish(self, common_lufs: float, earlier: Earlier | None, place: SetFolder) -> None:
        """Bring the candidate to a loudness, by what stands in ``place`` if ``earlier`` says that it may be
        used."""
        codes = None if earlier is None else place.untouched_codes(earlier)
        if earlier is not None and codes is not None:
            self.kept, self.codes, entry = earlier, _of_length(codes, self.span.frames), earlier.entry
            self.gain_db, self.lufs = entry["gain_db"], entry["lufs"]
            self.true_peak_dbtp, self.warnings = entry["true_peak_dbtp"], tuple(entry["warnings"])
        else:
            self._apply_gain(common_lufs)
        self.flac = _flac(self.codes, self.sample_rate)

    def _rendered_audio(self) -> "Audio":
        if self._audio is None:
            rendering = render_program(self._program)
            self._audio, self.warnings = _of_length(rendering.audio, self.span.frames), rendering.warnings
        return self._audio

    def _apply_gain(self, common_lufs: float) -> None:
        """One gain, on the samples as rendered, and what is measured afterwards."""
        audio = self._rendered_audio()
        self.gain_db = common_lufs - self.rendered.lufs
        louder = _scaled(audio, self.gain_db)
        lufs, peak_dbtp = _metered(louder, self.sample_rate, self.span)
        # Far under the target the meter's gate may decide otherwise than near it: then once more.
        if abs(lufs - common_lufs) > _CLOSE_LU:
            room = CEILING_DBTP - _HEADROOM_DB - peak_dbtp
            self.gain_db += min(common_lufs - lufs, room)
            louder = _scaled(audio, self.gain_db)
            lufs, peak_dbtp = _metered(louder, self.sample_rate, self.span)
        self.lufs, self.true_peak_dbtp = lufs, peak_dbtp
        self.codes = quantise(louder, 24)[0].astype(np.int32)
        self._audio = None

    def entry(self, number: int) -> dict[str, Any]:
        """The candidate as ``comparison.json`` has it."""
        return {
            "number": number,
            "label": self.label,
            "file": self.file,
            "settings_sha256": self.digest,
            "varied": dict(self.candidate.varied),
            "settings": heard_settings(self.candidate.preset),
            "gain_db": self.gain_db,
            "lufs": self.lufs,
            "true_peak_dbtp": self.true_peak_dbtp,
            "frames": self.codes.size,
            "facts": self.facts.as_dict(),
            "differs": self.differs,
            "warnings": list(self.warnings),
            "rendered": self.rendered.as_dict(),
            "audio_sha256": codes_digest(self.codes),
        }


def _scaled(audio: "Audio", gain_db: float) -> "Audio":
    scaled: Audio = (audio * np.float64(10.0 ** (gain_db / 20.0))).astype(np.float32)
    return scaled


def _of_length(samples: Any, frames: int) -> Any:
    """Samples with silence after them, or without some of the silence that they end with."""
    if samples.size >= frames:
        return samples[:frames]
    return np.concatenate([samples, np.zeros(frames - samples.size, samples.dtype)])


def _metered(audio: "Audio", sample_rate: int, span: Span) -> tuple[float, float]:
    """Loudness in LUFS and true peak in dBTP."""
    from glidesmith.loudness import LoudnessMeter

    meter = LoudnessMeter(sample_rate)
    meter.add(audio)
    found = meter.result()
    if span.gated:
        return float(found.integrated_lufs), float(found.true_peak_dbtp)
    energy = float(meter.arrays.squares[: int(meter.meter["steps"][0])].sum())
    lufs = -0.691 + 10.0 * math.log10(energy / span.metered_frames) if energy > 0.0 else -math.inf
    return lufs, float(found.true_peak_dbtp)


def _measured(audio: "Audio", sample_rate: int, span: Span, label: str, digest: str) -> Rendered:
    """Loudness and true peak of audio at its own level.

    The meter's gate has an absolute threshold, so that loudness does not quite move with the level: it is
    taken near the target, where the audio will be heard, and told back to the level as rendered.
    """
    peak = float(np.abs(audio).max(initial=0.0))
    if peak == 0.0:
        raise _silent(label)
    gain_db = 0.0 if peak > _FAINT else -20.0 * math.log10(peak) - 6.0
    for _ in range(_MOST_PASSES):
        lufs, peak_dbtp = _metered(_scaled(audio, gain_db), sample_rate, span)
        if not math.isfinite(lufs):
            raise _silent(label)
        off = TARGET_LUFS - lufs
        if abs(off) < _CLOSE_LU:
            break
        gain_db += off
    return Rendered(lufs - gain_db, peak_dbtp - gain_db, span.gated, digest)


def _silent(label: str) -> SettingError:
    return SettingError(
        f"candidate {shown(label)} is silent, so its loudness can't be matched; look at its gain settings "
        "and levels, or leave it out"
    )


def common_loudness(takes: Sequence[Take]) -> tuple[float, str | None]:
    """The loudness that all get, in LUFS, and whose peaks keep it under the target, if any do."""
    highest = TARGET_LUFS
    limit: str | None = None
    for take in takes:
        reachable = take.rendered.lufs - take.rendered.true_peak_dbtp + CEILING_DBTP - _HEADROOM_DB
        if reachable < highest:
            highest, limit = reachable, take.label
    return highest, limit


def _flac(codes: "NDArray[np.int32]", sample_rate: int) -> bytes:
    """The samples of a 24-bit WAV as FLAC, bit for bit."""
    import soundfile

    file = BytesIO()
    soundfile.write(file, codes << 8, sample_rate, subtype="PCM_24", format="FLAC")
    return file.getvalue()


def warnings_of(takes: Sequence[Take]) -> Iterator[str]:
    """What the listener should know: each line once, with whom it is about; and who sounds the same."""
    whose: dict[str, list[str]] = {}
    same: dict[str, list[str]] = {}
    for take in takes:
        same.setdefault(take.rendered.sha256, []).append(take.label)
        for line in take.warnings:
            whose.setdefault(line, []).append(take.label)
    for line, labels in whose.items():
        yield line if len(labels) == len(takes) else f"{_listed(labels)}: {line}"
    for take in takes:
        if abs(take.gain_db) > _LARGE_GAIN_DB:
            how = "quieter" if take.gain_db > 0 else "louder"
            yield (
                f"{shown(shortened(take.label))}: was {abs(take.gain_db):.0f} dB {how} as rendered than "
                "here; look at its envelope and its gain slew"
            )
    for labels in same.values():
        if len(labels) > 1:
            yield (
                f"{_listed(labels)}: sound the same on this phrase, sample for sample; what sets them apart "
                "has no effect here"
            )


def _listed(labels: Sequence[str]) -> str:
    return " and ".join(shown(shortened(label)) for label in labels)
