"""``glidesmith live``: plays presets to the sound card while their settings move."""

import contextlib
import signal
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from glidesmith.command import tell
from glidesmith.command.livesignals import EndingSignals
from glidesmith.command.options import (
    FilePath,
    FiniteRange,
    PhraseChoice,
    as_time,
    check_inputs_kept,
    errors_in_json,
    ignored_lines,
    json_option,
    phrase_options,
)
from glidesmith.errors import DeviceError, SettingError

if TYPE_CHECKING:
    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset
    from glidesmith.session import Session
    from glidesmith.soundcard import Choice

SLOTS = 8
LOWEST_LEVEL_DB, LOWEST_CEILING_DB, HIGHEST_CEILING_DB = -80.0, -40.0, -1.0
LONGEST_BLOCK = 8192


def _as_rate(ctx: click.Context, param: click.Parameter, value: str | None) -> int | None:
    from glidesmith.program import check_sample_rate

    try:
        return None if value is None else check_sample_rate(int(value))
    except ValueError:
        raise click.BadParameter(
            f"{value!r}: give whole hertz from 8000 to 384000, as 48000", ctx, param
        ) from None


def _as_latency(ctx: click.Context, param: click.Parameter, value: str | None) -> str | float | None:
    if value in (None, "low", "high"):
        return value
    seconds = as_time(ctx, param, value)
    if not 0.0 < seconds <= 2.0:
        raise click.BadParameter(f'{value!r}: give low, high, or a time up to 2 s as "20 ms"', ctx, param)
    return seconds


@click.command("live")
@click.argument("presets", nargs=-1, required=True, type=FilePath(), metavar="PRESET...")
@phrase_options
@click.option(
    "--vary",
    multiple=True,
    metavar="KEY=A,B,C",
    help="Put these values of a preset key into the slots, as pitch.law=rc,exp; repeated, all combinations.",
)
@click.option(
    "--device", metavar="NAME|NUMBER", help="Play to this output, by its name, a part of it, or its number."
)
@click.option(
    "--rate",
    callback=_as_rate,
    metavar="HERTZ",
    help="Sample rate; 48000, or the nearest that the output takes.",
)
@click.option(
    "--block",
    type=click.IntRange(1, LONGEST_BLOCK),
    metavar="FRAMES",
    help="Frames a block; by default the output chooses.",
)
@click.option(
    "--latency",
    callback=_as_latency,
    metavar="low|high|TIME",
    help="How much is made ahead; low by default, 20 ms where other programs share the output.",
)
@click.option(
    "--level",
    type=FiniteRange(LOWEST_LEVEL_DB, 0.0),
    default=-30.0,
    show_default=True,
    metavar="DB",
    help="Listening level.",
)
@click.option("--no-fade", is_flag=True, help="Begin at the level, without fading in.")
@click.option("--no-match", is_flag=True, help="Leave the slots as loud as they are.")
@click.option(
    "--ceiling",
    type=FiniteRange(LOWEST_CEILING_DB, HIGHEST_CEILING_DB),
    default=-6.0,
    show_default=True,
    metavar="DBFS",
    help="What no sample goes over.",
)
@click.option("--no-loop", is_flag=True, help="Play the phrase once; with --no-panel, end then.")
@click.option(
    "--seconds",
    callback=lambda c, p, v: None if v is None else as_time(c, p, v),
    metavar="TIME",
    help="End after this time.",
)
@click.option("--capture", type=FilePath(), metavar="FILE.wav", help="Capture what is heard, from the start.")
@click.option(
    "--log", type=FilePath(), metavar="FILE", help="Log every move; render --replay FILE gives it again."
)
@click.option("--no-panel", is_flag=True, help="No page in the browser: keys and a status line only.")
@click.option(
    "--port", type=click.IntRange(1, 65535), help="The panel's port on this machine; by default a free one."
)
@click.option("--no-browser", is_flag=True, help="Do not open the panel, only tell its address.")
@click.option(
    "--browser-sound", is_flag=True, help="Play through the browser, as over a tunnel, not to the sound card."
)
@click.option(
    "--python-callback",
    is_flag=True,
    help="Play through a plain Python callback. It drops out whenever Python is busy.",
)
@json_option
def command(presets: tuple[Path, ...], as_json: bool, **options: Any) -> int:
    """Play each PRESET's phrase in a loop, and turn its settings.

    The presets fill slots 1 to 8. The panel opens in the browser; keys in the terminal change slots, and ?
    tells them all. It starts quietly and fades in. End with q or Ctrl-C.

    \b
    Example:
      glidesmith live lead.toml
      glidesmith live lead.toml bass.toml --phrase line.mid --device headphones
      glidesmith live lead.toml --vary pitch.law=rc,linear,soft
      glidesmith live lead.toml --no-panel --seconds 10 --capture take.wav --json
    """
    _check_together(options)
    with EndingSignals() as signals:
        try:
            with errors_in_json(as_json):
                slots = _slots(presets, options)
                _check_kept(slots, options)
                from glidesmith.portaudio import quiet

                with quiet():
                    return _play(slots, options, as_json, signals)
        except KeyboardInterrupt:
            tell("glidesmith: interrupted before it played")
            return 128 + (signals.number or signal.SIGINT)


