"""What the audio thread can be told, one command at a time; see `glidesmith.transport`."""

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

if TYPE_CHECKING:
    from glidesmith.snapshot import Snapshot


@dataclass(frozen=True, slots=True)
class Swap:
    """Go over to ``snapshot``, at once or where the loop starts anew.

    ``smooth``: only slew laws, slew times and envelope times changed, so that the chain goes on in place;
    otherwise old and new are cross-faded over 10 ms. ``keyed_volts``: the pitch, under the new settings, of
    the key that is held, where keys are being played.
    """

    snapshot: "Snapshot"
    when: Literal["now", "loop"] = "now"
    smooth: bool = False
    keyed_volts: float = math.nan


@dataclass(frozen=True, slots=True)
class Play:
    """Play the phrase from its start, as a render begins: the first note does not glide."""


@dataclass(frozen=True, slots=True)
class Stop:
    """Fade out over 10 ms and be silent."""


@dataclass(frozen=True, slots=True)
class Panic:
    """Silence within 2 ms; what is played next fades in from -70 dB."""


@dataclass(frozen=True, slots=True)
class Note:
    """A played key: the phrase stands still from now on and the pitch goes to ``volts``.

    It is there at once with ``jump``, and the gate goes to ``level`` (0 to 1; with ``trigger`` the envelope
    starts anew). With ``tick_samples`` over 0 the pitch waits for the next tick of a converter that ticks
    that often, in samples since the deck's start.
    """

    volts: float
    jump: bool
    level: float
    trigger: bool
    tick_samples: float = 0.0


@dataclass(frozen=True, slots=True)
class Release:
    """The last key held goes up: the gate closes, the pitch stays."""


@dataclass(frozen=True, slots=True)
class Level:
    """The listening level in dB, -90 to 0; it rises by at most 6 dB in 50 ms."""

    level_db: float


@dataclass(frozen=True, slots=True)
class Match:
    """The gain, in dB, that makes a slot as loud as the others; it rises by at most 6 dB in 50 ms."""

    slot: int
    gain_db: float


Command = Swap | Play | Stop | Panic | Note | Release | Level | Match
