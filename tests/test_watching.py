"""Watching: what is saved is made again, half-written files are waited for, mistakes are told once.

What happens when is driven by the tests themselves: looks are taken by hand and the clock is theirs. One test
runs the command as a user does; it waits for what must come, and measures nothing.
"""

import os
import queue
import threading

import pytest

from banks import lay_bank, lay_preset
from glidesmith import SettingError
from glidesmith.batching import run_here
from glidesmith.desk import Desk
from glidesmith.planning import Survey, checked_request
from glidesmith.production import Options
from glidesmith.watching import SETTLED_S, Watcher, watch


class Watched:
    """A bank that is watched, with a clock that stands still until it is moved."""

    def __init__(self, folder, bank):
        self.bank, self.takes = bank, folder / "takes"
        self.request = checked_request(
            bank, self.takes, (), (None, None, 60.0), None, None, ((), ()), Options()
        )
        self.now_s, self.heard = 0.0, []
        self.desk = Desk(self.takes).held()
        self.watcher = Watcher(self.request, self.desk, run_here, self.heard.append, lambda: self.now_s)
        self.watcher.begin(Survey(self.request))

    def look(self, later_s=0.0):
        """What was heard of in one look."""
        self.now_s += later_s
        before = len(self.heard)
        self.watcher.look()
        return self.heard[before:]

    def settle(self):
        """What was heard of once nothing has changed for a while."""
        return self.look(SETTLED_S + 0.01)


@pytest.fixture
def watched(tmp_path):
    watched = Watched(tmp_path, lay_bank(tmp_path / "bank"))
    yield watched
    watched.desk.__exit__()


def save(path, text, number=[0]):  # noqa: B006 - counts, so that each save has a time of its own
    """Save, with a time that no earlier save had, whatever the file system's clock."""
    number[0] += 1
    path.write_text(text)
    os.utime(path, ns=(10**18 + number[0], 10**18 + number[0]))


def test_the_first_run_makes_all_and_nothing_happens_when_nothing_changes(watched):
    assert len(watched.heard[0].made) == 3
    assert watched.look() == []
    assert watched.settle() == []


def test_a_saved_preset_is_made_again_at_the_next_look(watched):
    lay_preset(watched.bank, "lead.toml", rise_ms=7)
    (done,) = watched.look()
    assert done.made == ["lead.wav"]
    assert watched.settle() == []


def test_saving_by_another_name_and_renaming(watched):
    path = watched.bank / "lead.toml"
    text = path.read_text().replace("1 ms", "8 ms")
    save(watched.bank / "lead.toml~", text)
    assert watched.look() == []
    (watched.bank / "lead.toml~").rename(path)
    (done,) = watched.look()
    assert done.made == ["lead.wav"]


def test_a_saved_phrase_makes_all_that_play_it_again(watched):
    path = watched.bank / "line.toml"
    save(path, path.read_text().replace("A3", "B3"))
    (done,) = watched.look()
    assert len(done.made) == 3


def test_a_new_preset_is_made_and_one_that_went_is_let_be(watched):
    lay_preset(watched.bank, "new/one.toml")
    assert [done.made for done in watched.look()] == [["new/one.wav"]]
    (watched.bank / "new/one.toml").unlink()
    assert watched.look() == []
    assert (watched.takes / "new/one.wav").exists()


def test_a_half_written_file_is_tried_again_and_not_told(watched):
    path = watched.bank / "lead.toml"
    text = path.read_text().replace("1 ms", "9 ms")
    for end in (0, len(text) // 3, len(text) // 2):
        save(path, text[:end])
        assert watched.look(0.1) == []
    save(path, text)
    (done,) = watched.look(0.1)
    assert (done.made, done.failed) == (["lead.wav"], [])
    assert watched.settle() == []


def test_a_mistake_is_told_once_when_the_file_has_settled_and_watching_goes_on(watched):
    path = watched.bank / "lead.toml"
    text = path.read_text()
    save(path, text.replace("[gain]", "[gian]"))
    assert watched.look() == []
    assert watched.look(SETTLED_S / 2) == []
    (done,) = watched.settle()
    assert [each.preset for each in done.failed] == ["lead.toml"]
    assert watched.settle() == []
    lay_preset(watched.bank, "basses/deep.toml", rise_ms=6)
    (done,) = watched.look()
    assert (done.made, done.failed) == (["basses/deep.wav"], [])
    assert watched.settle() == []
    save(path, text.replace("1 ms", "4 ms"))
    (done,) = watched.look()
    assert done.made == ["lead.wav"]
    save(path, text.replace("[gain]", "[gian]"))
    watched.look()
    assert len(watched.settle()) == 1


def test_a_mistake_that_is_taken_back_leaves_the_summary(watched):
    """The preset is as it was when its output was made, so that nothing is made."""
    path, page = watched.bank / "lead.toml", watched.takes / "summary.html"
    text = path.read_text()
    save(path, text.replace("[gain]", "[gian]"))
    watched.look()
    watched.settle()
    assert "lead.toml: " in page.read_text("utf-8")
    save(path, text)
    assert watched.look() == []
    assert "lead.toml: " not in page.read_text("utf-8")


def test_an_address_is_refused_unless_it_is_a_folder(tmp_path):
    bank = lay_bank(tmp_path / "bank")
    with pytest.raises(SettingError, match="watching needs a folder") as raised:
        watch(bank, "s3://me:secret@bucket/takes")
    assert "secret" not in str(raised.value)
    watch(bank, f"file://{tmp_path}/takes", jobs=1, stop=lambda: True)
    assert (tmp_path / "takes" / "lead.wav").exists()


def test_a_bank_that_goes_and_comes_back(watched):
    watched.bank.rename(watched.bank.with_name("away"))
    assert watched.look() == []
    (done,) = watched.settle()
    assert "there is no such folder" in done.failed[0].lines[0]
    watched.bank.with_name("away").rename(watched.bank)
    assert watched.look() == []
    lay_preset(watched.bank, "lead.toml", rise_ms=3)
    assert [done.made for done in watched.look()] == [["lead.wav"]]


def test_two_saves_within_one_tick_of_the_clock_are_both_seen(watched):
    path = watched.bank / "lead.toml"
    first, second = (path.read_text().replace("1 ms", f"{ms} ms") for ms in (5, 6))
    path.write_text(first)
    stamp = path.stat().st_mtime_ns
    assert len(watched.look()) == 1
    path.write_text(second)
    os.utime(path, ns=(stamp, stamp))
    assert watched.look() == []
    (done,) = watched.settle()
    assert done.made == ["lead.wav"]


def test_what_can_not_be_asked_is_told_before_anything_is_made(tmp_path):
    with pytest.raises(SettingError, match="holds no preset"):
        watch(lay_bank(tmp_path / "bank"), tmp_path / "takes", include=["nothing"])
    assert not (tmp_path / "takes").exists()


def test_watching_until_told_to_stop(tmp_path):
    bank, heard, over = lay_bank(tmp_path / "bank"), queue.Queue(), threading.Event()
    watching = threading.Thread(
        target=watch,
        args=(bank, tmp_path / "takes"),
        kwargs={"jobs": 1, "heard": heard.put, "stop": over.is_set},
    )
    watching.start()
    try:
        assert len(heard.get(timeout=120).made) == 3
        lay_preset(bank, "lead.toml", rise_ms=8)
        assert heard.get(timeout=60).made == ["lead.wav"]
    finally:
        over.set()
        watching.join(timeout=60)
    assert not watching.is_alive()
