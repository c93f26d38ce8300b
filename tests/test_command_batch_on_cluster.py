"""``glidesmith batch --cluster``: whole processes, as a user runs and interrupts them."""

import os
import signal
import subprocess
import sys
import time

import pytest

pytest.importorskip("distributed")

from clusters import running_cluster
from commands import run

PRESET = """
title = "Take {number}"
[pitch]
rise = {rise}
fall = 0.02
[gain]
rise = 0.004
fall = 0.02
[phrase]
file = "line.toml"
"""
NOTE = '  {{ at = {at}, lasts = 0.6, note = "{note}" }},'
COUNT = 80


@pytest.fixture(scope="module")
def bank(tmp_path_factory):
    """Presets of twelve seconds each."""
    folder = tmp_path_factory.mktemp("bank")
    rows = [NOTE.format(at=number / 2, note=("D3", "A3", "G3")[number % 3]) for number in range(24)]
    (folder / "line.toml").write_text("tempo_bpm = 60.0\nnotes = [\n" + "\n".join(rows) + "\n]\n")
    for number in range(COUNT):
        text = PRESET.format(number=number, rise=0.01 + 1e-4 * number)
        (folder / f"take-{number:03d}.toml").write_text(text)
    return folder


@pytest.fixture(scope="module")
def wanted(bank, tmp_path_factory):
    folder = tmp_path_factory.mktemp("wanted") / "takes"
    done = run("batch", str(bank), "-o", str(folder))
    assert done.exit_code == 0, done.stderr
    return contents(folder)


@pytest.fixture(scope="module")
def pair(tmp_path_factory):
    with running_cluster(tmp_path_factory.mktemp("pair"), workers=2) as running:
        yield running


def contents(folder):
    """All files but the journal, which holds times."""
    found = [path for path in folder.rglob("*") if path.is_file() and path.name != ".glidesmith-batch"]
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in found}


def begun(bank, takes, address):
    command = ["-m", "glidesmith", "batch", str(bank), "-o", str(takes), "--cluster", address]
    process = subprocess.Popen([sys.executable, *command], stderr=subprocess.PIPE, text=True)
    while len(list(takes.glob("*.wav"))) < 5:
        assert process.poll() is None, process.communicate()
        time.sleep(0.01)
    return process


def test_the_folder_is_that_of_a_batch_on_this_machine(bank, wanted, pair, tmp_path):
    takes = tmp_path / "takes"
    done = run("batch", str(bank), "-o", str(takes), "--cluster", pair.address)
    assert done.exit_code == 0, done.stderr
    assert done.stderr == ""
    assert contents(takes) == wanted
    again = run("batch", str(bank), "-o", str(takes), "--cluster", pair.address)
    assert f"0 rendered, {COUNT} current" in again.stdout


def test_an_interrupt_is_told_and_the_next_run_goes_on(bank, wanted, pair, tmp_path):
    takes = tmp_path / "takes"
    process = begun(bank, takes, pair.address)
    process.send_signal(signal.SIGINT)
    _, said = process.communicate(timeout=60)
    assert process.returncode == 130
    assert f"of {COUNT} items are done; run the same command again to go on" in said
    assert "Traceback" not in said
    assert "distributed" not in said
    assert not list(takes.rglob("*.part"))
    assert run("batch", str(bank), "-o", str(takes), "--cluster", pair.address).exit_code == 0
    assert contents(takes) == wanted


def test_a_client_that_is_killed_leaves_nothing_that_the_next_run_does_not_mend(bank, wanted, pair, tmp_path):
    """The next run is one without the cluster, whose workers may still be at what they had in hand."""
    takes = tmp_path / "takes"
    process = begun(bank, takes, pair.address)
    os.kill(process.pid, signal.SIGKILL)
    process.communicate()
    assert run("batch", str(bank), "-o", str(takes)).exit_code == 0
    assert contents(takes) == wanted


def test_a_scheduler_that_is_not_there_is_one_line(bank, tmp_path):
    done = run("batch", str(bank), "-o", str(tmp_path / "takes"), "--cluster", "tcp://127.0.0.1:1")
    assert done.exit_code == 2
    [line] = done.stderr.splitlines()
    assert line.startswith("glidesmith: cluster tcp://127.0.0.1:1: no scheduler is there: ")
