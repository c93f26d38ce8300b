"""The panel's server: a page on 127.0.0.1, and a socket over which moves come in and what is heard goes out.

    panel = Panel(session)
    panel.start()
    print(panel.url)          # open it in a browser
    ...
    panel.stop()

It runs an event loop of its own in a thread of its own. A move goes to the session in the very handler that
reads it from the socket: nothing queues before it. What takes a while (files, facts, curves) runs beside the
loop. Any number of panels may be open; all show the same state, and each may move it.
"""

import asyncio
import contextlib
import logging
import os
import socket
import sys
import threading
from collections.abc import Awaitable, Callable, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import TYPE_CHECKING, Any

from aiohttp import WebSocketError, WSCloseCode, WSMsgType, web
from aiohttp.http_exceptions import HttpProcessingError

from glidesmith.errors import OutputError
from glidesmith.panel_guard import MOST_TOLD, Folders, Guard, Refusals, RefusedError
from glidesmith.panel_messages import LONGEST_MESSAGE
from glidesmith.panel_page import panel_page, policy, worklet_script
from glidesmith.panel_room import Guest, Room
from glidesmith.text import printable, shortened

if TYPE_CHECKING:
    from glidesmith.browser_sound import BrowserSound

HOST = "127.0.0.1"
FIRST_PORT = 8440
"""Where a panel that may choose begins to look for a free port."""

_TRIED_PORTS = 40
_START_S = 10.0
_STOP_S = 5.0
_HEARTBEAT_S = 20.0
_QUICK_SWITCH_S = 0.0005

_HEADERS = {
    "Cache-Control": "no-store",
    "Content-Security-Policy": "",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Referrer-Policy": "no-referrer",
    "X-Content-Type-Options": "nosniff",
    "X-Frame-Options": "DENY",
}

Handler = Callable[[web.Request], Awaitable[web.StreamResponse]]


def _tell_on_standard_error(line: str) -> None:
    print(line, file=sys.stderr, flush=True)


class Panel:
    """The server of a session's panel.

    Parameters
    ----------
    session : Session
        What is played and moved.
    port : int
        Where to listen; 0 takes the first free one from 8440 on.
    folders : iterable of paths, optional
        Where presets and captures may be written, and presets and phrases read; relative names start from the
        first. By default the working folder and those of the presets; that of the phrase which is heard now
        is only read, and those of other slots' phrases not even that.
    sound : BrowserSound, optional
        Plays through the browser; without it the session's own sound card does.
    hosts : iterable of str
        Further hosts, exactly as a browser names them (``"localhost:9000"``), for a tunnel whose near end has
        another port.
    tell : callable
        Gets every refusal and fault, a line each; standard error unless told.
    most_told : int
        How many refusals are told within ten seconds; further ones are counted.
    """

    def __init__(
        self,
        session: Any,
        port: int = 0,
        *,
        folders: Iterable[str | os.PathLike[str]] | None = None,
        sound: "BrowserSound | None" = None,
        hosts: Iterable[str] = (),
        tell: Callable[[str], None] = _tell_on_standard_error,
        most_told: int = MOST_TOLD,
    ) -> None:
        self._session = session
        self._wanted_port = port
        self._hosts = tuple(hosts)
        self._tell: Callable[[str], None] = lambda line: tell(printable(line))
        self._refusals = Refusals(self._tell, most_told)
        self._folders = _usual_folders(session) if folders is None else Folders(folders)
        self._sound = sound
        self._thread: threading.Thread | None = None
        self._loop: asyncio.AbstractEventLoop | None = None
        self._stopping: asyncio.Event | None = None

    def start(self) -> None:
        """Listen and serve, until `stop`.

        Raises OutputError, one line, where the port is taken or no port is free.
        """
        if self._thread is not None:
            return
        listener = _listening(self._wanted_port)
        self.port: int = listener.getsockname()[1]
        self._guard = Guard(self.port, hosts=self._hosts)
        ready = threading.Event()
        self._thread = threading.Thread(
            target=self._run, args=(listener, ready), name="glidesmith panel", daemon=True
        )
        self._thread.start()
        if not ready.wait(_START_S) or self._stopping is None:
            raise OutputError(f"the panel did not begin to serve within {_START_S:g} s; try again")

    @property
    def url(self) -> str:
        """The address to open, with the token of this run in it."""
        return f"http://{HOST}:{self.port}/?token={self._guard.token}"

    def stop(self) -> None:
        """Say goodbye to all panels and stop serving; returns within some seconds whatever they do."""
        thread, self._thread = self._thread, None
        if thread is None:
            return
        loop, stopping = self._loop, self._stopping
        if loop is not None and stopping is not None:
            with contextlib.suppress(RuntimeError):  # the loop has ended by itself
                loop.call_soon_threadsafe(stopping.set)
        thread.join(_STOP_S)

    def __enter__(self) -> "Panel":
        self.start()
        return self

    def __exit__(self, *_: object) -> None:
        self.stop()

    def _run(self, listener: socket.socket, ready: threading.Event) -> None:
        try:
            asyncio.run(self._serve(listener, ready))
        except Exception as fault:  # the thread must not end with a traceback over the user's terminal
            self._tell(f"panel: stopped by a fault of its own: {shortened(repr(fault))}")
        finally:
            listener.close()
            ready.set()

    async def _serve(self, listener: socket.socket, ready: threading.Event) -> None:
        self._loop, self._stopping = asyncio.get_running_loop(), asyncio.Event()
        with (
            ThreadPoolExecutor(2, "glidesmith panel file") as beside,
            ThreadPoolExecutor(1, "glidesmith panel figures") as drawing,
            _quick_switching(),
        ):
            self._room = Room(
                self._session, self._folders, self._refusals, self._tell, beside, drawing, self._sound
            )
            runner = web.AppRunner(
                self._application(),
                access_log=None,
                logger=_one_line_logger(self._refusals),
                shutdown_timeout=1.0,
            )
            await runner.setup()
            await web.SockSite(runner, listener).start()
            work = [asyncio.create_task(task) for task in self._room.tasks()]
            ready.set()
            try:
                await self._stopping.wait()
            finally:
                for task in work:
                    task.cancel()
                await self._room.close()
                await runner.cleanup()
                await asyncio.gather(*work, return_exceptions=True)

    def _application(self) -> web.Application:
        @web.middleware
        async def guarded(request: web.Request, handler: Handler) -> web.StreamResponse:
            try:
                is_socket = request.path == "/socket"
                self._guard.check(request.headers, request.query.get("token"), is_socket)
                return await handler(request)
            except RefusedError as refused:
                return self._refuse(request, str(refused), refused.status)
            except web.HTTPException as answer:
                return self._refuse(request, answer.reason, answer.status)

        application = web.Application(middlewares=[guarded], client_max_size=LONGEST_MESSAGE)
        application.router.add_get("/", self._page, allow_head=False)
        application.router.add_get("/player.js", self._player, allow_head=False)
        application.router.add_get("/socket", self._socket, allow_head=False)
        return application

    def _refuse(self, request: web.Request, line: str, status: int) -> web.Response:
        self._refusals.add(f"{shortened(request.method)} {shortened(request.path)}: {line}")
        return web.Response(status=status, text=f"{line}\n", headers=_headers())

    async def _page(self, request: web.Request) -> web.Response:
        return web.Response(body=panel_page(), content_type="text/html", charset="utf-8", headers=_headers())

    async def _player(self, request: web.Request) -> web.Response:
        return web.Response(
            body=worklet_script(), content_type="text/javascript", charset="utf-8", headers=_headers()
        )

    async def _socket(self, request: web.Request) -> web.StreamResponse:
        answer = web.WebSocketResponse(
            max_msg_size=LONGEST_MESSAGE, heartbeat=_HEARTBEAT_S, compress=False, timeout=1.0
        )
        if not answer.can_prepare(request).ok:
            return self._refuse(request, "this address speaks WebSocket only", 400)
        await answer.prepare(request)
        if request.transport is not None:
            sock = request.transport.get_extra_info("socket")
            sock.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        guest = Guest(answer)
        self._room.enter(guest)
        try:
            async for message in answer:
                if message.type == WSMsgType.TEXT:
                    self._room.hear(guest, message.data)
                elif message.type == WSMsgType.BINARY:
                    self._refusals.add("a message in bytes; the panel's messages are texts")
                elif message.type == WSMsgType.ERROR:
                    self._refusals.add(_broken(message.data))
                    break
        finally:
            self._room.leave(guest)
        return answer


