"""The envelope: what a gate makes of itself before the gain slew, and the slewed control that follows it.

    gate events ─► level × attack, decay, sustain, release ─► x ─► gain slew ─► y

Attack goes from the present level to the gate's in exactly ``attack`` seconds, decay from there to
``sustain`` times it in exactly ``decay``, release from the present level to 0 in exactly ``release``:
straight, or as the curve law with k = 5 does (shape ``rc``). A stage of no length is a jump. The output
starts from wherever it is, so a note played into the release of the one before makes no click.

The *walk* is all that is carried through time: the stage and since when, the target it makes (`TARGET`) and
the slewed output's pursuit of it (`PURSUIT`). Stages begin at events or at the end of the stage before them,
never at samples; every value is computed from there.
"""

from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.compiled import inlined, kernel
from glidesmith.errors import SettingError
from glidesmith.pursuit import PURSUIT, fill_pursuit, pursue, pursue_on, pursued_level
from glidesmith.target import ARC, HOLD, RAMP, TARGET, target_begin, target_level, way_left

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from glidesmith.preset import Envelope

SHAPES = ("linear", "rc")
LINEAR_SHAPE, RC_SHAPE = range(2)
IDLE, ATTACK, DECAY, SUSTAIN, RELEASE = range(5)
"""The stages of a walk."""

_ALL_BUT_OVER = 1e-9
"""A stage with less than this part of its way left is over when settings change."""

_TIE_SAMPLES = 1e-8
_JUST_AFTER = 1e-300
"""The part of a sample by which an instant is after an event and before all else."""

GATE_EVENT = np.dtype(
    [("sample", np.int64), ("fraction", np.float64), ("level", np.float64), ("trigger", np.int64)], align=True
)
"""At ``sample`` + ``fraction`` (0 to under 1) the gate's level becomes ``level`` (0: closed).

With ``trigger`` the envelope starts its attack; without, an open gate only scales its output to the new
level. The event counts for the time after it: the value at its own instant is the value before it.
"""

ENVELOPE = np.dtype(
    [
        ("attack", np.float64),
        ("decay", np.float64),
        ("sustain", np.float64),
        ("release", np.float64),
        ("shape", np.int64),
    ],
    align=True,
)
"""The settings of an envelope: times in seconds, 0 to 60; sustain 0 to 1; shape an index into `SHAPES`."""

WALK = np.dtype(
    [
        ("sample", np.int64),
        ("fraction", np.float64),
        ("x", np.float64),
        ("y", np.float64),
        ("event", np.int64),
        ("stage", np.int64),
        ("level", np.float64),
        ("start_sample", np.int64),
        ("start_fraction", np.float64),
        ("target", TARGET),
        ("pursuit", PURSUIT),
    ],
    align=True,
)
"""A walk: unslewed ``x`` and slewed ``y`` at ``sample`` + ``fraction``, the next ``event``, the stage."""


@kernel
def walk_reset(walk: Any) -> None:
    """Back to sample 0: the gate closed, the output at 0, no event taken."""
    walk.sample = 0
    walk.fraction = 0.0
    walk.x = 0.0
    walk.y = 0.0
    walk.event = 0
    walk.stage = IDLE
    walk.level = 0.0
    walk.start_sample = 0
    walk.start_fraction = 0.0
    target_begin(walk.target, RAMP, 0.0, 0.0, np.inf)
    pursuit = walk.pursuit
    pursuit.mode = 0
    pursuit.meets = 1
    pursuit.since = 0.0
    pursuit.until = np.inf
    pursuit.before = 0.0


@inlined
def _elapsed(walk: Any, sample: int, fraction: float, step: float) -> float:
    """Seconds from the stage's start to ``sample`` + ``fraction``."""
    return float((float(sample - walk.start_sample) + (fraction - walk.start_fraction)) * step)


@inlined
def _is_beyond(at: float, until: float, step: float) -> bool:
    """Whether an instant lies beyond a border, by more than rounding can have put it there.

    An event or a sample exactly at a stage's end thus comes before that end, whatever the sample rate.
    """
    return at > until + _TIE_SAMPLES * step


@kernel
def _begin_stage(walk: Any, slew: Any, envelope: Any, stage: int, x: float, y: float) -> None:
    """Begin a stage at the walk's ``start``, from the level ``x`` and the output ``y``."""
    end, duration = x, np.inf
    if stage == ATTACK:
        end, duration = walk.level, envelope.attack
    elif stage == DECAY:
        end, duration = walk.level * envelope.sustain, envelope.decay
    elif stage == RELEASE:
        end, duration = 0.0, envelope.release
    walk.stage = stage
    target_begin(walk.target, ARC if envelope.shape == RC_SHAPE else RAMP, x, end, duration)
    pursue(walk.pursuit, slew, walk.target, 0.0, y)


