"""Memory of a long render against the audio it returns.

The peak of a process of its own, less what importing costs.
"""

import subprocess
import sys
from pathlib import Path

TESTS = Path(__file__).resolve().parents[1]

WARM = """
import resource, sys
sys.path.insert(0, {tests!r})
from glidesmith import render
from making import make_phrase, make_preset
render(make_preset(), make_phrase((0, 1, 60)), {rate})
"""
LONG = """
phrase = make_phrase(*((i, i + 1, 48 + i % 24) for i in range({seconds})))
audio = render(make_preset(), phrase, {rate}).audio
print(audio.nbytes, file=sys.stderr)
"""
PEAK = "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)"


def peak_kilobytes(code: str, **values: object) -> tuple[int, str]:
    """The largest resident size of a process that runs ``code``, and what it said."""
    done = subprocess.run(
        [sys.executable, "-c", code.format(**values)], check=True, capture_output=True, text=True
    )
    return int(done.stdout), done.stderr


def report(runs: int, scale: float) -> list[str]:
    """The ratio, for the in-memory render of ten minutes."""
    seconds, rate = max(int(600 * scale), 10), 48_000
    values = {"tests": str(TESTS), "seconds": seconds, "rate": rate}
    base, _ = peak_kilobytes(WARM + PEAK, **values)
    whole, said = peak_kilobytes(WARM + LONG + PEAK, **values)
    audio = int(said) / 1024
    return [
        f"memory of a {seconds} s render / its audio, beyond what importing costs: "
        f"{(whole - base) / audio:.2f} (at most 1.3) "
        f"— {(whole - base) / 1024:.1f} against {audio / 1024:.1f} MiB; importing: {base / 1024:.0f} MiB"
    ]
