"""``glidesmith completion``: completes commands, options and file names in the shell."""

import click
from click.shell_completion import get_completion_class

SHELLS = ("bash", "zsh", "fish")


@click.command("completion")
@click.argument("shell", type=click.Choice(SHELLS))
@click.pass_context
def command(ctx: click.Context, shell: str) -> None:
    """Print the script that completes commands in a shell.

    SHELL is bash, zsh or fish; commands, options and file names are completed.

    \b
    Example (one line in the shell's start-up file):
      eval "$(glidesmith completion bash)"           # ~/.bashrc
      eval "$(glidesmith completion zsh)"            # ~/.zshrc
      glidesmith completion fish | source            # ~/.config/fish/config.fish
    """
    kind = get_completion_class(shell)
    assert kind is not None, "click has a class for each of the shells offered"
    root = ctx.find_root()
    click.echo(kind(root.command, {}, "glidesmith", "_GLIDESMITH_COMPLETE").source())
