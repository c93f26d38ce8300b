"""What every command has in common: help, exit status, and errors in one line."""

import errno
import importlib
import signal
import subprocess
import sys

import click
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
        (["frobnicate"], ", ".join(COMMANDS)),
        (["re\x1b[31mnder"], "\\x1b[31m"),
        (["--verson"], "--version"),
        (["render"], "PRESET"),
        (["render", "a.toml", "--dephth", "16"], "--depth"),
        (
            ["render", "a.toml", "--rate", "48k"],
            "from 8000 to 384000, as 48000; see main render --help",
        ),
        (["render", "a.toml", "--depth", "20"], "'16', '24', 'float'; see main render --help"),
        (["render", "a.toml", "--seed", "1"], "see main render --help"),
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


def test_wrong_usage_points_to_the_help_of_the_command():
    done = process("render", "lead.toml", "--seed", "1")
    assert done.stderr.endswith(b"; see glidesmith render --help\n")


def test_every_command_and_every_public_name_is_there():
    for name in COMMANDS:
        assert isinstance(importlib.import_module(f"glidesmith.command.{name}").command, click.Command)
    for name in glidesmith.__all__:
        assert getattr(glidesmith, name) is not None


def test_the_help_lists_the_commands_in_the_order_in_which_a_user_meets_them():
    listed = run("--help").stdout.partition("Commands:")[2].splitlines()
    names = [line.split()[0] for line in listed[1:10]]
    first = ["render", "measure", "compare", "batch", "live"]
    assert names == [*first, "tally", "check", "devices", "completion"]


@pytest.mark.parametrize("closed", ["<&-", ">&-", "2>&-", "<&- >&- 2>&-"])
def test_closed_standard_streams_are_no_hindrance(tmp_path, closed):
    """And none of them is taken for a file that is opened later."""
    write_preset(tmp_path)
    shell = f"{sys.executable} -m glidesmith render lead.toml {closed}"
    done = subprocess.run(
        ["bash", "-c", shell], cwd=tmp_path, capture_output=True, text=True, env=ENVIRONMENT
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert run("render", tmp_path / "lead.toml", "-o", tmp_path / "again.wav", "--quiet").exit_code == 0
    assert (tmp_path / "lead.wav").read_bytes() == (tmp_path / "again.wav").read_bytes()


def test_audio_for_a_standard_output_that_is_closed_is_refused(tmp_path):
    write_preset(tmp_path)
    shell = f"{sys.executable} -m glidesmith render lead.toml -o - >&-"
    done = subprocess.run(
        ["bash", "-c", shell], cwd=tmp_path, capture_output=True, text=True, env=ENVIRONMENT
    )
    assert done.returncode == 2
    assert done.stderr.startswith("glidesmith: standard output is closed")


@pytest.mark.parametrize("name", ["SIGTERM", "SIGHUP"])
def test_a_signal_that_ends_a_command_is_told_once_and_what_stood_for_it_comes_back(
    tmp_path, monkeypatch, name
):
    number = getattr(signal, name)

    def stop(*_):
        try:
            signal.raise_signal(number)
        finally:
            signal.raise_signal(number)  # while cleaning up

    monkeypatch.setattr("glidesmith.preset.load_preset", stop)
    kept = signal.signal(number, signal.SIG_DFL)
    try:
        result = run("measure", write_preset(tmp_path))
        assert signal.getsignal(number) is signal.SIG_DFL
    finally:
        signal.signal(number, kept)
    assert result.exit_code == 128 + number
    assert complaint(result) == "glidesmith: interrupted; what was being written is removed"


def test_a_signal_that_is_ignored_stays_so(tmp_path, monkeypatch):
    """As under nohup."""
    monkeypatch.setattr("glidesmith.preset.load_preset", lambda _: signal.raise_signal(signal.SIGHUP))
    kept = signal.signal(signal.SIGHUP, signal.SIG_IGN)
    try:
        with pytest.raises(AttributeError):  # of what the stand-in returns
            run("measure", write_preset(tmp_path))
    finally:
        signal.signal(signal.SIGHUP, kept)


@pytest.mark.parametrize("option", [["--quiet"], []])
def test_compiled_code_that_can_not_be_kept_is_told_each_time(tmp_path, monkeypatch, option):
    monkeypatch.setattr("glidesmith.compiled.CACHE_FOLDER", None)
    line = run("render", write_preset(tmp_path), "-o", tmp_path / "take.wav", *option).stderr
    assert line.startswith("glidesmith: compiling")
    assert "GLIDESMITH_CACHE" in line
    monkeypatch.setattr("glidesmith.compiled.CACHE_FOLDER", str(tmp_path))
    assert run("render", tmp_path / "lead.toml", "-o", tmp_path / "take.wav", *option).stderr == ""
