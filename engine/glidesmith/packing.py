"""Samples packed as a WAV's data chunk holds them, in compiled code: what `wav.quantise` says, to the bit.

Where nothing is dithered and thousands of files are written, rounding and packing in one pass costs a tenth
of doing it array by array.
"""

import sys
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.compiled import inlined, vector_kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from glidesmith.wav import Depth

_FULL_16, _FULL_24 = 2.0**15, 2.0**23


@inlined
def _code(sample: Any, gain: float, full: float) -> Any:
    """A sample times a gain as a whole number of steps: rounded to single precision, then to a step."""
    steps = np.rint(np.float64(np.float32(np.float64(sample) * gain)) * full)
    return np.int32(min(max(steps, -full), full - 1.0))


@vector_kernel
def _pack_24(samples: Any, gain: float, words: Any) -> None:
    """Four samples of three bytes in each three words; ``samples`` is a whole number of fours."""
    for i in range(samples.size // 4):
        a, b = _code(samples[4 * i], gain, _FULL_24), _code(samples[4 * i + 1], gain, _FULL_24)
        c, d = _code(samples[4 * i + 2], gain, _FULL_24), _code(samples[4 * i + 3], gain, _FULL_24)
        words[3 * i] = (a & 0xFFFFFF) | (b << 24)
        words[3 * i + 1] = ((b >> 8) & 0xFFFF) | (c << 16)
        words[3 * i + 2] = ((c >> 16) & 0xFF) | (d << 8)


@vector_kernel
def _pack_16(samples: Any, gain: float, words: Any) -> None:
    """Two samples in each word; ``samples`` is a whole number of twos."""
    for i in range(samples.size // 2):
        a, b = _code(samples[2 * i], gain, _FULL_16), _code(samples[2 * i + 1], gain, _FULL_16)
        words[i] = (a & 0xFFFF) | (b << 16)


@vector_kernel
def scale(samples: Any, gain: float, out: Any) -> None:
    """``samples`` times ``gain`` in double precision, rounded to single."""
    for i in range(samples.size):
        out[i] = np.float32(np.float64(samples[i]) * gain)


def packed(samples: "NDArray[np.float32]", depth: "Depth", gain: float = 1.0) -> memoryview:
    """Samples (n,), finite and within ±1 once multiplied by ``gain``, as little-endian bytes (n · bytes,)."""
    if depth == "float":
        scaled = np.empty_like(samples)
        scale(samples, gain, scaled)
        return scaled.astype("<f4", copy=False).view(np.uint8).data
    together, words_each, kernel = (4, 3, _pack_24) if depth == 24 else (2, 1, _pack_16)
    groups, rest = divmod(samples.size, together)
    words = np.empty((groups + (rest > 0)) * words_each, np.int32)
    kernel(samples[: groups * together], gain, words)
    if rest:
        last = np.zeros(together, np.float32)
        last[:rest] = samples[groups * together :]
        kernel(last, gain, words[groups * words_each :])
    if sys.byteorder == "big":
        words.byteswap(inplace=True)
    return words.view(np.uint8)[: samples.size * depth // 8].data