def _broken(fault: object) -> str:
    """What to tell of a message that can't be read, whose panel is closed."""
    if isinstance(fault, WebSocketError) and fault.code == WSCloseCode.MESSAGE_TOO_BIG:
        return f"a message of more than {LONGEST_MESSAGE:,} bytes; its panel was closed"
    return f"a message that can't be read ({shortened(str(fault))}); its panel was closed"


def _headers() -> dict[str, str]:
    return {**_HEADERS, "Content-Security-Policy": policy()}


def _usual_folders(session: Any) -> Folders:
    """The folders that the user named by starting here with these files."""
    state = session.state()
    presets = [Path(slot["path"]).parent for slot in state["slots"] if slot["path"]]
    phrase = state["phrase"]["path"]
    return Folders([Path(), *presets], [Path(phrase).parent] if phrase else [])


def _listening(port: int) -> socket.socket:
    """A socket that listens on a port of this machine alone. Raises OutputError where that can't be had."""
    ports = [port] if port else [*range(FIRST_PORT, FIRST_PORT + _TRIED_PORTS), 0]
    for tried in ports:
        listener = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
        if os.name == "posix":  # elsewhere the option would let another program in at the same port
            listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            listener.bind((HOST, tried))
            listener.listen(64)
        except (OSError, OverflowError) as problem:
            listener.close()
            why = (
                problem.strerror.lower()
                if isinstance(problem, OSError) and problem.strerror
                else str(problem)
            )
        else:
            listener.setblocking(False)
            return listener
    raise OutputError(
        f"the panel's port {port or FIRST_PORT} on {HOST}: {why}; name another, or 0 for any that is free"
    )


@contextlib.contextmanager
def _quick_switching() -> Iterator[None]:
    """While it lasts, Python's threads take turns twice a millisecond: no move waits for a busy neighbour."""
    before = sys.getswitchinterval()
    sys.setswitchinterval(min(before, _QUICK_SWITCH_S))
    try:
        yield
    finally:
        sys.setswitchinterval(before)


class _OneLine(logging.Handler):
    """What the server library would log with tracebacks, as one line."""

    def __init__(self, refusals: Refusals) -> None:
        super().__init__()
        self._refusals = refusals

    def emit(self, record: logging.LogRecord) -> None:
        """Tell a fault, or bytes that are no request; all else that is only for debugging is left out."""
        fault = record.exc_info[1] if record.exc_info else None
        if isinstance(fault, HttpProcessingError):
            why = (fault.message.splitlines() or [""])[0]
            self._refusals.add(f"what came is no request: {shortened(why)}")
        elif record.levelno >= logging.WARNING:
            self._refusals.add(
                shortened(f"{record.getMessage()}: {fault!r}" if fault else record.getMessage())
            )


def _one_line_logger(refusals: Refusals) -> logging.Logger:
    logger = logging.Logger("glidesmith.panel")
    logger.addHandler(_OneLine(refusals))
    return logger
