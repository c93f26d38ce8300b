"""Moves on their way to the deck: what may go goes, what must wait goes with what follows, and each move ends
in the log with the sample at which it was taken.

Two kinds go two ways. Transport, keys and level go at once. Settings change the model at once, and the deck
is told of all that changed in one snapshot; while that is under way, further ones wait and go together, so
that at most one is under way and only the newest is made.

Nothing at once is hoarded either: one start or stop is on its way to the deck at a time, a newer one replaces
the one that waits behind it and all keys before that, and a newer level the older. A panic clears what waits,
is never refused and waits for nothing; what was sent before it the deck passes over by itself.
"""

from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

from glidesmith.console import Console
from glidesmith.cueing import Cues, command_name
from glidesmith.deck import COMMANDS_HELD, Deck
from glidesmith.errors import GlidesmithError, SettingError
from glidesmith.moves import Move, make_move

if TYPE_CHECKING:
    from glidesmith.commands import Command

MOST_WAITING = 1000
"""Moves at once that may wait for the deck, before the device must be taken for lost."""

_KEPT_FREE = 8
_MOST_DROPPED = 512
_TRANSPORT = ("play", "stop")


@dataclass(frozen=True, slots=True)
class Noted:
    """One move as the log has it: ``at`` the sample, ``sent`` the command that the deck was told after it."""

    at: int
    move: Move
    sent: str | None


@dataclass(slots=True)
class _Group:
    """Moves in order, and the number and name of the command that was sent after the last, if one was."""

    at: int
    moves: list[Move]
    number: int | None = None
    sent: str | None = None


