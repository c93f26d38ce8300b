"""The slew stage: seven laws by which an output follows its target, each in closed form.

``x`` is the target, ``y`` the output, ``T`` the time of the side in use: ``rise`` while x > y, ``fall`` while
x < y.

=========  ==========================  ==================================================================
law        y'                          the output at time t after the glide began at y0
=========  ==========================  ==================================================================
linear     ±1/T                        y0 ± t/T
rc         (x − y)/T                   x + (y0 − x) exp(−t/T)
log        ±exp(−b y)/T                ln(exp(b y0) ± b t/T)/b
exp        ±exp(+b y)/T                −ln(exp(−b y0) ∓ b t/T)/b
soft       ±tanh(abs(x − y)/c)/T       x − c asinh(sinh((x − y0)/c) exp(−t/(c T)))
curve      by progress p = t/D         y0 + (x − y0)(1 − exp(−k p))/(1 − exp(−k))
cosine     by progress p = t/D         y0 + (x − y0)(1 − cos(π p))/2
=========  ==========================  ==================================================================

A *glide* is one stretch of constant target. It is held as a record (`GLIDE`) with what the closed form needs,
and the output at any moment is computed from the glide's own start, never from the sample before. So neither
the sample rate nor the size of the blocks leaves a trace in the result, and errors do not add up. `rc` is the
charging of a capacitor through a resistor; `soft` is the differential pair's hyperbolic tangent (a
transconductor into a capacitor); `log` and `exp` are circuits whose output is fed back to their own rate.
"""

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.compiled import inlined, kernel, vector_kernel
from glidesmith.elementary import exp2
from glidesmith.errors import SettingError
from glidesmith.units import parse_time

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

LAWS = ("linear", "rc", "log", "exp", "soft", "curve", "cosine")
TIMINGS = ("rate", "fixed")
LINEAR, RC, LOG, EXP, SOFT, CURVE, COSINE = range(7)
RATE, FIXED = range(2)
HELD = -1
"""The law of a glide that has nothing to do: the output is at its target."""

SETTLED = 1e-15
"""An `rc` or `soft` glide is over when it is this close.

Under the resolution of a double near 5 V, and far from denormal numbers.
"""

_STRETCH = 64
_HIGHEST_VOLTS = 1e6
_LOG2_E = 1.4426950408889634
_LN_2 = 0.6931471805599453
_HALF_PI = 1.5707963267948966

SLEW = np.dtype(
    [
        ("law", np.int64),
        ("timing", np.int64),
        ("rise", np.float64),
        ("fall", np.float64),
        ("bend", np.float64),
        ("knee", np.float64),
        ("curvature", np.float64),
    ],
    align=True,
)
"""The settings of one slew. Times in seconds (see `Slew`), bend per volt, knee in volts."""

GLIDE = np.dtype(
    [
        ("law", np.int64),
        ("timed", np.int64),
        ("origin", np.float64),
        ("target", np.float64),
        ("lasts", np.float64),
        ("interval", np.float64),
        ("share", np.float64),
        ("pace", np.float64),
        ("shape", np.float64),
        ("depth", np.float64),
    ],
    align=True,
)
"""One glide from ``origin`` to ``target``, both in volts, over after ``lasts`` seconds.

``interval`` is the distance, in volts, that the glide had when it began, and ``share`` the part of the whole
duration that was left to it (1 unless its settings changed on the way). ``pace``, ``shape`` and ``depth`` are
the law's own constants:

======  ===========================  ==================  =============================
law     pace                         shape               depth
======  ===========================  ==================  =============================
linear  slope, V/s                   –                   –
rc      1/T, 1/s                     –                   x − y0, V
log     rate at the origin, V/s      ±b (− for `exp`)    –
soft    1/(c T), 1/s                 ±c, V               ln sinh(abs(x − y0)/c)
curve   1/D, 1/s                     k                   (x − y0)/(exp(−k) − 1), V
cosine  1/D, 1/s                     –                   x − y0, V
======  ===========================  ==================  =============================
"""


@inlined
def _log_sinh(z: float) -> float:
    """ln sinh z for z > 0, safe for any size of z."""
    if z < 0.5:
        return np.log(np.sinh(z))
    return z - _LN_2 + np.log1p(-np.exp(-2.0 * z))


@inlined
def _inverse_sinh_of_exp(s: float) -> float:
    """asinh(exp s), safe for any size of s."""
    if s < 0.0:
        return np.arcsinh(np.exp(s))
    return s + np.log1p(np.sqrt(1.0 + np.exp(-2.0 * s)))


