"""Sound without a sound card: the browser plays it, and the browser's clock is the only clock.

The page asks for samples as its buffer drains, and the deck makes exactly those. Nothing is resampled and no
two clocks drift apart. One listener drives the deck; whoever else looks on sees the same panel without sound.
"""

import time
from collections.abc import Callable, Hashable
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.panel_frames import sound_frame

if TYPE_CHECKING:
    from numpy.typing import NDArray

MOST_AHEAD_S = 2.0
"""How much more than the time that has passed a listener may ask for: a browser's largest buffer and some."""

_FASTER = 1.05
"""A sound clock may run a little faster than this machine's; some are off by a thousandth, none by this."""


class TooFastError(ValueError):
    """A listener asked for more sound than time has passed."""


class BrowserSound:
    """Makes a deck's samples for one listener at a time.

    Parameters
    ----------
    deck : Deck
        What plays; ``play(out)`` fills a float32 array.
    sample_rate : int
        The deck's, in samples a second; the browser's audio runs at the same.
    clock : callable
        Seconds, never going back.

    All methods are called from one thread, the server's.
    """

    def __init__(self, deck: Any, sample_rate: int, clock: Callable[[], float] = time.monotonic) -> None:
        self.deck = deck
        self.sample_rate = sample_rate
        self.listener: Hashable | None = None
        self.starved = 0
        """How often the listener's buffer ran dry, as the page counts it."""
        self.latency_s: float | None = None
        """From a sample made to the same sample heard, as the page measures it."""
        self.made = 0
        self._clock = clock
        self._allowed, self._since = 0.0, clock()

    def listen(self, who: Hashable, take: bool = False) -> bool:
        """True if ``who`` listens from now on: where nobody does, or with ``take`` in another's place."""
        if self.listener is None or take:
            self.listener = who
        if self.listener == who:
            self._allowed, self._since = MOST_AHEAD_S * self.sample_rate, self._clock()
        return self.listener == who

    def leave(self, who: Hashable) -> None:
        """No more sound for ``who``; the deck stands still until somebody listens."""
        if self.listener == who:
            self.listener = None

    def frames(self, who: Hashable, count: int) -> bytes | None:
        """The next ``count`` samples as a frame for the page; None for anybody but the listener.

        Raises TooFastError where more is asked for than can have been played.
        """
        if who != self.listener:
            return None
        self._allow(count)
        first = self.made
        return sound_frame(first, self.play(count))

    def play(self, count: int) -> "NDArray[np.float32]":
        """The next ``count`` samples, mono."""
        out = np.zeros(count, np.float32)
        self.deck.play(out)
        self.made += count
        return out

    def note(self, starved: int | None, latency_s: float | None) -> None:
        """What the page has measured."""
        if starved is not None:
            self.starved = starved
        if latency_s is not None:
            self.latency_s = latency_s

    def _allow(self, count: int) -> None:
        now = self._clock()
        earned = (now - self._since) * self.sample_rate * _FASTER
        self._allowed = min(self._allowed + earned, MOST_AHEAD_S * self.sample_rate)
        self._since = now
        if count > self._allowed:
            raise TooFastError(f"{count:,} samples asked for, faster than they can be played")
        self._allowed -= count
