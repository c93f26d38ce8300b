"""A capture: what is heard, sample for sample, into a WAV, with the log that gives it again beside it."""

import hashlib
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.wav import WavSink

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from glidesmith.wav import Depth

_SILENCE = 48_000


class Capture:
    """One capture in progress, from sample ``begin`` of the deck on.

    Samples that were lost before they could be fetched are silent in the file, so that time goes on right,
    and are counted. Raises OutputError, one line, from every method, and leaves no file then.
    """

    def __init__(self, path: Path, sample_rate: int, begin: int, depth: "Depth" = "float") -> None:
        self.path = path
        self.begin = begin
        self.lost = 0
        self._digest = hashlib.sha256()
        self._rate = sample_rate
        comment = f"Captured from sample {begin} of a live session"
        self._sink = WavSink(path, sample_rate, 1, depth, title=path.stem, comment=comment)

    @property
    def frames(self) -> int:
        """Samples so far."""
        return self._sink.frames

    @property
    def seconds(self) -> float:
        """How long it is so far."""
        return self.frames / self._rate

    def add(self, samples: "NDArray[np.float32]", lost: int) -> None:
        """Take the next samples, before which ``lost`` were lost."""
        self.lost += lost
        silence = np.zeros(min(lost, _SILENCE), np.float32)
        while lost > 0:
            self._take(silence[: min(lost, _SILENCE)])
            lost -= _SILENCE
        self._take(samples)

    def finish(self) -> dict[str, Any]:
        """Close the file; what there is to log about it."""
        self._sink.close()
        return {
            "do": "capture",
            "from": self.begin,
            "to": self.begin + self.frames,
            "file": self.path.name,
            "lost": self.lost,
            "audio_sha256": self._digest.hexdigest(),
        }

    def abandon(self) -> None:
        """Give up; no file is left."""
        self._sink.abandon()

    def _take(self, samples: "NDArray[np.float32]") -> None:
        self._digest.update(samples.astype("<f4").tobytes())
        self._sink.write(samples)