@inlined
def _hold(glide: Any, target: float) -> None:
    glide.law = HELD
    glide.timed = 0
    glide.origin = target
    glide.target = target
    glide.lasts = 0.0
    glide.interval = 0.0
    glide.share = 1.0


@kernel
def glide_hold(glide: Any, target: float) -> None:
    """Put the output at ``target`` volts at once: a jump, or a note that does not glide."""
    _hold(glide, target)


@inlined
def _is_timed(slew: Any) -> bool:
    return slew.law == CURVE or slew.law == COSINE or (slew.law == LINEAR and slew.timing == FIXED)


@inlined
def _set_timed(glide: Any, slew: Any, duration: float) -> None:
    """Fill in a glide that lasts a stated time: linear, curve or cosine."""
    span = glide.target - glide.origin
    glide.lasts = duration
    glide.pace = 1.0 / duration
    if slew.law == LINEAR or (slew.law == CURVE and slew.curvature == 0.0):
        glide.law = LINEAR
        glide.pace = span / duration
    elif slew.law == CURVE:
        glide.law = CURVE
        glide.shape = slew.curvature
        glide.depth = span / np.expm1(-slew.curvature)
    else:
        glide.law = COSINE
        glide.depth = span


@inlined
def _set_by_rate(glide: Any, slew: Any, side: float) -> None:
    """Fill in a glide whose rate its law sets: linear, rc, log, exp or soft."""
    span = glide.target - glide.origin
    distance = abs(span)
    glide.law = slew.law
    if slew.law == LINEAR:
        glide.lasts = side * distance
        glide.pace = 1.0 / side if span > 0.0 else -1.0 / side
    elif slew.law == RC:
        glide.pace = 1.0 / side
        glide.depth = span
        glide.lasts = side * np.log(distance / SETTLED) if distance > SETTLED else 0.0
    elif slew.law == SOFT:
        glide.pace = 1.0 / (slew.knee * side)
        glide.shape = slew.knee if span > 0.0 else -slew.knee
        glide.depth = _log_sinh(distance / slew.knee)
        glide.lasts = (
            (glide.depth - _log_sinh(SETTLED / slew.knee)) / glide.pace if distance > SETTLED else 0.0
        )
    else:
        bend = slew.bend if slew.law == LOG else -slew.bend
        rate = np.exp(-bend * glide.origin) / side
        glide.law = LOG
        glide.shape = bend
        glide.pace = rate if span > 0.0 else -rate
        glide.lasts = abs(np.expm1(bend * span) / (bend * rate))


@kernel
def glide_begin(glide: Any, slew: Any, origin: float, target: float) -> None:
    """Begin a glide from ``origin`` to ``target`` volts under the settings ``slew`` (a `SLEW` record)."""
    side = slew.rise if target > origin else slew.fall
    if target == origin or side == 0.0:
        _hold(glide, target)
        return
    glide.origin = origin
    glide.target = target
    glide.interval = abs(target - origin)
    glide.share = 1.0
    if _is_timed(slew):
        glide.timed = 1
        _set_timed(glide, slew, side if slew.timing == FIXED else side * glide.interval)
    else:
        glide.timed = 0
        _set_by_rate(glide, slew, side)
    if not glide.lasts > 0.0:
        _hold(glide, target)


@inlined
def glide_volts(glide: Any, elapsed: float) -> float:
    """The output in volts, ``elapsed`` seconds (≥ 0) after the glide began.

    After its end, exactly the target.
    """
    if elapsed >= glide.lasts:
        return glide.target
    if glide.law == LINEAR:
        return glide.origin + glide.pace * elapsed
    if glide.law == RC:
        return glide.target - glide.depth * exp2(-elapsed * glide.pace * _LOG2_E)
    if glide.law == LOG:
        return glide.origin + np.log1p(glide.shape * glide.pace * elapsed) / glide.shape
    if glide.law == SOFT:
        return glide.target - glide.shape * _inverse_sinh_of_exp(glide.depth - elapsed * glide.pace)
    if glide.law == CURVE:
        return glide.origin + glide.depth * np.expm1(-glide.shape * (elapsed * glide.pace))
    sine = np.sin(_HALF_PI * (elapsed * glide.pace))
    return glide.origin + glide.depth * sine * sine


