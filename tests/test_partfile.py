"""Files appear whole or not at all, and what can't be written is told in a line."""

import errno
import gc
import io
import json
import os
import resource
import subprocess
import tempfile
from pathlib import Path

import pytest

from glidesmith.errors import OutputError
from glidesmith.page import write_page
from glidesmith.partfile import PartFile, output_error
from glidesmith.plot import plot
from glidesmith.setfolder import KIND
from glidesmith.trace import TraceWriter
from glidesmith.wav import WavSink
from making import make_phrase, make_preset
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


def _sound(path):
    WavSink(path, 48_000, title="Under test").close()


def _trace(path):
    TraceWriter(path, 48_000).close()


def _picture(path):
    plot(make_preset(), make_phrase(("0", "0.5", 50)), path)


def _page(path):
    """As compare begins it; the facts of a set come first."""
    facts = {"kind": KIND, "title": "Under test", "candidates": []}
    write_page(path, facts, [])


def _facts(path):
    path.write_text(json.dumps({"kind": KIND}, indent=1))


@pytest.mark.parametrize(
    ("write", "name"),
    [
        (Path.touch, "out.bin"),
        (_sound, "out.wav"),
        (_trace, "out.csv"),
        (_picture, "out.svg"),
        (_picture, "out.png"),
        (_page, "index.html"),
        (_facts, "comparison.json"),
    ],
)
def test_what_a_killed_writer_left_behind_is_no_hindrance(tmp_path, write, name):
    """Whole here, and cut where a buffer ends; the beginning is what counts."""
    target = tmp_path / name
    part = tmp_path / f"{name}.part"
    write(target)
    for length in {target.stat().st_size, min(target.stat().st_size, 65_536)}:
        part.write_bytes(target.read_bytes()[:length])
        with PartFile(target) as file:
            file.write(target.read_bytes())
        assert not part.exists()


@pytest.mark.parametrize(
    "content",
    [
        b"my own notes about this take, made with Glidesmith",
        b"RIFF\x24\0\0\0WAVEfmt of another program",
        b"{}",
        b"\0",
    ],
)
def test_a_part_file_that_is_not_ours_is_refused_by_its_name_and_stays(tmp_path, content):
    part = tmp_path / "out.wav.part"
    part.write_bytes(content)
    with pytest.raises(OutputError, match=r"out\.wav\.part .*in the way.*; move") as error:
        PartFile(tmp_path / "out.wav")
    refused(error)
    assert part.read_bytes() == content
    assert list(tmp_path.iterdir()) == [part]


@pytest.mark.parametrize(
    "make",
    [
        lambda part, victim: part.mkdir(),
        lambda part, victim: part.symlink_to(victim),
        lambda part, victim: part.symlink_to("missing"),
        lambda part, victim: os.link(victim, part),
        lambda part, victim: os.mkfifo(part),
    ],
    ids=["folder", "symbolic link", "dangling link", "hard link", "pipe"],
)
def test_what_else_may_stand_under_the_part_files_name_is_refused_and_stays(tmp_path, make):
    """The other name of a hard link is a victim whose content looks like a leftover's."""
    victim, part = tmp_path / "victim", tmp_path / "out.wav.part"
    _sound(victim)
    content = victim.read_bytes()
    make(part, victim)
    before = part.lstat()
    with pytest.raises(OutputError, match=r"out\.wav\.part .*in the way") as error:
        PartFile(tmp_path / "out.wav")
    refused(error)
    assert (part.lstat().st_ino, part.lstat().st_mode) == (before.st_ino, before.st_mode)
    assert victim.read_bytes() == content


def test_anothers_file_is_never_taken_for_a_leftover():
    with open_folder() as folder:
        (folder / "out.wav.part").touch()
        (folder / "out.wav.part").chmod(0o666)
        folder.chmod(0o777)
        with no_privileges(), pytest.raises(OutputError, match="in the way") as error:
            PartFile(folder / "out.wav")
        refused(error)


def test_a_part_file_that_was_taken_away_is_told_and_what_took_its_place_stays(tmp_path):
    target, part = tmp_path / "out.bin", tmp_path / "out.bin.part"
    file = PartFile(target)
    file.write(b"new")
    part.unlink()
    part.write_bytes(b"another's")
    with pytest.raises(OutputError, match="took its part file away") as error:
        file.close()
    refused(error)
    assert part.read_bytes() == b"another's"
    assert not target.exists()


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
