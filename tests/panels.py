"""A session with its panel, served for tests: sound made in step with the clock, and a way to talk."""

import asyncio
import json
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import aiohttp
import numpy as np

from conftest import PHRASES, PRESETS
from glidesmith import load_preset
from glidesmith.browser_sound import BrowserSound
from glidesmith.panel import Panel
from glidesmith.phrase import load_preset_phrase
from glidesmith.session import Session

SAMPLE_RATE = 48_000
DEADLINE_S = 20.0
"""How long a test waits for what must come, before it fails; far longer than anything takes."""

USUAL = ("night-ferry-lead", "winch-constant-rate", "deck-tune")


class Driver:
    """Plays a deck in step with the clock, block by block, as a sound card would; ``times`` has each block's.

    ``times`` are (first sample, seconds since 1970 at which its block was begun).
    """

    def __init__(self, deck: Any, block: int = 128) -> None:
        self._deck, self._block = deck, block
        self._end = threading.Event()
        self.times: list[tuple[int, float]] = []
        self._thread = threading.Thread(target=self._run, daemon=True)

    def __enter__(self) -> "Driver":
        self._deck.play(np.zeros(0, np.float32))  # compiled now, so that no test waits for it
        self._thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._end.set()
        self._thread.join(DEADLINE_S)

    def _run(self) -> None:
        out = np.zeros(self._block, np.float32)
        begun, made, rate = time.monotonic(), 0, self._deck.sample_rate
        while not self._end.is_set():
            if made <= (time.monotonic() - begun) * rate:
                self.times.append((self._deck.sample, time.time()))
                self._deck.play(out)
                made += self._block
            else:
                time.sleep(self._block / rate / 4)


@dataclass
class Served:
    """A panel that is being served, and what it said."""

    session: Any
    panel: Panel
    lines: list[str] = field(default_factory=list)
    driver: Driver | None = None
    sound: BrowserSound | None = None

    @property
    def origin(self) -> str:
        """The origin of the panel's own page."""
        return f"http://127.0.0.1:{self.panel.port}"

    @property
    def token(self) -> str:
        """This run's token."""
        return self.panel.url.rpartition("=")[2]

    def still_plays(self) -> bool:
        """Whether the sound goes on from now."""
        before = self.session.deck.sample
        return waited_for(lambda: self.session.deck.sample > before + 1000)


