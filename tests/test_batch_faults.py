"""Batches under bad luck, for real: killed, on a full disk, without rights, two at once, damaged books."""

import contextlib
import json
import os
import random
import resource
import signal
import subprocess
import sys
import time
from contextlib import contextmanager
from pathlib import Path

import pytest

from banks import JOURNAL, contents, lay_bank, lay_preset
from commands import ENVIRONMENT, PHRASE, process
from conftest import LONG
from glidesmith import OutputError
from glidesmith.batching import batch
from glidesmith.manifest import Journal
from unprivileged import no_privileges, open_folder

KILLS = 20 if LONG else 6


@contextmanager
def started(*arguments, **options):
    """A batch in a process of its own, in a group that a terminal would interrupt as one."""
    command = [sys.executable, "-m", "glidesmith", "batch", *map(str, arguments)]
    options = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "env": ENVIRONMENT, **options}
    with subprocess.Popen(command, start_new_session=True, **options) as running:
        try:
            yield running
        finally:
            if running.poll() is None:
                os.killpg(running.pid, signal.SIGKILL)


def lay_many(folder, count=24, seconds=4):
    """Enough work that a kill falls into it."""
    bank = lay_bank(folder, *(f"part-{number % 3}/{number:02d}.toml" for number in range(count)))
    notes = ", ".join(f'{{ at = {at}, lasts = 0.9, note = "{note}" }}' for at, note in enumerate("CDEG" * 9))
    (bank / "line.toml").write_text(
        f"tempo_bpm = {60 * 36 / seconds}\nnotes = [{notes}]\n".replace('"C"', '"C3"')
        .replace('"D"', '"D3"').replace('"E"', '"E3"').replace('"G"', '"G3"')
    )  # fmt: skip
    return bank


def wait_for(condition, seconds=60):
    """Until something is so; in a test that takes its time, not one that is decided by it."""
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "it never came"
        time.sleep(0.005)


def test_killed_at_random_moments_it_ends_as_if_nothing_had_happened(tmp_path):
    bank = lay_many(tmp_path / "bank")
    calm, wild = tmp_path / "calm", tmp_path / "wild"
    batch(bank, calm, jobs=1)
    begin = time.monotonic()
    batch(bank, calm, jobs=1, force=True)
    lasts = time.monotonic() - begin
    generator = random.Random(20)
    midway = 0
    for kill in range(KILLS):
        if kill == KILLS // 2:
            for path in list(wild.rglob("*.wav"))[::2]:
                path.unlink()
        in_the_middle = kill % 2 == 1
        with started(bank, "-o", wild, "--jobs", 1 + kill % 3, *["--force"] * in_the_middle) as running:
            if in_the_middle:
                begun = journal_lines(wild)
                wait_for(lambda begun=begun: journal_lines(wild) > begun or running.poll() is not None)
                time.sleep(generator.uniform(0.0, lasts))
            else:
                time.sleep(generator.uniform(0.0, 1.0 + lasts))
            (os.killpg if kill % 4 < 2 else os.kill)(running.pid, signal.SIGKILL)
            running.communicate()
        midway += b'"begun"' in (wild / JOURNAL).read_bytes() if wild.exists() else 0
    assert midway >= KILLS // 4, "the kills came too early or too late to show anything"
    wait_for(lambda: not is_held(wild))
    done = batch(bank, wild, jobs=2)
    assert done.all_well
    assert contents(wild) == contents(calm)


def journal_lines(folder):
    try:
        return (folder / JOURNAL).read_bytes().count(b"\n")
    except FileNotFoundError:
        return 0


def is_held(folder):
    """Whether a batch has the folder locked."""
    journal = Journal(folder)
    folder.mkdir(exist_ok=True)
    try:
        journal.hold()
    except OutputError:
        return True
    journal.close()
    return False


def test_a_killed_master_leaves_no_job_behind_that_goes_on_writing(tmp_path):
    bank, takes = lay_many(tmp_path / "bank", 60), tmp_path / "takes"
    with started(bank, "-o", takes, "--jobs", 2) as running:
        wait_for(lambda: len(list(takes.rglob("*.wav"))) >= 2)
        running.kill()
        running.communicate()  # ends when no process has its streams any more
    before = contents(takes)
    time.sleep(0.3)
    assert contents(takes) == before
    assert 2 <= len(before) < 60


