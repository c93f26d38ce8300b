"""``glidesmith render``: presets to WAV files, with traces and control voltages when asked for."""

import math
import os
import sys
from collections.abc import Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from glidesmith.command import BAD_INPUT, error_lines, tell
from glidesmith.command.options import (
    FilePath,
    FiniteRange,
    PhraseChoice,
    as_time,
    check_inputs_kept,
    ignored_lines,
    json_option,
    json_text,
    phrase_options,
    rate_option,
    tell_of_compiling,
)
from glidesmith.command.progress import Progress
from glidesmith.errors import GlidesmithError

if TYPE_CHECKING:
    from glidesmith.phrase import Phrase
    from glidesmith.program import Program
    from glidesmith.rendering import Report
    from glidesmith.voice import Traces
    from glidesmith.wav import CvWriter, Depth, WavSink

STANDARD_OUTPUT = Path("-")
_DEPTHS: "dict[str, Depth]" = {"16": 16, "24": 24, "float": "float"}


@dataclass(frozen=True, slots=True)
class Choices:
    """What the command line says about how to render, whatever the preset."""

    phrase: PhraseChoice
    rate: int
    depth: "Depth"
    dither_seed: int | None
    tail_s: float
    trace: Path | None
    cv: Path | None
    cv_full_scale_volts: float
    progress: bool | None


@dataclass(frozen=True, slots=True)
class Job:
    """One preset file and where its audio goes."""

    preset: Path
    output: Path

    @property
    def to_standard_output(self) -> bool:
        """Whether the audio is piped."""
        return self.output == STANDARD_OUTPUT


@click.command("render")
@click.argument("presets", nargs=-1, type=FilePath(), metavar="PRESET...")
@click.option(
    "-o",
    "--output",
    type=FilePath(),
    metavar="FILE.wav|FOLDER|-",
    help="Where to: a WAV file, a folder (made if missing), or - for standard output. "
    "Without it, a WAV named after the preset in the current folder.",
)
@phrase_options
@rate_option
@click.option(
    "--depth",
    type=click.Choice(list(_DEPTHS)),
    default="24",
    show_default=True,
    help="Bits a sample, or 32-bit float.",
)
@click.option("--dither", is_flag=True, help="Add triangular dither of one step before rounding.")
@click.option("--seed", type=click.IntRange(0), help="The dither's seed, 0 by default.")
@click.option(
    "--tail",
    callback=as_time,
    default="30",
    metavar="TIME",
    help="The longest time that the sound may go on after the last note, 30 s by default.",
)
@click.option(
    "--trace",
    type=FilePath(),
    metavar="FILE.csv",
    help="Also write what the control signals did, a row a sample.",
)
@click.option(
    "--cv",
    type=FilePath(),
    metavar="FILE.wav",
    help="Also write control voltages: left pitch at 1 V/oct, right the gain control (10 V: fully open). "
    "They are DC: never to loudspeakers or headphones.",
)
@click.option(
    "--cv-full-scale",
    type=FiniteRange(0.0, 20.0, min_open=True),
    metavar="VOLTS",
    help="What your interface puts out for a full-scale sample, 10 by default.",
)
@click.option(
    "--replay",
    type=FilePath(),
    metavar="LOG",
    help="Instead of presets: play a live session again from its log, and write what was captured last.",
)
@click.option("--all", "whole", is_flag=True, help="With --replay: write the whole session.")
@click.option("--progress/--no-progress", default=None, help="Show progress; by default on a terminal only.")
@click.option("--quiet", is_flag=True, help="Print no facts and no progress, only warnings and errors.")
@json_option
@click.pass_context
def command(
    context: click.Context,
    /,
    presets: tuple[Path, ...],
    output: Path | None,
    replay: Path | None,
    whole: bool,
    quiet: bool,
    as_json: bool,
    **options: Any,
) -> int:
    """Render each PRESET with its phrase to a WAV file.

    A file that is already there is replaced once the new one is whole. With --replay the samples of a live
    session come again, bit for bit.

    \b
    Example:
      glidesmith render lead.toml
      glidesmith render lead.toml -o take.wav --phrase line.mid --rate 96000 --depth float
      glidesmith render presets/*.toml -o takes
      glidesmith render lead.toml --trace lead.csv --cv lead-cv.wav --cv-full-scale 5
      glidesmith render lead.toml -o - > lead.wav
      glidesmith render --replay take.log.jsonl -o again.wav
    """
    if replay is not None:
        from glidesmith.command.replaying import render_replay

        return render_replay(context, replay, whole, quiet, as_json)
    if not presets:
        raise click.UsageError("missing argument 'PRESET...': name a preset, or give --replay LOG")
    if whole:
        raise click.UsageError("--all is about a session: give --replay LOG too")
    choices = _choices(options, quiet)
    jobs = _jobs(presets, output)
    _check_extras(jobs, choices)
    from glidesmith.program import check_sample_rate

    check_sample_rate(choices.rate)
    tell_of_compiling()
    _make_folder(jobs, output)
    done, failed = _render_all(jobs, choices, quiet or as_json)
    piped = any(job.to_standard_output for job in jobs)
    if as_json:
        click.echo(json_text({"rendered": done, "failed": failed}), err=piped)
    if failed and len(jobs) > 1:
        names = ", ".join(str(item["preset"]) for item in failed)
        tell(f"glidesmith: {len(failed)} of {len(jobs)} presets failed: {names}")
    return _status(failed, len(jobs))


