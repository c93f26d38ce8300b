"""Loudness and true peak together against `pyloudnorm`, an independent meter that knows loudness alone.

The steady sine is the hard case: every stretch comes near the peak, so none is left out of the interpolation.
"""

import numpy as np
from pairing import paired

from glidesmith.loudness import measure_loudness

SAMPLE_RATE = 48_000


def signals(seconds: float) -> dict[str, np.ndarray]:
    """A steady sine, a steady saw, noise, and decaying notes, two a second."""
    time_s = np.arange(int(seconds * SAMPLE_RATE)) / SAMPLE_RATE
    sine = np.sin(2 * np.pi * 440 * time_s)
    return {
        "a sine": 0.5 * sine,
        "a saw": (110.3 * time_s) % 1 - 0.5,
        "noise": 0.1 * np.random.default_rng(3).standard_normal(time_s.size),
        "decaying notes": 0.5 * sine * np.exp(-8 * (time_s % 0.5)),
    }


def report(runs: int, scale: float) -> list[str]:
    """The ratio of the times for each signal."""
    try:
        import pyloudnorm
    except ImportError:
        return ["loudness: install pyloudnorm to compare"]
    meter, lines = pyloudnorm.Meter(SAMPLE_RATE, filter_class="DeMan"), []
    for name, x in signals(max(60 * scale, 1)).items():
        single = x.astype(np.float32)
        pair = paired(
            lambda x=single: measure_loudness(x, SAMPLE_RATE),
            lambda x=x: meter.integrated_loudness(x),
            runs,
        )
        title = f"measure_loudness, true peak included / pyloudnorm, loudness alone, {name}"
        lines.append(pair.line(title, "at most 0.33", x.size * 1e-9, "ns a sample"))
    return lines
