"""``glidesmith tally`` prints what the Python API adds up, and names the sheets that it can't."""

import json

import pytest

from commands import complaint, process, run
from glidesmith.blind import tally_sheets, tally_text
from listening import COSINE, EXP, RC, abx, preference, save


def test_the_text_is_that_of_the_api(tmp_path):
    paths = save(tmp_path, abx(13), abx(9, listener="Ben"), preference([RC, EXP, COSINE]))
    result = run("tally", *paths)
    assert (result.exit_code, result.stderr) == (0, "")
    assert result.stdout.rstrip("\n") == tally_text(tally_sheets(paths))
    assert "Ada: 13 of 16 correct" in result.stdout
    assert "not independent" in result.stdout


def test_json_holds_the_facts_of_the_api(tmp_path):
    paths = save(tmp_path, abx(13), abx(9, listener="Ben"), preference([RC, EXP, COSINE]))
    result = run("tally", "--json", *paths)
    assert result.exit_code == 0
    assert json.loads(result.stdout) == json.loads(json.dumps(tally_sheets(paths).facts))


def test_sheets_that_are_refused_are_named_and_the_others_added_up(tmp_path):
    paths = save(tmp_path, abx(13), "{", abx(9, set="0" * 64))
    result = run("tally", *paths)
    assert result.exit_code == 1
    assert "13 of 16 correct" in result.stdout
    first, second = result.stderr.splitlines()
    assert first.startswith(f"glidesmith: {paths[1]}: ")
    assert second.startswith(f"glidesmith: {paths[2]}: ")


@pytest.mark.parametrize("sheet", ["", "{}", abx(9, correct=3)])
def test_nothing_but_refused_sheets_is_bad_input(tmp_path, sheet):
    (path,) = save(tmp_path, sheet)
    result = run("tally", path)
    assert result.exit_code == 2
    assert str(path) in complaint(result)


def test_no_sheet_is_bad_usage():
    result = run("tally")
    assert result.exit_code == 2
    assert "tally --help" in complaint(result)


def test_what_sheets_hold_is_printed_escaped(tmp_path):
    hostile = abx(13, listener="Ada\x1b[2J\u202e", labels=["rc\x07", "<script>\nexp"])
    result = run("tally", *save(tmp_path, hostile))
    assert result.exit_code == 0
    assert all(line.isprintable() for line in result.stdout.splitlines())
    assert "\\x1b[2J" in result.stdout


def test_a_tally_needs_neither_a_compiler_nor_scipy(tmp_path):
    (path,) = save(tmp_path, abx(13))
    code = (
        "import sys; from glidesmith.command import main\n"
        "try: main(sys.argv[1:])\n"
        "except SystemExit as end: code = end.code\n"
        "print(code, sorted({'numba', 'scipy', 'numpy', 'matplotlib'} & set(sys.modules)))"
    )
    import subprocess
    import sys

    done = subprocess.run(
        [sys.executable, "-c", code, "tally", path], capture_output=True, text=True, check=True
    )
    assert done.stdout.splitlines()[-1] == "0 []"


def test_help_has_an_example():
    assert "glidesmith tally ann.json" in run("tally", "--help").stdout
    assert process("tally", "--help").returncode == 0