def waited_for(condition: Callable[[], Any], seconds: float = DEADLINE_S) -> bool:
    """True as soon as the condition holds; False where it does not by the deadline."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if condition():
            return True
        time.sleep(0.005)
    return False


def make_session(names: tuple[str, ...] = USUAL, **options: Any) -> Session:
    """A session of presets of the demo bank, each with its own phrase."""
    presets = [load_preset(PRESETS / f"{name}.toml") for name in names]
    return Session(presets, [load_preset_phrase(preset) for preset in presets], SAMPLE_RATE, **options)


@contextmanager
def served(
    folder: Path, names: tuple[str, ...] = USUAL, *, by_browser: bool = False, port: int = 0, **options: Any
) -> Iterator[Served]:
    """A session and its panel, looked after; driven by the clock, or ready for a browser that listens."""
    session = make_session(names, **options)
    session.facts(1), session.curves(1)  # compiled now, so that no test waits for it
    lines: list[str] = []
    sound = BrowserSound(session.deck, SAMPLE_RATE) if by_browser else None
    panel = Panel(
        session, port, folders=[folder, PRESETS, PHRASES], sound=sound, tell=lines.append, most_told=1000
    )
    found = Served(session, panel, lines, sound=sound)
    with session.service():
        panel.start()
        try:
            if by_browser:
                yield found
            else:
                with Driver(session.deck) as found.driver:
                    yield found
        finally:
            panel.stop()
            session.close()


class Talk:
    """One panel's side of the socket, for tests in a coroutine."""

    def __init__(self, socket: Any) -> None:
        self.socket = socket
        self.state: dict[str, Any] = {}
        self.frames: list[bytes] = []

    async def say(self, **message: Any) -> None:
        """Send a message as JSON."""
        await self.socket.send_str(json.dumps(message))

    async def next(self) -> Any:
        """The next thing that came: an object, bytes, or the kind of a message that ends the socket."""
        async with asyncio.timeout(DEADLINE_S):
            message = await self.socket.receive()
        if message.type is aiohttp.WSMsgType.BINARY:
            self.frames.append(message.data)
            return message.data
        if message.type is not aiohttp.WSMsgType.TEXT:
            return message.type
        content = json.loads(message.data)
        self._merge(content)
        return content

    async def until(self, wanted: Callable[[Any], Any]) -> Any:
        """The next thing for which ``wanted`` is true. Fails at the deadline."""
        async with asyncio.timeout(DEADLINE_S):
            while True:
                found = await self.next()
                assert not isinstance(found, aiohttp.WSMsgType), f"the socket ended: {found}"
                if wanted(found):
                    return found

    async def told(self, name: str) -> Any:
        """What the next message with that name says under it."""
        return (await self.until(lambda found: isinstance(found, dict) and name in found))[name]

    async def until_state(self, wanted: Callable[[dict[str, Any]], Any]) -> dict[str, Any]:
        """The state, as soon as the panel has been told of one for which ``wanted`` is true."""
        if not (self.state and wanted(self.state)):
            await self.until(lambda found: self.state and wanted(self.state))
        return self.state

    def slot(self, number: int) -> dict[str, Any]:
        """A slot of the state."""
        return next(slot for slot in self.state["slots"] if slot["number"] == number)

    def _merge(self, content: dict[str, Any]) -> None:
        """As the page does it, in panel.js."""
        if "state" in content:
            self.state = content["state"]
        elif "change" in content:
            change = content["change"]
            known = {slot["number"]: slot for slot in [*self.state["slots"], *change.get("slots", [])]}
            numbers = change.pop("slot_numbers", list(known))
            self.state = {**self.state, **change, "slots": [known[number] for number in numbers]}


def talking(found: Served, conversation: Callable[..., Any], panels: int = 1) -> Any:
    """Run a coroutine function with as many panels' sockets as it wants."""

    async def talk() -> Any:
        async with aiohttp.ClientSession() as client:
            sockets = [await opened_socket(client, found) for _ in range(panels)]
            try:
                return await conversation(*(Talk(socket) for socket in sockets))
            finally:
                for socket in sockets:
                    await socket.close()

    return asyncio.run(asyncio.wait_for(talk(), 2 * DEADLINE_S))


async def opened_socket(client: aiohttp.ClientSession, found: Served, **changes: Any) -> Any:
    """A panel's socket; ``changes`` replaces its token, origin or other headers."""
    token = changes.pop("token", found.token)
    headers = {"Origin": found.origin, **changes}
    return await client.ws_connect(
        f"{found.origin}/socket",
        params=None if token is None else {"token": token},
        headers={name: value for name, value in headers.items() if value is not None},
    )


@contextmanager
def browser_for_panels() -> Iterator[Any]:
    """A Chromium of its own that reaches this machine and nothing else, closed at the end."""
    from playwright.sync_api import sync_playwright

    from browser import CHROMIUM, SWITCHES

    kept = [switch for switch in SWITCHES if not switch.startswith(("--host-resolver", "--autoplay"))]
    switches = [*kept, "--host-resolver-rules=MAP * ~NOTFOUND, EXCLUDE 127.0.0.1, EXCLUDE localhost"]
    with sync_playwright() as playwright:
        chromium = playwright.chromium.launch(executable_path=CHROMIUM, args=switches)
        try:
            yield chromium
        finally:
            chromium.close()


@contextmanager
def panel_tab(chromium: Any, found: Served, **settings: Any) -> Iterator[Any]:
    """The panel in a fresh profile, connected and with its figures; a `browser.Tab`."""
    from browser import Tab

    context = chromium.new_context(**settings)
    context.set_default_timeout(1000 * DEADLINE_S)
    try:
        tab = Tab(context.new_page())
        tab.page.goto(found.panel.url)
        tab.page.wait_for_selector("#facts-body tbody tr")
        yield tab
    finally:
        context.close()
