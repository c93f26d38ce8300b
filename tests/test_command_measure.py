"""``glidesmith measure`` prints what the Python API measures."""

import json
import shutil

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
    assert (result.exit_code, result.stderr) == (0, f"glidesmith: {name}: drawn\n")
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


@pytest.mark.parametrize("plot", ["pre.svg", "line.svg", "link.svg", "cycle.svg", "take.svg"])
def test_a_plot_never_replaces_what_is_measured(here, plot):
    """Nor does its part file, nor by way of a link."""
    (here / "line.svg").write_text((here / "line.toml").read_text())
    cycle = '[oscillator]\nwave = "file"\nfile = "cycle.svg"\n[phrase]\nfile = "line.svg"\n'
    write_preset(here, "pre.svg", phrase=None, text=PRESET + cycle)
    shutil.copy("pre.svg", "take.svg.part")
    (here / "link.svg").symlink_to("pre.svg")
    (here / "cycle.svg").write_bytes(b"of the test")
    before = {path.name: path.read_bytes() for path in here.iterdir()}
    result = run("measure", "take.svg.part" if plot == "take.svg" else "pre.svg", "--plot", plot)
    assert result.exit_code == 2
    assert f"{plot}: is what is rendered from" in complaint(result)
    assert {path.name: path.read_bytes() for path in here.iterdir()} == before


def test_mistakes_are_in_the_json_too(here):
    (here / "bad.toml").write_text(PRESET.replace("rise", "rize"))
    result = run("measure", "bad.toml", "--json")
    assert result.exit_code == 2
    errors = json.loads(result.stdout)["errors"]
    assert "rize" in errors[0]
    assert result.stderr.splitlines() == [f"glidesmith: {line}" for line in errors]


def test_a_home_that_can_not_be_written_to_is_nobodys_business(here):
    """The drawing library would say so; where compiled code can't be kept either, that is told."""
    places = dict.fromkeys(("HOME", "XDG_CONFIG_HOME", "XDG_CACHE_HOME"), "/proc/none")
    environment = {name: value for name, value in ENVIRONMENT.items() if name != "MPLCONFIGDIR"}
    result = process("measure", "lead.toml", "--plot", "lead.svg", env={**environment, **places})
    assert result.returncode == 0
    lines = result.stderr.decode().splitlines()
    assert all("GLIDESMITH_CACHE" in line for line in lines[:-1])
    assert lines[-1] == "glidesmith: lead.svg: drawn"
