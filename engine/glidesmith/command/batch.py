"""``glidesmith batch``: a whole bank of presets rendered into a folder, and kept up to date."""

import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from glidesmith.command import tell
from glidesmith.command.options import (
    FilePath,
    FiniteRange,
    as_time,
    errors_in_json,
    json_option,
    json_text,
    rate_option,
)
from glidesmith.command.progress import Progress

if TYPE_CHECKING:
    from glidesmith.outcome import NeverLands, Outcome
    from glidesmith.production import Runner

SOME_FAILED = 1
_DEPTHS: dict[str, Any] = {"16": 16, "24": 24, "float": "float"}
_MOST_TOLD = 20
_MOST_ASKED = 10


class OutputPlace(FilePath):
    """A folder as `pathlib.Path`, or an address as it is."""

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        """As a path, unless it is an address elsewhere."""
        if isinstance(value, str) and "://" in value:
            from glidesmith.places import folder_at

            return folder_at(value) or value
        return super().convert(value, param, ctx)


@click.command("batch")
@click.argument("folder", type=FilePath(), metavar="FOLDER")
@click.option(
    "-o",
    "--output",
    type=OutputPlace(),
    required=True,
    metavar="FOLDER",
    help="Where to: the folder that gets the WAVs, manifest.jsonl and summary.html, made if missing; or an "
    "address that fsspec knows, as s3://BUCKET/FOLDER.",
)
@click.option(
    "--phrase",
    "phrases",
    type=FilePath(),
    multiple=True,
    metavar="FILE",
    help="Play this phrase instead of each preset's own; repeated, each preset plays each.",
)
@click.option("--track", type=click.IntRange(1), help="Of a MIDI file given, only this track, from 1.")
@click.option("--channel", type=click.IntRange(1, 16), help="Of a MIDI file given, only this channel.")
@click.option(
    "--longest",
    callback=as_time,
    metavar="TIME",
    default="120 min",
    show_default=True,
    help="How long a phrase may be.",
)
@click.option(
    "--vary",
    multiple=True,
    metavar="KEY=A,B,C",
    help="Render each preset with these values of a key, as pitch.law=rc,exp; repeated, all combinations.",
)
@click.option(
    "--include",
    multiple=True,
    metavar="PATTERN",
    help='Take only presets like this, as "leads/*"; a folder\'s name takes all in it.',
)
@click.option("--exclude", multiple=True, metavar="PATTERN", help="Leave out presets like this.")
@click.option(
    "--name",
    metavar="PATTERN",
    help="What outputs are called, made of {folder}, {preset}, {phrase} and {values}; by default as the "
    "presets, in the same folders, with _{phrase} and _{values} where there are several.",
)
@click.option(
    "--loudness",
    type=FiniteRange(-70.0, 0.0),
    metavar="LUFS",
    help="Bring all to this loudness, as -23, as far as true peaks stay under -1 dBTP.",
)
@rate_option
@click.option(
    "--depth",
    type=click.Choice(list(_DEPTHS)),
    default="24",
    show_default=True,
    help="Bits a sample, or 32-bit float.",
)
@click.option("--no-meter", is_flag=True, help="Measure neither loudness nor true peak.")
@click.option(
    "--tolerance-cents",
    type=float,
    default=5.0,
    show_default=True,
    help="A glide has landed once it stays this near to its note.",
)
@click.option(
    "--jobs", type=click.IntRange(1, 1024), metavar="N", help="Items made at a time; all processors."
)
@click.option(
    "--cluster",
    metavar="ADDRESS",
    help="Have them made by a Dask cluster: tcp://HOST:PORT or tls://HOST:PORT.",
)
@click.option("--watch", is_flag=True, help="Go on, and render again what changes, until interrupted.")
@click.option("--force", is_flag=True, help="Render everything again.")
@click.option("--verify", is_flag=True, help="Hash all files instead of trusting their sizes and times.")
@click.option("--prune", is_flag=True, help="Remove outputs whose preset is gone, after asking.")
@click.option("--yes", is_flag=True, help="Prune without asking.")
@click.option("--dry-run", is_flag=True, help="Say what would be rendered, and do nothing.")
@click.option("--progress/--no-progress", default=None, help="Show progress; by default on a terminal only.")
@json_option
def command(folder: Path, output: Path | str, as_json: bool, **options: Any) -> int:
    """Render every preset in FOLDER and below into another folder.

    What is there already and current is left as it is, so that running the same command again renders only
    what has changed, and goes on where it was interrupted. manifest.jsonl has a line for each WAV: hashes,
    loudness, true peak, glides that never land; summary.html shows them. A preset that fails is named at the
    end and stops nothing.

    \b
    Example:
      glidesmith batch presets -o takes
      glidesmith batch presets -o takes --loudness -23 --jobs 4
      glidesmith batch presets -o takes --vary pitch.rise=20ms,60ms --name "{values}/{folder}/{preset}"
      glidesmith batch presets -o takes --phrase line.toml --phrase run.mid --exclude drafts
      glidesmith batch presets -o takes --watch
    """
    _check(options)
    with errors_in_json(as_json):
        if options["watch"]:
            if isinstance(output, str):
                raise click.UsageError("--watch needs a folder: an address can't follow every save")
            return _watch(folder, output, options)
        progress = _progress(as_json, options)
        with _telling_how_to_go_on(progress), progress:
            done = _batch(folder, output, options, progress)
    tell(*_remarks(done))
    click.echo(json_text(done.as_dict()) if as_json else "\n".join(_summary(done)))
    return 0 if done.all_well else SOME_FAILED


