"""Batches: what is made, what is current, what is refused; jobs in this process unless said otherwise."""

import json
import os
from pathlib import Path

import pytest

import glidesmith.batching as batching
from banks import JOURNAL, contents, lay_bank, lay_preset, times
from commands import PRESET, write_midi
from conftest import PRESETS
from glidesmith import OutputError, PhraseError, SettingError, load_phrase, load_preset
from glidesmith.batching import batch
from glidesmith.command import main  # noqa: F401 - the command's modules import without the engine
from unprivileged import no_privileges, open_folder


def run(folder, output, **options):
    return batch(folder, output, **{"jobs": 1, **options})


def records(output):
    head, *lines = (output / "manifest.jsonl").read_text().splitlines()
    assert json.loads(head) == {"kind": "glidesmith batch", "version": 1}
    return [json.loads(line) for line in lines]


@pytest.fixture
def bank(tmp_path):
    return lay_bank(tmp_path / "bank")


@pytest.fixture
def takes(tmp_path):
    return tmp_path / "takes"


def test_a_bank_is_mirrored_with_a_sorted_manifest_and_a_summary(bank, takes):
    done = run(bank, takes)
    assert done.made == ["basses/deep.wav", "basses/round.wav", "lead.wav"]
    assert (done.current, done.failed) == (0, [])
    assert [record["item"] for record in records(takes)] == done.made
    assert set(contents(takes)) == {*done.made, "manifest.jsonl", "summary.html"}
    assert b"basses/deep.wav" in (takes / "summary.html").read_bytes()


def test_a_record_says_what_was_made_of_what(bank, takes):
    run(bank, takes)
    record = records(takes)[0]
    files = contents(bank)
    assert record["preset"] == "basses/deep.toml"
    assert record["phrase"] == "line.toml"
    assert record["sources"] == {name: files[name] for name in ("basses/deep.toml", "line.toml")}
    assert record["file_sha256"] == contents(takes)["basses/deep.wav"]
    assert record["bytes"] == (takes / "basses/deep.wav").stat().st_size
    assert record["phrase_sha256"] == load_phrase(bank / "line.toml").content_hash()
    assert not any("time" in name or "date" in name for name in record)


def test_the_second_run_makes_nothing_and_writes_nothing(bank, takes):
    run(bank, takes)
    os.utime(bank / "lead.toml", ns=(10**18, 10**18))
    run(bank, takes)
    before = {path: path.stat().st_mtime_ns for path in takes.rglob("*") if path.is_file()}
    done = run(bank, takes)
    assert (done.made, done.current) == ([], 3)
    assert {path: path.stat().st_mtime_ns for path in takes.rglob("*") if path.is_file()} == before


