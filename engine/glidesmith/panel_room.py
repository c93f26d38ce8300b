"""All panels that are open at a time: what each says, and what all of them are shown."""

import asyncio
import contextlib
import itertools
import json
import time
from collections import deque
from collections.abc import Callable, Coroutine, Mapping
from concurrent.futures import Executor
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from aiohttp import ClientError, WSCloseCode, web

from glidesmith import __version__
from glidesmith.browser_sound import TooFastError
from glidesmith.errors import GlidesmithError, SettingError
from glidesmith.panel_frames import trace_frame
from glidesmith.panel_messages import (
    MessageError,
    is_slow,
    perform,
    read_message,
)
from glidesmith.settings import KEYS, TABLES
from glidesmith.text import shortened

if TYPE_CHECKING:
    from glidesmith.browser_sound import BrowserSound
    from glidesmith.panel_guard import Folders, Refusals

FRAMES_PER_SECOND = 30
FIGURES_EVERY_S = 0.1
FIGURES_REST = 8.0
"""Facts and curves follow a setting that is being moved every tenth of a second at most, and rest for eight
times as long as they took: so they never take more than a ninth of a core."""

_MOST_WAITING = 120
"""Messages that wait for a browser; one that is so far behind is let go and begins afresh."""

MOST_ERRANDS = 8
"""Files that one panel may have loaded or saved at a time; it is told where it asks for more."""

_MOST_ROWS = 1500
REPORT_EVERY_S = 1.0
_REPORTED = (
    "device",
    "sample_rate",
    "block",
    "latency_s",
    "frames",
    "underflows",
    "callback_median_us",
    "callback_p999_us",
    "deadline_us",
)
_GOODBYE_S = 2.0


class Guest:
    """One panel that is open: its socket, what waits to be sent to it, the keys it holds down and the errands
    that are run for it."""

    _numbers = itertools.count(1)

    def __init__(self, socket: web.WebSocketResponse) -> None:
        self.number = next(self._numbers)
        self.socket = socket
        self.held: set[int] = set()
        self.errands: set[asyncio.Task[None]] = set()
        self.waiting: asyncio.Queue[str | bytes] = asyncio.Queue()
        self.writer: asyncio.Task[None] | None = None
        self.is_behind = False

    def offer(self, message: str | bytes) -> None:
        """Send it as soon as what waits before it is gone."""
        if self.waiting.qsize() >= _MOST_WAITING:
            self.is_behind = True
        else:
            self.waiting.put_nowait(message)

    def say(self, **content: object) -> None:
        """Send an object as JSON."""
        self.offer(_json(content))

    async def write(self) -> None:
        """Send what waits, in order, for as long as the socket is open."""
        with contextlib.suppress(ConnectionError, RuntimeError, ClientError):
            while not self.is_behind:
                message = await self.waiting.get()
                if isinstance(message, str):
                    await self.socket.send_str(message)
                else:
                    await self.socket.send_bytes(message)
        await self.socket.close(code=WSCloseCode.TRY_AGAIN_LATER)


