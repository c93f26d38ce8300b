"""Undo and redo: states kept before each step, where the moves of one gesture make one step."""

from collections import deque
from typing import Generic, TypeVar

State = TypeVar("State")

MOST_STEPS = 500
"""How many steps can be undone; older ones are forgotten."""


class Steps(Generic[State]):
    """What can be undone and redone. States are immutable and share what they have in common."""

    def __init__(self, most: int = MOST_STEPS) -> None:
        self._done: deque[State] = deque(maxlen=most)
        self._undone: list[State] = []
        self._gesture: object = None

    @property
    def depth(self) -> tuple[int, int]:
        """How many steps can be undone, and how many redone."""
        return len(self._done), len(self._undone)

    def add(self, before: State, gesture: object = None) -> None:
        """Note a step by the state before it; with the last step's ``gesture`` it is no new one."""
        self._undone.clear()
        if gesture is None or gesture != self._gesture:
            self._done.append(before)
        self._gesture = gesture

    def end_gesture(self) -> None:
        """Let the next step be one of its own."""
        self._gesture = None

    def undo(self, present: State) -> State | None:
        """The state before the last step, or None where there is none."""
        if not self._done:
            return None  # what is refused changes nothing, a gesture neither
        self._gesture = None
        self._undone.append(present)
        return self._done.pop()

    def redo(self, present: State) -> State | None:
        """The state that was undone last, or None."""
        if not self._undone:
            return None
        self._gesture = None
        self._done.append(present)
        return self._undone.pop()