def test_part_files_of_a_killed_run_go_even_where_their_presets_are_gone(tmp_path):
    bank, takes = lay_bank(tmp_path / "bank"), tmp_path / "takes"
    batch(bank, takes, jobs=1)
    journal = Journal(takes)
    journal.hold()
    journal.begin("lead.wav")
    journal.begin("basses/gone.wav")
    journal.close()
    part = (takes / "lead.wav").read_bytes()[:300]
    for name in ("lead.wav.part", "basses/gone.wav.part"):
        (takes / name).write_bytes(part)
    (takes / "mine.wav.part").write_bytes(part)
    batch(bank, takes, jobs=1)
    assert [path.name for path in takes.rglob("*.part")] == ["mine.wav.part"]


def test_an_interrupt_says_what_is_done_and_the_next_run_goes_on(tmp_path):
    bank, takes = lay_many(tmp_path / "bank", 60), tmp_path / "takes"
    with started(bank, "-o", takes, "--jobs", 2) as running:
        wait_for(lambda: (takes / JOURNAL).exists() and (takes / JOURNAL).read_bytes().count(b'"made"') >= 2)
        os.killpg(running.pid, signal.SIGINT)
        said = running.communicate(timeout=30)[1].decode()
    assert running.returncode == 130
    assert "of 60 items are done; run the same command again to go on" in said
    assert "Traceback" not in said
    assert not list(takes.rglob("*.part"))
    there = {path.name: path.stat().st_mtime_ns for path in takes.rglob("*.wav")}
    assert len(there) < 60
    done = batch(bank, takes, jobs=2)
    assert len(done.made) + done.current == 60
    kept = {path.name for path in takes.rglob("*.wav") if there.get(path.name) == path.stat().st_mtime_ns}
    assert len(kept) == done.current >= 2


def test_two_at_once_the_second_says_so_and_stops(tmp_path):
    bank, takes = lay_many(tmp_path / "bank", 40), tmp_path / "takes"
    with started(bank, "-o", takes, "--jobs", 1) as running:
        wait_for(lambda: list(takes.rglob("*.wav")))
        second = process("batch", bank, "-o", takes)
        assert running.poll() is None
        assert running.communicate()[0]
    assert second.returncode == 2
    (line,) = second.stderr.decode().splitlines()
    assert "another batch is writing to this folder" in line
    assert running.returncode == 0
    assert len(contents(takes)) == 42


def test_a_job_that_is_killed_costs_its_item_alone(tmp_path):
    bank, takes = lay_many(tmp_path / "bank", 40), tmp_path / "takes"
    with started(bank, "-o", takes, "--jobs", 2) as running:
        wait_for(lambda: list(takes.rglob("*.wav")))
        victims = jobs_of(running.pid)
        os.kill(victims[-1], signal.SIGKILL)
        out, said = running.communicate(timeout=60)
    assert running.returncode == 1
    assert b"39 rendered" in out
    assert b"ended before it was done" in said
    assert batch(bank, takes, jobs=1).all_well
    assert not list(takes.rglob("*.part"))


def test_an_output_of_which_no_record_came_is_the_batchs_own_all_the_same(tmp_path):
    """A job that is killed between giving a file its name and telling of it."""
    from glidesmith.production import Failure, run_here

    bank, takes = lay_bank(tmp_path / "bank"), tmp_path / "takes"

    def run(orders, place):
        for number, outcome in run_here(orders, place):
            yield number, Failure(("it ended",)) if outcome["item"] == "lead.wav" else outcome

    assert len(batch(bank, takes, run=run).failed) == 1
    assert (takes / "lead.wav").exists()
    done = batch(bank, takes, jobs=1)
    assert (done.made, done.all_well) == (["lead.wav"], True)
    assert batch(bank, takes, jobs=1).current == 3


def jobs_of(parent):
    """The processes below another one, the youngest last."""
    children = {}
    for entry in Path("/proc").glob("[0-9]*"):
        with contextlib.suppress(OSError):
            above = int((entry / "stat").read_text().rpartition(")")[2].split()[1])
            children.setdefault(above, []).append(int(entry.name))
    found = children.get(parent, [])
    return [*found, *(job for child in found for job in children.get(child, []))]


