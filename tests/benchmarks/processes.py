"""Whole processes: what it costs to start, to render for the very first time, and to render again."""

import os
import subprocess
import sys
import tempfile
from pathlib import Path

from pairing import paired, seconds

ROOT = Path(__file__).resolve().parents[2]
PRESET = ROOT / "presets" / "night-ferry-lead.toml"
PHRASE = """title = "Eight seconds"
tempo_bpm = 60.0
notes = [
  { at = 0.0, lasts = 4.25, note = "D3" },
  { at = 4.0, lasts = 3.7, note = "A3" },
]
"""


def process(*arguments: str, cache: str | None = None) -> None:
    """Run one process to its end, what it prints thrown away."""
    environment = os.environ | ({"GLIDESMITH_CACHE": cache} if cache else {})
    subprocess.run([sys.executable, *arguments], check=True, env=environment, capture_output=True)


def report(runs: int, scale: float) -> list[str]:
    """Start, first-ever render and later render, each against an import that any such program needs."""
    with tempfile.TemporaryDirectory() as folder:
        phrase, output = Path(folder, "eight.toml"), Path(folder, "eight.wav")
        phrase.write_text(PHRASE)
        command = ["-m", "glidesmith", "render", str(PRESET), "--phrase", str(phrase), "-o", str(output)]

        def render(cache: str | None = None) -> None:
            process(*command, cache=cache)

        lines = []
        version = paired(
            lambda: process("-m", "glidesmith", "--version"), lambda: process("-c", "import numpy"), runs
        )
        lines.append(version.line("glidesmith --version / import numpy", "under 3"))
        imported = paired(
            lambda: process("-c", "import glidesmith"), lambda: process("-c", "import numpy"), runs
        )
        lines.append(imported.line("import glidesmith / import numpy", "for information"))
        later = paired(render, lambda: process("-c", "import numba, soundfile"), runs)
        lines.append(later.line("later render of 8 s / import numba, soundfile", "at most 4"))
        first = seconds(lambda: render(str(Path(folder, "cache"))))
        lines.append(f"first-ever render of 8 s, compiling everything: {first:.3g} s")
    return lines
