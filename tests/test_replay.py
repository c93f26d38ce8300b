"""A session's log, replayed, gives what was captured, bit for bit: the test of "the same chain" while things
move. Tolerance throughout: none.
"""

import json
import random
from pathlib import Path

import numpy as np
import pytest
import soundfile

from conftest import LONG
from glidesmith.logreader import LogReader
from glidesmith.replay import replay, span_of
from glidesmith.sink import MemorySink
from playing import RATE, Player, bank, random_move

NAMES = ("night-ferry-lead", "winch-constant-time", "customs-shed-stairs", "engine-room-bass")


def replayed(log: Path, whole: bool = False):
    """The samples of a log's last capture, or of all, and what the replay says of them."""
    with LogReader(log) as reader:
        sink = MemorySink()
        found = replay(reader, span_of(reader, whole), sink)
        sink.close()
    return sink.audio, found


def played_at_random(seed: int, folder: Path, moves: int, rate: int = RATE) -> tuple[Player, dict]:
    """A session in which much moves, in blocks of 1 to 2048 samples, captured from somewhere to somewhere."""
    draw = random.Random(seed)
    player = Player(*bank(*NAMES), log=folder / "session.log.jsonl", sample_rate=rate)
    player.session.play()
    begin, end = draw.randint(0, moves // 2), draw.randint(moves // 2, moves)
    facts = {}
    for number in range(moves):
        if number == begin:
            player.session.capture_start(folder / "take.wav")
        for _ in range(draw.choice((0, 1, 1, 1, 2, 5))):
            random_move(player.session, draw)
        for _ in range(draw.randint(0, 3)):
            player.play(draw.choice((1, 7, 64, 128, 509, 512, 1024, 2048, draw.randint(1, 2048))), 2048)
        if number == end:
            facts = player.session.capture_stop()
    player.play(2000)
    if not facts:
        facts = player.session.capture_stop()
    player.close()
    return player, facts


@pytest.mark.parametrize("seed", range(12 if LONG else 4))
def test_while_everything_moves_the_replay_is_what_was_heard(seed, tmp_path):
    player, facts = played_at_random(seed, tmp_path, 1000 if LONG else 300)
    captured, rate = soundfile.read(tmp_path / "take.wav", dtype="float32")
    again, found = replayed(tmp_path / "session.log.jsonl")
    assert rate == 48_000
    assert np.array_equal(captured, player.audio[facts["from"] : facts["to"]])
    assert np.array_equal(again, captured)
    assert found.same is True
    assert found.warnings == ()
    assert np.abs(captured).max() > 0.0
    whole, _ = replayed(tmp_path / "session.log.jsonl", whole=True)
    assert np.array_equal(whole, player.audio)


@pytest.mark.parametrize("rate", [8000, 44_100, 96_000])
def test_at_other_rates_too(rate, tmp_path):
    _, facts = played_at_random(rate, tmp_path, 60, rate)
    captured, found_rate = soundfile.read(tmp_path / "take.wav", dtype="float32")
    again, found = replayed(tmp_path / "session.log.jsonl")
    assert (found_rate, facts["sample_rate"]) == (rate, rate)
    assert np.array_equal(again, captured)
    assert found.same is True


def test_of_several_captures_the_last_is_replayed(tmp_path):
    with Player(*bank("fog-horn"), log=tmp_path / "log") as player:
        player.session.play()
        for name in ("one.wav", "two.wav"):
            player.session.capture_start(tmp_path / name)
            player.play(5000, 700)
            player.session.capture_stop()
    again, found = replayed(tmp_path / "log")
    assert found.same is True
    assert np.array_equal(again, soundfile.read(tmp_path / "two.wav", dtype="float32")[0])


def test_a_session_cut_short_replays_up_to_its_last_move(tmp_path):
    """Without an end, as after a crash, all that is known to have been played comes again."""
    with Player(*bank("fog-horn"), log=tmp_path / "log") as player:
        player.session.play()
        player.play(4800, 480)
        player.session.set(1, "pitch.rise", 0.3)
        player.play(4800, 480)
        (tmp_path / "cut").write_bytes((tmp_path / "log").read_bytes())
    again, _ = replayed(tmp_path / "cut", whole=True)
    assert np.array_equal(again, player.audio[:4800])


@pytest.mark.parametrize("last", ["play", "panic"])
def test_as_many_commands_at_one_sample_as_the_deck_holds_come_again(last, tmp_path):
    """Also where the last of them is a panic, which overrules all the others."""
    with Player(*bank("fog-horn"), log=tmp_path / "log") as player:
        player.session.play()
        player.play(5000)
        for step in range(400):
            player.session.key_down(step % 100)
            player.session.key_up(step % 100)
        getattr(player.session, last)()
        player.play(20_000)
        player.session.play()
        player.play(5000)
    lines = [json.loads(line) for line in (tmp_path / "log").read_text().splitlines()]
    stamps = [line["at"] for line in lines if "sent" in line]
    assert max(stamps.count(at) for at in set(stamps)) > (200 if last == "panic" else 2)
    assert np.array_equal(replayed(tmp_path / "log", whole=True)[0], player.audio)
