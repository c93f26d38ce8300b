"""How playing to a sound card went, in words that say what to change."""

from typing import TYPE_CHECKING

from glidesmith.text import counted

if TYPE_CHECKING:
    from glidesmith.soundcard import CountersLike, DeviceFacts

_FULL = 0.7
_LATE_S = 0.05


def report_lines(counters: "CountersLike", facts: "DeviceFacts") -> list[str]:
    """How playing went, in words that say what to change."""
    block = counters.last_block or facts.block
    deadline_us = 1e6 * block / facts.sample_rate
    dropped = (
        counted(counters.underflows, "underflow", "underflows") if counters.underflows else "no underflow"
    )
    lines = [
        f"{facts.device} ({facts.host_api}): {counters.frames:,} frames in "
        f"{counted(counters.callbacks, 'block', 'blocks')}, {dropped}, "
        f"latency {1000 * facts.latency_s:.1f} ms"
    ]
    if deadline_us:
        lines.append(
            f"the slowest block took {counters.worst_us / 1000:.2f} ms of its {deadline_us / 1000:.2f} ms; "
            f"the median {100 * counters.median_us / deadline_us:.2g} %, 99.9 % of them at most "
            f"{100 * counters.p999_us / deadline_us:.2g} %"
        )
    advice = _advice(counters, facts, block, deadline_us)
    return [*lines, advice] if advice else lines


def _advice(counters: "CountersLike", facts: "DeviceFacts", block: int, deadline_us: float) -> str | None:
    larger = max(2 * block, 128)
    if counters.underflows and not facts.compiled:
        return "underflows of the Python callback come from Python being busy: leave --python-callback out"
    if counters.underflows and counters.p999_us > _FULL * deadline_us:
        return f"the engine needs most of each block: give --block {larger}, or a lower --rate"
    if counters.underflows:
        return (
            f"the system woke the audio thread too late, not the engine: give --block {larger} or --latency "
            "high, or close what keeps the processor busy"
        )
    if facts.latency_s > _LATE_S:
        return (
            f"{1000 * facts.latency_s:.0f} ms can be felt when playing keys: give --latency low, or a "
            "smaller --block"
        )
    return None
