"""The meters of a session: loudness and peaks of what was heard in the last seconds, in bounded memory."""

import math
from collections import deque
from typing import TYPE_CHECKING

import numpy as np

from glidesmith.loudness import LoudnessMeter

if TYPE_CHECKING:
    from numpy.typing import NDArray

PEAK_WINDOW_S = 3.0
"""For how long a peak is shown."""

_SHORT_TERM_S = 3.1
_RENEWED_S = 60.0


class Meters:
    """Momentary and short-term loudness by ITU-R BS.1770, true peak and sample peak of the last 3 s.

    The meter beneath keeps the loudness of all it was given, so it is made anew every minute, with the last
    seconds given to it again.
    """

    def __init__(self, sample_rate: int) -> None:
        self._rate = sample_rate
        self._meter = LoudnessMeter(sample_rate)
        self._metered = 0
        self._recent: deque[NDArray[np.float32]] = deque()
        self._recent_samples = 0
        self._peaks: deque[tuple[int, float, float]] = deque()

    def add(self, samples: "NDArray[np.float32]") -> None:
        """Take what was heard next: float32 (n,)."""
        if not samples.size:
            return
        self._remember(samples)
        if self._metered > _RENEWED_S * self._rate:
            self._renew()
        else:
            self._meter.add(samples)
        self._metered += samples.size
        self._note_peaks(samples.size)

    def readings(self) -> dict[str, float | None]:
        """The meters as JSON carries them; None for silence and before there is anything to tell."""
        true_peak = max((peak for _, peak, _ in self._peaks), default=0.0)
        sample_peak = max((peak for _, _, peak in self._peaks), default=0.0)
        return {
            "momentary_lufs": _finite(self._meter.momentary_lufs()),
            "short_term_lufs": _finite(self._meter.short_term_lufs()),
            "true_peak_dbtp": _decibels(true_peak),
            "peak_dbfs": _decibels(sample_peak),
        }

    def _remember(self, samples: "NDArray[np.float32]") -> None:
        self._recent.append(samples)
        self._recent_samples += samples.size
        while self._recent_samples - self._recent[0].size >= _SHORT_TERM_S * self._rate:
            self._recent_samples -= self._recent.popleft().size

    def _renew(self) -> None:
        self._meter.reset()
        for samples in self._recent:
            self._meter.add(samples)
        self._metered = self._recent_samples

    def _note_peaks(self, count: int) -> None:
        """Take the peaks of the samples just metered off the meter, so that later ones are told apart."""
        record = self._meter.meter[0]
        self._peaks.append((count, float(record["true_peak"]), float(record["sample_peak"])))
        record["true_peak"] = record["sample_peak"] = 0.0
        while sum(kept for kept, _, _ in self._peaks) - self._peaks[0][0] >= PEAK_WINDOW_S * self._rate:
            self._peaks.popleft()


def _finite(value: float | None) -> float | None:
    return None if value is None or not math.isfinite(value) else float(value)


def _decibels(magnitude: float) -> float | None:
    return 20.0 * math.log10(magnitude) if magnitude > 0.0 else None
