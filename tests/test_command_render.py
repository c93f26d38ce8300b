"""``glidesmith render``: the samples of the Python API, whole files or none, a line a mistake."""

import json
import os
import pty
import resource
import signal
import subprocess
import sys
import time

import numpy as np
import pytest
import soundfile

from commands import ENVIRONMENT, PRESET, complaint, long_phrase, process, run, write_midi, write_preset
from glidesmith import load_phrase, load_preset, render
from glidesmith.command.progress import Progress, _fitted
from glidesmith.preset import settings_hash
from glidesmith.wav import quantise
from unprivileged import no_privileges, open_folder


@pytest.fixture
def here(tmp_path, monkeypatch):
    """A folder of the test's own, as the current one, with a preset and its phrase."""
    monkeypatch.chdir(tmp_path)
    write_preset(tmp_path)
    return tmp_path


def rendered(sample_rate=48_000, trace=False):
    return render(load_preset("lead.toml"), load_phrase("line.toml"), sample_rate, trace)


@pytest.mark.parametrize("depth", ["16", "24", "float"])
@pytest.mark.parametrize("rate", [22_050, 48_000, 96_000])
def test_the_file_holds_what_the_api_renders(here, depth, rate):
    result = run("render", "lead.toml", "-o", "take.wav", "--depth", depth, "--rate", rate)
    assert (result.exit_code, result.stderr) == (0, "")
    found, file_rate = soundfile.read("take.wav")
    assert file_rate == rate
    codes, _ = quantise(rendered(rate).audio, depth if depth == "float" else int(depth))
    np.testing.assert_array_equal(found, codes if depth == "float" else codes / 2.0 ** (int(depth) - 1))


def test_without_an_output_the_file_is_named_after_the_preset_in_the_current_folder(here):
    (here / "bank").mkdir()
    write_preset(here / "bank", "warm.v2.toml")
    assert run("render", "bank/warm.v2.toml").exit_code == 0
    assert (here / "warm.v2.wav").exists()


def test_the_text_fields_name_the_preset_and_its_settings(here):
    run("render", "lead.toml")
    with soundfile.SoundFile("lead.wav") as file:
        assert file.title == "Under test"
        assert file.comment == f"Settings {settings_hash(load_preset('lead.toml'))}"


def test_the_line_tells_length_rate_depth_and_peak(here):
    line = run("render", "lead.toml", "--depth", "16").stdout
    report = rendered().report
    assert line == f"lead.wav: {report.seconds:.3f} s, 48,000 Hz, 16 bit, peak {report.peak_db:.1f} dBFS\n"


def test_json_tells_the_facts(here):
    result = run("render", "lead.toml", "-o", "out.wav", "--json")
    report = rendered().report
    assert json.loads(result.stdout) == {
        "rendered": [
            {
                "preset": "lead.toml",
                "phrase": "line.toml",
                "output": "out.wav",
                "sample_rate": 48_000,
                "depth": 24,
                "frames": report.frames,
                "length_s": report.seconds,
                "peak_dbfs": report.peak_db,
                "clipped": 0,
                "settings_sha256": settings_hash(load_preset("lead.toml")),
                "warnings": [],
            }
        ],
        "failed": [],
    }


def test_quiet_prints_nothing_when_all_is_well(here):
    result = run("render", "lead.toml", "--quiet")
    assert (result.exit_code, result.output) == (0, "")


def test_a_phrase_from_the_command_line_takes_the_place_of_the_presets_own(here):
    (here / "other.toml").write_text('notes = [{ at = 0, lasts = 4, note = "A4" }]\n')
    write_preset(here, "bare.toml", phrase=None)
    assert run("render", "bare.toml", "--phrase", "other.toml", "-o", "bare.wav").exit_code == 0
    assert run("render", "lead.toml", "--phrase", "other.toml", "-o", "lead.wav").exit_code == 0
    assert (here / "bare.wav").read_bytes() == (here / "lead.wav").read_bytes()
    assert soundfile.info("lead.wav").duration > 2


def test_what_a_midi_file_holds_without_effect_is_told(here):
    write_midi(here / "line.mid")
    result = run("render", "lead.toml", "--phrase", "line.mid", "--json")
    assert result.exit_code == 0
    (facts,) = json.loads(result.stdout)["rendered"]
    (warning,) = facts["warnings"]
    assert facts["phrase"] == "line.mid"
    assert warning.startswith("ignored in the phrase: 1 controller")
    assert result.stderr == f"glidesmith: lead.toml: {warning}\n"


