"""The sound card, with sources of the tests' own: choice of the output, leases, words, and real streams.

Streams run in processes of their own, to a dummy JACK server or an ALSA file device that the tests start.
"""

import ctypes
import os
import re
import subprocess
import sys
import threading
import time
from pathlib import Path
from types import SimpleNamespace

import numba
import numpy as np
import pytest

from glidesmith import lease as leases
from glidesmith import portaudio
from glidesmith.errors import DeviceError
from glidesmith.lease import STREAM_CALLBACK, Lease
from glidesmith.playreport import report_lines
from glidesmith.portaudio import Output, find_output, with_default, within
from glidesmith.soundcard import Choice, DeviceFacts, SoundCard
from sound_servers import (
    AlsaFile,
    DummyJack,
    dummy_jack,
    isolated,
    needs_alsa,
    needs_jack,
    needs_portaudio,
    watched,
)
from sound_sources import Ramp, ramp

OUTPUTS = (
    Output("Quay speakers", "ALSA", 0, 2, 48_000, 0.01, 0.04, False),
    Output("Bridge headphones", "ALSA", 2, 2, 44_100, 0.01, 0.04, True),
    Output("system", "JACK", 5, 2, 48_000, 0.005, 0.005, False),
    Output("Quay speakers", "OSS", 7, 2, 48_000, 0.01, 0.04, False),
    Output("Quay speakers (rear)", "ALSA", 8, 2, 48_000, 0.01, 0.04, False),
)
RATE = 48_000
C_CALLBACK = ctypes.CFUNCTYPE(
    ctypes.c_int,
    ctypes.c_void_p,
    ctypes.c_void_p,
    ctypes.c_ulong,
    ctypes.c_void_p,
    ctypes.c_ulong,
    ctypes.c_void_p,
)


def stream(environment: dict[str, str], code: str, **options) -> subprocess.Popen:
    """A process that plays a source; its code finds the sources and the sound card imported."""
    head = f"""
import os, sys, time
sys.path.insert(0, {str(Path(__file__).parent)!r})
from sound_sources import NotCompiled, Ramp, Silence
from glidesmith.errors import DeviceError
from glidesmith.soundcard import SoundCard, choose_output
def until(true, seconds=20.0):
    end = time.monotonic() + seconds
    while not true():
        assert time.monotonic() < end
        time.sleep(0.01)
"""
    pipes = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "text": True}
    return subprocess.Popen([sys.executable, "-c", head + code], env=environment, **(pipes | options))


def outcome(environment: dict[str, str], code: str) -> str:
    """What such a process printed; it must end well, and say nothing on standard error."""
    process = stream(environment, code)
    said, complaints = process.communicate(timeout=180)
    assert (process.returncode, complaints) == (0, "")
    return said


@pytest.mark.parametrize(
    ("text", "index"),
    [
        ("2", 2),
        ("system", 5),
        ("SYSTEM", 5),
        ("bridge", 2),
        ("phones", 2),
        ("jack", 5),
        ("speakers oss", 7),
        ("Quay speakers (OSS)", 7),
        ("quay speakers (rear)", 8),
    ],
)
def test_an_output_is_found_by_number_name_or_part(text, index):
    assert find_output(text, OUTPUTS).index == index


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("tannoy", 'there is no output "tannoy": give the number or a part of 0 "Quay speakers (ALSA)", 2'),
        ("1", 'there is no output "1"'),
        ("", 'there is no output ""'),
        ("  ", "there is no output"),
        (
            "Quay speakers",
            '"Quay speakers" fits 2 outputs: 0 "Quay speakers (ALSA)", 7 "Quay speakers (OSS)"',
        ),
        ("alsa", '"alsa" fits 3 outputs'),
        ("\x1b[31m", "\\x1b[31m"),
    ],
)
def test_a_name_that_fits_none_or_several_is_told_with_the_candidates(text, words):
    with pytest.raises(DeviceError) as caught:
        find_output(text, OUTPUTS)
    (line,) = caught.value.lines
    assert line.startswith(words) or words in line
    assert line.isprintable()


def test_of_many_candidates_a_few_are_told():
    many = [Output(f"outlet {i}", "ALSA", i, 2, 48_000, 0.01, 0.04, False) for i in range(30)]
    with pytest.raises(DeviceError, match=r"outlet 7 .* and 22 more \(see glidesmith devices\)"):
        find_output("outlet", many)


def test_no_output_at_all_is_told_with_what_to_do():
    with pytest.raises(DeviceError, match="connect one or start your sound server"):
        find_output("quay", [])