# Disks


def test_files_that_are_too_large_for_the_system_fail_one_by_one(tmp_path):
    """A limit on the size of files is hit as a full disk is, in the middle of writing."""
    bank, takes = lay_bank(tmp_path / "bank"), tmp_path / "takes"
    lay_preset(bank, "long/lead.toml")
    (bank / "tone.toml").write_text('notes = [{ at = 0, lasts = 30, note = "C3" }]\n')
    text = (bank / "long/lead.toml").read_text().replace("../line.toml", "../tone.toml")
    (bank / "long/lead.toml").write_text(text)

    def limit():
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (300_000, 300_000))

    with started(bank, "-o", takes, "--jobs", 1, preexec_fn=limit) as running:
        out, said = running.communicate(timeout=60)
    assert running.returncode == 1
    assert b"3 rendered, 0 current, 1 failed" in out
    assert b"larger than the system allows" in said
    assert not list(takes.rglob("*.part"))
    assert batch(bank, takes, jobs=1).made == ["long/lead.wav"]


@pytest.fixture
def small_disk(tmp_path):
    """A file system of 3 MB; only root can have one."""
    place = tmp_path / "disk"
    place.mkdir()
    options = ["-t", "tmpfs", "-o", "size=3m", "tmpfs", str(place)]
    try:
        mounted = subprocess.run(["mount", *options], capture_output=True).returncode == 0
    except FileNotFoundError:
        mounted = False
    if not mounted:
        pytest.skip("mounting a small file system needs root and mount (Debian: mount)")
    yield place
    subprocess.run(["umount", "-l", str(place)], check=True)


@pytest.mark.parametrize("jobs", [1, 2])
def test_a_full_disk_stops_the_run_and_what_is_done_stays(tmp_path, small_disk, jobs):
    bank, takes = lay_many(tmp_path / "bank", 12, seconds=4), small_disk / "takes"
    with started(bank, "-o", takes, "--jobs", jobs) as running:
        said = running.communicate(timeout=60)[1]
    assert running.returncode == 1
    assert b"the disk is full" in said
    assert b"what is done stays" in said
    assert b"Traceback" not in said
    assert not list(takes.rglob("*.part"))
    left = {name: digest for name, digest in contents(takes).items() if name.endswith(".wav")}
    assert left
    subprocess.run(["mount", "-o", "remount,size=60m", str(small_disk)], check=True)
    done = batch(bank, takes, jobs=1)
    assert done.all_well
    batch(bank, tmp_path / "calm", jobs=1)
    assert contents(takes) == contents(tmp_path / "calm")
    assert left.items() <= contents(takes).items()


def test_an_output_that_may_not_be_written_is_refused_in_a_line(tmp_path):
    with open_folder() as folder:
        bank = lay_bank(folder / "bank")
        takes = folder / "takes"
        takes.mkdir(mode=0o555)
        with no_privileges(), pytest.raises(OutputError, match="you may not write there"):
            batch(bank, takes, jobs=1)
        with no_privileges(), pytest.raises(OutputError, match="you may not write there"):
            batch(bank, takes / "below", jobs=1)


def test_a_folder_inside_that_may_not_be_written_fails_its_items_alone(tmp_path):
    with open_folder() as folder:
        bank = lay_bank(folder / "bank")
        takes = folder / "takes"
        (takes / "basses").mkdir(parents=True, mode=0o555)
        takes.chmod(0o777)
        batch(bank, folder / "before", jobs=1)  # so that nothing has to be compiled by an ordinary user
        with no_privileges():
            done = batch(bank, takes, jobs=1)
        assert done.made == ["lead.wav"]
        assert [each.item for each in done.failed] == ["basses/deep.wav", "basses/round.wav"]
        assert "you may not write there" in done.failed[0].lines[0]


def test_the_output_folder_deleted_meanwhile(tmp_path):
    import shutil

    bank, takes = lay_many(tmp_path / "bank", 60), tmp_path / "takes"
    with started(bank, "-o", takes, "--jobs", 2) as running:
        wait_for(lambda: len(list(takes.rglob("*.wav"))) >= 2)
        takes.rename(tmp_path / "away")
        said = running.communicate(timeout=60)[1]
    assert running.returncode == 2
    assert b"was removed or replaced while the batch ran" in said
    assert b"Traceback" not in said
    shutil.rmtree(takes, ignore_errors=True)
    assert len(batch(bank, takes, jobs=2).made) == 60