class Room:
    """Holds the guests and the session together; all but what runs beside runs on the event loop."""

    def __init__(
        self,
        session: Any,
        folders: "Folders",
        refusals: "Refusals",
        tell: Callable[[str], None],
        beside: Executor,
        drawing: Executor,
        sound: "BrowserSound | None",
    ) -> None:
        self._session = session
        self._folders = folders
        self._refusals = refusals
        self._tell = tell
        self._beside = beside
        self._drawing = drawing
        self._sound = sound
        self._guests: list[Guest] = []
        self._errands: set[asyncio.Task[None]] = set()
        self._want_files: set[Guest] = set()
        self._is_listing = False
        self._state: dict[str, Any] = {}
        self._figures: str | None = None
        self._figures_wanted = asyncio.Event()
        self._figures_of: object = None
        self._cursor = 0
        self._last_frame = b""
        self._ways = Ways()
        self._report: dict[str, Any] = {}
        self._next_report = 0.0

    def tasks(self) -> list[Coroutine[Any, Any, None]]:
        """What has to run for as long as the room is open."""
        return [self._beat(), self._draw()]

    def enter(self, guest: Guest) -> None:
        """A panel has opened: it is told all there is."""
        self._show_state()  # those who are here already know no other state than this guest is told
        self._guests.append(guest)
        guest.writer = asyncio.create_task(guest.write())
        guest.say(hello=self._hello(guest))
        guest.say(state=self._state)
        if self._figures is not None:
            guest.offer(self._figures)
        if self._report:
            guest.say(report=self._report)
        self._figures_wanted.set()

    def leave(self, guest: Guest) -> None:
        """A panel has closed: its keys come up, what it asked for is left, its sound is free for others."""
        self._guests.remove(guest)
        self._want_files.discard(guest)
        for errand in guest.errands:
            errand.cancel()
        if guest.writer is not None:
            guest.writer.cancel()
        for note in guest.held:
            with contextlib.suppress(GlidesmithError):
                self._session.key_up(note, guest)
        if self._sound is not None and self._sound.listener is guest:
            self._sound.leave(guest)
            self._tell_listener()

    def send_away(self) -> None:
        """Close all panels; their pages come back by themselves while the server is there."""
        self._run(self._say_goodbye())

    async def close(self) -> None:
        """Close all panels, and leave what runs for them."""
        with contextlib.suppress(TimeoutError):
            await asyncio.wait_for(self._say_goodbye(), _GOODBYE_S)
        for errand in self._errands:
            errand.cancel()

    async def _say_goodbye(self) -> None:
        closing = [guest.socket.close(code=WSCloseCode.GOING_AWAY) for guest in self._guests]
        await asyncio.gather(*closing, return_exceptions=True)

    def hear(self, guest: Guest, text: str) -> None:
        """Do what a panel says. Whatever it says, playing goes on."""
        try:
            message = read_message(text)
        except MessageError as problem:
            self._refusals.add(f"a message: {problem}")
            guest.say(refused=str(problem))
            return
        kind = message["do"]
        if kind in ("listen", "frames"):
            self._play_to(guest, message)
        elif kind == "files":
            self._offer_files(guest)
        elif not is_slow(message):
            self._do(guest, message)
        elif len(guest.errands) < MOST_ERRANDS:
            errand = self._run(self._do_beside(guest, message))
            guest.errands.add(errand)
            errand.add_done_callback(guest.errands.discard)
        else:
            full = SettingError(f"{MOST_ERRANDS} files are being loaded and saved; wait until one is done")
            self._refusals.add(f"{kind}: {full}")
            self._say_refused(guest, message, full)

    # What a panel asks for

    def _do(self, guest: Guest, message: Mapping[str, Any]) -> None:
        try:
            done = perform(dict(message), self._session, self._folders, guest)
        except GlidesmithError as problem:
            self._say_refused(guest, message, problem)
            return
        if done is not False:
            self._ways.begin(guest, message)
        if message["do"] == "key_down":
            guest.held.add(message["note"])
        elif message["do"] == "key_up":
            guest.held.discard(message["note"])

    async def _do_beside(self, guest: Guest, message: Mapping[str, Any]) -> None:
        loop = asyncio.get_running_loop()
        try:
            found = await loop.run_in_executor(
                self._beside, perform, dict(message), self._session, self._folders
            )
        except GlidesmithError as problem:
            self._refusals.add(f"{message['do']}: {problem.lines[0]}")
            self._say_refused(guest, message, problem)
            return
        guest.say(done=message["do"], id=message.get("id"), facts=found if isinstance(found, dict) else None)

    def _say_refused(self, guest: Guest, message: Mapping[str, Any], problem: GlidesmithError) -> None:
        guest.say(
            refused="; ".join(problem.lines), id=message.get("id"), do=message["do"], key=message.get("key")
        )

    def _offer_files(self, guest: Guest) -> None:
        """Look into the folders for all who ask meanwhile: however often they do, one look at a time."""
        self._want_files.add(guest)
        if not self._is_listing:
            self._is_listing = True
            self._run(self._list_files())

    async def _list_files(self) -> None:
        loop = asyncio.get_running_loop()
        try:
            while self._want_files:
                asking, self._want_files = self._want_files, set()
                presets, phrases = await loop.run_in_executor(self._beside, self._folders.files)
                for guest in asking & set(self._guests):
                    guest.say(files={"presets": presets, "phrases": phrases})
        finally:
            self._is_listing = False

    def _run(self, errand: Coroutine[Any, Any, None]) -> "asyncio.Task[None]":
        task = asyncio.create_task(self._guarded(errand))
        self._errands.add(task)
        task.add_done_callback(self._errands.discard)
        return task

    async def _guarded(self, errand: Coroutine[Any, Any, None]) -> None:
        try:
            await errand
        except Exception as fault:
            self._tell(f"panel: a fault of its own: {shortened(repr(fault))}")

    # Sound through the browser

    def _play_to(self, guest: Guest, message: Mapping[str, Any]) -> None:
        sound = self._sound
        if sound is None:
            guest.say(refused="the sound goes to the sound card, not to the browser")
        elif message["do"] == "frames":
            sound.note(message.get("starved"), message.get("latency_s"))
            try:
                frame = sound.frames(guest, message["count"])
            except TooFastError as problem:
                self._refusals.add(str(problem))
                return
            if frame is not None:
                guest.offer(frame)
        else:
            if message["on"]:
                sound.listen(guest, message.get("take", False))
            else:
                sound.leave(guest)
            self._tell_listener()

    def _tell_listener(self) -> None:
        for guest in self._guests:
            guest.say(listener=self._listener_number())

    def _listener_number(self) -> int | None:
        listener = self._sound.listener if self._sound is not None else None
        return listener.number if isinstance(listener, Guest) else None

    # What all are shown

    def _hello(self, guest: Guest) -> dict[str, Any]:
        return {
            "version": __version__,
            "guest": guest.number,
            "sample_rate": self._session.sample_rate,
            "browser_sound": self._sound is not None,
            "listener": self._listener_number(),
            "keys": [{**asdict(key), "default": key.plain(key.default), "rule": key.rule} for key in KEYS],
            "tables": [asdict(table) for table in TABLES],
            "folders": [str(folder) for folder in self._folders.folders],
        }

    async def _beat(self) -> None:
        loop = asyncio.get_running_loop()
        due = loop.time()
        while True:
            due = max(due + 1.0 / FRAMES_PER_SECOND, loop.time())
            await asyncio.sleep(due - loop.time())
            if not self._guests:
                continue
            try:
                self._show_state()
                self._show_trace()
                self._show_ways()
                if loop.time() >= self._next_report:
                    self._next_report = loop.time() + REPORT_EVERY_S
                    self._show_report()
            except Exception as fault:
                self._refusals.add(f"a fault of its own: {shortened(repr(fault))}")

    def _show_state(self) -> None:
        state = self._session.state()
        if state["revision"] == self._state.get("revision"):
            return
        changes = changed_parts(self._state, state)
        self._state = state
        self._figures_wanted.set()
        self._tell_all(_json({"change": changes}))

    def _show_trace(self) -> None:
        deck = self._session.deck
        self._cursor, rows = deck.rows(self._cursor)
        frame = trace_frame(
            deck.state(), self._session.meters(), rows[-_MOST_ROWS:], self._session.sample_rate
        )
        if frame != self._last_frame:
            self._last_frame = frame
            self._tell_all(frame)

    def _show_ways(self) -> None:
        """Tell each panel which of its moves are heard, and since when."""
        now, sample = time.time(), self._session.deck.sample
        stamped, dropped = self._session.stamped, self._session.dropped
        while dropped:
            self._ways.drop(dropped.popleft())
        while stamped:
            noted = stamped.popleft()
            found = self._ways.end(noted.move)
            if found is not None:
                made = now - (sample - noted.at) / self._session.sample_rate
                found[0].say(taken=found[1], sample=noted.at, made_ms=1000.0 * made)

    def _show_report(self) -> None:
        report = self._session.report()
        if self._sound is not None:
            report |= {
                "device": "browser",
                "latency_s": self._sound.latency_s,
                "underflows": self._sound.starved,
            }
        shown = {name: report[name] for name in _REPORTED}
        if shown != self._report:
            self._report = shown
            self._tell_all(_json({"report": shown}))

    def _tell_all(self, message: str | bytes) -> None:
        for guest in self._guests:
            guest.offer(message)

    async def _draw(self) -> None:
        """Facts and curves of the slot that is heard, whenever they change; one at a time, the newest."""
        loop = asyncio.get_running_loop()
        while True:
            await self._figures_wanted.wait()
            self._figures_wanted.clear()
            wanted = figures_key(self._state)
            if not self._guests or wanted == self._figures_of:
                continue
            slot, took = self._state["current"], 0.0
            try:
                text, took = await loop.run_in_executor(self._drawing, self._figures_text, slot)
            except GlidesmithError as problem:
                text = _json({"figures": {"slot": slot, "problem": "; ".join(problem.lines)}})
            except Exception as fault:
                self._refusals.add(f"a fault of its own: {shortened(repr(fault))}")
                continue
            self._figures, self._figures_of = text, wanted
            self._tell_all(text)
            await asyncio.sleep(max(FIGURES_EVERY_S, FIGURES_REST * took))

    def _figures_text(self, slot: int) -> tuple[str, float]:
        """The message, and the seconds of work that it took."""
        begun = time.thread_time()
        figures = {"slot": slot, "facts": self._session.facts(slot), "curves": self._session.curves(slot)}
        return _json({"figures": figures}), time.thread_time() - begun


