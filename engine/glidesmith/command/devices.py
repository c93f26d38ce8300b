"""``glidesmith devices``: the sound outputs there are, with their rates and latencies."""

from collections.abc import Sequence
from typing import TYPE_CHECKING

import click

from glidesmith.command import tell
from glidesmith.command.options import errors_in_json, json_option, json_text

if TYPE_CHECKING:
    from glidesmith.portaudio import Output

_HEADINGS = ("", "no.", "output", "through", "channels", "rates in kHz", "own", "latency in ms")
_LONGEST_NAME = 44


@click.command("devices")
@json_option
def command(as_json: bool) -> None:
    """List the sound outputs that live can play to.

    With each stand the system interface that it is reached through, its channels, the sample rates that it
    takes and its own one, and the lowest and the highest latency that it offers. The one with a star is
    played to unless --device says otherwise.

    \b
    Example:
      glidesmith devices
      glidesmith devices --json
      glidesmith live lead.toml --device 2
    """
    from glidesmith.portaudio import NO_OUTPUT, outputs

    with errors_in_json(as_json):
        found = outputs()
    if as_json:
        click.echo(json_text({"devices": [_facts(output) for output in found]}))
    elif found:
        click.echo("\n".join(_table(found)))
    else:
        tell(f"glidesmith: {NO_OUTPUT}")


def _facts(output: "Output") -> dict[str, object]:
    """What there is to say about one output, fit for JSON."""
    return {
        "index": output.index,
        "name": output.name,
        "host_api": output.host_api,
        "channels": output.channels,
        "default": output.is_default,
        "default_rate": output.default_rate,
        "rates": list(output.rates),
        "low_latency_s": output.low_latency_s,
        "high_latency_s": output.high_latency_s,
    }


def _table(found: Sequence["Output"]) -> list[str]:
    from glidesmith.text import shortened

    rows = [_HEADINGS]
    rows += [
        (
            "*" if output.is_default else "",
            str(output.index),
            shortened(output.name, _LONGEST_NAME),
            shortened(output.host_api, _LONGEST_NAME),
            str(output.channels),
            _kilohertz(output.rates) or "can't be opened now",
            _kilohertz((output.default_rate,)),
            f"{1000 * output.low_latency_s:.1f} to {1000 * output.high_latency_s:.1f}",
        )
        for output in found
    ]
    widths = [max(len(row[column]) for row in rows) for column in range(len(_HEADINGS))]
    return [
        "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
    ]


def _kilohertz(rates: Sequence[int]) -> str:
    """Rates in kilohertz: ``"44.1, 48"``, or ``"8 to 384"`` where it is all that were asked."""
    from glidesmith.portaudio import RATES

    if set(rates) >= set(RATES):
        return f"{RATES[0] / 1000:g} to {RATES[-1] / 1000:g}"
    return ", ".join(f"{rate / 1000:g}" for rate in rates)
