"""Signals that end live: an interrupt, being told to terminate, and the terminal's going away."""

import signal
import sys
import threading
from types import FrameType
from typing import Any, Self


class EndingSignals:
    """Keeps the number of the first signal that came while it was entered.

    While it ``interrupts``, that also raises KeyboardInterrupt: for as long as there is nothing to put away
    in order. Where Python has to swallow that, as in a destructor, the number still tells. A signal that is
    ignored, as under nohup, stays so.
    """

    def __init__(self) -> None:
        self.number: int | None = None
        self.interrupts = True
        self._kept: dict[int, Any] = {}
        self._hook = sys.unraisablehook

    def __enter__(self) -> Self:
        if threading.current_thread() is threading.main_thread():
            for name in ("SIGINT", "SIGTERM", "SIGHUP"):
                number = getattr(signal, name, None)
                if number is not None and signal.getsignal(number) is not signal.SIG_IGN:
                    self._kept[number] = signal.signal(number, self._take)
            self._hook, sys.unraisablehook = sys.unraisablehook, self._swallowed
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._kept.items():
            signal.signal(number, handler)
        if self._kept:
            sys.unraisablehook = self._hook

    def _take(self, number: int, _: FrameType | None) -> None:
        is_first = self.number is None
        self.number = self.number or number
        if self.interrupts and is_first:
            raise KeyboardInterrupt

    def _swallowed(self, unraisable: Any) -> None:
        """Python had to swallow an exception: that of a signal is none to tell of."""
        if unraisable.exc_type is not KeyboardInterrupt:
            self._hook(unraisable)
