"""``glidesmith check`` finds what rendering would refuse, in every file it is pointed at."""

import errno
import json

import pytest

from commands import PHRASE, PRESET, complaint, run, write_midi, write_preset
from unprivileged import no_privileges, open_folder


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    write_preset(tmp_path)
    return tmp_path


def verdicts(*arguments):
    """What the command says about each file: (its kind, whether it is good)."""
    facts = json.loads(run("check", "--json", *arguments).stdout)
    assert facts["failed"] == sum(not file["ok"] for file in facts["checked"])
    return {file["path"]: (file["kind"], file["ok"]) for file in facts["checked"]}


def test_good_files_are_counted(here):
    result = run("check", "lead.toml", "line.toml")
    assert (result.exit_code, result.stderr) == (0, "")
    assert result.stdout == "2 files checked: 2 good, 0 bad\n"


def test_folders_are_searched_all_the_way_down(here):
    deep = here / "bank" / "deep"
    deep.mkdir(parents=True)
    write_preset(deep, "low.toml")
    (deep / "loop.toml").symlink_to("loop.toml")
    (deep / "round").symlink_to(".")
    (deep / "broken.MID").write_bytes(b"no MIDI at all")
    (deep / "notes.txt").write_text("no preset, and not looked at")
    assert verdicts(".") == {
        "lead.toml": ("preset", True),
        "line.toml": ("phrase", True),
        "bank/deep/low.toml": ("preset", True),
        "bank/deep/line.toml": ("phrase", True),
        "bank/deep/broken.MID": ("phrase", False),
    }


def test_a_file_named_twice_is_checked_once(here):
    assert run("check", "lead.toml", "lead.toml", ".").stdout.startswith("2 files checked")


def test_every_mistake_is_a_line_that_names_the_file(here):
    (here / "bad.toml").write_text(PRESET.replace("rise", "rize").replace('"rc"', '"rq"'))
    result = run("check", "lead.toml", "bad.toml")
    assert result.exit_code == 1
    assert result.stdout == "2 files checked: 1 good, 1 bad\n"
    lines = result.stderr.splitlines()
    assert len(lines) > 2
    assert all(line.startswith("glidesmith: bad.toml: ") for line in lines)


@pytest.mark.parametrize(
    ("name", "text", "kind"),
    [
        ("no-phrase.toml", PRESET + '[phrase]\nfile = "missing.toml"\n', "preset"),
        ("bad-phrase.toml", PRESET + '[phrase]\nfile = "lead.toml"\n', "preset"),
        ("no-wave.toml", PRESET + '[oscillator]\nwave = "file"\nfile = "missing.wav"\n', "preset"),
        ("no-wave-either.toml", PRESET + '[oscillator]\nwave = "file"\n', "preset"),
        ("not.toml", "= = =", "preset"),
        ("deep.toml", "a = " + "[" * 5000, "preset"),
        ("empty.toml", "", "preset"),
        ("no-notes.toml", "tempo_bpm = 100\nnotes = []\n", "phrase"),
        ("backwards.toml", PHRASE.replace("0.9", "-0.9"), "phrase"),
    ],
)
def test_what_rendering_would_refuse_is_bad(here, name, text, kind):
    (here / name).write_text(text)
    assert verdicts(name) == {name: (kind, False)}
    result = run("check", name)
    assert result.exit_code == 1
    assert "Traceback" not in result.output
    assert all(line.startswith("glidesmith: ") for line in result.stderr.splitlines())


def test_a_preset_without_a_phrase_is_good(here):
    write_preset(here, "bare.toml", phrase=None)
    assert verdicts("bare.toml") == {"bare.toml": ("preset", True)}


def test_a_midi_phrase_is_good_and_what_has_no_effect_is_told(here):
    write_midi(here / "line.mid")
    result = run("check", "line.mid")
    assert result.exit_code == 0
    assert result.stderr.startswith("glidesmith: line.mid: ignored in the phrase: 1 controller")
    assert verdicts("line.mid") == {"line.mid": ("phrase", True)}


def test_a_file_that_is_not_there_is_bad(here):
    result = run("check", "missing.toml", "lead.toml")
    assert result.exit_code == 1
    assert "missing.toml: there is no such file" in result.stderr
    assert result.stdout == "2 files checked: 1 good, 1 bad\n"


def test_a_folder_with_nothing_to_check_is_told(here):
    (here / "empty").mkdir()
    result = run("check", "empty")
    assert result.exit_code == 2
    assert "nothing to check" in complaint(result)


def test_nothing_is_written(here):
    before = sorted(here.rglob("*"))
    run("check", ".")
    assert sorted(here.rglob("*")) == before


def test_a_folder_that_can_not_be_read_is_bad():
    with open_folder() as folder:
        write_preset(folder)
        closed = folder / "closed"
        closed.mkdir()
        closed.chmod(0)
        with no_privileges():
            result = run("check", folder, "--json")
        closed.chmod(0o755)
    assert result.exit_code == 1
    (bad,) = [item for item in json.loads(result.stdout)["checked"] if not item["ok"]]
    assert (bad["path"], bad["kind"]) == (str(closed), "folder")
    assert result.stderr.startswith(f"glidesmith: {closed}: can't be read (Permission denied)")


def test_what_fails_while_reading_is_told_as_reading_and_stops_nothing(here, monkeypatch):
    def fail(path):
        raise OSError(errno.EINVAL, "Invalid argument", str(path))

    monkeypatch.setattr("glidesmith.preset.load_preset", fail)
    result = run("check", "lead.toml", "line.toml")
    assert result.stdout == "2 files checked: 1 good, 1 bad\n"
    assert "lead.toml: can't be read (Invalid argument)" in result.stderr


def test_a_preset_is_told_the_same_about_its_phrase_as_in_rendering(here):
    write_midi(here / "line.mid")
    (here / "lead.toml").write_text(PRESET + '[phrase]\nfile = "line.mid"\n')
    result = run("check", "lead.toml")
    assert result.exit_code == 0
    assert "ignored in the phrase: 1 controller" in result.stderr
    assert result.stderr == run("render", "lead.toml").stderr
