"""The live transport in compiled code: two channels that cross-fade, rounds of a loop, played keys, commands.

    commands ─► front channel ┐
                              ├─► slot gains, cross-fade ─► listening stage ─► out
                 back channel ┘

A channel is a voice with a snapshot (`PLACE`) to play. The front one is heard; while something changes that
can't be changed in place, the back one goes on as before for 10 ms and fades. Commands are taken at the start
of a block, and each is acknowledged with the sample at which it was. All else follows from them: the same
commands at the same samples give the same bits, in whatever blocks they are asked for.

Everything here runs on the audio thread: no allocation, no lock, no Python, a bounded time a sample.
"""

import math
from collections import namedtuple
from typing import Any

import numpy as np

from glidesmith.compiled import inlined, kernel
from glidesmith.envelope import GATE_EVENT
from glidesmith.exchange import load_acquire, store_release, view_int64, view_of
from glidesmith.listening import approach, hush, listen, listen_to
from glidesmith.oscillator import LEVEL
from glidesmith.program import PITCH_EVENT, SETTINGS
from glidesmith.steering import begin_round, catch_up, same_place, turn, turn_keyed
from glidesmith.voice import CHUNK, VOICE, Events, Tables, play_chunk, reset

SWAP, PLAY, STOP, PANIC, NOTE, RELEASE, LEVEL_CHANGE, MATCH = range(8)
"""The kinds of commands."""

STOPPED, PHRASE, KEYS = range(3)
"""What is being played."""

SILENT = -1
"""The place of a channel that plays nothing."""

FADE_S, PANIC_FADE_S = 0.01, 0.002
ROWS_PER_S = 250

SENT, TAKEN, MADE, ROWS, STATES, IN_USE = range(6)
"""Words: commands sent (the only one that the audio thread doesn't write) and taken, samples made, rows and
states written, and the places in use, a bit each."""

WORDS = 6

COMMAND = np.dtype(
    [
        ("kind", np.int64),
        ("place", np.int64),
        ("at_loop", np.int64),
        ("smooth", np.int64),
        ("volts", np.float64),
        ("jump", np.int64),
        ("level", np.float64),
        ("trigger", np.int64),
        ("tick_samples", np.float64),
    ],
    align=True,
)
"""A command; ``level`` is the gate's for a note, and a factor for level and match.

For a match ``place`` is the slot's number.
"""

PLACE = np.dtype(
    [
        ("settings", SETTINGS),
        ("first_pitch_at", np.int64),
        ("first_pitch_count", np.int64),
        ("later_pitch_at", np.int64),
        ("later_pitch_count", np.int64),
        ("gate_at", np.int64),
        ("gate_count", np.int64),
        ("levels_at", np.int64),
        ("levels_count", np.int64),
        ("cells_at", np.int64),
        ("cells_count", np.int64),
        ("last_volts", np.float64),
        ("loop_samples", np.int64),
        ("unit_samples", np.float64),
        ("slot", np.int64),
        ("gain", np.float64),
    ],
    align=True,
)
"""A snapshot as the audio thread reads it: arrays are an address and a count each."""

CHANNEL = np.dtype(
    [
        ("place", np.int64),
        ("round", np.int64),
        ("keyed", np.int64),
        ("held_volts", np.float64),
        ("gain", np.float64),
        ("gain_goal", np.float64),
        ("voice", VOICE),
    ],
    align=True,
)
"""A channel. ``gain`` is on its way to the slot's own, ``gain_goal``."""

DECK = np.dtype(
    [
        ("sample", np.int64),
        ("mode", np.int64),
        ("cued", np.int64),
        ("waiting", np.int64),
        ("waiting_smooth", np.int64),
        ("waiting_due", np.int64),
        ("fade_left", np.int64),
        ("fade_samples", np.int64),
        ("taken", np.int64),
        ("rows", np.int64),
        ("states", np.int64),
        ("row_every", np.int64),
        ("long_fade", np.int64),
        ("short_fade", np.int64),
        ("panic_left", np.int64),
        ("hushed", np.int64),
    ],
    align=True,
)
"""The transport's own state. ``cued``: the place that `PLAY` plays; ``waiting``: the one that comes with the
next round; ``panic_left``: samples until a panic has silenced all; ``hushed``: the next start fades in."""

