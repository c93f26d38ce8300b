"""What the panel sends thirty times a second, as bytes: where the sound is, how loud, and the trace since.

Both kinds are little-endian. The page reads them in panel_link.js.

    trace   kind 1, mode 0 to 2, slot, 0 · rows (u32) · sample (f64) · position in s, round,
            then the meters of `METERS` and the level (f32 each) · rows of `ROW_FIELDS` (f32)
    sound   kind 2, 0, 0, 0 · frames (u32) · first sample (f64) · samples (f32)
"""

import struct
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

TRACE, SOUND = 1, 2
MODES = {"stopped": 0, "phrase": 1, "keys": 2}
METERS = ("momentary_lufs", "short_term_lufs", "true_peak_dbtp", "peak_dbfs", "gain_reduction_db")
ROW_FIELDS = ("back", "position_s", "target_volts", "pitch_volts", "gate", "control", "gain", "slot")
"""Of a trace row; ``back`` is how many samples before the frame's own sample it stands."""

SILENT_DB = -200.0
_TRACE_HEAD = struct.Struct("<BBbxIdff6f")
_SOUND_HEAD = struct.Struct("<BxxxId")


def trace_frame(
    state: Any, meters: Mapping[str, float | None], rows: "NDArray[Any]", sample_rate: int
) -> bytes:
    """One frame of the trace.

    ``state`` is a `DeckState`, ``meters`` what `Session.meters` gives, ``rows`` are records from `Deck.rows`.
    """
    levels = [_finite(meters.get(name)) for name in METERS]
    head = _TRACE_HEAD.pack(
        TRACE,
        MODES[state.mode],
        state.slot,
        len(rows),
        float(state.sample),
        state.position / sample_rate,
        float(state.round),
        *levels,
        _finite(state.level_db),
    )
    table = np.empty((len(rows), len(ROW_FIELDS)), "<f4")
    table[:, 0] = state.sample - rows["sample"]
    table[:, 1] = rows["position"] / sample_rate
    for column, name in enumerate(ROW_FIELDS[2:], 2):
        table[:, column] = rows[name]
    return head + table.tobytes()


def sound_frame(first_sample: int, samples: "NDArray[np.float32]") -> bytes:
    """A stretch of sound: mono samples, as they go to the listener."""
    return (
        _SOUND_HEAD.pack(SOUND, len(samples), float(first_sample))
        + samples.astype("<f4", copy=False).tobytes()
    )


def _finite(value: float | None) -> float:
    """A level that fits a frame: silence and what is not known yet are very low."""
    return SILENT_DB if value is None or not value > SILENT_DB else min(value, -SILENT_DB)
