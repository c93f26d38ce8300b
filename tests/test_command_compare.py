"""``glidesmith compare``: the command line over `compare`, with the page that users get."""

import json
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from commands import ENVIRONMENT, complaint, process, run, write_midi, write_preset
from conftest import PRESETS

LAWS = ("--vary", "pitch.law=rc,exp,cosine")


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    write_preset(tmp_path)
    return tmp_path


def names(folder):
    return sorted(path.name for path in folder.iterdir())


def test_a_line_gives_a_folder_with_all_there_is_to_hear_and_see(here):
    result = run("compare", "lead.toml", "-o", "laws", *LAWS, "--equal", "landing")
    assert (result.exit_code, result.stderr) == (0, "")
    expected = ["01-rc.wav", "02-exp.wav", "03-cosine.wav", "comparison.json", "index.html"]
    assert names(here / "laws") == expected
    assert "Under test, playing Under test: 3 candidates (3 rendered)" in result.stdout
    assert "all at -23.0 LUFS" in result.stdout
    assert result.stdout.splitlines()[-1] == f"open {Path('laws') / 'index.html'}"
    assert "differs still: " in result.stdout


def test_the_page_is_one_file_with_the_audio_in_it(here):
    run("compare", "lead.toml", "-o", "laws", *LAWS)
    page = (here / "laws" / "index.html").read_text()
    assert page.lstrip().lower().startswith("<!doctype html>")
    wavs = sum(path.stat().st_size for path in (here / "laws").glob("*.wav"))
    assert len(page) < 1.4 * wavs + 300_000
    assert not re.search(r'(?:src|href)\s*=\s*"(?:https?:|//)', page)


def test_how_brief_phrases_are_measured_is_said(here):
    (here / "brief.toml").write_text('notes = [{ at = 0.0, lasts = 0.2, note = "A3" }]\n')
    arguments = ("--phrase", "brief.toml", "--vary", "gain.fall=50ms,2s")
    result = run("compare", "lead.toml", "-o", "brief", *arguments)
    facts = json.loads((here / "brief" / "comparison.json").read_text())["loudness"]
    assert facts["gated"] is False
    assert f"by the energy over {facts['metered_s']:.3g} s)" in result.stdout


def test_json_is_what_the_folder_holds(here):
    result = run("compare", "lead.toml", "-o", "laws", *LAWS, "--json")
    assert result.exit_code == 0
    assert json.loads(result.stdout) == json.loads((here / "laws" / "comparison.json").read_text())


def test_what_is_kept_is_said(here):
    run("compare", "lead.toml", "-o", "laws", *LAWS)
    result = run("compare", "lead.toml", "-o", "laws", "--vary", "pitch.law=rc,exp,cosine,log")
    assert "4 candidates (1 rendered, 3 kept from before)" in result.stdout


def test_every_option_reaches_the_set(here):
    write_midi(here / "line.mid")
    result = run(
        *("compare", "lead.toml", "-o", "set", *LAWS, "--json"),
        *("--phrase", "line.mid", "--channel", "1", "--track", "1", "--rate", "44100"),
        *("--equal", "midpoint", "--interval", "7", "--from", "D3", "--tolerance-cents", "10"),
    )  # fmt: skip
    assert result.exit_code == 0
    assert "ignored in the phrase: 1 controller" in result.stderr
    facts = json.loads(result.stdout)
    assert (facts["sample_rate"], facts["tolerance_cents"]) == (44_100, 10.0)
    assert facts["equal"].items() >= {"mode": "midpoint", "interval_semitones": 7.0, "from": "D3"}.items()
    assert facts["phrase"]["length_s"] == pytest.approx(0.5)


def test_a_note_may_be_a_number(here):
    result = run("compare", "lead.toml", "-o", "set", *LAWS, "--equal", "rise", "--from", "50", "--json")
    assert json.loads(result.stdout)["equal"]["from"] == "D3"


