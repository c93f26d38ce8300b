"""Sources of the tests' own for the sound card: compiled, small, and told by their samples."""

from typing import NamedTuple

import numpy as np
from numba import cfunc, njit

from glidesmith.exchange import view_float32, view_int64
from glidesmith.lease import STREAM_CALLBACK

STEPS = 1 << 20
"""The ramp begins again after this many samples; each step is exact in float32."""

_AT, _FRAMES, _CALLBACKS, _UNDERFLOWS, _LAST, _CHANNELS, _STEP = range(7)
_OUTPUT_UNDERFLOW = 4


class Counts(NamedTuple):
    frames: int
    callbacks: int
    underflows: int
    last_block: int
    median_us: float = 0.0
    p999_us: float = 0.0
    worst_us: float = 0.0


@njit(nogil=True)
def _write(state, out, frames, flags):
    at = 0
    for _ in range(frames):
        value = np.float32(state[_AT] % STEPS * state[_STEP]) / np.float32(STEPS)
        state[_AT] += 1
        for _ in range(state[_CHANNELS]):
            out[at] = value
            at += 1
    state[_FRAMES] += frames
    state[_CALLBACKS] += 1
    state[_UNDERFLOWS] += (flags & _OUTPUT_UNDERFLOW) != 0
    state[_LAST] = frames


@cfunc(STREAM_CALLBACK)
def _fill(_given, output, frames, _moment, flags, userdata):
    state = view_int64(userdata, 8)
    _write(state, view_float32(output, np.int64(frames) * state[_CHANNELS]), frames, flags)
    return 0


def ramp(first: int, count: int) -> np.ndarray:
    """The samples that a ramp gives from ``first`` on."""
    return (np.arange(first, first + count) % STEPS / STEPS).astype(np.float32)


class Ramp:
    """Counts samples aloud: sample n has the value n modulo `STEPS`, over `STEPS`."""

    _step = 1

    def __init__(self):
        self.state = np.zeros(8, np.int64)
        self.state[_STEP] = self._step

    def callback(self, channels):
        self.state[_CHANNELS] = channels
        return _fill.address, self.state.ctypes.data

    def fill(self, out, underflow=False):
        self.state[_CHANNELS] = out.shape[1]
        _write(self.state, out.reshape(-1), len(out), _OUTPUT_UNDERFLOW if underflow else 0)

    def counters(self):
        return Counts(*(int(self.state[i]) for i in (_FRAMES, _CALLBACKS, _UNDERFLOWS, _LAST)))


class Silence(Ramp):
    """Writes zeros."""

    _step = 0


class NotCompiled(Ramp):
    """A ramp on a platform where there are no compiled callbacks."""

    def callback(self, channels):
        raise NotImplementedError
