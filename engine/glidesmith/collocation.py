"""The `soft` law on a moving target, by collocation.

The distance e = x − y obeys e' = x' − tanh(e/c)/T, which has no closed form while x fades exponentially, and
is stiff where c T is short. It is solved in pieces. Each piece is a cubic that satisfies the equation at the
nodes of the Radau IIA method of order 5 (Hairer and Wanner, Solving Ordinary Differential Equations II,
IV.5), which is stable however stiff it gets; three unknowns, by Newton's method.

How long a piece may be follows from a bound on its error, not from a guess. A cubic P leaves a defect
d = P' − x' + tanh(P/c)/T, so it answers exactly to a target that is off by the integral of d; and two targets
that differ by at most D give outputs that differ by at most D, since y' grows with x − y. In a stiff landing,
where any deviation dies out at the rate g = 1/(c T cosh²(e/c)), the bound is d/g.
"""

from typing import Any

import numpy as np

from glidesmith.compiled import inlined, kernel
from glidesmith.target import target_slope

_TOLERANCE = 2e-8
_SOLVED = 1e-9
_ITERATIONS = 12

_NODE_1 = (4.0 - 6.0**0.5) / 10.0
_NODE_2 = (4.0 + 6.0**0.5) / 10.0

_LOBE = 0.06779
"""Integral of abs((p − n1)(p − n2)(p − 1))/(n1 n2) from 0 to n1: what a defect of 1 at 0 adds up to."""

_BETWEEN = 0.42
_LOBES_BETWEEN = 3.0
"""Where the defect of a stiff piece, which is then small at the start too, is near its largest; and what part
of it adds up at most, as a divisor."""


def _differentiation() -> tuple[float, ...]:
    """Row by row, the derivatives at the nodes of the cubic that is 0 at 0, from its values at the nodes."""
    nodes = np.array([_NODE_1, _NODE_2, 1.0])[:, None]
    powers = np.arange(1, 4)
    rows = powers * nodes ** (powers - 1) @ np.linalg.inv(nodes**powers)
    return tuple(float(entry) for entry in rows.ravel())


_D11, _D12, _D13, _D21, _D22, _D23, _D31, _D32, _D33 = _differentiation()


@inlined
def piece_at(pursuit: Any, p: float) -> float:
    """The distance e of the piece in hand, at the part p of its length."""
    return float(pursuit.rest + p * (pursuit.pace + p * (pursuit.share + p * pursuit.cubic)))


@inlined
def _defect(pursuit: Any, target: Any, p: float) -> float:
    """What the piece in hand leaves over of its equation, at the part p of its length and per length."""
    slope = pursuit.pace + p * (2.0 * pursuit.share + p * (3.0 * pursuit.cubic))
    pull = np.tanh(piece_at(pursuit, p) / pursuit.knee) / pursuit.side_s
    return float(slope - pursuit.span * (target_slope(target, pursuit.since + p * pursuit.span) - pull))


@inlined
def _set_piece(pursuit: Any, step: float, short: float, a: float, b: float, c: float) -> None:
    """The cubic that is ``short`` at 0 and changes by a, b and c at the nodes (divided differences)."""
    q1, q2 = a / _NODE_1, b / _NODE_2
    d12, d23 = (q2 - q1) / (_NODE_2 - _NODE_1), (c - q2) / (1.0 - _NODE_2)
    d123 = (d23 - d12) / (1.0 - _NODE_1)
    pursuit.span = step
    pursuit.rest = short
    pursuit.cubic = d123
    pursuit.share = d12 - d123 * (_NODE_1 + _NODE_2)
    pursuit.pace = q1 - d12 * _NODE_1 + d123 * (_NODE_1 * _NODE_2)


