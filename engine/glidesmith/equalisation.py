"""Equal durations: candidates' times rescaled until a reference glide takes equally long under each.

Every law's duration is proportional to its T, so one division does it: T' = T · wanted/own. The reference
glide goes from a stated note up by an interval, and back down; `log` and `exp` depend on where it starts.
`rise` is set by the way up, `fall` by the way down. What is equal there need not be equal on another
interval; `remaining_differences` tells where it is not.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median_low
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.candidates import Candidate
from glidesmith.converter import converted_volts
from glidesmith.errors import SettingError
from glidesmith.measuring import TuneRange
from glidesmith.program import slew_of
from glidesmith.settings import KEY
from glidesmith.slew import GLIDE, glide_begin, glide_time
from glidesmith.text import Mistakes, shown
from glidesmith.units import format_time, note_name, note_number

if TYPE_CHECKING:
    from glidesmith.facts import Facts, GlideFacts
    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset

MODES = ("settings", "landing", "midpoint", "rise")
"""What is made equal: nothing, the time to landing, to half-way, or from 10 to 90 %."""

SIDES = ("rise", "fall")
AGREEMENT_S = 1e-6
"""Times that differ by less count as equal."""

OCTAVE_SEMITONES = 12.0
_LARGEST_INTERVAL = 120.0
_HIGHEST_NOTE = 127


@dataclass(frozen=True, slots=True)
class Equality:
    """What is made equal, on which reference glide: ``interval_semitones`` up from ``from_note``, and back.

    With the mode ``"settings"`` nothing is, and interval and note are None.
    """

    mode: str = "settings"
    interval_semitones: float | None = None
    from_note: int | None = None

    @property
    def changes_times(self) -> bool:
        """Whether anything is made equal."""
        return self.mode != "settings"

    def notes(self, side: str) -> tuple[float, float]:
        """MIDI numbers from which and to which the reference glide goes: up for ``"rise"``, down for
        ``"fall"``."""
        assert self.from_note is not None
        assert self.interval_semitones is not None
        low, high = float(self.from_note), self.from_note + self.interval_semitones
        return (low, high) if side == "rise" else (high, low)

    def as_dict(self) -> dict[str, object]:
        """Fit for JSON."""
        name = None if self.from_note is None else note_name(self.from_note)
        return {"mode": self.mode, "interval_semitones": self.interval_semitones, "from": name}


def equality(
    mode: object,
    interval_semitones: object,
    from_note: object,
    phrase: "Phrase",
    tolerance_cents: float,
    varied: "Sequence[str]" = (),
) -> Equality:
    """What is asked to be made equal, checked.

    The note defaults to the phrase's median, the interval to an octave: 1 V, to which T refers in most laws.

    ``varied`` names the keys that set candidates of one preset apart.

    Raises SettingError with a reason.
    """
    if mode not in MODES:
        raise SettingError(f"equal = {shown(mode)}: choose one of {', '.join(MODES)}")
    if mode == "settings":
        _require_unused(interval_semitones, from_note)
        return Equality()
    for key in varied:
        if key in ("pitch.rise", "pitch.fall"):
            raise SettingError(
                f"{key} is varied and can't be made equal too: equal {mode} sets it for each candidate; "
                "vary another key, or leave the times as they are (--equal settings)"
            )
    interval = _checked_interval(OCTAVE_SEMITONES if interval_semitones is None else interval_semitones)
    if 100.0 * interval <= tolerance_cents:
        raise SettingError(
            f"an interval of {interval:g} semitones lies within the tolerance of {tolerance_cents:g} cents: "
            "it is in tune from its start; give a larger one (--interval)"
        )
    note = median_note(phrase) if from_note is None else note_number(from_note)
    if note + interval > _HIGHEST_NOTE:
        raise SettingError(
            f"an interval of {interval:g} semitones up from {note_name(note)} ends above "
            f"{note_name(_HIGHEST_NOTE)}, the highest note; give a lower one (--from) or less (--interval)"
        )
    return Equality(str(mode), interval, note)


def _require_unused(interval_semitones: object, from_note: object) -> None:
    for name, value in (("interval", interval_semitones), ("from", from_note)):
        if value is not None:
            raise SettingError(
                f"{name} = {shown(value)}: says on which glide times are made equal, and nothing is; say "
                f"what (--equal landing, midpoint or rise), or leave --{name} out"
            )


def _checked_interval(value: object) -> float:
    sound = isinstance(value, int | float) and not isinstance(value, bool)
    if not sound or not 0.0 < float(value) <= _LARGEST_INTERVAL:  # type: ignore[arg-type]
        raise SettingError(
            f"interval = {shown(value)}: give semitones, over 0 and up to {_LARGEST_INTERVAL:g} "
            "(12 is an octave)"
        )
    return float(value)  # type: ignore[arg-type]


def median_note(phrase: "Phrase") -> int:
    """The lower median of a phrase's note numbers."""
    return median_low(note.number for note in phrase.notes)


