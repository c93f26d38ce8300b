"""Banks: which files are found, which are taken, and what outputs are called."""

import errno
import inspect
import os
import sys
from pathlib import Path

import pytest

from glidesmith import SettingError
from glidesmith.bank import (
    AS_IT_IS,
    Choice,
    NamePattern,
    checked_name,
    default_pattern,
    find_presets,
    folded,
    is_gone,
    is_inside,
    phrase_names,
    variations,
)
from glidesmith.candidates import axes_from_texts
from unprivileged import no_privileges, open_folder


def lay(folder: Path, *names: str) -> Path:
    for name in names:
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text("")
    return folder


def names(folder, include=(), exclude=(), output=None):
    return [found.name for found in find_presets(folder, Choice(include, exclude), output)[0]]


def test_all_below_a_folder_in_order_without_what_is_hidden(tmp_path):
    lay(
        tmp_path, "z.toml", "a/b/c.TOML", "a.toml", ".hidden.toml", ".git/x.toml", "a/.b/y.toml", "a/line.mid"
    )
    assert names(tmp_path) == ["a.toml", "a/b/c.TOML", "z.toml"]


def test_links_in_a_circle_come_to_an_end_and_each_folder_counts_once(tmp_path):
    bank = lay(tmp_path / "bank", "one/a.toml", "two/b.toml")
    (bank / "one" / "up").symlink_to("..")
    (bank / "two" / "across").symlink_to(bank / "one")
    (bank / "self").symlink_to("self")
    (bank / "round").symlink_to(bank)
    outside = lay(tmp_path / "outside", "c.toml")
    (bank / "aside").symlink_to(outside)
    (outside / "back").symlink_to(bank)
    assert names(bank) == ["aside/c.toml", "one/a.toml", "two/b.toml"]


def test_a_linked_preset_is_found_and_one_that_leads_nowhere_has_no_stamp(tmp_path):
    lay(tmp_path, "a.toml")
    (tmp_path / "b.toml").symlink_to("a.toml")
    (tmp_path / "c.toml").symlink_to("nowhere.toml")
    found = {each.name: each.stamp for each in find_presets(tmp_path, Choice())[0]}
    assert found["b.toml"] == found["a.toml"] != None  # noqa: E711 - it is compared with a tuple
    assert found["c.toml"] is None


def test_the_output_folder_is_left_out_unless_it_is_the_bank_itself(tmp_path):
    lay(tmp_path, "a.toml", "takes/b.toml")
    assert names(tmp_path, output=tmp_path / "takes") == ["a.toml"]
    assert names(tmp_path, output=tmp_path / "not-there-yet") == ["a.toml", "takes/b.toml"]
    assert names(tmp_path, output=tmp_path) == ["a.toml", "takes/b.toml"]


@pytest.mark.parametrize(
    ("include", "exclude", "taken"),
    [
        (["leads"], [], ["leads/a.toml", "leads/old/b.toml"]),
        (["leads/*.toml"], ["old"], ["leads/a.toml"]),
        ([], ["leads/old"], ["bass.toml", "leads/a.toml"]),
        (["?.toml"], [], ["leads/a.toml", "leads/old/b.toml"]),
        (["bass.toml", "b.toml"], [], ["bass.toml", "leads/old/b.toml"]),
        (["[ab]*"], ["*/b.toml"], ["bass.toml", "leads/a.toml"]),
        (["LEADS"], [], []),
    ],
)
def test_patterns_go_for_paths_folders_and_names(tmp_path, include, exclude, taken):
    lay(tmp_path, "bass.toml", "leads/a.toml", "leads/old/b.toml")
    assert names(tmp_path, include, exclude) == taken


def test_an_empty_pattern_is_refused():
    with pytest.raises(SettingError, match="exclude: a pattern is empty"):
        Choice((), ("/",))