def test_the_default_is_the_systems_but_no_detour_to_a_jack_server():
    def marked(outputs, index: int) -> list[int]:
        return [output.index for output in with_default(outputs, index) if output.is_default]

    detour = Output("jack", "ALSA", 9, 2, 48_000, 0.01, 0.04, False)
    assert marked(OUTPUTS, 0) == [0]
    assert marked((detour, *OUTPUTS), 9) == [5]
    assert marked((detour, *OUTPUTS[:2]), 9) == [9]
    assert marked(OUTPUTS, -1) == []


def facts(**changes) -> DeviceFacts:
    return DeviceFacts(**{**FACTS, **changes})


FACTS = {
    "device": "Quay speakers",
    "host_api": "ALSA",
    "sample_rate": 48_000,
    "block": 0,
    "latency_s": 0.01,
    "channels": 2,
    "compiled": True,
}
COUNTS = {
    "frames": 48_000,
    "callbacks": 1_000,
    "underflows": 0,
    "median_us": 2.0,
    "p999_us": 20.0,
    "worst_us": 100.0,
    "last_block": 48,
}


@pytest.mark.parametrize(
    ("counts", "device", "words"),
    [
        ({}, {}, "48,000 frames in 1,000 blocks, no underflow, latency 10.0 ms"),
        (
            {},
            {},
            "the slowest block took 0.10 ms of its 1.00 ms; the median 0.2 %, 99.9 % of them at most 2 %",
        ),
        ({"underflows": 1}, {}, "1 underflow,"),
        ({"underflows": 3}, {}, "woke the audio thread too late, not the engine: give --block 128"),
        ({"underflows": 3, "last_block": 256}, {}, "--block 512 or --latency high"),
        ({"underflows": 3, "p999_us": 900.0}, {}, "the engine needs most of each block: give --block 128"),
        ({"underflows": 3}, {"compiled": False}, "leave --python-callback out"),
        ({}, {"latency_s": 0.2}, "200 ms can be felt when playing keys: give --latency low"),
        ({"last_block": 0}, {"block": 480}, "of its 10.00 ms"),
    ],
)
def test_the_report_says_what_happened_and_what_to_change(counts, device, words):
    lines = report_lines(SimpleNamespace(**COUNTS | counts), facts(**device))
    assert words in "\n".join(lines)


def test_a_good_run_gets_no_advice_and_one_without_a_callback_no_times():
    assert len(report_lines(SimpleNamespace(**COUNTS), facts())) == 2
    assert len(report_lines(SimpleNamespace(**COUNTS | {"last_block": 0, "callbacks": 0}), facts())) == 1


def call(lease: Lease, out: np.ndarray) -> int:
    return C_CALLBACK(lease.callback)(None, out.ctypes.data, len(out), None, 0, lease.userdata)


@pytest.mark.parametrize("channels", [1, 2, 6])
def test_a_lease_plays_while_it_is_held_and_is_silent_for_ever_after(channels):
    source = Ramp()
    lease = Lease(*source.callback(channels), channels)
    out = np.full((5, channels), np.nan, np.float32)
    assert call(lease, out) == 0  # paContinue of portaudio.h
    np.testing.assert_array_equal(out, np.repeat(ramp(0, 5)[:, None], channels, 1))
    assert call(lease, out[:0]) == 0
    assert lease.frames == 5
    assert lease.revoke()
    out[:] = np.nan
    assert call(lease, out) == 2  # paAbort
    np.testing.assert_array_equal(out, np.zeros((5, channels)))
    assert (lease.frames, source.counters().frames) == (5, 5)


@numba.cfunc(STREAM_CALLBACK)
def _wait_for_a_word(_given, _output, _frames, _moment, _flags, userdata):
    words = leases.view_int64(userdata, 2)
    words[1] = 1
    while leases._load(words, 0) == 0:
        pass
    return 0


def test_revoking_waits_for_the_call_that_is_under_way():
    assert Lease(0, 0, 1).revoke()  # compiles what revokes
    words = np.zeros(2, np.int64)
    lease = Lease(_wait_for_a_word.address, words.ctypes.data, 1)
    playing = threading.Thread(target=call, args=(lease, np.zeros((1, 1), np.float32)), daemon=True)
    playing.start()
    while not words[1]:
        time.sleep(0.001)
    came_back: list[bool] = []
    revoking = threading.Thread(target=lambda: came_back.append(lease.revoke()))
    revoking.start()
    time.sleep(0.05)
    assert came_back == []
    words[0] = 1
    revoking.join(5)
    playing.join(5)
    assert came_back == [True]


def test_the_lease_calls_nothing_but_the_engine_and_fills_with_zeros():
    """Nothing on the audio thread may allocate, lock or be Python: the assembly names all that it calls."""
    compiled = numba.cfunc(STREAM_CALLBACK, error_model="numpy", _nrt=False)(leases._answer)
    assembly = compiled._library.get_asm_str()
    named = set(re.findall(r"\b(?:NRT_\w+|Py\w+|_Py\w+|numba_\w+|malloc|calloc|free|pthread\w+)\b", assembly))
    assert named == set()
    assert "memset" in assembly


