"""Listening sheets as a comparison page saves them, for tests. The listeners are invented."""

import hashlib
import json
from pathlib import Path

from scipy.stats import binomtest

SET = hashlib.sha256(b"a set").hexdigest()
RC, EXP, COSINE = (hashlib.sha256(name).hexdigest() for name in (b"rc", b"exp", b"cosine"))
LABELS = {RC: "rc", EXP: "exp", COSINE: "cosine"}


def abx(right, planned=16, done=None, listener="Ada", pair=(RC, EXP), **changes):
    """A round of ``done`` trials of which ``right`` are correct; the probability is scipy's."""
    done = planned if done is None else done
    hidden = [(7 * k // 3) % 2 for k in range(done)]
    trials = [{"x": x, "answer": x if k < right else 1 - x, "seconds": 4.5 + k} for k, x in enumerate(hidden)]
    probability = binomtest(right, done, 0.5, alternative="greater").pvalue if done else 1.0
    return {
        "kind": "glidesmith listening sheet",
        "version": 1,
        "set": SET,
        "listener": listener,
        "made": "2031-05-04T20:15:00.000Z",
        "test": "abx",
        "pair": list(pair),
        "labels": [LABELS[digest] for digest in pair],
        "trials_planned": planned,
        "trials": trials,
        "correct": right,
        "finished": done == planned,
        "probability": probability,
        **changes,
    }


def preference(order, listener="Ada", candidates=(RC, EXP, COSINE), undecided=(), finished=True, **changes):
    """A round in which the earlier one in ``order`` always wins; ``undecided`` are pairs without a winner."""
    place = {digest: index for index, digest in enumerate(candidates)}
    pairs = []
    for first in range(len(candidates)):
        for second in range(first + 1, len(candidates)):
            pair = frozenset((candidates[first], candidates[second]))
            best = None if pair in undecided else place[min(pair, key=order.index)]
            pairs.append({"first": second, "second": first, "preferred": best})
    return {
        "kind": "glidesmith listening sheet",
        "version": 1,
        "set": SET,
        "listener": listener,
        "made": "2031-05-04T20:30:00.000Z",
        "test": "preference",
        "candidates": [{"settings_sha256": digest, "label": LABELS[digest]} for digest in candidates],
        "pairs": pairs if finished else pairs[:-1],
        "finished": finished,
        **changes,
    }


def told(identity, listener="Ada", pair=(RC, EXP), answered=16, planned=16, **changes):
    """What a sheet tells of an earlier round of A/B/X."""
    return {
        "id": identity,
        "made": "2031-05-03T18:00:00.000Z",
        "test": "abx",
        "listener": listener,
        "finished": answered == planned,
        "answered": answered,
        "planned": planned,
        "pair": list(pair),
        "labels": [LABELS[digest] for digest in pair],
        **changes,
    }


def bundle(*sheets, **changes):
    """All rounds that a browser kept, in one file."""
    content = {"kind": "glidesmith listening sheets", "version": 1, "set": SET, "sheets": list(sheets)}
    return {**content, **changes}


def save(folder: Path, *sheets) -> list[Path]:
    """Write sheets as files, numbered; text is written as it is."""
    paths = []
    for number, sheet in enumerate(sheets, 1):
        path = folder / f"sheet-{number}.json"
        path.write_text(sheet if isinstance(sheet, str) else json.dumps(sheet))
        paths.append(path)
    return paths
