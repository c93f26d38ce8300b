"""A session played again from its log: the same commands at the same samples, so the same samples come out.

The moves go through the same console and cues as they did live, and the commands that these make go to the
same deck, at the samples at which it took them. What a live session's block sizes were plays no part.
"""

import hashlib
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from glidesmith.console import Console
from glidesmith.cueing import Cues, command_name
from glidesmith.deck import Deck
from glidesmith.errors import GlidesmithError, LogError
from glidesmith.text import counted

if TYPE_CHECKING:
    from glidesmith.commands import Command
    from glidesmith.logreader import Capture, Entry, LogReader, Outline
    from glidesmith.sink import Sink

BLOCK = 16_384
"""Samples made at a time; their number plays no part in what they are."""


@dataclass(frozen=True, slots=True)
class Span:
    """The samples to be made, from ``begin`` to under ``end``, and the capture that they are, if one."""

    begin: int
    end: int
    capture: "Capture | None" = None


@dataclass(frozen=True, slots=True)
class Replayed:
    """What came of a replay: samples made, the largest magnitude, and lines for the user.

    ``same`` says whether they are those that were captured; None where the log doesn't tell.
    """

    frames: int
    peak: float
    same: bool | None
    warnings: tuple[str, ...]


def span_of(reader: "LogReader", whole: bool = False) -> Span:
    """What is to be replayed of a log: its last capture, or with ``whole`` all that was played.

    Raises LogError where there is no such thing.
    """
    outline: Outline = reader.outline()
    if whole:
        if not outline.samples:
            raise LogError(f"{reader.where}: nothing was played in this session")
        return Span(0, outline.samples)
    if not outline.captures:
        raise LogError(f"{reader.where}: nothing was captured in this session; --all replays the whole of it")
    last = outline.captures[-1]
    return Span(last.begin, last.end, last)


def replay(
    reader: "LogReader", span: Span, sink: "Sink", progress: Callable[[int, int], None] | None = None
) -> Replayed:
    """Play a session again and write a span of it, mono, to a sink.

    ``progress`` is called after each block with the samples played and the samples in all. Raises LogError,
    one line, where the log does not hold together.
    """
    player = _Player(reader, span, sink, progress)
    for entry in reader.entries():
        if entry.sent is not None and entry.at >= span.end:
            break
        player.take(entry)
    player.play_to(span.end)
    return player.result()


class _Player:
    """A deck, and the console and cues that tell it what to play."""

    def __init__(
        self, reader: "LogReader", span: Span, sink: "Sink", progress: Callable[[int, int], None] | None
    ) -> None:
        head = reader.header
        self._reader, self._span, self._sink, self._progress = reader, span, sink, progress
        self._console = Console(
            list(head.slots.values()), loop=head.loop, match=head.match, level_db=head.level_db
        )
        self._cues = Cues(head.sample_rate)
        self._deck = Deck(
            head.sample_rate, level_db=head.level_db, fade=head.fade, ceiling_db=head.ceiling_db
        )
        self._block = np.empty(BLOCK, np.float32)
        self._digest = hashlib.sha256()
        self._position, self._peak = 0, 0.0
        self._sent: deque[tuple[int, int]] = deque()

    def take(self, entry: "Entry") -> None:
        """Do what one line says, at its sample."""
        if entry.sent is not None:
            if entry.at < self._position:
                raise self._reader.error(entry.line, f"at = {entry.at}: is before the line above it")
            self.play_to(entry.at)
        try:
            self._console.apply(entry.move)
            if entry.move.do == "arrive":
                self._cues.arrive()
            command = self._command(entry)
            # All of one sample are sent before the deck plays on, since a panic overrules those before it.
            # Its ring holds as many as it can have taken at one.
            if command is not None:
                self._sent.append((self._deck.send(command), entry.at))
        except GlidesmithError as problem:
            raise self._reader.error(entry.line, problem.lines[0]) from None

    def play_to(self, end: int) -> None:
        """Play on to a sample, and write what lies in the span."""
        while self._position < end:
            part = self._block[: min(BLOCK, end - self._position)]
            self._deck.play(part)
            self._check_taken()
            self._write(part)
            self._position += part.size
            if self._progress is not None:
                self._progress(self._position, self._span.end)

    def result(self) -> Replayed:
        """What came of it."""
        capture, warnings = self._span.capture, list(self._reader.header.warnings)
        same = None
        if capture is not None and capture.lost:
            lost = counted(capture.lost, "sample was", "samples were")
            warnings.append(f"{lost} lost from the capture, which has silence there; here they are whole")
        elif capture is not None and capture.audio_sha256 is not None:
            same = capture.audio_sha256 == self._digest.hexdigest()
            if not same:
                warnings.append(
                    "the samples are not those that were captured: another version, another processor, or a "
                    "log that was changed"
                )
        return Replayed(self._span.end - self._span.begin, self._peak, same, tuple(warnings))

    def _command(self, entry: "Entry") -> "Command | None":
        """The command that the line says was sent; it must be the one that follows from the moves."""
        move = entry.move
        if entry.sent is None and not move.at_once:
            return None
        command = self._cues.at_once(move) if move.at_once else self._cues.next(self._console)
        made = None if command is None else command_name(command)
        if made != entry.sent:
            raise LogError(f"sent = {entry.sent}: the lines above it make it {made}; the log is damaged")
        return command

    def _write(self, part: "np.ndarray[tuple[int], np.dtype[np.float32]]") -> None:
        skipped = max(self._span.begin - self._position, 0)
        if skipped >= part.size:
            return
        kept = part[skipped:]
        self._digest.update(kept.astype("<f4").tobytes())
        self._peak = max(self._peak, float(np.abs(kept).max()))
        self._sink.write(kept)

    def _check_taken(self) -> None:
        for taken in self._deck.taken():
            assert taken == self._sent.popleft(), "the deck takes commands at the sample that it is at"
