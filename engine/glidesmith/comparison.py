"""Comparison sets: one phrase under several candidate settings, equally loud, on one page.

    lead = load_preset("lead.toml")
    compare(lead, "lead-laws", vary={"pitch.law": ["rc", "exp", "cosine"]}, equal="landing")

Every candidate is rendered in memory, its loudness measured, and all are brought to one loudness by a gain
that is applied once, to the samples as rendered. What an earlier run left in the folder is kept where it is
exactly what would be written again, so that a set with one more candidate costs one more render.
"""

import hashlib
import json
import os
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith import __version__
from glidesmith.candidates import (
    MOST_CANDIDATES,
    Candidate,
    axes_from_values,
    check_most,
    file_name,
    read_sheet,
    require_different,
    varied_candidates,
)
from glidesmith.curves import curves
from glidesmith.equalisation import (
    Equality,
    equalised,
    equality,
    reference_times,
    remaining_differences,
)
from glidesmith.errors import OutputError, SettingError
from glidesmith.measuring import measure, title_of
from glidesmith.preset import Preset
from glidesmith.program import compile_program
from glidesmith.setfolder import (
    FACTS_FILE,
    KIND,
    PAGE_FILE,
    VERSION,
    Earlier,
    SetFolder,
    ground_of,
)
from glidesmith.takes import (
    TARGET_LUFS,
    Span,
    Take,
    check_rate,
    common_loudness,
    common_span,
    warnings_of,
)
from glidesmith.text import printable, shown
from glidesmith.wav import WavSink

if TYPE_CHECKING:
    from glidesmith.facts import Facts
    from glidesmith.partfile import PartFile
    from glidesmith.phrase import Phrase
    from glidesmith.program import Program

MOST_FRAMES = 100_000_000
"""Of all candidates together: some 35 minutes at 48 kHz. A page can't hold much more."""

_TITLES_NAMED = _MOST_NAMED = 3


@dataclass(frozen=True)
class Comparison:
    """A set that was written.

    ``facts`` is what ``comparison.json`` holds. ``rendered`` and ``kept`` are the labels of the candidates
    that this run made and of those whose audio was still good; ``warnings`` what the listener should know, a
    line each.
    """

    folder: Path
    facts: Mapping[str, Any]
    rendered: tuple[str, ...]
    kept: tuple[str, ...]
    warnings: tuple[str, ...]

    @property
    def page(self) -> Path:
        """The page to open."""
        return self.folder / PAGE_FILE

    def as_dict(self) -> dict[str, Any]:
        """The facts as `compare --json` prints them."""
        return dict(self.facts)


@dataclass(frozen=True, slots=True)
class _Plan:
    """What a set is to be: checked, and nothing written yet."""

    title: str
    base: Preset
    candidates: tuple[Candidate, ...]
    phrase: "Phrase"
    sample_rate: int
    tolerance_cents: float
    equal: Equality
    base_facts: "Facts"

    @property
    def files(self) -> list[str]:
        count = len(self.candidates)
        return [file_name(i, c.label, count) for i, c in enumerate(self.candidates, 1)]

    def heading(self) -> dict[str, Any]:
        """The set's own facts, without what is known only from the audio."""
        times: dict[str, float] = {}
        if self.equal.changes_times:
            times = reference_times(self.base, self.equal, self.tolerance_cents)
        phrase = {
            "title": title_of(self.phrase),
            "sha256": self.phrase.content_hash(),
            "length_s": float(self.phrase.end),
        }
        equal = {**self.equal.as_dict(), "up_s": times.get("rise"), "down_s": times.get("fall")}
        ground = {"phrase": phrase, "sample_rate": self.sample_rate, "equal": equal}
        digests = sorted(candidate.digest for candidate in self.candidates)
        named = [digests, phrase["sha256"], self.sample_rate, self.equal.as_dict()]
        return {
            "kind": KIND,
            "version": VERSION,
            "engine": __version__,
            "set": hashlib.sha256(json.dumps(named, sort_keys=True).encode("ascii")).hexdigest(),
            "title": self.title,
            **ground,
            "tolerance_cents": self.tolerance_cents,
        }


