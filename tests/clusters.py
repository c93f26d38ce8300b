"""A Dask scheduler and workers in processes of their own, for this machine alone, ended with the test."""

import contextlib
import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator, Sequence
from pathlib import Path

from distributed import Client

_PATIENCE_S = 60.0


class TestCluster:
    """Processes of Dask, their log files in ``folder``."""

    __test__ = False

    def __init__(self, folder: Path, *options: str, **environment: str) -> None:
        self.folder = folder
        self.environment = {**os.environ, **environment}
        self.workers: list[subprocess.Popen[bytes]] = []
        found = folder / "scheduler.json"
        place = ("--host", "127.0.0.1", "--port", "0", "--scheduler-file", str(found))
        self.scheduler = self._started("scheduler", *place, *options)
        self.address = ""
        while not self.address:
            with contextlib.suppress(OSError, ValueError):
                self.address = json.loads(found.read_text())["address"]
            assert self.scheduler.poll() is None, self.said()
            time.sleep(0.05)

    def _started(self, kind: str, *options: str) -> "subprocess.Popen[bytes]":
        log = (self.folder / f"{kind}-{len(self.workers)}.log").open("wb")
        command = [str(Path(sys.executable).with_name("dask")), kind, "--no-dashboard", *options]
        with log:
            return subprocess.Popen(
                command, stdout=log, stderr=log, env=self.environment, cwd=self.folder, start_new_session=True
            )

    def add_worker(self, *options: str, preload: str = "", nanny: bool = False) -> "subprocess.Popen[bytes]":
        """Start a worker with one thread; ``preload`` is Python that runs in it first."""
        if preload:
            script = self.folder / f"preload_{len(self.workers)}.py"
            script.write_text(preload)
            options = (*options, "--preload", str(script))
        kind = "--nanny" if nanny else "--no-nanny"
        worker = self._started("worker", self.address, kind, "--nthreads", "1", *options)
        self.workers.append(worker)
        return worker

    def wait_for(self, count: int) -> None:
        """Wait until the scheduler has so many workers."""
        with Client(self.address, set_as_default=False) as client:
            client.wait_for_workers(count, timeout=_PATIENCE_S)

    def said(self) -> str:
        """What all of them wrote."""
        return "\n".join(path.read_text("utf-8", "replace") for path in sorted(self.folder.glob("*.log")))

    def end(self) -> None:
        """Kill every process that was started here."""
        for process in (*self.workers, self.scheduler):
            kill(process)


def kill(process: "subprocess.Popen[bytes]") -> None:
    """End a process with all that it started, at once."""
    with contextlib.suppress(ProcessLookupError):
        os.killpg(process.pid, signal.SIGKILL)
    process.wait()


@contextlib.contextmanager
def running_cluster(
    folder: Path, workers: int = 1, options: Sequence[str] = (), **environment: str
) -> Iterator[TestCluster]:
    """A scheduler with so many workers."""
    cluster = TestCluster(folder, *options, **environment)
    try:
        for _ in range(workers):
            cluster.add_worker()
        if workers:
            cluster.wait_for(workers)
        yield cluster
    finally:
        cluster.end()