def test_the_tail_limits_the_length(here):
    slow = PRESET.replace('fall = "20 ms"', 'fall = "50 s"').replace('title = "Under test"', "")
    write_preset(here, "slow.toml", text=slow)
    run("render", "slow.toml", "--tail", "250 ms")
    short = soundfile.info("slow.wav").duration
    run("render", "slow.toml", "--tail", "1.5")
    assert soundfile.info("slow.wav").duration - short == pytest.approx(1.25, abs=1e-9)


def test_dither_has_a_seed(here):
    def data(*options):
        assert run("render", "lead.toml", "--depth", "16", *options).exit_code == 0
        return (here / "lead.wav").read_bytes()

    assert data("--dither") == data("--dither", "--seed", 0)
    assert len({data(), data("--dither"), data("--dither", "--seed", 1)}) == 3


def test_several_presets_go_into_a_folder_that_is_made(here):
    write_preset(here, "second.toml")
    result = run("render", "lead.toml", "second.toml", "-o", "new/takes")
    assert result.exit_code == 0
    assert sorted(p.name for p in (here / "new" / "takes").iterdir()) == ["lead.wav", "second.wav"]
    assert len(result.stdout.splitlines()) == 2


def test_one_preset_goes_into_a_folder_that_is_there(here):
    (here / "takes.wav").mkdir()
    assert run("render", "lead.toml", "-o", "takes.wav").exit_code == 0
    assert (here / "takes.wav" / "lead.wav").exists()


def test_a_preset_that_fails_does_not_stop_the_others(here):
    (here / "bad.toml").write_text("nonsense = 1\n")
    write_preset(here, "second.toml")
    result = run("render", "lead.toml", "bad.toml", "second.toml", "-o", "takes", "--json")
    assert result.exit_code == 1
    facts = json.loads(result.stdout)
    assert [item["preset"] for item in facts["rendered"]] == ["lead.toml", "second.toml"]
    (failed,) = facts["failed"]
    assert failed["preset"] == "bad.toml"
    assert any("nonsense" in line for line in failed["errors"])
    assert result.stderr.splitlines()[-1] == "glidesmith: 1 of 3 presets failed: bad.toml"
    assert {p.name for p in (here / "takes").iterdir()} == {"lead.wav", "second.wav"}


def test_two_presets_that_would_write_one_file_are_refused_before_anything_is_rendered(here):
    (here / "bank").mkdir()
    write_preset(here / "bank", "lead.toml")
    result = run("render", "lead.toml", "bank/lead.toml", "-o", "takes")
    assert result.exit_code == 2
    assert "both write" in complaint(result)
    assert not (here / "takes").exists()


def test_a_trace_holds_the_same_doubles_as_the_api(here):
    assert run("render", "lead.toml", "--trace", "lead.csv").exit_code == 0
    wanted = rendered(trace=True)
    found = np.genfromtxt("lead.csv", delimiter=",", names=True)
    assert found.dtype.names == ("time_s", "target_volts", "pitch_volts", "gate", "gain_control", "gain")
    for name in ("pitch_volts", "gain_control", "gain"):
        np.testing.assert_array_equal(found[name], getattr(wanted, name))
    np.testing.assert_array_equal(found["time_s"], np.arange(len(wanted.audio)) / 48_000)
    # D3 is 10 and A3 3 semitones under C4, which is 0 V. At 240 beats a minute the second note starts after
    # an eighth of a second, and both are over after a quarter.
    second = 48_000 // 8
    np.testing.assert_array_equal(np.unique(found["target_volts"][:second]), [-10 / 12])
    np.testing.assert_array_equal(np.unique(found["target_volts"][second:]), [-3 / 12])
    np.testing.assert_array_equal(np.flatnonzero(found["gate"]), np.arange(2 * second))


def test_control_voltages_are_those_of_the_trace_with_a_caution(here):
    result = run("render", "lead.toml", "--cv", "cv.wav", "--cv-full-scale", 5)
    assert result.exit_code == 0
    assert "cv.wav carries DC voltages: never play it to loudspeakers or headphones" in result.stderr
    wanted = rendered(trace=True)
    found, _ = soundfile.read("cv.wav")
    np.testing.assert_allclose(found[:, 0] * 5, wanted.pitch_volts, atol=5 / 2**23)
    np.testing.assert_allclose(found[:, 1], wanted.gain_control, atol=1 / 2**23)