class Dispatcher:
    """Applies moves to a console and tells a deck; see the module. Not for several threads at once.

    ``noted`` has the moves that were taken, in the order in which they count; whoever writes the log takes
    them from its left. ``problems`` has what went wrong with settings that the console let pass, ``dropped``
    the last moves that newer ones made needless before the deck was told; no log has them.
    """

    def __init__(self, console: Console, deck: Deck) -> None:
        self.console = console
        self.noted: deque[Noted] = deque()
        self.problems: deque[str] = deque(maxlen=20)
        self.dropped: deque[Move] = deque(maxlen=_MOST_DROPPED)
        self.cues = Cues(deck.sample_rate)
        self._deck = deck
        self._at_once: deque[Move] = deque()
        self._settings: list[Move] = [make_move("pass_on")]
        self._under_way: deque[_Group] = deque()
        self._swap: int | None = None
        self._transport: int | None = None
        self._look_again = False
        self.pump()

    @property
    def settled(self) -> bool:
        """Whether the deck was told all, and took all."""
        waits = self._settings or self._at_once or self._under_way
        return not waits and self._swap is None and not self._look_again

    def apply(self, move: Move) -> None:
        """Do a move and send what may be sent.

        Raises SettingError; nothing has changed then. Of the moves at once only a key that goes down can be
        refused for want of room: what ends a sound never is.
        """
        self._note_taken()
        self._see_arrival()
        if move.do == "key_down" and len(self._at_once) >= MOST_WAITING:
            raise SettingError("the sound does not go on, so nothing more is taken: is the device lost?")
        self.console.apply(move)
        if move.at_once:
            self._drop_for(move)
            self._queue(move)
        else:
            self._settings.append(move)
        self.pump()

    def pump(self) -> None:
        """Note what the deck took, and send what waits."""
        self._note_taken()
        self._see_arrival()
        while self._at_once and self._may_go(self._at_once[0]):
            self._send_at_once(self._at_once.popleft())
        if not self._at_once and self._swap is None and self._has_room():
            self._send_settings()
        self._note_finished()

    def take_noted(self) -> Iterator[Noted]:
        """The moves that can be logged, oldest first; each is given once."""
        while self.noted:
            yield self.noted.popleft()

    def take_problems(self) -> list[str]:
        """What went wrong since last asked."""
        lines = list(self.problems)
        self.problems.clear()
        return lines

    def _queue(self, move: Move) -> None:
        if move.do != "panic":
            self._at_once.append(move)
        elif self._sent_last() == "panic":
            self.dropped.append(move)  # the deck is about to fall silent, and nothing was sent since
        else:
            self._send_at_once(move)

    def _drop_for(self, move: Move) -> None:
        """Drop what waits and is needless once the move comes."""
        is_full = len(self._at_once) >= MOST_WAITING
        kept = deque(waiting for waiting in self._at_once if not _replaces(move, waiting, is_full))
        if len(kept) < len(self._at_once):
            self.dropped.extend(waiting for waiting in self._at_once if _replaces(move, waiting, is_full))
            self._at_once = kept

    def _sent_last(self) -> str | None:
        """The last command that was sent, if the deck has not taken it yet."""
        return next((group.sent for group in reversed(self._under_way) if group.number is not None), None)

    def _may_go(self, move: Move) -> bool:
        return self._has_room() and not (move.do in _TRANSPORT and self._transport is not None)

    def _has_room(self) -> bool:
        return sum(group.number is not None for group in self._under_way) < COMMANDS_HELD - _KEPT_FREE

    def _send_at_once(self, move: Move) -> None:
        command = self.cues.at_once(move)
        group = self._sent([move], command)
        if move.do in _TRANSPORT:
            self._transport = group.number
        self._under_way.append(group)

    def _send_settings(self) -> None:
        if not self._settings and not self._look_again:
            return
        moves, self._settings, self._look_again = self._settings, [], False
        for move in moves:
            if move.do == "arrive":
                self.cues.arrive()
        try:
            command = self.cues.next(self.console)
        except GlidesmithError as problem:
            self.problems.extend(problem.lines)
            command = None
        if command is not None and not moves:
            moves = [make_move("pass_on")]
        if moves:
            group = self._sent(moves, command)
            self._swap, self._look_again = group.number, command is not None
            self._under_way.append(group)

    def _sent(self, moves: list[Move], command: "Command | None") -> _Group:
        group = _Group(self._deck.sample, moves)
        if command is not None:
            group.number, group.sent = self._deck.send(command), command_name(command)
        return group

    def _note_taken(self) -> None:
        """Match the deck's acknowledgements with what was sent; they come in the same order."""
        waiting = (group for group in self._under_way if group.number is not None)
        for number, at in self._deck.taken():
            group = next(waiting)
            assert group.number == number, "the deck takes commands in the order in which they were sent"
            group.at, group.number = at, None
            if number == self._swap:
                self._swap = None
            if number == self._transport:
                self._transport = None
        self._note_finished()

    def _note_finished(self) -> None:
        while self._under_way and self._under_way[0].number is None:
            group = self._under_way.popleft()
            for move in group.moves[:-1]:
                self.noted.append(Noted(group.at, move, None))
            self.noted.append(Noted(group.at, group.moves[-1], group.sent))

    def _see_arrival(self) -> None:
        """See whether the slot that waited for the loop's start sounds by now, and let the console know.

        Keys that are played stop the loop: then nothing would ever arrive, and the slot is selected at once.
        """
        waiting, later = self.console.waiting, self.cues.later
        if waiting is None or later is None or self._swap is not None or later.slot != waiting:
            return
        state = self._deck.state()
        if state.waiting_slot >= 0 or state.slot != waiting:  # what it was told last is that slot
            return
        arrived = make_move("arrive", slot=waiting)
        if state.mode == "keys":
            arrived = make_move("select", slot=waiting, when="now")
        self.console.apply(arrived)
        self._settings.append(arrived)


def _replaces(newer: Move, older: Move, is_full: bool) -> bool:
    """Whether an older move that still waits is needless once a newer one comes.

    A key that comes up leaves a stroke that still waits alone, however short, until there is no more room.
    """
    if newer.do == "level":
        return older.do == "level"
    if newer.do == "panic" or newer.do in _TRANSPORT:
        return older.do != "level"
    ends_key = newer.do == "key_up" and older.do in ("key_down", "key_up")
    return is_full and ends_key and older["note"] == newer["note"]
