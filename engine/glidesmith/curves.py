"""Lines that show what a preset makes of a phrase: few points, from the closed forms, as exact as a screen
can show.

Pitch is in octaves from C4, as heard: after glissando steps and tracking error. At 1 V/oct with 0 V on C4
these are volts; candidates whose 0 V lies on another note can be laid over each other all the same.
"""

import math
from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from glidesmith.amplifier import amplifier_record, fill_gain
from glidesmith.course import Course, GlideCourse, gain_courses, heard_octaves, pitch_course
from glidesmith.program import gate_changes, pitch_changes, slew_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset

    Floats = NDArray[np.float64]
    Line = list[list[float]]

MIDDLE_C = 60
WIDTH, HEIGHT = 38_400.0, 9600.0
"""A wide screen's picture at thirty-twofold zoom, in pixels: a line is at most one of them off."""

LONGEST_PIXEL_S = 0.0005
"""What a pixel is at most in time, so that a single glide of a long phrase can be looked at too."""

MOST_POINTS = 4000
"""Of one line; where it would have more, it is drawn more coarsely."""

_LEAST_OCTAVES = 0.5
_FIRST_CUT = 0.4
_MOST_ROUNDS = 16
_DIGITS = 5


def curves(preset: "Preset", phrase: "Phrase", end_s: float) -> dict[str, "Line"]:
    """The lines of a preset's phrase from 0 to ``end_s``, each a list of points (time in s, value).

    ``target``: where the pitch is going, ``pitch``: the pitch as heard, in octaves from C4; ``gate``: the
    gate, or the envelope that it starts, ``control``: the same after the gain slew, and ``gain``: what the
    amplifier makes of it, 0 to 1. A jump is two points at one time.
    """
    changes, gates = pitch_changes(preset, phrase), gate_changes(preset, phrase)
    shift = (preset.tuning.zero_volts - MIDDLE_C) / 12.0
    targets = [change.volts + shift for change in changes]
    octaves = max(max(targets) - min(targets), _LEAST_OCTAVES)
    course = pitch_course(slew_of(preset.pitch.slew), changes)
    unslewed, slewed = gain_courses(preset, gates)
    record = amplifier_record(preset.amplifier.law, preset.amplifier.range_db)[0]

    def heard(volts: "Floats") -> "Floats":
        return heard_octaves(preset, volts) + shift

    def gain(control: "Floats") -> "Floats":
        gains = np.empty_like(control)
        fill_gain(record, np.clip(control, 0.0, 1.0), gains)
        return gains

    steps = preset.pitch.steps_per_octave
    return {
        "target": _staircase([float(change.time) for change in changes], targets, end_s),
        "pitch": _glissando(course, steps, heard, end_s) if steps else line(course, end_s, octaves, heard),
        "gate": line(unslewed, end_s, 1.0),
        "control": line(slewed, end_s, 1.0),
        "gain": line(slewed, end_s, 1.0, gain),
    }


def _unchanged(values: "Floats") -> "Floats":
    return values


def line(
    course: Course, end_s: float, span: float, shown: Callable[["Floats"], "Floats"] = _unchanged
) -> "Line":
    """A course from 0 to ``end_s`` as few points. ``span`` is the height of the picture in the value's unit.

    ``shown`` makes the value that is drawn of the course's own.
    """
    stretches = list(course.stretches(0.0, end_s))
    ends = np.array([(s.begin_s, s.end_s, s.first, s.last) for s in stretches])
    ends[:, 2:] = shown(ends[:, 2:].reshape(-1)).reshape(-1, 2)
    moves = np.array([stretch.moves for stretch in stretches])
    pixel_s, pixel_height = min(end_s / WIDTH, LONGEST_PIXEL_S), span / HEIGHT
    coarseness = 1.0
    while True:
        points = _refined(course, shown, ends, moves, coarseness * pixel_s, coarseness * pixel_height)
        if len(points) <= max(MOST_POINTS, 2 * len(stretches)) or coarseness > 64.0:
            return _rounded(points)
        coarseness *= 2.0