class Ways:
    """Which message became which move: panels' messages in order, until the deck has taken their moves."""

    def __init__(self) -> None:
        self._begun: dict[object, deque[tuple[Guest, int]]] = {}

    def begin(self, guest: Guest, message: Mapping[str, Any]) -> None:
        """A message with a number has been done; its move is under way."""
        if "id" in message:
            waiting = self._begun.setdefault(_way_key(message), deque(maxlen=_MOST_WAITING))
            waiting.append((guest, message["id"]))

    def end(self, move: Any) -> "tuple[Guest, int] | None":
        """Whose message a move was that has been taken; None where it was no panel's."""
        waiting = self._begun.get(_way_key({"do": move.do, **move.values}))
        return waiting.popleft() if waiting else None

    def drop(self, move: Any) -> None:
        """The deck will not be told of a move: the newest of its kind."""
        if waiting := self._begun.get(_way_key({"do": move.do, **move.values})):
            waiting.pop()


def _way_key(values: Mapping[str, Any]) -> object:
    """What a message and its move have in common. Tables are turned by the same moves as settings."""
    key = values.get("key", values.get("table"))
    do = "set" if values["do"] == "table" else values["do"]
    return do, values.get("slot"), key, values.get("note")


def figures_key(state: Mapping[str, Any]) -> object:
    """What facts and curves depend on."""
    slot = next(slot for slot in state["slots"] if slot["number"] == state["current"])
    return slot["number"], slot["facts_revision"], state["loop"]


def changed_parts(before: Mapping[str, Any], after: Mapping[str, Any]) -> dict[str, Any]:
    """What of a state has to be told to whoever knows the one before: whole values, and whole slots."""
    changes = {name: value for name, value in after.items() if name not in before or before[name] != value}
    if "slots" in changes and "slots" in before:
        known = {slot["number"]: slot for slot in before["slots"]}
        changes["slots"] = [slot for slot in after["slots"] if known.get(slot["number"]) != slot]
        changes["slot_numbers"] = [slot["number"] for slot in after["slots"]]
    return changes


def _json(content: object) -> str:
    return json.dumps(content, ensure_ascii=False, separators=(",", ":"))
