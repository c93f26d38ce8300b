"""How far a long job is, on standard error."""

import os
import shutil
import sys
import time
from types import TracebackType
from typing import Self

import click

_PATIENCE_S = 1.0
_BAR_CELLS = 30
_FEWEST_CELLS = 5
_SHORTEST_LABEL = 8


class Progress:
    """Shows how far a job is once it has taken a second; the instance is the callback.

    On a terminal it is one line that changes in place and is gone at the end. Elsewhere nothing is shown
    unless ``wanted``, and then it is a plain line each second. ``done`` and ``total`` are those told last.
    """

    def __init__(self, label: str, wanted: bool | None = None, unit: str = "") -> None:
        """``wanted``: True always, False never, None on a terminal only.

        ``unit``: what is counted, where its rate is to be shown.
        """
        self._label, self._unit = label, unit
        self.done = self.total = 0
        self._in_place = sys.stderr.isatty()
        self._on = self._in_place if wanted is None else wanted
        self._begun = self._shown = time.monotonic()
        self._drawn = 0

    def __call__(self, done: int, total: int) -> None:
        """``done`` of ``total`` units of work are made."""
        self.done, self.total = done, total
        now = time.monotonic()
        pause_s = 0.1 if self._drawn else _PATIENCE_S
        if not self._on or now - self._shown < (pause_s if self._in_place else _PATIENCE_S):
            return
        self._shown = now
        part = done / total if total else 1.0
        passed_s = now - self._begun
        left_s = passed_s * (1.0 - part) / part if part else 0.0
        rate = f", {done / passed_s:.3g} {self._unit}/s" if self._unit and passed_s else ""
        self._draw(f": {100.0 * part:3.0f} %{rate}, {_spoken(left_s)} left", part)

    def _draw(self, text: str, part: float) -> None:
        if not self._in_place:
            click.echo(self._label + text, err=True)
            return
        width = _columns() - 1
        line = _fitted(self._label, text, part, width)
        click.echo("\r" + line.ljust(min(self._drawn, width)), err=True, nl=False)
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
            click.echo("\r" + " " * min(self._drawn, _columns() - 1) + "\r", err=True, nl=False)


def _spoken(seconds: float) -> str:
    return f"{seconds:.0f} s" if seconds < 120.0 else f"{seconds / 60.0:.0f} min"


def _columns() -> int:
    """How wide the terminal is that standard error goes to."""
    try:
        columns = os.get_terminal_size(sys.stderr.fileno()).columns
    except OSError:
        columns = 0
    return columns or shutil.get_terminal_size().columns


def _fitted(label: str, text: str, part: float, width: int) -> str:
    """The line within ``width`` characters: as much of the bar, then of the label, as there is room for."""
    from glidesmith.text import shortened

    cells = min(_BAR_CELLS, width - len(label) - len(text) - 3)
    if cells >= _FEWEST_CELLS:
        done = round(part * cells)
        return f"{label}{text} [{'=' * done}{' ' * (cells - done)}]"
    room = max(width - len(text), _SHORTEST_LABEL)
    return f"{shortened(label, room)}{text}"[: max(width, 0)]
