"""A terminal to play from: single keys without Enter, and one line of status that is redrawn in place.

Keys come only from a terminal that this process is in the foreground of, and the status line is redrawn only
on one; elsewhere there are no keys, and the status is a plain line now and then. The terminal's settings are
put back on the way out, on errors, when the process is stopped by Ctrl-Z, and when the interpreter ends. What
kills the process outright leaves that to the shell.
"""

import atexit
import contextlib
import os
import shutil
import signal
import sys
import threading
import time
from collections.abc import Callable
from types import FrameType
from typing import Any, Self

import click

from glidesmith.text import printable

try:
    import select
    import termios
    import tty
except ImportError:  # Windows reads its keys from the console
    termios = None  # type: ignore[assignment]

PLAIN_PAUSE_S = 10.0
"""How often the status is told where it can't be redrawn."""

_REDRAW_S = 0.1
_MOST_BYTES = 64
_ARROWS = {"A": "up", "B": "down", "C": "right", "D": "left"}
_WINDOWS_ARROWS = {"H": "up", "P": "down", "M": "right", "K": "left"}


class Keys:
    """Keys as they are pressed, while it is entered: one character, or ``up``, ``down``, ``left``, ``right``.

    ``available`` says whether there is a terminal to read from.
    """

    def __init__(self) -> None:
        self.available = False
        self._descriptor = -1
        self._kept: list[Any] | None = None
        self._stop_handler: Any = None

    def __enter__(self) -> Self:
        if termios is None:
            self.available = sys.stdin is not None and sys.stdin.isatty()
            return self
        try:
            self._descriptor = sys.stdin.fileno()
            in_front = os.isatty(self._descriptor) and os.tcgetpgrp(self._descriptor) == os.getpgrp()
        except (OSError, ValueError, AttributeError):
            return self
        if in_front:
            self._kept = termios.tcgetattr(self._descriptor)
            atexit.register(self.restore)
            if threading.current_thread() is threading.main_thread():
                self._stop_handler = signal.signal(signal.SIGTSTP, self._pause)
            self._take()
        return self

    def __exit__(self, *_: object) -> None:
        self.restore()
        if self._stop_handler is not None:
            signal.signal(signal.SIGTSTP, self._stop_handler)
            self._stop_handler = None
        atexit.unregister(self.restore)
        self._kept = None

    def read(self, patience_s: float) -> list[str]:
        """The keys pressed, as soon as there are any; none once ``patience_s`` is over."""
        if not self.available:
            time.sleep(patience_s)
            return []
        if termios is None:
            return _console_keys(patience_s)
        ready, _, _ = select.select([self._descriptor], [], [], patience_s)
        if not ready:
            return []
        try:
            data = os.read(self._descriptor, _MOST_BYTES)
        except OSError:
            data = b""
        if not data:  # the terminal is gone
            self.available = False
        return split_keys(data.decode("utf-8", "replace"))

    def restore(self) -> None:
        """Put the terminal's settings back."""
        if self._kept is not None:
            self.available = False
            with contextlib.suppress(termios.error, OSError):
                termios.tcsetattr(self._descriptor, termios.TCSADRAIN, self._kept)

    def _take(self) -> None:
        with contextlib.suppress(termios.error, OSError):
            tty.setcbreak(self._descriptor, termios.TCSADRAIN)
            self.available = True

    def _pause(self, number: int, _: FrameType | None) -> None:
        """Ctrl-Z: the shell gets its terminal as it was, and we take it again when we are back in front."""
        self.restore()
        signal.signal(number, signal.SIG_DFL)
        os.kill(os.getpid(), number)
        signal.signal(number, self._pause)
        with contextlib.suppress(OSError):
            if os.tcgetpgrp(self._descriptor) == os.getpgrp():
                self._take()


def split_keys(text: str) -> list[str]:
    """What a terminal sends, as keys; sequences of keys that are not known are left out."""
    keys, at = [], 0
    while at < len(text):
        if text.startswith(("\x1b[", "\x1bO"), at):
            end = at + 2
            while end < len(text) and not "@" <= text[end] <= "~":
                end += 1
            if text[end : end + 1] in _ARROWS and end == at + 2:
                keys.append(_ARROWS[text[end]])
            at = end + 1
            continue
        if text[at].isprintable():
            keys.append(text[at])
        at += 1
    return keys


def _console_keys(patience_s: float) -> list[str]:
    """The same from a console of Windows."""
    import msvcrt

    until = time.monotonic() + patience_s
    keys: list[str] = []
    console: Any = msvcrt
    while not keys and time.monotonic() < until:
        while console.kbhit():
            key = console.getwch()
            if key == "\x03":
                raise KeyboardInterrupt
            name = _WINDOWS_ARROWS.get(console.getwch(), "") if key in "\0\xe0" else key
            if name.isprintable() and name:
                keys.append(name)
        time.sleep(0.01)
    return keys


class StatusLine:
    """One line on standard error that says how things are, with room for lines that are said once."""

    def __init__(self, wanted: bool = True, clock: Callable[[], float] = time.monotonic) -> None:
        """Without ``wanted`` only lines that are said once appear."""
        self._wanted = wanted
        self._in_place = sys.stderr.isatty()
        self._clock = clock
        self._shown_at = -PLAIN_PAUSE_S if self._in_place else clock()
        self._drawn = ""

    def show(self, text: str, at_once: bool = False) -> None:
        """Say how things are: at most ten times a second, or each ten seconds where it can't be redrawn."""
        now = self._clock()
        pause_s = _REDRAW_S if self._in_place else PLAIN_PAUSE_S
        if not self._wanted or (now - self._shown_at < pause_s and not (at_once and self._in_place)):
            return
        self._shown_at = now
        text = printable(text)
        if self._in_place:
            self._draw(text[: max(_columns() - 1, 0)])
        else:
            _tell(f"{text}\n")

    def say(self, *lines: str) -> None:
        """Say lines that stay, above the status."""
        drawn = self._drawn
        self.clear()
        for line in lines:
            _tell(f"{printable(line)}\n")
        if drawn:
            self._draw(drawn)

    def clear(self) -> None:
        """Take the status away."""
        if self._drawn:
            _tell("\r" + " " * len(self._drawn) + "\r")
            self._drawn = ""

    def _draw(self, text: str) -> None:
        if text != self._drawn:
            _tell("\r" + text.ljust(len(self._drawn)))
            self._drawn = text


def _tell(text: str) -> None:
    with contextlib.suppress(OSError, ValueError):  # a terminal that went away takes no words
        click.echo(text, err=True, nl=False)


def _columns() -> int:
    """How wide the terminal is; some say that they are nothing wide."""
    try:
        columns = os.get_terminal_size(sys.stderr.fileno()).columns
    except (OSError, ValueError):
        columns = 0
    return columns or shutil.get_terminal_size().columns
