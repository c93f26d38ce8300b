"""Where compiled code is kept: a folder of the user's own, or none."""

import os
import subprocess
import sys
import threading
from pathlib import Path

import pytest
from numba import config

from glidesmith import compiled
from glidesmith.compiled import kernel

CODE = "from glidesmith import compiled; print(compiled.CACHE_FOLDER)"


def cache_folder(cwd, **environment):
    """Where a process with this environment keeps compiled code."""
    kept = {k: v for k, v in os.environ.items() if k not in ("GLIDESMITH_CACHE", "XDG_CACHE_HOME", "HOME")}
    done = subprocess.run(
        [sys.executable, "-c", CODE],
        cwd=cwd,
        env={**kept, **environment},
        capture_output=True,
        text=True,
        check=True,
    )
    return done.stdout.strip()


def test_the_user_s_cache_folder_by_the_xdg_specification(tmp_path):
    assert cache_folder(tmp_path, HOME=str(tmp_path)).startswith(str(tmp_path / ".cache" / "glidesmith"))
    elsewhere = tmp_path / "elsewhere"
    assert cache_folder(tmp_path, HOME=str(tmp_path), XDG_CACHE_HOME=str(elsewhere)).startswith(
        str(elsewhere)
    )


@pytest.mark.parametrize("value", ["", "relative/folder"])
def test_an_empty_or_relative_cache_folder_is_ignored_as_the_specification_says(tmp_path, value):
    found = cache_folder(tmp_path, HOME=str(tmp_path), XDG_CACHE_HOME=value)
    assert found.startswith(str(tmp_path / ".cache" / "glidesmith"))
    assert not (tmp_path / "relative").exists()
    assert not (tmp_path / "glidesmith").exists()


@pytest.mark.parametrize("home", ["", "relative", "/nonexistent/home\0"[:-1]])
def test_without_a_usable_home_nothing_is_kept(tmp_path, home):
    if home.startswith("/") and os.access("/", os.W_OK):
        home = str(tmp_path / "file" / "home")
        (tmp_path / "file").write_text("not a folder")
    assert cache_folder(tmp_path, HOME=home) == "None"
    assert [p.name for p in tmp_path.iterdir()] in ([], ["file"])


def test_a_tilde_is_the_home_and_a_named_folder_is_made(tmp_path):
    found = cache_folder(tmp_path, HOME=str(tmp_path), GLIDESMITH_CACHE="~/kept")
    assert found.startswith(str(tmp_path / "kept"))
    assert Path(found).stat().st_mode & 0o077 == 0


def test_a_folder_that_others_can_write_to_is_not_trusted(tmp_path):
    found = Path(cache_folder(tmp_path, GLIDESMITH_CACHE=str(tmp_path), HOME=str(tmp_path)))
    found.chmod(0o777)
    assert cache_folder(tmp_path, GLIDESMITH_CACHE=str(tmp_path), HOME=str(tmp_path)) == "None"


def test_a_kernel_that_would_allocate_does_not_compile():
    """The promise that the audio thread relies on."""
    import numpy as np
    from numba.core.errors import NumbaError

    @kernel
    def allocates(n):
        return np.zeros(n).sum()

    with pytest.raises(NumbaError):
        allocates(3)


def test_one_thread_at_a_time_chooses_where_compiled_code_is_kept():
    """numba reads where its cache is from a setting of the whole process; two threads must not mix it up."""
    inside = threading.Event()

    def enter():
        with compiled._cached_in_own_folder():
            inside.set()

    before = config.CACHE_DIR
    other = threading.Thread(target=enter)
    with compiled._cached_in_own_folder():
        other.start()
        assert not inside.wait(0.2)
    other.join()
    assert inside.is_set()
    assert before == config.CACHE_DIR
