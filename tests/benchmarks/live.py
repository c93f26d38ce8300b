"""Live under load: underflows of the engine's callback against one that writes silence, and its cost.

To a dummy JACK server with 64 frames a block at 48 kHz, while a thread of Python never rests and a panel
looks on. Each run is a process of its own, and all but what the callback writes is the same in both of a
pair. The difference of the two is judged by Student's t on the pairs' differences, with a 99 % interval: it
makes no assumption about how underflows come, which on a machine with other work is in swarms.
"""

import asyncio
import json
import math
import os
import statistics
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

TESTS = Path(__file__).resolve().parents[1]
PRESET = TESTS.parent / "presets" / "night-ferry-lead.toml"
RATE, BLOCK = 48_000, 64
SECONDS = 60.0
DEADLINE_US = 1e6 * BLOCK / RATE
SILENCE, ENGINE, PYTHON = "silence", "engine", "python"


def report(runs: int, scale: float) -> Iterator[str]:
    """``runs`` pairs of a minute each; ``scale`` shortens them."""
    sys.path.insert(0, str(TESTS))
    from sound_servers import dummy_jack

    if subprocess.run(["which", "jackd"], capture_output=True).returncode != 0:
        yield "live: needs a dummy JACK server: apt-get install jackd2 libportaudio2"
        return
    seconds = max(SECONDS * scale, 1.0)
    with tempfile.TemporaryDirectory() as folder, dummy_jack(Path(folder), RATE, BLOCK) as server:
        _played(ENGINE, 0.2, server.environment)  # compiles what is still to be compiled
        pairs = []
        for number in range(runs):
            kinds = (ENGINE, SILENCE) if number % 2 else (SILENCE, ENGINE)
            made = {kind: _played(kind, seconds, server.environment) for kind in kinds}
            pairs.append((made[ENGINE], made[SILENCE]))
        python = _played(PYTHON, seconds, server.environment)
    yield from _underflow_lines(pairs, python, seconds)
    yield from _cost_lines([engine for engine, _ in pairs])


def _played(kind: str, seconds: float, environment: dict[str, str]) -> dict[str, Any]:
    """One run in a process of its own: what its callback counted."""
    command = [sys.executable, __file__, kind, str(seconds)]
    done = subprocess.run(command, env=environment, stdout=subprocess.PIPE, text=True, check=True)
    counted: dict[str, Any] = json.loads(done.stdout)
    return counted


def _underflow_lines(
    pairs: list[tuple[dict[str, Any], dict[str, Any]]], python: dict[str, Any], seconds: float
) -> Iterator[str]:
    engine, silence = ([run["underflows"] for run in side] for side in zip(*pairs, strict=True))
    listed = ", ".join(f"{a}/{b}" for a, b in zip(engine, silence, strict=True))
    yield (
        f"live, {BLOCK} frames, {seconds:g} s: underflows of the engine / of silence, in turn: {listed}; "
        f"means {statistics.mean(engine):.1f} / {statistics.mean(silence):.1f}; "
        f"a Python callback beside them: {python['underflows']}, and "
        f"{100.0 * python['frames'] / (seconds * RATE):.0f} % of the frames"
    )
    differences = [a - b for a, b in zip(engine, silence, strict=True)]
    low, high = interval_99(differences)
    inside = "holds" if low <= 0.0 <= high else "does not hold"
    yield (
        f"live, engine less silence: {statistics.mean(differences):+.1f} underflows a run, 99 % interval "
        f"{low:+.1f} to {high:+.1f} (Student's t on {len(differences)} pairs), which {inside} 0"
    )


def interval_99(differences: list[int]) -> tuple[float, float]:
    """The 99 % confidence interval of a mean by Student's t; without bounds for a single value."""
    from scipy.stats import t

    count = len(differences)
    if count < 2:
        return -math.inf, math.inf
    half = t.ppf(0.995, count - 1) * statistics.stdev(differences) / math.sqrt(count)
    middle = statistics.mean(differences)
    return middle - half, middle + half


def _cost_lines(runs: list[dict[str, Any]]) -> Iterator[str]:
    for name, words, limit in (("p999_us", "99.9th percentile", 10.0), ("median_us", "median", 0.3)):
        shares = sorted(100.0 * run[name] / DEADLINE_US for run in runs)
        yield (
            f"live, the engine's time on the audio thread / deadline of {DEADLINE_US:.0f} us, {words}: "
            f"{statistics.median(shares):.2f} % ({shares[0]:.2f} to {shares[-1]:.2f}; at most {limit:g} %)"
        )


def _play(kind: str, seconds: float) -> None:
    """In the process of a run: play, with a panel and a thread that never rests, and print the counts."""
    from glidesmith.panel import Panel
    from glidesmith.phrase import load_preset_phrase
    from glidesmith.portaudio import quiet
    from glidesmith.preset import load_preset
    from glidesmith.session import Session
    from glidesmith.soundcard import SoundCard, choose_output
    from sound_sources import Silence

    preset = load_preset(PRESET)
    session = Session([preset], load_preset_phrase(preset), RATE, match=False)
    session.play()
    source: Any = Silence() if kind == SILENCE else session.deck
    with quiet(), session.service(), Panel(session) as panel:
        looker = subprocess.Popen([sys.executable, __file__, "look", panel.url])
        card = SoundCard(source, choose_output(), block=BLOCK, compiled=kind != PYTHON)
        card.start()
        threading.Thread(target=_hog, daemon=True).start()
        time.sleep(1.0)
        before = source.counters()
        time.sleep(seconds)
        counters = source.counters()
        card.stop()
        looker.kill()
        looker.wait()
    counts = {
        "underflows": counters.underflows - before.underflows,
        "median_us": counters.median_us,
        "p999_us": counters.p999_us,
        "frames": counters.frames - before.frames,
    }
    print(json.dumps(counts), flush=True)
    os._exit(0)


def _hog() -> None:
    number = 0
    while True:
        number += 1


def _look(url: str) -> None:
    """In the process of a panel's guest: take all that comes."""
    import aiohttp

    origin, _, token = url.partition("/?token=")

    async def look() -> None:
        async with (
            aiohttp.ClientSession() as client,
            client.ws_connect(
                f"{origin}/socket", params={"token": token}, headers={"Origin": origin}
            ) as socket,
        ):
            async for _ in socket:
                pass

    asyncio.run(look())


if __name__ == "__main__":
    sys.path.insert(0, str(TESTS))
    if sys.argv[1] == "look":
        _look(sys.argv[2])
    else:
        _play(sys.argv[1], float(sys.argv[2]))