@dataclass(frozen=True, slots=True)
class Slot:
    """What fills a slot."""

    name: str
    preset: "Preset"
    phrase: "Phrase"


def _check_together(options: dict[str, Any]) -> None:
    """Refuse what can't be meant together."""
    if options["no_panel"]:
        for name in ("port", "no_browser", "browser_sound"):
            if options[name]:
                flag = f"--{name.replace('_', '-')}"
                raise click.UsageError(f"{flag} is about the panel: leave --no-panel out, or {flag}")
    if options["browser_sound"]:
        for name in ("device", "block", "latency", "python_callback"):
            if options[name]:
                flag = f"--{name.replace('_', '-')}"
                raise click.UsageError(f"{flag} is about a sound card: leave --browser-sound out, or {flag}")


def _slots(presets: Sequence[Path], options: dict[str, Any]) -> list[Slot]:
    """The presets, or their candidates, with a phrase each."""
    from glidesmith.preset import load_preset

    loaded = [load_preset(preset) for preset in presets]
    named = [("", preset) for preset in loaded]
    if options["vary"]:
        named = _varied(loaded, options["vary"])
    if len(named) > SLOTS:
        raise SettingError(f"{len(named)} presets, and there are {SLOTS} slots: name at most {SLOTS}")
    choice = PhraseChoice(options["phrase"], options["track"], options["channel"], options["longest"])
    shared = choice.load(loaded[0]) if choice.file is not None else None
    slots = [Slot(name, preset, shared or choice.load(preset)) for name, preset in named]
    for slot in slots[: 1 if shared else None]:
        tell(*(f"glidesmith: {line}" for line in ignored_lines(slot.phrase)))
    return slots


def _varied(loaded: "list[Preset]", texts: Sequence[str]) -> "list[tuple[str, Preset]]":
    import math

    from glidesmith.candidates import axes_from_texts, varied_candidates

    axes = axes_from_texts(texts)
    count = len(loaded) * math.prod(len(values) for values in axes.values())
    if count > SLOTS:
        raise SettingError(f"--vary makes {count} candidates, and there are {SLOTS} slots: give fewer values")
    if count < 2:
        raise SettingError("--vary needs several values to fill slots with, as pitch.law=rc,exp")
    return [(candidate.label, candidate.preset) for candidate in varied_candidates(loaded, axes, SLOTS)]


def _check_kept(slots: Sequence[Slot], options: dict[str, Any]) -> None:
    outputs = (options["capture"], options["log"])
    if options["capture"] is not None and options["capture"].suffix.lower() != ".wav":
        raise SettingError(f"{options['capture']}: only WAV is written: name it .wav")
    for slot in slots:
        check_inputs_kept(outputs, slot.preset, options["phrase"])


def _play(slots: Sequence[Slot], options: dict[str, Any], as_json: bool, signals: EndingSignals) -> int:
    """Set the stage, play, and strike it; the exit status."""
    from glidesmith.command.livestage import Stage, leave_now

    choice = None if options["browser_sound"] else _choice(options)
    rate = choice.sample_rate if choice is not None else options["rate"] or 48_000
    session = _session(slots, rate, options)
    _compile(session)
    stage = Stage(session, choice, options, as_json)
    status = stage.play(signals)
    if stage.left_behind:
        leave_now(status)
    return status


def _choice(options: dict[str, Any]) -> "Choice | None":
    """The output; None where there is none and the browser may play instead."""
    from glidesmith.portaudio import NoSoundError
    from glidesmith.soundcard import choose_output

    try:
        return choose_output(options["device"], options["rate"])
    except NoSoundError as problem:
        if options["device"] is not None:
            raise
        if options["no_panel"]:
            raise DeviceError(
                f"{problem}; or leave --no-panel out, and the panel plays through the browser"
            ) from None
        tell(f"glidesmith: {problem}. Until then the panel plays through the browser")
        return None


def _compile(session: "Session") -> None:
    """Compile what the audio thread runs, while an interrupt still ends at once."""
    from glidesmith.compiled import CACHE_FOLDER
    from glidesmith.lease import compiled_callback

    if CACHE_FOLDER is None or not any(Path(CACHE_FOLDER).rglob("callback._raw-*.nbi")):
        tell("glidesmith: compiling the engine for this processor, once: up to a minute")
    try:
        compiled_callback()
        with contextlib.suppress(NotImplementedError):
            session.deck.callback(2)
    except BaseException:
        session.close()
        raise


def _session(slots: Sequence[Slot], rate: int, options: dict[str, Any]) -> "Session":
    from glidesmith.session import Session

    shared = options["phrase"] is not None
    return Session(
        [slot.preset for slot in slots],
        slots[0].phrase if shared else [slot.phrase for slot in slots],
        rate,
        level_db=options["level"],
        fade=not options["no_fade"],
        match=not options["no_match"],
        loop=not options["no_loop"],
        ceiling_db=options["ceiling"],
        log=options["log"],
        names=[slot.name for slot in slots],
    )
