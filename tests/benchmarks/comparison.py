"""A comparison set against one render: whole processes, warm, as a user runs them."""

import shutil
import tempfile
from pathlib import Path

from pairing import paired
from processes import PRESET, process

NOTE = '  {{ at = {at}, lasts = {lasts}, note = "{note}" }},'
NOTES = ("D3", "A3", "G3", "F3", "E3", "D3", "C4", "A3")


def eight_seconds(folder: Path, scale: float) -> Path:
    """A phrase of a note every half second, half of them slurred."""
    count = max(2, round(16 * scale))
    rows = [
        NOTE.format(at=k / 2, lasts=0.55 if k % 2 else 0.45, note=NOTES[k % len(NOTES)]) for k in range(count)
    ]
    phrase = folder / "eight.toml"
    phrase.write_text('title = "Eight seconds"\ntempo_bpm = 60.0\nnotes = [\n' + "\n".join(rows) + "\n]\n")
    return phrase


def report(runs: int, scale: float) -> list[str]:
    """Eight candidates with their page, and the same set with one candidate added, against rendering one."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        shared = ["--phrase", str(eight_seconds(folder, scale))]
        laws = "pitch.law=linear,rc,log,exp"

        def compare(place: str, rises: str) -> None:
            command = ["compare", str(PRESET), *shared, "-o", str(folder / place), "--vary", laws]
            process("-m", "glidesmith", *command, "--vary", f"pitch.rise={rises}")

        def anew() -> None:
            shutil.rmtree(folder / "anew", ignore_errors=True)
            compare("anew", "60ms,120ms")

        def added() -> None:
            shutil.rmtree(folder / "added", ignore_errors=True)
            shutil.copytree(folder / "four", folder / "added")
            compare("added", "60ms,120ms")

        def render() -> None:
            process("-m", "glidesmith", "render", str(PRESET), *shared, "-o", str(folder / "one.wav"))

        compare("four", "60ms")
        sizes = "of a phrase of 8 s" if scale == 1.0 else "of a short phrase"
        whole, more = paired(anew, render, runs), paired(added, render, runs)
        return [
            whole.line(f"set of 8 candidates {sizes} / render of one", "at most 2.5"),
            more.line(f"the same with 4 of the 8 there already {sizes} / render of one", "for information"),
        ]
