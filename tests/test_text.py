"""Reading, printing and writing text: bounds, escapes, and files that appear whole or not at all."""

import errno
import os
import stat
import subprocess
import sys
from fractions import Fraction
from pathlib import Path

import pytest

from glidesmith import text
from glidesmith.errors import OutputError, PhraseError, PresetError


@pytest.mark.parametrize(
    ("raw", "safe"),
    [
        ("Night ferry – größer", "Night ferry – größer"),
        ("a\nb\tc\rd", "a\\nb\\tc\\rd"),
        ("\x1b[31mred\x07", "\\x1b[31mred\\x07"),
        ("del\x7f c1\x9b", "del\\x7f c1\\x9b"),
        ("right\u202eleft\u2028line", "right\\u202eleft\\u2028line"),
        ("half \udc80", "half \\udc80"),
        ("tag \U000e0001", "tag \\U000e0001"),
    ],
)
def test_printable_escapes_what_a_terminal_would_act_on(raw: str, safe: str) -> None:
    assert text.printable(raw) == safe
    assert text.printable(raw).isprintable()


def test_shortened_has_the_length_asked_for_and_marks_the_cut() -> None:
    assert text.shortened("abc", 3) == "abc"
    assert text.shortened("abcd", 3) == "ab…"
    assert len(text.shortened("\x00" * 10_000_000, 60)) == 60


@pytest.mark.parametrize(
    ("value", "quoted"),
    [
        ("saw", '"saw"'),
        (True, "true"),
        (False, "false"),
        (12, "12"),
        (0.5, "0.5"),
        (float("nan"), "nan"),
        (Fraction(5, 4), "1.25"),
        (Fraction(1, 3), "0.3333333333333333"),
        (Fraction(10**400), "a number over 1e308"),
        ({"a": 1}, "a table"),
        ([1, 2], "an array"),
        (None, "nothing"),
        (10**5000, "a number of 16,610 bits"),
    ],
    ids=range(13),
)
def test_shown_quotes_any_value_short(value: object, quoted: str) -> None:
    assert text.shown(value) == quoted


def test_shown_does_not_walk_into_deep_values() -> None:
    deep: object = []
    for _ in range(100_000):
        deep = [deep]
    assert text.shown(deep) == "an array"


def test_nearest_finds_the_key_that_was_meant() -> None:
    choices = ("attack", "decay", "sustain", "release")
    assert text.nearest("atack", choices) == "attack"
    assert text.nearest("SUSTAIN", choices) == "sustain"
    assert text.nearest("zzzz", choices) is None
    assert text.nearest("attack" * 100_000, choices) is None


@pytest.mark.parametrize(
    ("typed", "meant"),
    [
        ("plse", "pulse"),
        ("pusle", "pulse"),
        ("plus", "pulse"),
        ("sqaure", None),
        ("sien", "sine"),
        ("trangel", "triangle"),
        ("fil", "file"),
        ("frob", None),
        ("sawtooth", "saw"),
        ("tri", "triangle"),
        ("s", None),
        ("x", None),
        ("", None),
    ],
)
def test_nearest_takes_up_to_two_slips_or_a_beginning(typed: str, meant: str | None) -> None:
    assert text.nearest(typed, ("sine", "triangle", "saw", "pulse", "file")) == meant


def test_nearest_does_not_choose_between_two_beginnings() -> None:
    assert text.nearest("level", ("level_db", "level_range")) is None
    assert text.nearest("level", ("level_db", "range_db")) == "level_db"


def test_file_names_are_printable_and_cut_in_the_middle() -> None:
    assert text.file_name(Path("bank/a\x1b.toml")) == "bank/a\\x1b.toml"
    long = text.file_name("x" * 5000 + "/lead.toml")
    assert len(long) <= 200
    assert long.startswith("xxx")
    assert long.endswith("…" + "x" * 89 + "/lead.toml")


def test_what_is_counted_goes_by_its_number() -> None:
    counts = [text.counted(number, "track", "tracks") for number in (0, 1, 1200)]
    assert counts == ["0 tracks", "1 track", "1,200 tracks"]


