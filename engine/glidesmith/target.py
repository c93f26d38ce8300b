"""A moving target: one stage of an envelope, as the slew behind it sees it.

Its level holds, moves on a straight line (``RAMP``), or moves as the curve law with k = 5 does (``ARC``):

    x = a + (b − a) (1 − exp(−k p))/(1 − exp(−k)) = b + w(t) − w(D),    p = t/D,
    w = (a − b) exp(−k p)/(1 − exp(−k)),

where w is the part that fades, at a rate of k/D. Levels run from 0 to 1.
"""

from typing import Any

import numpy as np

from glidesmith.compiled import inlined, kernel, vector_kernel
from glidesmith.elementary import exp2
from glidesmith.slew import SETTLED

HOLD, RAMP, ARC = range(3)
"""How a target moves."""

TARGET = np.dtype(
    [
        ("motion", np.int64),
        ("begin", np.float64),
        ("end", np.float64),
        ("duration", np.float64),
        ("heading", np.float64),
        ("swing", np.float64),
        ("decay", np.float64),
    ],
    align=True,
)
"""A target's level from ``begin`` to ``end`` in ``duration`` seconds, then gone.

``heading``: 1 up, −1 down, 0 held. ``swing``: w at the start; ``decay``: k/D, 1/s.
"""

_CURVATURE = 5.0
_LEFT_OVER = float(np.exp(-_CURVATURE))
_LOG2_E = 1.4426950408889634
_FADED = 200.0
_SHORTEST = 1e-18


@inlined
def fade(z: float) -> float:
    """exp(−z) for z ≥ 0; from 200 on it stays at 1e-87, so that products with it are never denormal."""
    return exp2(-min(z, _FADED) * _LOG2_E)


@kernel
def target_begin(target: Any, motion: int, begin: float, end: float, duration: float) -> None:
    """Set a target that moves from ``begin`` to ``end`` in ``duration`` seconds.

    An infinite duration holds for good. One under 1e-18 s is a jump, and a way under 1e-15 is no way.
    """
    target.motion = motion if abs(end - begin) > SETTLED else HOLD
    target.begin = begin
    target.end = end
    target.duration = duration if duration > _SHORTEST else 0.0
    target.heading = 0.0 if target.motion == HOLD else np.sign(end - begin)
    target.swing = (begin - end) / (1.0 - _LEFT_OVER)
    target.decay = _CURVATURE / target.duration if target.duration > 0.0 else 0.0


@inlined
def _ramp_level(target: Any, elapsed: float) -> float:
    left = 1.0 - min(max(elapsed / target.duration, 0.0), 1.0)
    return float(target.end + (target.begin - target.end) * left)


@inlined
def _arc_level(target: Any, elapsed: float) -> float:
    faded = fade(min(max(elapsed * target.decay, 0.0), _CURVATURE))
    return float(target.end + target.swing * max(faded - _LEFT_OVER, 0.0))


@inlined
def target_level(target: Any, elapsed: float) -> float:
    """The level ``elapsed`` seconds after the target began. A target without duration has not jumped yet."""
    if target.motion == RAMP and target.duration > 0.0:
        return _ramp_level(target, elapsed)
    if target.motion == ARC and target.duration > 0.0:
        return _arc_level(target, elapsed)
    return float(target.begin)


@inlined
def fading_part(target: Any, elapsed: float) -> float:
    """The part w of an `ARC` that fades."""
    return float(target.swing * fade(elapsed * target.decay))


@inlined
def asymptote(target: Any) -> float:
    """The level that an `ARC` would fade to in the end."""
    return float(target.end - target.swing * _LEFT_OVER)


@inlined
def target_slope(target: Any, elapsed: float) -> float:
    """The rate of change, in 1/s."""
    if target.motion == RAMP:
        return float((target.end - target.begin) / target.duration)
    if target.motion == ARC:
        return float(-target.decay * fading_part(target, elapsed))
    return 0.0


@inlined
def way_left(motion: int, share: float) -> float:
    """The part of its way that a target still has to go when ``share`` of its duration is over."""
    if motion == ARC:
        return float((np.exp(-_CURVATURE * share) - _LEFT_OVER) / (1.0 - _LEFT_OVER))
    return 1.0 - share


@vector_kernel
def fill_target(target: Any, count: float, fraction: float, step: float, levels: Any) -> None:
    """Fill ``levels`` (n,) at instants i: ``count + i - fraction`` steps of ``step`` s after the start."""
    if target.motion == RAMP:
        for i in range(levels.size):
            levels[i] = _ramp_level(target, ((count + i) - fraction) * step)
    elif target.motion == ARC:
        for i in range(levels.size):
            levels[i] = _arc_level(target, ((count + i) - fraction) * step)
    else:
        for i in range(levels.size):
            levels[i] = target.begin
