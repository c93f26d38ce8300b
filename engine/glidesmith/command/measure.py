"""``glidesmith measure``: the facts about every glide and gate."""

from pathlib import Path

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

PICTURES = (".svg", ".png")


@click.command("measure")
@click.argument("preset", type=FilePath())
@phrase_options
@click.option(
    "--tolerance-cents",
    type=float,
    default=5.0,
    show_default=True,
    help="A glide has landed once it stays this near to its note.",
)
@rate_option
@click.option("--plot", type=FilePath(), metavar="FILE", help="Also draw the curves, into an .svg or .png.")
@json_option
def command(
    preset: Path,
    phrase: Path | None,
    track: int | None,
    channel: int | None,
    longest: float,
    tolerance_cents: float,
    rate: int,
    plot: Path | None,
    as_json: bool,
) -> None:
    """Tell when each glide lands and how each gate fares.

    PRESET is measured with its own phrase or another: when each glide is in tune, how fast it moves, how much
    of its note it takes, which never arrives, and what the slew costs each gate in level and attack.

    \b
    Example:
      glidesmith measure lead.toml
      glidesmith measure lead.toml --phrase line.mid --channel 2 --plot lead.svg
      glidesmith measure lead.toml --json > facts.json
    """
    from glidesmith.facts import table
    from glidesmith.measuring import measure
    from glidesmith.preset import load_preset

    if plot is not None and plot.suffix.lower() not in PICTURES:
        raise click.BadParameter(f"{str(plot)!r}: name it .svg or .png", param_hint="--plot")
    with errors_in_json(as_json):
        loaded = load_preset(preset)
        played = PhraseChoice(phrase, track, channel, longest).load(loaded)
        check_inputs_kept((plot,), loaded, phrase)
        tell_of_compiling()
        facts = measure(loaded, played, tolerance_cents=tolerance_cents, sample_rate=rate)
        tell(*(f"glidesmith: {preset}: {line}" for line in ignored_lines(played)))
        if plot is not None:
            from glidesmith.plot import plot as draw

            draw(loaded, played, plot, tolerance_cents)
            tell(f"glidesmith: {plot}: drawn")
    click.echo(json_text(facts.as_dict()) if as_json else table(facts))