@kernel
def _end_stage(walk: Any, slew: Any, envelope: Any, rate: float) -> None:
    """Go on to the stage after the one that ends."""
    target = walk.target
    y = pursued_level(walk.pursuit, target, target.duration, target_level(target, target.duration))
    samples = walk.start_fraction + target.duration * rate
    whole = np.floor(samples)
    walk.start_sample += np.int64(whole)
    walk.start_fraction = samples - whole
    stage = walk.stage + 1 if walk.stage != RELEASE else IDLE
    _begin_stage(walk, slew, envelope, stage, target.end, y)


@kernel
def _scale(walk: Any, slew: Any, level: float, elapsed: float, y: float) -> None:
    """Scale an open envelope to another level; an attack that came from above does not rise by it."""
    target = walk.target
    ratio = level / walk.level
    begin = target.begin * ratio
    if walk.stage == ATTACK:
        begin = min(begin, max(target.begin, level))
    walk.level = level
    target_begin(target, target.motion, begin, target.end * ratio, target.duration)
    pursue(walk.pursuit, slew, target, elapsed, y)


@kernel
def _take_event(walk: Any, slew: Any, envelope: Any, event: Any, elapsed: float) -> None:
    """Let the next event happen, ``elapsed`` seconds into the stage; a late one happens at its start."""
    walk.event += 1
    closed = walk.stage == IDLE or walk.stage == RELEASE
    if closed and event.level == 0.0:
        return
    x = target_level(walk.target, elapsed)
    y = pursued_level(walk.pursuit, walk.target, elapsed, x)
    if event.level > 0.0 and not closed and event.trigger == 0:
        if event.level != walk.level:
            _scale(walk, slew, event.level, max(elapsed, 0.0), y)
        return
    if elapsed > 0.0:
        walk.start_sample = event.sample
        walk.start_fraction = event.fraction
    if event.level == 0.0:
        _begin_stage(walk, slew, envelope, RELEASE, x, y)
    else:
        walk.level = event.level
        _begin_stage(walk, slew, envelope, ATTACK, x, y)


@kernel
def _pass_border(walk: Any, slew: Any, envelope: Any, rate: float) -> None:
    """Go on to the next stretch of the output, or to the next stage where this one has ended."""
    if walk.pursuit.until < walk.target.duration:
        pursue_on(walk.pursuit, slew, walk.target)
    else:
        _end_stage(walk, slew, envelope, rate)


@kernel
def _settle(
    walk: Any, slew: Any, envelope: Any, events: Any, rate: float, sample: int, fraction: float
) -> float:
    """Take all events and borders before an instant; returns the seconds from its stage's start to it."""
    step = 1.0 / rate
    while True:
        due = False
        at = _elapsed(walk, sample, fraction, step)
        if walk.event < events.size:
            event = events[walk.event]
            due = event.sample < sample or (event.sample == sample and event.fraction < fraction)
            if due:
                at = _elapsed(walk, event.sample, event.fraction, step)
        if _is_beyond(at, walk.pursuit.until, step):
            _pass_border(walk, slew, envelope, rate)
        elif due:
            _take_event(walk, slew, envelope, events[walk.event], at)
        else:
            return at


@kernel
def walk_to(
    walk: Any, slew: Any, envelope: Any, events: Any, sample_rate: float, sample: int, fraction: float
) -> None:
    """Walk on to ``sample`` + ``fraction``, taking the events on the way; sets ``walk.x`` and ``walk.y``.

    ``slew``, ``envelope`` and ``walk`` are records (`SLEW`, `ENVELOPE`, `WALK`), ``events`` a `GATE_EVENT`
    array in order of time. The result depends on the events alone, not on the instants at which the walk was
    asked before. An instant before the stretch in hand gives the level at which that began: a walk does not
    go back.
    """
    elapsed = _settle(walk, slew, envelope, events, sample_rate, sample, fraction)
    walk.sample = sample
    walk.fraction = fraction
    walk.x = target_level(walk.target, elapsed)
    walk.y = pursued_level(walk.pursuit, walk.target, elapsed, walk.x)


@inlined
def _run_length(walk: Any, events: Any, step: float, sample: int, most: int) -> int:
    """How many instants from ``sample`` on, at most ``most``, lie in the stretch in hand and before events.

    The division only guesses; each instant's own elapsed time decides, as it does in `walk_to`.
    """
    count = most
    if walk.event < events.size:
        count = min(count, events[walk.event].sample + 1 - sample)
    until = walk.pursuit.until
    if not _is_beyond(_elapsed(walk, sample + count - 1, 0.0, step), until, step):
        return count
    guess = np.int64(until / step + walk.start_fraction) + walk.start_sample + 1 - sample
    count = min(max(guess, 1), count)
    while count > 1 and _is_beyond(_elapsed(walk, sample + count - 1, 0.0, step), until, step):
        count -= 1
    while not _is_beyond(_elapsed(walk, sample + count, 0.0, step), until, step):
        count += 1
    return int(count)