def test_mistakes_tells_twenty_and_counts_the_rest() -> None:
    mistakes = text.Mistakes("lead.toml")
    for number in range(25):
        mistakes.add(f"mistake {number}")
    with pytest.raises(PresetError) as caught:
        mistakes.raise_as(PresetError)
    assert len(caught.value.lines) == 21
    assert caught.value.lines[0] == "lead.toml: mistake 0"
    assert caught.value.lines[-1] == "lead.toml: and 5 more mistakes like these"


def test_one_more_mistake_is_one() -> None:
    mistakes = text.Mistakes()
    for number in range(21):
        mistakes.add(f"mistake {number}")
    with pytest.raises(PresetError) as caught:
        mistakes.raise_as(PresetError)
    assert caught.value.lines[-1] == "and 1 more mistake like these"


def test_no_mistakes_raise_nothing() -> None:
    mistakes = text.Mistakes()
    assert not mistakes
    mistakes.raise_as(PresetError)


def refusal(path: Path, most_bytes: int = 1000) -> str:
    with pytest.raises(PhraseError) as caught:
        text.read_bytes(path, most_bytes, PhraseError)
    (line,) = caught.value.lines
    assert line.isprintable()
    return line


def test_read_bytes_reads_up_to_its_bound(tmp_path: Path) -> None:
    file = tmp_path / "notes"
    file.write_bytes(b"x" * 1000)
    assert text.read_bytes(file, 1000, PhraseError) == b"x" * 1000
    assert "over 999 bytes" in refusal(file, 999)


def test_read_bytes_refuses_what_is_no_file(tmp_path: Path) -> None:
    assert "no such file" in refusal(tmp_path / "gone.toml")
    assert "is a folder" in refusal(tmp_path)
    (tmp_path / "plain").write_text("")
    assert str(tmp_path / "plain" / "below") in refusal(tmp_path / "plain" / "below")
    assert "not a name" in refusal(tmp_path / "nul\0name")
    assert "can't be read" in refusal(tmp_path / ("n" * 5000))
    assert "\\x1b" in refusal(tmp_path / "esc\x1bape")


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="this system has no pipes with a name")
def test_read_bytes_waits_for_no_pipe_and_reads_no_device(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    assert "device or a pipe" in refusal(tmp_path / "pipe")
    assert "device or a pipe" in refusal(Path("/dev/zero"))


def test_read_bytes_says_why_the_system_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "secret").write_text("x")

    def refuse(*_: object) -> int:
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(text.os, "open", refuse)
    assert "Permission denied" in refusal(tmp_path / "secret")


@pytest.mark.parametrize(
    ("data", "reason"),
    [
        ("title".encode("utf-16"), "UTF-16"),
        (b"title\0", "NUL bytes"),
        (b"a = 1\nb = '\xe9'", "byte 0xE9 in line 2"),
    ],
)
def test_decoded_takes_plain_utf8_only(data: bytes, reason: str) -> None:
    with pytest.raises(PresetError) as caught:
        text.decoded(data, "lead.toml", PresetError)
    (line,) = caught.value.lines
    assert line.startswith("lead.toml: ")
    assert reason in line


def test_a_byte_order_mark_is_kept_by_the_decoder_and_passed_over_by_the_parser() -> None:
    marked = text.decoded(b"\xef\xbb\xbfa = 1\n", "", PresetError)
    assert marked == "\ufeffa = 1\n"
    assert text.toml_mapping(marked, "", PresetError) == {"a": 1}
    assert text.edited_toml(marked, {"a": 2}) == "\ufeffa = 2\n"
    with pytest.raises(PresetError, match="not valid TOML"):
        text.toml_mapping("\ufeff" + marked, "", PresetError)
    with pytest.raises(PresetError, match="nested far too deeply"):
        text.toml_mapping("\ufeff" + ".".join("a" * 200_000) + " = 1", "", PresetError)


