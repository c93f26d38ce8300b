"""File permissions bind everyone but root; tests about them that run as root step down while they write."""

import contextlib
import os
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

_NOBODY = 65534


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
    os.setresuid(_NOBODY, _NOBODY, 0)
    try:
        yield
    finally:
        os.setresuid(0, 0, 0)
