"""The panel: what serving it costs, and how long a move takes from the browser to the sound."""

import asyncio
import json
import statistics
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

from browser import CHROMIUM
from panels import SAMPLE_RATE, browser_for_panels, panel_tab, served, talking

BLOCK = 128
WATCHED_S = 10.0
MOVES = 60


def report(runs: int, scale: float) -> Iterator[str]:
    """A line for each figure. ``runs`` has no meaning here; ``scale`` shortens what is watched."""
    seconds = max(WATCHED_S * scale, 1.0)
    with tempfile.TemporaryDirectory() as folder, served(Path(folder)) as found:
        found.session.play()
        share = _share(found, seconds, 1)
        yield f"panel threads / one core, one panel at 30 frames a second: {share:.3f} (at most 0.15)"
        share = _share(found, seconds, 2)
        yield f"panel threads / one core, two panels: {share:.3f}"
        share = _share(found, seconds, 1, _mover(found))
        yield f"panel threads / one core, a setting moved 30 times a second: {share:.3f}"
        if CHROMIUM is None:
            yield "panel, from the browser's event to the sound: needs Debian's chromium"
            return
        moves = max(int(MOVES * scale), 5)
        yield _way_line("from the browser's event to the first sample", _ways(found, moves))
        with _hogging():
            yield _way_line("the same while another thread of Python never rests", _ways(found, moves))


def _share(found: Any, seconds: float, panels: int, moves: "Callable[[Any], Any] | None" = None) -> float:
    """The part of a core that the panel's threads take while panels look on."""

    async def watch(*ends: Any) -> float:
        async def look(one: Any) -> None:
            while True:
                await one.next()

        looking = [asyncio.create_task(look(one)) for one in ends]
        await asyncio.sleep(1.0)
        if moves is not None:
            looking.append(asyncio.create_task(moves(ends[0])))
        before, begun = _spent(), time.monotonic()
        await asyncio.sleep(seconds)
        share = (_spent() - before) / (time.monotonic() - begun)
        for task in looking:
            task.cancel()
        return share

    return float(talking(found, watch, panels))


def _spent() -> float:
    """CPU seconds of all threads that serve panels, those beside the loop too."""
    threads = [thread for thread in threading.enumerate() if thread.name.startswith("glidesmith panel")]
    return sum(time.clock_gettime(time.pthread_getcpuclockid(thread.ident)) for thread in threads)


def _mover(found: Any) -> "Callable[[Any], Any]":
    async def move(one: Any) -> None:
        for number in range(100_000):
            await one.say(do="set", slot=1, key="pitch.rise", value=0.01 + 0.001 * (number % 100), gesture=1)
            await asyncio.sleep(1 / 30)

    return move


def _ways(found: Any, moves: int) -> list[float]:
    """Seconds from a key pressed on a slider, by the browser's clock, to the block first made with it."""
    sent: dict[int, float] = {}
    taken: dict[int, int] = {}

    def see(socket: Any) -> None:
        socket.on("framesent", lambda text: _note(text, sent, "id", "at"))
        socket.on("framereceived", lambda text: _note(text, taken, "taken", "sample"))

    with browser_for_panels() as chromium, panel_tab(chromium, found) as tab:
        tab.page.on("websocket", see)
        tab.page.reload()
        tab.page.wait_for_selector("#facts-body tbody tr")
        tab.page.locator('[id="set-pitch.fall"]').focus()
        for number in range(moves):
            tab.page.keyboard.press("ArrowUp" if number % 20 < 10 else "ArrowDown")
            tab.page.wait_for_timeout(37)
        for _ in range(40):  # a busy machine answers late
            tab.page.wait_for_timeout(500)
            starts = dict(found.driver.times)
            ways = [
                starts[sample] - sent[number] / 1000
                for number, sample in taken.items()
                if number in sent and sample in starts
            ]
            if ways:
                return ways
    raise RuntimeError(f"none of {len(sent)} moves was answered: {len(taken)} answers, {len(starts)} blocks")


def _note(text: str | bytes, noted: dict[int, Any], key: str, value: str) -> None:
    if isinstance(text, str) and f'"{key}":' in text:
        content = json.loads(text)
        if key in content and value in content:
            noted[content[key]] = content[value]


def _way_line(what: str, ways: list[float]) -> str:
    limit = BLOCK / SAMPLE_RATE + 0.010
    median = statistics.median(ways)
    return (
        f"panel, {what} / one block and 10 ms, median of {len(ways)}: {median / limit:.2f} (at most 1) "
        f"— {1000 * median:.1f} ms, worst {1000 * max(ways):.1f} ms"
    )


class _hogging:  # noqa: N801
    """While it lasts, a thread of Python computes without a pause."""

    def __enter__(self) -> None:
        self._end = threading.Event()
        self._thread = threading.Thread(target=self._run, daemon=True)
        self._thread.start()

    def __exit__(self, *_: object) -> None:
        self._end.set()
        self._thread.join()

    def _run(self) -> None:
        count = 0
        while not self._end.is_set():
            for _ in range(10_000):
                count += 1