def test_a_sheet_and_several_presets_are_candidates_too(here):
    (here / "ideas.toml").write_text('title = "Ideas"\n[plain]\n[slow]\npitch.rise = "1 s"\n')
    assert run("compare", "lead.toml", "-o", "ideas", "--sheet", "ideas.toml").exit_code == 0
    assert names(here / "ideas")[:2] == ["01-plain.wav", "02-slow.wav"]
    write_preset(here, "bass.toml", text=(here / "lead.toml").read_text().partition("[phrase]")[0].replace(
        "Under test", "Bass").replace('"rc"', '"exp"'))  # fmt: skip
    assert run("compare", "lead.toml", "bass.toml", "-o", "both").exit_code == 0
    assert names(here / "both")[:2] == ["01-under-test.wav", "02-bass.wav"]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["lead.toml", "-o", "set"], "only one candidate"),
        (["lead.toml", "-o", "set", "--vary", "pitch.lwa=rc,exp"], 'did you mean "pitch.law"'),
        (["lead.toml", "-o", "set", *LAWS, "--vary", "pitch.law=log"], "given twice"),
        (["lead.toml", "-o", "set", "--vary", "pitch.rise=10,soon"], "soon"),
        (["lead.toml", "-o", "set", "--vary", "pitch.law=rc,"], "value 2 of 2 is empty"),
        (["lead.toml", "-o", "set", *LAWS, "--most", "2"], "--most 3"),
        (["lead.toml", "-o", "set", *LAWS, "--most", "0"], "2 to 256"),
        (["lead.toml", "-o", "set", *LAWS, "--interval", "7"], "--equal landing"),
        (["lead.toml", "-o", "set", *LAWS, "--equal", "rise", "--interval", "0.01"], "within the tolerance"),
        (["lead.toml", "-o", "set", *LAWS, "--equal", "landing", "--from", "H3"], "H3"),
        (["lead.toml", "-o", "set", *LAWS, "--equal", "loudness"], "--equal"),
        (["lead.toml", "-o", "set", "--vary", "pitch.rise=0,1ms", "--equal", "rise"], "pitch.rise is varied"),
        (["lead.toml", "-o", "set", *LAWS, "--equal", "landing", "--from", "G9"], "the highest note"),
        (["lead.toml", "-o", "set", *LAWS, "--rate", "96001"], "take 96000 or 96010"),
        (["lead.toml", "-o", "set", "--sheet", "lead.toml"], "is a preset, not a sheet"),
        (["lead.toml", *LAWS], "--output"),
        (["missing.toml", "-o", "set", *LAWS], "no such file"),
        (["bare.toml", "-o", "set", *LAWS], "--phrase"),
        (["lead.toml", "-o", "set", "--sheet", "missing.toml"], "no such file"),
        (["lead.toml", "-o", "set", *LAWS, "--phrase", "missing.mid"], "no such file"),
        (["lead.toml", "-o", "lead.toml", *LAWS], "lead.toml"),
        (["lead.toml", "-o", "full", *LAWS], "--replace"),
        (["lead.toml", "-o", ".", *LAWS], "--replace"),
    ],
)  # fmt: skip
def test_bad_input_is_told_in_a_line_and_nothing_is_written(here, arguments, words):
    write_preset(here, "bare.toml", phrase=None)
    (here / "full").mkdir()
    (here / "full" / "notes.txt").write_text("mine")
    before = names(here)
    result = run("compare", *arguments)
    assert result.exit_code == 2
    assert words in complaint(result)
    assert names(here) == before
    assert names(here / "full") == ["notes.txt"]


def test_titles_that_are_markup_stay_text(here):
    title = "</script><script>alert(1)</script>"
    preset = (here / "lead.toml").read_text().replace("Under test", title)
    (here / "lead.toml").write_text(preset)
    assert run("compare", "lead.toml", "-o", "set", *LAWS).exit_code == 0
    page = (here / "set" / "index.html").read_text()
    assert "<script>alert(1)" not in page


def test_progress_is_shown_when_asked_for(here, monkeypatch):
    monkeypatch.setattr("glidesmith.command.progress._PATIENCE_S", 0.0)
    result = run("compare", "lead.toml", "-o", "set", *LAWS, "--progress")
    assert "comparing: 100 %" in result.stderr