def compare(
    presets: Preset | Sequence[Preset],
    folder: str | os.PathLike[str],
    *,
    vary: Mapping[str, Sequence[object]] | None = None,
    sheet: str | os.PathLike[str] | None = None,
    phrase: "Phrase | None" = None,
    equal: str = "settings",
    interval: float | None = None,
    from_note: str | int | None = None,
    sample_rate: int = 48_000,
    tolerance_cents: float = 5.0,
    most: int = MOST_CANDIDATES,
    replace: bool = False,
    progress: Callable[[int, int], None] | None = None,
) -> Comparison:
    """Write a comparison set: WAVs of one phrase under each candidate, equally loud, and a page to hear them.

    Parameters
    ----------
    presets : Preset, or several
        What the candidates are made from; several are compared with each other. The first one's phrase is
        played, and its durations are the ones that `equal` gives to all.
    folder : path
        Where to; made where it is missing.
    vary : mapping of dotted keys to values, optional
        As ``{"pitch.law": ["rc", "exp"], "pitch.rise": ["60 ms", "120 ms"]}``: all combinations.
    sheet : path, optional
        A TOML file that names candidates with their settings, instead of ``vary`` (see
        `glidesmith.candidates`).
    phrase : Phrase, optional
        What is played instead of the preset's own phrase.
    equal : {"settings", "landing", "midpoint", "rise"}
        What is made equally long on the reference glide, up and down apart, by rescaling ``pitch.rise`` and
        ``pitch.fall``: the time to landing, to half-way, from 10 to 90 %, or nothing.
    interval, from_note : float, str or int, optional
        The reference glide: semitones, over 0 to 120, by default an octave; and a note name or MIDI number,
        by default the phrase's median note.
    sample_rate : int
        Hz, 8,000 to 384,000; over 65,535 in multiples of 10, since the page holds FLAC.
    tolerance_cents : float
        How near to its note a glide has landed, 0.01 to 1200 cents.
    most : int
        How many candidates there may be, 2 to 256.
    replace : bool
        Write even where the folder holds another set, whose files go, or something else, which stays;
        files that belong to no set are never overwritten.
    progress : callable, optional
        Called with the steps done and the steps in all.

    Returns
    -------
    Comparison
        Loudness in LUFS by ITU-R BS.1770, true peaks in dBTP, gains in dB, times in seconds.

    Raises
    ------
    SettingError
        For candidates that can't be made or compared: unknown keys, wrong values, too few or too many, two
        the same, times that can't be made equal, a silent one; a line each.
    PhraseError
        Where the preset's phrase can't be read.
    OutputError
        Where the folder holds something else or another set, or can't be written. What was there is
        unchanged.
    """
    plan = _planned(
        [presets] if isinstance(presets, Preset) else list(presets),
        vary, sheet, phrase, (equal, interval, from_note), sample_rate, tolerance_cents, check_most(most),
    )  # fmt: skip
    heading = plan.heading()
    place = SetFolder(Path(folder))
    _require_inputs_kept(plan, place.path)
    if replace:
        place.require_names_free({*plan.files, FACTS_FILE, PAGE_FILE})
    else:
        place.require_free(ground_of(heading), [candidate.digest for candidate in plan.candidates])
    changed = place.changed_wavs()
    if changed and not replace:
        raise OutputError(
            f"{place.name}: {_listed(changed)} changed since the set was made and would be written anew; "
            "choose another folder, move what you changed elsewhere, or write there all the same with "
            "--replace"
        )
    steps = _Steps(progress, 2 * len(plan.candidates))
    takes = _takes(plan)
    earlier = place.earlier if place.has_ground(ground_of(heading)) else {}
    loudness = _match_loudness(takes, place, earlier, steps)
    facts = {**heading, "loudness": loudness, "candidates": [t.entry(i) for i, t in enumerate(takes, 1)]}
    _write(place, takes, facts, steps)
    return Comparison(
        place.path,
        facts,
        tuple(take.label for take in takes if take.kept is None),
        tuple(take.label for take in takes if take.kept is not None),
        (*warnings_of(takes), *place.left_warnings(), *_anew_warnings(place, changed)),
    )


def _listed(names: Sequence[str]) -> str:
    named = ", ".join(shown(name) for name in names[:_MOST_NAMED])
    more = len(names) - _MOST_NAMED
    told = f"{named} and {more} more" if more > 0 else named
    return f"{told} {'was' if len(names) == 1 else 'were'}"


def _anew_warnings(place: SetFolder, changed: Sequence[str]) -> list[str]:
    if not changed:
        return []
    return [f"{place.name}: {_listed(changed)} changed since the set was made, and written anew"]


class _Steps:
    """Counts what is done and tells the caller's callback."""

    def __init__(self, tell: Callable[[int, int], None] | None, total: int) -> None:
        self._tell, self._done, self._total = tell, 0, total

    def made(self, futures: "Iterable[Future[Any]]") -> None:
        """Wait for each of the futures, in order; the first error stops the rest."""
        futures = list(futures)
        try:
            for future in futures:
                future.result()
                self._done += 1
                if self._tell is not None:
                    self._tell(self._done, self._total)
        except BaseException:
            for future in futures:
                future.cancel()
            raise


