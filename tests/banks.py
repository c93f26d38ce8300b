"""Small banks for tests of batches: presets of a fraction of a second, and folders compared to the byte."""

import hashlib
from pathlib import Path

from commands import PHRASE, PRESET

JOURNAL = ".glidesmith-batch"
SHORT = PHRASE.replace("240", "960")


def lay_bank(folder: Path, *names: str, phrase: str = SHORT) -> Path:
    """Presets of those names, every one a little different, and the phrase that they play."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "line.toml").write_text(phrase)
    for number, name in enumerate(names or ("lead.toml", "basses/deep.toml", "basses/round.toml"), 1):
        lay_preset(folder, name, rise_ms=number)
    return folder


def lay_preset(folder: Path, name: str, rise_ms: float = 1, text: str = "") -> Path:
    """One preset, which plays the bank's phrase."""
    path = folder / name
    path.parent.mkdir(parents=True, exist_ok=True)
    up = "../" * name.count("/")
    content = PRESET.replace('"20 ms"', f'"{rise_ms} ms"', 1).replace("Under test", name)
    path.write_text(text or f'{content}[phrase]\nfile = "{up}line.toml"\n')
    return path


def contents(folder: Path) -> dict[str, str]:
    """The hash of every file in a folder and below, but for the batch's journal."""
    return {
        path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and path.name != JOURNAL
    }


def times(folder: Path) -> dict[str, int]:
    """When every WAV was written."""
    return {path.relative_to(folder).as_posix(): path.stat().st_mtime_ns for path in folder.rglob("*.wav")}
