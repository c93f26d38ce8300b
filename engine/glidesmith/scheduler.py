"""A Dask scheduler as a batch meets it: its address, the connection to it, and how it is kept quiet.

Whoever reaches a scheduler's port runs code on its workers: keep it on this machine, or use TLS.
"""

import contextlib
import ipaddress
import logging
import os
import re
import socket
import threading
import time
import warnings
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING

from glidesmith.errors import ClusterError, SettingError
from glidesmith.text import printable, shortened, shown

if TYPE_CHECKING:
    from distributed import Client

CONNECT_S = 8.0
"""A scheduler that hasn't answered by then is not there."""

ANSWER_S = 9.5
"""The same from the user's side: from the start of the process, loading Dask included."""

_SHORTEST_S = 1.0
_GRACE_S = 0.3

CLOSE_S = 2.0
LONGEST_SAID = 160
_LOUD = ("distributed", "tornado", "asyncio")
_ADDRESS = re.compile(r"(tcp|tls)://(\[[0-9A-Fa-f:.]+\]|[A-Za-z0-9_.-]+):([0-9]{1,5})")


def checked_address(address: str) -> str:
    """A scheduler's address as Dask wants it. Raises SettingError where it is none."""
    if not isinstance(address, str):
        raise SettingError(f"cluster {shown(address)}: give tcp://HOST:PORT or tls://HOST:PORT as text")
    found = _ADDRESS.fullmatch(address)
    if found is None or not 0 < int(found[3]) < 65_536:
        told = re.sub(r"://.*@", "://", address)  # a password is nobody's business
        raise SettingError(
            f"cluster {shown(told)}: is no scheduler's address; give tcp://HOST:PORT or tls://HOST:PORT"
        )
    return address


def deadline() -> float:
    """Until when a scheduler must have answered, by `time.monotonic`: 10 s from when the user began to wait.

    In a process that is older than that, it is not the process that is waited for.
    """
    age_s = _process_age_s()
    return time.monotonic() + ANSWER_S - (age_s if age_s < ANSWER_S else 0.0)


def _process_age_s() -> float:
    """How old this process is, where the system tells (Linux, proc(5)); else 0."""
    try:
        stated = Path("/proc/self/stat").read_text("utf-8", "replace").rpartition(")")[2].split()
        begun_s = int(stated[19]) / os.sysconf("SC_CLK_TCK")
        return max(float(Path("/proc/uptime").read_text("ascii").split()[0]) - begun_s, 0.0)
    except (OSError, ValueError, IndexError, AttributeError):
        return 0.0


def require_listener(address: str, until: float) -> None:
    """Raise ClusterError at once where nobody listens at an address; whatever else is wrong shows later.

    This needs none of Dask, whose loading may take seconds.
    """
    found = _ADDRESS.fullmatch(address)
    assert found is not None
    begin = f"cluster {address}: "
    try:
        patience_s = max(until - time.monotonic(), _SHORTEST_S)
        socket.create_connection((found[2].strip("[]"), int(found[3])), patience_s).close()
    except ConnectionRefusedError:
        raise ClusterError(
            f"{begin}no scheduler is there: the connection is refused; check the address, or start one with "
            "`dask scheduler`"
        ) from None
    except socket.gaierror:
        raise ClusterError(f"{begin}nobody knows that host; check the address") from None
    except TimeoutError:
        raise _unreachable(address, None) from None
    except OSError as problem:
        said = printable(problem.strerror or str(problem))
        raise ClusterError(f"{begin}can't be connected to ({said}); check the address") from None


def exposed(address: str) -> str | None:
    """What to tell about an address that leaves this machine unprotected; None where it does not."""
    found = _ADDRESS.fullmatch(address)
    if found is None or found[1] == "tls":
        return None
    host = found[2].strip("[]")
    with contextlib.suppress(ValueError):
        if ipaddress.ip_address(host).is_loopback:
            return None
    if host == "localhost":
        return None
    return (
        f"{address}: nothing protects this connection, and whoever reaches that port runs code there; "
        "use tls:// beyond this machine"
    )


def connected(address: str, until: float | None = None) -> "Client":
    """A client of the scheduler at an address. Raises ClusterError where there is none by `deadline`."""
    from distributed import Client

    left_s = CONNECT_S if until is None else until - time.monotonic()
    patience_s = min(CONNECT_S, max(left_s, _SHORTEST_S))
    client = Client.__new__(Client)  # so that one whose making fails can be let go too
    found: list[Client] = []
    problems: list[Exception] = []

    def connect() -> None:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            try:
                Client.__init__(client, address, timeout=patience_s, set_as_default=False, name="glidesmith")
                found.append(client)
            except Exception as problem:
                problems.append(problem.with_traceback(None))

    if not within(patience_s + _GRACE_S, connect) or not found:
        problem = problems[0] if problems else None  # not what closing makes of it
        close(client, _GRACE_S)
        raise _unreachable(address, problem)
    return client


def _unreachable(address: str, problem: Exception | None) -> ClusterError:
    begin = f"cluster {address}: "
    if problem is None or (isinstance(problem, OSError) and "SSL" not in str(problem).upper()):
        return ClusterError(
            f"{begin}no scheduler answers there in time; check the address, or start one with "
            "`dask scheduler`"
        )
    if isinstance(problem, MemoryError):  # what came was taken for the length of a message
        return ClusterError(f"{begin}what answers there is no Dask scheduler; check host and port")
    said = printable(shortened(" ".join(str(problem).split()), LONGEST_SAID))
    hint = (
        "; for tls:// Dask must know the certificates (distributed.comm.tls)" if address[:3] == "tls" else ""
    )
    return ClusterError(f"{begin}can't be connected to ({type(problem).__name__}: {said}){hint}")


def within(seconds: float, act: Callable[[], None]) -> bool:
    """Do something that may never end, in a thread of its own; whether it ended in time."""
    thread = threading.Thread(target=_hushed, args=(act,), daemon=True)
    thread.start()
    thread.join(seconds)
    return not thread.is_alive()


def _hushed(act: Callable[[], None]) -> None:
    with contextlib.suppress(Exception):
        act()


def close(client: "Client", seconds: float = CLOSE_S) -> None:
    """Let a client go, whatever has become of its scheduler, and whether or not it came to be.

    One that can't say good-bye in time must not try again when Python ends, for twice its own timeout.
    """
    within(seconds, lambda: client.close(timeout=seconds))
    client.status = "closed"


@contextlib.contextmanager
def manners() -> Iterator[None]:
    """Keep Dask's own log quiet, since a user is told in one line, and its patience short."""
    try:
        import dask
        import distributed  # noqa: F401 - makes its loggers
    except ImportError:
        raise SettingError(
            "cluster: needs Dask; install it with `pip install 'glidesmith[cluster]'`"
        ) from None
    names = [name for name in logging.root.manager.loggerDict if name.split(".")[0] in _LOUD]
    loggers = [logging.getLogger(name) for name in {*names, *_LOUD}]
    kept = [(logger, logger.level) for logger in loggers]
    for logger in loggers:
        logger.setLevel(logging.CRITICAL + 1)
    try:
        with dask.config.set({"distributed.comm.timeouts.connect": f"{CONNECT_S}s"}):
            yield
    finally:
        for logger, level in kept:
            logger.setLevel(level)