ROW = np.dtype(
    [
        ("sample", np.int64),
        ("position", np.int64),
        ("round", np.int64),
        ("slot", np.int64),
        ("keyed", np.int64),
        ("target_volts", np.float64),
        ("pitch_volts", np.float64),
        ("gate", np.float64),
        ("control", np.float64),
        ("gain", np.float64),
    ],
    align=True,
)
"""What the chain was at, `ROWS_PER_S` times a second: voltages, and levels from 0 to 1; ``gate`` is the
control before the slew."""

STATE = np.dtype(
    [
        ("sample", np.int64),
        ("mode", np.int64),
        ("position", np.int64),
        ("round", np.int64),
        ("slot", np.int64),
        ("waiting_slot", np.int64),
        ("sounding_slot", np.int64),
        ("level", np.float64),
        ("limiter", np.float64),
    ],
    align=True,
)
"""Where the transport is, once a block. ``limiter``: the least gain of the limiter in the block."""

Parts = namedtuple(
    "Parts",
    "deck channels places pitch_hands gate_hands listening commands stamps rows states heard words back "
    "scratch",
)
"""All of the transport's memory: arrays of one or more of the records above. ``stamps``: the sample at which
each command was taken; ``heard``, float32, what went to the device; ``back``, float32, room for a chunk.
``rows``, ``states``, ``commands``, ``stamps`` and ``heard`` are rings whose sizes are powers of two."""

_view_pitch_events = view_of(PITCH_EVENT)
_view_gate_events = view_of(GATE_EVENT)
_view_levels = view_of(LEVEL)


@inlined
def _events_of(parts: Any, which: int) -> Any:
    """The events that a channel goes by: its own hand's where keys are played, else its round's."""
    channel = parts.channels[which]
    place = parts.places[channel.place]
    if channel.keyed:
        return Events(parts.pitch_hands[which : which + 1], parts.gate_hands[which : which + 1])
    gate = _view_gate_events(place.gate_at, place.gate_count)
    if channel.round == 0:
        return Events(_view_pitch_events(place.first_pitch_at, place.first_pitch_count), gate)
    return Events(_view_pitch_events(place.later_pitch_at, place.later_pitch_count), gate)


@kernel
def _play_channel(parts: Any, which: int, out: Any) -> None:
    channel = parts.channels[which]
    if channel.place == SILENT:
        for i in range(out.size):
            out[i] = np.float32(0.0)
        return
    place = parts.places[channel.place]
    tables = Tables(
        _view_levels(place.levels_at, place.levels_count), view_int64(place.cells_at, place.cells_count)
    )
    play_chunk(place.settings, channel.voice, _events_of(parts, which), tables, parts.scratch, out)


@inlined
def _until_end(parts: Any, which: int) -> int:
    """Samples until a channel's round or its program is over."""
    channel = parts.channels[which]
    if channel.place == SILENT or channel.keyed:
        return CHUNK
    place = parts.places[channel.place]
    end = place.loop_samples if place.loop_samples > 0 else place.settings.length
    return max(end - channel.voice.sample, 0)


@kernel
def _pass_end(parts: Any, which: int) -> bool:
    """Go on to the next round, or fall silent, where a channel is at its end; whether it began a round."""
    if _until_end(parts, which) > 0:
        return False
    channel = parts.channels[which]
    place = parts.places[channel.place]
    if place.loop_samples == 0:
        channel.place = SILENT
        return False
    begin_round(place.settings, channel.voice, _events_of(parts, which), place.loop_samples)
    channel.round += 1
    return True


@kernel
def _copy_front(parts: Any) -> None:
    """Let the back channel go on as the front one."""
    parts.channels[1] = parts.channels[0]
    parts.pitch_hands[1] = parts.pitch_hands[0]
    parts.gate_hands[1] = parts.gate_hands[0]