def test_a_folder_that_can_not_be_read_is_told_and_the_others_are_found():
    with open_folder() as folder:
        lay(folder, "a.toml", "closed/b.toml")
        (folder / "closed").chmod(0)
        with no_privileges():
            found, unread = find_presets(folder, Choice())
        (folder / "closed").chmod(0o700)
    assert [each.name for each in found] == ["a.toml"]
    assert "closed" in str(unread[0])


def test_a_bank_that_is_no_folder_is_refused(tmp_path):
    lay(tmp_path, "a.toml")
    with pytest.raises(SettingError, match="there is no such folder"):
        find_presets(tmp_path / "b", Choice())
    with pytest.raises(SettingError, match="is a file"):
        find_presets(tmp_path / "a.toml", Choice())


def test_deep_folders_are_walked_without_recursion(tmp_path):
    folder = tmp_path / "/".join(["d"] * 150)
    folder.mkdir(parents=True)
    (folder / "a.toml").write_text("")
    limit = sys.getrecursionlimit()
    sys.setrecursionlimit(len(inspect.stack()) + 60)
    try:
        assert len(names(tmp_path)) == 1
    finally:
        sys.setrecursionlimit(limit)


# What is varied


def test_variations_are_all_combinations_in_order_with_plain_names():
    made = variations(axes_from_texts(["pitch.law=rc,exp", "pitch.rise=20ms,0.1"]))
    assert [each.name for each in made] == [
        "rc-rise-20ms",
        "rc-rise-100ms",
        "exp-rise-20ms",
        "exp-rise-100ms",
    ]
    assert made[1].plain() == {"pitch.law": "rc", "pitch.rise": 0.1}
    assert variations({}) == (AS_IT_IS,)


def test_a_key_with_one_value_is_named_too():
    assert [each.name for each in variations(axes_from_texts(["pitch.rise=60ms"]))] == ["rise-60ms"]


def test_variations_whose_names_are_alike_are_numbered():
    made = variations(axes_from_texts(['oscillator.file="a/x y.wav","b/x-y.wav"']))
    assert [each.name for each in made] == ["1-file-x-y-wav", "2-file-x-y-wav"]


def test_too_many_variations_are_refused():
    many = ",".join(str(value / 1000) for value in range(1, 400))
    with pytest.raises(SettingError, match="159,201 combinations"):
        variations(axes_from_texts([f"pitch.rise={many}", f"pitch.fall={many}"]))


# What outputs are called


@pytest.mark.parametrize(
    ("pattern", "preset", "name"),
    [
        ("{folder}/{preset}", "a.toml", "a.wav"),
        ("{folder}/{preset}", "x/y/a.b.toml", "x/y/a.b.wav"),
        ("{values}/{folder}/{preset}", "x/a.toml", "rc/x/a.wav"),
        ("{values}/{folder}/{preset}", "a.toml", "rc/a.wav"),
        ("takes/{preset}_{phrase}.WAV", "x/a.toml", "takes/a_line.WAV"),
        ("{preset}.{phrase}", "x/a.toml", "a.line.wav"),
    ],
)
def test_patterns_give_names(pattern, preset, name):
    assert NamePattern(pattern).name(preset, "phrases/line.mid", "rc") == name


def test_default_names_mirror_the_bank_and_tell_outputs_apart():
    assert NamePattern(default_pattern(False, False)).name("x/a.toml", "l.toml", "") == "x/a.wav"
    assert NamePattern(default_pattern(True, True)).name("x/a.toml", "l.toml", "rc") == "x/a_l_rc.wav"


@pytest.mark.parametrize(
    ("pattern", "said"),
    [
        ("../{preset}", "inside the output folder"),
        ("{preset}/../../x", "inside the output folder"),
        ("/tmp/{preset}", "inside the output folder"),
        ("a//{preset}", "inside the output folder"),
        ("{presets}", 'did you mean "preset"'),
        ("{}", "placeholders are"),
        ("{preset", "a brace has no partner"),
        ("x\0y", "not a name that a file can have"),
    ],
)
def test_patterns_that_can_not_be_meant_are_refused(pattern, said):
    with pytest.raises(SettingError, match=said):
        NamePattern(pattern)


