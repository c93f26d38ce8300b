"""``glidesmith check``: whether presets and phrases are fit to render."""

import os
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any, Literal

import click

from glidesmith.command import error_lines, tell
from glidesmith.command.options import FilePath, PhraseChoice, ignored_lines, json_option, json_text
from glidesmith.errors import GlidesmithError, PhraseError

SUFFIXES = (".toml", ".mid", ".midi")
_RATE = 48_000
_MOST_BYTES = 16_000_000


@click.command("check")
@click.argument("paths", nargs=-1, required=True, type=FilePath(), metavar="PATH...")
@json_option
def command(paths: tuple[Path, ...], as_json: bool) -> int:
    """Check presets and phrases without rendering them.

    They are read as strictly as rendering reads them, and so are the phrase and the oscillator file that a
    preset names. Of each folder among PATH..., every .toml, .mid and .midi file in it and below is checked.
    Mistakes go to standard error, a line each; the exit status is 1 when a file has any.

    \b
    Example:
      glidesmith check lead.toml line.mid
      glidesmith check presets
    """
    found = list(_files(paths))
    if not found:
        raise click.UsageError("there is nothing to check: no .toml, .mid or .midi file in the folders given")
    checked = [_check(path) for path in found]
    bad = sum(not facts["ok"] for facts in checked)
    if as_json:
        click.echo(json_text({"checked": checked, "failed": bad}))
    else:
        click.echo(f"{_counted(len(checked), 'file')} checked: {len(checked) - bad} good, {bad} bad")
    return 1 if bad else 0


def _counted(number: int, noun: str) -> str:
    return f"{number:,} {noun}{'' if number == 1 else 's'}"


def _files(paths: Iterable[Path]) -> Iterator[Path]:
    """The files to check: those named, and those in and below the folders named, each once, in order."""
    seen: set[str] = set()
    for path in paths:
        if path.is_dir():
            inside = sorted(p for p in path.rglob("*") if p.suffix.lower() in SUFFIXES and p.is_file())
        else:
            inside = [path]
        for file in inside:
            identity = os.path.realpath(file)
            if identity not in seen:
                seen.add(identity)
                yield file


def _check(path: Path) -> dict[str, Any]:
    """The verdict on one file, fit for JSON; its mistakes are told at once."""
    facts: dict[str, Any] = {"path": str(path), "kind": _kind(path), "ok": True, "errors": [], "warnings": []}
    try:
        facts["warnings"] = list(_phrase(path) if facts["kind"] == "phrase" else _preset(path))
    except (GlidesmithError, OSError, MemoryError) as problem:
        facts |= {"ok": False, "errors": list(error_lines(problem))}
    tell(*(f"glidesmith: {line}" for line in facts["errors"]))
    tell(*(f"glidesmith: {path}: {line}" for line in facts["warnings"]))
    return facts


def _kind(path: Path) -> Literal["preset", "phrase"]:
    """What a file means to be: MIDI and lists of notes are phrases; anything else is checked as a preset."""
    from glidesmith.text import decoded, read_bytes, toml_mapping

    if path.suffix.lower() in SUFFIXES[1:]:
        return "phrase"
    try:
        data = read_bytes(path, _MOST_BYTES, PhraseError)
        if data.startswith(b"MThd"):
            return "phrase"
        keys = toml_mapping(decoded(data, "", PhraseError), "", PhraseError).keys()
    except GlidesmithError:
        return "preset"
    return "phrase" if keys & {"notes", "tempo_bpm"} and not keys & {"pitch", "gain"} else "preset"


def _phrase(path: Path) -> tuple[str, ...]:
    from glidesmith.phrase import load_phrase

    return ignored_lines(load_phrase(path))


def _preset(path: Path) -> tuple[str, ...]:
    """What rendering does before the first sample; without a phrase of its own a preset is checked alone."""
    from glidesmith.preset import load_preset

    preset = load_preset(path)
    if preset.phrase is None:
        if preset.oscillator.file is not None:
            from glidesmith.wavetable import read_cycle

            read_cycle(preset.oscillator.file)
        return ()
    from glidesmith.program import compile_program

    return compile_program(preset, PhraseChoice().load(preset), _RATE).warnings
