"""Sound outputs of the tests' own, without a sound card: a dummy JACK server, and an ALSA file device.

Programs under test see them through the environment that these give, so each runs in a process of its own.
"""

import contextlib
import fcntl
import os
import shutil
import subprocess
import tempfile
import threading
from collections.abc import Iterator
from ctypes.util import find_library
from pathlib import Path
from typing import IO

import numpy as np
import pytest

_START_S = 15
_SLOTS = 4

needs_portaudio = pytest.mark.skipif(
    find_library("portaudio") is None, reason="there is no PortAudio: apt-get install libportaudio2"
)
needs_jack = pytest.mark.skipif(
    shutil.which("jackd") is None or find_library("portaudio") is None,
    reason="there is no JACK server: apt-get install jackd2 libportaudio2",
)
needs_alsa = pytest.mark.skipif(
    not Path("/usr/share/alsa/alsa.conf").exists() or find_library("portaudio") is None,
    reason="there is no ALSA: apt-get install libasound2-data libportaudio2",
)

NO_DETOUR = "pcm.!jack { type hw card 99 }\n"
"""Takes away ALSA's own way to a JACK server, which some systems list."""

ASOUNDRC = """\
pcm.!default {{ type plug slave.pcm "{name}" }}
pcm.{name} {{ type file slave.pcm "null" file "{file}" format "raw" }}
"""


class DummyJack:
    """A JACK server that paces like a sound card and plays to nobody; it can be killed and started again."""

    def __init__(self, folder: Path, rate: int = 48_000, block: int = 128, outputs: int = 2) -> None:
        self.name, self._slot = _own_name()
        self._command = ["jackd", "-n", self.name, "--no-realtime", "-d", "dummy"]
        self._command += ["-r", str(rate), "-p", str(block), "-P", str(outputs)]
        self._said = folder / "jackd.txt"
        self.environment = isolated(folder) | {"JACK_DEFAULT_SERVER": self.name}
        self._server: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        """Start the server, and return once it takes clients."""
        with self._said.open("ab") as said:
            self._server = subprocess.Popen(
                self._command, stdin=subprocess.DEVNULL, stdout=said, stderr=said, env=self.environment
            )
        waiting = ["jack_wait", "-s", self.name, "-w", "-t", str(_START_S)]
        done = subprocess.run(waiting, capture_output=True, env=self.environment, timeout=2 * _START_S)
        if done.returncode != 0 or self._server.poll() is not None:
            self.kill()
            pytest.skip(
                f"the dummy JACK server (Debian: jackd2) does not start here: {self._said.read_text()[-300:]}"
            )

    def deserted(self) -> bool:
        """Whether a client vanished without a word, which costs everybody's sound."""
        said = self._said.read_text()
        return "Broken pipe" in said or "Could not write notification" in said

    def kill(self) -> None:
        """End the server as a crash does."""
        if self._server is not None:
            self._server.kill()
            self._server.wait()
            self._server = None

    def stop(self) -> None:
        """End the server in good order, so that nothing of it stays behind."""
        if self._server is not None:
            self._server.terminate()
            with contextlib.suppress(subprocess.TimeoutExpired):
                self._server.wait(5.0)
            self.kill()
        self._slot.close()


def _own_name() -> tuple[str, IO[bytes]]:
    """A name that no other run of the tests uses now, and the lock that keeps it.

    JACK has room for eight names in all, those of servers that were killed included: so they are used again.
    """
    for number in range(_SLOTS):
        lock = Path(tempfile.gettempdir(), f"glidesmith-test-{os.getuid()}-{number}.lock")
        slot = lock.open("wb")
        try:
            fcntl.flock(slot, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            slot.close()
            continue
        return f"glidesmith-test-{number}", slot
    pytest.skip(
        "other runs of the tests have all the dummy servers of jackd2; run them again when those are over"
    )


def isolated(folder: Path) -> dict[str, str]:
    """An environment without the user's sound settings and servers."""
    home = folder / "home"
    home.mkdir(exist_ok=True)
    (home / ".asoundrc").write_text(NO_DETOUR)
    cache = os.environ.get("GLIDESMITH_CACHE") or _own_cache()
    nobody = {"PULSE_SERVER": "unix:/nonexistent", "PIPEWIRE_REMOTE": "nobody", "XDG_RUNTIME_DIR": str(home)}
    return os.environ | nobody | {"HOME": str(home), "GLIDESMITH_CACHE": cache, "JACK_NO_START_SERVER": "1"}


def _own_cache() -> str:
    """Where compiled code of this session is kept, so that another HOME does not compile it all again."""
    from glidesmith.compiled import CACHE_FOLDER

    return str(Path(CACHE_FOLDER).parent) if CACHE_FOLDER else ""


@contextlib.contextmanager
def dummy_jack(folder: Path, rate: int = 48_000, block: int = 128, outputs: int = 2) -> Iterator[DummyJack]:
    """A running dummy JACK server with so many output channels."""
    server = DummyJack(folder, rate, block, outputs)
    server.start()
    try:
        yield server
    finally:
        server.stop()


class AlsaFile:
    """An ALSA output that takes samples as fast as they come, and writes them to a file."""

    def __init__(self, folder: Path, name: str = "tape") -> None:
        self.environment = isolated(folder)
        self.name, self._file = name, folder / f"{name}.raw"
        self._settings = Path(self.environment["HOME"], ".asoundrc")
        self.environment["JACK_DEFAULT_SERVER"] = "none-at-all"
        self.connect()

    def connect(self) -> None:
        self._settings.write_text(NO_DETOUR + ASOUNDRC.format(name=self.name, file=self._file))

    def samples(self, channels: int = 2) -> np.ndarray:
        """What was played so far, float32 (n, channels)."""
        whole = self._file.stat().st_size // (4 * channels) * channels
        return np.fromfile(self._file, "<f4", whole).reshape(-1, channels)


@contextlib.contextmanager
def watched(process: subprocess.Popen, seconds: float = 180.0) -> Iterator[subprocess.Popen]:
    """A process that is killed at the end, and earlier where it hangs: reading from it ends then."""
    watchdog = threading.Timer(seconds, process.kill)
    watchdog.start()
    try:
        yield process
    finally:
        watchdog.cancel()
        process.kill()
        process.communicate()
