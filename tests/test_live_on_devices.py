"""Live on real outputs of the tests' own: the same samples as a render, signals, a server that dies.

No test here passes or fails on a clock: where something has to come within a time, its coming is checked.
"""

import json
import random
import signal
import socket
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import soundfile

from commands import process, run, write_preset
from conftest import LONG, PRESETS
from glidesmith import load_preset, render
from glidesmith.phrase import load_phrase, load_preset_phrase
from sound_servers import AlsaFile, dummy_jack, needs_alsa, needs_jack, watched

LEAD = PRESETS / "night-ferry-lead.toml"
RATE = 48_000
PLAIN = ("--no-panel", "--level", "0", "--no-fade", "--no-match", "--ceiling", "-1")
REPORTED = {
    "frames",
    "callbacks",
    "underflows",
    "callback_median_us",
    "callback_p999_us",
    "deadline_us",
    "latency_s",
    "device",
    "sample_rate",
    "block",
}
MOMENTS = 20 if LONG else 2


def live(environment: dict[str, str], folder: Path, *arguments: object, **options) -> subprocess.Popen:
    """The live command, as users run it."""
    command = [sys.executable, "-m", "glidesmith", "live", *map(str, arguments)]
    pipes = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "stdin": subprocess.DEVNULL, "text": True}
    return subprocess.Popen(command, env=environment, cwd=folder, **(pipes | options))


def until(process: subprocess.Popen, words: str) -> str:
    """What a process said on standard error up to a line with these words."""
    told = ""
    while words not in told:
        line = process.stderr.readline()
        assert line, f"it ended without {words!r}: {told}"
        told += line
    return told


def running(*arguments, **options):
    """The same, ended at the end."""
    return watched(live(*arguments, **options))


def phrase_of(folder: Path, seconds: int) -> Path:
    """A phrase of overlapping notes of a third of a beat, as long as asked for."""
    notes = random.Random(7)
    rows = [
        f"  {{ at = {i}.25, lasts = {notes.choice((0.4, 0.9, 1.3))}, note = {notes.randint(40, 80)} }},"
        for i in range(2 * seconds)
    ]
    path = folder / "long-watch.toml"
    path.write_text("\n".join(['title = "Long watch"', "tempo_bpm = 120", "notes = [", *rows, "]"]))
    return path


@needs_alsa
@pytest.mark.parametrize("block", [64, 509, 1024])
def test_what_is_streamed_is_the_render_bit_for_bit(tmp_path, block):
    """The device writes all that it gets: silence before the start, then every sample, in both channels."""
    phrase = phrase_of(tmp_path, 60 if LONG else 3)
    device = AlsaFile(tmp_path)
    options = ("--phrase", phrase, "--no-loop", "--block", block, "--json")
    with running(device.environment, tmp_path, LEAD, *PLAIN, *options) as process:
        said, told = process.communicate(timeout=180)
    assert process.returncode == 0, told
    facts = json.loads(said)
    assert (facts["block"], facts["underflows"]) == (block, 0)
    wanted = render(load_preset(LEAD), load_phrase(phrase), RATE).audio
    samples = device.samples()
    played = samples[len(samples) - facts["frames"] :]
    assert not samples[: len(samples) - facts["frames"]].any()
    np.testing.assert_array_equal(played[: wanted.size, 0], wanted)
    np.testing.assert_array_equal(played[:, 0], played[:, 1])
    # A render ends once the gain stays under -90 dB; what follows it here is quieter still.
    assert np.abs(played[wanted.size :]).max() < 10.0 ** (-90.0 / 20.0)


@needs_alsa
def test_the_python_callback_plays_the_same(tmp_path):
    device = AlsaFile(tmp_path)
    options = ("--no-loop", "--python-callback", "--json")
    with running(device.environment, tmp_path, LEAD, *PLAIN, *options) as process:
        facts = json.loads(process.communicate(timeout=180)[0])
    assert facts["callback"] == "python"
    preset = load_preset(LEAD)
    wanted = render(preset, load_preset_phrase(preset), RATE).audio
    samples = device.samples()
    played = samples[len(samples) - facts["frames"] :, 0]
    np.testing.assert_array_equal(played[: wanted.size], wanted)


