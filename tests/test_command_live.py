"""The live command without a sound card: usage, keys, status, and the browser in the card's place."""

import json
import signal
import subprocess
import sys

import numpy as np
import pytest

from commands import ENVIRONMENT, PRESET, complaint, run, write_preset
from glidesmith.command.livekeys import LiveKeys, capture_line, free_capture_name, status_text
from glidesmith.command.livesignals import EndingSignals
from glidesmith.session import Session
from making import make_phrase, make_preset
from sound_servers import isolated, needs_portaudio, watched

RATE = 48_000


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--port", "8123", "--no-panel"], "--port is about the panel"),
        (["--no-browser", "--no-panel"], "--no-browser is about the panel"),
        (["--browser-sound", "--no-panel"], "--browser-sound is about the panel"),
        (["--browser-sound", "--device", "quay"], "--device is about a sound card"),
        (["--browser-sound", "--python-callback"], "--python-callback is about a sound card"),
        (["--capture", "take.flac"], "take.flac: only WAV is written: name it .wav"),
        (["--capture", "lead.toml"], "lead.toml: only WAV is written"),
        (["--log", "lead.toml"], "lead.toml: is what is rendered from"),
        (["--log", "line.toml"], "line.toml: is what is rendered from"),
        (["--latency", "soon"], "soon"),
        (["--latency", "0"], 'give low, high, or a time up to 2 s as "20 ms"'),
        (["--latency", "5 s"], "give low, high, or a time up to 2 s"),
        (["--rate", "48k"], "give whole hertz from 8000 to 384000"),
        (["--rate", "4000"], "4000"),
        (["--block", "0"], "--block"),
        (["--block", "100000"], "--block"),
        (["--level", "3"], "--level"),
        (["--level", "nan"], "--level"),
        (["--ceiling", "0"], "--ceiling"),
        (["--seconds", "-1"], "-1"),
        (["--vary", "pitch.law=rc"], "--vary needs several values"),
        (["--vary", "pitch.rise=1ms,2ms,3ms", "--vary", "pitch.fall=1ms,2ms,3ms"], "makes 9 candidates"),
        (["--vary", "pitch.lag=1,2"], "pitch.lag"),
        (["--phrase", "nowhere.toml"], "nowhere.toml: there is no such file"),
    ],
)
def test_what_can_not_be_meant_is_told_in_a_line(tmp_path, monkeypatch, options, words):
    write_preset(tmp_path)
    monkeypatch.chdir(tmp_path)
    result = run("live", "lead.toml", *options)
    assert result.exit_code == 2
    assert words in complaint(result)


def test_more_presets_than_slots_are_told(tmp_path):
    preset = write_preset(tmp_path)
    assert "9 presets, and there are 8 slots" in complaint(run("live", *[preset] * 9))


def test_a_preset_without_a_phrase_is_told(tmp_path):
    assert "names no phrase" in complaint(run("live", write_preset(tmp_path, phrase=None)))


def test_mistakes_are_told_as_json_too(tmp_path):
    result = run("live", tmp_path / "gone.toml", "--json")
    assert result.exit_code == 2
    (line,) = json.loads(result.stdout)["errors"]
    assert "gone.toml: there is no such file" in line


class Bench:
    """A session of three slots with keys, played by the test."""

    def __init__(self, folder):
        presets = [make_preset(title=title, pitch={"rise": rise}) for title, rise in TITLES.items()]
        self.session = Session(presets, make_phrase((0, 1, 60), (1, 2, 67)), RATE)
        self.said: list[str] = []
        self.keys = LiveKeys(self.session, lambda *lines: self.said.extend(lines), lambda: ["going well"])
        self.folder = folder
        self.session.play()
        self.play()

    def play(self, frames: int = 4_800) -> None:
        self.session.deck.play(np.zeros(frames, np.float32))
        self.session.tick()

    def press(self, *keys: str) -> dict:
        """Press keys, and let the deck take what they do; the state after it."""
        for key in keys:
            self.keys.press(key)
            self.play()
        return self.session.state()


TITLES = {"Bridge": 0.02, "Quay": 0.04, "Engine room": 0.06}