def test_control_voltages_beyond_the_full_scale_are_told(here):
    result = run("render", "lead.toml", "--cv", "cv.wav", "--cv-full-scale", 0.5, "--json")
    assert result.exit_code == 0
    (warning,) = json.loads(result.stdout)["rendered"][0]["warnings"]
    assert "held at the full scale of 0.5 V" in warning
    assert warning in result.stderr


def test_clipped_samples_are_told(here):
    loud = PRESET + '[oscillator]\nwave = "sine"\nlevel_db = 0.0\n[drone]\nnote = "D3"\nlevel_db = 0.0\n'
    write_preset(here, "loud.toml", text=loud)
    result = run("render", "loud.toml", "--json")
    assert result.exit_code == 0
    (facts,) = json.loads(result.stdout)["rendered"]
    assert facts["clipped"] > 0
    assert facts["peak_dbfs"] == 0.0
    assert "clipped" in result.stderr
    assert "clipped" in run("render", "loud.toml").stdout


def test_control_characters_in_a_title_are_escaped(here):
    write_preset(here, text=PRESET.replace("Under test", "\\u001b[31mred\\n"))
    result = run("render", "lead.toml")
    assert result.exit_code == 0
    assert "\x1b" not in result.output
    with soundfile.SoundFile("lead.wav") as file:
        assert file.title == "\\x1b[31mred\\n"


# Pipes


def test_a_pipe_gets_the_same_bytes_and_nothing_else(here):
    result = process("render", "lead.toml", "-o", "-")
    assert result.returncode == 0
    run("render", "lead.toml")
    assert result.stdout == (here / "lead.wav").read_bytes()
    assert result.stderr.startswith(b"standard output: ")


def test_facts_about_a_piped_render_go_to_standard_error(here):
    result = process("render", "lead.toml", "-o", "-", "--json")
    assert result.stdout.startswith(b"RIFF")
    assert json.loads(result.stderr)["rendered"][0]["output"] == "-"


def test_a_terminal_gets_no_audio(here):
    terminal, end = pty.openpty()
    command = [sys.executable, "-m", "glidesmith", "render", "lead.toml", "-o", "-"]
    done = subprocess.run(command, stdout=end, stderr=subprocess.PIPE, text=True, env=ENVIRONMENT)
    os.close(end)
    os.close(terminal)
    assert done.returncode == 2
    assert "standard output is a terminal" in done.stderr


def test_a_reader_that_goes_away_is_told_in_a_line(here):
    long_phrase(here, 0.5)
    shell = f"{sys.executable} -m glidesmith render lead.toml --phrase long.toml -o - | head -c 100 | wc -c"
    done = subprocess.run(["bash", "-c", shell], capture_output=True, text=True, check=True, env=ENVIRONMENT)
    assert done.stdout.strip() == "100"
    (line,) = done.stderr.splitlines()
    assert line.startswith("glidesmith: standard output: the reader went away")


@pytest.mark.parametrize("minutes", [0.001, 0.1], ids=["all in the buffer", "more than the buffer"])
def test_standard_output_that_takes_nothing_is_told_once(here, minutes):
    long_phrase(here, minutes)
    command = [sys.executable, "-m", "glidesmith", "render", "lead.toml", "--phrase", "long.toml", "-o", "-"]
    with open("/dev/full", "wb") as full:  # noqa: PTH123
        done = subprocess.run(command, stdout=full, stderr=subprocess.PIPE, text=True, env=ENVIRONMENT)
    assert done.returncode == 2
    (line,) = done.stderr.splitlines()
    assert line.startswith("glidesmith: standard output: the disk is full")


def test_a_device_is_written_to_and_stays_one(here):
    assert run("render", "lead.toml", "-o", os.devnull).exit_code == 0
    result = run("render", "lead.toml", "-o", "/dev/full")
    assert result.exit_code == 2
    assert "disk is full" in complaint(result)


# Progress


def test_progress_is_shown_when_asked_for_and_not_in_a_pipe_otherwise(here, monkeypatch):
    monkeypatch.setattr("glidesmith.command.progress._PATIENCE_S", 0.0)
    assert run("render", "lead.toml").stderr == ""
    lines = run("render", "lead.toml", "--progress").stderr.splitlines()
    assert lines
    assert lines[-1] == "lead: 100 %, 0 s left"
    assert run("render", "lead.toml", "--progress", "--quiet").stderr == ""


