"""Manifest and journal: written whole, read with care, locked while held."""

import hashlib
import json
import os
import subprocess
import sys

import pytest

from glidesmith import OutputError
from glidesmith.manifest import (
    InputFacts,
    Journal,
    OutputFacts,
    checked_record,
    line_of,
    read_manifest,
    write_manifest,
)
from records import make_record as summary_record


def make_record(item="a/lead.wav", **changes):
    """A record such as production gives."""
    facts = {"title": "Lead", "options": {"depth": 24}, "sources": {}, "without_effect": [], "bytes": 10}
    return summary_record(item, **{**facts, "glides": 3, **changes})


@pytest.fixture
def journal(tmp_path):
    journal = Journal(tmp_path)
    journal.hold()
    yield journal
    journal.close()


def made(journal, item, **changes):
    record = make_record(item, **changes)
    journal.made(record, OutputFacts((10, 5), record["file_sha256"], "f" * 64), journal_records(journal))
    return record


def journal_records(journal):
    from glidesmith.manifest import Records

    journal.test_records = getattr(journal, "test_records", None) or Records()
    return journal.test_records


def test_a_manifest_is_read_as_it_was_written_and_sorted(tmp_path, journal):
    records = [made(journal, item) for item in ("b.wav", "a/x.wav", "a.wav")]
    path = tmp_path / "manifest.jsonl"
    write_manifest(path, journal_records(journal))
    assert path.read_bytes().splitlines()[0] == b'{"kind":"glidesmith batch","version":1}'
    found, damaged = read_manifest(path)
    assert damaged == []
    assert list(found) == sorted(records, key=lambda record: record["item"])
    assert found.items() == ["a.wav", "a/x.wav", "b.wav"]
    assert found.line("a.wav").file_sha256 == records[0]["file_sha256"]
    again = tmp_path / "again.jsonl"
    write_manifest(again, found)
    assert again.read_bytes() == path.read_bytes()
    found.close()


def test_names_and_texts_in_any_script_survive(tmp_path, journal):
    odd = os.fsdecode(b"\xff\n\xc3\xa9.wav")
    record = made(journal, odd, title="Fähre \N{BELL} <b>")
    write_manifest(tmp_path / "m.jsonl", journal_records(journal))
    found, _ = read_manifest(tmp_path / "m.jsonl")
    assert list(found) == [record]
    assert (tmp_path / "m.jsonl").read_bytes().isascii()
    found.close()


@pytest.mark.parametrize(
    "harm",
    [
        {"item": "../a.wav"},
        {"item": "/a.wav"},
        {"item": "a.txt"},
        {"item": 7},
        {"frames": "many"},
        {"lufs": "loud"},
        {"lufs": float("nan")},
        {"gain_db": float("inf")},
        {"sample_rate": 0},
        {"never_lands": [{"note": 1}]},
        {"curve": [[0.0]]},
        {"curve": [[0.0, "x"]]},
        {"warnings": [1]},
        {"sources": None},
        {"frames": 10**400},
        {"frames": -(10**400)},
        {"curve": [[1e308, 1e308], [1e300, -1e308]]},
        {"options": {"depth": [{"x": 1e16}]}},
        {"true_peak_dbtp": -1e300},
    ],
)
def test_records_that_are_none_are_not_believed(harm):
    assert checked_record(make_record()) == make_record()
    with pytest.raises(ValueError):  # noqa: PT011 - whatever is wrong with it
        checked_record({**make_record(), **harm})
    missing = make_record()
    del missing["frames"]
    with pytest.raises(ValueError, match="no record"):
        checked_record(missing)


@pytest.mark.parametrize(
    "line", [b"", b"[]", b"{", b'"x"', b"null", b"[" * 100_000, b'{"item":"a.wav"}', b"\xff\xfe", b"1" * 5000]
)
def test_damaged_lines_are_told_and_the_others_are_read(tmp_path, journal, line):
    made(journal, "a.wav")
    made(journal, "b.wav")
    path = tmp_path / "manifest.jsonl"
    write_manifest(path, journal_records(journal))
    head, first, second = path.read_bytes().splitlines()
    path.write_bytes(b"\n".join([head, first, line, second]))
    found, damaged = read_manifest(path)
    assert found.items() == ["a.wav", "b.wav"]
    assert damaged == [f"{path}: line 3 is damaged; what it listed is made again"]
    found.close()


def test_a_line_without_end_is_left_out_and_its_neighbours_are_read(tmp_path, journal, monkeypatch):
    monkeypatch.setattr("glidesmith.manifest._LONGEST_LINE", 4096)
    for item in ("a.wav", "b.wav"):
        made(journal, item)
    made(journal, "big.wav", title="x" * 5000)
    path = tmp_path / "manifest.jsonl"
    write_manifest(path, journal_records(journal))
    head, first, second, big = path.read_bytes().splitlines()
    path.write_bytes(b"\n".join([head, first, big, second, b"x" * 9000]))
    found, damaged = read_manifest(path)
    assert [record["item"] for record in found] == ["a.wav", "b.wav"]
    assert [line.partition(" is damaged")[0] for line in damaged] == [f"{path}: line {n}" for n in (3, 5)]
    found.close()


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="needs named pipes")
def test_what_is_no_file_is_never_read(tmp_path):
    pipe, link = tmp_path / "pipe.jsonl", tmp_path / "link.jsonl"
    os.mkfifo(pipe)
    link.symlink_to("/dev/zero")
    for path in (pipe, link, tmp_path):
        with pytest.raises(OutputError):
            read_manifest(path)


