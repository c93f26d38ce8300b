"""A slew that pursues a moving target: what the gain slew does behind an envelope.

A *target* is one stage of an envelope: its level x(t) holds, moves on a straight line (``RAMP``), or moves as
the curve law with k = 5 does (``ARC``, an exponential). A *pursuit* is the slewed output y(t) on that stage,
in stretches on each of which it has one closed form, computed from the stretch's own start, so that neither
the sample rate nor the block size leaves a trace. With T the time of the side in use (``rise`` while x > y,
``fall`` while x < y), e = x − y, s = x':

======  ================  ==============================================================================
law     y'                on a moving target
======  ================  ==============================================================================
rc      e/T               straight: e = s T + (e0 − s T) exp(−t/T); exponential with rate q = 5/D, w(t) the
                          part of x that fades: e = k w + (e0 − k w0) exp(−t/T), k = q/(q − 1/T)
linear  ±1/T              Z(y) = Z(y0) ± t/T with Z(y) = (exp(β y) − 1)/β, β = 0, b, −b for linear, log, exp
log     ±exp(−b y)/T      (Z(y) = y where β = 0) until y meets x; then y = x while the law is fast enough,
exp     ±exp(+b y)/T      abs(s) exp(β x) T ≤ 1; after that it falls behind until it meets x again
soft    tanh(e/c)/T       by collocation: `glidesmith.collocation`
======  ================  ==============================================================================

The rows but the last follow by integration. Where y meets x is the first zero of Z(x(t)) − Z(y0) ∓ t/T, whose
second derivative changes its sign once at most, at a known time: Newton's method, from the proper end of each
part, closes in on it from one side and can't miss it. On a target that holds, the output is a plain glide of
the slew stage.
"""

from typing import Any

import numpy as np

from glidesmith.collocation import piece_at, take_piece
from glidesmith.compiled import inlined, kernel, vector_kernel
from glidesmith.slew import EXP, GLIDE, HELD, LOG, RC, SETTLED, SOFT, glide_begin, glide_volts
from glidesmith.target import (
    ARC,
    HOLD,
    RAMP,
    asymptote,
    fade,
    fading_part,
    fill_target,
    target_level,
    target_slope,
)

FOLLOW, GLIDING, MOVE, RELAX, RESONATE, PIECE = range(6)
"""A stretch's closed form: on the target; towards one that holds; linear, log or exp on the way; rc; rc with
the time constant of its target; soft."""

PURSUIT = np.dtype(
    [
        ("mode", np.int64),
        ("meets", np.int64),
        ("since", np.float64),
        ("until", np.float64),
        ("before", np.float64),
        ("origin", np.float64),
        ("side", np.float64),
        ("side_s", np.float64),
        ("bend", np.float64),
        ("knee", np.float64),
        ("pace", np.float64),
        ("rest", np.float64),
        ("share", np.float64),
        ("offset", np.float64),
        ("cubic", np.float64),
        ("span", np.float64),
        ("glide", GLIDE),
    ],
    align=True,
)
"""The stretch of the output in hand, from ``since`` to ``until``, in seconds since its target began.

``before``: the output at ``since`` itself, left of any jump; ``origin``: right of it. ``meets``: at ``until``
the output is at its target. ``side``: 1 while the output rises, −1 while it falls; ``side_s``: that side's T.
The rest are constants of the closed form, in which t counts from ``since``:

========  ====================================================================================================
MOVE      ``pace``: y' at ``since``, 1/s; ``bend``: β
RELAX     e = share (x − offset) + span + rest exp(−pace t)
RESONATE  e = rest exp(−pace t) + share t (1 + cubic t²) exp(−offset t)
PIECE     e = rest + p (pace + p (share + p cubic)) with p = t/span
========  ====================================================================================================
"""

_RESONANT = 1e-3
_BRIEF = 1e-4
_PATIENCE = 80


@inlined
def _side_time(slew: Any, side: float) -> float:
    return float(slew.rise if side > 0.0 else slew.fall)


@inlined
def _stretch(bend: float, distance: float) -> float:
    """Z(y + distance) − Z(y) in units of Z'(y)."""
    return distance if bend == 0.0 else np.expm1(bend * distance) / bend


@inlined
def _lead(pursuit: Any, target: Any, elapsed: float) -> float:
    """How far the target is ahead of a `MOVE`, in units of Z."""
    distance = target_level(target, elapsed) - pursuit.origin
    return float(
        pursuit.side * _stretch(pursuit.bend, distance) - abs(pursuit.pace) * (elapsed - pursuit.since)
    )


