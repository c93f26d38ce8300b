"""The command line, ``glidesmith COMMAND``: thin over the Python API.

Each command is a module of this package with a click command called ``command``, imported when it is asked
for. Whatever a user can mend is told in one line a mistake on standard error; the exit status is 0 when all
went well, 1 when some items failed, 2 for bad input or usage, and 128 and the signal's number when a signal
ended it: 130 for an interrupt, 143 when told to terminate, 129 when the terminal went away.
"""

import contextlib
import io
import os
import signal
import sys
import threading
from collections.abc import Iterator, Sequence
from importlib import import_module
from typing import Any, NoReturn

import click

from glidesmith import __version__
from glidesmith.errors import GlidesmithError

COMMANDS = ("render", "measure", "compare", "batch", "live", "tally", "check", "devices", "completion")

BAD_INPUT = 2
INTERRUPTED = 130


def tell(*lines: str) -> None:
    """Say something on standard error, a line each, with control characters escaped."""
    from glidesmith.text import printable

    for line in lines:
        click.echo(printable(line), err=True)


def error_lines(problem: Exception) -> tuple[str, ...]:
    """What to tell a user about an error, a line a mistake."""
    if isinstance(problem, GlidesmithError):
        return problem.lines
    if isinstance(problem, click.ClickException):
        return (_usage_line(problem),)
    if isinstance(problem, MemoryError):
        return ("there is not enough memory for this; render a shorter phrase or at a lower rate",)
    if isinstance(problem, OSError):
        from glidesmith.partfile import output_error

        name = problem.filename if isinstance(problem.filename, str) else "standard output"
        return output_error(name, problem).lines
    raise problem


class _StoppedError(BaseException):
    """A signal told the command to end."""


@contextlib.contextmanager
def _stoppable() -> Iterator[list[int]]:
    """While it lasts, the signals to terminate and to hang up raise once, and their number is in the list.

    A signal that is ignored, as under nohup, stays so.
    """
    stopped: list[int] = []

    def stop(number: int, _: object) -> None:
        if not stopped:  # a second one must not keep the first from cleaning up
            stopped.append(number)
            raise _StoppedError

    kept = {}
    if threading.current_thread() is threading.main_thread():
        for number in (getattr(signal, name, None) for name in ("SIGTERM", "SIGHUP")):
            if number is not None and signal.getsignal(number) is signal.SIG_DFL:
                kept[number] = signal.signal(number, stop)
    try:
        yield stopped
    finally:
        for number, handler in kept.items():
            signal.signal(number, handler)


def _replace_closed_streams() -> None:
    """Give standard streams that were closed before the start a device that takes everything.

    In this order each gets its own descriptor again, so that no file that is opened later does.
    """
    for name, mode in (("stdin", "r"), ("stdout", "w"), ("stderr", "w")):
        if getattr(sys, name) is None:
            setattr(sys, name, open(os.devnull, mode, encoding="utf-8"))  # noqa: PTH123, SIM115


def _is_mishap(problem: Exception) -> bool:
    """Whether what went wrong is not about anything that the user named."""
    if isinstance(problem, OSError) and not isinstance(problem, GlidesmithError):
        return problem.filename is None
    return isinstance(problem, MemoryError)


def _usage_line(problem: click.ClickException) -> str:
    message = " ".join(problem.format_message().split()).rstrip(".")
    context = getattr(problem, "ctx", None)
    path = context.command_path if context is not None else "glidesmith"
    return f"{message[:1].lower()}{message[1:]}; see {path} --help"


class Commands(click.Group):
    """The group of commands: imports one when it is asked for, and tells errors in a line."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """The names, in the order in which a user meets them."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """The command, or None."""
        if cmd_name not in COMMANDS:
            return None
        found: click.Command = import_module(f"glidesmith.command.{cmd_name}").command
        return found

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """As click does, but an unknown name brings the nearest to mind."""
        name = args[0]
        if not ctx.resilient_parsing and name not in COMMANDS and not name.startswith("-"):
            from glidesmith.text import shown, suggestion

            raise click.UsageError(
                f"there is no command {shown(name)}{suggestion(name, COMMANDS)}: give {', '.join(COMMANDS)}",
                ctx,
            )
        return super().resolve_command(ctx, args)

    def main(
        self,
        args: Sequence[str] | None = None,
        prog_name: str | None = None,
        complete_var: str | None = None,
        standalone_mode: bool = True,
        windows_expand_args: bool = True,
        **extra: Any,
    ) -> Any:
        """Run and exit; see this package's docstring for the status."""
        name = prog_name or "glidesmith"
        options = {"windows_expand_args": windows_expand_args, **extra}
        if not standalone_mode:
            return super().main(args, name, complete_var, standalone_mode=False, **options)
        _replace_closed_streams()
        if isinstance(sys.stdout, io.TextIOWrapper):
            # A terminal that lacks a letter gets its number.
            sys.stdout.reconfigure(errors="backslashreplace")
        status, lines = 0, tuple[str, ...]()
        with _stoppable() as stopped:
            try:
                result = super().main(args, name, complete_var, standalone_mode=False, **options)
                status = result if isinstance(result, int) else 0
                if status == 0:
                    sys.stdout.flush()
            except (click.Abort, _StoppedError):
                status, lines = INTERRUPTED, ("interrupted; what was being written is removed",)
            except (GlidesmithError, click.ClickException, OSError, MemoryError) as problem:
                status, lines = 1 if _is_mishap(problem) else BAD_INPUT, error_lines(problem)
        with contextlib.suppress(OSError):  # a terminal that went away takes no words
            tell(*(f"glidesmith: {line}" for line in lines))
        return _leave(128 + stopped[0] if stopped else status)


def _leave(status: int) -> NoReturn:
    """Exit; what standard output could not take must not raise once more when Python closes it."""
    try:
        sys.stdout.flush()
    except OSError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    sys.exit(status)


@click.group(
    cls=Commands,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    no_args_is_help=False,
    epilog="Each command has its own --help with an example. Shell completion: glidesmith completion --help",
)
@click.version_option(__version__, prog_name="glidesmith", message="%(prog)s %(version)s")
def main() -> None:
    """Render, measure and check glides: how a patch's pitch and gate are slewed.

    \b
    Example:
      glidesmith render lead.toml -o lead.wav
      glidesmith measure lead.toml
    """
