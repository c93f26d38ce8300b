"""A picture of what a preset makes of a phrase: the pitch above, the gain below, over one axis of time.

Colours are those of Okabe and Ito, "Color Universal Design (CUD): How to make figures and presentations that
are friendly to colorblind people" (2008); none is needed to read the picture, since lines also differ in
their dashes and marks in their shape.
"""

import contextlib
import logging
import math
import os
import sys
from io import BytesIO
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith import __version__, compiled
from glidesmith.amplifier import amplifier_record, fill_gain
from glidesmith.course import Course, gain_courses, heard_octaves, pitch_course
from glidesmith.errors import SettingError
from glidesmith.facts import Facts, glide_summary
from glidesmith.measuring import measure
from glidesmith.program import gate_changes, pitch_changes, slew_of
from glidesmith.text import printable, shortened, write_whole
from glidesmith.units import note_name

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from numpy.typing import NDArray

    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset

    Line = tuple[NDArray[np.float64], NDArray[np.float64]]

PICTURES = (".svg", ".png")

_BLACK, _GREY, _LIGHT = "#000000", "#8c8c8c", "#e3e3e3"
_BLUE, _SKY, _GREEN, _VERMILLION = "#0072B2", "#56B4E9", "#009E73", "#D55E00"

_NARROWEST, _WIDEST, _HEIGHT = 10.0, 40.0, 6.6
_INCHES_PER_SECOND = 1.2
_ROOMY = 6.0
_DOTS_PER_INCH = 110
_MOST_POINTS = 40_000
_NOTE_STEPS = (1, 2, 3, 4, 6, 12, 24)
_MOST_NOTE_TICKS = 10
_FADED = 0.005


def plot(
    preset: "Preset", phrase: "Phrase", path: "str | os.PathLike[str]", tolerance_cents: float = 5.0
) -> None:
    """Draw a preset's phrase into an SVG or PNG file, as the file's name says.

    The upper panel has the target, the pitch as heard, the band within ``tolerance_cents`` of the target, and
    where each glide lands; the lower one the gate, the control before and after the gain slew, and the gain.
    The file appears whole or not at all, and the same input gives the same file.

    Raises
    ------
    SettingError
        For another kind of file, and for a tolerance out of range.
    OutputError
        Where the file can't be written.
    """
    path = Path(path)
    kind = path.suffix.lower()
    if kind not in PICTURES:
        raise SettingError(f"{printable(str(path))}: can't draw this kind of file; name it .svg or .png")
    facts = measure(preset, phrase, tolerance_cents)
    write_whole(path, _drawn(_Curves(preset, phrase), facts, kind[1:]))


def _drawn(curves: "_Curves", facts: Facts, kind: str) -> bytes:
    """The file's content. The reader's own settings of the drawing library have no part in it."""
    with _quiet_library():
        return _saved(curves, facts, kind)


@contextlib.contextmanager
def _quiet_library() -> "Iterator[None]":
    """Keep the drawing library's remarks from the user, and its folder beside the compiled code.

    Where there is no such folder, the library looks for one, at worst a temporary one that it removes.
    """
    log = logging.getLogger("matplotlib")
    kept_level = log.level
    log.setLevel(logging.ERROR)
    placed = "matplotlib" not in sys.modules and "MPLCONFIGDIR" not in os.environ and compiled.CACHE_FOLDER
    if placed:
        os.environ["MPLCONFIGDIR"] = str(Path(placed).parent / "drawing")
    try:
        yield
    finally:
        log.setLevel(kept_level)
        if placed:
            del os.environ["MPLCONFIGDIR"]


def _saved(curves: "_Curves", facts: Facts, kind: str) -> bytes:
    import warnings

    import matplotlib
    from matplotlib.figure import Figure

    file = BytesIO()
    with matplotlib.rc_context(), warnings.catch_warnings():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update({"svg.hashsalt": "glidesmith", "svg.fonttype": "none", "font.size": 9.5})
        # A title may have characters that the font lacks.
        warnings.filterwarnings("ignore", "Glyph .* missing from", UserWarning)
        figure = Figure((curves.width, _HEIGHT), layout="constrained", dpi=_DOTS_PER_INCH)
        _draw(figure, curves, facts)
        maker = f"Glidesmith {__version__}"
        about = {"Date": None, "Creator": maker} if kind == "svg" else {"Software": maker}
        figure.savefig(file, format=kind, metadata=about)
    return file.getvalue()


