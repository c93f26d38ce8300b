"""``glidesmith measure`` prints what the Python API measures."""

import json

import pytest

from commands import ENVIRONMENT, PRESET, complaint, process, run, write_midi, write_preset
from glidesmith import load_phrase, load_preset, measure
from glidesmith.measuring import table


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    write_preset(tmp_path)
    return tmp_path


def measured(**options):
    return measure(load_preset("lead.toml"), load_phrase("line.toml"), **options)


def test_the_table_is_that_of_the_api(here):
    result = run("measure", "lead.toml")
    assert (result.exit_code, result.stderr) == (0, "")
    assert result.stdout.rstrip("\n") == table(measured()).rstrip("\n")


@pytest.mark.parametrize("tolerance", [5.0, 20.0])
@pytest.mark.parametrize("rate", [44_100, 48_000])
def test_json_holds_the_facts_of_the_api(here, tolerance, rate):
    result = run("measure", "lead.toml", "--json", "--tolerance-cents", tolerance, "--rate", rate)
    assert result.exit_code == 0
    facts = json.loads(result.stdout)
    assert facts == measured(tolerance_cents=tolerance, sample_rate=rate).as_dict()
    assert set(facts) == {"preset", "phrase", "tolerance_cents", "sample_rate", "glides", "gates"}


def test_another_phrase_may_be_given(here):
    (here / "other.toml").write_text(
        'notes = [{ at = 0, lasts = 1, note = "A4" }, { at = 1, lasts = 1, note = "A5" }]\n'
    )
    (glide,) = json.loads(run("measure", "lead.toml", "--phrase", "other.toml", "--json").stdout)["glides"]
    assert (glide["from"], glide["to"]) == ("A4", "A5")


def test_what_a_midi_file_holds_without_effect_is_told(here):
    write_midi(here / "line.mid")
    result = run("measure", "lead.toml", "--phrase", "line.mid", "--json")
    assert json.loads(result.stdout)["gates"]
    assert "ignored in the phrase: 1 controller" in result.stderr


def test_a_terminal_that_lacks_a_letter_gets_its_number(here):
    write_preset(here, text=PRESET.replace("Under test", "Fährlicht"))
    result = process("measure", "lead.toml", env={**ENVIRONMENT, "PYTHONIOENCODING": "iso8859-5"})
    assert (result.returncode, result.stderr) == (0, b"")
    assert b"F\\xe4hrlicht" in result.stdout


@pytest.mark.parametrize(("name", "start"), [("lead.svg", b"<?xml"), ("lead.PNG", b"\x89PNG")])
def test_a_plot_is_drawn_when_asked_for(here, name, start):
    result = run("measure", "lead.toml", "--plot", name)
    assert (result.exit_code, result.stderr) == (0, "")
    assert (here / name).read_bytes().startswith(start)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["lead.toml", "--plot", "lead.pdf"], ".svg or .png"),
        (["lead.toml", "--tolerance-cents", "0"], "0"),
        (["lead.toml", "--tolerance-cents", "nan"], "nan"),
        (["lead.toml", "--rate", "1"], "8000"),
        (["missing.toml"], "no such file"),
        (["bare.toml"], "--phrase"),
        (["lead.toml", "--phrase", "missing.mid"], "no such file"),
    ],
)
def test_what_can_not_be_measured_is_told_in_a_line(here, arguments, words):
    write_preset(here, "bare.toml", phrase=None)
    result = run("measure", *arguments)
    assert result.exit_code == 2
    assert words in complaint(result)
