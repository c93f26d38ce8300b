"""A batch on a cluster: orders handed to the workers of a Dask `distributed` scheduler, a few at a time.

Orders are grouped into errands of about equal length, so that scheduling stays a small part of the work, and
only so many errands are out at a time, so that memory does not grow with the number of items. Workers write
to the shared place themselves and send back records. An errand may run twice: it writes the same bytes. What
a lost worker had is given to another by the scheduler; an errand that keeps losing its workers is split into
its items, so that one bad item costs nobody else.

Whoever reaches a scheduler's port runs code on its workers: keep it on this machine, or use TLS.
"""

import contextlib
import json
import queue
import secrets
import time
import warnings
from collections import deque
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from itertools import chain
from typing import TYPE_CHECKING

from glidesmith.errands import Grouping, Pace, errand_length_s
from glidesmith.errors import ClusterError, GlidesmithError, SettingError
from glidesmith.places import RemotePlace, SharedFolder, SharedPlace, shared_place
from glidesmith.production import Failure, LocalPlace, Order, Outcome, Place, Runner
from glidesmith.scheduler import (
    CLOSE_S,
    LONGEST_SAID,
    checked_address,
    close,
    connected,
    deadline,
    exposed,
    manners,
    require_listener,
    within,
)
from glidesmith.text import printable, shortened
from glidesmith.worker import (
    Terms,
    make_of_this_process,
    outcome_of,
    packed_errand,
    run_errand,
    stop_run,
)
from glidesmith.workforce import Tell, Workforce

if TYPE_CHECKING:
    from distributed import Client, Future

ERRANDS_PER_THREAD = 2
"""How many are out for each thread of a worker: one at work and one waiting."""

_WATCH_S = 2.0
_POLL_S = 0.25
_MOST_TRIES = 3
_LONGEST_WAIT_S = 60.0


def cluster_runner(address: str, tell: Tell | None = None) -> Runner:
    """What makes the items of a batch on a cluster; see `produce_on_cluster`.

    Raises SettingError for an address that is none.
    """
    checked_address(address)

    def run(orders: Iterator[Order], place: Place) -> Iterator[tuple[int, Outcome]]:
        if not isinstance(place, LocalPlace | SharedFolder | RemotePlace):
            raise SettingError("cluster: workers can't reach this place; give a folder or an address")
        output = place.address if isinstance(place, RemotePlace) else str(place.root)
        return produce_on_cluster(orders, output, address, tell)

    return run


def produce_on_cluster(
    orders: Iterable[Order], output: str, address: str, tell: Tell | None = None
) -> Iterator[tuple[int, Outcome]]:
    """Have orders produced by the workers of a cluster.

    Parameters
    ----------
    orders : iterable of Order
        Taken a few at a time, as workers become free.
    output : str
        A folder that all workers see under this path, or an address that `fsspec` knows, which they reach.
    address : str
        The scheduler's, ``tcp://HOST:PORT`` or ``tls://HOST:PORT``. Certificates come from Dask's settings.
    tell : callable, optional
        Gets a line about whatever the user should know: workers that can't be used, and why.

    Yields
    ------
    (int, dict or Failure)
        An order's number, from 0, and its record, or why it was not made. In the order in which they come.

    Raises
    ------
    SettingError
        For an address that is none, or a place that can't be had.
    OutputError
        Where nothing can be written to the place.
    ClusterError
        In one line: no scheduler there within 10 s, no workers that can be used, or they went away. What is
        done stays.
    """
    checked_address(address)
    waiting = iter(orders)
    for first in waiting:  # with nothing to do nobody is called together
        place, until = shared_place(output), deadline()
        require_listener(address, until)
        with manners(), _Run(address, output, place, tell or _unheard, until) as run:
            yield from run.outcomes(chain((first,), waiting))


def _unheard(line: str) -> None:
    pass


@dataclass
class _Errand:
    """Numbered orders; a ``suspect`` is a single one of which it is asked whether it kills its worker.

    ``workers``, where not all may be used, are those that may take it.
    """

    entries: list[tuple[int, Order]]
    tries: int = 0
    suspect: bool = False
    workers: list[str] | None = None


# The run


