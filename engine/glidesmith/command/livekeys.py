"""What single keys do while live plays, and what its status line says."""

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from glidesmith.errors import GlidesmithError
from glidesmith.text import counted

if TYPE_CHECKING:
    from glidesmith.session import Session

LEVEL_STEP_DB = 1.0

_HELP = (
    "1 to 8    go over to a slot; w switches between at once and at the loop's start",
    "left right  the slot before, the slot after",
    "space     stop, or play from the start; r plays from the start",
    "l         loop the phrase or not",
    "+ -       level up or down by 1 dB (also up and down); p panic: silence at once",
    "m         match the loudness of the slots or not",
    "c         capture what is heard to a WAV, or end that",
    "i         how playing goes: underflows, times, latency, and what to change",
    "?         these keys; q ends",
)

_LONGEST_TITLE = 32


class LiveKeys:
    """The keys, for one session.

    Parameters
    ----------
    session : Session
        What they move.
    say : callable
        Gets the lines that they have to say.
    report : callable
        Gives the lines of how playing goes.
    """

    def __init__(self, session: "Session", say: Callable[..., None], report: Callable[[], list[str]]) -> None:
        self.ended = False
        self._session, self._say, self._report = session, say, report
        self._when = "now"
        self._actions: dict[str, Callable[[], None]] = {
            " ": self._toggle_playing,
            "r": session.play,
            "l": lambda: session.loop(not session.state()["loop"]),
            "m": lambda: session.match(not session.state()["match"]),
            "+": lambda: self._move_level(LEVEL_STEP_DB),
            "=": lambda: self._move_level(LEVEL_STEP_DB),
            "up": lambda: self._move_level(LEVEL_STEP_DB),
            "-": lambda: self._move_level(-LEVEL_STEP_DB),
            "down": lambda: self._move_level(-LEVEL_STEP_DB),
            "left": lambda: self._step_slot(-1),
            "right": lambda: self._step_slot(1),
            "w": self._switch_when,
            "p": session.panic,
            "c": self._toggle_capture,
            "i": lambda: say(*report()),
            "?": lambda: say(*_HELP),
            "h": lambda: say(*_HELP),
            "q": self._end,
        }

    def press(self, key: str) -> None:
        """Do what a key does; what can't be done is said."""
        key = key.lower() if len(key) == 1 else key
        try:
            if key in "12345678" and len(key) == 1:
                self._go_to(int(key))
            elif key in self._actions:
                self._actions[key]()
        except GlidesmithError as problem:
            self._say(*problem.lines)

    def _slots(self) -> list[int]:
        return [slot["number"] for slot in self._session.state()["slots"]]

    def _go_to(self, slot: int) -> None:
        if slot in self._slots():
            self._session.select(slot, self._when)
        else:
            self._say(f"slot {slot} is empty: name more presets, up to eight, or vary a key with --vary")

    def _step_slot(self, by: int) -> None:
        slots, current = self._slots(), self._session.state()["current"]
        self._session.select(slots[(slots.index(current) + by) % len(slots)], self._when)

    def _switch_when(self) -> None:
        self._when = "loop" if self._when == "now" else "now"
        self._say(f"slots change {'at the start of the loop' if self._when == 'loop' else 'at once'}")

    def _toggle_playing(self) -> None:
        if self._session.deck.state().mode == "stopped":
            self._session.play()
        else:
            self._session.stop()

    def _move_level(self, by_db: float) -> None:
        level_db = self._session.state()["level_db"] + by_db
        if level_db <= 0.0:
            self._session.level(level_db)

    def _toggle_capture(self) -> None:
        if self._session.state()["capture"] is None:
            path = free_capture_name()
            self._session.capture_start(path)
            self._say(f"capturing to {path}")
        else:
            self._say(capture_line(self._session.capture_stop()))

    def _end(self) -> None:
        self.ended = True


def free_capture_name(folder: Path = Path()) -> Path:
    """A name for a capture that no file has, nor its log."""
    number = 1
    while any((folder / f"capture-{number}{ending}").exists() for ending in (".wav", ".log.jsonl")):
        number += 1
    return folder / f"capture-{number}.wav"


def capture_line(facts: "dict[str, Any]") -> str:
    """What to say of a capture that is whole."""
    lost = f", {facts['lost']:,} samples lost and silent in it" if facts["lost"] else ""
    return f"{facts['path']}: {facts['seconds']:.3f} s captured{lost}; {facts['log']} gives it again"


def status_text(session: "Session", lost: bool = False) -> str:
    """How things are, in one line."""
    state, deck, meters = session.state(), session.deck.state(), session.meters()
    current = next(slot for slot in state["slots"] if slot["number"] == state["current"])
    title = current["name"] or current["title"] or "untitled"
    parts = [f"slot {current['number']} of {len(state['slots'])}: {title[:_LONGEST_TITLE]}"]
    if state["waiting_slot"]:
        parts.append(f"slot {state['waiting_slot']} next round")
    parts.append("no device" if lost else _playing_text(session, state, deck))
    parts.append(f"{state['level_db']:g} dB{'' if state['match'] else ', unmatched'}")
    if meters["momentary_lufs"] is not None:
        parts.append(f"{meters['momentary_lufs']:.1f} LUFS")
    if meters["gain_reduction_db"] and meters["gain_reduction_db"] >= 0.1:
        parts.append(f"limited by {meters['gain_reduction_db']:.1f} dB")
    if state["capture"] is not None:
        parts.append(f"capturing {state['capture']['seconds']:.0f} s")
    underflows = session.deck.counters().underflows
    if underflows:
        parts.append(counted(underflows, "underflow", "underflows"))
    return " | ".join(parts)


def _playing_text(session: "Session", state: "dict[str, Any]", deck: Any) -> str:
    if deck.mode != "phrase":
        return "stopped" if deck.mode == "stopped" else "keys"
    position_s = deck.position / session.sample_rate
    word = "looping" if state["loop"] else "playing"
    return f"{word} {position_s:.1f} of {state['phrase']['loop_s']:.1f} s"