def test_work_that_takes_too_long_is_left_alone_and_its_errors_come_out():
    assert within(5.0, lambda: None)
    begun = time.monotonic()
    assert not within(0.05, lambda: time.sleep(1.0))
    assert time.monotonic() - begun < 0.9
    with pytest.raises(DeviceError, match="gone"):
        within(5.0, lambda: (_ for _ in ()).throw(DeviceError("gone")))


def test_chatter_is_kept_off_the_screen_and_own_words_are_not():
    code = """
import os, sys
from glidesmith.portaudio import quiet
with quiet():
    os.write(2, b"chatter\\n")
    print("own", file=sys.stderr)
    with quiet():
        os.write(2, b"more chatter\\n")
    os.write(2, b"still chatter\\n")
    print("words", file=sys.stderr, end="")
os.write(2, b" afterwards\\n")
print(sys.stderr.fileno(), os.fstat(2).st_ino)
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stderr == "own\nwords afterwards\n"
    assert done.stdout.startswith("2 ")


def test_a_closed_standard_error_stays_closed():
    code = """
import os
os.close(2)
from glidesmith.portaudio import quiet
with quiet():
    pass
try:
    os.fstat(2)
except OSError:
    print("closed")
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.stdout == "closed\n"


PLAY = """
source = Ramp()
card = SoundCard(source, choose_output(), block={block}, compiled={compiled})
facts = card.start()
until(lambda: source.counters().frames > 100_000)
print(facts.compiled, facts.sample_rate, facts.channels, card.watch(), card.stop(), card.left_behind)
print(source.counters().frames, source.counters().last_block)
"""


@needs_alsa
@pytest.mark.parametrize("compiled", [True, False])
@pytest.mark.parametrize("block", [0, 64, 509])
def test_what_is_played_arrives_sample_for_sample(tmp_path, block, compiled):
    """The device writes what it gets into a file: silence to begin with, and then every sample, once."""
    device = AlsaFile(tmp_path)
    said = outcome(device.environment, PLAY.format(block=block, compiled=compiled)).split("\n")
    assert said[0] == f"{compiled} 48000 2 [] True False"
    frames, last_block = map(int, said[1].split())
    assert block in (0, last_block)
    samples = device.samples()
    left, right = samples[np.flatnonzero(samples[:, 0])[0] - 1 :].T
    assert len(left) >= frames - 2 * last_block  # what the last block holds may not be written any more
    np.testing.assert_array_equal(left, ramp(0, len(left)))
    np.testing.assert_array_equal(right, left)


@needs_alsa
def test_without_compiled_callbacks_python_plays_and_that_is_told(tmp_path):
    code = PLAY.replace("Ramp()", "NotCompiled()").format(block=0, compiled=True)
    said = outcome(AlsaFile(tmp_path).environment, code)
    assert said.startswith(
        "False 48000 2 [\"compiled callbacks can't be had here: this plays through a Python"
    )


RATES = """
for rate in (44100, None):
    try:
        choice = choose_output(sample_rate=rate)
        print(choice.sample_rate, *choice.remarks)
    except DeviceError as problem:
        print(problem)
"""


@needs_jack
def test_a_rate_that_is_refused_is_told_with_those_that_are_taken(tmp_path):
    with dummy_jack(tmp_path, rate=32_000) as server:
        refused, by_default, _ = outcome(server.environment, RATES.replace("None", "None, 32000")).split(
            "\n", 2
        )
    assert refused == "system (JACK) does not take 44100 Hz: give --rate 32000"
    assert by_default == "32000 system (JACK) does not take 48,000 Hz: playing at 32,000 Hz"


@needs_jack
def test_an_output_of_one_channel_gets_one(tmp_path):
    with dummy_jack(tmp_path, outputs=1) as server:
        said = outcome(server.environment, PLAY.format(block=0, compiled=True))
    assert said.startswith("True 48000 1 [] True False")


@needs_portaudio
def test_without_any_output_a_line_says_what_to_do(tmp_path):
    said = outcome(isolated(tmp_path) | {"JACK_DEFAULT_SERVER": "none-at-all"}, RATES)
    assert said.count("there is no sound output: connect one or start your sound server") == 2


LOST = """
source = Silence()
card = SoundCard(source, choose_output())
card.start()
returns = 2
print("plays", flush=True)
while True:
    time.sleep(0.02)
    for line in card.watch():
        print(line, card.playing, source.counters().frames, flush=True)
        if ") is back" in line:
            before = source.counters().frames
            until(lambda: source.counters().frames > before + 10_000)
            print("plays on", flush=True)
            returns -= 1
            if returns == 0:
                print(card.stop(), card.left_behind, flush=True)
                sys.exit(0)
"""


