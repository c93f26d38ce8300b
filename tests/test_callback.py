"""The compiled callback, called as PortAudio calls it, and what it may not contain."""

import ctypes
import re

import numba
import numpy as np
import pytest

from glidesmith import callback
from glidesmith.commands import Play, Swap
from glidesmith.deck import Deck
from glidesmith.rendering import render
from glidesmith.snapshot import snapshot_of
from making import make_phrase, make_preset

RATE = 48_000
LINE = make_phrase((0, "0.3", 50), ("0.25", "0.5", 57))
STREAM_CALLBACK = ctypes.CFUNCTYPE(
    ctypes.c_int,
    ctypes.c_void_p,
    ctypes.c_void_p,
    ctypes.c_ulong,
    ctypes.c_void_p,
    ctypes.c_ulong,
    ctypes.c_void_p,
)
"""PaStreamCallback of portaudio.h."""

UNDERFLOW, OVERFLOW = 4, 8
"""paOutputUnderflow and paOutputOverflow of portaudio.h."""


def started():
    deck = Deck(RATE, level_db=0.0, fade=False, ceiling_db=-1.0)
    deck.send(Swap(snapshot_of(make_preset(), LINE, RATE, loop=False)))
    deck.send(Play())
    return deck


def called(deck, channels, sizes, flags=0):
    """What the device's buffers hold after calls for ``sizes`` frames."""
    address, user_data = deck.callback(channels)
    function = STREAM_CALLBACK(address)
    buffers = []
    for size in sizes:
        buffer = np.full((size, channels), np.nan, np.float32)
        assert function(None, buffer.ctypes.data, size, None, flags, user_data) == 0
        buffers.append(buffer)
    return np.concatenate(buffers)


@pytest.mark.parametrize("channels", [1, 2, 6])
def test_every_channel_gets_the_render_whatever_is_asked_for(channels):
    expected = render(make_preset(), LINE, RATE).audio
    sizes = [64, 0, 1, 7, 4_096, 9_999, 509]
    sizes.append(expected.size - sum(sizes))
    got = called(started(), channels, sizes)
    np.testing.assert_array_equal(got, np.repeat(expected[:, np.newaxis], channels, axis=1))


def test_it_counts_frames_calls_and_underflows():
    deck = started()
    called(deck, 2, [64] * 10)
    called(deck, 2, [128] * 3, UNDERFLOW)
    called(deck, 2, [32], OVERFLOW)
    counters = deck.counters()
    assert (counters.frames, counters.callbacks, counters.underflows) == (640 + 384 + 32, 14, 3)
    assert counters.last_block == 32
    assert 0.0 < counters.median_us <= counters.p999_us
    assert counters.worst_us > 0.0
    assert counters.worst_wall_us > 0.0


def test_percentiles_come_from_the_histogram():
    """1,000 calls: 600 of 3.1 µs, 399 of 10 µs, one of 70 µs; by hand, in bins of a quarter microsecond."""
    deck = started()
    counting = deck._callback
    for cpu_ns, calls in ((3_100, 600), (10_010, 399), (70_000, 1)):
        for _ in range(calls):
            callback._count(counting._counters[0], counting._histogram, 64, 0, cpu_ns, 2 * cpu_ns)
    counters = deck.counters()
    assert (counters.median_us, counters.p999_us) == (3.25, 10.25)
    assert (counters.worst_us, counters.worst_wall_us) == (70.0, 140.0)


def test_filling_from_python_is_the_same():
    expected = called(started(), 2, [5_000])
    deck = started()
    out = np.empty((5_000, 2), np.float32)
    deck.fill(out[:3_000])
    deck.fill(out[3_000:], underflow=True)
    np.testing.assert_array_equal(out, expected)
    assert (deck.counters().frames, deck.counters().underflows) == (5_000, 1)


ALLOCATORS = ("NRT_", "malloc", "calloc", "realloc", "aligned_alloc", "_Znw", "PyMem_", "PyObject_")


def allocators_in(function):
    """The allocators that a compiled function's machine code names; it calls by name or not at all."""
    (code,) = function.inspect_asm().values()
    return [name for name in ALLOCATORS if name in code]


def test_nothing_on_the_audio_thread_allocates():
    """All that the callback runs, compiled afresh in one piece, since cached code can't be looked at."""
    fill = numba.njit("void(int64[::1], int64, int64, int64)", error_model="numpy", _nrt=False)(
        callback.fill.py_func
    )
    (code,) = fill.inspect_asm().values()
    for inner in ("play_deck", "glide_begin", "fill_control", "oscillate"):
        assert re.search(rf"\.type\s+\w*{inner}\w*,@function", code), inner
    assert "clock_gettime" in code
    assert allocators_in(fill) == []


def test_an_allocation_would_be_seen():
    @numba.njit
    def allocates(count):
        return np.zeros(count).sum()

    allocates(3)
    assert allocators_in(allocates) != []