@kernel
def fill_control(
    walk: Any,
    slew: Any,
    envelope: Any,
    events: Any,
    sample_rate: float,
    first_sample: int,
    control: Any,
    unslewed: Any,
) -> None:
    """Fill ``control`` and ``unslewed`` (n,) with slewed and unslewed level from ``first_sample`` on.

    As `walk_to` at each of them, to the bit. What is carried is the walk; where one call ends and the next
    one begins leaves no trace. Runs on the audio thread: no allocation, no Python, a bounded time a sample.
    """
    step = 1.0 / sample_rate
    done = 0
    while done < control.size:
        sample = first_sample + done
        _settle(walk, slew, envelope, events, sample_rate, sample, 0.0)
        end = done + _run_length(walk, events, step, sample, control.size - done)
        count, fraction = sample - walk.start_sample, walk.start_fraction
        levels, outputs = unslewed[done:end], control[done:end]
        fill_pursuit(walk.pursuit, walk.target, count, fraction, step, levels, outputs)
        done = end
    if control.size:
        walk.sample = first_sample + control.size - 1
        walk.fraction = 0.0
        walk.x = unslewed[control.size - 1]
        walk.y = control[control.size - 1]


@kernel
def walk_resettle(walk: Any, slew: Any, envelope: Any, sample_rate: float) -> None:
    """Go on from where the walk stands under new settings, without a jump of either level.

    Walk to the instant under the old settings first. A stage keeps the share of its duration that is left, of
    its new duration; a changed sustain is gone to in ``decay``. Without this call a stage and a stretch in
    hand go on as begun.
    """
    x, y, target = walk.x, walk.y, walk.target
    elapsed = _elapsed(walk, walk.sample, walk.fraction, 1.0 / sample_rate)
    share = min(max(elapsed / target.duration, 0.0), 1.0) if target.duration > 0.0 else 1.0
    walk.start_sample = walk.sample
    walk.start_fraction = walk.fraction
    stage = walk.stage
    if stage == SUSTAIN and x != walk.level * envelope.sustain:
        stage, share = DECAY, 0.0
    _begin_stage(walk, slew, envelope, stage, x, y)
    since = share * target.duration
    if target.motion == HOLD or since == 0.0:
        return
    end, duration, left = target.end, target.duration, way_left(target.motion, share)
    if left < _ALL_BUT_OVER:
        since, duration, left = 0.0, 0.0, 1.0
    # The stage as a whole that would have come to x by now: it began earlier.
    samples = walk.start_fraction - since * sample_rate
    walk.start_sample += np.int64(np.floor(samples))
    walk.start_fraction = samples - np.floor(samples)
    target_begin(target, target.motion, end + (x - end) / left, end, duration)
    pursue(walk.pursuit, slew, target, since, y)


@kernel
def walk_past(walk: Any, slew: Any, envelope: Any, events: Any, sample_rate: float, sample: int) -> None:
    """Walk to ``sample`` and take what events there are up to it, those at that very instant included."""
    _settle(walk, slew, envelope, events, sample_rate, sample, _JUST_AFTER)
    walk_to(walk, slew, envelope, events, sample_rate, sample, _JUST_AFTER)


@kernel
def walk_shift(walk: Any, samples: int) -> None:
    """Count time from another sample 0: everything that the walk remembers moves by ``samples``."""
    walk.sample += samples
    walk.start_sample += samples


@kernel
def walk_take(walk: Any, slew: Any, envelope: Any, event: Any, sample_rate: float) -> None:
    """Let an event that is in no list happen where the walk stands (``event`` must be of that instant)."""
    elapsed = _elapsed(walk, walk.sample, walk.fraction, 1.0 / sample_rate)
    _take_event(walk, slew, envelope, event, elapsed)
    walk.event -= 1


@kernel
def walk_open(walk: Any, slew: Any, envelope: Any, sample: int, level: float, y: float) -> None:
    """Begin at ``sample`` with an output that stands at ``y`` already, behind a gate that is at ``level``.

    An open gate goes on in its decay towards sustain, a closed one in its release.
    """
    walk.sample = walk.start_sample = sample
    walk.fraction = walk.start_fraction = 0.0
    walk.x = walk.y = y
    walk.level = level
    _begin_stage(walk, slew, envelope, DECAY if level > 0.0 else RELEASE, y, y)


def envelope_record(envelope: "Envelope") -> "NDArray[Any]":
    """The settings of an envelope as an `ENVELOPE` array of shape (1,), as compiled code reads them.

    Raises SettingError for a time outside 0 to 60 s, a sustain outside 0 to 1 or an unknown shape.
    """
    if envelope.shape not in SHAPES:
        raise SettingError(f"shape = {envelope.shape!r}: choose one of {', '.join(SHAPES)}")
    row = (
        _in_range("attack", envelope.attack, 60.0, " s"),
        _in_range("decay", envelope.decay, 60.0, " s"),
        _in_range("sustain", envelope.sustain, 1.0, ""),
        _in_range("release", envelope.release, 60.0, " s"),
        SHAPES.index(envelope.shape),
    )
    return np.array([row], ENVELOPE)


def _in_range(name: str, value: float, high: float, unit: str) -> float:
    if not 0.0 <= value <= high:
        raise SettingError(f"{name} = {value!r} is out of range: 0 to {high:g}{unit}")
    return float(value)
