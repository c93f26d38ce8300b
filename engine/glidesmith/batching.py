"""Batches: a whole bank rendered into a folder that mirrors it, and kept up to date.

    done = batch("presets", "takes", loudness=-23.0)
    done.failed, done.no_longer

Presets are looked at one after the other while items are being made, so that memory does not grow with their
number. What is current stays as it is; one bad preset never stops the others; what a run that was cut short
has made counts for the next one, which ends with the very files that an undisturbed run leaves.
"""

import hashlib
import json
import os
import sys
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from contextlib import ExitStack, contextmanager, suppress
from itertools import chain
from typing import TYPE_CHECKING, Any

from glidesmith.bank import is_gone
from glidesmith.desk import Desk, desk_at
from glidesmith.errors import OutputError, SettingError
from glidesmith.manifest import MANIFEST_FILE, OutputFacts, Record, write_manifest
from glidesmith.outcome import SUMMARY_FILE, NeverLands, Outcome
from glidesmith.planning import Plan, Survey, checked_request
from glidesmith.production import Failure, Options, Order, Place, Runner, get_ready, run_here
from glidesmith.text import printable, shown

if TYPE_CHECKING:
    from glidesmith.crew import Crew

MOST_JOBS = 1024

Progress = Callable[[int, int], None]
Confirm = Callable[[Sequence[str]], bool]


def batch(
    folder: str | os.PathLike[str],
    output: str | os.PathLike[str],
    *,
    phrases: Iterable[str | os.PathLike[str]] = (),
    track: int | None = None,
    channel: int | None = None,
    longest_s: float = 7200.0,
    vary: Mapping[str, Sequence[object]] | None = None,
    name: str | None = None,
    include: Iterable[str] = (),
    exclude: Iterable[str] = (),
    sample_rate: int = 48_000,
    depth: Any = 24,
    loudness: float | None = None,
    meter: bool = True,
    tolerance_cents: float = 5.0,
    jobs: int | None = None,
    force: bool = False,
    verify: bool = False,
    prune: bool | Confirm = False,
    dry_run: bool = False,
    progress: Progress | None = None,
    run: Runner | None = None,
) -> Outcome:
    """Render every preset below a folder into another folder, as far as it is not there already.

    Parameters
    ----------
    folder, output : path
        The bank, and where it is mirrored to; made where it is missing. ``output`` may be an address that
        `fsspec` knows, as a str: ``"s3://bucket/takes"``.
    phrases : paths, optional
        Each preset plays each of these (or this one) instead of its own; ``track`` and ``channel`` choose
        among the notes of MIDI files. ``longest_s`` is how long any phrase may be.
    vary : mapping of dotted keys to values, optional
        Each preset under all combinations, as in `compare`.
    name : str, optional
        A pattern for the outputs' names; see `glidesmith.bank.NamePattern`.
    include, exclude : patterns, optional
        Which presets are taken; see `glidesmith.bank.Choice`.
    sample_rate : int
        Hz, 8,000 to 384,000.
    depth : 16, 24 or "float"
    loudness : float, optional
        LUFS, -70 to 0: what each output is brought to, as far as its true peak stays under -1 dBTP.
    meter : bool
        Whether loudness and true peak are measured.
    tolerance_cents : float
        How near to its note a glide has landed, 0.01 to 1200 cents.
    jobs : int, optional
        How many items are made at a time; by default as many as there are processors.
    force : bool
        Make everything again.
    verify : bool
        Hash inputs and outputs instead of trusting their sizes and times.
    prune : bool or callable
        Remove outputs whose preset is gone, if they are as they were written. A callable gets their names
        and says whether to.
    dry_run : bool
        Find out what is to be made, and do nothing.
    progress : callable, optional
        Called with the items done and the items in all.
    run : Runner, optional
        What makes the items in place of processes on this machine; see `glidesmith.production.Runner`.

    Returns
    -------
    Outcome

    Raises
    ------
    SettingError
        For what can't be asked; a line each.
    PhraseError
        For one of ``phrases`` that can't be read.
    OutputError
        Where the output folder can't be used, holds something else in the place of what is to be written, or
        another batch is at work there.
    """
    desk = desk_at(output)
    request = checked_request(
        folder, desk.folder, phrases, (track, channel, longest_s), vary, name, (include, exclude),
        Options(sample_rate, depth, loudness, meter, tolerance_cents), force, verify,
    )  # fmt: skip
    jobs, survey = checked_jobs(jobs), Survey(request)
    if dry_run:
        with desk:
            return Round(survey, desk).foreseen()
    with ExitStack() as stack:
        stack.enter_context(desk.held())
        return Round(survey, desk, progress).done(run or stack.enter_context(local_runner(jobs)), prune)


