"""Timing two pieces of work against each other: in turn, warm, and quoted as a ratio.

These figures are for people to read. Nothing passes or fails on a clock.
"""

import statistics
import time
from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True)
class Pair:
    """Seconds of the work and of its reference, run by run."""

    work: tuple[float, ...]
    reference: tuple[float, ...]

    @property
    def ratios(self) -> list[float]:
        return sorted(w / r for w, r in zip(self.work, self.reference, strict=True))

    def line(self, what: str, limit: str, unit_s: float = 1.0, unit: str = "s") -> str:
        """The ratio's median and spread, and both medians in ``unit``."""
        ratios = self.ratios
        work, reference = (statistics.median(side) / unit_s for side in (self.work, self.reference))
        return (
            f"{what}: {statistics.median(ratios):.2f} ({ratios[0]:.2f} to {ratios[-1]:.2f}; {limit}) "
            f"— {work:.4g} against {reference:.4g} {unit}"
        )


def seconds(work: Callable[[], object]) -> float:
    begin = time.perf_counter()
    work()
    return time.perf_counter() - begin


def paired(work: Callable[[], object], reference: Callable[[], object], runs: int) -> Pair:
    """Both once to warm up, then in turn ``runs`` times."""
    work()
    reference()
    times = [(seconds(work), seconds(reference)) for _ in range(runs)]
    return Pair(tuple(t[0] for t in times), tuple(t[1] for t in times))