def _status(failed: Sequence[Any], asked: int) -> int:
    if not failed:
        return 0
    return BAD_INPUT if asked == 1 else 1


def _choices(options: dict[str, Any], quiet: bool) -> Choices:
    if options["seed"] is not None and not options["dither"]:
        raise click.UsageError("--seed is the dither's: give --dither too")
    if options["dither"] and options["depth"] == "float":
        raise click.UsageError("--dither has no meaning with --depth float: give 16 or 24, or leave it out")
    if options["cv_full_scale"] is not None and options["cv"] is None:
        raise click.UsageError("--cv-full-scale is about control voltages: give --cv FILE.wav too")
    return Choices(
        PhraseChoice(options["phrase"], options["track"], options["channel"], options["longest"]),
        options["rate"],
        _DEPTHS[options["depth"]],
        (options["seed"] or 0) if options["dither"] else None,
        options["tail"],
        options["trace"],
        options["cv"],
        options["cv_full_scale"] or 10.0,
        False if quiet else options["progress"],
    )


def _jobs(presets: Sequence[Path], output: Path | None) -> list[Job]:
    """Each preset with its output. Two that would write one file are refused before anything is rendered."""
    if output is None and len(presets) == 1:
        folder = Path()
    elif output is None:
        raise click.UsageError(f"{len(presets)} presets need a folder: give -o FOLDER")
    elif _is_folder(output):
        folder = output
    elif len(presets) == 1:
        return [Job(presets[0], output)]
    else:
        raise click.UsageError(
            f"{len(presets)} presets need a folder: give -o FOLDER instead of {str(output)!r}"
        )
    jobs = [Job(preset, folder / f"{preset.stem}.wav") for preset in presets]
    writers: dict[str, Path] = {}
    for job in jobs:
        first = writers.setdefault(os.path.normcase(job.output), job.preset)
        if first is not job.preset:
            raise click.UsageError(
                f"{str(first)!r} and {str(job.preset)!r} would both write {str(job.output)!r}: "
                "render them into different folders"
            )
    return jobs


def _is_folder(output: Path) -> bool:
    """Whether -o names a folder: one that is there, or a name without a suffix."""
    if output == STANDARD_OUTPUT or output.suffix.lower() == ".wav":
        return output.is_dir()
    if output.is_dir() or (not output.exists() and not output.suffix):
        return True
    if output.is_file() or not output.exists():
        raise click.BadParameter(
            f"{str(output)!r}: only WAV is written: name it .wav, or make the folder first", param_hint="-o"
        )
    return False


def _check_extras(jobs: Sequence[Job], choices: Choices) -> None:
    """Refuse what can't be meant: one trace for several presets, one name twice, audio on a terminal."""
    if len(jobs) > 1 and (choices.trace or choices.cv):
        raise click.UsageError(
            "--trace and --cv take the signals of one preset: render the presets one by one"
        )
    if STANDARD_OUTPUT in (choices.trace, choices.cv):
        raise click.UsageError("only -o can be -, standard output: give --trace and --cv the name of a file")
    if jobs[0].to_standard_output and sys.__stdout__ is None:
        raise click.UsageError("standard output is closed: pipe it on, or give -o FILE.wav")
    if jobs[0].to_standard_output and sys.stdout.isatty():
        raise click.UsageError("standard output is a terminal: pipe it on, or give -o FILE.wav")
    names = [os.path.realpath(p) for p in (jobs[0].output, choices.trace, choices.cv) if p is not None]
    if len(set(names)) < len(names):
        raise click.UsageError("-o, --trace and --cv name the same file: give each its own")


def _make_folder(jobs: Sequence[Job], output: Path | None) -> None:
    if output is None or jobs[0].output == output:
        return
    try:
        output.mkdir(parents=True, exist_ok=True)
    except OSError as problem:
        from glidesmith.partfile import output_error

        raise output_error(str(output), problem) from None


def _render_all(
    jobs: Sequence[Job], choices: Choices, silent: bool
) -> tuple[list[dict[str, object]], list[dict[str, object]]]:
    """Render every job; one that fails is told at once and does not stop the others."""
    done: list[dict[str, object]] = []
    failed: list[dict[str, object]] = []
    for job in jobs:
        try:
            facts = _render(job, choices)
        except (GlidesmithError, OSError, MemoryError) as problem:
            lines = error_lines(problem)
            tell(*(f"glidesmith: {line}" for line in lines))
            failed.append({"preset": str(job.preset), "errors": list(lines)})
            continue
        done.append(facts)
        if not silent:
            click.echo(_line(facts), err=job.to_standard_output)
    return done, failed


