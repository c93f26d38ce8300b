"""The deck: the compiled transport with its memory, as the rest of the program sees it.

One thread plays it (the audio thread through `Deck.callback`, or whoever calls `Deck.play`), one other sends
commands and reads what comes back. Neither waits for the other.
"""

import math
import threading
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.callback import Callback
from glidesmith.commands import Level, Match, Note, Panic, Play, Release, Stop, Swap
from glidesmith.envelope import GATE_EVENT
from glidesmith.errors import GlidesmithError
from glidesmith.exchange import make_words, read_word, write_word
from glidesmith.listening import level_factor, listening_record
from glidesmith.program import PITCH_EVENT, check_sample_rate
from glidesmith.transport import (
    CHANNEL,
    COMMAND,
    DECK,
    FADE_S,
    IN_USE,
    KEYS,
    LEVEL_CHANGE,
    MADE,
    MATCH,
    NOTE,
    PANIC,
    PANIC_FADE_S,
    PHRASE,
    PLACE,
    PLAY,
    RELEASE,
    ROW,
    ROWS,
    ROWS_PER_S,
    SENT,
    SILENT,
    STATE,
    STATES,
    STOP,
    STOPPED,
    SWAP,
    TAKEN,
    WORDS,
    Parts,
    play_deck,
)
from glidesmith.voice import CHUNK, make_scratch

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from glidesmith.callback import Counters
    from glidesmith.commands import Command
    from glidesmith.snapshot import Snapshot

COMMANDS_HELD = 256
"""Commands that may be on their way at a time."""

HEARD_SAMPLES = 1 << 20
"""Samples kept of what was heard: 21 s at 48 kHz."""

_ROWS_HELD = 1 << 14
_STATES_HELD = 64
_PLACES = 60
_MODES = {STOPPED: "stopped", PHRASE: "phrase", KEYS: "keys"}
_KINDS = {
    Swap: SWAP,
    Play: PLAY,
    Stop: STOP,
    Panic: PANIC,
    Note: NOTE,
    Release: RELEASE,
    Level: LEVEL_CHANGE,
    Match: MATCH,
}


class DeckFullError(GlidesmithError):
    """More commands were sent than the audio thread takes: it stands still, or is far behind."""


@dataclass(frozen=True, slots=True)
class DeckState:
    """Where the deck is. ``mode`` is ``stopped``, ``phrase`` or ``keys``.

    ``slot`` is the one chosen last, ``waiting_slot`` the one that comes with the next round,
    ``sounding_slot`` the one that plays; -1 where there is none.
    """

    sample: int
    mode: str
    position: int
    round: int
    slot: int
    waiting_slot: int
    level_db: float
    gain_reduction_db: float
    sounding_slot: int


