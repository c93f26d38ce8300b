"""``glidesmith check``: whether presets and phrases are fit to render."""

import errno
import os
import stat
from collections.abc import Iterable, Iterator, Mapping
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
    preset names. Of each folder among PATH..., every .toml, .mid and .midi file in it and below is checked,
    and a folder that can't be read is bad. Mistakes go to standard error, a line each; the exit status is 1
    when there are any.

    \b
    Example:
      glidesmith check lead.toml line.mid
      glidesmith check presets
    """
    found = list(_files(paths))
    if not found:
        raise click.UsageError("there is nothing to check: no .toml, .mid or .midi file in the folders given")
    checked = [_check(path, problem) for path, problem in found]
    bad = sum(not facts["ok"] for facts in checked)
    if as_json:
        click.echo(json_text({"checked": checked, "failed": bad}))
    else:
        click.echo(f"{_counted(len(checked), 'file')} checked: {len(checked) - bad} good, {bad} bad")
    return 1 if bad else 0


def _counted(number: int, noun: str) -> str:
    return f"{number:,} {noun}{'' if number == 1 else 's'}"


def _files(paths: Iterable[Path]) -> Iterator[tuple[Path, OSError | None]]:
    """The files to check: those named, and those in and below the folders named, each once, in order.

    A folder that can't be read is among them, with the reason.
    """
    seen: set[str] = set()
    for path in paths:
        inside = _inside(path) if os.path.isdir(path) else {path: None}  # noqa: PTH112 (never raises)
        for item in sorted(inside):
            identity = os.path.realpath(item)
            if identity not in seen:
                seen.add(identity)
                yield item, inside[item]


def _inside(folder: Path) -> Mapping[Path, OSError | None]:
    """The presets and phrases in a folder and below, and with a reason the folders that can't be read."""
    unread: list[OSError] = []
    found: dict[Path, OSError | None] = {}
    for place, _, names in os.walk(folder, onerror=unread.append):
        paths = (Path(place, name) for name in names)
        found |= {path: None for path in paths if path.suffix.lower() in SUFFIXES and _may_be_file(path)}
    return found | {Path(problem.filename): problem for problem in unread}


def _may_be_file(path: Path) -> bool:
    """Whether it is a regular file, or one of which the system won't say what it is."""
    try:
        return stat.S_ISREG(path.stat().st_mode)
    except OSError as problem:
        return problem.errno not in (errno.ENOENT, errno.ELOOP)


def _check(path: Path, problem: OSError | None) -> dict[str, Any]:
    """The verdict on one file, fit for JSON; its mistakes are told at once."""
    kind = "folder" if problem is not None else _kind(path)
    facts: dict[str, Any] = {"path": str(path), "kind": kind, "ok": True, "errors": [], "warnings": []}
    try:
        if problem is not None:
            raise problem
        facts["warnings"] = list(_phrase(path) if kind == "phrase" else _preset(path))
    except (GlidesmithError, MemoryError) as mistake:
        facts |= {"ok": False, "errors": list(error_lines(mistake))}
    except OSError as unread:
        reason = f"can't be read ({unread.strerror or unread}); check its permissions and the disk"
        facts |= {"ok": False, "errors": [f"{path}: {reason}"]}
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

            read_cycle(preset.oscillator.file, preset.where)
        return preset.unused()
    from glidesmith.program import compile_program

    phrase = PhraseChoice().load(preset)
    warnings = compile_program(preset, phrase, _RATE).warnings
    return (*preset.unused(), *ignored_lines(phrase), *warnings)