@inlined
def _lead_slope(pursuit: Any, target: Any, elapsed: float) -> float:
    slope = pursuit.side * target_slope(target, elapsed)
    if pursuit.bend != 0.0:
        slope *= np.exp(pursuit.bend * (target_level(target, elapsed) - pursuit.origin))
    return float(slope - abs(pursuit.pace))


@inlined
def _lead_curves_up(pursuit: Any, target: Any, elapsed: float) -> bool:
    """The sign of the lead's second derivative: that of ±β on a straight line, of ±w (1 + β w) on an arc."""
    if target.motion == RAMP:
        return bool(pursuit.side * pursuit.bend >= 0.0)
    fading = fading_part(target, elapsed)
    return bool(pursuit.side * fading * (1.0 + pursuit.bend * fading) >= 0.0)


@inlined
def _inflection(pursuit: Any, target: Any) -> float:
    """When β w = −1 on an arc; infinite where it never is."""
    if target.motion == ARC and -pursuit.bend * target.swing > 1.0:
        return float(np.log(-pursuit.bend * target.swing) / target.decay)
    return np.inf


@kernel
def _zero_from_left(pursuit: Any, target: Any, left: float, right: float) -> float:
    """The first zero of a lead that curves upwards and is positive at ``left``; infinite without one."""
    at = left
    for _ in range(_PATIENCE):
        lead = _lead(pursuit, target, at)
        slope = _lead_slope(pursuit, target, at)
        if lead <= 0.0:
            return at
        if slope >= 0.0:
            return np.inf
        nearer = at - lead / slope
        if nearer >= right:
            return np.inf
        if nearer <= at:
            return at
        at = nearer
    return at


@kernel
def _zero_from_right(pursuit: Any, target: Any, right: float) -> float:
    """The zero of a lead that curves downwards and was not negative before; infinite without one."""
    if _lead(pursuit, target, right) > 0.0:
        return np.inf
    at = right
    for _ in range(_PATIENCE):
        lead = _lead(pursuit, target, at)
        slope = _lead_slope(pursuit, target, at)
        if lead >= 0.0 or slope >= 0.0:
            return at
        nearer = at - lead / slope
        if nearer >= at:
            return at
        at = nearer
    return at


@kernel
def _meeting_time(pursuit: Any, target: Any, departs: bool) -> float:
    """When a `MOVE` meets its target, infinite if not before that ends. ``departs``: it begins on the target.

    One that departs has no lead to lose before the lead has curved down.
    """
    left = pursuit.since
    border = _inflection(pursuit, target)
    for part in range(2):
        right = min(border, target.duration) if part == 0 else target.duration
        if right > left:
            if not _lead_curves_up(pursuit, target, 0.5 * (left + right)):
                at = _zero_from_right(pursuit, target, right)
            elif part == 0 and departs:
                at = np.inf
            else:
                at = _zero_from_left(pursuit, target, left, right)
            if at < np.inf:
                return float(max(at, pursuit.since))
            left = right
    return np.inf


@inlined
def _haste(target: Any, bend: float, side_s: float, elapsed: float) -> float:
    """The target's rate in units of the fastest that linear, log or exp can go there."""
    return float(abs(target_slope(target, elapsed)) * side_s * np.exp(bend * target_level(target, elapsed)))


@kernel
def _detaching_time(pursuit: Any, target: Any, bend: float, side_s: float) -> float:
    """When a target that is followed becomes too fast for linear, log or exp; infinite where it doesn't.

    On an arc, m = −β w falls and m exp(−m) grows while m > 1: the root of m − ln m = −ln C, from above.
    """
    since = pursuit.since
    if target.motion == RAMP:
        slope = target_slope(target, since)
        if bend * slope <= 0.0:
            return np.inf
        left = -np.log(_haste(target, bend, side_s, since)) / (bend * slope)
        return float(since + max(left, 0.0))
    begun = -bend * fading_part(target, since)
    if begun <= 1.0:
        return np.inf
    limit = -np.log(abs(bend) / (target.decay * side_s)) + bend * asymptote(target)
    if limit <= 1.0:
        return np.inf
    m = begun
    for _ in range(_PATIENCE):
        nearer = m - (m - np.log(m) - limit) / (1.0 - 1.0 / m)
        if nearer >= m:
            break
        m = nearer
    return float(since + np.log(begun / m) / target.decay)


@inlined
def _bend(slew: Any) -> float:
    if slew.law == LOG:
        return float(slew.bend)
    return -slew.bend if slew.law == EXP else 0.0


