"""Files appear whole or not at all, and what can't be written is told in a line."""

import errno
import gc
import io
import os
import resource
import subprocess
import tempfile
from pathlib import Path

import pytest

from glidesmith.errors import OutputError
from glidesmith.partfile import PartFile, output_error
from unprivileged import no_privileges, open_folder


def refused(error) -> str:
    """The one line that the error consists of."""
    assert len(error.value.lines) == 1
    line = str(error.value)
    assert line.isprintable()
    return line


def test_the_name_appears_at_the_end_and_the_part_file_is_gone(tmp_path):
    target = tmp_path / "out.bin"
    file = PartFile(target)
    file.write(b"abc")
    file.write(memoryview(b"def"))
    assert not target.exists()
    assert (tmp_path / "out.bin.part").exists()
    file.close()
    assert target.read_bytes() == b"abcdef"
    assert list(tmp_path.iterdir()) == [target]


def test_what_was_there_stays_until_the_new_file_is_whole(tmp_path):
    target = tmp_path / "out.bin"
    target.write_bytes(b"old")
    with PartFile(target) as file:
        file.write(b"new and longer")
        assert target.read_bytes() == b"old"
    assert target.read_bytes() == b"new and longer"


def test_an_error_leaves_what_was_there(tmp_path):
    target = tmp_path / "out.bin"
    target.write_bytes(b"old")

    def fail_on_the_way():
        with PartFile(target) as file:
            file.write(b"new")
            raise RuntimeError("of the test")

    with pytest.raises(RuntimeError, match="of the test"):
        fail_on_the_way()
    assert target.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [target]


def test_abandoning_after_the_end_changes_nothing(tmp_path):
    file = PartFile(tmp_path / "out.bin")
    file.close()
    file.abandon()
    assert (tmp_path / "out.bin").exists()


def test_a_writer_that_is_dropped_leaves_nothing(tmp_path):
    file = PartFile(tmp_path / "out.bin")
    file.write(b"abc")
    del file
    gc.collect()
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("problem", [KeyboardInterrupt(), OSError(errno.EIO, "Input/output error")])
def test_what_happens_while_opening_leaves_nothing(tmp_path, monkeypatch, problem):
    def fail(*_):
        raise problem

    target = tmp_path / "out.bin"
    target.write_bytes(b"old")
    monkeypatch.setattr(os, "fchmod", fail)
    with pytest.raises((KeyboardInterrupt, OutputError)):
        PartFile(target)
    assert list(tmp_path.iterdir()) == [target]
    assert target.read_bytes() == b"old"


def test_bytes_can_be_written_again(tmp_path):
    with PartFile(tmp_path / "out.bin") as file:
        file.write(b"0123456789")
        file.rewrite(2, b"ab")
        file.write(b"!")
        assert file.whole
    assert (tmp_path / "out.bin").read_bytes() == b"01ab456789!"


def test_what_a_killed_writer_left_behind_is_no_hindrance(tmp_path):
    (tmp_path / "out.bin.part").write_bytes(b"left behind, and longer than what is written")
    with PartFile(tmp_path / "out.bin") as file:
        file.write(b"new")
    assert (tmp_path / "out.bin").read_bytes() == b"new"


def test_a_second_writer_of_one_target_is_refused_and_the_first_goes_on(tmp_path):
    target = tmp_path / "out.bin"
    with PartFile(target) as first:
        first.write(b"first")
        with pytest.raises(OutputError) as error:
            PartFile(target)
        assert "another process" in refused(error)
    assert target.read_bytes() == b"first"
    with PartFile(target) as second:
        second.write(b"second")
    assert target.read_bytes() == b"second"


def test_a_check_that_fails_keeps_the_old_file(tmp_path):
    target = tmp_path / "out.bin"
    target.write_bytes(b"old")
    seen = []

    def check(file):
        seen.append(file.read())
        raise OutputError("the check failed")

    file = PartFile(target)
    file.write(b"new")
    with pytest.raises(OutputError, match="the check failed"):
        file.close(check)
    assert seen == [b"new"]
    assert target.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [target]


def test_bytes_that_did_not_reach_the_disk_are_noticed(tmp_path):
    file = PartFile(tmp_path / "out.bin")
    file.write(b"abcdef")
    os.truncate(tmp_path / "out.bin.part", 0)
    file._file.flush()
    os.truncate(tmp_path / "out.bin.part", 2)
    with pytest.raises(OutputError, match="2 bytes of 6") as error:
        file.close()
    refused(error)
    assert list(tmp_path.iterdir()) == []


def test_a_symbolic_link_stays_one(tmp_path):
    real = tmp_path / "real.bin"
    real.write_bytes(b"old")
    link = tmp_path / "link.bin"
    link.symlink_to("real.bin")
    with PartFile(link) as file:
        file.write(b"new")
    assert link.is_symlink()
    assert real.read_bytes() == b"new"


