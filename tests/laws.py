"""The laws as DESIGN prints them, written down once more for tests: nothing here uses the engine."""

import math

import numpy as np
from scipy.integrate import solve_ivp


def printed_volts(slew, origin, target):
    """The output as a function of seconds since the glide began; ``slew`` is a preset's table."""
    span = target - origin
    side = slew["rise"] if span > 0 else slew["fall"]
    sign, distance = math.copysign(1.0, span), abs(span)
    law, fixed = slew["law"], slew.get("timing") == "fixed"
    if law == "rc":
        return lambda t: target - span * np.exp(-t / side)
    if law == "soft":
        c = slew.get("knee", 0.1)
        return lambda t: target - c * np.arcsinh(np.sinh(span / c) * np.exp(-t / (c * side)))
    if law in ("log", "exp"):
        b = slew.get("bend", 1.0) * (1.0 if law == "log" else -1.0)
        lasts = abs(math.exp(b * target) - math.exp(b * origin)) / abs(b) * side
        return lambda t: np.log(math.exp(b * origin) + sign * b * np.minimum(t, lasts) / side) / b
    lasts = side if fixed or (law != "linear" and slew.get("timing") != "rate") else side * distance
    if law == "linear":
        return lambda t: origin + span * np.minimum(t / lasts, 1.0)
    if law == "curve":
        k = slew.get("curvature", 0.0)
        return lambda t: origin + span * np.expm1(-k * np.minimum(t / lasts, 1.0)) / np.expm1(-k)
    return lambda t: origin + span * (1.0 - np.cos(np.pi * np.minimum(t / lasts, 1.0))) / 2.0


def printed_rate(slew, x, y):
    """y' in volts a second, for the laws that have one: linear by rate, rc, log, exp and soft."""
    short = x - y
    side = slew["rise"] if short > 0 else slew["fall"]
    law, b = slew["law"], slew.get("bend", 1.0)
    if law == "rc":
        return short / side
    if law == "soft":
        return math.tanh(short / slew.get("knee", 0.1)) / side
    pace = {"linear": 1.0, "log": math.exp(-b * y), "exp": math.exp(b * y)}[law]
    # A whole step is never shorter than this, so that the output is not thrown to and fro about its target.
    return pace / side * max(-1.0, min(1.0, short / 1e-9))


def solved_stretch(slope, begin, end, y, times):
    """``solve_ivp`` at its tightest on one stretch without a kink."""
    with np.errstate(divide="ignore"):  # its step control divides by an error of exactly 0
        return solve_ivp(slope, (begin, end), [y], "Radau", times, rtol=1e-10, atol=1e-12)


def solved_volts(slew, changes, times):
    """``solve_ivp`` through targets that change: ``changes`` are (seconds, volts), first where it starts.

    Stretch by stretch, so that no step crosses a change; returns the output at ``times``, in order.
    """
    y, outputs = changes[0][1], []
    ends = [t for t, _ in changes[1:]] + [max(times) + 1.0]
    for (begin, x), end in zip(changes, ends, strict=True):
        inside = [t for t in times if begin < t <= end] + ([0.0] if begin == 0.0 and times[0] == 0.0 else [])
        wanted = sorted({*inside, end})
        solved = solved_stretch(lambda _, v: [printed_rate(slew, x, v[0])], begin, end, y, wanted)  # noqa: B023
        outputs += [v for t, v in zip(wanted, solved.y[0], strict=True) if t in inside]
        y = solved.y[0][-1]
    return np.array(outputs)
