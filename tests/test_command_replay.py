"""``glidesmith render --replay``: the captured samples again, bit for bit, and refusals in one line."""

import json
from pathlib import Path

import numpy as np
import pytest
import soundfile

from commands import complaint, process, run
from playing import Player, bank


@pytest.fixture(scope="module")
def take(tmp_path_factory) -> Path:
    """A capture with its log beside it, as a session without --log leaves them."""
    folder = tmp_path_factory.mktemp("take")
    with Player(*bank("night-ferry-lead", "engine-room-bass")) as player:
        session = player.session
        session.play()
        player.play(20_000)
        session.capture_start(folder / "take.wav")
        for step in range(10):
            session.set(1 + step % 2, "oscillator.level_db", -12.0 - step)
            session.select(1 + step % 2)
            player.play(4000, 333)
        session.capture_stop()
    return folder / "take.wav"


def samples(path: Path) -> np.ndarray:
    return soundfile.read(path, dtype="float32")[0]


@pytest.fixture
def log(take) -> Path:
    return take.with_name("take.log.jsonl")


def test_the_captured_samples_come_again_bit_for_bit(take, log, tmp_path):
    result = run("render", "--replay", log, "-o", tmp_path / "again.wav")
    assert result.exit_code == 0
    assert result.stdout == f"{tmp_path / 'again.wav'}: 0.833 s, 48,000 Hz, float, the captured samples\n"
    assert result.stderr == ""
    assert np.array_equal(samples(tmp_path / "again.wav"), samples(take))
    assert soundfile.info(tmp_path / "again.wav").subtype == "FLOAT"


def test_all_of_the_session_can_be_had(take, log, tmp_path):
    result = run("render", "--replay", log, "-o", tmp_path / "all.wav", "--all", "--json")
    (facts,) = json.loads(result.stdout)["rendered"]
    assert (facts["from"], facts["to"], facts["same"]) == (0, 60_000, None)
    assert np.array_equal(samples(tmp_path / "all.wav")[20_000:], samples(take))


def test_the_facts_are_json(log, tmp_path):
    result = run("render", "--replay", log, "-o", tmp_path / "again.wav", "--json")
    (facts,) = json.loads(result.stdout)["rendered"]
    assert facts["log"] == str(log)
    assert (facts["frames"], facts["sample_rate"], facts["depth"]) == (40_000, 48_000, "float")
    assert facts["same"] is True
    assert facts["warnings"] == []
    assert -60.0 < facts["peak_dbfs"] < -6.0


def test_other_depths_are_rounded_from_the_same_samples(take, log, tmp_path):
    assert run("render", "--replay", log, "-o", tmp_path / "16.wav", "--depth", "16").exit_code == 0
    assert soundfile.info(tmp_path / "16.wav").subtype == "PCM_16"
    assert np.abs(samples(tmp_path / "16.wav") - samples(take)).max() <= 0.5001 / 32_768
    dithered = run("render", "--replay", log, "-o", tmp_path / "24.wav", "--depth", "24", "--dither")
    assert dithered.exit_code == 0


def test_without_a_name_it_stands_in_the_folder_under_the_logs(log, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert run("render", "--replay", log).exit_code == 0
    (tmp_path / "folder").mkdir()
    assert run("render", "--replay", log, "-o", "folder").exit_code == 0
    assert sorted(path.name for path in tmp_path.rglob("*.wav")) == 2 * ["take-replay.wav"]


def test_it_can_be_piped(take, log, tmp_path):
    result = process("render", "--replay", log, "-o", "-")
    assert result.returncode == 0
    (tmp_path / "piped.wav").write_bytes(result.stdout)
    assert np.array_equal(samples(tmp_path / "piped.wav"), samples(take))
    assert b"the captured samples" in result.stderr


def test_samples_that_are_others_are_told_and_the_status_is_1(log, tmp_path):
    lines = log.read_text().splitlines()
    changed = [line.replace('"value":-16.0', '"value":-16.5') for line in lines]
    assert changed != lines
    (tmp_path / "changed.log.jsonl").write_text("\n".join(changed) + "\n")
    result = run("render", "--replay", tmp_path / "changed.log.jsonl", "-o", tmp_path / "changed.wav")
    assert result.exit_code == 1
    assert "NOT the captured samples" in result.stdout
    assert "the samples are not those that were captured" in result.stderr


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["lead.toml"], "a preset has no meaning with --replay"),
        (["--rate", "44100"], "--rate has no meaning"),
        (["--phrase", "x.mid"], "--phrase has no meaning"),
        (["--trace", "x.csv"], "--trace has no meaning"),
        (["--cv", "x.wav"], "--cv has no meaning"),
        (["--tail", "3"], "--tail has no meaning"),
        (["--dither"], "--dither has no meaning with --depth float"),
        (["--seed", "3"], "--seed is the dither's"),
        (["-o", "again.mp3"], "only WAV is written"),
        (["-o", "none/again.wav"], "does not exist"),
    ],
)
def test_what_has_no_meaning_is_refused(log, tmp_path, monkeypatch, arguments, said):
    monkeypatch.chdir(tmp_path)
    result = run("render", "--replay", log, *arguments)
    assert result.exit_code == 2
    assert said in complaint(result)
    assert list(tmp_path.iterdir()) == []


def test_the_log_and_the_capture_itself_are_never_written_over(take, log):
    before = take.read_bytes(), log.read_bytes()
    assert "is the session's captured file" in complaint(run("render", "--replay", log, "-o", take))
    folder = log.parent / "log.wav"
    folder.symlink_to(log)
    assert "is the session's log" in complaint(run("render", "--replay", log, "-o", folder))
    folder.unlink()
    assert (take.read_bytes(), log.read_bytes()) == before


@pytest.mark.parametrize("text", ["", "{}\n", "title = 3\n", '{"format": "glidesmith session log"}\n'])
def test_what_is_no_log_is_told(tmp_path, text):
    (tmp_path / "log").write_text(text)
    result = run("render", "--replay", tmp_path / "log", "-o", tmp_path / "again.wav")
    assert result.exit_code == 2
    assert str(tmp_path / "log") in complaint(result)
    assert not (tmp_path / "again.wav").exists()


def test_a_session_without_a_capture_says_what_to_do(tmp_path):
    with Player(*bank("fog-horn"), log=tmp_path / "log") as player:
        player.session.play()
        player.play(1000)
    assert "--all replays the whole" in complaint(run("render", "--replay", tmp_path / "log"))


def test_presets_or_a_log_must_be_named():
    assert "missing argument 'PRESET...'" in complaint(run("render"))
    assert "--all is about a session" in complaint(run("render", "x.toml", "--all"))