@kernel
def _follow(pursuit: Any, slew: Any, target: Any) -> None:
    pursuit.mode = FOLLOW
    side_s = _side_time(slew, target.heading)
    if target.heading != 0.0 and side_s > 0.0:
        at = _detaching_time(pursuit, target, _bend(slew), side_s)
        pursuit.until = min(pursuit.until, at)


@kernel
def _meet(pursuit: Any, slew: Any, target: Any) -> None:
    """Go on from a moment at which the output is at its moving target."""
    heading = target.heading
    side_s = _side_time(slew, heading)
    by_rate = slew.law != RC and slew.law != SOFT
    if side_s == 0.0 or (by_rate and _haste(target, _bend(slew), side_s, pursuit.since) <= 1.0):
        _follow(pursuit, slew, target)
    else:
        _depart(pursuit, slew, target, heading, 0.0)


@kernel
def _depart(pursuit: Any, slew: Any, target: Any, side: float, short: float) -> None:
    """Begin a stretch towards ``side``, ``short`` of its moving target (0: at it, but too slow for it)."""
    pursuit.side = side
    pursuit.side_s = _side_time(slew, side)
    pursuit.origin = target_level(target, pursuit.since) - short
    if slew.law == RC:
        _relax(pursuit, target, short)
    elif slew.law == SOFT:
        pursuit.knee = slew.knee
        pursuit.mode = PIECE
        take_piece(pursuit, target, short, True)
    else:
        pursuit.mode = MOVE
        pursuit.bend = _bend(slew)
        pursuit.pace = side * np.exp(-pursuit.bend * pursuit.origin) / pursuit.side_s
        pursuit.until = min(pursuit.until, _meeting_time(pursuit, target, short == 0.0))


@kernel
def _relax(pursuit: Any, target: Any, short: float) -> None:
    """Begin an `rc` stretch; it ends where the sign of e changes, and there the output turns."""
    rate = 1.0 / pursuit.side_s
    slope = target_slope(target, pursuit.since)
    gap = rate - target.decay if target.motion == ARC else rate
    if pursuit.side != target.heading:
        wait = (
            np.log1p(-gap * short / slope) / gap if abs(gap * short) > 1e-9 * abs(slope) else -short / slope
        )
        pursuit.until = min(pursuit.until, pursuit.since + wait) if wait >= 0.0 else pursuit.until
    pursuit.pace = rate
    pursuit.mode = RELAX
    pursuit.share = 0.0
    pursuit.offset = 0.0
    pursuit.span = 0.0
    left = target.duration - pursuit.since
    if target.motion == RAMP and left * rate < _BRIEF:
        # s T is then huge and its difference from e0 − s T rounds; the exponential is a cubic to 1e-13.
        pursuit.mode = PIECE
        pursuit.span = left
        pursuit.rest = short
        pursuit.pace = left * (slope - short * rate)
        pursuit.share = -0.5 * pursuit.pace * (left * rate)
        pursuit.cubic = pursuit.pace * (left * rate) ** 2 / 6.0
    elif target.motion == RAMP:
        pursuit.span = slope * pursuit.side_s
        pursuit.rest = short - pursuit.span
    elif abs(gap) > _RESONANT * max(rate, target.decay):
        pursuit.share = -target.decay / gap
        pursuit.offset = asymptote(target)
        pursuit.rest = short - pursuit.share * fading_part(target, pursuit.since)
    else:
        pursuit.mode = RESONATE
        pursuit.rest = short
        pursuit.share = slope
        pursuit.offset = 0.5 * (rate + target.decay)
        pursuit.cubic = gap * gap / 24.0


@kernel
def pursue(pursuit: Any, slew: Any, target: Any, elapsed: float, output: float) -> None:
    """Begin to pursue ``target`` from ``output``, ``elapsed`` seconds after the target began.

    ``slew`` is a `SLEW` record whose law is linear, rc, log, exp or soft, by rate.
    """
    pursuit.since = elapsed
    pursuit.until = target.duration
    pursuit.before = output
    pursuit.mode = FOLLOW
    pursuit.meets = 1
    if elapsed >= target.duration:
        return
    if target.motion == HOLD:
        glide_begin(pursuit.glide, slew, output, target.begin)
        if pursuit.glide.law != HELD:
            pursuit.mode = GLIDING
            pursuit.until = min(elapsed + pursuit.glide.lasts, target.duration)
        return
    short = target_level(target, elapsed) - output
    side = np.sign(short)
    if abs(short) > SETTLED and _side_time(slew, side) > 0.0:
        _depart(pursuit, slew, target, side, short)
    else:
        _meet(pursuit, slew, target)