def _planned(
    presets: Sequence[Preset],
    vary: Mapping[str, Sequence[object]] | None,
    sheet: str | os.PathLike[str] | None,
    phrase: "Phrase | None",
    equal: tuple[object, object, object],
    sample_rate: int,
    tolerance_cents: float,
    most: int,
) -> _Plan:
    if not presets:
        raise SettingError("no presets: give one to vary, or several to compare")
    base = presets[0]
    title, candidates = _candidates(presets, vary, sheet, most)
    played = _phrase_of(base) if phrase is None else phrase
    if not played.notes:
        raise SettingError("the phrase has no notes: there is nothing to hear")
    base_facts = measure(base, played, tolerance_cents, sample_rate)
    check_rate(base_facts.sample_rate)
    set_apart = list(vary or {}) if sheet is None else [key for c in candidates for key in c.varied]
    asked = equality(*equal, played, tolerance_cents, set_apart)
    candidates = equalised(base, candidates, asked, tolerance_cents)
    require_different(candidates)
    return _Plan(
        title, base, candidates, played, base_facts.sample_rate, base_facts.tolerance_cents, asked, base_facts
    )


def _candidates(
    presets: Sequence[Preset],
    vary: Mapping[str, Sequence[object]] | None,
    sheet: str | os.PathLike[str] | None,
    most: int,
) -> tuple[str, tuple[Candidate, ...]]:
    """The set's title and its candidates."""
    names = [title_of(preset) for preset in presets[:_TITLES_NAMED]]
    title = ", ".join(names) + (" and others" if len(presets) > _TITLES_NAMED else "")
    if sheet is None:
        return title, varied_candidates(presets, axes_from_values(vary or {}), most)
    if vary:
        raise SettingError("a sheet names its candidates one by one: give either a sheet or keys to vary")
    if len(presets) > 1:
        raise SettingError(f"a sheet says what changes in one preset, and {len(presets)} are given; name one")
    sheet_title, candidates = read_sheet(presets[0], Path(sheet), most)
    return sheet_title or title, candidates


def _phrase_of(preset: Preset) -> "Phrase":
    from glidesmith.phrase import load_preset_phrase

    if preset.phrase is None:
        raise SettingError(f"{shown(title_of(preset))} names no phrase; give one")
    return load_preset_phrase(preset)


def _require_inputs_kept(plan: _Plan, folder: Path) -> None:
    """Raise SettingError where an output would replace what the set is made from."""
    sources = [plan.phrase.path]
    for preset in (plan.base, *(candidate.preset for candidate in plan.candidates)):
        sources += [preset.path, preset.oscillator.file]
    kept = {os.path.realpath(source) for source in sources if source is not None}
    for name in (*plan.files, FACTS_FILE, PAGE_FILE):
        if os.path.realpath(folder / name) in kept:
            raise SettingError(
                f"{printable(str(folder / name))}: is what the set is made from; choose another folder"
            )


def _takes(plan: _Plan) -> list[Take]:
    """What is known of each candidate without its audio."""
    programs: list[Program] = []
    for candidate in plan.candidates:
        programs.append(compile_program(candidate.preset, plan.phrase, plan.sample_rate))
        _require_fit_for_page(programs[-1].length, plan)
    span = common_span([program.length for program in programs], plan.sample_rate)
    takes: list[Take] = []
    for candidate, file, program in zip(plan.candidates, plan.files, programs, strict=True):
        facts = measure(candidate.preset, plan.phrase, plan.tolerance_cents, plan.sample_rate)
        differs = remaining_differences(facts, plan.base_facts, plan.equal.mode)
        lines = curves(candidate.preset, plan.phrase, span.frames / plan.sample_rate)
        takes.append(Take(candidate, file, program, facts, differs, lines, span))
    return takes


def _require_fit_for_page(frames: int, plan: _Plan) -> None:
    """Raise SettingError where all candidates, each so long, are more than a page can hold."""
    if frames * len(plan.candidates) > MOST_FRAMES:
        raise SettingError(
            f"{len(plan.candidates)} candidates of {frames / plan.sample_rate:.0f} s make more "
            f"than {MOST_FRAMES / plan.sample_rate / 60:.0f} minutes of audio, too much for one page; "
            "take a shorter phrase, fewer candidates or a lower rate"
        )


def _workers() -> int:
    return min(os.cpu_count() or 1, 8)


