"""The desk: what of an output folder is the batch's own, and what is never touched."""

import os

import pytest

import glidesmith.desk as desk_module
from banks import JOURNAL, contents, lay_bank, lay_preset
from glidesmith import OutputError, SettingError
from glidesmith.batching import batch
from glidesmith.desk import Desk, desk_at, is_made_with


def run(folder, output, **options):
    return batch(folder, output, **{"jobs": 1, **options})


@pytest.fixture
def bank(tmp_path):
    return lay_bank(tmp_path / "bank", "lead.toml", "bass.toml")


@pytest.fixture
def takes(tmp_path):
    return tmp_path / "takes"


@pytest.mark.parametrize("name", ["summary.html", "manifest.jsonl"])
def test_no_link_in_place_of_manifest_or_summary_is_followed(bank, takes, tmp_path, name):
    run(bank, takes)
    diary = tmp_path / "diary.txt"
    diary.write_bytes((takes / name).read_bytes())
    (takes / name).unlink()
    (takes / name).symlink_to(diary)
    before = diary.read_bytes()
    lay_preset(bank, "lead.toml", rise_ms=50)
    with pytest.raises(OutputError, match=rf"{name}: is a link, or no regular file"):
        run(bank, takes)
    assert diary.read_bytes() == before
    assert (takes / name).is_symlink()


@pytest.mark.parametrize("name", ["summary.html", "manifest.jsonl"])
def test_a_link_that_comes_while_the_batch_runs_is_not_followed(bank, takes, tmp_path, name):
    run(bank, takes)
    diary = tmp_path / "diary.txt"
    diary.write_text("mine")
    lay_preset(bank, "lead.toml", rise_ms=50)

    def swap(done, total):
        (takes / name).unlink(missing_ok=True)
        (takes / name).symlink_to(diary)

    done = run(bank, takes, progress=swap)
    assert done.made == ["lead.wav"]
    assert "is a link" in done.stopped
    assert not done.all_well
    assert diary.read_text() == "mine"


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="needs named pipes")
@pytest.mark.parametrize("name", ["manifest.jsonl", JOURNAL])
@pytest.mark.parametrize("dry_run", [False, True])
def test_a_pipe_hangs_nobody(bank, takes, name, dry_run):
    takes.mkdir()
    os.mkfifo(takes / name)
    if name == JOURNAL and dry_run:
        assert run(bank, takes, dry_run=True).made == ["bass.wav", "lead.wav"]
        return
    with pytest.raises(OutputError, match="move it elsewhere"):
        run(bank, takes, dry_run=dry_run)


@pytest.mark.parametrize("keep", [0, 1])
def test_what_a_run_has_made_whose_journal_is_lost_is_its_own(bank, takes, tmp_path, keep):
    """As after a kill in the first run, before there is a manifest."""
    run(bank, tmp_path / "wanted")
    run(bank, takes)
    lines = (takes / JOURNAL).read_bytes().splitlines(keepends=True)
    for name in ("manifest.jsonl", "summary.html", JOURNAL):
        (takes / name).unlink()
    (takes / JOURNAL).write_bytes(b"".join(lines[:keep]))
    done = run(bank, takes)
    assert done.failed == []
    assert contents(takes) == contents(tmp_path / "wanted")


def test_what_was_made_of_other_settings_is_left_and_the_way_out_is_told(bank, takes):
    run(bank, takes)
    for name in ("manifest.jsonl", "summary.html", JOURNAL):
        (takes / name).unlink()
    before = contents(takes)["lead.wav"]
    lay_preset(bank, "lead.toml", rise_ms=50)
    [failed] = run(bank, takes).failed
    assert "no manifest lists it; if a run made it whose books are lost, remove it" in failed.lines[0]
    assert contents(takes)["lead.wav"] == before


def test_only_our_own_audio_with_the_settings_counts():
    sha256 = "5e" * 32
    assert is_made_with(b"RIFF....WAVE Glidesmith Settings " + sha256.encode(), sha256)
    assert not is_made_with(b"RIFF....WAVE Glidesmith Settings " + sha256.encode(), "00" * 32)
    assert not is_made_with(b"Dear diary, Glidesmith Settings " + sha256.encode(), sha256)
    assert not is_made_with(b"", sha256)


def test_a_journal_never_leads_out_of_its_folder_when_part_files_are_swept(bank, takes, tmp_path):
    run(bank, takes)
    content = (takes / "lead.wav").read_bytes()
    victims = [tmp_path / "victim.wav.part", tmp_path / "beyond" / "victim.wav.part"]
    (tmp_path / "beyond").mkdir()
    (takes / "link").symlink_to(tmp_path / "beyond")
    for victim in victims:
        victim.write_bytes(content)
    with (takes / JOURNAL).open("ab") as journal:
        journal.write(b'{"begun":"../victim.wav"}\n{"begun":"link/victim.wav"}\n')
    run(bank, takes)
    assert [victim.exists() for victim in victims] == [True, True]


def test_names_that_the_folder_does_not_tell_apart_are_not_both_written(tmp_path, takes, monkeypatch):
    bank = lay_bank(tmp_path / "bank", "Lead.toml", "lead.toml")
    done = run(bank, takes)
    assert done.made == ["Lead.wav", "lead.wav"]
    assert "only some file systems tell these names apart" in done.warnings[0]
    monkeypatch.setattr(desk_module.Desk, "_ignores_case", True)
    [failed] = run(bank, takes, force=True).failed
    assert failed.preset == "lead.toml"
    assert "would both write" in failed.lines[0]


def test_an_address_of_a_file_is_a_folder(tmp_path, bank):
    desk = desk_at(f"file://{tmp_path}/new%20one")
    assert type(desk) is Desk
    assert desk.folder == tmp_path / "new one"
    assert run(bank, f"file://{tmp_path}/there").made == ["bass.wav", "lead.wav"]
    assert (tmp_path / "there" / "lead.wav").exists()


def test_what_is_no_place_is_refused_in_a_line():
    with pytest.raises(SettingError, match="output 5: give a path"):
        desk_at(5)