def _draw(figure: "Figure", curves: "_Curves", facts: Facts) -> None:
    pitch, gain = figure.subplots(2, 1, sharex=True, height_ratios=(1.7, 1.0))
    title = f"{shortened(facts.preset)}, playing {shortened(facts.phrase)}"
    figure.suptitle(f"{title}\n{glide_summary(facts)}", x=0.01, ha="left", parse_math=False, linespacing=1.5)
    _draw_pitch(pitch, curves, facts)
    _draw_gain(gain, curves)
    for axes in (pitch, gain):
        axes.spines[["top", "right"]].set_visible(False)
        axes.grid(color="#dddddd", linewidth=0.6)
        axes.set_axisbelow(True)
        # Above the panel, so that it can't cover what the panel shows.
        axes.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=6, frameon=False, borderaxespad=0.2)
    gain.set_xlim(0.0, curves.end_s)
    gain.set_xlabel("time from the phrase's start in seconds")


def _draw_pitch(axes: "Axes", curves: "_Curves", facts: Facts) -> None:
    times, numbers = curves.target()
    width = facts.tolerance_cents / 100.0
    axes.fill_between(
        times, numbers - width, numbers + width, color=_SKY, alpha=0.45, linewidth=1.0, zorder=1,
        label=f"within {facts.tolerance_cents:g} cents of the target",
    )  # fmt: skip
    axes.plot(
        times,
        numbers,
        color=_BLACK,
        linestyle=(0, (4, 2)),
        linewidth=1.0 * curves.fineness,
        label="target",
        zorder=2,
    )
    axes.plot(*curves.heard(), color=_BLUE, linewidth=1.7 * curves.fineness, label="pitch as heard", zorder=3)
    _mark_landings(axes, curves, facts)
    axes.set_ylabel("pitch")
    _tick_notes(axes)


def _mark_landings(axes: "Axes", curves: "_Curves", facts: Facts) -> None:
    """A mark at each landing; where there is none, one of another shape when it was too late for it."""
    ends = [*(glide.start_s for glide in facts.glides[1:]), curves.phrase_end_s]
    lands = [glide.start_s + glide.landing_s for glide in facts.glides if glide.landing_s is not None]
    never = [end for glide, end in zip(facts.glides, ends, strict=False) if glide.landing_s is None]
    size = curves.fineness
    look: dict[str, Any] = {"edgecolors": "white", "linewidths": 0.8 * size, "zorder": 4}
    if lands:
        heights = curves.heard_at(np.nextafter(lands, np.inf))
        axes.scatter(lands, heights, s=34.0 * size, marker="o", color=_GREEN, label="lands", **look)
    if never:
        heights = curves.heard_at(np.array(never))
        axes.scatter(
            never, heights, s=62.0 * size, marker="X", color=_VERMILLION, label="never lands", **look
        )


def _tick_notes(axes: "Axes") -> None:
    """Note names beside the axis: every note while there is room, then every second one and so on, with each
    C."""
    low, high = axes.get_ylim()
    low, high = min(low, high - 2.0), max(high, low + 2.0)
    axes.set_ylim(low, high)
    fitting = (step for step in _NOTE_STEPS if (high - low) / step <= _MOST_NOTE_TICKS)
    step = next(fitting, _NOTE_STEPS[-1])
    first = math.ceil(max(low, 0.0) / step) * step
    ticks = range(first, math.floor(min(high, 127.0)) + 1, step)
    axes.set_yticks(list(ticks), [note_name(tick) for tick in ticks], parse_math=False)


def _draw_gain(axes: "Axes", curves: "_Curves") -> None:
    times, levels = curves.gate()
    axes.fill_between(
        times,
        0.0,
        levels,
        facecolor=_LIGHT,
        edgecolor=_GREY,
        linewidth=0.7 * curves.fineness,
        label="gate",
        zorder=1,
    )
    if curves.enveloped:
        axes.plot(
            *curves.control(curves.unslewed), color=_BLACK, linestyle=":", linewidth=1.2, label="envelope"
        )
    control = curves.control(curves.slewed)
    label = "gain, the same as the slewed control"
    if not curves.linear:
        label = "gain"
        axes.plot(
            *control,
            color=_VERMILLION,
            linestyle=(0, (5, 2)),
            linewidth=1.3 * curves.fineness,
            label="slewed control",
        )
    axes.plot(control[0], curves.gain(control[1]), color=_BLUE, linewidth=1.7 * curves.fineness, label=label)
    axes.set_ylim(0.0, 1.05)
    axes.set_ylabel("level, 0 to 1")