def _refined(
    course: Course,
    shown: Callable[["Floats"], "Floats"],
    ends: "Floats",
    moves: "NDArray[np.bool_]",
    time_s: float,
    height: float,
) -> "Floats":
    """Points (n, 2): every stretch cut until no piece is off by more than ``height`` or longer than
    ``time_s``."""
    done = [ends[~moves]]
    moving = ends[moves]
    cut = moving[:, 0] + _FIRST_CUT * (moving[:, 1] - moving[:, 0])
    open_pieces = _cut(moving, cut, shown(course.at(cut)))
    for _ in range(_MOST_ROUNDS):
        middle = 0.5 * (open_pieces[:, 0] + open_pieces[:, 1])
        values = shown(course.at(middle))
        off = np.abs(values - 0.5 * (open_pieces[:, 2] + open_pieces[:, 3]))
        rough = (off > height) & (open_pieces[:, 1] - open_pieces[:, 0] > time_s)
        done.append(open_pieces[~rough])
        if not rough.any():
            break
        open_pieces = _cut(open_pieces[rough], middle[rough], values[rough])
    else:
        done.append(open_pieces)
    pieces = np.concatenate(done)
    pieces = pieces[np.argsort(pieces[:, 0], kind="stable")]
    points = pieces[:, [0, 2, 1, 3]].reshape(-1, 2)
    return _thinned(points, time_s, height)


def _cut(pieces: "Floats", at: "Floats", values: "Floats") -> "Floats":
    """Each piece (begin, end, first, last) as two."""
    left, right = pieces.copy(), pieces.copy()
    left[:, 1], left[:, 3] = at, values
    right[:, 0], right[:, 2] = at, values
    return np.concatenate([left, right])


def _thinned(points: "Floats", time_s: float, height: float) -> "Floats":
    """The points that a line needs: those of which it would be off by a pixel without them.

    By the method of Douglas and Peucker, "Algorithms for the reduction of the number of points required to
    represent a digitized line", The Canadian Cartographer 10, 1973 (from memory).
    """
    scaled = points / (time_s, height)
    keep = np.zeros(len(points), np.bool_)
    keep[[0, -1]] = True
    waiting = [(0, len(points) - 1)]
    while waiting:
        first, last = waiting.pop()
        if last - first < 2:
            continue
        inner = scaled[first + 1 : last] - scaled[first]
        x, y = scaled[last] - scaled[first]
        length = math.hypot(x, y)
        off = np.abs(inner[:, 0] * y - inner[:, 1] * x) / length if length else np.hypot(*inner.T)
        worst = int(off.argmax())
        if off[worst] > 0.5:
            keep[first + 1 + worst] = True
            waiting += [(first, first + 1 + worst), (first + 1 + worst, last)]
    return points[keep]


def _glissando(
    course: GlideCourse, steps: int, heard: Callable[["Floats"], "Floats"], end_s: float
) -> "Line":
    """The stair of a stepped pitch, its steps where the course crosses half-way between two."""
    times, volts = course.stair(steps, 0.0, end_s)
    return _rounded(np.stack([times, heard(np.array(volts))], axis=1))


def _staircase(times: "Sequence[float]", values: "Sequence[float]", end_s: float) -> "Line":
    points = [[times[0], values[0]]]
    for time, value in zip(times[1:], values[1:], strict=True):
        points += [[time, points[-1][1]], [time, value]]
    return _rounded(np.array([*points, [end_s, points[-1][1]]]))


def _rounded(points: "Floats") -> "Line":
    """The points as JSON gets them, without repetitions."""
    rows = (np.round(points, _DIGITS) + 0.0).tolist()
    return [row for index, row in enumerate(rows) if index == 0 or row != rows[index - 1]]
