"""A Dask scheduler as a batch meets it: its address, the connection to it, and how it is kept quiet.

Whoever reaches a scheduler's port runs code on its workers: keep it on this machine, or use TLS.
"""

import contextlib
import ipaddress
import logging
import re
import threading
import warnings
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING

from glidesmith.errors import ClusterError, SettingError
from glidesmith.text import printable, shortened, shown

if TYPE_CHECKING:
    from distributed import Client

CONNECT_S = 8.0
"""A scheduler that hasn't answered by then is not there."""

CLOSE_S = 2.0
LONGEST_SAID = 160
_LOUD = ("distributed", "tornado", "asyncio")
_ADDRESS = re.compile(r"(tcp|tls)://(\[[0-9A-Fa-f:.]+\]|[A-Za-z0-9_.-]+):([0-9]{1,5})")


def checked_address(address: str) -> str:
    """A scheduler's address as Dask wants it. Raises SettingError where it is none."""
    found = _ADDRESS.fullmatch(address)
    if found is None or not 0 < int(found[3]) < 65_536:
        raise SettingError(
            f"cluster {shown(address)}: is no scheduler's address; give tcp://HOST:PORT or tls://HOST:PORT"
        )
    return address


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


def connected(address: str) -> "Client":
    """A client of the scheduler at an address. Raises ClusterError within 10 s where there is none."""
    from distributed import Client

    found: list[Client] = []
    problems: list[Exception] = []

    def connect() -> None:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            try:
                found.append(Client(address, timeout=CONNECT_S, set_as_default=False, name="glidesmith"))
            except Exception as problem:
                problems.append(problem)

    if not within(CONNECT_S + 0.5, connect) or not found:
        raise _unreachable(address, problems[0] if problems else None)
    return found[0]


def _unreachable(address: str, problem: Exception | None) -> ClusterError:
    begin = f"cluster {address}: "
    if problem is None or (isinstance(problem, OSError) and "SSL" not in str(problem).upper()):
        return ClusterError(
            f"{begin}no scheduler answers there within {CONNECT_S:g} s; check the address, or start one with "
            "`dask scheduler`"
        )
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


def close(client: "Client") -> None:
    """Let a client go, whatever has become of its scheduler."""
    within(CLOSE_S, lambda: client.close(timeout=CLOSE_S))


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
