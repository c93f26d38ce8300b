"""Moves on their way to the deck: what may go goes, what must wait goes with what follows, and each move ends
in the log with the sample at which it was taken.

Two kinds go two ways. Transport, keys and level go at once. Settings change the model at once, and the deck
is told of all that changed in one snapshot; while that is under way, further ones wait and go together, so
that at most one is under way and only the newest is made.
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
"""Moves at once that may wait for room in the deck's ring, before the device must be taken for lost."""

_KEPT_FREE = 8


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
    them from its left. ``problems`` has what went wrong with settings that the console let pass.
    """

    def __init__(self, console: Console, deck: Deck) -> None:
        self.console = console
        self.noted: deque[Noted] = deque()
        self.problems: deque[str] = deque(maxlen=20)
        self.cues = Cues(deck.sample_rate)
        self._deck = deck
        self._at_once: deque[Move] = deque()
        self._settings: list[Move] = [make_move("pass_on")]
        self._under_way: deque[_Group] = deque()
        self._swap: int | None = None
        self._look_again = False
        self.pump()

    @property
    def settled(self) -> bool:
        """Whether the deck was told all, and took all."""
        waits = self._settings or self._at_once or self._under_way
        return not waits and self._swap is None and not self._look_again

    def apply(self, move: Move) -> None:
        """Do a move and send what may be sent. Raises SettingError; nothing has changed then."""
        self._note_taken()
        self._see_arrival()
        if move.at_once and len(self._at_once) >= MOST_WAITING:
            raise SettingError("the sound does not go on, so nothing more is taken: is the device lost?")
        self.console.apply(move)
        (self._at_once if move.at_once else self._settings).append(move)
        self.pump()

    def pump(self) -> None:
        """Note what the deck took, and send what waits."""
        self._note_taken()
        self._see_arrival()
        while self._at_once and self._has_room():
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

    def _has_room(self) -> bool:
        return sum(group.number is not None for group in self._under_way) < COMMANDS_HELD - _KEPT_FREE

    def _send_at_once(self, move: Move) -> None:
        command = self.cues.at_once(move)
        self._under_way.append(self._sent([move], command))

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
        if state.waiting_slot >= 0:
            return
        arrived = make_move("arrive", slot=waiting)
        if state.mode == "keys":
            arrived = make_move("select", slot=waiting, when="now")
        self.console.apply(arrived)
        self._settings.append(arrived)
