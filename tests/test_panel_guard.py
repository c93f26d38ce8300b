"""Refusals that never flood, and the folders that a panel may use."""

import pytest

from conftest import PHRASES, PRESETS
from glidesmith.errors import OutputError
from glidesmith.panel_guard import Folders, Guard, Refusals, RefusedError


def test_tokens_are_long_and_never_twice_the_same():
    tokens = {Guard(8440).token for _ in range(50)}
    assert len(tokens) == 50
    assert min(map(len, tokens)) >= 32


def test_only_what_is_exactly_right_passes():
    guard = Guard(8440, "secret", hosts=["localhost:9000"])
    for host in ("127.0.0.1:8440", "localhost:8440", "localhost:9000"):
        guard.check({"Host": host, "Origin": f"http://{host}"}, "secret", origin_needed=True)
        guard.check({"Host": host}, "secret", origin_needed=False)
    for headers, token in (
        ({"Host": "127.0.0.1:8441"}, "secret"),
        ({"Host": "LOCALHOST:8440"}, "secret"),
        ({}, "secret"),
        ({"Host": "localhost:8440"}, "secre"),
        ({"Host": "localhost:8440"}, "secrets"),
        ({"Host": "localhost:8440"}, None),
        ({"Host": "localhost:8440", "Origin": "http://localhost:8441"}, "secret"),
        ({"Host": "localhost:8440", "Origin": ""}, "secret"),
    ):
        with pytest.raises(RefusedError):
            guard.check(headers, token, origin_needed=False)


def test_a_flood_of_refusals_is_counted():
    now, lines = [100.0], []
    refusals = Refusals(lines.append, most=3, every_s=10.0, clock=lambda: now[0])
    for number in range(50):
        refusals.add(f"request {number}")
    assert lines == [f"panel: refused: request {number}" for number in range(3)]
    now[0] += 10.0
    refusals.add("one more")
    assert lines[3:] == ["panel: refused 47 more in the same way", "panel: refused: one more"]
    now[0] += 60.0
    refusals.add("and another")
    assert lines[5:] == ["panel: refused: and another"]


@pytest.fixture
def tree(tmp_path):
    for name in ("mine", "phrases", "other"):
        (tmp_path / name).mkdir()
    return tmp_path


def test_links_are_followed_before_they_are_judged(tree):
    folders = Folders([tree / "mine"], [tree / "phrases"])
    (tree / "mine" / "out").symlink_to(tree / "other", target_is_directory=True)
    (tree / "mine" / "away.toml").symlink_to(tree / "other" / "there.toml")  # there is none yet
    (tree / "other" / "back").symlink_to(tree / "mine", target_is_directory=True)
    assert folders.inside("new.toml", ".toml", writing=True) == tree / "mine" / "new.toml"
    assert folders.inside("sub/../NEW.TOML", ".toml", writing=True) == tree / "mine" / "NEW.TOML"
    assert (
        folders.inside(str(tree / "other" / "back" / "a.toml"), ".toml", writing=True).parent == tree / "mine"
    )
    for outside in (
        "out/new.toml",
        "away.toml",
        "../other/new.toml",
        str(tree / "new.toml"),
        "../mine2/a.toml",
    ):
        with pytest.raises(OutputError, match=r"outside the folders.*unless `folders` names others"):
            folders.inside(outside, ".toml")


def test_what_is_only_read_is_not_written_to(tree):
    folders = Folders([tree / "mine"], [tree / "phrases"])
    inside = str(tree / "phrases" / "a.toml")
    assert folders.inside(inside, ".toml") == tree / "phrases" / "a.toml"
    with pytest.raises(OutputError):
        folders.inside(inside, ".toml", writing=True)


def test_a_loop_of_links_is_told_in_a_line(tree):
    (tree / "mine" / "a").symlink_to(tree / "mine" / "b")
    (tree / "mine" / "b").symlink_to(tree / "mine" / "a")
    with pytest.raises(OutputError) as problem:
        Folders([tree / "mine"]).inside("a/c.toml", ".toml")
    assert len(problem.value.lines) == 1


def test_presets_and_phrases_are_told_apart(tmp_path):
    (tmp_path / "nothing.toml").write_text("a = 1\n")
    (tmp_path / "folder.toml").mkdir()
    (tmp_path / "tables.toml").write_text("[[notes]]\nat = 0\n")
    presets, phrases = Folders([PRESETS, tmp_path], [PHRASES, tmp_path / "gone"]).files()
    assert presets == sorted(map(str, PRESETS.glob("*.toml")))
    assert set(phrases) == {
        *map(str, PHRASES.glob("*.toml")),
        *map(str, PHRASES.glob("*.mid")),
        str(tmp_path / "tables.toml"),
    }