@kernel
def _solve_piece(pursuit: Any, target: Any, short: float, step: float) -> float:
    """Set a piece of ``step`` seconds that begins at the distance ``short``; returns the bound on its error.

    Infinite where Newton's method did not converge: the piece is then a straight line.
    """
    since, knee = pursuit.since, pursuit.knee
    rate = step / pursuit.side_s
    pull = np.tanh(short / knee)
    grip = rate / knee * (1.0 - pull * pull)
    force = step * target_slope(target, since) - rate * pull
    s1 = step * target_slope(target, since + _NODE_1 * step)
    s2 = step * target_slope(target, since + _NODE_2 * step)
    s3 = step * target_slope(target, since + step)
    c = force / (1.0 + grip)
    a, b = _NODE_1 * c, _NODE_2 * c
    _set_piece(pursuit, step, short, a, b, c)
    for _ in range(_ITERATIONS):
        pull_1, pull_2 = np.tanh((short + a) / knee), np.tanh((short + b) / knee)
        pull_3 = np.tanh((short + c) / knee)
        grip_1, grip_2 = rate / knee * (1.0 - pull_1 * pull_1), rate / knee * (1.0 - pull_2 * pull_2)
        grip_3 = rate / knee * (1.0 - pull_3 * pull_3)
        r1 = _D11 * a + _D12 * b + _D13 * c - s1 + rate * pull_1
        r2 = _D21 * a + _D22 * b + _D23 * c - s2 + rate * pull_2
        r3 = _D31 * a + _D32 * b + _D33 * c - s3 + rate * pull_3
        # Gauss's elimination; what the landing adds to the diagonal only makes the pivots larger.
        j11, m2, m3 = _D11 + grip_1, _D21 / (_D11 + grip_1), _D31 / (_D11 + grip_1)
        j22, j23, r2 = _D22 + grip_2 - m2 * _D12, _D23 - m2 * _D13, r2 - m2 * r1
        m32 = (_D32 - m3 * _D12) / j22
        dc = (r3 - m3 * r1 - m32 * r2) / (_D33 + grip_3 - m3 * _D13 - m32 * j23)
        db = (r2 - j23 * dc) / j22
        da = (r1 - _D12 * db - _D13 * dc) / j11
        a, b, c = a - da, b - db, c - dc
        if max(abs(da), abs(db), abs(dc)) < _SOLVED:
            _set_piece(pursuit, step, short, a, b, c)
            least_grip = min(grip, grip_1, grip_2, grip_3)
            at_start = abs(pursuit.pace - force) * _LOBE / (1.0 + least_grip)
            between = abs(_defect(pursuit, target, _BETWEEN)) / (_LOBES_BETWEEN + least_grip)
            return float(max(at_start, between))
    return np.inf


@kernel
def _crossing(pursuit: Any) -> float:
    """Where in the piece in hand e changes its sign, from 0 to 1."""
    low, high = 0.0, 1.0
    for _ in range(53):
        middle = 0.5 * (low + high)
        if piece_at(pursuit, middle) * pursuit.side > 0.0:
            low = middle
        else:
            high = middle
    return high


@kernel
def take_piece(pursuit: Any, target: Any, short: float, is_first: bool) -> None:
    """Begin the next piece at ``since``, as long as its error allows; it ends early where e changes its sign.

    ``offset`` holds the length to try. The first is a part of the shortest time in which anything can happen.
    """
    left = target.duration - pursuit.since
    step = pursuit.offset
    if is_first:
        fastest = abs(target_slope(target, pursuit.since)) + 1.0 / pursuit.side_s
        step = 0.3 * (pursuit.knee + abs(short)) / fastest
    shortest = max(4e-16 * pursuit.since, 1e-6 * min(pursuit.knee * pursuit.side_s, target.duration))
    while True:
        step = min(max(step, shortest), left)
        error = _solve_piece(pursuit, target, short, step)
        growth = 0.9 * np.sqrt(np.sqrt(_TOLERANCE / max(error, 1e-12)))
        if error <= _TOLERANCE or step <= shortest:
            break
        step *= max(growth, 0.2)
    pursuit.meets = 0
    pursuit.offset = step * min(growth, 8.0)
    pursuit.until = target.duration if step >= left else pursuit.since + step
    if pursuit.side != target.heading and piece_at(pursuit, 1.0) * pursuit.side < 0.0:
        pursuit.meets = 1
        pursuit.until = min(pursuit.until, pursuit.since + step * _crossing(pursuit))
