"""The stage of live: session, output, panel and terminal, put up in order and struck in order."""

import contextlib
import os
import sys
import threading
import time
import webbrowser
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import click

from glidesmith.command import error_lines, tell
from glidesmith.command.livekeys import LiveKeys, capture_line, status_text
from glidesmith.command.options import json_text
from glidesmith.errors import GlidesmithError
from glidesmith.playreport import report_lines
from glidesmith.portaudio import finish
from glidesmith.soundcard import SoundCard
from glidesmith.terminal import Keys, StatusLine
from glidesmith.text import counted, printable

if TYPE_CHECKING:
    from glidesmith.browser_sound import BrowserSound
    from glidesmith.command.livesignals import EndingSignals
    from glidesmith.panel import Panel
    from glidesmith.session import Session
    from glidesmith.soundcard import Choice

CAUTION = "turn your amplifier or headphones down first, and up while it plays; take breaks; p is panic"

_LOOK_S = 0.05
_FADE_PATIENCE_S = 0.3
_FADE_S = 0.02
_GRACE_S = 5.0


class Stage:
    """Plays a session as the command line asks.

    Parameters
    ----------
    session : Session
        What is played.
    choice : Choice or None
        The output; None plays through the browser.
    options : dict
        The command line's, by name.
    as_json : bool
        Whether the outcome is told as JSON.
    """

    def __init__(
        self, session: "Session", choice: "Choice | None", options: dict[str, Any], as_json: bool
    ) -> None:
        self._session, self._choice, self._options, self._as_json = session, choice, options, as_json
        self._status = StatusLine(sys.stderr.isatty() or not as_json)
        self._card: SoundCard | None = None
        self._sound: BrowserSound | None = None
        self._panel: Panel | None = None
        self._captured: dict[str, Any] | None = None
        self._told: set[str] = set()

    @property
    def left_behind(self) -> bool:
        """Whether a stream could not be closed, so that the process must not end the ordinary way."""
        return self._card is not None and self._card.left_behind

    def play(self, signals: "EndingSignals") -> int:
        """Put everything up, play until it ends, and strike; the exit status.

        Raises what keeps it from playing.
        """
        signals.interrupts = False
        if signals.number is not None:
            self._session.close()
            raise KeyboardInterrupt
        try:
            self._put_up()
            self._run(signals)
        finally:
            problems = self._strike()
        for line in problems:
            tell(f"glidesmith: {line}")
        self._tell_outcome()
        return 128 + signals.number if signals.number else int(bool(problems))

    def _put_up(self) -> None:
        """All that plays, in an order in which nothing is heard that is not captured.

        What may refuse comes first.
        """
        session, options = self._session, self._options
        if not options["no_panel"]:
            self._start_panel()
        if self._choice is not None:
            self._open_card(self._choice)
        if options["capture"] is not None:
            session.capture_start(options["capture"], replace=True)
        session.play()
        if self._card is not None:
            session.device = self._card.start()
        session.service().start()
        self._status.say(CAUTION)
        if self._panel is not None:
            self._show_panel(self._panel)

    def _open_card(self, choice: "Choice") -> None:
        options = self._options
        self._card = SoundCard(
            self._session.deck,
            choice,
            block=options["block"] or 0,
            latency=options["latency"],
            compiled=not options["python_callback"],
        )
        facts = self._card.open()
        self._status.say(
            *choice.remarks,
            f"playing to {facts.device} ({facts.host_api}): {facts.sample_rate:,} Hz, "
            f"latency {1000 * facts.latency_s:.1f} ms, level {options['level']:g} dB under a ceiling of "
            f"{options['ceiling']:g} dBFS",
        )

    def _start_panel(self) -> None:
        from glidesmith.browser_sound import BrowserSound
        from glidesmith.panel import Panel

        if self._choice is None:
            self._sound = BrowserSound(self._session.deck, self._session.sample_rate)
        panel = Panel(self._session, self._options["port"] or 0, sound=self._sound, tell=self._status.say)
        panel.start()
        self._panel = panel

    def _show_panel(self, panel: "Panel") -> None:
        self._status.say(f"the panel: {panel.url}")
        if not self._options["no_browser"] and _has_display():
            threading.Thread(target=webbrowser.open, args=(panel.url,), daemon=True).start()

    def _run(self, signals: "EndingSignals") -> None:
        """Until it ends: keys, status, and what there is to tell."""
        live_keys = LiveKeys(self._session, self._status.say, self._report)
        begun = time.monotonic()
        with Keys() as keys:
            if keys.available:
                self._status.say("keys: 1 to 8 slots, space stops and plays, ? tells all, q ends")
            while signals.number is None and not live_keys.ended and not self._is_over(begun):
                pressed = keys.read(_LOOK_S)
                for key in pressed:
                    live_keys.press(key)
                self._tell_news()
                lost = self._card is not None and not self._card.playing
                self._status.show(status_text(self._session, lost), at_once=bool(pressed))

    def _is_over(self, begun: float) -> bool:
        """Whether the time given is over, or the phrase that is played once.

        Time is what was made, so that a capture has it all; the clock counts only where nothing is made.
        """
        deck, seconds = self._session.deck, self._options["seconds"]
        if seconds is not None:
            if deck.sample >= seconds * self._session.sample_rate:
                return True
            silent = self._card is None or not self._card.playing
            if silent and time.monotonic() - begun > seconds + _GRACE_S:
                return True
        once = self._options["no_loop"] and self._options["no_panel"]
        return once and deck.commands_taken > 0 and deck.state().mode == "stopped"

    def _tell_news(self) -> None:
        """What the output and the session have to say, once each."""
        if self._card is not None:
            self._status.say(*self._card.watch())
            self._session.device = self._card.facts
        for line in self._session.state()["warnings"]:
            if line not in self._told:
                self._told.add(line)
                self._status.say(line)

    def _report(self) -> list[str]:
        """How playing goes, in words."""
        if self._card is not None:
            return report_lines(self._card.counters(), self._card.facts)
        if self._sound is None:
            return []
        starved = self._sound.starved
        dropouts = counted(starved, "dropout", "dropouts") if starved else "no dropout"
        return [f"the browser: {self._sound.made:,} frames, {dropouts}"]

    def _strike(self) -> list[str]:
        """Take all down, files first: they are whole whatever the output does. The lines of mishaps."""
        problems: list[str] = []

        @contextlib.contextmanager
        def noted() -> Iterator[None]:
            try:
                yield
            except (GlidesmithError, OSError, MemoryError) as problem:
                problems.extend(error_lines(problem))

        session = self._session
        self._status.clear()
        with noted():
            self._fade_out()
        with noted():
            if session.state()["capture"] is not None:
                self._captured = session.capture_stop()
        with noted():
            session.service().stop()
            session.close()
        if self._panel is not None:
            with noted():
                self._panel.stop()
        if self._card is not None:
            with noted():
                self._card.stop()
        return problems

    def _fade_out(self) -> None:
        """Stop the sound without a click, if it goes on."""
        if self._card is None or not self._card.playing:
            return
        deck = self._session.deck
        before = deck.commands_taken
        self._session.stop()
        patience = time.monotonic() + _FADE_PATIENCE_S
        end: float | None = None
        while time.monotonic() < patience and (end is None or deck.sample < end):
            if end is None and deck.commands_taken > before:
                end = deck.sample + _FADE_S * self._session.sample_rate
            time.sleep(0.002)

    def _tell_outcome(self) -> None:
        """How it went: lines, or JSON."""
        if self._as_json:
            click.echo(json_text(self._outcome()))
            return
        lines = self._report()
        if self._captured is not None:
            lines.append(capture_line(self._captured))
        click.echo("\n".join(printable(line) for line in lines))

    def _outcome(self) -> dict[str, Any]:
        """How it went, fit for JSON."""
        outcome = self._session.report()
        if self._card is not None:
            facts = self._card.facts
            outcome |= {
                "callback_worst_us": self._card.counters().worst_us,
                "host_api": facts.host_api,
                "channels": facts.channels,
                "callback": "compiled" if facts.compiled else "python",
            }
        if self._sound is not None:
            outcome |= {
                "device": "browser",
                "frames": self._sound.made,
                "underflows": self._sound.starved,
                "latency_s": self._sound.latency_s,
            }
        return outcome | {"capture": self._captured, "warnings": self._session.state()["warnings"]}


def _has_display() -> bool:
    """Whether a browser would open in a window: a text browser must not take over this terminal."""
    if sys.platform in ("win32", "darwin"):
        return True
    return bool(os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY"))


def leave_now(status: int) -> None:
    """End the process at once: a stream that could not be closed may keep an ordinary end from coming."""
    finish()
    for output in (sys.stdout, sys.stderr):
        with contextlib.suppress(OSError, ValueError):
            output.flush()
    os._exit(status)
