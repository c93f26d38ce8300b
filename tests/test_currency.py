"""Currency: when a file is taken to hold what it held, and what settles an output."""

import hashlib
import os
import time

import pytest

from banks import lay_bank
from commands import write_midi
from glidesmith import PhraseError, PresetError
from glidesmith.bank import AS_IT_IS, Choice, Variation, find_presets
from glidesmith.currency import Inputs, agrees, file_digest, is_phrase, origin_of, output_stamp
from glidesmith.production import Options

OLD_NS = 10**18


@pytest.fixture
def bank(tmp_path):
    bank = lay_bank(tmp_path / "bank", "lead.toml")
    os.utime(bank / "lead.toml", ns=(OLD_NS, OLD_NS))
    return bank


def found_in(bank):
    return next(each for each in find_presets(bank, Choice())[0] if each.name == "lead.toml")


def counted_reads(monkeypatch):
    """The names of the files that are read from now on."""
    import glidesmith.currency as currency

    names, real = [], currency.read_bytes
    monkeypatch.setattr(
        currency, "read_bytes", lambda path, *rest: names.append(path.name) or real(path, *rest)
    )
    return names


def test_an_old_file_is_read_once_and_then_known_by_its_stamp(bank, monkeypatch):
    known, reads = {}, counted_reads(monkeypatch)
    first = Inputs(bank, known, False)
    facts = first.preset(found_in(bank))
    assert (facts.kind, facts.links) == ("preset", ("line.toml", None, None, None))
    assert facts.sha256 == hashlib.sha256((bank / "lead.toml").read_bytes()).hexdigest()
    assert (first.changed, reads) == (True, ["lead.toml"])
    again = Inputs(bank, known, False)
    assert again.preset(found_in(bank)) == facts
    assert (again.changed, reads) == (False, ["lead.toml"])
    assert Inputs(bank, known, True).preset(found_in(bank)) == facts
    assert reads == ["lead.toml"] * 2


@pytest.mark.parametrize(("age_ns", "is_read_again"), [(99_000_000, True), (101_000_000, False)])
def test_the_stamp_of_a_file_changed_just_now_is_not_trusted(bank, monkeypatch, age_ns, is_read_again):
    """For 100 ms: within a tick of the file system's clock it may change again and look the same."""
    known, reads = {}, counted_reads(monkeypatch)
    monkeypatch.setattr(time, "time_ns", lambda: OLD_NS + age_ns)
    Inputs(bank, known, False).preset(found_in(bank))
    Inputs(bank, known, False).preset(found_in(bank))
    assert len(reads) == 1 + is_read_again


def test_a_change_that_kept_size_and_tick_is_found(bank, monkeypatch):
    monkeypatch.setattr(time, "time_ns", lambda: OLD_NS + 1)
    known, path = {}, bank / "lead.toml"
    before = Inputs(bank, known, False).preset(found_in(bank))
    path.write_bytes(path.read_bytes().replace(b'"1 ms"', b'"2 ms"'))
    os.utime(path, ns=(OLD_NS, OLD_NS))
    assert Inputs(bank, known, False).preset(found_in(bank)).sha256 != before.sha256


def test_a_midi_file_is_read_by_track_and_channel_and_noticed_when_it_changes(tmp_path):
    path = write_midi(tmp_path / "run.mid")
    known = {}
    inputs = Inputs(tmp_path, known, False)
    name, before = inputs.file(str(path), PhraseError)
    assert name == "run.mid"
    file, phrase = inputs.phrase(str(path), 1, None, 7200.0)
    assert (file.track, file.channel, file.sha256) == (1, None, phrase.content_hash())
    with pytest.raises(PhraseError, match="track 2"):
        inputs.phrase(str(path), 2, None, 7200.0)
    path.write_bytes(path.read_bytes().replace(bytes.fromhex("90 3c 64"), bytes.fromhex("90 3d 64")))
    os.utime(path, ns=(OLD_NS, OLD_NS))
    later = Inputs(tmp_path, known, False)
    _, after = later.file(str(path), PhraseError)
    assert after.sha256 != before.sha256
    assert later.phrase(str(path), 1, None, 7200.0)[0].sha256 != file.sha256


def test_a_file_that_changes_between_two_looks_is_told(bank):
    inputs = Inputs(bank, {}, False)
    facts = inputs.preset(found_in(bank))
    path = bank / "lead.toml"
    path.write_text(path.read_text() + "# more\n")
    inputs._patch = None
    with pytest.raises(PresetError, match="changed while it was read; run again"):
        inputs.patch(found_in(bank), facts)


def test_the_origin_is_of_everything_that_goes_in():
    wide = Variation("", (("pitch.rise", 0.02),))
    inputs, choice = {"lead.toml": "a", "line.toml": "b"}, (None, None, 7200.0)
    base = origin_of(Options(), AS_IT_IS, inputs, choice)
    assert base == origin_of(Options(), AS_IT_IS, dict(reversed(inputs.items())), choice)
    others = {
        origin_of(Options(depth=16), AS_IT_IS, inputs, choice),
        origin_of(Options(), wide, inputs, choice),
        origin_of(Options(), AS_IT_IS, {**inputs, "line.toml": "c"}, choice),
        origin_of(Options(), AS_IT_IS, inputs, (1, None, 7200.0)),
        origin_of(Options(), AS_IT_IS, inputs, (None, None, 60.0)),
    }
    assert len(others | {base}) == 6


def test_a_record_agrees_as_far_as_bytes_go():
    heading = {"engine": "1", "title": "t", "settings_sha256": "s", "phrase_sha256": "p", "options": {}}
    assert agrees({**heading, "preset": "elsewhere.toml"}, {**heading, "preset": "lead.toml"})
    for name in heading:
        assert not agrees({**heading, name: "other"}, heading)


def test_digests_and_stamps_are_of_files_alone(tmp_path):
    path = tmp_path / "a.wav"
    path.write_bytes(b"x" * (1 << 20) + b"y")
    os.utime(path, ns=(OLD_NS, OLD_NS))
    assert file_digest(path) == hashlib.sha256(path.read_bytes()).hexdigest()
    assert output_stamp(path) == ((1 << 20) + 1, OLD_NS)
    link = tmp_path / "link.wav"
    link.symlink_to(path)
    for other in (link, tmp_path, tmp_path / "none.wav"):
        assert (file_digest(other), output_stamp(other)) == (None, None)


def test_notes_are_told_from_presets():
    assert is_phrase(b"notes = []")
    assert not is_phrase(b"notes = []\n[pitch]\n")
    assert not is_phrase(b"[pitch]\n")
    assert not is_phrase(b"\xff")
