"""File permissions bind everyone but root; tests about them that run as root step down while they write."""

import contextlib
import importlib
import os
import pkgutil
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

import glidesmith

_NOBODY = 65534
_NEEDED_LATE = ("soundfile", "numba", "tomlkit", "mido", "concurrent.futures.thread", "multiprocessing")


@contextlib.contextmanager
def open_folder() -> Iterator[Path]:
    """A temporary folder that any user can reach and write to."""
    folder = Path(tempfile.mkdtemp())
    folder.chmod(0o777)
    try:
        yield folder
    finally:
        folder.chmod(0o700)
        shutil.rmtree(folder)


@contextlib.contextmanager
def no_privileges() -> Iterator[None]:
    """What runs inside has an ordinary user's rights."""
    if os.getuid() != 0:
        yield
        return
    _import_all()
    os.setresuid(_NOBODY, _NOBODY, 0)
    try:
        yield
    finally:
        os.setresuid(0, 0, 0)


def _import_all() -> None:
    """Import what is imported where it is needed: an ordinary user may not be able to read root's Python."""
    for module in pkgutil.iter_modules(glidesmith.__path__):
        if not module.name.startswith("__"):
            importlib.import_module(f"glidesmith.{module.name}")
    for name in _NEEDED_LATE:
        importlib.import_module(name)
