"""What the amplifier makes of each gate: attack, peak, the gap to the next one, and whether an edge clicks.

All of it is of the gain after the amplifier's law, from one gate-on to the next. The gain is followed along
the control's closed forms, in each of which it only rises, only falls or rests.
"""

import math
from collections.abc import Iterator
from itertools import chain, pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.amplifier import amplifier_control, amplifier_gain, amplifier_record, fill_gain
from glidesmith.compiled import kernel
from glidesmith.course import Course, Stretch
from glidesmith.facts import SILENCE_DB, GateFacts

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from glidesmith.preset import Preset
    from glidesmith.program import GateChange

CLICK_SHARE, CLICK_S = 0.1, 0.0005
"""An edge clicks where the gain moves by over a tenth of its peak within half a millisecond (common
practice)."""

_ROUNDING = 1e-9
_FINENESS = 48
_MOST_NEAR = 12


def gate_facts(
    preset: "Preset", changes: "Sequence[GateChange]", unslewed: Course, slewed: Course
) -> Iterator[GateFacts]:
    """The facts of every opening of the gate, in order.

    ``changes`` are the gate's, as `gate_changes` gives them; the courses those of the control before and
    after the gain slew.
    """
    amplifier = amplifier_record(preset.amplifier.law, preset.amplifier.range_db)[0]
    for gate, following in pairwise(chain(_gates(amplifier, changes, slewed), [None])):
        assert gate is not None
        wanted = _gain(amplifier, _highest(unslewed.stretches(gate.begin_s, gate.end_s)))
        yield GateFacts(
            gate.note,
            gate.begin_s,
            gate.attack_10_90_s(),
            gate.peak,
            _loss_db(wanted, gate.peak),
            None if following is None else gate.gap_db(following),
            gate.clicks(),
        )


def _gates(amplifier: Any, changes: "Sequence[GateChange]", control: Course) -> "Iterator[_Gate]":
    opens = [index for index, change in enumerate(changes) if change.opens]
    for index, after in pairwise([*opens, len(changes)]):
        end_s = float(changes[after].time) if after < len(changes) else math.inf
        last = changes[after - 1]
        close_s = float(last.time) if last.level == 0.0 else end_s
        yield _Gate(amplifier, control, changes[index].note, float(changes[index].time), close_s, end_s)


def _gain(amplifier: Any, control: float) -> float:
    return float(amplifier_gain(amplifier, control))


def _highest(stretches: "Iterator[Stretch]") -> float:
    return max(max(stretch.first, stretch.last) for stretch in stretches)


def _decibels(gain: float, against: float) -> float:
    """``gain`` against another one in decibels; silence is −200 dB."""
    if against <= 0.0:
        return 0.0 if gain <= 0.0 else -SILENCE_DB
    return max(20.0 * math.log10(gain / against), SILENCE_DB) if gain > 0.0 else SILENCE_DB


def _loss_db(unslewed: float, slewed: float) -> float:
    return 0.0 - _decibels(slewed, unslewed)


class _Gate:
    """The gain from one gate-on to the next one, which is infinitely late after the last; in seconds."""

    def __init__(
        self, amplifier: Any, control: Course, note: int, begin_s: float, close_s: float, end_s: float
    ) -> None:
        self._amplifier, self._control, self._close_s = amplifier, control, close_s
        self.note, self.begin_s, self.end_s = note, begin_s, end_s
        self._stretches = list(control.stretches(begin_s, end_s))
        self.peak = _gain(amplifier, _highest(iter(self._stretches)))

    def attack_10_90_s(self) -> float | None:
        """From a tenth to nine tenths of the way from the gain at gate-on to the peak; None: no rise."""
        before = _gain(self._amplifier, float(self._control.at([self.begin_s])[0]))
        way = self.peak - before
        if way <= _ROUNDING * self.peak:
            return None
        tenth, nine_tenths = (self._first_at(before + share * way) for share in (0.1, 0.9))
        return nine_tenths - tenth

    def _first_at(self, gain: float) -> float:
        level = float(amplifier_control(self._amplifier, gain))
        for stretch in self._stretches:
            at = stretch.reaches(level, upwards=True)
            if at is not None:
                return at
        return self._stretches[-1].begin_s  # a level that rounding has put beyond the peak

    def gap_db(self, following: "_Gate") -> float:
        """The lowest gain from this gate's closing to the next gate-on against the lower of the two peaks.

        Where gates abut that is one moment, of which both sides count.
        """
        lowest = min(float(self._control.at([self.end_s])[0]), following._stretches[0].first)
        for stretch in self._control.stretches(self._close_s, self.end_s):
            lowest = min(lowest, stretch.first, stretch.last)
        return _decibels(_gain(self._amplifier, lowest), min(self.peak, following.peak))

    def clicks(self) -> bool:
        """Whether the gain moves by over a tenth of its peak within half a millisecond."""
        limit = CLICK_SHARE * self.peak * (1.0 + _ROUNDING)
        return _largest_move(self._amplifier, self._control, self._stretches, limit) > limit