@kernel
def _begin_fade(parts: Any, samples: int) -> None:
    deck = parts.deck[0]
    _copy_front(parts)
    deck.fade_samples = samples
    deck.fade_left = samples if parts.channels[1].place != SILENT else 0


@kernel
def _go_over(parts: Any, place_index: int, smooth: bool, keyed_volts: float) -> None:
    """Let the front channel play another snapshot from where it is."""
    deck, channel = parts.deck[0], parts.channels[0]
    before, place = parts.places[channel.place], parts.places[place_index]
    catch_up(before.settings, channel.voice, _events_of(parts, 0))
    if not smooth:
        _begin_fade(parts, deck.long_fade)
    channel.place = place_index
    channel.gain_goal = place.gain
    if not smooth:
        channel.gain = min(channel.gain, place.gain)
    hand = parts.gate_hands[2]
    if channel.keyed:
        turn_keyed(before.settings, place.settings, channel.voice, parts.pitch_hands[0], hand, keyed_volts)
        return
    position = same_place(channel.voice.sample, before.unit_samples, place.unit_samples, place.loop_samples)
    events = _events_of(parts, 0)
    volts, level = place.settings.first_volts, 0.0
    if channel.round > 0:
        volts, level = place.last_volts, events.gate[events.gate.size - 1].level
    turn(before.settings, place.settings, channel.voice, events, hand, position, volts, level)


@kernel
def _swap(parts: Any, command: Any) -> None:
    deck, channel = parts.deck[0], parts.channels[0]
    deck.cued = command.place
    deck.waiting = SILENT
    deck.waiting_due = 0
    if channel.place == SILENT:
        return
    loops = parts.places[channel.place].loop_samples > 0 and not channel.keyed
    begins = channel.voice.sample == 0 and channel.round > 0
    if command.at_loop and loops and not begins:
        deck.waiting = command.place
        deck.waiting_smooth = command.smooth
        return
    _go_over(parts, command.place, command.smooth != 0, command.volts)


@kernel
def _start(parts: Any, mode: int) -> None:
    """Put the cued snapshot, at its first sample, in front; what was heard fades."""
    deck, channel = parts.deck[0], parts.channels[0]
    _begin_fade(parts, deck.long_fade)
    was_silent = channel.place == SILENT
    if deck.hushed:
        hush(parts.listening[0])
        deck.hushed = 0
    place = parts.places[deck.cued]
    channel.place = deck.cued
    channel.round = 0
    channel.keyed = 1 if mode == KEYS else 0
    channel.gain_goal = place.gain
    channel.gain = place.gain if was_silent else min(channel.gain, place.gain)
    reset(place.settings, channel.voice)
    deck.mode = mode
    deck.waiting = SILENT
    deck.waiting_due = 0


@kernel
def _stop(parts: Any) -> None:
    deck = parts.deck[0]
    _begin_fade(parts, deck.long_fade)
    parts.channels[0].place = SILENT
    deck.mode = STOPPED
    deck.waiting = SILENT
    deck.waiting_due = 0


@kernel
def _panic(parts: Any) -> None:
    """Begin to fade all that is heard, whatever is going on."""
    deck = parts.deck[0]
    deck.mode = STOPPED
    deck.hushed = 1
    if parts.channels[0].place != SILENT or deck.fade_left > 0:
        deck.panic_left = deck.short_fade


@kernel
def _fade_in_panic(parts: Any, out: Any) -> None:
    """Fade the finished mix; at the end of it nothing plays any more."""
    deck, channels = parts.deck[0], parts.channels
    for i in range(out.size):
        left = float(deck.panic_left - i) / float(deck.short_fade)
        out[i] = np.float32(out[i] * (0.5 - 0.5 * np.cos(math.pi * left)))
    deck.panic_left -= out.size
    if deck.panic_left == 0:
        channels[0].place = SILENT
        channels[1].place = SILENT
        deck.fade_left = 0
        deck.waiting = SILENT
        deck.waiting_due = 0


