"""Jobs on this machine: processes that make items beside each other, fed through pipes.

One process loads the compiled engine and then becomes as many as are wanted (fork, on Linux, where it has no
thread yet); elsewhere each loads it for itself. The caller keeps no engine and no audio in memory. Orders go
out as they are asked for, two to a job and no more, so that memory does not grow with their number. A job
whose pipe closes gives up at once: nothing that a killed batch has begun gets its name later.
"""

import contextlib
import os
import pickle
import queue
import signal
import subprocess
import sys
import threading
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass
from typing import IO, TypeAlias

from glidesmith.production import Failure, Order, Place, StoppedError, attempt, get_ready
from glidesmith.production import Outcome as Outcome
from glidesmith.production import Runner as Runner

_AHEAD = 2
"""Orders that a job has: one in hand, one waiting."""

_PATIENCE_S = 10.0
_MOST_LOSSES = 5

Job: TypeAlias = tuple[Order, Place]


@dataclass(frozen=True, slots=True)
class _Channel:
    """The two ends of a job that its master holds."""

    orders: IO[bytes]
    outcomes: IO[bytes]


class Crew:
    """Several jobs, started when the first order comes or before, and kept until `close`.

    Its `run` is a `Runner`.
    """

    def __init__(self, jobs: int, forks: bool | None = None) -> None:
        """``forks``: whether one process becomes several; by default on Linux."""
        self._jobs = jobs
        self._forks = sys.platform == "linux" if forks is None else forks
        self._processes: list[subprocess.Popen[bytes]] = []
        self._channels: list[_Channel] = []
        self._threads: list[threading.Thread] = []
        self._losses = 0
        self._waiting: queue.Queue[tuple[int, Job] | None] = queue.Queue()
        self._done: queue.SimpleQueue[tuple[int, Outcome] | BaseException] = queue.SimpleQueue()
        self._closing = False
        self._launching = threading.Lock()

    def __enter__(self) -> "Crew":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def run(self, orders: Iterator[Order], place: Place) -> Iterator[tuple[int, Outcome]]:
        """Have orders made; see `Runner`."""
        out = 0
        for number, order in enumerate(orders):
            if not self._channels:
                self.start()
            self._waiting.put((number, (order, place)))
            out += 1
            while out and (out >= _AHEAD * self._jobs or not self._done.empty()):
                yield self._outcome()
                out -= 1
        for _ in range(out):
            yield self._outcome()

    def _outcome(self) -> tuple[int, Outcome]:
        found = self._done.get()
        if isinstance(found, BaseException):
            raise found
        return found

    def start(self) -> None:
        """Start the jobs, so that they are ready when orders come."""
        groups = [self._jobs] if self._forks else [1] * self._jobs
        with _interrupts_ignored():
            for count in groups:
                self._launch(count)

    def _launch(self, count: int) -> None:
        process, channels = (_forking if self._forks else _single)(count)
        self._processes.append(process)
        self._channels += channels
        for channel in channels:
            thread = threading.Thread(target=self._serve, args=(channel,), daemon=True)
            thread.start()
            self._threads.append(thread)

    def _serve(self, channel: _Channel) -> None:
        """Feed one job and take what it makes, until there is nothing more."""
        sent: deque[tuple[int, Job]] = deque()
        while True:
            try:
                if not self._feed(channel, sent):
                    return
                outcome = pickle.load(channel.outcomes)
            except (OSError, EOFError, ValueError, pickle.UnpicklingError):
                self._lost(sent)
                return
            except BaseException as problem:  # nobody else would hear of it
                self._done.put(problem)
                return
            self._losses = 0
            self._done.put((sent.popleft()[0], outcome))

    def _feed(self, channel: _Channel, sent: deque[tuple[int, Job]]) -> bool:
        """Give a job as much as it may have; False when there will be nothing more."""
        while len(sent) < _AHEAD:
            try:
                item = self._waiting.get(block=not sent)
            except queue.Empty:
                break
            if item is None:
                self._waiting.put(None)
                return bool(sent)
            sent.append(item)
            pickle.dump(item[1], channel.orders, pickle.HIGHEST_PROTOCOL)
            channel.orders.flush()
        return True

    def _lost(self, sent: deque[tuple[int, Job]]) -> None:
        """A job ended by itself: what it had in hand failed, what waited goes to another one."""
        if self._closing:
            return
        self._losses += 1
        if sent:
            number, (order, _) = sent.popleft()
            reason = "the process that made it ended before it was done; is there enough memory? Run again"
            self._done.put((number, Failure((f"{order.item}: {reason}",), self._losses > _MOST_LOSSES)))
        for item in sent:
            self._waiting.put(item)
        with self._launching:
            try:
                if not self._closing:
                    self._launch(1)
            except BaseException as problem:
                self._done.put(problem)

    def close(self) -> None:
        """End all jobs; what they have in hand is given up, and nothing of it is left."""
        with self._launching:
            self._closing = True
        self._waiting.put(None)
        for channel in self._channels:
            with contextlib.suppress(OSError, ValueError):
                channel.orders.close()
        for process in self._processes:
            try:
                process.wait(_PATIENCE_S)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait()
        for thread in self._threads:
            thread.join(_PATIENCE_S)
        for channel in self._channels:
            with contextlib.suppress(OSError):
                channel.outcomes.close()
        self._channels, self._processes, self._threads = [], [], []