def checked_jobs(jobs: object) -> int:
    """How many items are made at a time; None stands for the processors there are. Raises SettingError."""
    if jobs is None:
        return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    if isinstance(jobs, bool) or not isinstance(jobs, int) or not 1 <= jobs <= MOST_JOBS:
        raise SettingError(f"jobs {shown(jobs)}: give a whole number, 1 to {MOST_JOBS}")
    return jobs


@contextmanager
def local_runner(jobs: int, at_once: bool = False) -> Iterator[Runner]:
    """What makes items on this machine, for as long as it is needed.

    Nothing is loaded or started before it is needed, unless ``at_once``.
    """
    if jobs == 1 or not sys.executable:
        if at_once:
            get_ready()
        yield run_here
        return
    with ExitStack() as stack:
        crew: list[Crew] = []

        def start() -> None:
            from glidesmith.crew import Crew

            crew.append(stack.enter_context(Crew(jobs)))
            crew[0].start()

        def run(orders: Iterator[Order], place: Place) -> Iterator[tuple[int, Record | Failure]]:
            for first in orders:
                if not crew:
                    start()
                yield from crew[0].run(chain((first,), orders), place)

        if at_once:
            start()
        yield run


class Round:
    """One run of a batch: has made what is not current, and leaves everything in order."""

    def __init__(self, survey: Survey, desk: Desk, progress: Progress | None = None) -> None:
        self._survey, self._desk, self._progress = survey, desk, progress
        request = survey.request
        self.outcome = Outcome(request.folder, request.output, address=desk.address)
        self._handled, self._changed = 0, False
        self._pending: dict[int, tuple[Order, str]] = {}
        desk.look()
        self.outcome.warnings += [*desk.damaged, *survey.alike]
        self._plan = Plan(survey, desk, self.outcome, self._count)
        for problem in survey.unread:
            self._plan.fail("", "", problem.lines, 0)

    def foreseen(self) -> Outcome:
        """What a run would make, without making it."""
        self.outcome.dry_run = True
        for order, _ in self._plan.orders():
            self.outcome.made.append(order.item)
        self._look_at_others()
        return self.outcome

    def done(self, run: Runner, prune: bool | Confirm = False) -> Outcome:
        """Make what is not current, prune, and write manifest and summary. Raises OutputError."""
        self._desk.sweep()
        self._make(run)
        self._desk.require_held()
        if self.outcome.failed:
            self._desk.sweep()
        if self.outcome.stopped:
            return self.outcome
        self._look_at_others()
        self._prune_if_wanted(prune)
        try:
            self._settle()
        except OutputError as problem:  # what was made, and what failed, is to be told all the same
            if not self._changed and not self.outcome.failed:
                raise
            self.outcome.stopped = str(problem)
        return self.outcome

    def _make(self, run: Runner) -> None:
        outcomes = run(self._orders(), self._desk.place())
        try:
            for number, outcome in outcomes:
                order, origin = self._pending.pop(number)
                if isinstance(outcome, Failure):
                    self._plan.fail(order.preset, order.item, outcome.lines)
                    if outcome.fatal:
                        self.outcome.stopped = "; ".join(outcome.lines)
                else:
                    self._take(outcome, origin)
                if self.outcome.stopped:
                    break
        finally:
            self.outcome.made.sort()
            self.outcome.never_land.sort(key=lambda each: each.item)
            with suppress(AttributeError):  # an iterator need not be a generator
                outcomes.close()  # type: ignore[attr-defined]

    def _orders(self) -> Iterator[Order]:
        """The orders, each noted before anything is written for it."""
        for number, (order, origin) in enumerate(self._plan.orders()):
            try:
                self._desk.journal.begin(order.item)
            except OutputError as problem:
                self.outcome.stopped = str(problem)
                return
            self._pending[number] = (order, origin)
            yield order

    def _take(self, record: Record, origin: str) -> None:
        """Keep the record of an item that was made."""
        item = record["item"]
        stamp = self._desk.stamp_made(record)
        if stamp is None:
            self._desk.require_held()
            self._plan.fail(
                record["preset"], item, (f"{item}: was removed while the batch ran; run it again",)
            )
            return
        before = self._desk.records.line(item)
        try:
            facts = OutputFacts(stamp, record["file_sha256"], origin)
            self._desk.journal.made(record, facts, self._desk.records)
        except OutputError as problem:
            self.outcome.stopped = str(problem)
            return
        if record["never_lands"]:
            self.outcome.never_land.append(NeverLands.of(record, before))
        self.outcome.made.append(item)
        self._changed = True
        self._count(1)

    def _look_at_others(self) -> None:
        """Of what the manifest lists besides: forget what is no more, tell whose preset is gone."""
        desk, found = self._desk, {each.name for each in self._survey.presets}
        for item in desk.records.items():
            line = desk.records.line(item)
            if desk.key(item) in self._plan.planned or line is None:
                continue
            if desk.stamp(item) is None:
                desk.forget(item)
                self._changed = True
            elif line.preset in found or not is_gone(self._survey.request.folder, line.preset):
                self.outcome.others += 1
            else:
                self.outcome.gone.append(item)

    def _prune_if_wanted(self, prune: bool | Confirm) -> None:
        gone = self.outcome.gone
        if prune and self._survey.unread:
            self.outcome.warnings.append(
                "nothing is removed, since not all of the bank can be read: mend that, and prune again"
            )
        elif gone and (prune(gone) if callable(prune) else prune):
            self._prune()

    def _prune(self) -> None:
        """Remove the outputs whose preset is gone, where they are as they were written."""
        for item in self.outcome.gone:
            try:
                self._desk.remove(item)
            except OutputError as problem:
                self.outcome.warnings += problem.lines
                continue
            self._desk.forget(item)
            self.outcome.pruned.append(item)
            self._changed = True

    def _settle(self) -> None:
        """Write the manifest and the summary, if anything in them is new, and the journal anew."""
        desk = self._desk
        self.outcome.all_never_land = sum(line.never_land > 0 for line in desk.records.lines())
        told = sorted(line for each in self.outcome.failed for line in each.lines)
        title = printable(self._survey.request.folder.absolute().name) or "Batch"
        page = hashlib.sha256(json.dumps([title, told]).encode("ascii")).hexdigest()
        stands = desk.has(MANIFEST_FILE) and desk.has_summary(page, self._survey.request.verify)
        is_new = self._changed or self._plan.changed or bool(desk.damaged)
        if is_new or not stands or not desk.journal.is_clean:
            from glidesmith.summary import write_summary

            desk.require_own_names()
            write_manifest(desk.folder / MANIFEST_FILE, desk.records)
            write_summary(desk.folder / SUMMARY_FILE, desk.records, told, title=title)
            desk.remember_summary(page)
            desk.publish()
        elif not self._plan.inputs.changed:
            return
        begun = (item for item in desk.journal.begun if item not in desk.records)
        unlisted = sorted(item for item in begun if desk.stamp(item) is not None)
        desk.journal.settle(desk.folder / MANIFEST_FILE, unlisted)

    def _count(self, count: int) -> None:
        self._handled += count
        if self._progress is not None:
            self._progress(self._handled, self._plan.total)