@pytest.mark.parametrize("name", ["../victim.wav", "/victim.wav", "a/../../victim.wav", "", "x.txt"])
def test_a_journal_names_nothing_outside(tmp_path, journal, name):
    stamp = {"size": 1, "mtime_ns": 1, "file_sha256": "0", "origin": "0"}
    journal.path.write_bytes(journal.path.read_bytes() + line_of({"begun": name}))
    with journal.path.open("ab") as file:
        file.write(line_of({"output": name, **stamp}) + line_of({"begun": "a.wav"}))
    journal.read()
    assert journal.begun == {"a.wav"}
    assert journal.outputs == {}


@pytest.mark.parametrize(
    "links", [[1, None, None, None], [[], None, None, ""], ["a", "b", None, None], [None]]
)
def test_a_journal_with_links_that_are_none_is_not_believed(journal, links):
    told = {"input": "a.toml", "size": 1, "mtime_ns": 1, "sha256": "0", "kind_of_file": "preset"}
    good = line_of({**told, "links": ["line.toml", 1, None, None]})
    text = journal.path.read_bytes() + good + line_of({**told, "input": "b.toml", "links": links})
    journal.path.write_bytes(text + line_of({"settled": hashlib.sha256(text).hexdigest()}))
    journal.read()
    assert list(journal.inputs) == ["a.toml"]


@pytest.mark.parametrize("head", [b"", b"x", b"{}", b'{"kind":"glidesmith batch"}', b"[1]", b"\x00" * 50])
def test_a_file_that_is_no_manifest_is_refused(tmp_path, head):
    path = tmp_path / "manifest.jsonl"
    path.write_bytes(head + b"\n")
    with pytest.raises(OutputError, match=r"is not the manifest of a batch|is of version"):
        read_manifest(path)


def test_the_journal_remembers_what_was_made_and_where_it_was_cut_the_rest(tmp_path, journal):
    first, second = made(journal, "a.wav"), made(journal, "b.wav")
    journal.begin("c.wav")
    journal.close()
    with journal.path.open("ab") as file:
        file.write(line_of({"begun": "d.wav"})[:-5])
    again = Journal(tmp_path)
    again.hold()
    again.read()
    assert [line.record() for line in again.lines.values()] == [first, second]
    assert again.begun == {"a.wav", "b.wav", "c.wav"}
    assert not again.is_clean
    again.begin("e.wav")
    again.close()
    third = Journal(tmp_path)
    third.read()
    assert third.begun == {"a.wav", "b.wav", "c.wav", "e.wav"}
    third.close()


def test_settling_keeps_stamps_alone(tmp_path, journal):
    (tmp_path / "manifest.jsonl").write_bytes(b"x")
    made(journal, "a.wav")
    journal.inputs["lead.toml"] = InputFacts((1, 2), "ab", "preset", ("line.mid", 2, None, None))
    journal.settle(tmp_path / "manifest.jsonl")
    outputs, inputs = dict(journal.outputs), dict(journal.inputs)
    journal.close()
    again = Journal(tmp_path)
    again.read()
    assert (again.outputs, again.inputs, again.lines, again.begun) == (outputs, inputs, {}, set())
    assert again.is_clean
    assert again.manifest == (1, (tmp_path / "manifest.jsonl").stat().st_mtime_ns)
    again.close()


def test_one_changed_byte_and_nothing_that_is_said_of_files_is_believed(tmp_path, journal):
    made(journal, "a.wav")
    journal.inputs["lead.toml"] = InputFacts((1, 2), "ab", "preset", ("line.mid", 2, None, None))
    journal.settle(tmp_path / "manifest.jsonl")
    journal.close()
    data = journal.path.read_bytes()
    journal.path.write_bytes(data.replace(b"line.mid", b"lane.mid"))
    again = Journal(tmp_path)
    again.read()
    assert (again.inputs, again.outputs, again.begun, again.is_clean) == ({}, {}, {"a.wav"}, False)
    again.close()


HOLD = """
import sys
from pathlib import Path
from glidesmith.manifest import Journal
journal = Journal(Path(sys.argv[1]))
journal.hold()
print("held", flush=True)
sys.stdin.read()
"""


def test_a_lock_keeps_others_out_and_dies_with_its_process(tmp_path):
    command = [sys.executable, "-c", HOLD, str(tmp_path)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as holder:
        assert holder.stdout is not None
        assert holder.stdout.readline() == b"held\n"
        with pytest.raises(OutputError, match="another batch is writing"):
            Journal(tmp_path).hold()
        holder.kill()
        holder.communicate()
    journal = Journal(tmp_path)
    journal.hold()
    journal.close()


def test_a_journal_that_was_taken_away_is_noticed(tmp_path, journal):
    assert journal.is_held
    journal.path.unlink()
    assert not journal.is_held
    journal.path.write_bytes(b"")
    assert not journal.is_held


def test_lines_are_plain_json(journal):
    made(journal, "a.wav")
    for line in journal.path.read_bytes().splitlines():
        assert isinstance(json.loads(line), dict)
