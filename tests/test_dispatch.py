"""Moves on their way to the deck: what overtakes, what replaces what, and what is never refused."""

import json
from pathlib import Path

import numpy as np
import pytest

from glidesmith.errors import SettingError
from glidesmith.logreader import LogReader
from glidesmith.replay import replay, span_of
from glidesmith.sink import MemorySink
from making import make_phrase, make_preset
from playing import RATE, Player

PHRASE = make_phrase(("0", "1/4", 60), ("1/4", "1/2", 67))


def player(**options) -> Player:
    """A session of a small preset on a phrase of half a second."""
    return Player([make_preset()], PHRASE, **options)


def lines_of(path: Path) -> list[dict]:
    return [json.loads(line) for line in path.read_text().splitlines()[1:]]


def sent(path: Path) -> list[str]:
    return [line["sent"] for line in lines_of(path) if "sent" in line]


def fill(live: Player) -> None:
    """Strokes of keys to a deck that stands still, until no more fit: 248 are on their way, 1000 wait."""
    for number in range(624):
        live.session.key_down(number % 60)
        live.session.key_up(number % 60)
    with pytest.raises(SettingError, match="is the device lost"):
        live.session.key_down(100)


def test_a_deck_that_stands_still_is_told_of_and_what_was_taken_is_not_lost(tmp_path):
    with player(log=tmp_path / "log") as live:
        live.play(10)
        fill(live)
        live.session.set(1, "pitch.rise", 0.5)
        live.play(RATE, 600)
    kinds = [(line["do"], line.get("note")) for line in lines_of(tmp_path / "log")]
    strokes = [(do, number % 60) for number in range(624) for do in ("key_down", "key_up")]
    assert kinds[1:-1] == [*strokes, ("set", None)]


def test_a_key_comes_up_however_much_waits(tmp_path):
    """A deck that stands still takes it once it goes on: no key hangs, and nothing grows without end."""
    with player(log=tmp_path / "log") as live:
        live.session.key_down(72)
        live.play(2000)
        assert live.session.deck.rows(0)[1]["gate"][-1] > 0.0
        fill(live)
        for _ in range(1000):
            live.session.key_up(72)
            live.session.key_up(71)
        live.play(RATE, 600)
        assert live.session.deck.rows(0)[1]["gate"][-1] == 0.0
    assert len(lines_of(tmp_path / "log")) < 1300


def test_panic_overtakes_all_that_waits(tmp_path):
    """30 starts, each of which cross-fades, would take 300 ms: silence is there with the next block."""
    with player(log=tmp_path / "log") as live:
        session = live.session
        session.play()
        live.play(RATE // 2)
        for _ in range(30):
            session.play()
            session.key_down(60)
        session.set(1, "pitch.rise", 0.7)
        session.panic()
        live.play(512)
        assert not live.audio[-256:].any()  # the fade is 2 ms, 96 samples
        live.play(RATE // 2)
        assert not live.audio[-RATE // 2 :].any()
        assert session.state()["playing"] == "stopped"
        session.play()
        live.play(RATE // 2)
        assert live.audio[-1000:].any()
        assert session.state()["slots"][0]["settings"]["pitch.rise"] == 0.7
    told = lines_of(tmp_path / "log")
    assert [line["do"] for line in told if line["do"] in ("key_down", "play", "panic", "set")] == [
        "play", "play", "key_down", "panic", "set", "play",
    ]  # fmt: skip
    with LogReader(tmp_path / "log") as reader:
        sink = MemorySink()
        replay(reader, span_of(reader, whole=True), sink)
        sink.close()
    assert np.array_equal(sink.audio, live.audio)


def test_panic_is_never_refused_and_one_is_enough(tmp_path):
    """Not where the deck stands still and its ring is full, and not the thousandth time."""
    with player(log=tmp_path / "log") as live:
        live.session.play()
        live.play(RATE // 4)
        fill(live)
        for _ in range(1000):
            live.session.panic()
        live.session.level(-40.0)
        live.play(512, 512)
        assert live.audio[RATE // 8 : RATE // 4].any()
        assert not live.audio[-256:].any()
        live.play(RATE // 4)
        assert not live.audio[-RATE // 4 :].any()
    assert sent(tmp_path / "log").count("panic") == 1
    assert sent(tmp_path / "log")[-2:] == ["panic", "level"]
    assert len(sent(tmp_path / "log")) < 260


def test_one_start_or_stop_waits_and_the_newest_counts(tmp_path):
    with player(log=tmp_path / "log") as live:
        live.play(10)
        live.session.play()
        for _ in range(50):
            live.session.stop()
            live.session.key_down(60)
            live.session.level(-50.0)
            live.session.level(-40.0)
            live.session.play()
        live.session.stop()
        live.play(4000, 500)
        assert live.session.deck.state().mode == "stopped"
        live.play(RATE)
        assert live.session.deck.state().level_db == pytest.approx(-40.0)
        assert len(live.session.dropped) == 50 * 4
    told = [line["do"] for line in lines_of(tmp_path / "log")][1:-1]
    assert [do for do in told if do != "level"] == ["play", "stop"]


def test_a_key_that_two_hold_comes_up_with_the_last(tmp_path):
    with player() as live:
        session = live.session

        def gate() -> float:
            live.play(2000)
            return session.deck.rows(0)[1]["gate"][-1]

        session.key_down(60, holder="one")
        session.key_down(60, holder="two")
        assert session.key_up(60, holder="one") is False
        assert gate() > 0.0
        assert session.key_up(60, holder="one") is False
        assert gate() > 0.0
        assert session.key_up(60, holder="two") is True
        assert gate() == 0.0
        session.key_down(60, holder="one")
        session.stop()  # which takes all keys away, so that nobody holds them any more
        session.key_down(60, holder="two")
        assert gate() > 0.0
        assert session.key_up(60, holder="two") is True
        assert gate() == 0.0
