"""Packing against `wav.quantise` and plain arithmetic, bit for bit."""

import numpy as np
import pytest

from glidesmith.packing import packed, scale
from glidesmith.wav import quantise


def plain(codes, depth):
    """Little-endian bytes of whole numbers, one after the other, in Python."""
    if depth == "float":
        return codes.astype("<f4").tobytes()
    return b"".join(int(code).to_bytes(depth // 8, "little", signed=True) for code in codes)


@pytest.mark.parametrize("depth", [16, 24, "float"])
@pytest.mark.parametrize("count", [0, 1, 2, 3, 4, 5, 7, 1021])
def test_the_bytes_are_those_of_rounding_to_the_nearest(depth, count):
    x = np.clip(np.random.default_rng(count).standard_normal(count) * 0.5, -1, 1).astype(np.float32)
    assert bytes(packed(x, depth)) == plain(quantise(x, depth)[0], depth)


@pytest.mark.parametrize("depth", [16, 24])
def test_ties_go_to_even_and_full_scale_is_held(depth):
    full = 2 ** (depth - 1)
    steps = np.array([-full, -full + 0.5, -1.5, -0.5, 0.5, 1.5, 2.5, full - 1, full - 0.5, full])
    x = (steps / full).astype(np.float32)
    exact = x.astype(np.float64) * full
    wanted = [max(min(round(value), full - 1), -full) for value in exact]  # Python's round: ties to even
    found = np.frombuffer(bytes(packed(x, depth)), np.uint8).reshape(-1, depth // 8)
    codes = [int.from_bytes(bytes(row), "little", signed=True) for row in found]
    assert codes == wanted
    assert codes[-1] == full - 1


@pytest.mark.parametrize("depth", [16, 24, "float"])
def test_a_gain_is_applied_in_single_precision_first(depth):
    x = np.random.default_rng(5).uniform(-1, 1, 4099).astype(np.float32)
    gain = 10.0 ** (-5.3 / 20.0)
    scaled = (x * np.float64(gain)).astype(np.float32)
    assert bytes(packed(x, depth, gain)) == plain(quantise(scaled, depth)[0], depth)
    out = np.empty_like(x)
    scale(x, gain, out)
    assert np.array_equal(out, scaled)