@kernel
def _take_up_keys(parts: Any) -> bool:
    """Let keys be played from now on; whether they already were."""
    deck, channel = parts.deck[0], parts.channels[0]
    if channel.place != SILENT and channel.keyed:
        return True
    if channel.place == SILENT:
        _start(parts, KEYS)
        return False
    catch_up(parts.places[channel.place].settings, channel.voice, _events_of(parts, 0))
    channel.keyed = 1
    deck.mode = KEYS
    deck.waiting = SILENT
    deck.waiting_due = 0
    channel.voice.pitch_event = 1
    channel.voice.gate_event = 1
    channel.voice.walk.event = 1
    return True


@kernel
def _play_gate(parts: Any, level: float, trigger: int) -> None:
    voice, hand = parts.channels[0].voice, parts.gate_hands[0]
    hand.sample = voice.sample
    hand.fraction = 0.0
    hand.level = level
    hand.trigger = trigger
    voice.gate_event = 0
    voice.walk.event = 0


@kernel
def _play_pitch(parts: Any, command: Any, jump: bool) -> None:
    deck, voice, hand = parts.deck[0], parts.channels[0].voice, parts.pitch_hands[0]
    hand.sample = voice.sample
    hand.fraction = 0.0
    if command.tick_samples > 0.0:
        ticks = np.ceil(float(deck.sample) / command.tick_samples - 1e-9)
        late = max(ticks * command.tick_samples - float(deck.sample), 0.0)
        hand.sample += np.int64(np.floor(late))
        hand.fraction = late - np.floor(late)
    hand.volts = command.volts
    hand.jump = 1 if jump else 0
    voice.pitch_event = 0


@kernel
def _note(parts: Any, command: Any) -> None:
    channel = parts.channels[0]
    sounded = _take_up_keys(parts)
    catch_up(parts.places[channel.place].settings, channel.voice, _events_of(parts, 0))
    _play_pitch(parts, command, command.jump != 0 or not sounded)
    _play_gate(parts, command.level, command.trigger)


@kernel
def _release(parts: Any) -> None:
    channel = parts.channels[0]
    if channel.place != SILENT and channel.keyed:
        catch_up(parts.places[channel.place].settings, channel.voice, _events_of(parts, 0))
        _play_gate(parts, 0.0, 0)


@kernel
def _match(parts: Any, slot: int, gain: float) -> None:
    deck, channel, places = parts.deck[0], parts.channels[0], parts.places
    if deck.cued != SILENT and places[deck.cued].slot == slot:
        places[deck.cued].gain = gain
    if channel.place != SILENT and places[channel.place].slot == slot:
        places[channel.place].gain = gain
        channel.gain_goal = gain


@inlined
def _fades(kind: int) -> bool:
    return kind in (SWAP, PLAY, STOP, NOTE)


@kernel
def _obey(parts: Any, command: Any) -> None:
    if command.kind == SWAP:
        _swap(parts, command)
    elif command.kind == PLAY:
        _start(parts, PHRASE)
    elif command.kind == STOP:
        _stop(parts)
    elif command.kind == PANIC:
        _panic(parts)
    elif command.kind == NOTE:
        _note(parts, command)
    elif command.kind == RELEASE:
        _release(parts)
    elif command.kind == LEVEL_CHANGE:
        parts.listening[0].level_goal = command.level
    elif command.kind == MATCH:
        _match(parts, command.place, command.level)


@kernel
def _overrule(parts: Any, command: Any) -> None:
    """Take a command that a panic after it makes needless: only what it settles for later is kept."""
    if command.kind == SWAP:
        parts.deck[0].cued = command.place
    elif command.kind == LEVEL_CHANGE:
        parts.listening[0].level_goal = command.level
    elif command.kind == MATCH:
        _match(parts, command.place, command.level)


@kernel
def _last_panic(parts: Any, sent: int) -> int:
    """The number of the last panic among the commands not taken yet; -1 where there is none."""
    for number in range(sent - 1, parts.deck[0].taken - 1, -1):
        if parts.commands[number & (parts.commands.size - 1)].kind == PANIC:
            return number
    return -1