@kernel
def _fill_moves(
    borders_s: Any, before: Any, after: Any, begins_s: Any, spans: Any, firsts: Any, lasts: Any, moves: Any
) -> None:
    """The range of the gain in each window: that of its ends and of both sides of the borders in it.

    ``begins_s`` (n,) in order and ``spans`` (n,) are the windows, ``firsts`` and ``lasts`` the gains at their
    ends; ``before`` and ``after`` (m,) those on both sides of ``borders_s``.
    """
    next_border = 0
    for i in range(begins_s.size):
        low, high = min(firsts[i], lasts[i]), max(firsts[i], lasts[i])
        while next_border < borders_s.size and borders_s[next_border] < begins_s[i]:
            next_border += 1
        border = next_border
        while border < borders_s.size and borders_s[border] <= begins_s[i] + spans[i] + 1e-12:
            low = min(low, before[border], after[border])
            high = max(high, before[border], after[border])
            border += 1
        moves[i] = high - low


class _Moves:
    """By how much the gain moves within half a millisecond from any moment on, inside the gate's window."""

    def __init__(self, amplifier: Any, control: Course, stretches: "Sequence[Stretch]") -> None:
        self._amplifier, self._control = amplifier, control
        last = stretches[-1]
        self.begin_s = stretches[0].begin_s
        self.end_s = last.end_s if math.isfinite(last.end_s) else last.begin_s + CLICK_S
        firsts = [*(stretch.first for stretch in stretches), last.last]
        lasts = [float(control.at([self.begin_s])[0]), *(stretch.last for stretch in stretches)]
        self.borders_s = np.array([*(stretch.begin_s for stretch in stretches), self.end_s])
        self._before, self._after = self._gains(np.array(lasts)), self._gains(np.array(firsts))

    def _gains(self, control: "NDArray[np.float64]") -> "NDArray[np.float64]":
        gains = np.empty_like(control)
        fill_gain(self._amplifier, control, gains)
        return gains

    def __call__(self, begins_s: "NDArray[np.float64]") -> "NDArray[np.float64]":
        """The largest move in the windows that begin at ``begins_s`` (n,), in order."""
        spans = np.minimum(CLICK_S, self.end_s - begins_s)
        firsts, lasts = (
            self._gains(self._control.at(begins_s)),
            self._gains(self._control.at(begins_s + spans)),
        )
        moves = np.empty_like(begins_s)
        _fill_moves(self.borders_s, self._before, self._after, begins_s, spans, firsts, lasts, moves)
        return moves


def _largest_move(amplifier: Any, control: Course, stretches: "Sequence[Stretch]", limit: float) -> float:
    """The gain's largest move within half a millisecond, as exactly as it takes to compare it with ``limit``.

    Windows that begin or end at a border, and a close choice of others, come first; then the best of these
    are closed in on. Between borders the move changes smoothly with the window's place.
    """
    moves = _Moves(amplifier, control, stretches)
    edges = [moves.borders_s, *(stretch.moments(_FINENESS) for stretch in stretches if stretch.moves)]
    begins_s = np.concatenate(edges)
    begins_s = np.unique(np.clip(np.concatenate([begins_s, begins_s - CLICK_S]), moves.begin_s, moves.end_s))
    found = moves(begins_s)
    for _ in range(6):
        best = float(found.max())
        if best > limit or best < 0.5 * limit:
            break
        near = np.argsort(-found, kind="stable")[:_MOST_NEAR]
        left, right = begins_s[np.maximum(near - 1, 0)], begins_s[np.minimum(near + 1, begins_s.size - 1)]
        begins_s = np.unique(np.linspace(left, right, 17))
        found = moves(begins_s)
    return best