@inlined
def glide_rate(glide: Any, elapsed: float) -> float:
    """The rate of change in volts a second, ``elapsed`` seconds after the glide began; 0 after its end."""
    if elapsed >= glide.lasts:
        return 0.0
    if glide.law == LINEAR:
        return glide.pace
    if glide.law == RC:
        return glide.depth * glide.pace * exp2(-elapsed * glide.pace * _LOG2_E)
    if glide.law == LOG:
        return glide.pace / (1.0 + glide.shape * glide.pace * elapsed)
    if glide.law == SOFT:
        s = glide.depth - elapsed * glide.pace
        return glide.shape * glide.pace * (1.0 / np.sqrt(1.0 + np.exp(-2.0 * s)) if s > -300.0 else np.exp(s))
    if glide.law == CURVE:
        return -glide.depth * glide.shape * glide.pace * np.exp(-glide.shape * (elapsed * glide.pace))
    return glide.depth * glide.pace * _HALF_PI * np.sin(2.0 * _HALF_PI * (elapsed * glide.pace))


@kernel
def glide_time(glide: Any, volts: float) -> float:
    """Seconds from the glide's start until its output first is at ``volts``: the inverse of `glide_volts`.

    0 where the glide starts at or beyond ``volts`` seen from its direction; infinite where it ends before it.
    """
    done = volts - glide.origin
    whole = glide.target - glide.origin
    if done == 0.0 or done * whole < 0.0 or (whole == 0.0 and done == 0.0):
        return 0.0
    if glide.law == HELD or abs(done) > abs(whole):
        return 0.0 if volts == glide.target else np.inf
    if volts == glide.target:
        return glide.lasts
    if glide.law == LINEAR:
        return done / glide.pace
    if glide.law == RC:
        return min(np.log(glide.depth / (glide.target - volts)) / glide.pace, glide.lasts)
    if glide.law == LOG:
        return min(np.expm1(glide.shape * done) / (glide.shape * glide.pace), glide.lasts)
    if glide.law == SOFT:
        left = _log_sinh(abs((glide.target - volts) / glide.shape))
        return min((glide.depth - left) / glide.pace, glide.lasts)
    if glide.law == CURVE:
        return min(-np.log1p(done / glide.depth) / (glide.shape * glide.pace), glide.lasts)
    return np.arcsin(np.sqrt(done / whole)) / (_HALF_PI * glide.pace)


@kernel
def glide_resettle(glide: Any, slew: Any, elapsed: float) -> None:
    """Go on from the present output under new settings; a timed glide keeps the share of its duration that
    was left.

    ``elapsed`` seconds of the glide are over. A glide that was not timed and becomes so has its whole new
    duration.
    """
    origin = glide_volts(glide, elapsed)
    target, interval = glide.target, glide.interval
    share = glide.share
    if glide.timed:
        share *= max(0.0, 1.0 - elapsed / glide.lasts)
    keeps = glide.timed == 1 and _is_timed(slew)
    glide_begin(glide, slew, origin, target)
    if keeps and glide.law != HELD:
        side = slew.rise if target > origin else slew.fall
        glide.interval = interval
        glide.share = share
        _set_timed(glide, slew, share * (side if slew.timing == FIXED else side * interval))


@vector_kernel
def _fill_linear(glide: Any, count: float, fraction: float, step: float, volts: Any, rates: Any) -> None:
    origin, pace = glide.origin, glide.pace
    for i in range(volts.size):
        volts[i] = origin + pace * (((count + i) - fraction) * step)
        rates[i] = pace


@vector_kernel
def _fill_rc(glide: Any, count: float, fraction: float, step: float, volts: Any, rates: Any) -> None:
    target, depth, pace = glide.target, glide.depth, glide.pace
    for i in range(volts.size):
        short = depth * exp2(-(((count + i) - fraction) * step) * pace * _LOG2_E)
        volts[i] = target - short
        rates[i] = short * pace


@kernel
def fill_glide(glide: Any, count: int, fraction: float, step: float, volts: Any, rates: Any) -> None:
    """Fill ``volts`` and ``rates`` (n,) with the output (V) and its rate of change (V/s) at evenly spaced
    instants.

    Instant i is ``count + i - fraction`` steps of ``step`` seconds after the glide began, all of them before
    its end. The result at an instant has the same bits whatever stretch it is asked in.
    """
    if glide.law == LINEAR:
        _fill_linear(glide, float(count), fraction, step, volts, rates)
    elif glide.law == RC:
        _fill_rc(glide, float(count), fraction, step, volts, rates)
    else:
        for i in range(volts.size):
            elapsed = (float(count + i) - fraction) * step
            volts[i] = glide_volts(glide, elapsed)
            rates[i] = glide_rate(glide, elapsed)


