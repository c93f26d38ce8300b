"""The amplifier's law: from the control level, 0 to 1, to the gain that the oscillator is multiplied with."""

import math
from typing import Any

import numpy as np

from glidesmith.compiled import inlined, vector_kernel
from glidesmith.elementary import exp2

LAWS = ("linear", "decibel")
AMPLIFIER = np.dtype([("decibel", np.int64), ("octaves", np.float64), ("scale", np.float64)], align=True)
"""``octaves``: the range in doublings of the amplitude, r log2(10)/20; ``scale``: 1/(10^(r/20) − 1)."""


def amplifier_record(law: str, range_db: float) -> "np.ndarray[Any, np.dtype[Any]]":
    """The law as an `AMPLIFIER` array of shape (1,); ``range_db`` 20 to 120 counts for ``decibel`` only."""
    octaves = range_db * math.log2(10.0) / 20.0
    return np.array([(LAWS.index(law), octaves, 1.0 / math.expm1(octaves * math.log(2.0)))], AMPLIFIER)


@inlined
def amplifier_gain(amplifier: Any, control: float) -> float:
    """The gain for a control level.

    The level itself, or (10^(r u/20) − 1)/(10^(r/20) − 1) with r in decibels.
    """
    if amplifier.decibel:
        return min((exp2(amplifier.octaves * control) - 1.0) * amplifier.scale, 1.0)
    return control


@inlined
def amplifier_control(amplifier: Any, gain: float) -> float:
    """The control level that gives a gain: the inverse of `amplifier_gain`."""
    if amplifier.decibel:
        return np.log2(1.0 + gain / amplifier.scale) / amplifier.octaves
    return gain


@vector_kernel
def fill_gain(amplifier: Any, control: Any, gain: Any) -> None:
    """Fill ``gain`` (n,) from ``control`` (n,)."""
    if amplifier.decibel:
        octaves, scale = amplifier.octaves, amplifier.scale
        for i in range(gain.size):
            gain[i] = min((exp2(octaves * control[i]) - 1.0) * scale, 1.0)
    else:
        for i in range(gain.size):
            gain[i] = control[i]
