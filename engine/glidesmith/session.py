"""A session: slots, deck, undo, log, capture, meters and level match, held together.

    session = Session([preset], [phrase], 48_000)
    with session.service():                      # its own thread looks after the rest
        session.play()
        session.set(1, "pitch.rise", "120 ms")   # from any thread, at any time

Nothing here waits for the audio thread, and the audio thread waits for nothing: it is told through the deck's
ring, and what it made is read from the deck's rings. What a move means stands in `glidesmith.console`, how it
gets to the deck and into the log in `glidesmith.dispatch`.
"""

import contextlib
import threading
import time
from collections import OrderedDict, deque
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from glidesmith.console import Console
from glidesmith.deck import Deck
from glidesmith.dispatch import Dispatcher
from glidesmith.errors import GlidesmithError, SettingError
from glidesmith.logbook import Logbook, header_of
from glidesmith.matching import Matcher
from glidesmith.moves import SLOTS, Move, make_move
from glidesmith.phrase import Phrase, load_phrase, load_preset_phrase
from glidesmith.played import Holders
from glidesmith.preset import Preset, load_preset
from glidesmith.recording import Recorder
from glidesmith.saving import save_slot
from glidesmith.service import Service
from glidesmith.slotting import cycle_at, cycle_of, file_beside, filled_slot, with_given
from glidesmith.status import facts_of, lines_of, phrase_state, state_of

if TYPE_CHECKING:
    from glidesmith.console import View
    from glidesmith.dispatch import Noted

GESTURE_S = 0.4
"""Moves of one setting that follow each other within this time make one step of undo."""

_MOST_KEPT = 32
_MOST_REMARKS = 20
_MOST_STAMPED = 512
_UNMATCHED = frozenset(
    ("match_gain", "level", "play", "stop", "panic", "key_down", "key_up", "arrive", "loop")
)
_UNDRAWN = _UNMATCHED | {"select", "match"}