def _check(options: dict[str, Any]) -> None:
    if options["yes"] and not options["prune"]:
        raise click.UsageError("--yes answers --prune's question: give --prune too")
    if options["prune"] and not options["yes"] and not options["dry_run"] and not sys.stdin.isatty():
        raise click.UsageError("--prune asks before it removes anything, and nobody can answer: give --yes")
    for name in ("dry_run", "prune"):
        if options["watch"] and options[name]:
            raise click.UsageError(f"--watch goes on rendering: leave --{name.replace('_', '-')} out")
    if options["cluster"] and options["jobs"]:
        raise click.UsageError("--jobs is for this machine, --cluster for others: give one of the two")


def _request(folder: Path, output: Path | str, options: dict[str, Any]) -> dict[str, Any]:
    """What `batch` and `watch` take alike."""
    return {
        "folder": folder,
        "output": output,
        "phrases": options["phrases"],
        "track": options["track"],
        "channel": options["channel"],
        "longest_s": options["longest"],
        "vary": _axes(options["vary"]),
        "name": options["name"],
        "include": options["include"],
        "exclude": options["exclude"],
        "sample_rate": options["rate"],
        "depth": _DEPTHS[options["depth"]],
        "loudness": options["loudness"],
        "meter": not options["no_meter"],
        "tolerance_cents": options["tolerance_cents"],
        "jobs": options["jobs"],
        "force": options["force"],
        "verify": options["verify"],
        "run": None if options["cluster"] is None else _cluster(options["cluster"]),
    }


def _batch(folder: Path, output: Path | str, options: dict[str, Any], progress: Progress) -> "Outcome":
    from glidesmith.batching import batch

    prune = options["prune"] and (options["yes"] or _asked)
    return batch(
        **_request(folder, output, options), prune=prune, dry_run=options["dry_run"], progress=progress
    )


def _axes(texts: tuple[str, ...]) -> Any:
    if not texts:
        return None
    from glidesmith.candidates import axes_from_texts

    return axes_from_texts(texts)


def _cluster(address: str) -> "Runner":
    from glidesmith.cluster import cluster_runner

    return cluster_runner(address, lambda line: tell(f"glidesmith: {line}"))


def _asked(items: Sequence[str]) -> bool:
    tell(*(f"  {item}" for item in items[:_MOST_ASKED]))
    if len(items) > _MOST_ASKED:
        tell(f"  and {len(items) - _MOST_ASKED:,} more")
    return click.confirm(f"remove {_counted(len(items), 'output')} whose preset is gone?", err=True)


