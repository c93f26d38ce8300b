"""What is measured of a preset and a phrase, as records, as JSON and as a table for reading."""

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from glidesmith.text import shortened
from glidesmith.units import format_time

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence


SILENCE_DB = -200.0
"""What silence counts as in figures that must be finite."""


@dataclass(frozen=True, slots=True)
class GlideFacts:
    """One change of the pitch's target. Times are seconds from the change, ``start_s`` seconds from the
    phrase's start.

    ``note`` is the index in the phrase of the note that it goes to, ``from_note`` and ``to_note`` are note
    names. None stands for what did not happen before the next change or the phrase's end; ``short_by_cents``
    is then how far off the pitch still was, and 0 otherwise. A jump is there at once; it has no rate, and
    ``max_rate_semitones_per_s`` is 0.
    """

    note: int
    start_s: float
    from_note: str
    to_note: str
    interval_semitones: float
    landing_s: float | None
    midpoint_s: float | None
    rise_10_90_s: float | None
    max_rate_semitones_per_s: float
    short_by_cents: float
    in_tune_fraction: float

    def as_dict(self) -> dict[str, object]:
        """The facts as `measure --json` prints them."""
        return {
            "note": self.note,
            "start_s": self.start_s,
            "from": self.from_note,
            "to": self.to_note,
            "interval_semitones": self.interval_semitones,
            "landing_s": self.landing_s,
            "midpoint_s": self.midpoint_s,
            "rise_10_90_s": self.rise_10_90_s,
            "max_rate_semitones_per_s": self.max_rate_semitones_per_s,
            "short_by_cents": self.short_by_cents,
            "in_tune_fraction": self.in_tune_fraction,
        }


@dataclass(frozen=True, slots=True)
class GateFacts:
    """One opening of the gate, until the next one. ``note`` is the index in the phrase of the note that opens
    it.

    ``peak`` is a gain, 0 to 1. ``attack_10_90_s`` is None where the gain does not rise, ``gap_db`` where no
    gate follows; silence counts as −200 dB.
    """

    note: int
    start_s: float
    attack_10_90_s: float | None
    peak: float
    peak_loss_db: float
    gap_db: float | None
    edge_click: bool

    def as_dict(self) -> dict[str, object]:
        """The facts as `measure --json` prints them."""
        return {
            "note": self.note,
            "start_s": self.start_s,
            "attack_10_90_s": self.attack_10_90_s,
            "peak": self.peak,
            "peak_loss_db": self.peak_loss_db,
            "gap_db": self.gap_db,
            "edge_click": self.edge_click,
        }


@dataclass(frozen=True, slots=True)
class Facts:
    """The facts of one preset playing one phrase, both named by their titles."""

    preset: str
    phrase: str
    tolerance_cents: float
    sample_rate: int
    glides: tuple[GlideFacts, ...]
    gates: tuple[GateFacts, ...]

    @property
    def never_land(self) -> tuple[GlideFacts, ...]:
        """The glides that are not in tune when the next change, or the end, comes."""
        return tuple(glide for glide in self.glides if glide.landing_s is None)

    def as_dict(self) -> dict[str, object]:
        """The facts as `measure --json` prints them: every number finite, or None."""
        return {
            "preset": self.preset,
            "phrase": self.phrase,
            "tolerance_cents": self.tolerance_cents,
            "sample_rate": self.sample_rate,
            "glides": [glide.as_dict() for glide in self.glides],
            "gates": [gate.as_dict() for gate in self.gates],
        }


def table(facts: Facts) -> str:
    """The facts as a table for a terminal: plain text, columns aligned, a summary in the last lines."""
    phrase = f"{shortened(facts.preset)}, playing {shortened(facts.phrase)}"
    lines = [f"{phrase} (in tune: within {facts.tolerance_cents:g} cents)", ""]
    lines += _aligned(_GLIDE_HEADS, [_glide_cells(glide) for glide in facts.glides], "no glides")
    lines.append("")
    lines += _aligned(_GATE_HEADS, [_gate_cells(gate) for gate in facts.gates], "no gates")
    lines += ["", glide_summary(facts), gate_summary(facts)]
    return "\n".join(lines)


_GLIDE_HEADS = (
    "<glide", ">note", ">at", ">semitones", "<lands after", ">in tune", ">half-way", ">10 to 90 %", ">fastest"
)  # fmt: skip
_GATE_HEADS = (">note", ">gate opens", ">attack", ">peak", ">peak loss", ">gap after it", "<edges")


