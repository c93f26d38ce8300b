"""The sinks' common rules, and memory as a sink."""

import subprocess
import sys
import tracemalloc

import numpy as np
import pytest

from conftest import LONG
from glidesmith.sink import MemorySink

BLOCKS = (1, 7, 64, 509, 100_000)


def noise(frames, channels=1, seed=1):
    shape = (frames,) if channels == 1 else (frames, channels)
    return np.random.default_rng(seed).uniform(-1, 1, shape).astype(np.float32)


def fed(sink, audio, block):
    with sink:
        for start in range(0, len(audio), block):
            sink.write(audio[start : start + block])
    return sink


@pytest.mark.parametrize("block", BLOCKS)
@pytest.mark.parametrize("channels", [1, 2])
@pytest.mark.parametrize("expected", [0, 10_000, 300_000])
def test_memory_returns_what_was_written_whatever_the_block_size(block, channels, expected):
    audio = noise(100_000 if block > 1 else 2_000, channels)
    sink = fed(MemorySink(channels, expected), audio, block)
    assert sink.audio.dtype == np.float32
    assert sink.frames == len(audio)
    np.testing.assert_array_equal(sink.audio, audio)


@pytest.mark.parametrize("frames", [0, 1])
def test_memory_takes_the_shortest_renders(frames):
    assert fed(MemorySink(), noise(frames), 64).audio.shape == (frames,)
    assert fed(MemorySink(2), noise(frames, 2), 64).audio.shape == (frames, 2)


def test_a_block_is_copied_so_that_its_maker_can_use_it_again():
    block = noise(100)
    kept = block.copy()
    with MemorySink() as sink:
        sink.write(block)
        block[:] = 0.0
    np.testing.assert_array_equal(sink.audio, kept)


def test_an_empty_block_changes_nothing():
    with MemorySink() as sink:
        sink.write(noise(0))
    assert sink.audio.shape == (0,)


def test_a_block_of_other_channels_is_refused():
    with pytest.raises(ValueError, match="2 channels"):
        MemorySink(2).write(noise(10))
    with pytest.raises(ValueError, match="1 channels"):
        MemorySink().write(noise(10, 2))


def test_nothing_is_taken_after_the_end():
    sink = fed(MemorySink(), noise(10), 10)
    sink.close()
    sink.abandon()
    assert len(sink.audio) == 10
    with pytest.raises(ValueError, match="closed"):
        sink.write(noise(1))


def test_an_error_abandons():
    sink = MemorySink()

    def fail_on_the_way():
        with sink:
            sink.write(noise(10))
            raise RuntimeError("of the test")

    with pytest.raises(RuntimeError, match="of the test"):
        fail_on_the_way()
    assert len(sink.audio) == 0
    assert sink.frames == 0


def test_the_audio_is_not_there_before_the_end():
    sink = MemorySink()
    with pytest.raises(ValueError, match="closed"):
        _ = sink.audio


def test_growing_allocates_little_more_than_the_audio():
    block = noise(16_384)
    tracemalloc.start()
    try:
        with MemorySink() as sink:
            for _ in range(300):
                sink.write(block)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 1.3 * sink.audio.nbytes


_TEN_MINUTES = """
import sys
import numpy as np
from glidesmith.sink import MemorySink

def peak_bytes():
    with open("/proc/self/status") as facts:
        return next(int(line.split()[1]) * 1024 for line in facts if line.startswith("VmHWM"))

blocks, expected = int(sys.argv[1]), int(sys.argv[2])
block = np.ones(16_384, np.float32)
before = peak_bytes()
with MemorySink(1, expected) as sink:
    for _ in range(blocks):
        sink.write(block)
print((peak_bytes() - before) / sink.audio.nbytes)
"""


@pytest.mark.parametrize("hint", [0.0, 1.0, 1.4])
def test_resident_memory_stays_within_one_and_three_tenths_of_the_audio(hint):
    """The project's own bound, 1.3 times the audio, with the length unknown, known and overstated."""
    blocks = 1758 if LONG else 600
    expected = int(hint * blocks * 16_384)
    run = [sys.executable, "-c", _TEN_MINUTES, str(blocks), str(expected)]
    assert float(subprocess.run(run, capture_output=True, text=True, check=True).stdout) < 1.3
