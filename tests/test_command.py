"""What every command has in common: help, exit status, and errors in one line."""

import errno
import subprocess
import sys

import pytest

import glidesmith
from commands import ENVIRONMENT, complaint, process, run, write_preset
from glidesmith.command import COMMANDS

HEAVY = ("numpy", "numba", "soundfile", "mido", "tomlkit", "matplotlib", "scipy")


def test_the_version_is_told():
    result = run("--version")
    assert result.exit_code == 0
    assert result.stdout == f"glidesmith {glidesmith.__version__}\n"


def test_the_package_runs_as_a_module():
    result = process("--version")
    assert (result.returncode, result.stderr) == (0, b"")
    assert result.stdout.decode() == f"glidesmith {glidesmith.__version__}\n"


@pytest.mark.parametrize("arguments", [["--version"], ["--help"], *([name, "--help"] for name in COMMANDS)])
def test_version_and_help_import_nothing_heavy(arguments):
    code = f"""
import sys
from glidesmith.command import main
try:
    main({arguments!r})
except SystemExit as leaving:
    assert leaving.code == 0
print("heavy:", [name for name in {HEAVY!r} if name in sys.modules])
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "heavy: []"


def test_the_help_lists_every_command_with_a_whole_line():
    help_text = run("--help").stdout
    for name in COMMANDS:
        (line,) = [line for line in help_text.splitlines() if line.startswith(f"  {name:11} ")]
        assert line.endswith(".")
        assert not line.endswith("...")


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_has_help_with_an_example(name):
    result = run(name, "--help")
    assert result.exit_code == 0
    example = result.stdout.partition("Example")[2]
    assert f"glidesmith {name} " in example


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ([], "missing command"),
        (["rendr"], 'no command "rendr" (did you mean "render"?)'),
        (["frobnicate"], "render, measure, check"),
        (["re\x1b[31mnder"], "\\x1b[31m"),
        (["--verson"], "--version"),
        (["render"], "PRESET"),
        (["render", "a.toml", "--dephth", "16"], "--depth"),
        (["render", "a.toml", "--rate", "fast"], "fast"),
        (["render", "a.toml", "--depth", "20"], "24"),
        (["measure"], "PRESET"),
        (["check"], "PATH"),
        (["completion", "tcsh"], "bash"),
    ],
)
def test_wrong_usage_is_told_in_a_line_that_says_how_to_go_on(arguments, words):
    result = run(*arguments)
    assert result.exit_code == 2
    line = complaint(result)
    assert words in line
    assert "--help" in line


@pytest.mark.parametrize(
    ("problem", "status", "words"),
    [
        (KeyboardInterrupt(), 130, "interrupted"),
        (MemoryError(), 1, "not enough memory"),
        (OSError(errno.EIO, "Input/output error"), 1, "Input/output error"),
        (
            PermissionError(errno.EACCES, "Permission denied", "some\x1bwhere"),
            2,
            "some\\x1bwhere: you may not",
        ),
    ],
)
def test_what_goes_wrong_on_the_way_is_told_in_a_line(tmp_path, monkeypatch, problem, status, words):
    def fail(*_):
        raise problem

    monkeypatch.setattr("glidesmith.preset.load_preset", fail)
    result = run("measure", write_preset(tmp_path))
    assert result.exit_code == status
    assert words in result.stderr
    assert len(result.stderr.split("\n")) <= 3
    assert "Traceback" not in result.stderr


def test_output_that_can_not_be_written_is_told():
    """The kernel's full device takes nothing."""
    with open("/dev/full", "wb") as full:  # noqa: PTH123
        command = [sys.executable, "-m", "glidesmith", "completion", "zsh"]
        done = subprocess.run(command, stdout=full, stderr=subprocess.PIPE, text=True, env=ENVIRONMENT)
    assert done.returncode == 1
    assert (
        done.stderr == "glidesmith: standard output: the disk is full; free some space or write elsewhere\n"
    )


def test_a_reader_that_goes_away_is_no_reason_for_a_traceback():
    shell = f"{sys.executable} -m glidesmith render --help | true; echo ${{PIPESTATUS[0]}}"
    done = subprocess.run(["bash", "-c", shell], capture_output=True, text=True, check=True, env=ENVIRONMENT)
    assert done.stderr == ""
    assert done.stdout.strip() in ("0", "1")