@kernel
def _run_rc(x: Any, y: Any, start: float, rise: Any, fall: Any) -> None:
    """`rc` on any signal. What is carried is the distance e = x − y, so that rounding stays relative to it.

    ``rise`` and ``fall`` are (2,): the factor exp(−dt/T) as a double, and what rounding took from it, which a
    long run would feel and which is made good at each stretch's end. Of the two sides' results the right one
    is always the smaller, or always the larger: the sign of e decides, and both have it.
    """
    y[0] = start
    short = x[0] - start
    last = x.size - 1
    least = rise[0] < fall[0]
    for first in range(0, last, _STRETCH):
        end = min(first + _STRETCH, last)
        if rise[0] == fall[0]:
            for n in range(first, end):
                short *= rise[0]
                y[n + 1] = x[n] - short
                short += x[n + 1] - x[n]
        else:
            for n in range(first, end):
                upward = short * rise[0]
                downward = short * fall[0]
                short = min(upward, downward) if least else max(upward, downward)
                y[n + 1] = x[n] - short
                short += x[n + 1] - x[n]
        short += short * ((end - first) * (rise[1] if short > 0.0 else fall[1]))
        if abs(short) < SETTLED:
            short = 0.0


@kernel
def _run_glides(x: Any, y: Any, start: float, slew: Any, glide: Any, step: float) -> None:
    """Any law on any signal.

    Each stretch of equal samples is one glide, evaluated from the stretch's start.
    """
    y[0] = start
    n = 0
    last = x.size - 1
    while n < last:
        glide_begin(glide, slew, y[n], x[n])
        end = n + 1
        while end < last and x[end] == x[n]:
            end += 1
        for i in range(n + 1, end + 1):
            y[i] = glide_volts(glide, (i - n) * step)
        n = end


def _decay(sample_rate: float, side: float) -> "NDArray[np.float64]":
    """exp(−dt/T) as the double next to it, and what the rounding took from it."""
    lost = -np.expm1(-1.0 / (sample_rate * side)) if side else 1.0
    factor = 1.0 - lost
    return np.array([factor, (1.0 - factor) - lost])


@kernel
def _moves_twice(x: Any) -> int:
    """The first index at which ``x`` changes for the second sample in a row; -1 where it never does."""
    for n in range(2, x.size):
        if x[n] != x[n - 1] and x[n - 1] != x[n - 2]:
            return n
    return -1


def _check_number(name: str, value: object, low: float, high: float, unit: str) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float, np.floating, np.integer)):
        raise SettingError(f"{name} = {value!r}: give a number, {low:g} to {high:g}{unit}")
    if not low <= value <= high:
        raise SettingError(f"{name} = {value!r} is out of range: {low:g} to {high:g}{unit}")
    return float(value)


def _check_time(name: str, value: object) -> float:
    if isinstance(value, str):
        value = parse_time(value)
    seconds = _check_number(name, value, 0.0, 60.0, " s")
    if 0.0 < seconds < 1e-6:
        raise SettingError(f"{name} = {value!r} is out of range: 0, or 1e-6 to 60 s")
    return seconds