class Deck:
    """The live engine at one sample rate.

    Parameters
    ----------
    sample_rate : int
        Hz, 8,000 to 384,000.
    level_db : float
        The listening level, -90 to 0.
    fade : bool
        Whether the level begins at -70 dB and rises from there, 6 dB in 50 ms.
    ceiling_db : float
        What no sample goes over, in dBFS, -40 to -1.

    Raises
    ------
    SettingError
        For values out of range.
    """

    def __init__(
        self, sample_rate: int, *, level_db: float = -30.0, fade: bool = True, ceiling_db: float = -6.0
    ) -> None:
        self.sample_rate = check_sample_rate(sample_rate)
        listening = listening_record(self.sample_rate, level_db, ceiling_db, fade)
        self.parts = _make_parts(self.sample_rate, listening)
        self._callback = Callback(self.parts)
        self._sent = 0
        self._seen = 0
        self._sending = threading.Lock()
        self._held: list[Snapshot | None] = [None] * _PLACES
        self._sent_with = [0] * _PLACES
        self.row_every = int(self.parts.deck["row_every"][0])

    def play(self, out: "NDArray[np.float32]") -> None:
        """Fill ``out``, float32 (n,), contiguous, with the next n samples of what is heard.

        One thread only may call it, and none while a sound card does. The GIL is not held.
        """
        play_deck(self.parts, out)

    def callback(self, channels: int) -> tuple[int, int]:
        """The addresses of the compiled PortAudio callback and its user data; see `glidesmith.callback`."""
        return self._callback.addresses(channels)

    def fill(self, out: "NDArray[np.float32]", underflow: bool = False) -> None:
        """What the callback does, from Python: fill ``out``, float32 (frames, channels), and count."""
        self._callback.fill(out, underflow)

    def counters(self) -> "Counters":
        """What the callback, or `fill`, counted and how long it took."""
        return self._callback.counters()

    def send(self, command: "Command") -> int:
        """Send a command; returns its number, from 0. It is taken at the start of the next block or, where it
        begins a cross-fade, at the first one after the fade that is under way.

        Raises DeckFullError where 256 commands were not taken yet, and SettingError for a level out of range.
        """
        with self._sending:
            taken = self.commands_taken
            if self._sent - taken >= COMMANDS_HELD:
                raise DeckFullError(
                    f"{COMMANDS_HELD} commands wait for the sound to go on: is the device lost?"
                )
            number = self._sent
            self.parts.commands[number % COMMANDS_HELD] = self._record(command, number)
            self._sent += 1
            write_word(self.parts.words, SENT, self._sent)
        return number

    @property
    def commands_taken(self) -> int:
        """How many commands were taken so far."""
        return int(read_word(self.parts.words, TAKEN))

    @property
    def sample(self) -> int:
        """Samples made so far, as of the last block's end."""
        return int(read_word(self.parts.words, MADE))

    def taken(self) -> "list[tuple[int, int]]":
        """The number and the sample stamp of every command that was taken since last asked."""
        taken = self.commands_taken
        numbers = range(self._seen, taken)
        self._seen = taken
        return [(number, int(self.parts.stamps[number % COMMANDS_HELD])) for number in numbers]

    def heard(self, cursor: int) -> "tuple[int, NDArray[np.float32], int]":
        """What went to the device from sample ``cursor`` on.

        Returns the sample after it, float32 (n,), and how many samples before it are lost: the last 21 s are
        kept (at 48 kHz).
        """
        end = self.sample
        # What the audio thread may be writing into meanwhile is not read.
        begin = max(cursor, end - HEARD_SAMPLES // 2, 0)
        places = np.arange(begin, end) & (HEARD_SAMPLES - 1)
        return end, self.parts.heard[places], begin - cursor

    def rows(self, cursor: int) -> "tuple[int, NDArray[Any]]":
        """The trace rows (`glidesmith.transport.ROW`) from row ``cursor`` on, and the next row's number."""
        end = int(read_word(self.parts.words, ROWS))
        begin = max(cursor, end - _ROWS_HELD // 2, 0)
        return end, self.parts.rows[np.arange(begin, end) & (_ROWS_HELD - 1)]

    def state(self) -> DeckState:
        """Where the deck was at the last block's end."""
        while True:
            newest = int(read_word(self.parts.words, STATES)) - 1
            row = self.parts.states[max(newest, 0) % _STATES_HELD].copy()
            if int(read_word(self.parts.words, STATES)) - newest < _STATES_HELD:
                break  # else the ring went round meanwhile, and the row may be half another
        return DeckState(
            int(row["sample"]),
            _MODES[int(row["mode"])],
            int(row["position"]),
            int(row["round"]),
            int(row["slot"]) if newest >= 0 else -1,
            int(row["waiting_slot"]) if newest >= 0 else -1,
            20.0 * math.log10(max(float(row["level"]), 1e-5)),
            -20.0 * math.log10(max(float(row["limiter"]), 1e-5)) if newest >= 0 else 0.0,
            int(row["sounding_slot"]) if newest >= 0 else -1,
        )

    def _record(self, command: "Command", number: int) -> "NDArray[Any]":
        record = np.zeros((), COMMAND)
        record["kind"] = _KINDS[type(command)]
        record["volts"] = math.nan
        if isinstance(command, Swap):
            record["place"] = self._install(command.snapshot, number)
            record["at_loop"] = command.when == "loop"
            record["smooth"] = command.smooth
            record["volts"] = command.keyed_volts
        elif isinstance(command, Note):
            record["volts"], record["jump"] = command.volts, command.jump
            record["level"], record["trigger"] = command.level, command.trigger
            record["tick_samples"] = command.tick_samples
        elif isinstance(command, Level):
            record["level"] = level_factor(command.level_db)
        elif isinstance(command, Match):
            record["place"] = command.slot
            record["level"] = math.pow(10.0, command.gain_db / 20.0)
        elif isinstance(command, Play) and not any(self._held):
            raise DeckFullError("nothing to play: send a snapshot first")
        return record

    def _install(self, snapshot: "Snapshot", number: int) -> int:
        """Write a snapshot into a place that the audio thread has no use for."""
        taken = self.commands_taken
        used = int(read_word(self.parts.words, IN_USE))
        for place in range(_PLACES):
            if self._held[place] is None or (self._sent_with[place] < taken and not used >> place & 1):
                break
        else:
            raise DeckFullError("too many snapshots wait for the sound to go on: is the device lost?")
        self._held[place] = snapshot
        self._sent_with[place] = number
        _write_place(self.parts.places[place : place + 1], snapshot)
        return place


def _make_parts(sample_rate: int, listening: "NDArray[Any]") -> Parts:
    deck = np.zeros(1, DECK)
    deck["cued"] = deck["waiting"] = SILENT
    deck["row_every"] = max(round(sample_rate / ROWS_PER_S), 1)
    deck["long_fade"] = round(FADE_S * sample_rate)
    deck["short_fade"] = round(PANIC_FADE_S * sample_rate)
    channels = np.zeros(2, CHANNEL)
    channels["place"] = SILENT
    channels["gain"] = channels["gain_goal"] = 1.0
    return Parts(
        deck,
        channels,
        np.zeros(_PLACES, PLACE),
        np.zeros(2, PITCH_EVENT),
        np.zeros(3, GATE_EVENT),
        listening,
        np.zeros(COMMANDS_HELD, COMMAND),
        np.zeros(COMMANDS_HELD, np.int64),
        np.zeros(_ROWS_HELD, ROW),
        np.zeros(_STATES_HELD, STATE),
        np.zeros(HEARD_SAMPLES, np.float32),
        make_words(WORDS),
        np.zeros(CHUNK, np.float32),
        make_scratch(),
    )


def _write_place(place: "NDArray[Any]", snapshot: "Snapshot") -> None:
    tables = snapshot.program.wavetables
    arrays = {
        "first_pitch": snapshot.pitch_events,
        "later_pitch": snapshot.later_pitch_events,
        "gate": snapshot.gate_events,
        "levels": tables.levels,
        "cells": tables.cells,
    }
    for name, array in arrays.items():
        assert array.flags.c_contiguous
        place[f"{name}_at"] = array.ctypes.data
        place[f"{name}_count"] = array.size
    later = snapshot.later_pitch_events
    place["settings"] = snapshot.settings[0]
    place["last_volts"] = later["volts"][-1] if later.size else snapshot.settings["first_volts"][0]
    place["loop_samples"] = snapshot.loop_samples
    place["unit_samples"] = snapshot.unit_samples
    place["slot"] = snapshot.slot
    place["gain"] = math.pow(10.0, snapshot.gain_db / 20.0)