@pytest.mark.parametrize(
    ("toml", "mending"),
    [
        ("[pitch]\n[pitch]\n", "; keep one of the two, with the keys of both"),
        ("[a.'b c']\n[a.'b c']\n", "; keep one of the two, with the keys of both"),
        ("a = 1\na = 2\n", "; a key or table is there twice; keep one of the two"),
        ("a = {x = 1}\na.y = 2\n", "; a table is there twice; keep one of the two, with the keys of both"),
        ("rise = 80 ms\n", '; write one key = value to a line, with text in quotes, as rise = "80 ms"'),
        ("law = rc\n", '; write text in quotes, as "80 ms", and numbers without units, as 0.08'),
        ('law = "rc\n', "; close the text with the quote that began it, in the same line"),
        ("law = 'rc", "; close the text with the quote that began it"),
        ('law = "rc', "; close the text with the quote that began it"),
        ('file = "a\\q"', "; write \\\\ for a backslash, or put the text in single quotes"),
        ("a = [1\n", "; close it with ]"),
        ("[pitch\n", "; close the name with ], as in [pitch]"),
        ("a = 'x\x01'\n", "; take this character out"),
        ("= 3\n", "; write every line as [table] or key = value"),
        ("a\n", "; write every line as [table] or key = value"),
    ],
    ids=range(15),
)
def test_what_the_parser_finds_is_followed_by_how_to_mend_it(toml: str, mending: str) -> None:
    with pytest.raises(PresetError) as caught:
        text.toml_mapping(toml, "lead.toml", PresetError)
    (line,) = caught.value.lines
    assert line.startswith("lead.toml: is not valid TOML: ")
    assert line.endswith(mending)
    assert "('" not in line
    assert line.isprintable()


def test_decoded_keeps_line_ends() -> None:
    assert text.decoded("ä = 1\r\nb = 2\n".encode(), "", PresetError) == "ä = 1\r\nb = 2\n"


@pytest.mark.parametrize(
    "hostile",
    [
        "a = " + "[" * 100_000,
        "a = " + "{b=" * 100_000,
        ".".join("a" * 200_000) + " = 1",
        "[" + ".".join("a" * 200_000) + "]",
        "[[" + ".".join("a" * 200_000) + "]]",
        "x = {" + " . ".join("a" * 200_000) + " = 1}",
        "x = {b = 1, " + ".".join(["'a='"] * 100_000) + " = 1}",
        '"="' + '."="' * 100_000 + " = 1",
    ],
    ids=[
        "arrays",
        "inline tables",
        "key",
        "table",
        "list of tables",
        "inline key",
        "later key",
        "quoted key",
    ],
)
def test_toml_nested_without_end_is_refused_at_once(hostile: str) -> None:
    with pytest.raises(PresetError, match="nested far too deeply"):
        text.toml_mapping(hostile, "lead.toml", PresetError)


@pytest.mark.parametrize("digits", ["9" * 5000, "-" + "9" * 100_000], ids=["thousands", "more"])
def test_toml_numbers_of_thousands_of_digits_are_refused(digits: str) -> None:
    with pytest.raises(PresetError, match="thousands of digits"):
        text.toml_mapping(f"a = {digits}", "lead.toml", PresetError)


def test_toml_mistakes_name_the_place_without_control_characters() -> None:
    with pytest.raises(PresetError) as caught:
        text.toml_mapping("a = 1\nb = \x1b[31m", "lead.toml", PresetError)
    (line,) = caught.value.lines
    assert "line 2" in line
    assert line.isprintable()


def test_ordinary_dots_are_not_taken_for_nesting() -> None:
    prose = "# " + "one. two. three. " * 10 + "\n"
    numbers = "x = [" + ", ".join(["0.125"] * 1000) + "]\n"
    quoted = 't = "a.b.c.d.e.f.g.h.i.j.k.l.m.n.o.p.q.r.s.t.u.v.w.x.y.z"\n'
    assert len(text.toml_mapping(prose + numbers + quoted, "", PresetError)["x"]) == 1000


def test_write_whole_replaces_and_keeps_permissions(tmp_path: Path) -> None:
    file = tmp_path / "lead.toml"
    file.write_bytes(b"old")
    file.chmod(0o640)
    text.write_whole(file, b"new")
    assert file.read_bytes() == b"new"
    assert stat.S_IMODE(file.stat().st_mode) == 0o640
    assert list(tmp_path.iterdir()) == [file]


def test_write_whole_gives_a_new_file_the_users_usual_permissions(tmp_path: Path) -> None:
    text.write_whole(tmp_path / "new.toml", b"new")
    (tmp_path / "usual").write_bytes(b"")
    assert (tmp_path / "new.toml").stat().st_mode == (tmp_path / "usual").stat().st_mode


def test_write_whole_leaves_a_symbolic_link_in_place(tmp_path: Path) -> None:
    (tmp_path / "real.toml").write_bytes(b"old")
    (tmp_path / "link.toml").symlink_to("real.toml")
    text.write_whole(tmp_path / "link.toml", b"new")
    assert (tmp_path / "link.toml").is_symlink()
    assert (tmp_path / "real.toml").read_bytes() == b"new"


