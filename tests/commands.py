"""The command line under test: in process, or as a process of its own."""

import os
import subprocess
import sys
from pathlib import Path

from click.testing import CliRunner, Result

from glidesmith.command import main

ENVIRONMENT = {name: value for name, value in os.environ.items() if name != "PYTHONUNBUFFERED"}
"""What processes under test get: buffered output, as users have it."""

PRESET = """\
title = "Under test"
[pitch]
law = "rc"
rise = "20 ms"
fall = "30 ms"
[gain]
law = "linear"
rise = "2 ms"
fall = "20 ms"
"""

PHRASE = """\
title = "Under test"
tempo_bpm = 240
notes = [
  { at = 0.0, lasts = 0.9, note = "D3" },
  { at = 0.5, lasts = 0.5, note = "A3" },
]
"""


def run(*arguments: object) -> Result:
    """Run a command in process. Only an exit may come out of it, never another exception."""
    result = CliRunner().invoke(main, [str(argument) for argument in arguments])
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise result.exception
    return result


def process(*arguments: object, **options) -> subprocess.CompletedProcess:
    """Run a command as users do, in a process of its own."""
    command = [sys.executable, "-m", "glidesmith", *map(str, arguments)]
    return subprocess.run(command, **{"capture_output": True, "env": ENVIRONMENT, **options})


def complaint(result: Result) -> str:
    """The one line that a command said on standard error, and it said nothing else."""
    assert result.stdout == ""
    (line,) = result.stderr.splitlines()
    assert line.startswith("glidesmith: ")
    assert line.isprintable()
    return line


def write_preset(
    folder: Path, name: str = "lead.toml", phrase: str | None = "line.toml", text: str = PRESET
) -> Path:
    """A short preset, and the phrase that it names."""
    path = folder / name
    path.write_text(text + (f'[phrase]\nfile = "{phrase}"\n' if phrase else ""))
    if phrase:
        (folder / phrase).write_text(PHRASE)
    return path


def write_midi(path: Path) -> Path:
    """A MIDI file of one note and a controller that has no effect, byte by byte as its specification says."""
    events = bytes.fromhex("00 b0 01 40  00 90 3c 64  60 80 3c 40  00 ff 2f 00")
    header = b"MThd" + bytes.fromhex("00000006 0000 0001 0060")
    path.write_bytes(header + b"MTrk" + len(events).to_bytes(4, "big") + events)
    return path


def long_phrase(folder: Path, minutes: float) -> Path:
    """A phrase that takes a while to render."""
    path = folder / "long.toml"
    path.write_text(f'tempo_bpm = 60\nnotes = [{{ at = 0, lasts = {60 * minutes}, note = "A4" }}]\n')
    return path
