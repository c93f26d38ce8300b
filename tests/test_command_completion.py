"""Completion scripts are what their shells can load, and complete what there is."""

import shutil
import subprocess
import sys

import pytest

from commands import ENVIRONMENT, run
from glidesmith.command import COMMANDS


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_each_shell_gets_a_script_about_this_command(shell):
    result = run("completion", shell)
    assert result.exit_code == 0
    assert "glidesmith" in result.stdout
    assert f"_GLIDESMITH_COMPLETE={shell}_complete" in result.stdout


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_a_shell_that_is_here_accepts_its_script(shell, tmp_path):
    """Shells that are not installed can't be asked; bash always is."""
    if shutil.which(shell) is None:
        return
    script = tmp_path / "script"
    script.write_text(run("completion", shell).stdout)
    subprocess.run([shell, "-n", script], check=True)


def completed(words, index):
    """What the shell is offered for a half-written command line."""
    facts = {"_GLIDESMITH_COMPLETE": "bash_complete", "COMP_WORDS": words, "COMP_CWORD": str(index)}
    command = [sys.executable, "-m", "glidesmith"]
    done = subprocess.run(command, env={**ENVIRONMENT, **facts}, capture_output=True, text=True, check=True)
    return [line.partition(",")[2] for line in done.stdout.splitlines()]


def test_commands_are_completed():
    assert completed("glidesmith ", 1) == list(COMMANDS)
    assert completed("glidesmith re", 1) == ["render"]


def test_options_are_completed():
    assert set(completed("glidesmith render --d", 2)) == {"--depth", "--dither"}