class _Curves:
    """The lines of the picture, over the time from 0 to ``end_s``, in seconds, when the sound has faded."""

    def __init__(self, preset: "Preset", phrase: "Phrase") -> None:
        self._preset = preset
        self._changes = pitch_changes(preset, phrase)
        self._gates = gate_changes(preset, phrase)
        self._pitch = pitch_course(slew_of(preset.pitch.slew), self._changes)
        self.unslewed, self.slewed = gain_courses(preset, self._gates)
        self.enveloped = preset.envelope is not None
        self.linear = preset.amplifier.law == "linear"
        self.phrase_end_s = float(phrase.end)
        self.end_s = self._faded_s()
        self.width = min(max(_INCHES_PER_SECOND * self.end_s, _NARROWEST), _WIDEST)
        # Lines and marks get finer where more than a few changes share an inch.
        self.fineness = min(1.0, max(0.25, _ROOMY * self.width / len(self._changes)))

    def _faded_s(self) -> float:
        """When the control is all but 0 after the last gate, or at the latest a third of the phrase later."""
        latest_s = self.phrase_end_s + max(self.phrase_end_s / 3.0, 0.5)
        for stretch in self.slewed.stretches(self.phrase_end_s, latest_s):
            at = stretch.reaches(_FADED, upwards=False)
            if at is not None:
                return at + 0.02 * self.phrase_end_s
        return latest_s

    def _count(self, course: Course) -> int:
        """How finely each stretch is drawn, so that a long phrase's picture stays small."""
        return max(6, min(48, _MOST_POINTS // course.starts_s.size))

    def target(self) -> "Line":
        """The staircase of targets, as MIDI note numbers."""
        zero = self._preset.tuning.zero_volts
        changes = self._changes
        times = [*(float(change.time) for change in changes), self.end_s]
        return _staircase(times, [zero + 12.0 * change.volts for change in changes])

    def heard_at(self, times_s: "NDArray[np.float64]") -> "NDArray[np.float64]":
        """The pitch as heard, as MIDI note numbers, before what happens at a moment."""
        return self._as_numbers(self._pitch.at(times_s))

    def _as_numbers(self, volts: "NDArray[np.float64]") -> "NDArray[np.float64]":
        return self._preset.tuning.zero_volts + 12.0 * heard_octaves(self._preset, volts)

    def heard(self) -> "Line":
        """The pitch as heard, as MIDI note numbers; steps stand upright."""
        count, steps = self._count(self._pitch), self._preset.pitch.steps_per_octave
        if not steps:
            times, volts = self._pitch.corners(0.0, self.end_s, count)
            return times, self._as_numbers(volts)
        stair_s, stair_volts = self._pitch.stair(steps, 0.0, self.end_s)
        return np.array(stair_s), self._as_numbers(np.array(stair_volts))

    def gate(self) -> "Line":
        """The gate's level, 0 to 1; each opening starts from 0, so that gates that abut can be told apart."""
        times, levels = [], []
        for change in self._gates:
            if change.opens:
                times.append(float(change.time))
                levels.append(0.0)
            times.append(float(change.time))
            levels.append(change.level)
        return _staircase([*times, self.end_s], levels)

    def control(self, course: Course) -> "Line":
        """A control's level, 0 to 1."""
        return course.corners(0.0, self.end_s, self._count(course))

    def gain(self, control: "NDArray[np.float64]") -> "NDArray[np.float64]":
        """What the amplifier makes of a control."""
        amplifier = self._preset.amplifier
        gains = np.empty_like(control)
        fill_gain(amplifier_record(amplifier.law, amplifier.range_db)[0], control, gains)
        return gains


def _staircase(times: "Sequence[float]", values: "Sequence[float]") -> "Line":
    """Steps as corners: value i from time i to time i + 1."""
    corners = np.repeat(np.asarray(times, dtype=np.float64), 2)[1:-1]
    return corners, np.repeat(np.asarray(values, dtype=np.float64), 2)