@kernel
def _take_commands(parts: Any) -> None:
    """Obey what was sent, as far as no fade is in the way, and note when; a panic waits for nothing."""
    deck = parts.deck[0]
    sent = load_acquire(parts.words, SENT)
    panic = _last_panic(parts, sent)
    while deck.taken < sent:
        command = parts.commands[deck.taken & (parts.commands.size - 1)]
        if deck.taken < panic:
            _overrule(parts, command)
        elif command.kind != PANIC and (deck.panic_left > 0 or (deck.fade_left > 0 and _fades(command.kind))):
            return
        else:
            _obey(parts, command)
        parts.stamps[deck.taken & (parts.stamps.size - 1)] = deck.sample
        deck.taken += 1


@kernel
def _pass_borders(parts: Any) -> None:
    """What is due at this very sample: ends of rounds, and the snapshot that waited for one."""
    deck = parts.deck[0]
    if deck.fade_left > 0:
        _pass_end(parts, 1)
    if _pass_end(parts, 0) and deck.waiting != SILENT:
        deck.waiting_due = 1
    if parts.channels[0].place == SILENT:
        deck.mode = STOPPED
    if deck.waiting_due and deck.fade_left == 0 and deck.panic_left == 0:
        waiting = deck.waiting
        deck.waiting = SILENT
        deck.waiting_due = 0
        _go_over(parts, waiting, deck.waiting_smooth != 0, np.nan)


@inlined
def _blended(deck: Any, i: int, front: Any, back: Any) -> Any:
    """The cross-fade from the back channel's sample to the front one's, ``i`` samples into a segment."""
    done = float(deck.fade_samples - deck.fade_left + i) / float(deck.fade_samples)
    weight = 0.5 - 0.5 * np.cos(math.pi * done)
    return np.float32(front * weight + back * (1.0 - weight))


@kernel
def _scale(gain: float, out: Any) -> None:
    if gain != 1.0:
        for i in range(out.size):
            out[i] = np.float32(out[i] * gain)


@kernel
def _mix_steadily(parts: Any, out: Any) -> None:
    """From both channels' samples to what is heard, while every gain but the limiter's stands still."""
    deck, channels, back = parts.deck[0], parts.channels, parts.back
    _scale(channels[0].gain, out)
    if deck.fade_left > 0:
        _scale(channels[1].gain, back[: out.size])
        for i in range(out.size):
            out[i] = _blended(deck, i, out[i], back[i])
    listen(parts.listening[0], out)


@kernel
def _mix_in_motion(parts: Any, out: Any) -> None:
    """The same while gains move: sample by sample, since one that rises keeps the others from it."""
    deck, stage, back = parts.deck[0], parts.listening[0], parts.back
    front, behind = parts.channels[0], parts.channels[1]
    for i in range(out.size):
        rise = 1.0 if stage.level < stage.level_goal else stage.rise
        rising = front.gain < front.gain_goal
        front.gain = approach(front.gain, front.gain_goal, rise, stage.fall)
        sample = np.float32(out[i] * front.gain)
        if deck.fade_left > 0:
            rising = rising or behind.gain < behind.gain_goal
            behind.gain = approach(behind.gain, behind.gain_goal, rise, stage.fall)
            sample = _blended(deck, i, sample, np.float32(back[i] * behind.gain))
        out[i] = listen_to(stage, sample, rising)


@kernel
def _mix(parts: Any, out: Any) -> None:
    deck, stage, channels = parts.deck[0], parts.listening[0], parts.channels
    steady = stage.level == stage.level_goal and channels[0].gain == channels[0].gain_goal
    if steady and (deck.fade_left == 0 or channels[1].gain == channels[1].gain_goal):
        _mix_steadily(parts, out)
    else:
        _mix_in_motion(parts, out)


