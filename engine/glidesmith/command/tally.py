"""``glidesmith tally``: what blind listening sheets add up to."""

from pathlib import Path

import click

from glidesmith.command import tell
from glidesmith.command.options import FilePath, errors_in_json, json_option, json_text

SOME_FAILED = 1


@click.command("tally")
@click.argument("sheets", nargs=-1, required=True, type=FilePath(), metavar="FILE...")
@json_option
def command(sheets: tuple[Path, ...], as_json: bool) -> int:
    """Add up the listening sheets that a comparison page saved.

    Each FILE holds one listener's round of A/B/X trials or of preferences, or all rounds that a browser
    kept; all are of one comparison set. A sheet that is damaged, inconsistent, of another set or there twice
    is named and left out, and earlier rounds that are not among the files are told.

    \b
    Example:
      glidesmith tally ann.json ben.json cleo.json
      glidesmith tally sheets/*.json --json > tally.json
    """
    from glidesmith.blind import tally_sheets, tally_text
    from glidesmith.text import printable

    with errors_in_json(as_json):
        tally = tally_sheets(sheets)
    tell(*(f"glidesmith: {line}" for line in tally.refused))
    if as_json:
        click.echo(json_text(tally.facts))
    else:
        click.echo("\n".join(printable(line) for line in tally_text(tally).splitlines()))
    return SOME_FAILED if tally.refused else 0