@needs_jack
def test_a_run_tells_as_json_how_it_went(tmp_path):
    with dummy_jack(tmp_path, block=256) as server:
        arguments = (LEAD, "--no-panel", "--seconds", "1", "--capture", "take.wav", "--json")
        with running(server.environment, tmp_path, *arguments) as process:
            said, told = process.communicate(timeout=180)
        assert not server.deserted()
    facts = json.loads(said)
    assert process.returncode == 0
    assert set(facts) >= REPORTED
    assert (facts["device"], facts["sample_rate"], facts["block"]) == ("system", RATE, 256)
    assert facts["deadline_us"] == pytest.approx(1e6 * 256 / RATE)
    assert facts["frames"] >= RATE
    assert facts["frames"] == 256 * facts["callbacks"]
    quarter_us = 0.25  # what the median and the percentile are counted in
    assert 0.0 < facts["callback_median_us"] <= facts["callback_p999_us"]
    assert facts["callback_p999_us"] <= facts["callback_worst_us"] + quarter_us
    assert facts["latency_s"] > 0.0
    assert "turn your amplifier or headphones down first" in told
    samples, _ = soundfile.read(tmp_path / "take.wav", dtype="float32")
    assert len(samples) == facts["capture"]["frames"] >= RATE
    assert samples[-RATE // 10 :].any()
    assert not samples[-RATE // 200 :].any()  # it ends by a fade, not in mid-wave


@needs_jack
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_a_signal_while_it_plays_leaves_the_capture_whole(tmp_path, number):
    """At moments drawn by lot; its log gives the same samples again."""
    draw = random.Random(int(number))
    with dummy_jack(tmp_path) as server:
        for moment in range(MOMENTS):
            folder = tmp_path / str(moment)
            folder.mkdir()
            with running(server.environment, folder, LEAD, "--no-panel", "--capture", "take.wav") as process:
                until(process, "turn your amplifier")
                time.sleep(draw.uniform(0.0, 1.0))
                process.send_signal(number)
                said, told = process.communicate(timeout=180)
            assert process.returncode == 128 + number, told
            assert "Traceback" not in told
            assert "take.wav: " in said
            assert sorted(path.name for path in folder.iterdir()) == ["take.log.jsonl", "take.wav"]
            samples, rate = soundfile.read(folder / "take.wav", dtype="float32")
            assert rate == RATE
            again = run("render", "--replay", folder / "take.log.jsonl", "-o", folder / "again.wav")
            assert again.exit_code == 0, again.stderr
            np.testing.assert_array_equal(soundfile.read(folder / "again.wav", dtype="float32")[0], samples)


@needs_jack
def test_a_signal_at_any_moment_leaves_no_half_file(tmp_path):
    """From the first moment on, before and while anything is set up."""
    draw = random.Random(3)
    with dummy_jack(tmp_path) as server:
        for moment in range(MOMENTS):
            folder = tmp_path / str(moment)
            folder.mkdir()
            with running(server.environment, folder, LEAD, "--no-panel", "--capture", "take.wav") as process:
                time.sleep(draw.uniform(0.1, 1.5))
                process.send_signal(signal.SIGTERM)
                _, told = process.communicate(timeout=180)
            # -15: before Python could take care of signals at all
            assert process.returncode in (128 + signal.SIGTERM, -signal.SIGTERM), told
            assert "Traceback" not in told
            found = {path.name for path in folder.iterdir()}
            assert found in (set(), {"take.wav", "take.log.jsonl"})
            if found:
                soundfile.read(folder / "take.wav")


@needs_jack
def test_a_server_killed_in_mid_play_is_told_come_back_to_and_costs_no_capture(tmp_path):
    with dummy_jack(tmp_path) as server:
        arguments = (LEAD, "--no-panel", "--capture", "take.wav")
        with running(server.environment, tmp_path, *arguments) as process:
            until(process, "turn your amplifier")
            time.sleep(0.5)
            server.kill()
            until(process, "system (JACK) is gone")
            server.start()
            until(process, "system (JACK) is back")
            time.sleep(0.5)
            process.send_signal(signal.SIGINT)
            said, told = process.communicate(timeout=180)
    assert process.returncode == 130, told
    assert "take.wav: " in said
    samples, _ = soundfile.read(tmp_path / "take.wav", dtype="float32")
    again = run("render", "--replay", tmp_path / "take.log.jsonl", "-o", tmp_path / "again.wav")
    assert again.exit_code == 0, again.stderr
    np.testing.assert_array_equal(soundfile.read(tmp_path / "again.wav", dtype="float32")[0], samples)


@needs_jack
def test_after_a_lost_server_the_end_comes_at_once_and_in_order(tmp_path):
    with dummy_jack(tmp_path) as server:
        arguments = (LEAD, "--no-panel", "--capture", "take.wav", "--json")
        with running(server.environment, tmp_path, *arguments) as process:
            until(process, "turn your amplifier")
            time.sleep(0.3)
            server.kill()
            until(process, "system (JACK) is gone")
            process.send_signal(signal.SIGTERM)
            said, _ = process.communicate(timeout=180)
    assert process.returncode == 143
    facts = json.loads(said)
    assert soundfile.info(str(tmp_path / "take.wav")).frames == facts["capture"]["frames"]


@needs_jack
def test_a_device_or_a_rate_that_is_refused_is_told_in_a_line_and_writes_nothing(tmp_path):
    with dummy_jack(tmp_path) as server:
        for options, words in (
            (
                ("--device", "tannoy"),
                'there is no output "tannoy": give the number or a part of 0 "system (JACK)"',
            ),
            (("--rate", "44100"), "system (JACK) does not take 44100 Hz: give --rate 48000"),
        ):
            done = process(
                *("live", LEAD, "--no-panel", "--capture", tmp_path / "take.wav", *options),
                env=server.environment,
                text=True,
                timeout=180,
            )
            assert (done.returncode, done.stdout, done.stderr) == (2, "", f"glidesmith: {words}\n")
    assert not list(tmp_path.glob("take*"))


@needs_jack
def test_a_port_that_is_taken_is_told_in_a_line_and_nothing_plays(tmp_path):
    with dummy_jack(tmp_path) as server, socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        options = ("--port", port, "--no-browser", "--capture", tmp_path / "take.wav")
        done = process("live", LEAD, *options, env=server.environment, text=True, timeout=180)
    assert done.returncode == 2
    (line,) = done.stderr.splitlines()
    assert str(port) in line
    assert not list(tmp_path.glob("take*"))


@needs_jack
def test_keys_on_a_terminal_play_and_the_terminal_is_put_back(tmp_path):
    from test_terminal import Terminal

    second = write_preset(tmp_path)
    with dummy_jack(tmp_path) as server:
        arguments = ["live", str(LEAD), str(second), "--no-panel"]
        code = f"import sys\nfrom glidesmith.command import main\nmain({arguments!r})"
        one = Terminal(code, env=server.environment)
        try:
            one.until("? tells all, q ends")
            one.until("slot 1 of 2: Night ferry lead | looping")
            one.press("2")
            one.until("slot 2 of 2: Under test")
            one.press("i")
            one.until("underflow")
            one.press("q")
            one.until("the slowest block took")
            assert one.process.wait(60) == 0
            assert one.settings() == one.before
        finally:
            one.close()