@needs_jack
def test_a_lost_server_is_told_and_come_back_to_by_name(tmp_path):
    with dummy_jack(tmp_path) as server, watched(stream(server.environment, LOST)) as process:
        assert process.stdout.readline() == "plays\n"
        for _ in range(2):
            server.kill()
            line = process.stdout.readline()
            assert line.startswith("system (JACK) is gone: its device or sound server stopped"), line
            server.start()
            assert process.stdout.readline().startswith("system (JACK) is back True")
            assert process.stdout.readline() == "plays on\n"
        assert process.stdout.readline() == "False True\n"
        assert process.wait(60) == 0
        assert process.stderr.read() == ""


class Line:
    """A stream that notes what is asked of it, in place of one whose server is gone."""

    def __init__(self, active: bool):
        self.active = active
        self.asked: list[str] = []

    def stop(self) -> None:
        self.asked.append("stop")

    def close(self) -> None:
        self.asked.append("close")


@pytest.mark.parametrize("gently", [True, False])
@pytest.mark.parametrize(
    ("host_api", "active", "begun", "asked"),
    [
        ("JACK", False, True, False),
        ("JACK", True, True, True),
        ("JACK", False, False, True),
        ("ALSA", False, True, True),
    ],
)
def test_a_stream_whose_jack_server_is_gone_is_left_alone(host_api, active, begun, asked, gently):
    """PortAudio 19.6 would wait for ever, or end the process by a failed assertion, as luck has it."""
    output = Output("system", host_api, 0, 2, RATE, 0.005, 0.005, True)
    card = SoundCard(Ramp(), Choice(output, RATE))
    line, lease = Line(active), Lease(0, 0, 2)
    card._stream, card._lease, card._begun, card._facts = line, lease, begun, facts(host_api=host_api)
    card._close(gently)
    assert bool(line.asked) == asked
    assert card.left_behind == (not asked)
    assert not card.playing
    if not asked or not gently:
        assert call(lease, np.zeros((1, 2), np.float32)) == 2


def test_portaudio_is_not_terminated_where_jack_is_about(monkeypatch):
    done: list[str] = []
    module = SimpleNamespace(
        query_hostapis=lambda: [{"name": "ALSA"}, {"name": "JACK Audio Connection Kit"}],
        _terminate=lambda: done.append("terminated"),
        _initialize=lambda: done.append("initialised"),
    )
    monkeypatch.setattr(portaudio, "library", lambda: module)
    monkeypatch.setattr(portaudio, "_fresh_copy", lambda _: "a copy")
    portaudio.renew()
    assert (done, module._lib) == (["initialised"], "a copy")
    module.query_hostapis = lambda: [{"name": "Core Audio"}]
    portaudio.renew()
    assert done[1:] == ["terminated", "initialised"]


STOP = LOST.replace(
    "while True:", "sys.stdin.readline(); print(card.stop(), flush=True); sys.exit(0)\nwhile True:"
)


@needs_jack
@pytest.mark.parametrize("pause_s", [0.0, 0.05, 1.0])
def test_the_end_never_hangs_after_a_server_was_killed(tmp_path, pause_s):
    """Whether or not the loss was noticed before."""
    with (
        dummy_jack(tmp_path) as server,
        watched(stream(server.environment, STOP, stdin=subprocess.PIPE)) as process,
    ):
        assert process.stdout.readline() == "plays\n"
        server.kill()
        time.sleep(pause_s)
        process.communicate("\n", timeout=60)
        assert process.returncode == 0


@needs_alsa
def test_a_device_that_takes_nothing_any_more_is_told_and_can_be_left(tmp_path):
    """A device whose writing blocks: the stream stays active, its callbacks stop, and closing it hangs."""
    os.mkfifo(tmp_path / "tape.raw")
    reader = os.open(tmp_path / "tape.raw", os.O_RDWR | os.O_NONBLOCK)  # opens it, and never reads
    code = LOST.replace("        if ", "        os._exit(9 if not card.stop() else 8)\n        if ")
    with watched(stream(AlsaFile(tmp_path).environment, code)) as process:
        assert process.stdout.readline() == "plays\n"
        assert "default (ALSA) is gone" in process.stdout.readline()
        assert process.wait(60) == 9
    os.close(reader)


def test_a_server_of_the_tests_has_a_name_of_its_own(tmp_path):
    first, second = DummyJack(tmp_path), DummyJack(tmp_path)
    assert first.name != second.name
    first.stop()
    third = DummyJack(tmp_path)
    assert third.name == first.name
    second.stop()
    third.stop()
