"""The oscillator: an exact phase, and a band-limited cycle read at that phase.

One cycle is 2**62 steps of a whole-number phase, so that sums of any length are exact and the border between
two blocks changes no bit. What the oscillator sounds like at a phase depends on that phase and on the
momentary frequency alone; it has no memory, and so every sample comes out the same however the signal was cut
in blocks.

The frequency is told as a *height*: octaves above 0.45 of the sample rate, where the last partial has to be
gone (see `HIGHEST_SHARE`). *Depth* is the height turned round and counted in levels, `LEVELS_PER_OCTAVE` to
the octave. Tables stand at whole depths. Each holds the partials as loud as they should be for a fundamental
just there: a partial's gain depends on its own frequency alone and falls softly to 0 over the last third of
an octave (see `glidesmith.wavetable.partial_gain`). Between two tables a sample is their blend, linear in
depth. So no partial is ever switched, and where a glide starts or stops suddenly, what corner there is in a
partial's gain is as small as can be. A table is read by cubic interpolation. `glidesmith.wavetable` fills
the tables; this module says how they lie in memory.
"""

from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.compiled import inlined, kernel, vector_kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Whole = int | np.int64

CYCLE = 1 << 62
"""One cycle in units of the whole-number phase."""

HIGHEST_SHARE = 0.45
"""Height 0 as a share of the sample rate: no partial sounds above it."""

LEVELS_PER_OCTAVE = 48
"""So many that the corners between the straight pieces of a partial's gain stay under -95 dB of the tone."""

LEVEL = np.dtype(
    [
        ("from_depth", np.float64),
        ("to_depth", np.float64),
        ("zero_depth", np.float64),
        ("slope", np.float64),
        ("start", np.int32),
        ("shift", np.int32),
        ("upper_start", np.int32),
        ("upper_shift", np.int32),
    ],
    align=True,
)
"""One level: the depths from m to m + 1, and the two tables that are blended there.

``from_depth``, ``to_depth``: the depths around this level that the same two tables serve. ``zero_depth``,
``slope``: the upper table's weight is (``zero_depth`` - depth) · ``slope``, held between 0 and 1. ``start``:
the lower table's first cell. ``shift``: the phase's bits below the cell number, 62 - log2 of the table's
size. ``upper_…``: the same of the upper table; where it is the lower table too, that one is read alone. A
level's place in the array is its number + 1; the first record is silence.
"""

_LEVELS = float(LEVELS_PER_OCTAVE)
_PHASE_MASK = CYCLE - 1
_FRACTION_BITS = 23
_FRACTION_MASK = (1 << _FRACTION_BITS) - 1
_ONE_AS_BITS = 0x3F800000
_STRETCH = 16
"""Samples looked at together when a run of one level is followed."""
_SHORT_RUN = 8
"""Runs shorter than this are left to the loop that looks up the level of every sample."""


@kernel
def advance_phase(increments: "NDArray[np.int64]", start: int, phases: "NDArray[np.int64]") -> int:
    """Sum up the phase over a block.

    Parameters
    ----------
    increments : int64 (n,)
        Phase from each sample to the next, in units of 2**-62 cycles; whole cycles are ignored.
    start : int
        The phase at the first sample, 0 to 2**62 - 1.
    phases : int64 (n,), written
        The phase at each sample.

    Returns
    -------
    int
        The phase at the sample after the last: the next block's ``start``.
    """
    phase = start & _PHASE_MASK
    for i in range(increments.size):
        phases[i] = phase
        phase = (phase + (increments[i] & _PHASE_MASK)) & _PHASE_MASK
    return phase


@inlined
def _first_half(word: np.int64) -> float:
    """The first of the two float32 numbers in 64 bits."""
    return np.int32(word).view(np.float32)  # type: ignore[return-value]


@inlined
def _second_half(word: np.int64) -> float:
    """The second of the two float32 numbers in 64 bits."""
    return np.int32(word >> 32).view(np.float32)  # type: ignore[return-value]


@inlined
def _fraction(phase: "Whole", shift: "Whole") -> float:
    """How far into its cell a phase lies, 0 to 1, to 23 bits: a float32 from 1 to 2, less 1."""
    bits = ((phase >> (shift - _FRACTION_BITS)) & _FRACTION_MASK) | _ONE_AS_BITS
    return np.int32(bits).view(np.float32) - np.float32(1.0)  # type: ignore[return-value]


@inlined
def _read(cells: "NDArray[np.int64]", start: "Whole", shift: "Whole", phase: "Whole") -> float:
    """A table at a phase: the cubic c0 + c1 f + c2 f² + c3 f³ of its cell, by Horner's rule."""
    # Unsigned indices spare the compiler Python's negative ones, which would keep it from vector registers.
    place = 2 * (start + (phase >> shift))
    fraction = _fraction(phase, shift)
    low, high = cells[np.uint64(place)], cells[np.uint64(place + 1)]
    cubic = _first_half(high) + fraction * _second_half(high)
    return _first_half(low) + fraction * (_second_half(low) + fraction * cubic)


@inlined
def _depth(height: float) -> float:
    return height * -_LEVELS


