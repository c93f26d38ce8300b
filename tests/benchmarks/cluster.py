"""A batch on a cluster of two workers against two jobs on this machine, and what 10 million items would take.

The cluster is there already, as it is for whoever uses one; connecting to it and looking its workers over
counts. What many items would take is worked out on paper from what is measured here.
"""

import logging
import shutil
import tempfile
import time
import tracemalloc
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager
from pathlib import Path
from typing import Any

from pairing import paired

from records import make_record

ITEMS, BANK = 4_000, 100
MANY, WORKERS = 10_000_000, 1_000
ITEM_S = 0.050
"""What an item of the projection takes a worker: some 8 s of sound, metered and written."""

PRESET = """
title = "Take {number}"
[pitch]
law = "rc"
rise = {rise}
fall = 0.02
[gain]
rise = 0.004
fall = 0.02
[phrase]
file = "short.toml"
"""
PHRASE = """
title = "Short"
tempo_bpm = 60.0
notes = [ { at = 0.0, lasts = 0.11, note = "D3" }, { at = 0.1, lasts = 0.1, note = "A3" } ]
"""


def bank(folder: Path, count: int) -> Path:
    """So many presets of a fifth of a second."""
    folder.mkdir()
    (folder / "short.toml").write_text(PHRASE)
    for number in range(count):
        text = PRESET.format(number=number, rise=0.01 + 1e-5 * number)
        (folder / f"take-{number:05d}.toml").write_text(text)
    return folder


def report(runs: int, scale: float) -> list[str]:
    """The ratio, and the projection."""
    try:
        from distributed import LocalCluster
    except ImportError:
        return ["cluster / two jobs: install `distributed` for this one"]
    from glidesmith.batching import batch
    from glidesmith.cluster import cluster_runner

    each = min(max(round(ITEMS * scale), 8), BANK)
    values = [0.02 + 1e-5 * number for number in range(max(round(ITEMS * scale) // each, 1))]
    count = each * len(values)
    with tempfile.TemporaryDirectory() as name, _two_workers(LocalCluster) as cluster:
        folder = Path(name)
        presets, takes = bank(folder / "bank", each), folder / "takes"

        def made(**how: Any) -> None:
            shutil.rmtree(takes, ignore_errors=True)
            done = batch(presets, takes, vary={"pitch.fall": values}, **how)
            assert len(done.made) == count, done.failed

        def on_cluster() -> None:
            made(run=cluster_runner(cluster.scheduler_address))

        pair = paired(on_cluster, lambda: made(jobs=2), runs)
        client_us = 1e6 * _cpu_s(on_cluster) / count
        task_us = 1e6 * _task_s(cluster.scheduler_address, max(round(2_000 * scale), 50))
        stored, held = _manifest_bytes(takes / "manifest.jsonl", count)
    return [
        pair.line(f"{count:,} short items on a cluster of 2 workers / with --jobs 2", "at most 1.15"),
        _projection(client_us, task_us, stored, held),
    ]


def _two_workers(cluster: type[Any]) -> AbstractContextManager[Any]:
    options = {"dashboard_address": "127.0.0.1:0", "silence_logs": logging.CRITICAL}
    found: AbstractContextManager[Any] = cluster(n_workers=2, threads_per_worker=1, **options)
    return found


def _cpu_s(work: Callable[[], None]) -> float:
    """What this process, which plans, hands out and keeps the books, takes; the scheduler runs in it too."""
    begun = time.process_time()
    work()
    return time.process_time() - begun


def _task_s(address: str, count: int) -> float:
    """What one task that does nothing costs client, scheduler and worker together."""
    from distributed import Client

    with Client(address, set_as_default=False) as client:
        client.gather(client.map(_nothing, range(50), pure=False))
        begun = time.perf_counter()
        client.gather(client.map(_nothing, range(count), pure=False))
        return (time.perf_counter() - begun) / count


def _nothing(_: int) -> None:
    return None


def _manifest_bytes(manifest: Path, count: int) -> tuple[float, float]:
    """Bytes of an item in the manifest, and in the memory of whoever keeps it at hand."""
    from glidesmith.manifest import read_manifest

    tracemalloc.start()
    records, _ = read_manifest(manifest)
    held = tracemalloc.get_traced_memory()[0]
    tracemalloc.stop()
    records.close()
    return manifest.stat().st_size / count, held / count


class _Anew:
    """So many records, made while they are gone through."""

    def __init__(self, count: int) -> None:
        self.count = count

    def __iter__(self) -> Iterator[dict[str, Any]]:
        return (make_record(f"take-{number:08d}.wav") for number in range(self.count))


def _projection(client_us: float, task_us: float, stored: float, held: float) -> str:
    """Ten million items of 50 ms on a thousand workers of one thread, on paper."""
    from glidesmith.errands import errand_length_s
    from glidesmith.summary import MOST_ROWS, summary_pieces

    length_s = errand_length_s(WORKERS)
    work_s = MANY * ITEM_S / WORKERS
    scheduler_s = MANY * ITEM_S / length_s * task_us * 1e-6
    begun = time.perf_counter()
    row_bytes = sum(map(len, summary_pieces(_Anew(5_000)))) / 5_000
    row_us = 1e6 * (time.perf_counter() - begun) / 5_000
    minutes = {
        "work": work_s / 60.0,
        "scheduler": scheduler_s / 60.0,
        "client": MANY * client_us / 60e6,
        "summary": MANY * row_us / 60e6,
    }
    return (
        f"{MANY:,} items of {1e3 * ITEM_S:.0f} ms on {WORKERS:,} workers, on paper / measured constants: "
        f"{minutes['work']:.0f} min of work; scheduler {minutes['scheduler']:.1f} min (errands of "
        f"{length_s:.1f} s, {task_us:.0f} µs a task); client {minutes['client']:.0f} min "
        f"({client_us:.0f} µs an item) and {MANY * held / 1e9:.1f} GB ({held:.0f} bytes an item); "
        f"manifest {MANY * stored / 1e9:.1f} GB ({stored:.0f} bytes an item); "
        f"summary {minutes['summary']:.0f} min, {MOST_ROWS * row_bytes / 1e6:.0f} MB "
        f"({MOST_ROWS:,} rows at most)"
    )
