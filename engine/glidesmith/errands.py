"""Orders grouped into errands of about equal length, as they are handed to the workers of a cluster."""

from collections.abc import Iterable

from glidesmith.production import Order

SCHEDULING_S = 1.6e-3
"""What scheduling one task costs a Dask scheduler and its client, measured on one machine."""

SCHEDULER_SHARE = 0.25
"""How much of the scheduler's time all workers together may take."""

SHORTEST_ERRAND_S, LONGEST_ERRAND_S = 0.25, 10.0
MOST_ORDERS = 256
MOST_PHRASE_BYTES = 4_000_000
"""Of one errand."""

_FIRST_GUESS_S = 0.02
_MOST_PHRASES = 4096


class Pace:
    """How long items take, learnt from what came back: for each phrase, since it decides the length."""

    def __init__(self) -> None:
        self._means: dict[str, float] = {}
        self._mean = _FIRST_GUESS_S

    def estimate_s(self, order: Order) -> float:
        """How long an order will take a worker, in seconds."""
        return self._means.get(order.phrase.sha256, self._mean)

    def learn(self, order: Order, seconds: float) -> None:
        """Take into account how long an order took."""
        self._mean += 0.05 * (seconds - self._mean)
        known = self._means.get(order.phrase.sha256)
        if known is None and len(self._means) >= _MOST_PHRASES:
            del self._means[next(iter(self._means))]
        self._means[order.phrase.sha256] = seconds if known is None else known + 0.2 * (seconds - known)


def errand_length_s(threads: int) -> float:
    """How long an errand should take.

    Long enough that the scheduler, which does one thing at a time, is busy for a quarter of its time at most
    however many threads there are, and that scheduling is well under 5 % of the work; and no longer, since a
    lost worker costs an errand and the last one is waited for.
    """
    return min(max(SHORTEST_ERRAND_S, threads * SCHEDULING_S / SCHEDULER_SHARE), LONGEST_ERRAND_S)


class Grouping:
    """Numbered orders, taken from whoever makes them in errands of about equal length."""

    def __init__(self, orders: Iterable[Order], pace: Pace) -> None:
        self._orders = enumerate(orders)
        self._pace = pace
        self._held: tuple[int, Order] | None = None

    def take(self, length_s: float) -> list[tuple[int, Order]]:
        """The next errand; empty at the end."""
        taken: list[tuple[int, Order]] = []
        phrases: dict[str, int] = {}
        seconds = 0.0
        while len(taken) < MOST_ORDERS:
            entry = self._next()
            if entry is None:
                break
            order = entry[1]
            seconds += self._pace.estimate_s(order)
            phrases[order.phrase.sha256] = len(order.phrase.data) + len(order.cycle or b"")
            if taken and (seconds > length_s or sum(phrases.values()) > MOST_PHRASE_BYTES):
                self._held = entry
                break
            taken.append(entry)
        return taken

    def _next(self) -> tuple[int, Order] | None:
        held, self._held = self._held, None
        return held if held is not None else next(self._orders, None)