@inlined
def _place(depth: float, count: int) -> "Whole":
    """Where a depth's level stands in the array of ``count`` levels; NaN is silence, the last has no end."""
    held = depth if depth > -1.0 else -1.0
    lowest = np.float64(count - 2)
    held = held if held < lowest else lowest
    return np.int64(np.int32(np.floor(held))) + 1


@inlined
def _upper_weight(zero_depth: float, slope: float, depth: float) -> float:
    """The weight of a level's upper table."""
    weight = np.float32((zero_depth - depth) * slope)
    weight = weight if weight > np.float32(0.0) else np.float32(0.0)
    return weight if weight < np.float32(1.0) else np.float32(1.0)  # type: ignore[return-value]


@vector_kernel
def _oscillate_plain(
    begin: int,
    end: int,
    phases: "NDArray[np.int64]",
    level: Any,
    cells: "NDArray[np.int64]",
    out: "NDArray[np.float32]",
) -> None:
    """One table for the whole run."""
    start, shift = np.int64(level["start"]), np.int64(level["shift"])
    for i in range(np.uint64(begin), np.uint64(end)):
        out[i] = _read(cells, start, shift, phases[i])


@vector_kernel
def _oscillate_blend(
    begin: int,
    end: int,
    phases: "NDArray[np.int64]",
    heights: "NDArray[np.float64]",
    level: Any,
    cells: "NDArray[np.int64]",
    out: "NDArray[np.float32]",
) -> None:
    """Two tables for the whole run."""
    start, shift = np.int64(level["start"]), np.int64(level["shift"])
    upper_start, upper_shift = np.int64(level["upper_start"]), np.int64(level["upper_shift"])
    zero_depth, slope = level["zero_depth"], level["slope"]
    for i in range(np.uint64(begin), np.uint64(end)):
        lower = _read(cells, start, shift, phases[i])
        upper = _read(cells, upper_start, upper_shift, phases[i])
        out[i] = lower + _upper_weight(zero_depth, slope, _depth(heights[i])) * (upper - lower)


@vector_kernel
def _oscillate_mixed(
    begin: int,
    end: int,
    phases: "NDArray[np.int64]",
    heights: "NDArray[np.float64]",
    levels: "NDArray[Any]",
    cells: "NDArray[np.int64]",
    out: "NDArray[np.float32]",
) -> None:
    """Any heights: every sample looks up its own level, which costs more and gives the same bits."""
    for i in range(np.uint64(begin), np.uint64(end)):
        depth = _depth(heights[i])
        place = _place(depth, levels.size)
        level = levels[np.uint64(place)]
        lower = _read(cells, np.int64(level["start"]), np.int64(level["shift"]), phases[i])
        upper = _read(cells, np.int64(level["upper_start"]), np.int64(level["upper_shift"]), phases[i])
        out[i] = lower + _upper_weight(level["zero_depth"], level["slope"], depth) * (upper - lower)


@vector_kernel
def _outside(begin: int, end: int, heights: "NDArray[np.float64]", depth_from: float, depth_to: float) -> int:
    """How many heights of a run lie outside a span of depths."""
    count = 0
    for i in range(np.uint64(begin), np.uint64(end)):
        depth = _depth(heights[i])
        count += not (depth >= depth_from and depth < depth_to)
    return count


@kernel
def _run_end(heights: "NDArray[np.float64]", begin: int, depth_from: float, depth_to: float) -> int:
    """The end of the run from ``begin`` whose depths lie in a span: by stretches, then sample by sample."""
    end = begin
    while (
        end + _STRETCH <= heights.size and _outside(end, end + _STRETCH, heights, depth_from, depth_to) == 0
    ):
        end += _STRETCH
    while end < heights.size:
        depth = _depth(heights[end])
        if not (depth >= depth_from and depth < depth_to):
            break
        end += 1
    return end


@kernel
def oscillate(
    phases: "NDArray[np.int64]",
    heights: "NDArray[np.float64]",
    levels: "NDArray[Any]",
    cells: "NDArray[np.int64]",
    out: "NDArray[np.float32]",
) -> None:
    """Sound the tables over a block. No array may overlap another.

    Each sample depends on its own phase and height only. Blocks are cut in runs of one level, since loops
    over the same tables fill whole vector registers; runs too short for that go through a loop that looks up
    every sample's level.

    Parameters
    ----------
    phases : int64 (n,)
        As `advance_phase` gives them, 0 to 2**62 - 1.
    heights : float64 (n,)
        log2(frequency / (0.45 · sample rate)). Above 0, and for NaN, the output is 0.
    levels, cells
        From `glidesmith.wavetable.Wavetables`. Heights under the lowest level are served by the lowest level.
    out : float32 (n,), written
        Always finite. Edges overshoot the naive wave by a tenth of their height (Gibbs' phenomenon), and a
        narrow pulse without its mean reaches 1.9.
    """
    begin = 0
    while begin < phases.size:
        level = levels[_place(_depth(heights[begin]), levels.size)]
        end = _run_end(heights, begin, level["from_depth"], level["to_depth"])
        if end - begin < _SHORT_RUN:
            end = min(begin + _STRETCH, phases.size)
            _oscillate_mixed(begin, end, phases, heights, levels, cells, out)
        elif level["start"] == level["upper_start"]:
            _oscillate_plain(begin, end, phases, level, cells, out)
        else:
            _oscillate_blend(begin, end, phases, heights, level, cells, out)
        begin = end
