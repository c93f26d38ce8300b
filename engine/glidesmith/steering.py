"""How a voice that is playing goes over to something else: another round, other settings, played keys.

The pitch goes on from where it is, and so does the control of the gain. What a voice remembers are anchors in
samples of its program and records of glides in hand; another place in time moves the anchors, other settings
begin the glides anew from their present output (`glide_resettle`, `walk_resettle`). All of it is computed
from the sample at which it happens, so that where blocks end leaves no trace.
"""

import math
from typing import Any

import numpy as np

from glidesmith.compiled import inlined, kernel
from glidesmith.envelope import (
    walk_open,
    walk_past,
    walk_reset,
    walk_resettle,
    walk_shift,
    walk_take,
    walk_to,
)
from glidesmith.slew import glide_begin, glide_resettle, glide_volts
from glidesmith.voice import elapsed_s, next_sample, take_gate_event, take_pitch_event


@kernel
def catch_up(settings: Any, voice: Any, events: Any) -> None:
    """Let happen what lies before the voice's present sample and was not asked for yet."""
    sample = voice.sample
    if settings.enveloped:
        walk_to(voice.walk, settings.gain, settings.envelope, events.gate, settings.sample_rate, sample, 0.0)
        return
    while next_sample(events.gate, voice.gate_event) < sample:
        take_gate_event(settings, voice, events.gate[voice.gate_event])
        voice.gate_event += 1


@kernel
def begin_round(settings: Any, voice: Any, events: Any, length: int) -> None:
    """From the end of a round, ``length`` samples long, to the start of the next.

    What happens at the very end comes before what happens at the start.
    """
    while voice.pitch_event < events.pitch.size:
        take_pitch_event(settings, voice, events.pitch[voice.pitch_event])
        voice.pitch_event += 1
    if settings.enveloped:
        walk_past(voice.walk, settings.gain, settings.envelope, events.gate, settings.sample_rate, length)
    else:
        while voice.gate_event < events.gate.size:
            take_gate_event(settings, voice, events.gate[voice.gate_event])
            voice.gate_event += 1
    move_by(voice, -length)
    voice.pitch_event = 0
    voice.gate_event = 0
    voice.walk.event = 0


@kernel
def move_by(voice: Any, samples: int) -> None:
    """Count time from another sample 0."""
    voice.sample += samples
    voice.pitch_sample += samples
    voice.gain_sample += samples
    walk_shift(voice.walk, samples)


@inlined
def _same_slew(one: Any, other: Any) -> bool:
    return (
        one.law == other.law
        and one.timing == other.timing
        and one.rise == other.rise
        and one.fall == other.fall
        and one.bend == other.bend
        and one.knee == other.knee
        and one.curvature == other.curvature
    )


@inlined
def _same_tuning(one: Any, other: Any) -> bool:
    return one.octaves_at_zero == other.octaves_at_zero and one.octaves_per_volt == other.octaves_per_volt


@inlined
def _same_envelope(one: Any, other: Any) -> bool:
    return (
        one.attack == other.attack
        and one.decay == other.decay
        and one.sustain == other.sustain
        and one.release == other.release
        and one.shape == other.shape
    )


@kernel
def first_from(events: Any, sample: int) -> int:
    """The index of the first event at ``sample`` or later; bisection, so that long phrases take no longer."""
    low, high = 0, events.size
    while low < high:
        middle = (low + high) // 2
        if events[middle].sample < sample:
            low = middle + 1
        else:
            high = middle
    return low


@kernel
def _turn_pitch(before: Any, settings: Any, voice: Any, volts: float) -> None:
    """Go on to ``volts`` under new settings, from where the pitch is; in another tuning at other volts."""
    glide = voice.pitch
    sample = voice.sample
    retuned = not _same_tuning(before, settings)
    if volts == glide.target and not retuned and _same_slew(before.pitch, settings.pitch):
        return
    elapsed = elapsed_s(before, voice.pitch_sample, voice.pitch_fraction, sample, 0.0)
    if retuned:
        octaves = before.octaves_at_zero + before.octaves_per_volt * glide_volts(glide, elapsed)
        origin = (octaves - settings.octaves_at_zero) / settings.octaves_per_volt
        glide_begin(glide, settings.pitch, origin, volts)
    elif volts == glide.target:
        glide_resettle(glide, settings.pitch, elapsed)
    else:
        glide_begin(glide, settings.pitch, glide_volts(glide, elapsed), volts)
    voice.pitch_sample = sample
    voice.pitch_fraction = 0.0


