"""Where rendered audio goes: the small base that every sink shares, and the sink that keeps it in memory."""

from abc import abstractmethod

import numpy as np
from numpy.typing import NDArray

from glidesmith.outlet import Outlet


class Sink(Outlet):
    """Takes rendered audio, a block at a time.

    ``channels`` says how many a frame has, ``frames`` how many frames were written so far. The lengths of the
    blocks never change what comes out.
    """

    def __init__(self, channels: int = 1) -> None:
        self.channels = channels
        self.frames = 0
        self._ended = False

    def write(self, block: NDArray[np.float32]) -> None:
        """Take the next frames: float32 (n,) for one channel or (n, channels), n from 0. It is copied."""
        if self._ended:
            raise ValueError("this sink was closed or abandoned; make a new one")
        if block.ndim == 1:
            block = block[:, np.newaxis]
        if block.ndim != 2 or block.shape[1] != self.channels:
            raise ValueError(f"a block must have {self.channels} channels, not the shape {block.shape}")
        if len(block):
            self._take(block)
            self.frames += len(block)

    def close(self) -> None:
        """Finish. Closing again does nothing."""
        if not self._ended:
            self._ended = True
            self._finish()

    def abandon(self) -> None:
        """Give up and leave nothing behind of what was begun. Nothing happens once the sink is closed."""
        if not self._ended:
            self._ended = True
            self._discard()

    @abstractmethod
    def _take(self, block: NDArray[np.float32]) -> None:
        """Take a block of shape (n, channels), n at least 1, that the caller will use again."""

    @abstractmethod
    def _finish(self) -> None:
        """Complete the output."""

    @abstractmethod
    def _discard(self) -> None:
        """Remove what was begun."""


class MemorySink(Sink):
    """Keeps the audio in memory; ``audio`` holds it after ``close``.

    The array grows by an eighth in place and is cut to length in place, so that at no time a second copy of a
    long render stands beside it (large blocks are remapped by the allocator, not copied, on Linux).
    ``expected_frames`` saves the growing where the length, or a bound of it, is known: memory that is never
    written to is given back by ``close``.
    """

    _FIRST_FRAMES = 65_536

    def __init__(self, channels: int = 1, expected_frames: int = 0) -> None:
        super().__init__(channels)
        self._held = np.empty(max(expected_frames, 0) * channels, dtype=np.float32)

    @property
    def audio(self) -> NDArray[np.float32]:
        """The whole render, float32 (n,) for one channel, else (n, channels). Empty once abandoned."""
        if not self._ended:
            raise ValueError("the audio is there once the sink is closed")
        return self._held if self.channels == 1 else self._held.reshape(-1, self.channels)

    def _take(self, block: NDArray[np.float32]) -> None:
        start = self.frames * self.channels
        end = start + block.size
        if end > self._held.size:
            room = max(end, self._held.size + self._held.size // 8, self._FIRST_FRAMES * self.channels)
            self._held.resize(room, refcheck=False)
        self._held[start:end] = block.reshape(-1)

    def _finish(self) -> None:
        self._held.resize(self.frames * self.channels, refcheck=False)

    def _discard(self) -> None:
        self.frames = 0
        self._held = np.empty(0, dtype=np.float32)