def unwritten(path: Path) -> str:
    with pytest.raises(OutputError) as caught:
        text.write_whole(path, b"new")
    (line,) = caught.value.lines
    return line


def test_write_whole_says_what_stands_in_the_way(tmp_path: Path) -> None:
    assert "folder does not exist" in unwritten(tmp_path / "none" / "lead.toml")
    assert "is a folder" in unwritten(tmp_path)
    (tmp_path / "plain").write_bytes(b"")
    (tmp_path / "round").symlink_to("round")
    for path in (tmp_path / "plain" / "lead.toml", tmp_path / "round", tmp_path / "nul\0name"):
        assert unwritten(path).startswith(text.printable(str(path)))


@pytest.mark.skipif(not Path("/dev/null").exists(), reason="this system has no null device")
def test_write_whole_never_replaces_a_device() -> None:
    text.write_whole(Path("/dev/null"), b"new")
    assert stat.S_ISCHR(Path("/dev/null").stat().st_mode)


@pytest.mark.parametrize("step", ["fsync", "rename"])
def test_a_failure_while_writing_changes_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str
) -> None:
    file = tmp_path / "lead.toml"
    file.write_bytes(b"old")

    def fail(*_: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    if step == "rename":
        monkeypatch.setattr(Path, "replace", fail)
    else:
        monkeypatch.setattr(text.os, "fsync", fail)
    assert "the disk is full" in unwritten(file)
    assert file.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [file]


def test_a_part_file_that_cannot_be_begun_is_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object) -> int:
        raise OSError(errno.EROFS, "Read-only file system")

    monkeypatch.setattr(text.os, "open", refuse)
    assert "read-only" in unwritten(tmp_path / "lead.toml")


@pytest.mark.skipif(sys.platform == "win32", reason="file size limits are POSIX")
def test_a_really_full_disk_leaves_the_old_file(tmp_path: Path) -> None:
    """The system's own limit on file sizes stands in for a full disk: the write itself fails."""
    file = tmp_path / "lead.toml"
    file.write_bytes(b"old")
    program = (
        "import resource, signal, sys; from pathlib import Path\n"
        "from glidesmith.text import write_whole; from glidesmith.errors import OutputError\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))\n"
        "try: write_whole(Path(sys.argv[1]), b'n' * 100_000)\n"
        "except OutputError as problem: print(problem)\n"
    )
    ran = subprocess.run(
        [sys.executable, "-c", program, str(file)], capture_output=True, text=True, check=True
    )
    assert ran.stdout.startswith(str(file))
    assert file.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [file]


def test_edited_toml_puts_new_keys_before_what_introduces_the_next_table() -> None:
    before = "[pitch]\nrise = 1 # up\n\n# about gain\n[gain]\nrise = 2\n"
    after = "[pitch]\nrise = 1 # up\nknee = 0.5\n\n# about gain\n[gain]\nrise = 2\n"
    assert text.edited_toml(before, {"pitch.knee": 0.5}) == after


def test_edited_toml_takes_a_table_out_and_leaves_the_next_ones_introduction() -> None:
    before = "# all\n\n[drone] # hum\nnote = 3\n\n# about gain\n[gain]\nrise = 2\n"
    assert text.edited_toml(before, {"drone": None}) == "# all\n\n\n# about gain\n[gain]\nrise = 2\n"
    between = "[pitch]\nrise = 1\n" + before
    assert "# about gain\n[gain]" in text.edited_toml(between, {"drone": None})


def test_reading_files_loads_nothing_heavy() -> None:
    """Batches read thousands of presets, and ``--help`` reads the table of keys: neither waits for numpy."""
    program = (
        "import sys, glidesmith.settings, glidesmith.phrase, glidesmith.preset\n"
        "glidesmith.preset.parse_preset('[pitch]\\nrise=1\\nfall=1\\n[gain]\\nrise=1\\nfall=1')\n"
        "heavy = ('numpy', 'numba', 'tomlkit', 'mido', 'click', 'hashlib', 'json')\n"
        "print([name for name in heavy if name in sys.modules])"
    )
    ran = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    assert ran.stdout.strip() == "[]"