def test_a_second_run_needs_neither_numpy_nor_compiled_code(bank, takes):
    import subprocess
    import sys

    run(bank, takes)
    code = (
        f"import sys; from glidesmith.batching import batch; done = batch({str(bank)!r}, {str(takes)!r}); "
        "assert done.current == 3 and not done.made, done; "
        "assert not {'numpy', 'numba', 'soundfile', 'mido', 'tomlkit', 'subprocess'} & set(sys.modules)"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_touching_renders_nothing_and_a_remark_only_changes_the_manifest(bank, takes):
    run(bank, takes)
    before, old = times(takes), records(takes)
    os.utime(bank / "lead.toml")
    assert run(bank, takes).made == []
    assert records(takes) == old
    text = (bank / "lead.toml").read_text()
    (bank / "lead.toml").write_text(text + "# a remark\n")
    done = run(bank, takes)
    assert (done.made, done.current) == ([], 3)
    assert times(takes) == before
    changed = [record for record in records(takes) if record not in old]
    assert [record["item"] for record in changed] == ["lead.wav"]
    assert changed[0]["sources"]["lead.toml"] == contents(bank)["lead.toml"]


@pytest.mark.parametrize("lost", [JOURNAL, None])
def test_what_changes_is_made_again_and_nothing_else(bank, takes, lost):
    run(bank, takes)
    before = times(takes)
    if lost:
        (takes / lost).unlink()
    lay_preset(bank, "lead.toml", rise_ms=77)
    assert run(bank, takes).made == ["lead.wav"]
    after = times(takes)
    assert [name for name in before if after[name] != before[name]] == ["lead.wav"]


def test_a_changed_phrase_makes_all_that_play_it_again(bank, takes):
    run(bank, takes)
    text = (bank / "line.toml").read_text()
    (bank / "line.toml").write_text("# a remark\n" + text)
    assert run(bank, takes).made == []
    (bank / "line.toml").write_text(text.replace("A3", "B3"))
    assert len(run(bank, takes).made) == 3


def test_a_new_title_is_in_the_file_so_it_is_made_again(bank, takes):
    run(bank, takes)
    path = bank / "lead.toml"
    path.write_text(path.read_text().replace('title = "lead.toml"', 'title = "Lead"'))
    assert run(bank, takes).made == ["lead.wav"]


def test_another_engine_makes_everything_again(bank, takes, monkeypatch):
    run(bank, takes)
    for module in ("currency", "production"):
        monkeypatch.setattr(f"glidesmith.{module}.__version__", "99.0")
    assert len(run(bank, takes).made) == 3
    assert {record["engine"] for record in records(takes)} == {"99.0"}


def test_other_options_make_everything_again(bank, takes):
    run(bank, takes)
    assert len(run(bank, takes, sample_rate=44_100).made) == 3
    assert len(run(bank, takes, sample_rate=44_100, depth=16).made) == 3
    assert len(run(bank, takes, sample_rate=44_100, depth=16, meter=False).made) == 3
    assert run(bank, takes, sample_rate=44_100, depth=16, meter=False).made == []
    assert records(takes)[0]["lufs"] is None


def test_force_makes_all_again_to_the_same_bytes(bank, takes):
    run(bank, takes)
    before = contents(takes)
    assert len(run(bank, takes, force=True).made) == 3
    assert contents(takes) == before


@pytest.mark.parametrize("harm", ["cut", "empty", "gone", "other", "link", "folder"])
def test_outputs_that_are_not_whole_are_noticed_and_made_again(bank, takes, harm, tmp_path):
    run(bank, takes)
    before = contents(takes)
    path = takes / "lead.wav"
    if harm == "cut":
        os.truncate(path, 1000)
    elif harm == "empty":
        os.truncate(path, 0)
    elif harm == "other":
        path.write_bytes(bytes(path.stat().st_size))
    else:
        kept = tmp_path / "kept.wav"
        path.rename(kept)
        if harm == "link":
            path.symlink_to(kept)
    if harm == "folder":
        path.mkdir()
        assert [each.item for each in run(bank, takes).failed] == ["lead.wav"]
        path.rmdir()
    assert run(bank, takes).made == ["lead.wav"]
    assert contents(takes) == before
    assert not path.is_symlink()
    if harm == "link":
        assert kept.exists()


def test_a_change_that_keeps_size_and_time_is_found_by_verifying(bank, takes):
    run(bank, takes)
    path, before = takes / "lead.wav", contents(takes)
    stamp = path.stat().st_mtime_ns
    path.write_bytes(path.read_bytes()[:-4] + b"\1\2\3\4")
    os.utime(path, ns=(stamp, stamp))
    assert run(bank, takes).made == []
    assert run(bank, takes, verify=True).made == ["lead.wav"]
    assert contents(takes) == before
    assert run(bank, takes, verify=True).made == []


def test_a_lost_journal_is_made_anew_by_hashing(bank, takes):
    run(bank, takes)
    before = times(takes), contents(takes)
    (takes / JOURNAL).unlink()
    assert run(bank, takes).made == []
    (takes / JOURNAL).write_bytes(b'{"kind":"glidesmith batch journal","version":1}\n\xff\n{"input"')
    assert run(bank, takes).made == []
    assert (times(takes), contents(takes)) == before


def test_one_bad_preset_stops_nothing_and_is_named(bank, takes):
    lay_preset(bank, "bad.toml", text='[pitch]\nrise = "soon"\n')
    lay_preset(bank, "worse.toml", text="\xff")
    (bank / "mute.toml").write_text(PRESET)
    (bank / "lost.toml").write_text(PRESET + '[phrase]\nfile = "gone.mid"\n')
    (bank / "nowhere.toml").symlink_to("no.toml")
    done = run(bank, takes)
    assert len(done.made) == 3
    assert sorted(each.preset for each in done.failed) == [
        "bad.toml", "lost.toml", "mute.toml", "nowhere.toml", "worse.toml"
    ]  # fmt: skip
    lines = {each.preset: "\n".join(each.lines) for each in done.failed}
    assert "pitch.rise" in lines["bad.toml"]
    assert "gone.mid" in lines["lost.toml"]
    assert "phrase.file" in lines["lost.toml"]
    assert "names no phrase" in lines["mute.toml"]
    assert "there is no such file" in lines["nowhere.toml"]
    assert not done.all_well
    assert len(records(takes)) == 3
    assert b"gone.mid" in (takes / "summary.html").read_bytes()


def test_an_old_output_of_a_preset_that_fails_now_stays_listed(bank, takes):
    run(bank, takes)
    before = records(takes)
    lay_preset(bank, "lead.toml", text="[pitch\n")
    done = run(bank, takes)
    assert [each.preset for each in done.failed] == ["lead.toml"]
    assert records(takes) == before


def test_each_preset_plays_each_phrase(bank, takes, tmp_path):
    other = tmp_path / "other.toml"
    other.write_text((bank / "line.toml").read_text().replace("D3", "E3"))
    midi = write_midi(tmp_path / "tune.mid")
    done = run(bank, takes, phrases=[other, midi])
    assert done.made[:2] == ["basses/deep_other.wav", "basses/deep_tune.wav"]
    assert len(done.made) == 6
    tune = next(record for record in records(takes) if record["item"].endswith("lead_tune.wav"))
    assert tune["phrase"] == "../tune.mid"
    assert tune["without_effect"] == ["ignored in the phrase: 1 controller change (controller 1)"]
    assert run(bank, takes, phrases=[midi]).made == ["basses/deep.wav", "basses/round.wav", "lead.wav"]


def test_a_phrase_for_all_that_can_not_be_read_is_refused_at_once(bank, takes, tmp_path):
    with pytest.raises(PhraseError, match=r"no\.mid: there is no such file"):
        run(bank, takes, phrases=[tmp_path / "no.mid"])
    with pytest.raises(SettingError, match="give the phrase too"):
        run(bank, takes, track=1)


def test_presets_are_varied_in_all_combinations(bank, takes):
    done = run(bank, takes, vary={"pitch.law": ["rc", "linear"], "pitch.rise": ["20 ms", 0.06]})
    assert len(done.made) == 12
    assert done.made[0] == "basses/deep_linear-rise-20ms.wav"
    found = {record["item"]: record["varied"] for record in records(takes)}
    assert found["lead_rc-rise-60ms.wav"] == {"pitch.law": "rc", "pitch.rise": 0.06}
    assert run(bank, takes, vary={"pitch.law": ["rc", "linear"], "pitch.rise": [0.02, "60 ms"]}).made == []


def test_cycles_are_varied_and_a_changed_one_is_noticed(bank, takes, tmp_path):
    import numpy as np
    import soundfile

    for number, name in enumerate(("soft.wav", "hard.wav"), 1):
        soundfile.write(tmp_path / name, np.sin(np.arange(64) / 64 * 2 * np.pi) ** number, 48_000)
    from glidesmith.candidates import axes_from_texts

    files = ",".join(str(tmp_path / name) for name in ("soft.wav", "hard.wav"))
    vary = axes_from_texts([f"oscillator.file={files}", "oscillator.wave=file"])
    options = {"vary": vary, "include": ["lead.toml"]}
    done = run(bank, takes, **options)
    assert len(done.made) == 2
    assert {record["varied"]["oscillator.file"] for record in records(takes)} == {"soft.wav", "hard.wav"}
    assert str(tmp_path) not in (takes / "manifest.jsonl").read_text()
    assert len({record["file_sha256"] for record in records(takes)}) == 2
    assert run(bank, takes, **options).made == []
    soundfile.write(tmp_path / "hard.wav", np.sin(np.arange(64) / 64 * 2 * np.pi) ** 5, 48_000)
    assert len(run(bank, takes, **options).made) == 1
    (tmp_path / "hard.wav").unlink()
    (failed,) = run(bank, takes, **options).failed
    assert "oscillator.file: " in failed.lines[0]
    assert "there is no such file" in failed.lines[0]


def test_a_variation_that_one_preset_can_not_have_fails_for_that_one(bank, takes):
    envelope = "[envelope]\nattack = 0.01\ndecay = 0.01\nsustain = 0.5\nrelease = 0.01\n"
    (bank / "lead.toml").write_text((bank / "lead.toml").read_text() + envelope)
    done = run(bank, takes, vary={"gain.law": ["linear", "cosine"]})
    assert [(each.preset, each.item) for each in done.failed] == [("lead.toml", "lead_gain-cosine.wav")]
    assert len(done.made) == 5


def test_names_that_collide_are_refused_before_anything_is_made(bank, takes):
    with pytest.raises(SettingError, match="would both write"):
        run(bank, takes, name="all")
    lay_preset(bank, "other/deep.toml")
    with pytest.raises(SettingError, match=r'"basses/deep.toml" and "other/deep.toml" would both write'):
        run(bank, takes, name="{preset}")
    with pytest.raises(SettingError, match="would both write"):
        run(bank, takes, vary={"pitch.law": ["rc", "linear"]}, name="{folder}/{preset}")
    assert not takes.exists()


def test_phrases_among_the_presets_collide_with_nothing(bank, takes):
    """Which they are is found out only where there is a collision: a list of notes makes no output."""
    for folder in ("basses", "a", "z"):
        lay_preset(bank, f"{folder}/lead.toml", text=(bank / "line.toml").read_text())
    done = run(bank, takes, name="{preset}")
    assert (done.made, done.failed) == (["deep.wav", "lead.wav", "round.wav"], [])


def test_names_that_collide_only_by_their_own_phrases_fail_for_the_later_ones(bank, takes):
    done = run(bank, takes, name="{phrase}")
    assert done.made == ["line.wav"]
    assert len(done.failed) == 2
    assert "would both write" in done.failed[0].lines[0]


def test_a_file_that_no_manifest_lists_is_never_overwritten(bank, takes):
    takes.mkdir()
    (takes / "lead.wav").write_bytes(b"mine")
    (takes / "notes.txt").write_bytes(b"mine too")
    done = run(bank, takes)
    assert [each.item for each in done.failed] == ["lead.wav"]
    assert "no manifest lists it" in done.failed[0].lines[0]
    assert (takes / "lead.wav").read_bytes() == b"mine"
    assert (takes / "notes.txt").read_bytes() == b"mine too"
    assert len(run(bank, takes, force=True).failed) == 1
    (takes / "lead.wav").unlink()
    assert run(bank, takes).made == ["lead.wav"]


@pytest.mark.parametrize("name", ["manifest.jsonl", "summary.html", JOURNAL])
def test_a_folder_with_somebody_elses_file_of_that_name_is_refused(bank, takes, name):
    takes.mkdir()
    (takes / name).write_bytes(b'{"kind": "of mine"}\n')
    with pytest.raises(OutputError, match="move it elsewhere"):
        run(bank, takes)
    assert (takes / name).read_bytes() == b'{"kind": "of mine"}\n'
    assert not (takes / "lead.wav").exists()


def test_a_link_in_the_journals_place_is_not_followed(bank, takes, tmp_path):
    takes.mkdir()
    (tmp_path / "elsewhere").write_bytes(b"")
    (takes / JOURNAL).symlink_to(tmp_path / "elsewhere")
    with pytest.raises(OutputError, match="in the way"):
        run(bank, takes)


def test_somebody_elses_part_file_is_left_and_told(bank, takes):
    takes.mkdir()
    (takes / "lead.wav.part").write_bytes(b"mine")
    done = run(bank, takes)
    assert [each.item for each in done.failed] == ["lead.wav"]
    assert (takes / "lead.wav.part").read_bytes() == b"mine"


def test_output_into_the_bank_and_below_it(bank, tmp_path):
    assert len(run(bank, bank / "takes").made) == 3
    assert run(bank, bank / "takes").current == 3
    assert len(run(bank, bank).made) == 3
    assert run(bank, bank).current == 3


def test_phrases_among_the_presets_are_left_out(bank, takes):
    assert "line.toml" in {path.name for path in bank.iterdir()}
    assert run(bank, takes).failed == []


def test_a_bank_without_presets_is_refused_before_the_output_is_made(tmp_path, takes):
    (tmp_path / "empty").mkdir()
    with pytest.raises(SettingError, match="holds no preset"):
        run(tmp_path / "empty", takes)
    with pytest.raises(SettingError, match="holds no preset that is taken"):
        run(lay_bank(tmp_path / "bank"), takes, include=["nothing"])
    assert not takes.exists()


def test_include_and_exclude(bank, takes):
    assert run(bank, takes, include=["basses"], exclude=["round.toml"]).made == ["basses/deep.wav"]
    done = run(bank, takes)
    assert done.made == ["basses/round.wav", "lead.wav"]
    done = run(bank, takes, exclude=["basses"])
    assert (done.current, done.others, done.gone) == (1, 2, [])
    assert len(records(takes)) == 3


def test_a_dry_run_says_what_would_be_made_and_makes_nothing(bank, takes):
    assert run(bank, takes, dry_run=True).made == ["basses/deep.wav", "basses/round.wav", "lead.wav"]
    assert not takes.exists()
    run(bank, takes)
    before = {path: path.stat().st_mtime_ns for path in takes.rglob("*")}
    lay_preset(bank, "lead.toml", rise_ms=50)
    os.utime(bank / "basses" / "deep.toml")
    done = run(bank, takes, dry_run=True)
    assert (done.made, done.current, done.dry_run) == (["lead.wav"], 2, True)
    assert {path: path.stat().st_mtime_ns for path in takes.rglob("*")} == before


# Pruning


def test_what_is_gone_is_told_and_pruned_when_asked(bank, takes):
    run(bank, takes)
    (bank / "basses" / "deep.toml").unlink()
    done = run(bank, takes)
    assert (done.gone, done.pruned, done.current) == (["basses/deep.wav"], [], 2)
    assert (takes / "basses/deep.wav").exists()
    asked = []
    run(bank, takes, prune=lambda items: asked.append(list(items)))
    assert asked == [["basses/deep.wav"]]
    assert (takes / "basses/deep.wav").exists()
    assert run(bank, takes, prune=True).pruned == ["basses/deep.wav"]
    assert not (takes / "basses/deep.wav").exists()
    assert [record["item"] for record in records(takes)] == ["basses/round.wav", "lead.wav"]
    (bank / "basses" / "round.toml").unlink()
    run(bank, takes, prune=True)
    assert not (takes / "basses").exists()


def test_nothing_is_pruned_while_not_all_of_the_bank_can_be_read(monkeypatch):
    """A folder that is closed, or a disk that answers no more, is not a preset that is gone."""
    with open_folder() as folder:
        bank, takes = (
            lay_bank(folder / "bank", "lead.toml", "gone.toml", "closed/deep.toml"),
            folder / "takes",
        )
        run(bank, takes)
        for path in (bank, *bank.rglob("*"), takes, *takes.rglob("*")):
            path.chmod(0o777)
        (bank / "gone.toml").unlink()
        (bank / "closed").chmod(0)
        try:
            with no_privileges():
                done = run(bank, takes, prune=True)
        finally:
            (bank / "closed").chmod(0o777)
        assert (done.gone, done.pruned) == (["gone.wav"], [])
        assert "not all of the bank can be read" in done.warnings[0]
        assert (takes / "closed/deep.wav").exists()
        assert (takes / "gone.wav").exists()
        assert run(bank, takes, prune=True).pruned == ["gone.wav"]


def test_one_phrase_and_one_pattern_need_not_stand_in_a_list(bank, takes):
    phrase = str(bank / "line.toml")
    assert run(bank, takes, phrases=phrase, include="basses", exclude="round.toml").made == [
        "basses/deep.wav"
    ]


def test_how_long_a_phrase_may_be_is_asked_each_time(bank, takes):
    run(bank, takes)
    [*failed] = run(bank, takes, longest_s=0.01).failed
    assert len(failed) == 3
    assert "the longest allowed" in failed[0].lines[0]


def page_of(takes):
    return (takes / "summary.html").read_text("utf-8")


def test_a_failure_that_is_mended_leaves_the_summary(bank, takes):
    """Whether the preset goes, or comes back as it was: nothing is made then, and nothing may be listed."""
    lay_preset(bank, "bad.toml", text="[pitch\n")
    run(bank, takes)
    assert "bad.toml: " in page_of(takes)
    written = [takes / name for name in contents(takes)]
    before = [path.stat().st_mtime_ns for path in written]
    assert len(run(bank, takes).failed) == 1
    assert [path.stat().st_mtime_ns for path in written] == before
    (bank / "bad.toml").unlink()
    done = run(bank, takes)
    assert (done.made, done.current) == ([], 3)
    assert "bad.toml" not in page_of(takes)
    good = (bank / "lead.toml").read_bytes()
    (bank / "lead.toml").write_text("[pitch\n")
    run(bank, takes)
    assert "lead.toml: " in page_of(takes)
    (bank / "lead.toml").write_bytes(good)
    assert run(bank, takes).made == []
    assert "lead.toml: " not in page_of(takes)


def test_a_summary_that_was_changed_is_written_again(bank, takes):
    run(bank, takes)
    before = contents(takes)
    (takes / "summary.html").write_text("<!doctype html>Glidesmith, changed")
    assert run(bank, takes).made == []
    assert contents(takes) == before
    os.utime(takes / "summary.html")
    stamp = (takes / "summary.html").stat().st_mtime_ns
    run(bank, takes)
    assert (takes / "summary.html").stat().st_mtime_ns == stamp


def test_the_summary_of_a_bank_that_was_renamed_has_its_new_name(bank, takes):
    run(bank, takes)
    bank.rename(bank.parent / "new-name")
    assert run(bank.parent / "new-name", takes).made == []
    assert "new-name" in page_of(takes)


def test_what_was_made_is_told_though_the_manifest_can_not_be_written(bank, takes):
    lay_preset(bank, "bad.toml", text="[pitch\n")
    (takes / "summary.html.part").mkdir(parents=True)
    done = run(bank, takes)
    assert (len(done.made), len(done.failed)) == (3, 1)
    assert "in the way" in done.stopped
    (takes / "summary.html.part").rmdir()
    assert run(bank, takes).current == 3


def test_pruning_removes_nothing_that_was_changed_or_stands_behind_a_link(bank, takes, tmp_path):
    run(bank, takes)
    for name in ("lead.toml", "basses/deep.toml", "basses/round.toml"):
        (bank / name).unlink()
    lay_preset(bank, "new.toml")
    with (takes / "lead.wav").open("ab") as file:
        file.write(b"mine")
    (takes / "basses").rename(tmp_path / "kept")
    (takes / "basses").symlink_to(tmp_path / "kept")
    done = run(bank, takes, prune=True)
    assert done.pruned == []
    assert len(done.warnings) == 3
    assert (takes / "lead.wav").exists()
    assert len(list((tmp_path / "kept").iterdir())) == 2


def test_a_manifest_can_not_make_pruning_leave_the_folder(bank, takes, tmp_path):
    run(bank, takes)
    victim = tmp_path / "victim.wav"
    victim.write_bytes(b"mine")
    digest = contents(tmp_path)["victim.wav"]
    forged = {**records(takes)[0], "item": "../victim.wav", "preset": "gone.toml", "file_sha256": digest}
    with (takes / "manifest.jsonl").open("a") as file:
        file.write(json.dumps(forged) + "\n")
    done = run(bank, takes, prune=True)
    assert victim.exists()
    assert any("damaged" in line for line in done.warnings)
    assert len(records(takes)) == 3


def test_an_output_that_is_gone_with_its_preset_is_forgotten(bank, takes):
    run(bank, takes)
    (bank / "lead.toml").unlink()
    (takes / "lead.wav").unlink()
    done = run(bank, takes)
    assert (done.gone, done.others) == ([], 0)
    assert len(records(takes)) == 2


# What no longer lands


def test_what_never_lands_and_what_no_longer_does_is_told(bank, takes):
    done = run(bank, takes)
    assert done.never_land == []
    lay_preset(bank, "lead.toml", rise_ms=2000)
    lay_preset(bank, "slow.toml", rise_ms=2000)
    done = run(bank, takes)
    (lead,) = done.no_longer
    assert (lead.item, lead.count, lead.glides, lead.before) == ("lead.wav", 1, 1, 0)
    assert (lead.worst_from, lead.worst_to) == ("D3", "A3")
    assert [each.item for each in done.never_land] == ["lead.wav", "slow.wav"]
    assert done.all_never_land == 2
    assert run(bank, takes).all_never_land == 2


# Jobs


@pytest.mark.parametrize("jobs", [2, 3])
def test_the_same_bytes_whatever_the_number_of_jobs(bank, takes, tmp_path, jobs):
    for number in range(8):
        lay_preset(bank, f"more/{number}.toml", rise_ms=10 + number)
    assert len(run(bank, takes, jobs=1).made) == 11
    assert len(run(bank, tmp_path / "others", jobs=jobs).made) == 11
    assert contents(takes) == contents(tmp_path / "others")


def test_the_demo_bank_gives_what_rendering_gives(tmp_path):
    """A file of a batch is the file that `render` writes, to the byte."""
    from commands import run as command

    names = ["fog-bell", "wireless-key-clicks", "customs-shed-ledger"]
    done = run(PRESETS, tmp_path / "takes", include=[f"{name}.toml" for name in names])
    assert len(done.made) == 3
    command("render", *(PRESETS / f"{name}.toml" for name in names), "-o", tmp_path / "renders")
    for name in names:
        assert (tmp_path / f"takes/{name}.wav").read_bytes() == (
            tmp_path / f"renders/{name}.wav"
        ).read_bytes()
    sources = {record["item"]: set(record["sources"]) for record in records(tmp_path / "takes")}
    assert sources["fog-bell.wav"] == {
        "fog-bell.toml", "cycles/fog-bell.wav", "../shared/phrases/fog-signals.mid"
    }  # fmt: skip
    assert load_preset(PRESETS / "fog-bell.toml").oscillator.wave == "file"


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"sample_rate": 7999}, "sample rate 7999"),
        ({"sample_rate": 48_000.5}, "sample rate"),
        ({"depth": 32}, "depth 32"),
        ({"loudness": 3.0}, "loudness"),
        ({"loudness": float("nan")}, "loudness"),
        ({"loudness": -23.0, "meter": False}, "no meter is to run"),
        ({"tolerance_cents": 0}, "tolerance"),
        ({"jobs": 0}, "jobs"),
        ({"vary": {"pitch.raise": [1]}}, "pitch.rise"),
        ({"vary": {"phrase.file": ["a"]}}, "can't vary phrase.file"),
        ({"name": 5}, "name 5: give text"),
        ({"exclude": [5]}, r"exclude 5: give text"),
        ({"include": 5}, r"include 5: give text"),
        ({"phrases": [5]}, "phrases 5: give a path"),
        ({"phrases": 5}, "phrases 5: give a path"),
        ({"longest_s": -1}, "longest_s -1: give seconds above 0"),
        ({"longest_s": float("nan")}, "longest_s"),
        ({"longest_s": "long"}, "longest_s"),
        ({"phrases": ["x"], "channel": 17}, "channel 17: give a whole number, 1 to 16"),
        ({"phrases": ["x"], "track": 0}, "track 0"),
        ({"phrases": ["x"], "track": "1"}, "track"),
    ],
)
def test_what_can_not_be_asked_is_told_before_anything_is_made(bank, takes, options, said):
    with pytest.raises(SettingError, match=said):
        run(bank, takes, **options)
    assert not takes.exists()


def test_progress_counts_every_item_once(bank, takes):
    lay_preset(bank, "bad.toml", text="[pitch\n")
    seen = []
    run(bank, takes, progress=lambda *each: seen.append(each))
    assert seen[-1] == (4, 4)
    assert [done for done, _ in seen] == sorted(done for done, _ in seen)


def test_an_item_removed_while_the_batch_runs_is_told(bank, takes, monkeypatch):
    def run_and_remove(orders, place):
        for number, outcome in batching.run_here(orders, place):
            Path(takes / outcome["item"]).unlink()
            yield number, outcome

    done = run(bank, takes, run=run_and_remove)
    assert len(done.failed) == 3
    assert "was removed while the batch ran" in done.failed[0].lines[0]
    assert records(takes) == []


def test_the_output_folder_removed_while_the_batch_runs_stops_it(bank, takes):
    import shutil

    def run_and_remove(orders, place):
        for number, outcome in batching.run_here(orders, place):
            shutil.rmtree(takes)
            yield number, outcome

    with pytest.raises(OutputError, match="was removed or replaced while the batch ran"):
        run(bank, takes, run=run_and_remove)