def test_progress_on_a_terminal_is_one_line_that_goes_away(here):
    """Whatever came in between, the line is blank at the end."""
    long_phrase(here, 10)
    terminal, end = pty.openpty()
    command = [sys.executable, "-m", "glidesmith", "render", "lead.toml", "--phrase", "long.toml", "--quiet"]
    subprocess.run(command, stderr=end, check=True)
    os.close(end)
    shown = b""
    with os.fdopen(terminal, "rb", buffering=0) as file:
        while part := _read(file):
            shown += part
    if shown:  # a fast machine has nothing to show
        assert b"lead: " in shown
        assert b"\n" not in shown
        assert shown.endswith(b" \r")


@pytest.mark.parametrize("width", [8, 20, 30, 40, 50, 60, 79, 200])
@pytest.mark.parametrize("label", ["a", "a-long-name-of-a-preset-it-is"])
def test_progress_fits_the_terminal(label, width):
    line = _fitted(label, ":  50 %, 12 s left", 0.5, width)
    assert len(line) <= width
    if width > 79:
        assert line == f"{label}:  50 %, 12 s left [{'=' * 15}{' ' * 15}]"
    elif width > 26:
        assert "50 %, 12 s left" in line


def test_progress_on_a_narrow_terminal_stays_in_one_row(monkeypatch, capsys):
    monkeypatch.setattr("glidesmith.command.progress._PATIENCE_S", 0.0)
    monkeypatch.setattr("glidesmith.command.progress._columns", lambda: 30)
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    with Progress("a-long-name-of-a-preset") as progress:
        progress(1, 2)
    rows = [row for row in capsys.readouterr().err.split("\r") if row]
    assert len(rows) == 2
    assert all(len(row) <= 29 for row in rows)


def _read(file):
    """What a terminal still holds; its end is an error on Linux."""
    try:
        return file.read(65_536)
    except OSError:
        return b""


# What is refused


def contents(folder):
    return {path.name: path.read_bytes() if path.is_file() else None for path in folder.iterdir()}


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["lead.toml", "lead.toml"], "-o FOLDER"),
        (["lead.toml", "other.toml", "-o", "one.wav"], "-o FOLDER"),
        (["lead.toml", "other.toml", "-o", "-"], "-o FOLDER"),
        (["lead.toml", "other.toml", "-o", "takes", "--trace", "t.csv"], "one by one"),
        (["lead.toml", "other.toml", "-o", "takes", "--cv", "cv.wav"], "one by one"),
        (["lead.toml", "-o", "take.mp3"], "only WAV"),
        (["lead.toml", "-o", "missing/take.wav"], "folder does not exist"),
        (["lead.toml", "-o", "lead.toml/take.wav"], "is a file"),
        (["lead.toml", "other.toml", "-o", "lead.toml/takes"], "is a file"),
        (["lead.toml", "-o", "a.wav", "--cv", "a.wav"], "same file"),
        (["lead.toml", "--trace", "lead.toml"], "is what is rendered from"),
        (["lead.toml", "--cv", "line.toml"], "is what is rendered from"),
        (["lead.toml", "--phrase", "line.wav", "-o", "line.wav"], "line.wav"),
        (["lead.toml", "-o", ""], "name is empty"),
        (["lead.toml", "--trace", ""], "name is empty"),
        (["lead.toml", "--trace", "-"], "only -o can be -"),
        (["lead.toml", "--cv", "-"], "only -o can be -"),
        (["lead.toml", "--cv", "cv.wav", "--cv-full-scale", "nan"], "--cv-full-scale"),
        (["lead.toml", "--cv", "cv.wav", "--tail", "2 h"], "tail"),
        (["lead.toml", "--cv", "n" * 300], "too long"),
        (["lead.toml", "--seed", "1"], "--dither"),
        (["lead.toml", "--dither", "--depth", "float"], "float"),
        (["lead.toml", "--cv-full-scale", "5"], "--cv"),
        (["lead.toml", "--cv", "cv.wav", "--cv-full-scale", "0"], "0"),
        (["lead.toml", "--rate", "7999"], "8000"),
        (["lead.toml", "--rate", "384001"], "384000"),
        (["lead.toml", "--tail", "-1"], "not negative"),
        (["lead.toml", "--tail", "nan"], "nan"),
        (["lead.toml", "--tail", "soon"], "80 ms"),
        (["lead.toml", "--tail", "2 years"], "80 ms"),
        (["lead.toml", "--longest", "1 ms"], "longest"),
        (["lead.toml", "--channel", "17"], "16"),
        (["lead.toml", "--channel", "1"], "no MIDI file"),
        (["missing.toml"], "no such file"),
        (["."], "is a folder"),
        (["bare.toml"], "--phrase"),
        (["nul\udcff.toml"], "no such file"),
        (["lead.toml", "-o", "n" * 300 + ".wav"], "too long"),
        (["lead.toml", "-o", "n" * 300], "too long"),
        (["n" * 300], "too long"),
        (["lead.toml", "--trace", "n" * 300], "too long"),
        (["lead.toml", "-o", "loop.wav"], "circle"),
        (["loop.wav"], "can't be read"),
    ],
)
def test_what_can_not_be_done_is_told_in_a_line_and_nothing_changes(here, arguments, words):
    write_preset(here, "other.toml")
    write_preset(here, "bare.toml", phrase=None)
    (here / "line.wav").write_bytes(b"not a phrase")
    (here / "loop.wav").symlink_to("loop.wav")
    before = contents(here)
    result = run("render", *arguments)
    assert result.exit_code == 2
    assert words in complaint(result)
    assert contents(here) == before