@kernel
def _note_row(parts: Any, target_volts: float) -> None:
    """Write down what the chain was at in the segment's first sample, which was just made."""
    deck, channel, scratch = parts.deck[0], parts.channels[0], parts.scratch
    row = parts.rows[deck.rows & (parts.rows.size - 1)]
    row.sample = deck.sample
    silent = channel.place == SILENT
    row.round = channel.round
    row.keyed = channel.keyed
    row.slot = -1 if silent else parts.places[channel.place].slot
    row.target_volts = target_volts
    row.pitch_volts = target_volts if silent else scratch.volts[0]
    row.control = 0.0 if silent else scratch.control[0]
    row.gain = 0.0 if silent else scratch.gain[0]
    enveloped = not silent and parts.places[channel.place].settings.enveloped != 0
    row.gate = (scratch.unslewed[0] if enveloped else channel.voice.gain.target) if not silent else 0.0
    deck.rows += 1


@kernel
def _play_segment(parts: Any, out: Any) -> None:
    """Make the samples of ``out``, in which nothing begins or ends."""
    deck, channel = parts.deck[0], parts.channels[0]
    marks_row = deck.sample % deck.row_every == 0
    if marks_row:
        parts.rows[deck.rows & (parts.rows.size - 1)].position = channel.voice.sample
    target_volts = channel.voice.pitch.target
    if deck.fade_left > 0:
        _play_channel(parts, 1, parts.back[: out.size])
    _play_channel(parts, 0, out)
    if marks_row:
        _note_row(parts, target_volts)
    _mix(parts, out)
    if deck.fade_left > 0:
        deck.fade_left -= out.size
    if deck.panic_left > 0:
        _fade_in_panic(parts, out)


@inlined
def _segment(parts: Any, left: int) -> int:
    """Samples until something begins or ends, at most ``left``."""
    deck = parts.deck[0]
    count = min(min(left, CHUNK), deck.row_every - deck.sample % deck.row_every)
    count = min(count, max(_until_end(parts, 0), 1))
    if deck.fade_left > 0:
        count = min(min(count, deck.fade_left), max(_until_end(parts, 1), 1))
    if deck.panic_left > 0:
        count = min(count, deck.panic_left)
    return count


@kernel
def _keep_heard(parts: Any, out: Any) -> None:
    heard = parts.heard
    at = parts.deck[0].sample & (heard.size - 1)
    for i in range(out.size):
        heard[at] = out[i]
        at = (at + 1) & (heard.size - 1)


@inlined
def _bit(place: int) -> Any:
    return np.int64(1) << place if place != SILENT else np.int64(0)


@kernel
def _publish(parts: Any) -> None:
    """Tell the other side how far things are: the places in use before the commands taken, and last the
    samples, so that whoever has heard a sample knows of every command behind it.
    """
    deck, channels, words = parts.deck[0], parts.channels, parts.words
    state = parts.states[deck.states & (parts.states.size - 1)]
    place = channels[0].place
    state.sample = deck.sample
    state.mode = deck.mode
    state.position = channels[0].voice.sample
    state.round = channels[0].round
    state.slot = parts.places[deck.cued].slot if deck.cued != SILENT else -1
    state.waiting_slot = parts.places[deck.waiting].slot if deck.waiting != SILENT else -1
    state.sounding_slot = parts.places[place].slot if place != SILENT else -1
    state.level = parts.listening[0].level
    state.limiter = parts.listening[0].least
    parts.listening[0].least = parts.listening[0].limiter
    deck.states += 1
    used = _bit(place) | _bit(deck.cued) | _bit(deck.waiting)
    if deck.fade_left > 0:
        used |= _bit(channels[1].place)
    store_release(words, STATES, deck.states)
    store_release(words, ROWS, deck.rows)
    store_release(words, IN_USE, used)
    store_release(words, TAKEN, deck.taken)
    store_release(words, MADE, deck.sample)


@kernel
def play_deck(parts: Any, out: Any) -> None:
    """Make the next ``out.size`` samples, float32, of what is heard."""
    deck = parts.deck[0]
    if out.size:
        _pass_borders(parts)
        _take_commands(parts)
    at: Any = np.int64(0)
    while at < out.size:
        _pass_borders(parts)
        end = at + _segment(parts, out.size - at)
        _play_segment(parts, out[at:end])
        _keep_heard(parts, out[at:end])
        deck.sample += end - at
        at = end
    _publish(parts)