def _aligned(heads: "Sequence[str]", rows: "Sequence[Sequence[str]]", otherwise: str) -> list[str]:
    """Columns as wide as they need to be; a head starts with the side that its column keeps to."""
    if not rows:
        return [otherwise]
    columns = list(zip(*((head[1:] for head in heads), *rows), strict=True))
    widths = [max(map(len, column)) for column in columns]
    sides = [head[0] for head in heads]
    cells = ([f"{cell:{side}{width}}" for cell, side, width in zip(row, sides, widths, strict=True)]
             for row in zip(*columns, strict=True))  # fmt: skip
    return ["  ".join(row).rstrip() for row in cells]


def _seconds(value: float | None, otherwise: str = "-") -> str:
    return otherwise if value is None else format_time(value, 3)


def _glide_cells(glide: GlideFacts) -> list[str]:
    rate = glide.max_rate_semitones_per_s
    return [
        f"{glide.from_note} to {glide.to_note}",
        str(glide.note),
        f"{glide.start_s:.3f} s",
        f"{glide.interval_semitones:+g}",
        _landing(glide),
        f"{math.floor(100.0 * glide.in_tune_fraction + 1e-9)} %",
        _seconds(glide.midpoint_s),
        _seconds(glide.rise_10_90_s),
        "jumps" if rate == 0.0 and glide.landing_s is not None else f"{rate:.3g} /s",
    ]


def _landing(glide: GlideFacts) -> str:
    if glide.landing_s is None:
        return f"NEVER, {_cents(glide.short_by_cents)} off"
    return "at once" if glide.landing_s == 0.0 else _seconds(glide.landing_s)


def _cents(value: float) -> str:
    return f"{value:.0f} cents" if value >= 10.0 else f"{value:.1f} cents"


def _gate_cells(gate: GateFacts) -> list[str]:
    attack = "at once" if gate.attack_10_90_s == 0.0 else _seconds(gate.attack_10_90_s, "no rise")
    return [
        str(gate.note),
        f"{gate.start_s:.3f} s",
        attack,
        _decibels(20.0 * math.log10(gate.peak) if gate.peak > 0.0 else None),
        _decibels(gate.peak_loss_db),
        "-" if gate.gap_db is None else _decibels(gate.gap_db if gate.gap_db > SILENCE_DB else None),
        "CLICK" if gate.edge_click else "smooth",
    ]


def _decibels(value: float | None) -> str:
    return "silent" if value is None else f"{value + 0.0:.1f} dB".replace("-0.0 ", "0.0 ")


def _counted(count: int, noun: str) -> str:
    return f"{count:,} {noun}" if count == 1 else f"{count:,} {noun}s"


def glide_summary(facts: Facts) -> str:
    """How many glides there are and how many never land, with the slowest or the worst, in a line."""
    if not facts.glides:
        return "0 glides: the pitch's target never changes."
    never = facts.never_land
    said = f"{_counted(len(facts.glides), 'glide')}: "
    if not never:
        slowest = max(facts.glides, key=lambda glide: glide.landing_s or 0.0)
        if slowest.landing_s == 0.0:
            return f"{said}all land at once."
        return f"{said}all land, the slowest after {_landing(slowest)} ({_place(slowest)})."
    worst = max(never, key=lambda glide: glide.short_by_cents)
    verb = "lands" if len(never) == 1 else "land"
    off = f"{_cents(worst.short_by_cents)} off ({_place(worst)})"
    return f"{said}{len(never):,} never {verb}, the worst {off}."


def _place(glide: GlideFacts) -> str:
    return f"{glide.from_note} to {glide.to_note} at {glide.start_s:.3f} s"


def gate_summary(facts: Facts) -> str:
    """How many gates there are, how many click, and what the slew takes off their peaks, in a line."""
    clicks = [gate for gate in facts.gates if gate.edge_click]
    said = f"{_counted(len(facts.gates), 'gate')}: "
    if not clicks:
        return said + "no edge clicks" + _most_lost(facts.gates)
    where = f"{len(clicks):,} with an edge that clicks (the first at {clicks[0].start_s:.3f} s)"
    return said + where + _most_lost(facts.gates)


def _most_lost(gates: "Iterable[GateFacts]") -> str:
    most = max((gate.peak_loss_db for gate in gates), default=0.0)
    return f"; the slew takes up to {most:.1f} dB off the peaks." if most >= 0.05 else "; no peak is lowered."