# Books


def test_a_manifest_cut_in_the_middle_of_a_line_is_made_whole(tmp_path):
    bank, takes = lay_bank(tmp_path / "bank"), tmp_path / "takes"
    batch(bank, takes, jobs=1)
    before, size = contents(takes), (takes / "manifest.jsonl").stat().st_size
    os.truncate(takes / "manifest.jsonl", size - 100)
    done = batch(bank, takes, jobs=1)
    assert done.made == ["lead.wav"]
    assert "line 4 is damaged" in done.warnings[0]
    assert contents(takes) == before


def test_a_manifest_that_is_gone_or_empty_is_made_anew(tmp_path):
    bank, takes = lay_bank(tmp_path / "bank"), tmp_path / "takes"
    batch(bank, takes, jobs=1)
    before = contents(takes)
    (takes / "manifest.jsonl").unlink()
    assert len(batch(bank, takes, jobs=1).made) == 3
    assert contents(takes) == before


def test_a_manifest_of_a_newer_version_is_left_alone(tmp_path):
    bank, takes = lay_bank(tmp_path / "bank"), tmp_path / "takes"
    batch(bank, takes, jobs=1)
    path = takes / "manifest.jsonl"
    path.write_text(path.read_text().replace('"version":1', '"version":2', 1))
    before = contents(takes)
    with pytest.raises(OutputError, match="is of version 2, and this Glidesmith knows 1"):
        batch(bank, takes, jobs=1)
    assert contents(takes) == before


@pytest.mark.parametrize("seed", range(40 if LONG else 8))
def test_damaged_books_never_lead_astray(tmp_path, seed):
    """Bytes of manifest and journal are changed at random: a run ends well, or in one line."""
    bank, takes = lay_bank(tmp_path / "bank"), tmp_path / "takes"
    batch(bank, takes, jobs=1)
    before = contents(takes)
    generator = random.Random(seed)
    for name in ("manifest.jsonl", JOURNAL):
        data = bytearray((takes / name).read_bytes())
        for _ in range(generator.randrange(1, 30)):
            data[generator.randrange(len(data))] = generator.randrange(256)
        (takes / name).write_bytes(data)
    try:
        done = batch(bank, takes, jobs=1, verify=True)
    except OutputError:
        return
    kept = {name: digest for name, digest in contents(takes).items() if name.endswith(".wav")}
    assert kept.items() <= before.items()
    for each in done.failed:
        assert "no manifest lists it" in each.lines[0]


def test_a_preset_that_changes_while_it_is_read_fails_in_a_line(tmp_path, monkeypatch):
    bank, takes = lay_bank(tmp_path / "bank"), tmp_path / "takes"
    batch(bank, takes, jobs=1)
    time.sleep(0.15)  # so that the stamps are trusted
    batch(bank, takes, jobs=1)
    from glidesmith.currency import Inputs

    real = Inputs.patch

    def patch(self, found, facts):
        found.path.write_text(PHRASE)
        return real(self, found, facts)

    monkeypatch.setattr(Inputs, "patch", patch)
    done = batch(bank, takes, jobs=1, include=["lead.toml"], force=True)
    assert "changed while it was read" in done.failed[0].lines[0]


def test_records_in_the_journal_of_a_killed_run_are_used(tmp_path):
    bank, takes = lay_bank(tmp_path / "bank"), tmp_path / "takes"
    from glidesmith.production import run_here

    class Cut(BaseException):
        pass

    def run(orders, place):
        for number, outcome in run_here(orders, place):
            yield number, outcome
            if number == 1:
                raise Cut

    with pytest.raises(Cut):
        batch(bank, takes, run=run)
    assert not (takes / "manifest.jsonl").exists()
    lines = [json.loads(line) for line in (takes / JOURNAL).read_bytes().splitlines()]
    assert sum("made" in line for line in lines) == 2
    done = batch(bank, takes, jobs=1)
    assert (done.made, done.current) == (["lead.wav"], 2)