class Session:
    """Everything that is played live, for the panel, the terminal and scripts.

    Parameters
    ----------
    presets : sequence of Preset
        1 to 8, for the slots from 1 on.
    phrases : Phrase, or a sequence of them
        One for all slots, which later loads keep too, or each slot's own.
    sample_rate : int
        Hz, 8,000 to 384,000.
    level_db, fade, ceiling_db
        As in `glidesmith.deck.Deck`.
    match, loop : bool
        Whether slots are matched in loudness, and whether the phrase loops.
    log : Path, optional
        Where the log goes; without it, to a private file, of which every capture gets a copy.
    names : sequence of str, optional
        What the slots are called, as a candidate's label.
    clock
        Seconds; for tests.

    Raises
    ------
    SettingError, OutputError
        From every method, for what can't be; nothing has changed then.
    """

    def __init__(
        self,
        presets: Sequence[Preset],
        phrases: Phrase | Sequence[Phrase],
        sample_rate: int = 48_000,
        *,
        level_db: float = -30.0,
        fade: bool = True,
        match: bool = True,
        loop: bool = True,
        ceiling_db: float = -6.0,
        log: Path | None = None,
        names: Sequence[str] = (),
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._common_phrase = phrases if isinstance(phrases, Phrase) else None
        listed = [phrases] * len(presets) if isinstance(phrases, Phrase) else list(phrases)
        slots = [
            filled_slot(preset, phrase, names[place] if place < len(names) else "")
            for place, (preset, phrase) in enumerate(zip(presets, listed, strict=True))
        ]
        self.sample_rate = sample_rate
        self.ceiling_db = ceiling_db
        self.device: Any = None
        self.deck = Deck(sample_rate, level_db=level_db, fade=fade, ceiling_db=ceiling_db)
        self._console = Console(slots, loop=loop, match=match, level_db=level_db)
        header = header_of(self._console, sample_rate, {"fade": fade, "ceiling_db": ceiling_db})
        self._recorder = Recorder(self.deck, Logbook(log, header))
        self._dispatcher = Dispatcher(self._console, self.deck)
        if self._dispatcher.problems:
            self._recorder.close()
            raise SettingError(*self._dispatcher.problems)
        self._matcher = Matcher(sample_rate, clock)
        self._clock = clock
        self._lock = threading.RLock()
        self._holders = Holders()
        self._remarks: deque[str] = deque(maxlen=_MOST_REMARKS)
        self._gesture: tuple[object, int, float] = (None, 0, -1e9)
        self._revision = 1
        self._shown: tuple[object, ...] = ()
        self._drawn: dict[int, int] = {}
        self._state: dict[str, Any] = {}
        self._phrase_state: tuple[object, dict[str, Any]] = (None, {})
        self._figures: OrderedDict[object, dict[str, Any]] = OrderedDict()
        self._service: Service | None = None
        self.stamped: deque[Noted] = deque(maxlen=_MOST_STAMPED)
        """The last moves that were taken, with their sample stamps, for whoever measures their way."""
        self.dropped = self._dispatcher.dropped
        """The last moves that newer ones made needless before the deck was told of them."""

    # Moves

    def move(self, move: Move) -> None:
        """Do a move; see `glidesmith.moves`."""
        with self._lock:
            self._dispatcher.apply(move)
            if move.do in ("play", "stop", "panic"):
                self._holders.clear()
            if move.do not in _UNMATCHED:
                self._matcher.move()
            if move.do not in _UNDRAWN:
                for number in [move["slot"]] if move.get("slot") else range(1, SLOTS + 1):
                    self._drawn[number] = self._drawn.get(number, 0) + 1
            self._revision += 1

    def set(
        self,
        slot: int,
        key: str,
        value: object,
        gesture: int | None = None,
        allowed: Callable[[Path], Path] | None = None,
    ) -> None:
        """Move a setting by its dotted key; None puts its default back. See `glidesmith.console`.

        ``gesture`` joins moves into one step of undo: those of one key with the same number. Without it,
        moves of one key that follow each other quickly are one. ``allowed`` gets the full path of a cycle's
        file before it is read, and returns the one to read; it raises where none may be.
        """
        cycle = None
        if key == "oscillator.file" and isinstance(value, str):
            file = file_beside(self._console.slot(slot).preset, value)
            cycle = cycle_at(file if allowed is None else allowed(file.absolute()))
        token = self._token(("set", slot, key)) if gesture is None else gesture
        self.move(make_move("set", slot=slot, key=key, value=value, gesture=token, cycle=cycle))

    def select(self, slot: int, when: str = "now") -> None:
        """Go over to a slot, now or, where a phrase loops, with ``"loop"`` at the loop's start."""
        self.move(make_move("select", slot=slot, when=when))

    def undo(self) -> None:
        """Take back the last step: of settings, loads, copies, tempo, transposition or phrase."""
        self.move(make_move("undo"))

    def redo(self) -> None:
        """Do again what was taken back last."""
        self.move(make_move("redo"))

    def load(self, slot: int, path: Path | str) -> None:
        """Load a preset file into a slot, with the phrase that it names unless all slots share one."""
        preset = load_preset(path)
        phrase = None
        if self._common_phrase is None and preset.phrase is not None:
            phrase = load_preset_phrase(preset)
        self.put(slot, preset, phrase)

    def put(self, slot: int, preset: Preset, phrase: Phrase | None = None, name: str = "") -> None:
        """Put a preset into a slot; without a phrase the slot keeps its own."""
        preset = with_given(preset)
        cycle = cycle_of(preset)
        move = make_move("load", slot=slot, preset=preset, phrase=phrase, name=name or None, cycle=cycle)
        self.move(move)

    def copy(self, source: int, slot: int) -> None:
        """Copy a slot to another."""
        self.move(make_move("copy", source=source, slot=slot))

    def save(self, slot: int, path: Path | str | None = None, replace: bool = False) -> Path:
        """Save a slot as a preset, by default to the file that it came from; comments are kept.

        A file that the slot was not loaded from, or that has changed since, is only written over with
        ``replace``. Returns the file's path.
        """
        target = None if path is None else Path(path)
        found = self._console.slot(slot)
        written, saved = save_slot(found, target, replace)
        with self._lock:
            found.source.path = found.source.origin = written
            found.source.saved, found.source.on_disk = found.preset, saved
            self._revision += 1
        return written

    def tempo(self, percent: float) -> None:
        """Play at so many per cent of the phrase's own tempo, 10 to 400."""
        self.move(make_move("tempo", percent=percent, gesture=self._token("tempo")))

    def transpose(self, semitones: int) -> None:
        """Transpose the phrase by -24 to 24 semitones."""
        self.move(make_move("transpose", semitones=semitones, gesture=self._token("transpose")))

    def phrase(self, path: Path | str, slot: int | None = None) -> None:
        """Load a phrase file into one slot, or into all, which later loads keep then."""
        phrase = load_phrase(path)
        self.move(make_move("phrase", phrase=phrase, slot=slot))
        if slot is None:
            self._common_phrase = phrase

    def loop(self, on: bool) -> None:
        """Loop the phrase or not."""
        self.move(make_move("loop", on=on))

    def play(self) -> None:
        """Play the phrase from its start."""
        self.move(make_move("play"))

    def stop(self) -> None:
        """Stop."""
        self.move(make_move("stop"))

    def panic(self) -> None:
        """Silence at once."""
        self.move(make_move("panic"))

    def level(self, level_db: float) -> None:
        """The listening level in dB, -90 to 0."""
        self.move(make_move("level", level_db=level_db))

    def match(self, on: bool) -> None:
        """Match the slots' loudness or not."""
        self.move(make_move("match", on=on))

    def key_down(self, note: int, velocity: float = 0.8, holder: object = None) -> None:
        """Press a key, a MIDI number; the phrase gives way to played keys. ``holder``: whoever presses it."""
        with self._lock:
            self.move(make_move("key_down", note=note, velocity=velocity))
            self._holders.add(note, holder)

    def key_up(self, note: int, holder: object = None) -> bool:
        """Let a key go. It comes up, and this returns True, unless another holder presses it still."""
        with self._lock:
            if not self._holders.leave(note, holder):
                return False
            self.move(make_move("key_up", note=note))
            return True

    # Looking after it

    def tick(self) -> None:
        """Look after everything once: what the deck took, the log, the capture, the meters, level match.

        Called by one thread, every few milliseconds.
        """
        with self._lock:
            self._dispatcher.pump()
            if self._matcher.look(self._views):
                self._apply_gains()
        self.remark(*self._recorder.listen(self._take_noted))
        with self._lock:
            self.remark(*self._dispatcher.take_problems())
            console, state = self._console, self.deck.state()
            shown = (console.current, console.waiting, state.mode, int(self._recorder.seconds))
            if shown != self._shown:
                self._shown = shown
                self._revision += 1

    def settle(self) -> None:
        """Measure what is to be matched in loudness, here and now, and send the gains."""
        with self._lock:
            done = self._matcher.look(self._views, at_once=True)
        while self._matcher.measure_next():
            pass
        with self._lock:
            if done or self._matcher.look(self._views):
                self._apply_gains()

    def remark(self, *lines: str) -> None:
        """Add to the state's warnings; a line that is there already is not said twice."""
        with self._lock:
            for line in lines:
                if line not in self._remarks:
                    self._remarks.append(line)
                    self._revision += 1

    def service(self) -> Service:
        """A context in which a thread of its own looks after the session."""
        if self._service is None:
            self._service = Service(self)
        return self._service

    def start_measuring(self) -> None:
        """Measure loudness in a thread of its own from now on."""
        self._matcher.start()

    def stop_measuring(self) -> None:
        """End that thread."""
        self._matcher.stop()

    def close(self) -> None:
        """End the service, finish a capture that goes on, and close the log."""
        if self._service is not None:
            self._service.stop()
        if self._recorder.capturing:
            with contextlib.suppress(GlidesmithError):
                self.capture_stop()
        self.tick()
        self._recorder.close()

    # Captures

    def capture_start(self, path: Path | str, replace: bool = False) -> None:
        """Write what is heard from now on to a WAV, 32-bit float. A file that is there needs ``replace``."""
        target = Path(path)
        self._recorder.require_free(target, replace, self._files_in_use())
        self._recorder.start(target)
        self._changed()

    def capture_stop(self) -> dict[str, Any]:
        """Finish the capture; its facts: path, log, sample_rate, frames, seconds, from, to, lost."""
        self._recorder.require_capture()
        try:
            return self._recorder.stop(self._take_noted)
        finally:
            self._changed()

    # What there is to know

    @property
    def revision(self) -> int:
        """A number that grows whenever the state changes."""
        return self._revision

    def state(self) -> dict[str, Any]:
        """All that a panel shows, fit for JSON; the same object until something changes."""
        with self._lock:
            if self._state.get("revision") != self._revision:
                self._state = self._made_state()
            return self._state

    def facts(self, slot: int) -> dict[str, Any]:
        """The facts of a slot as it is heard, as ``measure --json`` prints them."""
        return self._figure("facts", slot, facts_of)

    def curves(self, slot: int) -> dict[str, Any]:
        """The curves of a slot as it is heard; see `glidesmith.status.lines_of`."""
        return self._figure("curves", slot, lines_of)

    def meters(self) -> dict[str, float | None]:
        """Loudness and peaks of the last seconds of what is heard, and the limiter's work, in dB."""
        return {**self._recorder.readings(), "gain_reduction_db": self.deck.state().gain_reduction_db}

    def report(self) -> dict[str, Any]:
        """How playing went, for ``live --json``."""
        counters, device = self.deck.counters(), self.device
        block = getattr(device, "block", 0) or counters.last_block
        return {
            "frames": counters.frames,
            "callbacks": counters.callbacks,
            "underflows": counters.underflows,
            "callback_median_us": counters.median_us,
            "callback_p999_us": counters.p999_us,
            "deadline_us": 1e6 * block / self.sample_rate,
            "latency_s": getattr(device, "latency_s", None),
            "device": getattr(device, "device", None),
            "sample_rate": self.sample_rate,
            "block": block,
        }

    # Inside

    def _token(self, of: object) -> int:
        """The gesture that a move of something belongs to, by the clock."""
        with self._lock:
            last_of, token, last = self._gesture
            now = self._clock()
            if of != last_of or now - last > GESTURE_S:
                token += 1
            self._gesture = (of, token, now)
            return token

    def _views(self) -> "dict[int, View]":
        return {number: self._console.view(number) for number in self._console.filled()}

    def _apply_gains(self) -> None:
        for number, gain_db in self._matcher.gains(self._console.gains_db).items():
            self.move(make_move("match_gain", slot=number, gain_db=gain_db))
        self._revision += 1

    def _take_noted(self) -> "list[Noted]":
        """What can be logged by now; the recorder asks while it holds the log."""
        with self._lock:
            self._dispatcher.pump()
            noted = list(self._dispatcher.take_noted())
        self.stamped.extend(noted)
        return noted

    def _changed(self) -> None:
        with self._lock:
            self._revision += 1

    def _files_in_use(self) -> list[Path]:
        """What no capture may replace: presets, their cycles and phrases."""
        files: list[Path | None] = []
        with self._lock:
            for number in self._console.filled():
                slot = self._console.slot(number)
                files += [slot.source.path, slot.source.origin, slot.preset.oscillator.file, slot.phrase.path]
        return [file for file in files if file is not None]

    def _figure(self, kind: str, slot: int, make: "Callable[[View, int], dict[str, Any]]") -> dict[str, Any]:
        """Facts or curves, made outside the lock and kept while the slot stays as it is."""
        with self._lock:
            view = self._console.view(slot)
            key = (kind, slot, self._drawn.get(slot, 0), view.loop)
            known = self._figures.get(key)
        if known is None:
            known = make(view, self.sample_rate)
            with self._lock:
                self._figures[key] = known
                while len(self._figures) > _MOST_KEPT:
                    self._figures.popitem(last=False)
        return known

    def _made_state(self) -> dict[str, Any]:
        console, deck = self._console, self.deck.state()
        view = console.view(console.current)
        of = (id(view.phrase), view.tempo, view.semitones)
        if self._phrase_state[0] != of:
            self._phrase_state = (of, phrase_state(view, self.sample_rate))
        shown = state_of(console, self._matcher.lufs(), self._drawn)
        phrase = self._phrase_state[1]
        return {
            "revision": self._revision,
            **shown,
            "playing": deck.mode,
            "phrase": phrase,
            "tempo_bpm": phrase["tempo_bpm"],
            "ceiling_db": self.ceiling_db,
            "capture": self._recorder.state(),
            "warnings": [*self._warnings(view), *self._remarks],
        }

    def _warnings(self, view: "View") -> list[str]:
        lines = [*view.preset.unused(), *self._dispatcher.cues.warnings]
        lines += [f"ignored in the phrase: {line}" for line in view.phrase.ignored]
        if self._console.match:
            lines += [
                f"slot {number} is silent, or so quiet that the others are not matched to it"
                for number in self._matcher.too_quiet()
            ]
        return lines