def _match_loudness(
    takes: Sequence[Take], place: SetFolder, earlier: Mapping[str, Earlier], steps: "_Steps"
) -> dict[str, Any]:
    """Give every take its gain and its samples; returns what ``comparison.json`` says of the loudness.

    ``earlier`` are candidates in the folder that were rendered from the same.
    """
    span, sample_rate = takes[0].span, takes[0].sample_rate
    metered_s = span.metered_frames / sample_rate
    if place.facts is None or not _metered_alike(place.facts["loudness"], span, metered_s):
        earlier = {}
    with ThreadPoolExecutor(_workers()) as pool:
        steps.made([pool.submit(take.measure, earlier.get(take.digest)) for take in takes])
        common, limit = common_loudness(takes)
        old = place.facts["loudness"]["common_lufs"] if place.facts and earlier else None
        usable = earlier if old == common else {}
        steps.made([pool.submit(take.finish, common, usable.get(take.digest), place) for take in takes])
    return {
        "common_lufs": common,
        "target_lufs": TARGET_LUFS,
        "limited_by": limit,
        "gated": span.gated,
        "metered_s": metered_s,
    }


def _metered_alike(loudness: Mapping[str, Any], span: Span, metered_s: float) -> bool:
    """Whether an earlier set's loudness is what would be measured now. Silence more or less changes nothing
    where it is gated."""
    if "metered_s" not in loudness or loudness.get("gated") is not span.gated:
        return False
    return span.gated or bool(loudness["metered_s"] == metered_s)


def _write(place: SetFolder, takes: Sequence[Take], facts: dict[str, Any], steps: _Steps) -> None:
    """Write all files beside their final names, and give them their names together."""
    from glidesmith.page import write_page

    place.make()
    facts_file = place.begin()
    sinks: list[WavSink] = []
    draft = place.path / f"{PAGE_FILE}.part"
    try:
        sinks.extend(_written(place, take, facts) for take in takes if not _stands(place, take, facts))
        facts_file.write(json.dumps(facts, indent=1, allow_nan=False).encode("ascii") + b"\n")
        entries = facts["candidates"]
        drawn = [{**entry, "curves": take.lines} for entry, take in zip(entries, takes, strict=True)]
        write_page(draft, {**facts, "candidates": drawn}, [take.flac for take in takes])
    except BaseException:
        for outlet in (*sinks, facts_file):
            outlet.abandon()
        draft.unlink(missing_ok=True)
        raise
    _commit(place, facts_file, sinks, draft, facts)


def _stands(place: SetFolder, take: Take, facts: Mapping[str, Any]) -> bool:
    """Whether a take's WAV is in the folder already, to the last byte."""
    if take.kept is None or place.facts is None:
        return False
    entry = take.kept.entry
    same = take.kept.file == take.file and entry["label"] == take.label and entry["frames"] == take.codes.size
    return same and place.facts["title"] == facts["title"]


def _written(place: SetFolder, take: Take, facts: Mapping[str, Any]) -> WavSink:
    """A take's WAV, whole but for its final name."""
    sink = WavSink(
        place.path / take.file,
        take.sample_rate,
        1,
        24,
        title=f"{facts['title']}: {take.label}",
        comment=f"Settings {take.digest}, gain {take.gain_db:+.3f} dB",
        frames_expected=take.codes.size,
    )
    try:
        sink.write((take.codes * 2.0**-23).astype(np.float32))
    except BaseException:
        sink.abandon()
        raise
    return sink


def _commit(
    place: SetFolder, facts_file: "PartFile", sinks: Sequence[WavSink], draft: Path, facts: Mapping[str, Any]
) -> None:
    """Give everything its name: first the facts, which say what belongs here, the page last."""
    page = place.path / PAGE_FILE
    waiting = list(sinks)
    try:
        facts_file.close()
        # Without its page a set was not finished: what is otherwise than its facts say is no one's own work.
        if place.facts is None or place.facts.get("set") != facts["set"]:
            page.unlink(missing_ok=True)
        with ThreadPoolExecutor(_workers()) as pool:
            closing = [pool.submit(sink.close) for sink in sinks]
            for future in closing:
                future.result()
                waiting.pop(0)
        draft.replace(page)
        for path in place.outdated([entry["file"] for entry in facts["candidates"]]):
            path.unlink(missing_ok=True)
    except OSError as problem:
        lines = problem.lines if isinstance(problem, OutputError) else (str(problem),)
        raise OutputError(*lines, f"{place.name}: is not whole; run the same command again") from None
    finally:
        for sink in waiting:
            sink.abandon()
        draft.unlink(missing_ok=True)