def reference_time(preset: "Preset", equal: Equality, side: str, tolerance_cents: float = 5.0) -> float:
    """How long the reference glide takes under a preset, in seconds, by its law's closed form.

    Parameters
    ----------
    preset : Preset
    equal : Equality
        With a mode other than ``"settings"``. ``"landing"`` is the time after which the pitch as heard
        (after converter, steps and tracking error) stays within the tolerance; ``"midpoint"`` and ``"rise"``
        are of the slew's own interval, as in `measure`.
    side : {"rise", "fall"}
        The way up, or the way down.
    tolerance_cents : float

    Raises
    ------
    SettingError
        Where there is no such time: the pitch jumps, never lands, or is in tune from the start.
    """
    if getattr(preset.pitch.slew, side) == 0.0:
        raise SettingError(
            f"pitch.{side} is 0: the pitch jumps, and no factor makes a jump last; give it a time"
        )
    origin, target = equal.notes(side)
    zero = preset.tuning.zero_volts
    ends = [_held_volts(preset, (number - zero) / 12.0) for number in (origin, target)]
    if ends[0] == ends[1]:
        raise SettingError(
            f"the converter has the same step for both ends of {_interval_text(equal, side)}, so nothing "
            "moves; give a larger interval (--interval) or more converter.bits"
        )
    glide = np.zeros(1, GLIDE)[0]
    glide_begin(glide, slew_of(preset.pitch.slew).record()[0], *ends)
    way = ends[1] - ends[0]
    if equal.mode == "midpoint":
        return float(glide_time(glide, ends[0] + 0.5 * way))
    if equal.mode == "rise":
        return float(glide_time(glide, ends[0] + 0.9 * way) - glide_time(glide, ends[0] + 0.1 * way))
    return _landing_time(preset, glide, ends, (target - zero) / 12.0, tolerance_cents, equal, side)


def _held_volts(preset: "Preset", volts: float) -> float:
    return converted_volts(preset.converter, volts)[0] if preset.converter else volts


def _landing_time(
    preset: "Preset",
    glide: Any,
    ends: Sequence[float],
    note_volts: float,
    tolerance_cents: float,
    equal: Equality,
    side: str,
) -> float:
    tuned = TuneRange.of(preset, note_volts, tolerance_cents)
    if not tuned.holds(ends[1]):
        raise SettingError(
            f"{_interval_text(equal, side)} never lands: the target as heard, after converter, steps and "
            f"tracking error, is more than {tolerance_cents:g} cents from the note; allow more "
            "(--tolerance-cents), or make midpoint or rise equal"
        )
    if tuned.holds(ends[0]):
        raise SettingError(
            f"{_interval_text(equal, side)} is in tune from its start, so it has no landing; give a larger "
            "interval (--interval)"
        )
    return float(glide_time(glide, tuned.low if ends[1] > ends[0] else tuned.high))


def _interval_text(equal: Equality, side: str) -> str:
    direction = "up from" if side == "rise" else "down to"
    assert equal.from_note is not None
    return f"the interval of {equal.interval_semitones:g} semitones {direction} {note_name(equal.from_note)}"


def reference_times(preset: "Preset", equal: Equality, tolerance_cents: float) -> dict[str, float]:
    """The reference glide's time up (``"rise"``) and down (``"fall"``), in seconds. Raises SettingError."""
    return {side: reference_time(preset, equal, side, tolerance_cents) for side in SIDES}