@pytest.mark.skipif(os.name != "posix", reason="signals as POSIX systems have them")
def test_a_killed_run_is_finished_by_the_next(tmp_path):
    """Killed again and again, at other moments: what the next run leaves is what a run of its own leaves."""
    folder = tmp_path / "set"
    command = [
        *(sys.executable, "-m", "glidesmith", "compare", str(PRESETS / "night-ferry-lead.toml")),
        *("-o", str(folder), *LAWS),
    ]
    begin = time.monotonic()
    assert process(*command[3:-3], str(tmp_path / "fresh"), *LAWS).returncode == 0
    takes_s = time.monotonic() - begin
    for part in (0.5, 0.8, 0.95, 1.0):
        running = subprocess.Popen(
            command, env=ENVIRONMENT, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        )
        try:
            running.wait(part * takes_s)
        except subprocess.TimeoutExpired:
            running.send_signal(signal.SIGKILL)
        running.wait()
    done = subprocess.run(command, env=ENVIRONMENT, capture_output=True, text=True)
    assert (done.returncode, done.stderr) == (0, "")
    fresh = tmp_path / "fresh"
    assert names(folder) == names(fresh)
    assert all((folder / name).read_bytes() == (fresh / name).read_bytes() for name in names(fresh))


def test_only_what_is_needed_is_imported(here):
    code = (
        "import sys; from glidesmith.command import main\n"
        "try: main(sys.argv[1:])\n"
        "except SystemExit as end: code = end.code\n"
        "heavy = {'scipy.signal', 'scipy.stats', 'matplotlib', 'mido', 'tomlkit', 'sounddevice'}\n"
        "print(code, sorted(heavy & set(sys.modules)))"
    )
    arguments = ["compare", "lead.toml", "-o", "set", *LAWS]
    done = subprocess.run(
        [sys.executable, "-c", code, *arguments], capture_output=True, text=True, check=True, env=ENVIRONMENT
    )
    assert done.stdout.splitlines()[-1] == "0 []", done.stderr


def test_a_set_never_replaces_what_it_is_made_from(here):
    """An oscillator file among the WAVs of the set's folder, even with --replace."""
    (here / "laws").mkdir()
    (here / "laws" / "01-rc.wav").write_bytes(b"of the test")
    wave = '[oscillator]\nwave = "file"\nfile = "laws/01-rc.wav"\n'
    (here / "cycle.toml").write_text(wave + (here / "lead.toml").read_text().partition("\n")[2])
    result = run("compare", "cycle.toml", "-o", "laws", "--vary", "pitch.law=rc,exp", "--replace")
    assert result.exit_code == 2
    assert "is what is rendered from" in complaint(result)
    assert (here / "laws" / "01-rc.wav").read_bytes() == b"of the test"


def test_mistakes_are_in_the_json_too(here):
    (here / "bad.toml").write_text("nonsense = 1\n")
    result = run("compare", "bad.toml", "-o", "laws", "--vary", "pitch.law=rc,exp", "--json")
    assert result.exit_code == 2
    assert "nonsense" in json.loads(result.stdout)["errors"][0]


def test_paths_to_vary_count_from_where_they_are_written(here):
    """On the command line from the working folder, in a sheet from the sheet's; the set tells names only."""
    import numpy as np
    import soundfile

    (here / "bank").mkdir()
    cycles = {"bell": here / "bell.wav", "horn": here / "bank" / "horn.wav"}
    for harmonic, path in enumerate(cycles.values(), 1):
        wave = 0.5 * np.sin(2 * np.pi * harmonic * np.arange(256) / 256)
        soundfile.write(path, wave, 48000, subtype="FLOAT")
    wave = '[oscillator]\nwave = "file"\nfile = "horn.wav"\n'
    (here / "bank" / "lead.toml").write_text(wave + (here / "lead.toml").read_text().partition("\n")[2])
    files = ("--vary", "oscillator.file=bell.wav,bank/horn.wav")
    result = run("compare", "bank/lead.toml", "-o", "cycles", *files, "--phrase", "line.toml")
    assert (result.exit_code, result.stderr) == (0, "")
    told = json.loads((here / "cycles" / "comparison.json").read_text())
    varied = [candidate["varied"]["oscillator.file"] for candidate in told["candidates"]]
    assert varied == ["bell.wav", "horn.wav"]
    assert str(here) not in (here / "cycles" / "comparison.json").read_text()
    (here / "bank" / "bell.toml").write_text(
        '[a]\n"oscillator.file" = "horn.wav"\n[b]\n"oscillator.file" = "../bell.wav"\n'
    )
    result = run(
        "compare", "bank/lead.toml", "-o", "sheet", "--sheet", "bank/bell.toml", "--phrase", "line.toml"
    )
    assert (result.exit_code, result.stderr) == (0, "")