def test_permissions_are_kept_and_a_new_file_gets_the_usual_ones(tmp_path):
    kept = tmp_path / "kept.bin"
    kept.write_bytes(b"old")
    kept.chmod(0o640)
    usual = tmp_path / "usual.bin"
    usual.touch()
    for path in (kept, tmp_path / "new.bin"):
        with PartFile(path) as file:
            file.write(b"new")
    assert kept.stat().st_mode & 0o777 == 0o640
    assert (tmp_path / "new.bin").stat().st_mode == usual.stat().st_mode


def test_a_stream_gets_the_bytes_as_they_come_and_stays_open():
    stream = io.BytesIO()
    with PartFile(stream, "the stream") as file:
        file.write(b"abc")
        assert stream.getvalue() == b"abc"
        assert not file.whole
    assert not stream.closed


def test_a_device_is_written_to_and_not_replaced():
    before = Path(os.devnull).stat()
    with PartFile(Path(os.devnull)) as file:
        file.write(b"abc")
        assert not file.whole
    after = Path(os.devnull).stat()
    assert (after.st_ino, after.st_mode) == (before.st_ino, before.st_mode)
    assert not Path(f"{os.devnull}.part").exists()


def test_a_pipe_whose_reader_is_gone_is_told():
    reader, writer = os.pipe()
    os.close(reader)
    with os.fdopen(writer, "wb", buffering=0) as stream:
        file = PartFile(stream, "standard output")
        with pytest.raises(OutputError, match="standard output: the reader went away") as error:
            file.write(b"abc")
        refused(error)


@pytest.mark.parametrize(
    ("name", "reason"),
    [
        ("missing/out.bin", "folder does not exist"),
        ("folder", "is a folder"),
        ("file/out.bin", "is a file"),
        ("bad\0name", "not a name"),
        ("n" * 300, "too long"),
        ("loop", "circle|symbolic"),
    ],
)
def test_a_target_that_can_not_be_is_told_in_a_line(tmp_path, name, reason):
    (tmp_path / "folder").mkdir()
    (tmp_path / "file").write_bytes(b"here")
    (tmp_path / "loop").symlink_to("loop")
    before = sorted(tmp_path.rglob("*"))
    with pytest.raises(OutputError, match=reason) as error:
        PartFile(tmp_path / name)
    refused(error)
    assert sorted(tmp_path.rglob("*")) == before


def test_control_characters_in_a_name_are_escaped(tmp_path):
    with pytest.raises(OutputError) as error:
        PartFile(tmp_path / "missing\x1b[31m" / "out.bin")
    assert "\\x1b" in refused(error)


def test_a_folder_without_permission_is_told():
    with open_folder() as folder:
        (folder / "out.bin").write_bytes(b"old")
        (folder / "out.bin").chmod(0o666)
        folder.chmod(0o555)
        with no_privileges(), pytest.raises(OutputError, match="may not write there") as error:
            PartFile(folder / "out.bin")
        refused(error)
        assert (folder / "out.bin").read_bytes() == b"old"


def test_a_read_only_file_is_not_replaced():
    with open_folder() as folder:
        target = folder / "out.bin"
        target.write_bytes(b"old")
        target.chmod(0o444)
        with no_privileges(), pytest.raises(OutputError, match="read-only") as error:
            PartFile(target)
        refused(error)
        assert [p.name for p in folder.iterdir()] == ["out.bin"]


def _write_too_much(target, pieces=64):
    with PartFile(target) as file:
        for _ in range(pieces):
            file.write(b"x" * 65_536)


def test_a_file_beyond_the_size_allowed_is_told_and_the_old_one_stays(tmp_path):
    target = tmp_path / "out.bin"
    target.write_bytes(b"old")
    kept = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (1_000_000, kept[1]))
    try:
        with pytest.raises(OutputError, match="larger than the system allows") as error:
            _write_too_much(target)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, kept)
    refused(error)
    assert target.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [target]


def _small_disk():
    """A disk of a megabyte, where one can be mounted: as root, and outside most containers."""
    folder = Path(tempfile.mkdtemp())
    mount = ["mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", str(folder)]
    try:
        made = os.getuid() == 0 and subprocess.run(mount, capture_output=True).returncode == 0
    except OSError:
        made = False
    if not made:
        folder.rmdir()
        return None
    return folder


def test_a_full_disk_is_told():
    """The kernel's own full device everywhere, and a real small disk where one can be mounted."""
    with pytest.raises(OutputError, match="disk is full") as error:
        _write_too_much(Path("/dev/full"))
    refused(error)
    disk = _small_disk()
    if disk is None:
        return
    try:
        target = disk / "out.bin"
        target.write_bytes(b"old")
        with pytest.raises(OutputError, match="disk is full") as error:
            _write_too_much(target)
        refused(error)
        assert target.read_bytes() == b"old"
        assert list(disk.iterdir()) == [target]
    finally:
        subprocess.run(["umount", str(disk)], check=True)
        disk.rmdir()


def test_an_unforeseen_problem_is_told_in_the_systems_words():
    line = str(output_error("take.wav", OSError(errno.EIO, "Input/output error")))
    assert line == "take.wav: can't be written (Input/output error); check the disk and the path"