@kernel
def _turn_gate(before: Any, settings: Any, voice: Any, level: float) -> None:
    """The same for the gain without an envelope, before and after."""
    glide = voice.gain
    sample = voice.sample
    if level == glide.target and _same_slew(before.gain, settings.gain):
        return
    elapsed = elapsed_s(before, voice.gain_sample, voice.gain_fraction, sample, 0.0)
    if level == glide.target:
        glide_resettle(glide, settings.gain, elapsed)
    else:
        glide_begin(glide, settings.gain, glide_volts(glide, elapsed), level)
    voice.gain_sample = sample
    voice.gain_fraction = 0.0


@kernel
def _turn_walk(before: Any, settings: Any, voice: Any, hand: Any, level: float) -> None:
    """The same with an envelope before and after."""
    walk = voice.walk
    rate = settings.sample_rate
    if not (_same_slew(before.gain, settings.gain) and _same_envelope(before.envelope, settings.envelope)):
        walk_resettle(walk, settings.gain, settings.envelope, rate)
    hand.sample = voice.sample
    hand.fraction = 0.0
    hand.level = level
    hand.trigger = 0
    walk_take(walk, settings.gain, settings.envelope, hand, rate)


@kernel
def _turn_gain(before: Any, settings: Any, voice: Any, hand: Any, level: float) -> None:
    sample = voice.sample
    if before.enveloped and settings.enveloped:
        _turn_walk(before, settings, voice, hand, level)
    elif before.enveloped:
        y = voice.walk.y
        walk_reset(voice.walk)
        glide_begin(voice.gain, settings.gain, y, level)
        voice.gain_sample = sample
        voice.gain_fraction = 0.0
    elif settings.enveloped:
        elapsed = elapsed_s(before, voice.gain_sample, voice.gain_fraction, sample, 0.0)
        y = glide_volts(voice.gain, elapsed)
        walk_open(voice.walk, settings.gain, settings.envelope, sample, level, y)
    else:
        _turn_gate(before, settings, voice, level)


@inlined
def open_level(settings: Any, voice: Any) -> float:
    """The level that the voice's gate is at."""
    if not settings.enveloped:
        return voice.gain.target
    closed = voice.walk.stage == 0 or voice.walk.stage == 4
    return 0.0 if closed else voice.walk.level


@inlined
def target_from(events: Any, index: int, first: float) -> float:
    """The pitch's target before event ``index`` of a round; ``first`` is that before the first one."""
    return events[index - 1].volts if index > 0 else first


@kernel
def turn(
    before: Any,
    settings: Any,
    voice: Any,
    events: Any,
    hand: Any,
    position: int,
    first_volts: float,
    first_level: float,
) -> None:
    """Go over from settings ``before`` to ``settings`` and ``events``, at sample ``position`` of these.

    `catch_up` comes first, with what was played before. ``first_volts`` and ``first_level`` are where pitch
    and gate are going before the first of ``events``; ``hand`` is a gate event's record to work with.
    """
    move_by(voice, position - voice.sample)
    voice.pitch_event = first_from(events.pitch, position)
    voice.gate_event = first_from(events.gate, position)
    level = events.gate[voice.gate_event - 1].level if voice.gate_event > 0 else first_level
    _turn_pitch(before, settings, voice, target_from(events.pitch, voice.pitch_event, first_volts))
    _turn_gain(before, settings, voice, hand, level)
    voice.walk.event = voice.gate_event


@kernel
def turn_keyed(before: Any, settings: Any, voice: Any, pitch_hand: Any, hand: Any, volts: float) -> None:
    """The same while keys are played: the key held goes on, at the ``volts`` that the new settings give it.

    NaN where no key was pressed yet. A pitch that waits for a converter's tick goes on waiting, at its new
    volts; ``pitch_hand`` is what was played last.
    """
    if before.enveloped:
        voice.gate_event = voice.walk.event
    level = open_level(before, voice)
    waits = voice.pitch_event == 0
    if waits and not math.isnan(volts):
        pitch_hand.volts = volts
    held = (voice.pitch.target * before.octaves_per_volt + before.octaves_at_zero) - settings.octaves_at_zero
    same = voice.pitch.target if _same_tuning(before, settings) else held / settings.octaves_per_volt
    _turn_pitch(before, settings, voice, same if waits or math.isnan(volts) else volts)
    _turn_gain(before, settings, voice, hand, level)
    voice.walk.event = voice.gate_event


@kernel
def same_place(position: Any, unit_before: float, unit: float, loop: int) -> Any:
    """Sample ``position`` of a program whose phrase's second is ``unit_before`` samples, in another of
    ``unit`` samples a second and a loop of ``loop`` samples (0: none)."""
    place = (
        position if unit == unit_before else np.int64(np.floor(float(position) / unit_before * unit + 0.5))
    )
    return place % loop if loop > 0 else place
