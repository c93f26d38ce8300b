"""A session played without a sound card or a clock: blocks, ticks and moves in turn."""

import contextlib
import random
from pathlib import Path
from typing import Any

import numpy as np

from conftest import PRESETS
from glidesmith.errors import GlidesmithError
from glidesmith.phrase import Phrase, load_preset_phrase
from glidesmith.preset import Preset, load_preset
from glidesmith.session import Session
from glidesmith.settings import KEY, KEYS

RATE = 48_000


def bank(*names: str) -> tuple[list[Preset], list[Phrase]]:
    """Presets of the demo bank by their files' names, and their phrases."""
    presets = [load_preset(PRESETS / f"{name}.toml") for name in names]
    return presets, [load_preset_phrase(preset) for preset in presets]


class Player:
    """Plays a session's deck; ``audio`` has all that was heard."""

    def __init__(self, *arguments: Any, sample_rate: int = RATE, **options: Any) -> None:
        self.now = 0.0
        self.session = Session(*arguments, sample_rate, clock=lambda: self.now, **options)
        self.sample_rate = sample_rate
        self.blocks: list[np.ndarray] = []

    @property
    def audio(self) -> np.ndarray:
        """All samples so far."""
        return np.concatenate(self.blocks)

    def play(self, samples: int, block: int = 512) -> None:
        """Play on, a tick after each block; the clock goes with the samples."""
        while samples > 0:
            out = np.zeros(min(block, samples), np.float32)
            self.session.deck.play(out)
            self.blocks.append(out)
            self.now += out.size / self.sample_rate
            self.session.tick()
            samples -= out.size

    def close(self) -> None:
        """End the session."""
        self.session.close()

    def __enter__(self) -> "Player":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


def random_value(draw: random.Random, name: str) -> object:
    """A value that fits a key; times and widths run over all that a hand would try."""
    key = KEY[name]
    if key.kind == "time":
        return draw.choice((0.0, 10.0 ** draw.uniform(-4.0, 0.5)))
    if key.kind == "number":
        if key.or_zero and draw.random() < 0.3:
            return 0.0
        return draw.uniform(key.lowest, key.highest)
    if key.kind == "whole":
        return draw.randint(int(key.lowest), int(key.highest))
    if key.kind == "choice":
        return draw.choice(key.choices)
    if key.kind == "note":
        return draw.randint(36, 84)
    return draw.random() < 0.5


MOVED_KEYS = [key.name for key in KEYS if key.table not in ("", "phrase") and key.kind != "file"]


def random_move(session: Session, draw: random.Random) -> None:
    """Do something to a session, as a hand that knows no rules would; what is refused is refused."""
    slot = draw.randint(1, 5)
    moves: list[tuple[int, Any]] = [
        (40, lambda: _random_set(session, draw)),
        (4, lambda: session.set(slot, draw.choice(("envelope", "converter", "drone")), draw.random() < 0.5)),
        (6, lambda: session.select(slot, draw.choice(("now", "loop")))),
        (2, lambda: session.copy(draw.randint(1, 5), slot)),
        (2, lambda: session.load(slot, draw.choice(sorted(PRESETS.glob("*.toml"))))),
        (2, lambda: session.phrase(draw.choice(PHRASE_FILES), draw.choice((None, slot)))),
        (4, session.undo),
        (3, session.redo),
        (4, lambda: session.tempo(draw.uniform(10.0, 400.0))),
        (3, lambda: session.transpose(draw.randint(-24, 24))),
        (2, lambda: session.loop(draw.random() < 0.7)),
        (2, lambda: session.match(draw.random() < 0.7)),
        (3, session.settle),
        (5, session.play),
        (1, session.stop),
        (1, session.panic),
        (3, lambda: session.level(draw.uniform(-60.0, 0.0))),
        (6, lambda: session.key_down(draw.randint(48, 72), draw.random())),
        (6, lambda: session.key_up(draw.randint(48, 72))),
    ]
    weights, actions = zip(*moves, strict=True)
    with contextlib.suppress(GlidesmithError):
        draw.choices(actions, weights)[0]()


def _random_set(session: Session, draw: random.Random) -> None:
    filled = [slot["number"] for slot in session.state()["slots"]]
    key = draw.choice(MOVED_KEYS)
    slot = session.state()["current"] if draw.random() < 0.7 else draw.choice(filled)
    session.set(slot, key, random_value(draw, key))


PHRASE_FILES: list[Path] = sorted((PRESETS.parent / "shared" / "phrases").glob("*.*"))