def _render(job: Job, choices: Choices) -> dict[str, object]:
    from glidesmith.preset import load_preset, settings_hash
    from glidesmith.program import compile_program

    preset = load_preset(job.preset)
    phrase = choices.phrase.load(preset)
    check_inputs_kept((job.output, choices.trace, choices.cv), preset, choices.phrase.file)
    digest = settings_hash(preset)
    program = compile_program(preset, phrase, choices.rate, choices.tail_s)
    report, beyond = _play(program, job, choices, f"Settings {digest}")
    warnings = (*preset.unused(), *ignored_lines(phrase), *report.warnings, *beyond)
    tell(*(f"glidesmith: {job.preset}: {line}" for line in warnings))
    return _facts(job, choices, phrase, report, digest, warnings)


def _play(program: "Program", job: Job, choices: Choices, comment: str) -> "tuple[Report, tuple[str, ...]]":
    """Play a program into every file asked for; on an error those not finished are removed."""
    from glidesmith.rendering import stream
    from glidesmith.text import shortened
    from glidesmith.trace import HeldSignals, TraceWriter

    held = HeldSignals(program)
    with ExitStack() as files:
        sink = files.enter_context(_sink(program, job, choices, comment))
        trace = cv = None
        if choices.trace is not None:
            trace = files.enter_context(TraceWriter(choices.trace, program.sample_rate))
        if choices.cv is not None:
            cv = files.enter_context(_cv_writer(program, choices.cv, choices, comment))

        def watch(signals: "Traces") -> None:
            if trace is not None:
                rows = trace.rows, len(signals.gain)
                trace.write(held.target_volts(*rows), signals.pitch_volts, held.gate(*rows), *signals[1:])
            if cv is not None:
                cv.write(signals.pitch_volts, signals.gain_control)

        with Progress(shortened(job.preset.stem, 30), choices.progress) as progress:
            report = stream(program, sink, progress, watch if trace or cv else None)
    return report, cv.warnings if cv is not None else ()


def _sink(program: "Program", job: Job, choices: Choices, comment: str) -> "WavSink":
    from glidesmith.wav import WavSink

    piped = job.to_standard_output
    return WavSink(
        sys.stdout.buffer if piped else job.output,
        program.sample_rate,
        1,
        choices.depth,
        title=program.preset.title,
        comment=comment,
        dither_seed=choices.dither_seed,
        frames_expected=program.length,
        name="standard output" if piped else None,
    )


def _cv_writer(program: "Program", path: Path, choices: Choices, comment: str) -> "CvWriter":
    """Control voltages keep 24 bits beside 16-bit audio: a step is then 1.2 µV at 10 V."""
    from glidesmith.wav import DC_CAUTION, CvWriter

    writer = CvWriter(
        path,
        program.sample_rate,
        choices.cv_full_scale_volts,
        "float" if choices.depth == "float" else 24,
        title=program.preset.title,
        comment=comment,
        frames_expected=program.length,
    )
    tell(f"glidesmith: {path} {DC_CAUTION}")
    return writer


def _facts(
    job: Job, choices: Choices, phrase: "Phrase", report: "Report", digest: str, warnings: Sequence[str]
) -> dict[str, object]:
    """What there is to say about one render, fit for JSON."""
    facts: dict[str, object] = {
        "preset": str(job.preset),
        "phrase": str(phrase.path) if phrase.path else phrase.title,
        "output": str(job.output),
        "sample_rate": report.sample_rate,
        "depth": choices.depth,
        "frames": report.frames,
        "length_s": report.seconds,
        "peak_dbfs": report.peak_db if math.isfinite(report.peak_db) else None,
        "clipped": report.clipped,
        "settings_sha256": digest,
        "warnings": list(warnings),
    }
    extras = {"trace": choices.trace, "cv": choices.cv}
    return facts | {name: str(path) for name, path in extras.items() if path is not None}


def _line(facts: dict[str, Any]) -> str:
    from glidesmith.text import printable

    peak = "silent" if facts["peak_dbfs"] is None else f"peak {facts['peak_dbfs']:.1f} dBFS"
    depth = "float" if facts["depth"] == "float" else f"{facts['depth']} bit"
    clipped = f", {facts['clipped']:,} samples clipped" if facts["clipped"] else ""
    where = "standard output" if facts["output"] == str(STANDARD_OUTPUT) else facts["output"]
    return printable(
        f"{where}: {facts['length_s']:.3f} s, {facts['sample_rate']:,} Hz, {depth}, {peak}{clipped}"
    )