@kernel
def pursue_on(pursuit: Any, slew: Any, target: Any) -> None:
    """Go on to the next stretch, at ``until``, where the target has not ended yet."""
    since = pursuit.until
    mode, meets = pursuit.mode, pursuit.meets
    pursuit.before = pursued_level(pursuit, target, since, target_level(target, since))
    short = piece_at(pursuit, 1.0)
    pursuit.since = since
    pursuit.until = target.duration
    pursuit.meets = 1
    if mode == FOLLOW:
        _depart(pursuit, slew, target, target.heading, 0.0)
    elif mode == PIECE and not meets:
        take_piece(pursuit, target, short, False)
    elif mode == GLIDING or (mode == MOVE and pursuit.side == target.heading):
        _follow(pursuit, slew, target)
    else:
        _meet(pursuit, slew, target)


@inlined
def _held_to_side(pursuit: Any, level: float, short: float) -> float:
    """The output for a distance e, which no error may carry beyond the target, nor back beyond the origin."""
    output = level - short
    if pursuit.side > 0.0:
        return float(min(max(output, pursuit.origin), level))
    return float(max(min(output, pursuit.origin), level))


@inlined
def _moving(pursuit: Any, t: float, level: float) -> float:
    moved = pursuit.pace * t
    if pursuit.bend != 0.0:
        moved = np.log1p(pursuit.bend * moved) / pursuit.bend
    output = pursuit.origin + moved
    return float(min(output, level) if pursuit.side > 0.0 else max(output, level))


@inlined
def _relaxing(pursuit: Any, t: float, level: float) -> float:
    short = pursuit.rest * fade(pursuit.pace * t) + pursuit.span + pursuit.share * (level - pursuit.offset)
    return _held_to_side(pursuit, level, short)


@inlined
def _resonating(pursuit: Any, t: float, level: float) -> float:
    driven = pursuit.share * t * (1.0 + pursuit.cubic * (t * t)) * fade(pursuit.offset * t)
    return _held_to_side(pursuit, level, pursuit.rest * fade(pursuit.pace * t) + driven)


@inlined
def _landing(pursuit: Any, t: float, level: float) -> float:
    return _held_to_side(pursuit, level, piece_at(pursuit, t / pursuit.span))


@inlined
def pursued_level(pursuit: Any, target: Any, elapsed: float, level: float) -> float:
    """The output ``elapsed`` seconds after the target began, at ``level`` then, in the stretch in hand."""
    t = elapsed - pursuit.since
    if t <= 0.0:
        return float(pursuit.before)
    if pursuit.mode == GLIDING:
        return glide_volts(pursuit.glide, t)
    if pursuit.mode == MOVE:
        return _moving(pursuit, t, level)
    if pursuit.mode == RELAX:
        return _relaxing(pursuit, t, level)
    if pursuit.mode == RESONATE:
        return _resonating(pursuit, t, level)
    if pursuit.mode == PIECE:
        return _landing(pursuit, t, level)
    return level


@vector_kernel
def _fill_output(pursuit: Any, count: float, fraction: float, step: float, levels: Any, outputs: Any) -> None:
    since = pursuit.since
    if pursuit.mode == MOVE:
        for i in range(levels.size):
            outputs[i] = _moving(pursuit, ((count + i) - fraction) * step - since, levels[i])
    elif pursuit.mode == RELAX:
        for i in range(levels.size):
            outputs[i] = _relaxing(pursuit, ((count + i) - fraction) * step - since, levels[i])
    elif pursuit.mode == RESONATE:
        for i in range(levels.size):
            outputs[i] = _resonating(pursuit, ((count + i) - fraction) * step - since, levels[i])
    elif pursuit.mode == PIECE:
        for i in range(levels.size):
            outputs[i] = _landing(pursuit, ((count + i) - fraction) * step - since, levels[i])
    elif pursuit.mode == GLIDING:
        for i in range(levels.size):
            outputs[i] = glide_volts(pursuit.glide, ((count + i) - fraction) * step - since)
    else:
        for i in range(levels.size):
            outputs[i] = levels[i]


@kernel
def fill_pursuit(
    pursuit: Any, target: Any, count: int, fraction: float, step: float, levels: Any, outputs: Any
) -> None:
    """Fill ``levels`` and ``outputs`` (n,) with target and output at evenly spaced instants of one stretch.

    Instant i is ``count + i - fraction`` steps of ``step`` seconds after the target began. The result at an
    instant has the bits of `target_level` and `pursued_level`, whatever run it is asked in.
    """
    fill_target(target, float(count), fraction, step, levels)
    _fill_output(pursuit, float(count), fraction, step, levels, outputs)
    if levels.size and (float(count) - fraction) * step <= pursuit.since:
        outputs[0] = pursuit.before
