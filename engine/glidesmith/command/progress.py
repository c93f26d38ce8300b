"""How far a long job is, on standard error."""

import sys
import time
from types import TracebackType
from typing import Self

import click

_PATIENCE_S = 1.0
_BAR_CELLS = 30


class Progress:
    """Shows how far a job is once it has taken a second; the instance is the callback.

    On a terminal it is one line that changes in place and is gone at the end. Elsewhere nothing is shown
    unless ``wanted``, and then it is a plain line each second.
    """

    def __init__(self, label: str, wanted: bool | None = None) -> None:
        """``wanted``: True always, False never, None on a terminal only."""
        self._label = label
        self._in_place = sys.stderr.isatty()
        self._on = self._in_place if wanted is None else wanted
        self._begun = self._shown = time.monotonic()
        self._drawn = 0

    def __call__(self, done: int, total: int) -> None:
        """``done`` of ``total`` units of work are made."""
        now = time.monotonic()
        pause_s = 0.1 if self._drawn else _PATIENCE_S
        if not self._on or now - self._shown < (pause_s if self._in_place else _PATIENCE_S):
            return
        self._shown = now
        part = done / total if total else 1.0
        left_s = (now - self._begun) * (1.0 - part) / part if part else 0.0
        self._draw(f"{self._label}: {100.0 * part:3.0f} %, {left_s:.0f} s left", part)

    def _draw(self, text: str, part: float) -> None:
        if not self._in_place:
            click.echo(text, err=True)
            return
        cells = round(part * _BAR_CELLS)
        line = f"{text} [{'=' * cells}{' ' * (_BAR_CELLS - cells)}]"
        click.echo("\r" + line.ljust(self._drawn), err=True, nl=False)
        self._drawn = len(line)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        if self._drawn:
            click.echo("\r" + " " * self._drawn + "\r", err=True, nl=False)
