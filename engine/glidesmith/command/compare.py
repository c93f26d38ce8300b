"""``glidesmith compare``: a folder of candidates to hear side by side, equally loud, and one page."""

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from glidesmith.command import tell
from glidesmith.command.options import (
    FilePath,
    PhraseChoice,
    check_inputs_kept,
    errors_in_json,
    ignored_lines,
    json_option,
    json_text,
    phrase_options,
    rate_option,
    tell_of_compiling,
)
from glidesmith.command.progress import Progress

if TYPE_CHECKING:
    from glidesmith.comparison import Comparison
    from glidesmith.phrase import Phrase

EQUAL = ("settings", "landing", "midpoint", "rise")
_MOST_DIFFERENCES = 2


@click.command("compare")
@click.argument("presets", nargs=-1, required=True, type=FilePath(), metavar="PRESET...")
@click.option(
    "-o",
    "--output",
    type=FilePath(),
    required=True,
    metavar="FOLDER",
    help="Where the set goes: made if missing, and it holds nothing else.",
)
@click.option(
    "--vary",
    multiple=True,
    metavar="KEY=A,B,C",
    help="Try these values of a preset key, as pitch.law=rc,exp; repeated, all combinations.",
)
@click.option(
    "--sheet", type=FilePath(), metavar="FILE.toml", help="Take candidates from this sheet instead."
)
@click.option(
    "--equal",
    type=click.Choice(EQUAL),
    default="settings",
    show_default=True,
    help="Rescale rise and fall so that a reference glide takes as long under each as under the preset: to "
    "landing, to half-way, from 10 to 90 %; settings leaves them.",
)
@click.option(
    "--interval", type=float, metavar="SEMITONES", help="The reference glide's interval, up and back; 12."
)
@click.option("--from", "from_note", metavar="NOTE", help="Where it starts; the phrase's median note.")
@phrase_options
@rate_option
@click.option(
    "--tolerance-cents",
    type=float,
    default=5.0,
    show_default=True,
    help="A glide has landed once it stays this near to its note.",
)
@click.option("--most", type=int, default=16, show_default=True, help="How many candidates there may be.")
@click.option(
    "--replace",
    is_flag=True,
    help="Write even where FOLDER holds another set (it goes) or other files (stay).",
)
@click.option("--progress/--no-progress", default=None, help="Show progress; by default on a terminal only.")
@json_option
def command(presets: tuple[Path, ...], output: Path, as_json: bool, **options: Any) -> None:
    """Write a set of candidates, equally loud, and a page for them.

    All play one phrase. The candidates are PRESET under each value of --vary, those of --sheet, or several
    PRESETs. Open index.html in FOLDER: it plays them in turn at one position, shows curves and facts, and
    holds blind tests. Run again with more values, only what is new is rendered.

    \b
    Example:
      glidesmith compare lead.toml -o laws --vary pitch.law=rc,exp,cosine --equal landing
      glidesmith compare lead.toml -o times --vary pitch.rise=20ms,60ms --vary pitch.fall=20ms,60ms
      glidesmith compare lead.toml -o ideas --sheet ideas.toml --interval 7 --from D3 --equal midpoint
      glidesmith compare lead.toml bass.toml -o both --phrase line.mid --channel 2
    """
    with errors_in_json(as_json):
        phrase, done = _compared(presets, output, as_json, options)
    tell(*(f"glidesmith: {line}" for line in (*ignored_lines(phrase), *done.warnings)))
    click.echo(json_text(done.as_dict()) if as_json else _summary(done))


def _compared(
    presets: tuple[Path, ...], output: Path, as_json: bool, options: dict[str, Any]
) -> "tuple[Phrase, Comparison]":
    from glidesmith.candidates import axes_from_texts
    from glidesmith.comparison import compare
    from glidesmith.preset import load_preset
    from glidesmith.setfolder import FACTS_FILE, PAGE_FILE

    axes = axes_from_texts(options["vary"])
    loaded = [load_preset(preset) for preset in presets]
    chosen = PhraseChoice(options["phrase"], options["track"], options["channel"], options["longest"])
    phrase = chosen.load(loaded[0])
    outputs = (output / FACTS_FILE, output / PAGE_FILE, *output.glob("*.wav"))
    for preset in loaded:
        check_inputs_kept(outputs, preset, chosen.file, options["sheet"])
    tell_of_compiling()
    with Progress(
        "comparing", False if as_json and options["progress"] is None else options["progress"]
    ) as steps:
        done = compare(
            loaded,
            output,
            vary=axes,
            sheet=options["sheet"],
            phrase=phrase,
            equal=options["equal"],
            interval=options["interval"],
            from_note=_note(options["from_note"]),
            sample_rate=options["rate"],
            tolerance_cents=options["tolerance_cents"],
            most=options["most"],
            replace=options["replace"],
            progress=steps,
        )
    return phrase, done


def _note(text: str | None) -> str | int | None:
    """A note name, or the MIDI number that the text is."""
    return int(text) if text is not None and text.isascii() and text.isdigit() and len(text) < 4 else text


def _summary(done: "Comparison") -> str:
    """What was made, a candidate a line, and where to go next."""
    from glidesmith.text import printable

    candidates: list[dict[str, Any]] = done.facts["candidates"]
    width = max(len(candidate["label"]) for candidate in candidates)
    lines = [_heading(done)]
    for candidate in candidates:
        lines.append(
            f"  {candidate['number']:2d}  {candidate['label']:<{width}}  {_candidate_text(candidate)}"
        )
        differs = candidate["differs"]
        lines += [f"      differs still: {line}" for line in differs[:_MOST_DIFFERENCES]]
        if len(differs) > _MOST_DIFFERENCES:
            more = len(differs) - _MOST_DIFFERENCES
            lines.append(f"      and on {more} more intervals (on the page and in comparison.json)")
    lines += [_loudness_text(done.facts["loudness"]), f"open {done.page}"]
    return "\n".join(printable(line) for line in lines)


def _heading(done: "Comparison") -> str:
    facts = done.facts
    made = f"{len(done.rendered)} rendered"
    kept = f", {len(done.kept)} kept from before" if done.kept else ""
    count = len(facts["candidates"])
    return f"{facts['title']}, playing {facts['phrase']['title']}: {count} candidates ({made}{kept})"


def _candidate_text(candidate: dict[str, Any]) -> str:
    from glidesmith.units import format_time

    settings = candidate["settings"]
    never = sum(glide["landing_s"] is None for glide in candidate["facts"]["glides"])
    lands = (
        f"{never} of {len(candidate['facts']['glides'])} glides never land" if never else "all glides land"
    )
    times = (f"{side} {format_time(settings[f'pitch.{side}'], 3)}" for side in ("rise", "fall"))
    return f"{', '.join(times)}, {lands}, gain {candidate['gain_db']:+.1f} dB"


def _loudness_text(loudness: dict[str, Any]) -> str:
    common, limit = loudness["common_lufs"], loudness["limited_by"]
    said = f"all at {common:.1f} LUFS"
    if limit is not None:
        said += f", not {loudness['target_lufs']:g}: the peaks of {limit} allow no more"
    if loudness["gated"]:
        return said
    return f"{said} (too short for the meter's gate: by the energy over {loudness['metered_s']:.3g} s)"
