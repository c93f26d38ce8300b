"""Sound for a browser: the samples of any driver, to one listener, no faster than they can be heard."""

import numpy as np
import pytest

from glidesmith.browser_sound import MOST_AHEAD_S, BrowserSound, TooFastError
from panels import SAMPLE_RATE, make_session, served, talking


class Clock:
    def __init__(self):
        self.now = 5.0

    def __call__(self):
        return self.now


@pytest.fixture
def clock():
    return Clock()


@pytest.fixture
def sound(clock):
    session = make_session(("night-ferry-lead",), fade=False)
    session.play()
    yield BrowserSound(session.deck, SAMPLE_RATE, clock)
    session.close()


def heard_by_another_driver(count):
    session = make_session(("night-ferry-lead",), fade=False)
    session.play()
    out = np.zeros(count, np.float32)
    session.deck.play(out)
    session.close()
    return out


def samples_of(frame):
    count = int(np.frombuffer(frame, "<u4", 1, 4)[0])
    first = float(np.frombuffer(frame, "<f8", 1, 8)[0])
    samples = np.frombuffer(frame, "<f4", offset=16)
    assert (frame[0], samples.size) == (2, count)
    return first, samples


def test_the_samples_are_those_of_any_driver(sound, clock):
    assert sound.listen("a")
    parts, at = [], 0
    for count in (1, 7, 512, 64, 3000, 509, 16_000):
        first, samples = samples_of(sound.frames("a", count))
        assert first == at
        at += count
        parts.append(samples)
        clock.now += 1.0
    assert np.array_equal(np.concatenate(parts), heard_by_another_driver(at))
    assert np.abs(np.concatenate(parts)).max() > 0.001


def test_one_listens_and_another_may_take_over(sound):
    assert sound.frames("a", 64) is None
    assert sound.listen("a")
    assert not sound.listen("b")
    assert sound.frames("b", 64) is None
    assert sound.deck.sample == 0
    assert sound.frames("a", 64) is not None
    assert sound.listen("b", take=True)
    assert sound.frames("a", 64) is None
    sound.leave("a")
    assert sound.listener == "b"
    sound.leave("b")
    assert sound.listener is None
    assert sound.deck.sample == 64


def test_nobody_gets_more_than_time_has_passed(sound, clock):
    sound.listen("a")
    most = int(MOST_AHEAD_S * SAMPLE_RATE)
    for _ in range(most // 16_000):
        sound.frames("a", 16_000)
    with pytest.raises(TooFastError):
        sound.frames("a", 16_000)
    assert sound.deck.sample == 96_000 // 16_000 * 16_000
    clock.now += 1.0
    for _ in range(3):
        sound.frames("a", 16_000)
    with pytest.raises(TooFastError):
        sound.frames("a", 16_000)


def test_over_the_socket_one_panel_drives_and_the_other_looks_on(tmp_path):
    with served(tmp_path, by_browser=True, fade=False) as found:

        async def talk(one, other):
            numbers = [(await each.told("hello"))["guest"] for each in (one, other)]
            await one.say(do="play")
            await one.say(do="frames", count=64)
            await one.say(do="listen", on=True)
            assert await one.told("listener") == numbers[0]
            assert await other.told("listener") == numbers[0]
            await other.say(do="listen", on=True)
            assert await other.told("listener") == numbers[0]
            await other.say(do="frames", count=64)
            await one.say(do="frames", count=4096, starved=2, latency_s=0.08)
            frame = await one.until(lambda found: isinstance(found, bytes) and found[0] == 2)
            await other.until_state(lambda state: state["playing"] == "phrase")
            assert all(frame[0] == 1 for frame in other.frames)
            await other.say(do="listen", on=True, take=True)
            assert await one.told("listener") == numbers[1]
            await one.say(do="frames", count=64)
            await other.say(do="frames", count=64)
            second = await other.until(lambda found: isinstance(found, bytes) and found[0] == 2)
            return samples_of(frame), samples_of(second)

        (first, samples), (second, more) = talking(found, talk, panels=2)
        assert (first, second) == (0, 4096)
        assert np.array_equal(np.concatenate([samples, more]), heard_by_another_driver(4160))
        assert (found.sound.starved, found.sound.latency_s) == (2, 0.08)
        assert found.sound.listener is None


def test_without_browser_sound_none_is_to_be_had(tmp_path):
    with served(tmp_path) as found:

        async def talk(one):
            assert not (await one.told("hello"))["browser_sound"]
            await one.say(do="listen", on=True)
            return await one.told("refused")

        assert "sound card" in talking(found, talk)
