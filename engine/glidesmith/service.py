"""The thread that looks after a session, every few milliseconds."""

import threading
from types import TracebackType
from typing import TYPE_CHECKING

from glidesmith.text import shortened

if TYPE_CHECKING:
    from glidesmith.session import Session

TICK_S = 0.005
"""How often it looks."""


class Service:
    """The thread that looks after a session: a context manager, or `start` and `stop`."""

    def __init__(self, session: "Session") -> None:
        self._session = session
        self._end = threading.Event()
        self._thread: threading.Thread | None = None

    def start(self) -> None:
        """Begin; nothing happens where it has begun."""
        if self._thread is None:
            self._end.clear()
            self._session.start_measuring()
            self._thread = threading.Thread(target=self._run, name="glidesmith service", daemon=True)
            self._thread.start()

    def stop(self) -> None:
        """End."""
        if self._thread is not None:
            self._end.set()
            self._thread.join()
            self._thread = None
            self._session.stop_measuring()

    def __enter__(self) -> "Service":
        self.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.stop()

    def _run(self) -> None:
        while not self._end.wait(TICK_S):
            try:
                self._session.tick()
            except Exception as fault:  # whatever it is, the sound and the log go on
                self._session.remark(f"a fault of its own: {shortened(repr(fault))}")
