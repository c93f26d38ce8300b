"""The matcher: keeps every slot's loudness measured while settings move, and says which gains are to change.

Measuring happens in a thread of its own, beside the sound; while a setting is moving it waits until the hand
rests.
"""

import threading
import time
from collections import deque
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING

from glidesmith.errors import GlidesmithError
from glidesmith.levelmatch import (
    SMALLEST_STEP_DB,
    Loudnesses,
    loudness_of,
    matched_gains,
    too_quiet,
    view_key,
)

if TYPE_CHECKING:
    from glidesmith.console import View

QUIET_S = 0.15
"""How long nothing may move before slots are measured."""

LONGEST_WAIT_S = 1.0
"""While something moves all the time, slots are measured this often."""

Views = Mapping[int, "View"]


class Matcher:
    """Measures slots' loudness and works out their gains; see the module.

    `look` is called often by whoever owns the slots; `measure_next` does the work, in whatever thread calls
    it.
    """

    def __init__(self, sample_rate: int, clock: Callable[[], float] = time.monotonic) -> None:
        self._rate = sample_rate
        self._clock = clock
        self._lock = threading.Lock()
        self._known = Loudnesses()
        self._waiting: deque[tuple[str, View]] = deque()
        self._keys: dict[int, str] = {}
        self._first = self._last = clock()
        self._moved = True
        self._asked = False
        self._wake = threading.Event()
        self._thread: threading.Thread | None = None
        self._ending = False

    def move(self) -> None:
        """Something moved that a slot's loudness may hang on."""
        now = self._clock()
        if not self._moved:
            self._first = now
        self._moved, self._last = True, now

    def look(self, views: Callable[[], Views], at_once: bool = False) -> bool:
        """See whether anything is to be measured, once the hand rests or ``at_once``.

        True where all that moved is measured by now; it is told once.
        """
        if self._moved:
            now = self._clock()
            if not at_once and now - self._last < QUIET_S and now - self._first < LONGEST_WAIT_S:
                return False
            self._moved, self._asked = False, True
            self._ask(views())
        with self._lock:
            done = self._asked and all(key in self._known for key in self._keys.values())
        self._asked = self._asked and not done
        return done

    def gains(self, present_db: Mapping[int, float]) -> dict[int, float]:
        """The gains in dB that are to change, by slot, where every slot is measured."""
        wanted = matched_gains(self.lufs())
        return {
            number: gain_db
            for number, gain_db in wanted.items()
            if abs(gain_db - present_db.get(number, 0.0)) >= SMALLEST_STEP_DB
        }

    def lufs(self) -> dict[int, float | None]:
        """The loudness of each slot at its own level, None where it is silent or not measured yet."""
        with self._lock:
            return {number: self._known.get(key) for number, key in self._keys.items()}

    def too_quiet(self) -> list[int]:
        """The slots that can't be matched, once all are measured."""
        with self._lock:
            known = all(key in self._known for key in self._keys.values())
        return too_quiet(self.lufs()) if known else []

    def measure_next(self) -> bool:
        """Measure one slot that waits for it; False where none does."""
        with self._lock:
            if not self._waiting:
                return False
            key, view = self._waiting.popleft()
        try:
            lufs = loudness_of(view, self._rate)
        except (GlidesmithError, MemoryError):  # the deck will have told what is wrong with it
            lufs = None
        with self._lock:
            self._known.put(key, lufs)
        return True

    def start(self) -> None:
        """Measure in a thread of its own from now on."""
        self._ending = False
        self._thread = threading.Thread(target=self._work, name="glidesmith level match", daemon=True)
        self._thread.start()

    def stop(self) -> None:
        """End that thread."""
        self._ending = True
        self._wake.set()
        if self._thread is not None:
            self._thread.join()
            self._thread = None

    def _ask(self, views: Views) -> None:
        keys = {number: view_key(view) for number, view in views.items()}
        with self._lock:
            self._keys = keys
            # What was asked for and has moved since is not worth measuring any more.
            wanted = {key: views[number] for number, key in keys.items() if key not in self._known}
            self._waiting = deque(wanted.items())
        self._wake.set()

    def _work(self) -> None:
        while not self._ending:
            if not self.measure_next():
                self._wake.wait()
                self._wake.clear()