def test_an_empty_part_of_one_item_is_refused_when_it_comes_up():
    with pytest.raises(SettingError, match="inside the output folder"):
        NamePattern("{values}/{preset}").name("a.toml", "l.toml", "")


@pytest.mark.parametrize(
    "name", ["../a.wav", "/a.wav", "a/../../b.wav", "a.txt", 7, None, "a\0.wav", "./a.wav"]
)
def test_names_outside_are_known(name):
    assert not is_inside(name)
    assert is_inside("a/b.wav")


def test_names_are_told_in_printable_form():
    with pytest.raises(SettingError) as caught:
        checked_name("../a\n.wav", "evil\x1b")
    assert str(caught.value).isprintable()


@pytest.mark.parametrize(
    ("pattern", "said"),
    [
        ("{preset}\n", "control character"),
        ("{preset}\x7f", "control character"),
        ("aux/{preset}", "names a device on Windows"),
        ("Con", "names a device on Windows"),
        ("lpt1.{preset}", "names a device on Windows"),
        ("takes./{preset}", "ends with a dot or a space"),
        ("takes /{preset}", "ends with a dot or a space"),
        ("{folder}./{preset}", "ends with a dot or a space"),
    ],
)
def test_names_that_not_every_system_can_have_are_refused(pattern, said):
    with pytest.raises(SettingError, match=said):
        NamePattern(pattern)


def test_capital_suffixes_are_outputs_too():
    assert NamePattern("{preset}.WAV").name("lead.toml", "", "") == "lead.WAV"
    assert is_inside("lead.WAV")


def test_names_are_compared_as_file_systems_do_that_know_no_case_and_one_form_of_accents():
    assert folded("Étude/STRASSE.wav") == folded("e\u0301tude/straße.wav")
    assert folded("a.wav") != folded("b.wav")


def test_what_can_not_be_looked_at_is_not_gone(tmp_path, monkeypatch):
    bank = tmp_path / "bank"
    (bank / "leads").mkdir(parents=True)
    (bank / "leads" / "a.toml").touch()
    (bank / "file").touch()
    assert not is_gone(bank, "leads/a.toml")
    assert is_gone(bank, "leads/b.toml")
    assert is_gone(bank, "no/b.toml")
    assert is_gone(bank, "file/b.toml")
    (bank / "share").symlink_to(tmp_path / "away")
    assert not is_gone(bank, "share/b.toml")
    assert not is_gone(bank, "share/deep/b.toml")
    (tmp_path / "away").mkdir()
    assert is_gone(bank, "share/b.toml")
    for number in (errno.EACCES, errno.EIO, errno.ESTALE, errno.ELOOP):
        monkeypatch.setattr(Path, "lstat", lambda self, number=number: _refuse(number))
        assert not is_gone(bank, "leads/b.toml")


def _refuse(number):
    raise OSError(number, "")


@pytest.mark.parametrize("given", [5, [5], [None], b"x"])
def test_patterns_that_are_no_text_are_refused_in_a_line(given):
    with pytest.raises(SettingError, match=r"exclude .*: give text"):
        Choice(exclude=given)


def test_one_pattern_need_not_stand_in_a_list():
    assert Choice("leads").takes("leads/a.toml")
    assert not Choice("leads").takes("l/a.toml")


def test_two_phrases_of_one_name_are_refused():
    assert phrase_names([Path("a.toml"), Path("x/b.mid")]) == ["a", "b"]
    with pytest.raises(SettingError, match="two phrases are called"):
        phrase_names([Path("a.toml"), Path("x/a.mid")])


def test_names_that_are_no_text_survive(tmp_path):
    name = os.fsdecode(b"b\xff.toml")
    (tmp_path / name).write_text("")
    assert names(tmp_path) == [name]
    assert is_inside(NamePattern("{preset}").name(name, "", ""))
