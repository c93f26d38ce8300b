"""Which key sounds when: last note first, on one voice.

A phrase's notes are keys pressed and released. The latest pressed of the held keys sounds; releasing it
returns to the latest that is still held. At one moment releases come before presses, and of two presses the
later-listed wins.
"""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction
from itertools import groupby
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from glidesmith.phrase import Note

PRESS, LEGATO, RETURN, RELEASE = "press", "legato", "return", "release"


@dataclass(frozen=True, slots=True)
class KeyChange:
    """A moment at which another key sounds, or none.

    ``time`` is in seconds. ``note`` is the index in the phrase of the note that sounds from now on; for a
    release of the last key held it is the note that sounded, whose pitch stays. ``kind`` is ``press`` (no key
    was held), ``legato`` (an earlier key still is), ``return`` (to a key held all along) or ``release``.
    """

    time: Fraction
    note: int
    kind: str


def _edges(notes: "Iterable[Note]") -> list[tuple[Fraction, bool, int]]:
    """Every release (False, so that it sorts first) and press (True), in order of time, kind and listing."""
    edges = []
    for index, note in enumerate(notes):
        edges.append((note.start, True, index))
        edges.append((note.end, False, index))
    edges.sort()
    return edges


def key_changes(notes: "Iterable[Note]") -> Iterator[KeyChange]:
    """The changes of the sounding key through ``notes``, in order of time; at most one at a moment."""
    held: list[int] = []  # in order of pressing; the released ones among them go once they are the latest
    released: set[int] = set()
    for time, edges in groupby(_edges(notes), key=lambda edge: edge[0]):
        before = held[-1] if held else None
        pressed = []
        for _, is_press, index in edges:
            if is_press:
                pressed.append(index)
            else:
                released.add(index)
        while held and held[-1] in released:
            released.remove(held.pop())
        still_held = bool(held)
        held.extend(pressed)
        if pressed:
            yield KeyChange(time, pressed[-1], LEGATO if still_held else PRESS)
        elif not held:
            assert before is not None
            yield KeyChange(time, before, RELEASE)
        elif held[-1] != before:
            yield KeyChange(time, held[-1], RETURN)
