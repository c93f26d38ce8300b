"""What a worker of a cluster does: errands, a few orders each, for a place that all share.

An errand comes as bytes and is answered in bytes of JSON: small records, never audio. Before the first errand
of a run a worker is looked over once, while nobody else of its process works: whether it is of the same make
as the client, whether it sees the same place, and then it compiles the engine. Whatever goes wrong with an
order is part of the answer, so that nothing of an errand ever stands in a log.
"""

import asyncio
import json
import pickle
import platform
import struct
import threading
import time
import zlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, dataclass
from functools import cache
from typing import TYPE_CHECKING, Any

from glidesmith import __version__
from glidesmith.errors import GlidesmithError
from glidesmith.production import Failure, Order, Outcome, Place, StoppedError, attempt, get_ready
from glidesmith.text import printable, shortened

if TYPE_CHECKING:
    from glidesmith.places import SharedPlace

_MOST_RUNS = 8
_LONGEST_SAID = 200
_HEAD = struct.Struct("<I")

MAKE_WORDS = {
    "glidesmith": "Glidesmith",
    "kernels": "Glidesmith's kernels",
    "python": "Python",
    "numpy": "NumPy",
    "numba": "Numba",
    "llvmlite": "llvmlite",
    "processor": "processor type",
}
"""What must be alike so that the same order gives the same bytes, and how people call it."""


@dataclass(frozen=True, slots=True)
class Terms:
    """What holds for all errands of a run: the place, the token that lies there, and the client's make."""

    run: str
    output: str
    token_name: str
    token: str
    make: Mapping[str, str]


@cache
def make_of_this_process() -> Mapping[str, str]:
    """What decides which bytes an order gives here, each as a short text. Asked once in each process."""
    import llvmlite
    import llvmlite.binding
    import numba
    import numpy as np
    from numba.core import config

    from glidesmith.compiled import sources_digest

    name = config.CPU_NAME or llvmlite.binding.get_host_cpu_name()
    return {
        "glidesmith": __version__,
        "kernels": sources_digest(),
        "python": platform.python_version(),
        "numpy": np.__version__,
        "numba": numba.__version__,
        "llvmlite": llvmlite.__version__,
        "processor": f"{platform.machine()} {name}",
    }


# The letters


def terms_as_json(terms: Terms) -> str:
    """What a worker is told of a run."""
    return json.dumps({**asdict(terms), "make": dict(terms.make)})


def packed_errand(terms: Terms, orders: Sequence[Order]) -> bytes:
    """An errand as bytes, small, and unreadable to whoever happens on it in a log."""
    head = terms_as_json(terms).encode("ascii")
    return zlib.compress(_HEAD.pack(len(head)) + head + pickle.dumps(list(orders), 5), 1)


def _opened(errand: bytes) -> tuple[Terms, bytes]:
    data = zlib.decompress(errand)
    [length] = _HEAD.unpack_from(data)
    end = _HEAD.size + length
    return Terms(**json.loads(data[_HEAD.size : end])), data[end:]


def run_errand(errand: bytes) -> bytes:
    """Produce an errand's orders, one after the other.

    The answer is JSON: ``{"refused": reason}``, or ``{"seconds": […], "outcomes": […]}`` with a record, or a
    failure's lines and whether it is fatal, for each order until the run was stopped.
    """
    terms, pickled = _opened(errand)
    bench = _bench_of(terms)
    reason = bench.ready(terms)
    if reason is not None:
        return json.dumps({"refused": reason}).encode("ascii")
    seconds, outcomes = [], []
    for order in pickle.loads(pickled):
        begun = time.perf_counter()
        try:
            outcomes.append(_outcome(order, bench.place, bench.stopped.is_set))
        except StoppedError:
            break
        seconds.append(time.perf_counter() - begun)
    return json.dumps({"seconds": seconds, "outcomes": outcomes}).encode("ascii")


def _outcome(order: Order, place: Place, stop: Callable[[], bool]) -> dict[str, Any] | list[Any]:
    try:
        found = attempt(order, place, stop)
    except StoppedError:
        raise
    except Exception as problem:  # a bug or a broken machine: it must cost one item and not the batch
        said = printable(shortened(" ".join(str(problem).split()), _LONGEST_SAID))
        return [[f"{printable(order.preset)}: failed on a worker ({type(problem).__name__}: {said})"], False]
    return [list(found.lines), found.fatal] if isinstance(found, Failure) else found


def outcome_of(answer: dict[str, Any] | list[Any]) -> Outcome:
    """The record or the failure that an answer holds."""
    return answer if isinstance(answer, dict) else Failure(tuple(answer[0]), bool(answer[1]))


# The workplace


class _Bench:
    """A run as this process sees it: its place, whether the worker is fit for it, whether it was stopped."""

    place: "SharedPlace"

    def __init__(self) -> None:
        self.stopped = threading.Event()
        self._lock = threading.Lock()
        self._checked = self._compiled = False
        self._reason: str | None = None

    def checked(self, terms: Terms) -> str | None:
        """Why this worker can't work for the run; None where it can."""
        with self._lock:
            if not self._checked:
                self._reason = self._looked_over(terms)
                self._checked = True
            return self._reason

    def ready(self, terms: Terms) -> str | None:
        """As `checked`, and the engine is compiled once it returns None."""
        reason = self.checked(terms)
        if reason is None:
            with _compiling:
                if not self._compiled:
                    get_ready()
                    self._compiled = True
        return reason

    def _looked_over(self, terms: Terms) -> str | None:
        from glidesmith.places import shared_place

        reason = difference(make_of_this_process(), terms.make)
        if reason is not None:
            return reason
        try:
            self.place = shared_place(terms.output)
            found = self.place.read(terms.token_name)
        except GlidesmithError as problem:
            return " ".join(problem.lines)
        if found is None or found.decode("utf-8", "replace") != terms.token:
            return f"does not see the same {self.place.label}; mount it there, or give another output"
        return None


_benches: dict[str, _Bench] = {}
_benches_lock, _compiling = threading.Lock(), threading.Lock()


def _bench_of(terms: Terms) -> _Bench:
    with _benches_lock:
        while len(_benches) >= _MOST_RUNS and terms.run not in _benches:
            del _benches[next(iter(_benches))]
        return _benches.setdefault(terms.run, _Bench())


def difference(make: Mapping[str, str], wanted: Mapping[str, str]) -> str | None:
    """In what a worker's make is another than wanted, in words; the processor type may be left open."""
    for name, words in MAKE_WORDS.items():
        if name in wanted and make.get(name) != wanted[name]:
            return f"has {words} {printable(str(make.get(name)))}, and {printable(wanted[name])} is needed"
    return None


async def muster(terms_json: str, compile_first: bool) -> dict[str, Any]:
    """Look a worker over: why it can't work for a run, or None. It goes on answering meanwhile."""
    terms = Terms(**json.loads(terms_json))
    bench = _bench_of(terms)
    reason = await asyncio.to_thread(bench.ready if compile_first else bench.checked, terms)
    return {"reason": reason}


def make_here() -> dict[str, str]:
    """As `make_of_this_process`; what a client asks a worker first."""
    return dict(make_of_this_process())


def stop_run(run: str) -> None:
    """Have this process give up what it does for a run."""
    with _benches_lock:
        bench = _benches.setdefault(run, _Bench())
    bench.stopped.set()
