"""An envelope's walk asked at any instant, and where it turns: for tests, by the engine's own steps."""

from typing import Any

import numpy as np

from glidesmith.compiled import kernel
from glidesmith.envelope import (
    GATE_EVENT,
    WALK,
    _elapsed,
    _is_beyond,
    _pass_border,
    _take_event,
    walk_reset,
    walk_to,
)
from glidesmith.pursuit import PIECE
from glidesmith.slew import SLEW

_BORDERS_PER_EVENT = 40
"""More than an event brings: three stages at most, of at most six stretches."""


@kernel
def _list_borders(
    walk: Any, slew: Any, envelope: Any, events: Any, rate: float, every: bool, times: Any
) -> int:
    """Walk from border to border to the end of time; returns how many of ``times`` (s) were filled in."""
    step = 1.0 / rate
    count = 0
    while count < times.size:
        due = walk.event < events.size
        at = np.inf
        if due:
            event = events[walk.event]
            at = _elapsed(walk, event.sample, event.fraction, step)
        pursuit = walk.pursuit
        if _is_beyond(at, pursuit.until, step):
            goes_on = pursuit.mode == PIECE and pursuit.meets == 0
            if pursuit.until >= walk.target.duration or (every and not goes_on):
                samples = float(walk.start_sample) + (walk.start_fraction + pursuit.until * rate)
                times[count] = samples / rate
                count += 1
            _pass_border(walk, slew, envelope, rate)
        elif due:
            times[count] = (float(events[walk.event].sample) + events[walk.event].fraction) / rate
            count += 1
            _take_event(walk, slew, envelope, events[walk.event], at)
        else:
            break
    return count


@kernel
def _walk_through(
    walk: Any, slew: Any, envelope: Any, events: Any, rate: float, instants: Any, levels: Any
) -> None:
    """Fill ``levels`` (n, 2) with x and y at ``instants``, of which sample and fraction count."""
    for i in range(instants.size):
        walk_to(walk, slew, envelope, events, rate, instants[i].sample, instants[i].fraction)
        levels[i, 0] = walk.x
        levels[i, 1] = walk.y


def _instants(times_s, events, sample_rate):
    """Times as sample and fraction; the very double that an event's time gives is that event's instant."""
    instants = np.zeros(times_s.size, GATE_EVENT)
    samples = times_s * sample_rate
    instants["sample"] = np.floor(samples)
    instants["fraction"] = samples - np.floor(samples)
    event_times = (events["sample"] + events["fraction"]) / sample_rate
    if events.size:
        nearest = np.minimum(np.searchsorted(event_times, times_s), events.size - 1)
        same = event_times[nearest] == times_s
        for part in ("sample", "fraction"):
            instants[part][same] = events[part][nearest[same]]
    return instants


def _new_walk():
    walk = np.zeros(1, WALK)[0]
    walk_reset(walk)
    return walk


def control_at(slew, envelope, events, sample_rate, times_s):
    """The envelope's level and the slewed control, 0 to 1, at seconds from sample 0 on, in order.

    At an event's own time, (sample + fraction)/sample_rate as a double, the levels are those before it.
    """
    times = np.asarray(times_s, np.float64)
    levels = np.zeros((times.size, 2))
    _walk_through(
        _new_walk(),
        _record(slew),
        _record(envelope),
        events,
        float(sample_rate),
        _instants(times, events, sample_rate),
        levels,
    )
    return levels[:, 0].copy(), levels[:, 1].copy()


def _record(rows):
    return np.atleast_1d(rows)[0]


def _borders(slew, envelope, events, sample_rate, every):
    times = np.zeros(_BORDERS_PER_EVENT * (events.size + 1))
    count = _list_borders(_new_walk(), slew, envelope, events, float(sample_rate), every, times)
    return np.unique(times[:count])


def stage_times(envelope, events, sample_rate):
    """The seconds, in order, at which events happen and at which stages begin or end.

    Between two of them the unslewed level is monotonic.
    """
    at_once = np.zeros(1, SLEW)[0]
    return _borders(at_once, _record(envelope), events, sample_rate, every=False)


def turning_times(slew, envelope, events, sample_rate):
    """`stage_times`, and when the slewed control meets the envelope or falls behind it.

    Between two of them the slewed control is monotonic as well: its peaks and dips are at these instants.
    Right after one of them it may have jumped, where a side of the slew is immediate and the envelope jumps.
    """
    return _borders(_record(slew), _record(envelope), events, sample_rate, every=True)