def equalised(
    base: "Preset", candidates: Sequence[Candidate], equal: Equality, tolerance_cents: float = 5.0
) -> tuple[Candidate, ...]:
    """The candidates with `pitch.rise` and `pitch.fall` such that the reference glide takes as long as under
    ``base``, to a rounding error.

    Raises SettingError with the reason, a line a candidate, where that can't be had.
    """
    if not equal.changes_times:
        return tuple(candidates)
    try:
        wanted_s = reference_times(base, equal, tolerance_cents)
    except SettingError as problem:
        raise SettingError(f"the preset has no {equal.mode} to make equal: {problem}") from None
    mistakes = Mistakes()
    changed = [_rescaled(candidate, wanted_s, equal, tolerance_cents, mistakes) for candidate in candidates]
    mistakes.raise_as(SettingError)
    return tuple(changed)


def _rescaled(
    candidate: Candidate,
    wanted_s: dict[str, float],
    equal: Equality,
    tolerance_cents: float,
    mistakes: Mistakes,
) -> Candidate:
    times: dict[str, object] = {}
    for side in SIDES:
        try:
            own_s = reference_time(candidate.preset, equal, side, tolerance_cents)
            times[f"pitch.{side}"] = _scaled_time(candidate.preset, side, wanted_s[side] / own_s)
        except SettingError as problem:
            mistakes.add(f"candidate {shown(candidate.label)} can't have an equal {equal.mode}: {problem}")
    if len(times) < len(SIDES):
        return candidate
    varied = {key: times.get(key, value) for key, value in candidate.varied.items()}
    return Candidate(candidate.label, candidate.preset.changed(times), varied)


def _scaled_time(preset: "Preset", side: str, factor: float) -> float:
    key = KEY[f"pitch.{side}"]
    time_s = getattr(preset.pitch.slew, side) * factor
    if not math.isfinite(time_s) or not key.lowest <= time_s <= key.highest:
        raise SettingError(
            f"{key.name} would have to be {time_s:.4g} s, outside {key.range_text}; give another interval "
            "(--interval) or other settings"
        )
    return float(time_s)


def remaining_differences(facts: "Facts", base: "Facts", mode: str) -> list[str]:
    """On which of the phrase's glides the time that was made equal is not so, a line an interval, the largest
    difference first.

    ``facts`` and ``base`` are of one phrase, under the candidate and under the preset.
    """
    if mode == "settings":
        return []
    groups: dict[tuple[str, str], list[tuple[float | None, float | None]]] = {}
    semitones: dict[tuple[str, str], float] = {}
    of_base = {(glide.note, glide.start_s): glide for glide in base.glides}
    for glide in facts.glides:
        other = of_base.get((glide.note, glide.start_s))
        pair = _time_of(glide, mode), None if other is None else _time_of(other, mode)
        if _difference(*pair) > AGREEMENT_S:
            place = glide.from_note, glide.to_note
            groups.setdefault(place, []).append(pair)
            semitones[place] = glide.interval_semitones
    largest = {place: max(_difference(*pair) for pair in pairs) for place, pairs in groups.items()}
    order = sorted(groups, key=lambda place: -largest[place])
    return [_difference_line(place, semitones[place], groups[place], mode) for place in order]


def _time_of(glide: "GlideFacts", mode: str) -> float | None:
    return {"landing": glide.landing_s, "midpoint": glide.midpoint_s, "rise": glide.rise_10_90_s}[mode]


def _difference(one: float | None, other: float | None) -> float:
    if one is None or other is None:
        return 0.0 if one is other else math.inf
    return abs(one - other)


_SAID = {"landing": "lands", "midpoint": "is half-way", "rise": "goes from 10 to 90 %"}


def _difference_line(
    place: tuple[str, str],
    semitones: float,
    pairs: Sequence[tuple[float | None, float | None]],
    mode: str,
) -> str:
    own, preset = (_times_text([pair[index] for pair in pairs], mode) for index in (0, 1))
    count = f", {len(pairs)} times" if len(pairs) > 1 else ""
    return f"{place[0]} to {place[1]} ({semitones:+g}{count}): {_SAID[mode]} {own}, the preset {preset}"


def _times_text(times: Sequence[float | None], mode: str) -> str:
    """``"after 80 ms"``, ``"after 80 ms to 95 ms"``, ``"never"``, or ``"after 80 ms or never"``."""
    known = sorted(time for time in times if time is not None)
    word = "in" if mode == "rise" else "after"
    texts = list(dict.fromkeys(_short_time(time) for time in (known[:1] + known[-1:])))
    said = [f"{word} {' to '.join(texts)}"] if known else []
    if len(known) < len(times):
        said.append("never")
    return " or ".join(said)


def _short_time(seconds: float) -> str:
    return format_time(seconds, 4)
