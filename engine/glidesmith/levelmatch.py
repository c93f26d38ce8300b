"""Level match: slots are heard equally loud, by attenuating all to the quietest one's loudness.

A slot's loudness (ITU-R BS.1770) is measured offline on its phrase at its tempo, beside the sound and not in
it; what was measured is kept by settings, phrase and tempo.
"""

import hashlib
import json
import math
from collections import OrderedDict
from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from glidesmith.console import View
    from glidesmith.phrase import Phrase

FARTHEST_DB = 30.0
"""A slot that is quieter than the loudest by more than this is no measure for the others."""

SMALLEST_STEP_DB = 0.05
"""A gain that moves by less is left as it is."""

LONGEST_MEASURED_S = 120.0
"""Of a long phrase, so much counts."""

_MOST_KEPT = 256
_BLOCK = 16_384


def view_key(view: "View") -> str:
    """A digest of all that a slot's own loudness hangs on: settings, cycle, phrase, tempo, transposition."""
    preset = view.preset
    heard = {
        name: str(value)
        for name, value in preset.values().items()
        if name != "title" and "phrase." not in name
    }
    digest = hashlib.sha256(json.dumps(heard, sort_keys=True).encode("utf-8"))
    digest.update(view.cycle or b"")
    digest.update(f"{view.tempo} {view.semitones} {phrase_key(view.phrase)}".encode("ascii"))
    return digest.hexdigest()


class _Hashes:
    """Content hashes of phrases, kept while the phrase lives; a long one takes a while to hash."""

    def __init__(self) -> None:
        self._known: OrderedDict[int, tuple[Phrase, str]] = OrderedDict()

    def __call__(self, phrase: "Phrase") -> str:
        known = self._known.get(id(phrase))
        if known is None or known[0] is not phrase:
            known = (phrase, phrase.content_hash())
            self._known[id(phrase)] = known
            while len(self._known) > 2 * 8:
                self._known.popitem(last=False)
        return known[1]


phrase_key = _Hashes()


def loudness_of(view: "View", sample_rate: int) -> float | None:
    """Loudness in LUFS of one round of a slot at its own level; None where it is silent.

    The meter's absolute gate must not hear a quiet level as silence: the level is taken out before metering
    and put back in afterwards.
    """
    from glidesmith.loudness import LoudnessMeter
    from glidesmith.program import compile_program
    from glidesmith.snapshot import moved_phrase
    from glidesmith.voice import Voice

    cycle = None if view.cycle is None else np.frombuffer(view.cycle, "<f8")
    phrase = moved_phrase(view.phrase, view.tempo, view.semitones)
    program = compile_program(view.preset, phrase, sample_rate, cycle=cycle)
    voice, meter = Voice(program), LoudnessMeter(sample_rate)
    scale = np.float32(10.0 ** ((-12.0 - view.preset.oscillator.level_db) / 20.0))
    block = np.empty(_BLOCK, np.float32)
    left = min(program.length, int(LONGEST_MEASURED_S * sample_rate))
    while left > 0:
        part = block[: min(left, _BLOCK)]
        voice.play(part)
        meter.add(part * scale)
        left -= part.size
    lufs = meter.result().integrated_lufs
    return float(lufs - 20.0 * math.log10(scale)) if math.isfinite(lufs) else None


def matched_gains(lufs: Mapping[int, float | None]) -> dict[int, float]:
    """The gain of each slot in dB, 0 or less, by its loudness; None stands for a silent slot, which has 0."""
    heard = [value for value in lufs.values() if value is not None]
    if len(heard) < 2:
        return dict.fromkeys(lufs, 0.0)
    common = max(min(heard), max(heard) - FARTHEST_DB)
    return {
        number: 0.0 if value is None else min(0.0, round(common - value, 2)) for number, value in lufs.items()
    }


def too_quiet(lufs: Mapping[int, float | None]) -> list[int]:
    """The slots that stay quieter than the others, since attenuating all to them would leave nothing."""
    heard = [value for value in lufs.values() if value is not None]
    if len(heard) < 2:
        return []
    return [number for number, value in lufs.items() if value is None or value < max(heard) - FARTHEST_DB]


class Loudnesses:
    """What was measured, by `view_key`; the oldest is forgotten. Not for several threads at once."""

    def __init__(self) -> None:
        self._known: OrderedDict[str, float | None] = OrderedDict()

    def __contains__(self, key: str) -> bool:
        return key in self._known

    def get(self, key: str) -> float | None:
        """What was measured under a key; None where nothing was, or silence."""
        return self._known.get(key)

    def put(self, key: str, lufs: float | None) -> None:
        """Keep a measurement."""
        self._known[key] = lufs
        while len(self._known) > _MOST_KEPT:
            self._known.popitem(last=False)
