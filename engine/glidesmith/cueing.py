"""What the deck is told: its commands, made from the console's state and from the keys that are held.

Cues know what the deck was told last, and so whether something is to be told at all and how. They depend on
nothing else: the same moves and the same turns make the same commands, live and when a log is replayed.
"""

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from glidesmith.commands import Level, Match, Note, Panic, Play, Release, Stop, Swap
from glidesmith.played import Keys, Sounding
from glidesmith.program import only_slews_differ
from glidesmith.snapshot import snapshot_of

if TYPE_CHECKING:
    from glidesmith.commands import Command
    from glidesmith.console import Console, View
    from glidesmith.moves import Move
    from glidesmith.preset import Preset
    from glidesmith.snapshot import Snapshot


class Cues:
    """Makes the deck's commands; see the module."""

    def __init__(self, sample_rate: int) -> None:
        self.sample_rate = sample_rate
        self.now: View | None = None
        self.later: View | None = None
        self.warnings: tuple[str, ...] = ()
        self._keys = Keys()
        self._latest: Snapshot | None = None

    def next(self, console: "Console") -> "Command | None":
        """The next thing that the deck must be told of the settings, or None where it knows all.

        First comes what sounds, then what waits for the loop's start. The cues then count it as told.
        """
        view = console.view(console.current)
        if self.now is None or not _sounds_as(self.now, view):
            return self._swap_now(view)
        if self.now.gain_db != view.gain_db:
            self.now = view
            return Match(view.slot, view.gain_db)
        if console.waiting is None:
            return self._call_off()
        waiting = console.view(console.waiting)
        if self.later is None or self.later != waiting:
            command = self._swap(waiting, "loop", _slews_on(view, waiting))
            self.later = waiting
            return command
        return None

    def at_once(self, move: "Move") -> "Command | None":
        """The command of a move that doesn't wait: transport, a key, the level. None where it changes
        nothing."""
        if move.do == "level":
            return Level(float(move["level_db"]))
        if move.do in ("key_down", "key_up"):
            return self._key(move)
        self._keys.let_go(sounded=move.do == "play")
        if move.do == "play":
            return Play()
        return Stop() if move.do == "stop" else Panic()

    def arrive(self) -> None:
        """What waited for the loop's start sounds now."""
        if self.later is not None:
            self.now, self.later = self.later, None

    def _swap_now(self, view: "View") -> Swap:
        smooth = self.now is not None and _slews_on(self.now, view)
        command = self._swap(view, "now", smooth)
        self.now, self.later = view, None  # the deck forgets what waited for the loop's start
        self.warnings = command.snapshot.program.warnings
        return command

    def _call_off(self) -> "Command | None":
        """Where a slot waits in the deck and none in the console: what sounds, once more."""
        if self.later is None:
            return None
        assert self.now is not None
        return self._swap_now(self.now)

    def _swap(self, view: "View", when: Literal["now", "loop"], smooth: bool) -> Swap:
        snapshot = snapshot_of(
            view.preset,
            view.phrase,
            self.sample_rate,
            tempo=view.tempo,
            transpose=view.semitones,
            loop=view.loop,
            slot=view.slot,
            gain_db=view.gain_db,
            cycle=None if view.cycle is None else np.frombuffer(view.cycle, "<f8"),
            earlier=self._latest,
        )
        self._latest = snapshot
        volts = self._keys.volts(view.preset)
        return Swap(snapshot, when, smooth, math.nan if volts is None else volts)

    def _key(self, move: "Move") -> "Command | None":
        assert self.now is not None, "the deck is told the settings before it is told a key"
        preset, rate = self.now.preset, self.sample_rate
        if move.do == "key_down":
            found: Sounding | bool | None = self._keys.press(preset, rate, move["note"], move["velocity"])
        else:
            found = self._keys.release(preset, rate, move["note"])
        if isinstance(found, Sounding):
            return Note(found.volts, found.jump, found.level, found.trigger, found.tick_samples)
        return Release() if found else None


def _heard(preset: "Preset") -> tuple[Any, ...]:
    """All of a preset that can be heard: not its title, its file and the phrase that it names."""
    return (
        preset.pitch.slew,
        preset.gain,
        preset.envelope,
        preset.oscillator,
        preset.pitch,
        preset.amplifier,
        preset.tuning,
        preset.converter,
        preset.drone,
    )


def _sounds_as(one: "View", other: "View") -> bool:
    """Whether two views differ in nothing but the gain."""
    same = one.preset is other.preset or _heard(one.preset) == _heard(other.preset)
    return same and replace(one, preset=other.preset, gain_db=other.gain_db) == other


def _slews_on(one: "View", other: "View") -> bool:
    """Whether only slews and envelope times differ, so that each goes on from where it is.

    Not with another match gain, which would be there late: what cross-fades has it from its first sample.
    """
    if one.gain_db != other.gain_db or not _sounds_as(
        replace(one, slot=other.slot), replace(other, preset=one.preset)
    ):
        return False
    return only_slews_differ(one.preset, other.preset)


def command_name(command: "Command") -> str:
    """How a log calls a command of the deck."""
    return type(command).__name__.lower()
