"""Watching a bank: what is saved is rendered again, within half a second.

The presets' sizes and times, and those of the phrases and cycles that they play, are looked at several times
a second; that takes a few milliseconds for hundreds of presets, needs no library, and works on every file
system, also where a file is saved under another name and renamed. A file that can't be used may be one that
is still being written: it is tried again until it has not changed for a while, and only then told.
"""

import time
from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path
from typing import Any

from glidesmith.bank import Stamp, find_presets, stamp_of
from glidesmith.batching import Round, checked_jobs, local_runner
from glidesmith.desk import Desk
from glidesmith.errors import SettingError
from glidesmith.outcome import Failed, Outcome
from glidesmith.planning import Request, Survey, checked_request
from glidesmith.production import Options, Runner
from glidesmith.text import shown

LOOK_S = 0.1
"""From one look to the next."""

SETTLED_S = 0.4
"""How long a file that can't be used must have been the same to count as finished."""

Heard = Callable[[Outcome], None]
View = dict[str, Stamp | None]


def watch(
    folder: Any,
    output: Any,
    *,
    phrases: Any = (),
    track: int | None = None,
    channel: int | None = None,
    longest_s: float = 7200.0,
    vary: Any = None,
    name: str | None = None,
    include: Any = (),
    exclude: Any = (),
    sample_rate: int = 48_000,
    depth: Any = 24,
    loudness: float | None = None,
    meter: bool = True,
    tolerance_cents: float = 5.0,
    jobs: int | None = None,
    force: bool = False,
    verify: bool = False,
    run: Runner | None = None,
    heard: Heard | None = None,
    stop: Callable[[], bool] | None = None,
) -> None:
    """Run a batch, and again whenever something changes, until ``stop`` says so or an interrupt comes.

    Parameters are those of `batch`. ``heard`` gets the outcome of each run in which anything was made or
    failed anew; ``stop`` is asked between looks. Errors as those of `batch`, from the first run; later ones
    are told as failures, and watching goes on.
    """
    if isinstance(output, str) and "://" in output:
        output = _folder_of(output)
    request = checked_request(
        folder, output, phrases, (track, channel, longest_s), vary, name, (include, exclude),
        Options(sample_rate, depth, loudness, meter, tolerance_cents), force, verify,
    )  # fmt: skip
    jobs, survey = checked_jobs(jobs), Survey(request)
    with ExitStack() as stack:
        desk = stack.enter_context(Desk(request.output).held())
        runner = run or stack.enter_context(local_runner(jobs, at_once=True))
        watcher = Watcher(request, desk, runner, heard or _unheard)
        watcher.begin(survey)
        while not (stop is not None and stop()):
            time.sleep(LOOK_S)
            watcher.look()


def _folder_of(address: str) -> Path:
    from glidesmith.places import folder_at, without_credentials

    folder = folder_at(address)
    if folder is None:
        raise SettingError(
            f"output {shown(without_credentials(address))}: watching needs a folder: an address can't follow "
            "every save"
        )
    return folder


def _unheard(outcome: Outcome) -> None:
    pass


class Watcher:
    """Sees what changes in a bank, and has it made again."""

    def __init__(
        self,
        request: Request,
        desk: Desk,
        run: Runner,
        heard: Heard,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._request, self._desk, self._run, self._heard = request, desk, run, heard
        self._clock = clock
        self._view: View = {}
        self._changed_s = clock()
        self._is_open = False
        self._told: list[Failed] = []

    def begin(self, survey: Survey) -> None:
        """The first run: all that is not current."""
        self._view = self._look_around()
        outcome = Round(survey, self._desk).done(self._run)
        self._request = replace(self._request, force=False, verify=False)
        self._told = outcome.failed
        self._heard(outcome)

    def look(self) -> None:
        """Look around, and run when something has changed, or may by now be whole that was not."""
        view = self._look_around()
        if view != self._view:
            self._view, self._changed_s, self._is_open = view, self._clock(), True
            self._render(False)
        elif self._is_open and self._clock() - self._changed_s >= SETTLED_S:
            # Once more: what can't be used is finished by now, and what was saved twice within one tick of
            # the file system's clock looks the same.
            self._is_open = False
            self._render(True)

    def _render(self, is_settled: bool) -> None:
        try:
            outcome = Round(Survey(self._request), self._desk).done(self._run)
        except SettingError as problem:  # for instance, there is no preset at the moment
            outcome = Outcome(self._request.folder, self._request.output)
            outcome.failed = [Failed("", "", problem.lines)]
        failed = outcome.failed
        outcome.failed = [each for each in failed if each not in self._told] if is_settled else []
        self._told = failed if is_settled else [each for each in self._told if each in failed]
        if outcome.made or outcome.failed or outcome.stopped:
            self._heard(outcome)

    def _look_around(self) -> View:
        """The stamps of all that the outputs are made from, by path."""
        request = self._request
        try:
            presets, _ = find_presets(request.folder, request.choice, request.output)
        except SettingError:
            return {}
        view: View = {found.place: found.stamp for found in presets}
        for phrase in request.phrases:
            view[str(phrase)] = stamp_of(phrase)
        for found in presets:
            known = self._desk.journal.inputs.get(found.name)
            for link in () if known is None or known.links is None else (known.links[0], known.links[3]):
                path = found.beside(link) if link is not None else found.place
                if path not in view:
                    view[path] = stamp_of(path)
        return view
