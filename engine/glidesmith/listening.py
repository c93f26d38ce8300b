"""The listening stage: what stands between the chain and the ear, and nowhere else.

    chain ─► slot gain ─► level ─► limiter ─► device

Ears come first: whatever is switched, the gains together rise by at most 6 dB in 50 ms (the level before the
slot's gain, and that before the limiter's); one that falls is down 40 dB in 20 ms. The limiter looks at each
sample and lets none over the ceiling. With every gain at exactly 1 and a signal under the ceiling not one bit
changes: it doesn't look ahead, so it delays nothing.
"""

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.compiled import inlined, kernel
from glidesmith.errors import SettingError

if TYPE_CHECKING:
    from numpy.typing import NDArray

RISE_DB_PER_S = 6.0 / 0.05
FALL_DB_PER_S = 40.0 / 0.02
LOWEST_LEVEL_DB, HIGHEST_LEVEL_DB = -90.0, 0.0
LOWEST_CEILING_DB, HIGHEST_CEILING_DB = -40.0, -1.0
FAINT = 10.0 ** (-70.0 / 20.0)
"""Where a fade-in sets off from silence: -70 dB."""

LISTENING = np.dtype(
    [
        ("level", np.float64),
        ("level_goal", np.float64),
        ("limiter", np.float64),
        ("least", np.float64),
        ("ceiling", np.float64),
        ("rise", np.float64),
        ("fall", np.float64),
    ],
    align=True,
)
"""The stage's state.

``level`` is on its way to ``level_goal``; ``limiter`` is the limiter's gain, ``least`` the least that it was
in the block; ``rise`` and ``fall`` are the factors that a gain may change by in one sample.
"""


def listening_record(sample_rate: int, level_db: float, ceiling_db: float, fade: bool) -> "NDArray[Any]":
    """The stage at its start, a `LISTENING` array of shape (1,).

    With ``fade`` the level begins at -70 dB of full scale and rises to ``level_db``. Raises SettingError for
    levels out of range.
    """
    state = np.zeros(1, LISTENING)
    goal = level_factor(level_db)
    if not LOWEST_CEILING_DB <= ceiling_db <= HIGHEST_CEILING_DB:
        raise SettingError(
            f"ceiling {ceiling_db!r} dBFS: give {LOWEST_CEILING_DB:g} to {HIGHEST_CEILING_DB:g}"
        )
    state["level"] = min(FAINT, goal) if fade else goal
    state["level_goal"] = goal
    state["limiter"] = state["least"] = 1.0
    # The ceiling as a float32 that is not over it, so that no sample is.
    ceiling = np.float32(10.0 ** (ceiling_db / 20.0))
    if float(ceiling) > 10.0 ** (ceiling_db / 20.0):
        ceiling = np.nextafter(ceiling, np.float32(0.0))
    state["ceiling"] = float(ceiling)
    state["rise"] = 10.0 ** (RISE_DB_PER_S / 20.0 / sample_rate)
    state["fall"] = 10.0 ** (-FALL_DB_PER_S / 20.0 / sample_rate)
    return state


def level_factor(level_db: float) -> float:
    """The factor of a listening level; exactly 1 at 0 dB. Raises SettingError out of range."""
    if isinstance(level_db, bool) or not (LOWEST_LEVEL_DB <= level_db <= HIGHEST_LEVEL_DB):
        raise SettingError(
            f"level {level_db!r} dBFS: give {LOWEST_LEVEL_DB:g} to {HIGHEST_LEVEL_DB:g} (start low, raise it "
            "slowly)"
        )
    return math.pow(10.0, level_db / 20.0)


@inlined
def approach(gain: float, goal: float, rise: float, fall: float) -> float:
    """A gain one sample further on its way to its goal."""
    if gain < goal:
        return min(gain * rise, goal)
    return max(gain * fall, goal)


@kernel
def hush(stage: Any) -> None:
    """Let the level begin anew from -70 dB."""
    stage.level = min(FAINT, stage.level_goal)


@kernel
def _largest_size(block: Any) -> float:
    largest = np.float32(0.0)
    for i in range(block.size):
        largest = max(largest, abs(block[i]))
    return float(largest)


@inlined
def listen_to(stage: Any, sample: Any, rising: bool) -> Any:
    """One sample at the listening level and under the ceiling.

    While another gain is ``rising`` the limiter's doesn't, so that all of them together keep to the rate.
    """
    rising = rising or stage.level < stage.level_goal
    stage.level = approach(stage.level, stage.level_goal, stage.rise, stage.fall)
    if not rising:
        stage.limiter = min(stage.limiter * stage.rise, 1.0)
    louder = sample * stage.level
    size = abs(louder) * stage.limiter
    if size > stage.ceiling:
        stage.limiter *= stage.ceiling / size
        stage.least = min(stage.least, stage.limiter)
    return np.float32(min(max(louder * stage.limiter, -stage.ceiling), stage.ceiling))


@kernel
def listen(stage: Any, block: Any) -> None:
    """Bring ``block`` (n,) float32 to the listening level and under the ceiling, in place."""
    steady = stage.level == stage.level_goal
    if steady and stage.limiter == 1.0 and _largest_size(block) * stage.level <= stage.ceiling:
        if stage.level != 1.0:
            for i in range(block.size):
                block[i] = np.float32(block[i] * stage.level)
        return
    for i in range(block.size):
        block[i] = listen_to(stage, block[i], False)
