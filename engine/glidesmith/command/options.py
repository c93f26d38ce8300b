"""What commands share: the options that choose a phrase and a rate, and the loading of what they name."""

import contextlib
import math
import os
import sys
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from glidesmith.errors import GlidesmithError, SettingError

if TYPE_CHECKING:
    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset

Function = TypeVar("Function", bound=Callable[..., Any])


class FilePath(click.Path):
    """A path as `pathlib.Path`; whether it is fit is for the reader or writer to say, in its own words."""

    def __init__(self) -> None:
        super().__init__(path_type=Path)

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        """As click does, but an empty name, as of a shell variable that is not set, means no file."""
        if value == "":
            self.fail("the name is empty; give one, or leave the option out", param, ctx)
        return super().convert(value, param, ctx)


class FiniteRange(click.FloatRange):
    """A range of numbers, without the value that is no number and compares with nothing."""

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        """As click does."""
        number = super().convert(value, param, ctx)
        if not math.isfinite(number):
            self.fail(f"{value!r}: give a number in the range {self._describe_range()}", param, ctx)
        return number


def as_time(ctx: click.Context, param: click.Parameter, value: str | float) -> float:
    """The callback of options that take a time: seconds, or with a unit as ``"500 ms"`` or ``"2 min"``."""
    from glidesmith.units import parse_time

    try:
        return parse_time(_number(value))
    except SettingError as problem:
        raise click.BadParameter(str(problem), ctx, param) from None


def _as_rate(ctx: click.Context, param: click.Parameter, value: str) -> int:
    """A sample rate in whole hertz; its range is for the engine to check."""
    try:
        return int(value)
    except ValueError:
        raise click.BadParameter(
            f"{value!r}: give whole hertz from 8000 to 384000, as 48000", ctx, param
        ) from None


def _number(value: str | float) -> str | float:
    """The number that a text is, for a time without a unit; otherwise the text."""
    try:
        return float(value)
    except ValueError:
        return value


@dataclass(frozen=True, slots=True)
class PhraseChoice:
    """The phrase that the command line asks for, if any, in place of the one a preset names."""

    file: Path | None = None
    track: int | None = None
    channel: int | None = None
    longest_s: float = 7200.0

    def load(self, preset: "Preset") -> "Phrase":
        """The phrase to play with a preset.

        Raises PhraseError where it can't be used, SettingError where neither names one.
        """
        from glidesmith.phrase import load_phrase, load_preset_phrase
        from glidesmith.text import printable

        if self.file is not None:
            return load_phrase(self.file, self.track, self.channel, self.longest_s)
        if preset.phrase is None:
            raise SettingError(
                f"{printable(str(preset.path))}: names no phrase; give one with --phrase FILE, "
                "or add [phrase] with file to the preset"
            )
        return load_preset_phrase(preset, self.track, self.channel, self.longest_s)


def ignored_lines(phrase: "Phrase") -> tuple[str, ...]:
    """What of a phrase has no effect, a line each."""
    return tuple(f"ignored in the phrase: {line}" for line in phrase.ignored)


def check_inputs_kept(outputs: Iterable[Path | None], preset: "Preset", *sources: Path | None) -> None:
    """Raise SettingError where an output, or its part file, would replace what it is made from.

    That is the preset, what it names, and ``sources``; of these and of ``outputs`` None stands for no file.
    """
    from glidesmith.text import printable

    named = (preset.path, preset.oscillator.file, preset.phrase.file if preset.phrase else None)
    kept = {os.path.realpath(source) for source in (*named, *sources) if source is not None}
    for output in outputs:
        if output is not None and kept & _written(output):
            raise SettingError(f"{printable(str(output))}: is what is rendered from; write to another file")


def _written(output: Path) -> set[str]:
    real = os.path.realpath(output)
    return {real, f"{real}.part"}


@contextlib.contextmanager
def errors_in_json(as_json: bool) -> Iterator[None]:
    """With --json, print ``{"errors": [...]}`` in place of the facts before a mistake is told."""
    try:
        yield
    except GlidesmithError as problem:
        if as_json:
            click.echo(json_text({"errors": list(problem.lines)}))
        raise


def phrase_options(function: Function) -> Function:
    """The options that `PhraseChoice` is made of: ``phrase``, ``track``, ``channel``, ``longest``."""
    decorators = (
        click.option(
            "--phrase",
            type=FilePath(),
            metavar="FILE",
            help="Play this phrase (TOML or Standard MIDI File) instead of the preset's own.",
        ),
        click.option("--track", type=click.IntRange(1), help="Of a MIDI file, only this track, from 1."),
        click.option("--channel", type=click.IntRange(1, 16), help="Of a MIDI file, only this channel."),
        click.option(
            "--longest",
            callback=as_time,
            metavar="TIME",
            default="120 min",
            show_default=True,
            help="How long a phrase may be.",
        ),
    )
    for decorator in reversed(decorators):
        function = decorator(function)
    return function


def tell_of_compiling() -> None:
    """Say that there will be a wait while the engine is compiled for this processor.

    Once is worth a word at a terminal; where compiled code can't be kept, it is said every time and anywhere.
    """
    from glidesmith.command import tell
    from glidesmith.compiled import CACHE_FOLDER, compiles_first

    if CACHE_FOLDER is None or (sys.stderr.isatty() and compiles_first()):
        again = ", once" if CACHE_FOLDER else " (not kept: GLIDESMITH_CACHE can name a folder of your own)"
        tell(f"glidesmith: compiling the engine for this processor{again}: up to a minute")


rate_option = click.option(
    "--rate",
    type=str,
    callback=_as_rate,
    default="48000",
    show_default=True,
    metavar="HERTZ",
    help="Sample rate, 8000 to 384000.",
)

json_option = click.option("--json", "as_json", is_flag=True, help="Print the facts as JSON.")


def json_text(facts: object) -> str:
    """Facts as JSON in plain ASCII, which no terminal or pipe can garble."""
    import json

    return json.dumps(facts, indent=2, allow_nan=False)