@pytest.fixture
def bench(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    made = Bench(tmp_path)
    yield made
    made.session.close()


def test_number_keys_and_arrows_change_slots(bench):
    assert [bench.press(key)["current"] for key in ("2", "right", "right", "left")] == [2, 3, 1, 3]
    assert bench.session.deck.state().slot == 3
    bench.press("5")
    assert bench.said == ["slot 5 is empty: name more presets, up to eight, or vary a key with --vary"]


def test_slots_change_at_the_start_of_the_loop_when_asked(bench):
    state = bench.press("w", "2")
    assert (state["waiting_slot"], state["current"]) == (2, 1)
    bench.play(2 * RATE)
    bench.play()
    state = bench.session.state()
    assert (state["waiting_slot"], state["current"]) == (None, 2)
    assert "at the start of the loop" in bench.said[0]


def test_transport_keys(bench):
    assert bench.press("l")["loop"] is False
    assert bench.press("l")["loop"] is True
    assert bench.press(" ")["playing"] == "stopped"
    assert bench.press(" ")["playing"] == "phrase"
    bench.play(RATE // 2)
    bench.press("r")
    assert bench.session.deck.state().position < 5_000
    assert bench.press("p")["playing"] == "stopped"
    assert bench.press("m")["match"] is False


def test_level_keys_move_by_a_decibel_and_stop_at_full_scale(bench):
    levels = [bench.press(key)["level_db"] for key in ("+", "=", "up", "-", "down", "down")]
    assert levels == [-29.0, -28.0, -27.0, -28.0, -29.0, -30.0]
    bench.session.level(-0.5)
    assert bench.press("+")["level_db"] == -0.5
    assert bench.said == []


def test_the_capture_key_starts_and_ends_captures_under_free_names(bench):
    bench.press("c")
    assert (bench.folder / "capture-1.wav").exists() is False  # whole or not at all
    bench.play(RATE)
    bench.press("c")
    assert bench.said[0] == "capturing to capture-1.wav"
    assert bench.said[1].startswith("capture-1.wav: 1.")
    assert (bench.folder / "capture-1.wav").exists()
    assert free_capture_name().name == "capture-2.wav"
    (bench.folder / "capture-2.log.jsonl").touch()
    assert free_capture_name().name == "capture-3.wav"


def test_lost_samples_of_a_capture_are_told():
    facts = {"path": "a.wav", "log": "a.log", "seconds": 1.5, "lost": 1200}
    assert (
        capture_line(facts)
        == "a.wav: 1.500 s captured, 1,200 samples lost and silent in it; a.log gives it again"
    )


def test_help_report_and_end(bench):
    bench.press("?")
    told = "\n".join(bench.said)
    for key in ("1 to 8", "space", "r ", "l ", "+ -", "p panic", "m ", "c ", "i ", "w ", "q ends"):
        assert key in told
    bench.said.clear()
    bench.press("i", "x", "ä", "9", "0")
    assert bench.said == ["going well"]
    assert not bench.keys.ended
    bench.press("Q")
    assert bench.keys.ended


def test_what_a_key_can_not_do_is_said_and_nothing_ends(bench, monkeypatch):
    bench.folder.chmod(0o500)
    monkeypatch.setattr(
        "glidesmith.command.livekeys.free_capture_name", lambda: bench.folder / "gone" / "a.wav"
    )
    bench.press("c")
    bench.folder.chmod(0o700)
    assert "its folder does not exist; make it first" in bench.said[0]
    assert not bench.keys.ended


def test_the_status_says_slot_position_level_and_loudness(bench):
    text = status_text(bench.session)
    assert text.startswith("slot 1 of 3: Bridge | looping 0.1 of 2.0 s | -30 dB")
    bench.press("w", "3", "m")
    bench.play(RATE)
    text = status_text(bench.session)
    assert "slot 3 next round | looping 1." in text
    assert "-30 dB, unmatched | " in text
    assert "LUFS" in text
    assert "| playing 1." in (bench.press("l"), status_text(bench.session))[1]
    bench.press(" ")
    assert "| stopped |" in status_text(bench.session)
    assert "| no device |" in status_text(bench.session, lost=True)
    bench.press("c")
    assert "| capturing 0 s" in status_text(bench.session)


def test_ending_signals_interrupt_once_until_they_are_only_noted():
    before = signal.getsignal(signal.SIGTERM)
    with EndingSignals() as signals:
        with pytest.raises(KeyboardInterrupt):
            signal.raise_signal(signal.SIGTERM)
        signal.raise_signal(signal.SIGINT)
        assert signals.number == signal.SIGTERM
    with EndingSignals() as signals:
        signals.interrupts = False
        signal.raise_signal(signal.SIGINT)
        signal.raise_signal(signal.SIGTERM)
        assert signals.number == signal.SIGINT
    assert signal.getsignal(signal.SIGTERM) is before


def test_an_interrupt_that_python_swallows_is_still_noted_and_not_told(capfd):
    class Unlucky:
        def __del__(self):
            signal.raise_signal(signal.SIGTERM)

    with EndingSignals() as signals:
        Unlucky()
        assert signals.number == signal.SIGTERM
    assert capfd.readouterr().err == ""


def test_an_ignored_signal_stays_ignored():
    kept = signal.signal(signal.SIGHUP, signal.SIG_IGN)
    try:
        with EndingSignals() as signals:
            signal.raise_signal(signal.SIGHUP)
            assert signals.number is None
    finally:
        signal.signal(signal.SIGHUP, kept)


@needs_portaudio
def test_without_an_output_the_panel_plays_through_the_browser_and_that_is_told(tmp_path):
    preset = write_preset(tmp_path, text=PRESET)
    environment = isolated(tmp_path) | {"JACK_DEFAULT_SERVER": "none-at-all"}
    command = [
        sys.executable,
        "-m",
        "glidesmith",
        "live",
        str(preset),
        "--no-browser",
        "--capture",
        "take.wav",
    ]
    pipes = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "text": True}
    with watched(subprocess.Popen(command, env=environment, cwd=tmp_path, **pipes)) as process:
        told = ""
        while "the panel: http://127.0.0.1:" not in told:
            line = process.stderr.readline()
            assert line, told
            told += line
        assert "there is no sound output" in told
        assert "the panel plays through the browser" in told
        process.send_signal(signal.SIGINT)
        said, _ = process.communicate(timeout=60)
    assert process.returncode == 130
    assert said.splitlines()[0] == "the browser: 0 frames, no dropout"
    assert (tmp_path / "take.wav").exists()


def test_a_preset_that_fails_leaves_no_capture(tmp_path):
    environment = ENVIRONMENT | isolated(tmp_path) | {"JACK_DEFAULT_SERVER": "none-at-all"}
    preset = write_preset(tmp_path)
    command = [sys.executable, "-m", "glidesmith", "live", str(preset), "--no-panel", "--capture", "take.wav"]
    done = subprocess.run(command, env=environment, cwd=tmp_path, capture_output=True, text=True, timeout=180)
    assert done.returncode == 2
    assert len(done.stderr.splitlines()) == 1
    assert not list(tmp_path.glob("take*"))
