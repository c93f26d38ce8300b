"""`Slew(law="rc")` against `scipy.signal.lfilter`, which computes the same one-pole filter (but for one side
only).
"""

import numpy as np
from pairing import paired
from scipy.signal import lfilter

from glidesmith import Slew

SAMPLE_RATE, TIME_CONSTANT = 48_000, 0.05


def signals(seconds: float) -> dict[str, np.ndarray]:
    """What a slew is given: noise, a square at audio rate, and the steps of a phrase."""
    generator = np.random.default_rng(2)
    count = int(seconds * SAMPLE_RATE)
    return {
        "noise": generator.standard_normal(count),
        "a 110 Hz square": np.sign(np.sin(2 * np.pi * 110 * (np.arange(count) + 0.5) / SAMPLE_RATE)),
        "four steps a second": np.repeat(generator.uniform(-1, 2, count // 12_000 + 1), 12_000)[:count],
    }


def report(runs: int, scale: float) -> list[str]:
    """The ratio for each signal, equal sides; and what unequal sides cost against it."""
    factor = np.exp(-1 / SAMPLE_RATE / TIME_CONSTANT)
    equal, unequal = Slew("rc", TIME_CONSTANT, TIME_CONSTANT), Slew("rc", TIME_CONSTANT, 2 * TIME_CONSTANT)
    lines = []
    for name, x in signals(max(60 * scale, 1)).items():
        for what, slew in (("equal sides", equal), ("unequal sides", unequal)):
            pair = paired(
                lambda s=slew, x=x: s.run(x, SAMPLE_RATE),
                lambda x=x: lfilter([1 - factor], [1, -factor], x),
                runs,
            )
            title = f"Slew(law='rc') / lfilter, {name}, {what}"
            lines.append(pair.line(title, "at most 1.2", x.size * 1e-9, "ns a sample"))
    return lines
