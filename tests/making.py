"""Presets and phrases for tests, made in a line. All of it is invented."""

from fractions import Fraction

import numpy as np

from glidesmith.phrase import Note, Phrase
from glidesmith.preset import Preset, preset_from_mapping


def make_preset(**tables) -> Preset:
    """A preset with quick linear slews, and with what ``tables`` change, table by table."""
    base = {
        "title": "Under test",
        "pitch": {"law": "rc", "rise": 0.06, "fall": 0.09},
        "gain": {"law": "linear", "rise": 0.004, "fall": 0.08},
    }
    for name, table in tables.items():
        base[name] = {**base.get(name, {}), **table} if isinstance(table, dict) else table
    return preset_from_mapping(base)


def make_phrase(*rows, title="Under test") -> Phrase:
    """A phrase of (start, end, number[, velocity]) in seconds; strings such as "1/3" are exact."""
    notes = [Note(Fraction(a), Fraction(b), n, *(v or [1.0])) for a, b, n, *v in rows]
    return Phrase(title, tuple(notes))


def random_phrase(seconds, seed, shortest=0.05, longest=0.5, low=48, high=84) -> Phrase:
    """Notes in a row whose starts fall between samples; half of them overlap the next."""
    generator = np.random.default_rng(seed)
    rows, at = [], Fraction(0)
    while at < seconds:
        lasts = Fraction(int(generator.integers(int(shortest * 1e6), int(longest * 1e6))), 1_000_003)
        over = Fraction(int(generator.integers(50, 130)), 100)
        rows.append(
            (at, at + lasts * over, int(generator.integers(low, high)), float(generator.uniform(0.3, 1)))
        )
        at += lasts
    return make_phrase(*rows)
