"""Finished records of a batch, made up: for tests of what is made of them."""

import math
import random
from typing import Any

PLACES = ("harbour", "deck", "engine-room", "far-lighthouse")
NOTES = ("D3", "A3", "G3", "F3", "C4")


def make_record(item: str = "harbour/lead.wav", **changes: Any) -> dict[str, Any]:
    """A record of which nothing is to be complained."""
    record = {
        "item": item,
        "title": item.removesuffix(".wav"),
        "preset": item.removesuffix(".wav") + ".toml",
        "phrase": "ferry-line.toml",
        "varied": {},
        "settings_sha256": "5e" * 32,
        "phrase_sha256": "f0" * 32,
        "engine": "0.1.0",
        "audio_sha256": "ab" * 32,
        "file_sha256": "cd" * 32,
        "frames": 96_000,
        "sample_rate": 48_000,
        "depth": 24,
        "gain_db": 0.0,
        "lufs": -23.02,
        "true_peak_dbtp": -6.5,
        "peak_db": -7.0,
        "clipped": 0,
        "never_lands": [],
        "edge_clicks": 0,
        "warnings": [],
        "without_effect": [],
        "curve": [[0.0, -0.8], [0.5, -0.8], [0.7, 0.1], [2.0, 0.1]],
    }
    return {**record, **changes}


def make_records(count: int, seed: int = 1) -> list[dict[str, Any]]:
    """Records such as a bank gives: one in nine never lands somewhere, some click, clip or warn."""
    draw = random.Random(seed)
    return [_drawn(number, draw) for number in range(count)]


def _drawn(number: int, draw: random.Random) -> dict[str, Any]:
    never = [
        {
            "note": note,
            "from": draw.choice(NOTES),
            "to": draw.choice(NOTES),
            "short_by_cents": draw.uniform(5, 90),
        }
        for note in range(draw.choice([0] * 8 + [3]))
    ]
    time, curve = 0.0, []
    for _ in range(24):
        curve.append([time, math.floor(draw.uniform(-12, 12)) / 12])
        time += draw.uniform(0.02, 0.3)
    return make_record(
        f"{draw.choice(PLACES)}/take-{number}.wav",
        never_lands=never,
        edge_clicks=draw.choice([0] * 20 + [4]),
        clipped=draw.choice([0] * 30 + [120]),
        warnings=["2 glides are cut off by the next note"] if draw.random() < 0.1 else [],
        frames=draw.randrange(48_000, 400_000),
        lufs=None if draw.random() < 0.01 else draw.uniform(-40, -12),
        true_peak_dbtp=draw.uniform(-20, 0),
        gain_db=draw.uniform(-6, 6),
        varied={"pitch.rise": draw.choice([0.02, 0.06])} if number % 3 == 0 else {},
        curve=curve,
    )
