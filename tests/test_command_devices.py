"""The list of outputs, with a dummy JACK server, an ALSA file device, no output, and no PortAudio."""

import json
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from commands import process, write_preset
from sound_servers import AlsaFile, dummy_jack, isolated, needs_alsa, needs_jack, needs_portaudio

HEADINGS = ["no.", "output", "through", "channels", "rates in kHz", "own", "latency in ms"]
WITHOUT_PORTAUDIO = """
import ctypes.util, sys
ctypes.util.find_library = lambda name: None
from glidesmith.command import main
main(sys.argv[1:])
"""


@needs_jack
def test_an_output_is_listed_with_rates_and_latencies(tmp_path):
    with dummy_jack(tmp_path, rate=32_000) as server:
        done = process("devices", env=server.environment, text=True)
        facts = process("devices", "--json", env=server.environment, text=True)
        assert not server.deserted()
    assert (done.returncode, done.stderr, facts.stderr) == (0, "", "")
    heading, *rows = done.stdout.splitlines()
    assert re.split("  +", heading.strip()) == HEADINGS
    (jack,) = [row for row in rows if "JACK" in row]
    assert jack.split()[:7] == ["*", "0", "system", "JACK", "2", "32", "32"]
    (device,) = json.loads(facts.stdout)["devices"]
    assert device["low_latency_s"] > 0.0
    assert {name: device[name] for name in ("index", "name", "host_api", "channels", "default", "rates")} == {
        "index": 0,
        "name": "system",
        "host_api": "JACK",
        "channels": 2,
        "default": True,
        "rates": [32_000],
    }


@needs_alsa
def test_an_output_that_takes_every_rate_and_the_default_are_told(tmp_path):
    done = process("devices", env=AlsaFile(tmp_path, "quay-tape").environment, text=True)
    assert (done.returncode, done.stderr) == (0, "")
    rows = done.stdout.splitlines()[1:]
    assert [row.split()[:3] for row in rows] == [["0", "quay-tape", "ALSA"], ["*", "1", "default"]]
    assert "8 to 384" in rows[0]


@needs_portaudio
def test_without_outputs_a_line_says_what_to_do_and_no_library_chatters(tmp_path):
    environment = isolated(tmp_path) | {"JACK_DEFAULT_SERVER": "none-at-all"}
    done = process("devices", env=environment, text=True)
    assert (done.returncode, done.stdout) == (0, "")
    (line,) = done.stderr.splitlines()
    assert "there is no sound output" in line
    assert json.loads(process("devices", "--json", env=environment).stdout) == {"devices": []}


@needs_portaudio
def test_settings_that_portaudio_does_not_survive_are_told_in_a_line(tmp_path):
    """Without any settings of ALSA, PortAudio 19.6 ends its process by a failed assertion."""
    environment = isolated(tmp_path) | {"ALSA_CONFIG_PATH": os.devnull}
    done = process("devices", env=environment, text=True)
    assert done.returncode in (0, 2)  # other releases may survive it
    (line,) = done.stderr.splitlines()
    assert "aplay -L" in line or "there is no sound output" in line


@pytest.mark.parametrize("command", ["devices", "live"])
def test_without_portaudio_one_line_says_what_to_install_on_each_system(tmp_path, command):
    """The library is missing where ctypes finds none, which is how it is looked for."""
    arguments = [command] if command == "devices" else [command, str(write_preset(tmp_path)), "--no-panel"]
    done = subprocess.run(
        [sys.executable, "-c", WITHOUT_PORTAUDIO, *arguments], capture_output=True, text=True, cwd=tmp_path
    )
    assert (done.returncode, done.stdout) == (2, "")
    (line,) = done.stderr.splitlines()
    for words in ("no PortAudio", "apt install libportaudio2", "Fedora", "Arch", "macOS", "Windows"):
        assert words in line
    assert ("leave --no-panel out" in line) == (command == "live")


def test_without_portaudio_rendering_goes_on(tmp_path):
    arguments = ["render", str(write_preset(tmp_path))]
    subprocess.run([sys.executable, "-c", WITHOUT_PORTAUDIO, *arguments], check=True, cwd=tmp_path)
    assert Path(tmp_path, "lead.wav").exists()
