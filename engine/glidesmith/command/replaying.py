"""``glidesmith render --replay``: a live session played again from its log, to a WAV."""

import math
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from glidesmith.command import tell
from glidesmith.command.options import json_text, tell_of_compiling
from glidesmith.command.progress import Progress
from glidesmith.errors import SettingError

if TYPE_CHECKING:
    from glidesmith.logreader import LogReader
    from glidesmith.replay import Replayed, Span
    from glidesmith.wav import Depth, WavSink

_STANDARD_OUTPUT = Path("-")
_WITHOUT_MEANING = (
    "presets", "phrase", "track", "channel", "longest", "rate", "tail", "trace", "cv", "cv_full_scale"
)  # fmt: skip
_LOG_SUFFIX = ".log.jsonl"


def render_replay(context: click.Context, log: Path, whole: bool, quiet: bool, as_json: bool) -> int:
    """Write a session's last capture, or with ``whole`` all of it; the exit status.

    Takes what else was asked from the command's ``context``. Without a depth the file is 32-bit float, which
    holds the very samples. Status 1 where they are not those that were captured.
    """
    from glidesmith.logreader import LogReader
    from glidesmith.replay import replay, span_of
    from glidesmith.text import shortened

    depth, dither_seed = _depth(context)
    output = _output(context.params["output"], log)
    tell_of_compiling()
    with LogReader(log) as reader:
        span = span_of(reader, whole)
        _check_kept(output, log, span)
        progress = False if quiet else context.params["progress"]
        with (
            _sink(output, reader, span, depth, dither_seed, log) as sink,
            Progress(shortened(log.name, 30), progress) as bar,
        ):
            found = replay(reader, span, sink, bar)
        facts = _facts(log, output, reader, span, depth, found)
    tell(*(f"glidesmith: {log}: {line}" for line in found.warnings))
    piped = output == _STANDARD_OUTPUT
    if as_json:
        click.echo(json_text({"rendered": [facts], "failed": []}), err=piped)
    elif not quiet:
        click.echo(_line(facts), err=piped)
    return 1 if found.same is False else 0


def _depth(context: click.Context) -> "tuple[Depth, int | None]":
    """The depth and the dither's seed; options that have no meaning here are refused."""
    given = {
        name
        for name in context.params
        if context.get_parameter_source(name) is not click.core.ParameterSource.DEFAULT
    }
    for name in _WITHOUT_MEANING:
        if name in given and context.params[name]:
            what = "a preset" if name == "presets" else f"--{name.replace('_', '-')}"
            raise click.UsageError(f"{what} has no meaning with --replay: the log says all that is played")
    text = context.params["depth"] if "depth" in given else "float"
    depth: Depth = "float" if text == "float" else 16 if text == "16" else 24
    seed = context.params["seed"]
    if seed is not None and not context.params["dither"]:
        raise click.UsageError("--seed is the dither's: give --dither too")
    if context.params["dither"] and depth == "float":
        raise click.UsageError("--dither has no meaning with --depth float: give 16 or 24, or leave it out")
    return depth, (seed or 0) if context.params["dither"] else None


def _output(output: Path | None, log: Path) -> Path:
    """Where to: a WAV; in a folder, and without -o, one named after the log."""
    name = f"{log.name.removesuffix(_LOG_SUFFIX).removesuffix('.jsonl')}-replay.wav"
    if output is None:
        return Path(name)
    if output == _STANDARD_OUTPUT:
        if sys.__stdout__ is None or sys.stdout.isatty():
            raise click.UsageError("standard output is closed or a terminal: pipe it on, or give -o FILE.wav")
        return output
    if output.is_dir():
        return output / name
    if output.suffix.lower() != ".wav":
        raise click.BadParameter(f"{str(output)!r}: only WAV is written: name it .wav", param_hint="-o")
    return output


def _check_kept(output: Path, log: Path, span: "Span") -> None:
    """Refuse to replace the log, and the capture that it tells of."""
    from glidesmith.text import file_name

    kept = [log] if span.capture is None else [log, log.parent / span.capture.file]
    real = os.path.realpath(output)
    for name, what in zip(kept, ("log", "captured file"), strict=False):
        if {real, f"{real}.part"} & {os.path.realpath(name)}:
            raise SettingError(f"{file_name(output)}: is the session's {what}; write to another file")


def _sink(
    output: Path, reader: "LogReader", span: "Span", depth: "Depth", dither_seed: int | None, log: Path
) -> "WavSink":
    from glidesmith.wav import WavSink

    piped = output == _STANDARD_OUTPUT
    return WavSink(
        sys.stdout.buffer if piped else output,
        reader.header.sample_rate,
        1,
        depth,
        title=log.name.removesuffix(_LOG_SUFFIX),
        comment=f"Replayed from sample {span.begin} of a live session",
        dither_seed=dither_seed,
        frames_expected=span.end - span.begin,
        name="standard output" if piped else None,
    )


def _facts(
    log: Path, output: Path, reader: "LogReader", span: "Span", depth: "Depth", found: "Replayed"
) -> dict[str, Any]:
    return {
        "log": str(log),
        "output": str(output),
        "sample_rate": reader.header.sample_rate,
        "depth": depth,
        "frames": found.frames,
        "length_s": found.frames / reader.header.sample_rate,
        "peak_dbfs": 20.0 * math.log10(found.peak) if found.peak > 0.0 else None,
        "from": span.begin,
        "to": span.end,
        "same": found.same,
        "warnings": list(found.warnings),
    }


def _line(facts: dict[str, Any]) -> str:
    from glidesmith.text import printable

    depth = "float" if facts["depth"] == "float" else f"{facts['depth']} bit"
    same = {True: ", the captured samples", False: ", NOT the captured samples", None: ""}[facts["same"]]
    where = "standard output" if facts["output"] == str(_STANDARD_OUTPUT) else facts["output"]
    return printable(f"{where}: {facts['length_s']:.3f} s, {facts['sample_rate']:,} Hz, {depth}{same}")
