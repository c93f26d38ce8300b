"""How the engine's kernels are compiled, said once.

No kernel uses fastmath: it would let the compiler reorder sums, and then the same settings would not give the
same samples for every block size. ``error_model="numpy"`` keeps Python exceptions out of compiled code, and
``nogil`` lets kernels run beside Python. The compiler's memory runtime is off (``_nrt=False``): a kernel that
would allocate does not compile, and passing arrays about touches no reference counts. Compiled code is kept
between runs in a folder that belongs to the user alone (the files are pickles) and that is named after the
kernels' sources, since numba notices changes only in the file that a function stands in. Where no such folder
can be had, kernels are compiled anew in every process.
"""

import hashlib
import os
import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, TypeVar

import numba
from numba import config
from numba.core.compiler import CompilerBase, DefaultPassBuilder

Function = TypeVar("Function", bound=Callable[..., Any])


def _cache_root() -> Path:
    """Where caches belong on this system; on Linux by the XDG Base Directory Specification.

    That says to ignore a relative XDG_CACHE_HOME; a relative home is no home either.
    """
    named = os.environ.get("GLIDESMITH_CACHE")
    if named:
        return Path(named).expanduser().absolute()
    if sys.platform == "win32":
        root = Path(os.environ.get("LOCALAPPDATA") or Path.home() / "AppData" / "Local")
    elif sys.platform == "darwin":
        root = Path.home() / "Library" / "Caches"
    else:
        root = Path(os.environ.get("XDG_CACHE_HOME", ""))
        if not root.is_absolute():
            root = Path(os.environ.get("HOME", str(Path.home()))) / ".cache"
    if not root.is_absolute():
        raise OSError(f"{root} is no place for a cache: it is relative")
    return root / "glidesmith"


def sources_digest() -> str:
    """A short hash of the kernels' sources and of the compiler's version."""
    digest = hashlib.sha256(numba.__version__.encode())
    for source in sorted(Path(__file__).parent.rglob("*.py")):
        text = source.read_bytes()
        if b"glidesmith.compiled" in text or source.name == "compiled.py":
            digest.update(source.name.encode() + b"\0" + text)
    return digest.hexdigest()[:16]


def _private_folder() -> str | None:
    """The folder for compiled code, made if need be.

    None where it can't be had or others could write to it.
    """
    try:
        folder = _cache_root() / sources_digest()
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        if hasattr(os, "getuid"):
            facts = folder.stat()
            if facts.st_uid != os.getuid() or facts.st_mode & 0o022:
                return None
        if not os.access(folder, os.W_OK | os.X_OK):
            return None
    except (OSError, RuntimeError):
        return None
    return str(folder)


CACHE_FOLDER = _private_folder()


_CHOOSING_FOLDER = threading.RLock()
"""numba reads where its cache is from a setting of the whole process, and threads compile too."""


@contextmanager
def _cached_in_own_folder() -> Iterator[None]:
    """While it lasts, what is compiled is kept in the engine's folder; afterwards where it was before."""
    with _CHOOSING_FOLDER:
        kept = config.CACHE_DIR
        config.CACHE_DIR = CACHE_FOLDER or ""
        try:
            yield
        finally:
            config.CACHE_DIR = kept


def compiles_first() -> bool:
    """Whether the engine is still to be compiled, which a person at a terminal should be told."""
    return CACHE_FOLDER is None or not any(Path(CACHE_FOLDER).rglob("voice.play-*.nbi"))


def _compile(function: Function, **options: Any) -> Function:
    with _cached_in_own_folder():
        return numba.njit(  # type: ignore[no-any-return]
            nogil=True, error_model="numpy", _nrt=False, cache=CACHE_FOLDER is not None, **options
        )(function)


def kernel(function: Function) -> Function:
    """Compile a function of the engine: no GIL, no exceptions, no fastmath, kept between runs."""
    return _compile(function)


def inlined(function: Function) -> Function:
    """As `kernel`, for small scalar functions that are inlined where they are called."""
    return _compile(function, forceinline=True)


class _Disjoint(CompilerBase):  # type: ignore[misc]
    """The default pipeline with the promise that array arguments do not overlap."""

    def define_pipelines(self) -> list[Any]:
        self.state.flags.noalias = True
        return [DefaultPassBuilder.define_nopython_pipeline(self.state)]


def vector_kernel(function: Function) -> Function:
    """As `kernel`, for array passes whose arrays never overlap.

    The promise lets loops use vector registers.
    """
    return _compile(function, pipeline_class=_Disjoint)


def callback_function(signature: Any) -> Callable[[Function], Any]:
    """Compile a function that C calls: as `kernel`, with a C signature; the result has an ``address``."""

    def compiled(function: Function) -> Any:
        with _cached_in_own_folder():
            return numba.cfunc(signature, cache=CACHE_FOLDER is not None, error_model="numpy", _nrt=False)(
                function
            )

    return compiled