@dataclass(frozen=True)
class Slew:
    """A slew: how an output follows its target.

    Parameters
    ----------
    law : {"linear", "rc", "log", "exp", "soft", "curve", "cosine"}
        The law; the table at the top of this module gives its formula.
    rise, fall : float or str
        The side's T: seconds, or a string with a unit ("80 ms"); 0 (immediate), or 1e-6 to 60 s. Seconds per
        volt for ``linear``; the time constant, in which 63.2 % of the way is done, for ``rc``; seconds per
        volt at 0 V for ``log`` and ``exp``, per volt far off for ``soft``; for ``curve`` and ``cosine`` as
        ``timing`` says.
    bend : float
        Per volt, 0.01 to 10: how much the rate of ``log`` and ``exp`` depends on the output.
    knee : float
        Volts, 0.001 to 2: the distance at which ``soft`` turns into an exponential landing.
    curvature : float
        -20 to 20, for ``curve``: above 0 starts fast, 0 is straight.
    timing : {"rate", "fixed"}, optional
        ``rate``: T is seconds per volt. ``fixed``: a glide lasts T whatever its interval. ``linear`` offers
        both (default ``rate``), ``curve`` and ``cosine`` too (default ``fixed``).

    Raises
    ------
    SettingError
        For a value out of range, and for ``fixed`` timing of a law whose rate is set by its output.
    """

    law: str
    rise: float
    fall: float
    bend: float = 1.0
    knee: float = 0.1
    curvature: float = 0.0
    timing: str | None = None

    def __post_init__(self) -> None:
        if self.law not in LAWS:
            raise SettingError(f"law = {self.law!r}: choose one of {', '.join(LAWS)}")
        timing = self.timing or ("fixed" if self.law in ("curve", "cosine") else "rate")
        if timing not in TIMINGS:
            raise SettingError(f"timing = {self.timing!r}: choose one of {', '.join(TIMINGS)}")
        if timing == "fixed" and self.law in ("rc", "log", "exp", "soft"):
            raise SettingError(
                f"timing = 'fixed' does not go with law = {self.law!r}: its rate follows from where the "
                "output is, so the duration can't be set; choose linear, curve or cosine"
            )
        checked = {
            "rise": _check_time("rise", self.rise),
            "fall": _check_time("fall", self.fall),
            "bend": _check_number("bend", self.bend, 0.01, 10.0, " per volt"),
            "knee": _check_number("knee", self.knee, 0.001, 2.0, " V"),
            "curvature": _check_number("curvature", self.curvature, -20.0, 20.0, ""),
            "timing": timing,
        }
        for name, value in checked.items():
            object.__setattr__(self, name, value)

    @property
    def is_timed(self) -> bool:
        """Whether a glide has a duration of its own, and so has no meaning for a target that keeps moving."""
        return self.law in ("curve", "cosine") or self.timing == "fixed"

    def record(self) -> "NDArray[Any]":
        """The settings as a `SLEW` array of shape (1,), as compiled code reads them."""
        assert self.timing is not None
        row = (
            LAWS.index(self.law),
            TIMINGS.index(self.timing),
            self.rise,
            self.fall,
            self.bend,
            self.knee,
            self.curvature,
        )
        return np.array([row], dtype=SLEW)

    def run(self, x: "ArrayLike", sample_rate: float, start: float = 0.0) -> "NDArray[np.float64]":
        """Slew a signal.

        Parameters
        ----------
        x : array_like (n,)
            The target in volts (or full levels, for a gate); ``x[n]`` holds from n/``sample_rate`` to the
            next sample.
        sample_rate : float
            Samples a second, above 0.
        start : float
            The output, in volts, at the first sample.

        Returns
        -------
        y : float64 (n,)
            The output in volts at n/``sample_rate``; ``y[0] == start``. Within 1e-9 V of the law's closed
            form.

        Raises
        ------
        SettingError
            Where ``x`` is not a row of numbers within ±1e6, and where a timed law meets a target that moves,
            that is, changes on two samples in a row.
        """
        try:
            signal = np.ascontiguousarray(x, dtype=np.float64)
        except (TypeError, ValueError):
            raise SettingError(f"x is no row of numbers ({type(x).__name__}): give target volts") from None
        if signal.ndim != 1:
            raise SettingError(f"x has the shape {signal.shape}: give one row of target volts")
        if not (np.isfinite(sample_rate) and sample_rate > 0):
            raise SettingError(f"sample_rate = {sample_rate!r}: give samples a second, above 0")
        if not abs(start) <= _HIGHEST_VOLTS:
            raise SettingError(f"start = {start!r}: give volts within ±{_HIGHEST_VOLTS:g}")
        outside = np.flatnonzero(~(np.abs(signal) <= _HIGHEST_VOLTS))
        if outside.size:
            at, value = int(outside[0]), float(signal[outside[0]])
            raise SettingError(f"x[{at}] = {value!r}: give volts within ±{_HIGHEST_VOLTS:g}")
        y = np.empty_like(signal)
        if signal.size:
            self._fill(signal, y, float(sample_rate), float(start))
        return y

    def _fill(
        self, signal: "NDArray[np.float64]", y: "NDArray[np.float64]", sample_rate: float, start: float
    ) -> None:
        if self.law == "rc":
            _run_rc(signal, y, start, _decay(sample_rate, self.rise), _decay(sample_rate, self.fall))
            return
        if self.is_timed:
            at = _moves_twice(signal)
            if at >= 0:
                raise SettingError(
                    f"x changes on two samples in a row (samples {at - 1} and {at}): a timed glide "
                    f"({self.law}, timing {self.timing!r}) starts afresh at each change and never gets on "
                    "with a target that moves; choose linear with timing 'rate', rc, log, exp or soft"
                )
        _run_glides(signal, y, start, self.record()[0], np.zeros(1, GLIDE)[0], 1.0 / sample_rate)