def test_every_mistake_in_a_preset_is_told(here):
    write_preset(here, text=PRESET.replace("rise", "rize").replace('"rc"', '"rq"'))
    result = run("render", "lead.toml")
    assert result.exit_code == 2
    assert len(result.stderr.splitlines()) > 2
    assert all(line.startswith("glidesmith: lead.toml: ") for line in result.stderr.splitlines())


def test_a_folder_without_permission_is_told():
    with open_folder() as folder:
        write_preset(folder)
        (folder / "take.wav").write_bytes(b"old")
        (folder / "take.wav").chmod(0o666)
        assert run("render", folder / "lead.toml", "-o", os.devnull).exit_code == 0
        folder.chmod(0o555)
        with no_privileges():
            result = run("render", folder / "lead.toml", "-o", folder / "take.wav")
        assert result.exit_code == 2
        assert "may not write there" in complaint(result)
        assert (folder / "take.wav").read_bytes() == b"old"


def test_a_limit_on_the_size_of_files_leaves_the_old_one(here):
    (here / "take.wav").write_bytes(b"old")
    long_phrase(here, 0.5)

    def limited():
        resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, 200_000))

    # Room for compiled code is needed only where there is none yet.
    run("render", "lead.toml")
    result = process("render", "lead.toml", "--phrase", "long.toml", "-o", "take.wav", preexec_fn=limited)
    assert result.returncode == 2
    assert b"larger than the system allows" in result.stderr
    assert b"Traceback" not in result.stderr
    assert (here / "take.wav").read_bytes() == b"old"


def started(here, minutes=60):
    """A long render as a process, once samples are being written: compiled code has been loaded by then."""
    long_phrase(here, minutes)
    part = here / "take.wav.part"
    part.unlink(missing_ok=True)
    command = [
        sys.executable,
        "-m",
        "glidesmith",
        "render",
        "lead.toml",
        "--phrase",
        "long.toml",
        "-o",
        "take.wav",
    ]
    running = subprocess.Popen(command, stderr=subprocess.PIPE, text=True)
    while running.poll() is None and not (part.exists() and part.stat().st_size > 500_000):
        time.sleep(0.01)
    return running


def test_a_render_killed_on_the_way_leaves_the_old_file_and_the_next_one_works(here):
    (here / "take.wav").write_bytes(b"old")
    running = started(here)
    running.send_signal(signal.SIGKILL)
    running.communicate()
    assert (here / "take.wav").read_bytes() == b"old"
    assert run("render", "lead.toml", "-o", "take.wav").exit_code == 0
    assert soundfile.info("take.wav").frames == len(rendered().audio)
    assert not (here / "take.wav.part").exists()


@pytest.mark.parametrize(("name", "status"), [("SIGINT", 130), ("SIGTERM", 143), ("SIGHUP", 129)])
def test_a_render_that_is_told_to_end_leaves_nothing_of_its_own(here, name, status):
    (here / "take.wav").write_bytes(b"old")
    running = started(here)
    running.send_signal(getattr(signal, name))
    _, said = running.communicate()
    assert running.returncode == status
    assert said.strip() == "glidesmith: interrupted; what was being written is removed"
    assert (here / "take.wav").read_bytes() == b"old"
    assert not (here / "take.wav.part").exists()