class _Run:
    """One batch on one cluster, from the first word to the last."""

    def __init__(self, address: str, output: str, place: SharedPlace, tell: Tell, until: float) -> None:
        self._address, self._place, self._tell, self._until = address, place, tell, until
        run = secrets.token_hex(8)
        target = str(getattr(place, "root", output))
        token_name = f".glidesmith.{secrets.token_hex(4)}.part"
        content = json.dumps({"glidesmith": "looks whether all see this place", "run": secrets.token_hex(16)})
        self._terms = Terms(run, target, token_name, content, _without_processor(make_of_this_process()))
        self._client: Client | None = None
        self._workforce = Workforce(address, tell)
        self._pace = Pace()
        self._out: dict[str, tuple[Future, _Errand]] = {}
        self._again: deque[_Errand] = deque()
        self._suspects: deque[_Errand] = deque()
        self._finished: queue.SimpleQueue[Future] = queue.SimpleQueue()
        self._number = 0
        self._whole = False

    def __enter__(self) -> "_Run":
        note = exposed(self._address)
        if note:
            self._tell(note)
        self._client = connected(self._address, self._until)
        try:
            self._place.put(self._terms.token_name, self._terms.token.encode())
            self._workforce.gather(self._client)
            self._terms = self._workforce.settled_terms(self._client, self._terms)
        except BaseException:
            self._leave()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        self._leave()

    def _leave(self) -> None:
        """Stop what still runs, and take away what lies about."""
        assert self._client is not None
        if self._out:
            self._give_up(self._client)
        with contextlib.suppress(GlidesmithError):
            self._place.remove(self._terms.token_name)
            if not self._whole or self._workforce.lost:
                self._place.sweep()
        close(self._client)

    def _give_up(self, client: "Client") -> None:
        def act() -> None:
            client.run(stop_run, self._terms.run, on_error="ignore")
            client.cancel([future for future, _ in self._out.values()], force=True)

        if client.status == "running":
            within(CLOSE_S, act)

    def outcomes(self, orders: Iterable[Order]) -> Iterator[tuple[int, Outcome]]:
        """Everything as it comes."""
        assert self._client is not None
        grouping = Grouping(orders, self._pace)
        watched = time.monotonic()
        while not self._handed_out(grouping) or self._out:
            yield from self._taken_in()
            if time.monotonic() - watched > _WATCH_S:
                self._watch(self._client)
                watched = time.monotonic()
        self._workforce.look(self._client, self._terms)
        self._whole = True

    def _watch(self, client: "Client") -> None:
        """See who is there, and call back what only workers may take that are there no more."""
        self._workforce.look(client, self._terms)
        for key, (future, errand) in list(self._out.items()):
            if errand.workers is not None and not self._workforce.has_any(errand.workers):
                del self._out[key]
                client.cancel([future], force=True)
                self._again.append(errand)

    def _handed_out(self, grouping: Grouping) -> bool:
        """Keep the workers busy; whether there is nothing more to hand out.

        What may have killed a worker is tried when nothing else is out: the scheduler blames whatever a
        worker had when it died.
        """
        threads = self._workforce.threads
        while len(self._out) < ERRANDS_PER_THREAD * threads:
            if self._again:
                self._submit(self._again.popleft())
            elif self._suspects:
                if not self._out:
                    self._submit(self._suspects.popleft())
                return False
            else:
                entries = grouping.take(errand_length_s(threads))
                if not entries:
                    return True
                self._submit(_Errand(entries))
        return False

    def _submit(self, errand: _Errand) -> None:
        assert self._client is not None
        self._number += 1
        key = f"glidesmith-{self._terms.run}-{self._number}"
        content = packed_errand(self._terms, [order for _, order in errand.entries])
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # Dask's advice on large tasks: a long MIDI file is one
            errand.workers = self._workforce.restriction()
            future = self._client.submit(run_errand, content, key=key, pure=False, workers=errand.workers)
        self._out[key] = future, errand
        future.add_done_callback(self._finished.put)

    def _taken_in(self) -> Iterator[tuple[int, Outcome]]:
        try:
            future = self._finished.get(timeout=_POLL_S)
        except queue.Empty:
            self._require_scheduler()
            return
        while future is not None:
            entry = self._out.pop(future.key, None)
            if entry is not None:
                yield from self._settled(future, entry[1])
            try:
                future = self._finished.get_nowait()
            except queue.Empty:
                return

    def _settled(self, future: "Future", errand: _Errand) -> Iterator[tuple[int, Outcome]]:
        assert self._client is not None
        if future.status == "cancelled":
            raise self._gone()
        try:
            answer = json.loads(future.result(timeout=_LONGEST_WAIT_S))
        except Exception as problem:
            self._require_scheduler()
            yield from self._failed(errand, problem)
            return
        finally:
            future.release()
        if "refused" in answer:  # it came lately; now it gets to be known, and gets no more
            self._again.append(errand)
            self._workforce.look(self._client, self._terms)
            return
        entries = errand.entries[: len(answer["outcomes"])]
        for (number, order), seconds, found in zip(
            entries, answer["seconds"], answer["outcomes"], strict=True
        ):
            self._pace.learn(order, seconds)
            self._place.refresh(order.item)
            yield number, outcome_of(found)

    def _failed(self, errand: _Errand, problem: Exception) -> Iterator[tuple[int, Outcome]]:
        """What to do with an errand that no worker answered: again, in single items, or not at all."""
        assert self._client is not None
        errand.tries += 1
        deadly = type(problem).__name__ == "KilledWorker"
        if errand.tries < _MOST_TRIES and not deadly:
            self._workforce.look(self._client, self._terms)
            self._again.append(errand)
        elif not errand.suspect:
            self._suspects.extend(_Errand([entry], suspect=True) for entry in errand.entries)
        else:
            [(number, order)] = errand.entries
            yield number, Failure((f"{printable(order.preset)}: {_why(problem, deadly)}",))

    def _require_scheduler(self) -> None:
        assert self._client is not None
        if self._client.status != "running":
            raise self._gone()

    def _gone(self) -> ClusterError:
        return ClusterError(
            f"cluster {self._address}: the scheduler went away; what is done stays, and the same command "
            "goes on from there"
        )


def _why(problem: Exception, deadly: bool) -> str:
    if deadly:
        return "each worker that began it died, perhaps for lack of memory; look at the workers' own words"
    said = printable(shortened(" ".join(str(problem).split()), LONGEST_SAID))
    return f"no worker could make it ({type(problem).__name__}: {said})"


def _without_processor(make: Mapping[str, str]) -> dict[str, str]:
    return {name: value for name, value in make.items() if name != "processor"}