def _watch(folder: Path, output: Path | str, options: dict[str, Any]) -> int:
    from glidesmith.watching import watch

    def heard(done: "Outcome") -> None:
        tell(*_remarks(done))
        click.echo("\n".join(_summary(done)))
        sys.stdout.flush()

    watch(**_request(folder, output, options), heard=heard)
    return 0


def _progress(as_json: bool, options: dict[str, Any]) -> Progress:
    wanted = False if as_json and options["progress"] is None else options["progress"]
    return Progress("rendering", wanted, "items")


@contextmanager
def _telling_how_to_go_on(progress: Progress) -> Iterator[None]:
    """An interrupt is told with how much is done."""
    try:
        yield
    except Exception:
        raise
    except BaseException as stopped:
        if sys.stderr.isatty():
            click.echo("\r", err=True, nl=False)  # the terminal shows ^C at the beginning of this line
        done = f"{progress.done:,} of {_counted(progress.total, 'item')} are done"
        told = done if progress.total else "no item is done yet"
        tell(f"glidesmith: {told}; run the same command again to go on")
        if isinstance(stopped, KeyboardInterrupt):  # of which click would make an empty line
            raise click.Abort from None
        raise


def _counted(number: int, noun: str) -> str:
    return f"{number:,} {noun}{'' if number == 1 else 's'}"


def _remarks(done: "Outcome") -> list[str]:
    """What went wrong, and what else the user should know, a line each."""
    lines = [f"glidesmith: {line}" for line in done.warnings]
    alike: dict[tuple[str, ...], int] = {}
    for each in done.failed:
        alike[each.lines] = alike.get(each.lines, 0) + 1
    for told, count in alike.items():
        more = f" (and {count - 1:,} more like this)" if count > 1 else ""
        lines += [f"glidesmith: {line}" for line in told[:-1]]
        lines.append(f"glidesmith: {told[-1]}{more}")
    if done.failed:
        presets = list(dict.fromkeys(each.preset for each in done.failed if each.preset))
        names = ", ".join(presets[:_MOST_TOLD])
        more = f" and {len(presets) - _MOST_TOLD:,} more" if len(presets) > _MOST_TOLD else ""
        if presets:
            lines.append(f"glidesmith: failed: {names}{more}")
    if done.stopped:
        lines.append(
            f"glidesmith: stopped early: {done.stopped}; what is done stays, and the same command goes on "
            "from there"
        )
    left = len(done.gone) - len(done.pruned)
    if left and not done.pruned:
        lines.append(
            f"glidesmith: the {'preset' if left == 1 else 'presets'} of {_counted(left, 'output')} "
            f"{'is' if left == 1 else 'are'} gone (the first is {done.gone[0]}); --prune removes them"
        )
    return lines


def _summary(done: "Outcome") -> list[str]:
    """What was done, and what no longer lands."""
    from glidesmith.outcome import SUMMARY_FILE
    from glidesmith.text import printable

    verb = "to render" if done.dry_run else "rendered"
    parts = [f"{len(done.made):,} {verb}", f"{done.current:,} current"]
    parts += [f"{len(done.failed):,} failed"] if done.failed else []
    parts += [f"{len(done.pruned):,} removed"] if done.pruned else []
    lines = [f"{done.place}: {', '.join(parts)}"]
    if done.dry_run:
        lines += [f"  {item}" for item in done.made]
    lines += _landing("no longer land", done.no_longer)
    lines += _landing("never land", [each for each in done.never_land if each.before is None])
    if done.all_never_land and not done.dry_run:
        count = _counted(done.all_never_land, "output")
        lines.append(f"in {count} a glide never lands: {done.place}/{SUMMARY_FILE}")
    return [printable(line) for line in lines]


def _landing(verb: str, items: "Sequence[NeverLands]") -> list[str]:
    lines = [
        f"  {each.item}: {each.count} of {each.glides} glides {verb}, the worst {each.short_by_cents:.0f} "
        f"cents off ({each.worst_from} to {each.worst_to})"
        for each in items[:_MOST_TOLD]
    ]
    if len(items) > _MOST_TOLD:
        lines.append(f"  and in {len(items) - _MOST_TOLD:,} more outputs glides {verb}")
    return lines