@contextlib.contextmanager
def _interrupts_ignored() -> Iterator[None]:
    """What is started meanwhile never hears an interrupt from the terminal: that is for its master."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    kept = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, kept)


def _command(numbers: str) -> list[str]:
    paths = [path or os.getcwd() for path in sys.path]  # noqa: PTH109 - a text is wanted
    code = f"import sys; sys.path[:] = {paths!r}; from glidesmith.crew import labour; labour({numbers})"
    return [sys.executable, "-c", code]


def _environment() -> dict[str, str]:
    """Linear algebra, of which there is none, gets no threads: with them a process could not be forked."""
    return os.environ | {"OPENBLAS_NUM_THREADS": "1", "MKL_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"}


def _forking(count: int) -> tuple["subprocess.Popen[bytes]", list[_Channel]]:
    """A process that becomes ``count``, each with two pipes."""
    theirs: list[tuple[int, int]] = []
    ours: list[_Channel] = []
    for _ in range(count):
        order_end, order_begin = os.pipe()
        outcome_end, outcome_begin = os.pipe()
        theirs.append((order_end, outcome_begin))
        ours.append(_Channel(os.fdopen(order_begin, "wb"), os.fdopen(outcome_end, "rb")))
    handed = [descriptor for pair in theirs for descriptor in pair]
    try:
        process = subprocess.Popen(
            _command(repr(theirs)), pass_fds=handed, stdin=subprocess.DEVNULL, env=_environment()
        )
    finally:
        for descriptor in handed:
            os.close(descriptor)
    return process, ours


def _single(_: int) -> tuple["subprocess.Popen[bytes]", list[_Channel]]:
    """A process with one job, fed through its standard streams."""
    process = subprocess.Popen(
        _command("None"), stdin=subprocess.PIPE, stdout=subprocess.PIPE, env=_environment()
    )
    assert process.stdin is not None
    assert process.stdout is not None
    return process, [_Channel(process.stdin, process.stdout)]


# In the processes


def labour(pipes: list[tuple[int, int]] | None) -> None:
    """Be a job, or several: make what comes through the pipes until they close.

    ``pipes`` are descriptors to read from and to write to, a pair a job; None: the standard streams.
    """
    if pipes is None:
        outcomes = os.dup(1)
        os.dup2(2, 1)  # what anything prints must not get among the outcomes
        get_ready()
        _work(0, outcomes)
        return
    get_ready()
    children = []
    own = pipes[0]
    for pair in pipes[1:]:
        child = os.fork()
        if child == 0:
            _close_all_but(pair, pipes)
            _leave_after(pair)
        children.append(child)
    _close_all_but(own, pipes)
    _work(*own)
    for child in children:  # so that the time they took counts as this process's
        with contextlib.suppress(ChildProcessError):
            os.waitpid(child, 0)


def _leave_after(pair: tuple[int, int]) -> None:
    status = 1
    try:
        _work(*pair)
        status = 0
    finally:
        os._exit(status)


def _close_all_but(own: tuple[int, int], pipes: list[tuple[int, int]]) -> None:
    for pair in pipes:
        for descriptor in pair:
            if descriptor not in own:
                os.close(descriptor)


def _work(order_end: int, outcome_begin: int) -> None:
    """Make what comes, one after the other. A thread waits for orders, and hears when the pipe closes."""
    gone = threading.Event()
    inbox: queue.SimpleQueue[Job | None] = queue.SimpleQueue()
    orders = os.fdopen(order_end, "rb")
    threading.Thread(target=_listen, args=(orders, inbox, gone), daemon=True).start()
    with os.fdopen(outcome_begin, "wb") as outcomes:
        while (job := inbox.get()) is not None:
            try:
                outcome = attempt(*job, gone.is_set)
                pickle.dump(outcome, outcomes, pickle.HIGHEST_PROTOCOL)
                outcomes.flush()
            except (StoppedError, BrokenPipeError):
                break


def _listen(orders: IO[bytes], inbox: "queue.SimpleQueue[Job | None]", gone: threading.Event) -> None:
    try:
        while True:
            inbox.put(pickle.load(orders))
    except (EOFError, OSError, pickle.UnpicklingError):
        gone.set()
        inbox.put(None)
