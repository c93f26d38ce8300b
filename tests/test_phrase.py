"""Phrases in TOML: exact beats, and every mistake named with its note."""

import hashlib
import math
from dataclasses import replace
from fractions import Fraction
from itertools import pairwise
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from conftest import LONG
from glidesmith import phrase as phrase_module
from glidesmith.errors import PhraseError, SettingError
from glidesmith.phrase import MOST_NOTES, Note, Phrase, load_phrase, load_preset_phrase, parse_phrase
from glidesmith.preset import Preset, parse_preset

seeded = settings(derandomize=True, deadline=None, database=None, max_examples=200)

LINE = """\
title = "Ferry line"
tempo_bpm = 96.0
notes = [
  { at = 0.0, lasts = 1.25, note = "D3" },       # beats
  { at = 1.0, lasts = 0.5, note = "A3", velocity = 0.9 },
]
"""


def lines_of(text: str) -> tuple[str, ...]:
    with pytest.raises(PhraseError) as caught:
        parse_phrase(text, Path("line.toml"))
    assert all(line.isprintable() for line in caught.value.lines)
    return caught.value.lines


def line_of(text: str) -> str:
    (line,) = lines_of(text)
    return line


def test_the_phrase_of_the_design_reads_exactly() -> None:
    phrase = parse_phrase(LINE, Path("ferry.toml"))
    assert phrase == Phrase(
        "Ferry line",
        (
            Note(Fraction(0), Fraction(25, 32), 50, 1.0),
            Note(Fraction(5, 8), Fraction(15, 16), 57, 0.9),
        ),
        (),
        Path("ferry.toml"),
        96.0,
    )
    assert phrase.end == Fraction(15, 16)


def test_beats_are_rationals_so_that_abutting_notes_abut() -> None:
    """As doubles 0.1 + 0.2 is over 0.3, and the first of these notes would overlap the second."""
    phrase = parse_phrase(
        "tempo_bpm = 60\nnotes = [{at = 0.1, lasts = 0.2, note = 60}, {at = 0.3, lasts = 1e-3, note = 62}]"
    )
    assert phrase.notes[0].end == phrase.notes[1].start == Fraction(3, 10)
    assert phrase.notes[1].end == Fraction(301, 1000)


def test_tenths_of_beats_abut_all_the_way() -> None:
    rows = ",".join(f"{{at = {i / 10:.1f}, lasts = 0.1, note = 60}}" for i in range(1000))
    notes = parse_phrase(f"tempo_bpm = 133.7\nnotes = [{rows}]").notes
    assert all(first.end == second.start for first, second in pairwise(notes))
    assert notes[-1].end == Fraction(60) * 1000 / 1337


def test_notations_of_numbers_and_notes() -> None:
    notes = parse_phrase(
        'notes = [{at = 1, lasts = 2, note = 0}, {at = 1_0.5, lasts = 2.5e-1, note = "Eb3", velocity = 0},'
        ' {at = 0x10, lasts = 1, note = "G9", velocity = 1}]'
    ).notes
    assert [note.number for note in notes] == [0, 51, 127]
    assert notes[1].start == Fraction(21, 4)
    assert notes[1].end == Fraction(43, 8)
    assert [note.velocity for note in notes] == [1.0, 0.0, 1.0]
    assert notes[2].start == 8


def test_tables_in_place_of_inline_tables() -> None:
    assert parse_phrase('[[notes]]\nat = 0\nlasts = 1\nnote = "C4"\n').notes == (
        Note(Fraction(0), Fraction(1, 2), 60),
    )


def test_defaults_are_120_beats_a_minute_and_the_files_name() -> None:
    phrase = parse_phrase("notes = [{at = 1, lasts = 1, note = 60}]", Path("songs/quay.toml"))
    assert phrase.title == "quay"
    assert phrase.tempo_bpm == 120.0
    assert phrase.notes[0].start == Fraction(1, 2)
    assert parse_phrase("notes = [{at = 1, lasts = 1, note = 60}]").title == "untitled"


def test_notes_stay_in_the_order_of_the_file() -> None:
    phrase = parse_phrase(
        "notes = [{at = 5, lasts = 1, note = 1}, {at = 0, lasts = 9, note = 2},"
        " {at = 5, lasts = 1, note = 3}]"
    )
    assert [note.number for note in phrase.notes] == [1, 2, 3]
    assert phrase.end == Fraction(9, 2)


def test_all_mistakes_at_once_each_with_its_note() -> None:
    lines = lines_of(
        'titel = "x"\ntempo_bpm = 9\nnotes = [3, {at = 0, last = 1.25, note = "H3"},'
        " {at = -0.5, lasts = 0.0, note = 128, velocity = 1.9}, {at = nan, lasts = inf, note = true},"
        ' {at = "1", lasts = true, note = 60.0, velocity = -0.1}]'
    )
    expected = [
        'titel = "x": there is no such key (did you mean "title"?)',
        "tempo_bpm = 9: must be beats a minute, a number from 10 to 1,000",
        "note 1 of 5 = 3: must be a table",
        'note 2 of 5: last = 1.25: there is no such key (did you mean "lasts"?)',
        'note 2 of 5: note = "H3": must be a note from C-1 to G9',
        "note 2 of 5: lasts is missing",
        "note 3 of 5: at = -0.5: must be a number of beats, 0 or more",
        "note 3 of 5: lasts = 0.0: must be a number of beats, more than 0",
        "note 3 of 5: note = 128: must be a note",
        "note 3 of 5: velocity = 1.9: must be a number from 0 to 1",
        "note 4 of 5: at = nan: must be",
        "note 4 of 5: lasts = inf: must be",
        "note 4 of 5: note = true: must be",
        'note 5 of 5: at = "1": must be',
        "note 5 of 5: lasts = true: must be",
        "note 5 of 5: note = 60.0: must be",
        "note 5 of 5: velocity = -0.1: must be",
    ]
    assert len(lines) == len(expected)
    for line, start in zip(lines, expected, strict=True):
        assert line.startswith("line.toml: " + start)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "notes is missing"),
        ("notes = []", "notes is empty"),
        ("notes = 3", "notes = 3: must be a list"),
        ("notes = {at = 0}", "notes = a table: must be a list"),
        ("[notes]", "notes = a table: must be a list"),
        ("notes = [{at = 0, lasts = -1, note = 60}]", "note 1 of 1: lasts = -1: must be"),
        ("notes = [{at = 1e999999999, lasts = 1, note = 60}]", "note 1 of 1: at = 1e999999999: must be"),
        ("notes = [{at = 0, lasts = 1e-999999999, note = 60}]", "note 1 of 1: lasts = 1e-999999999: must be"),
        (f"notes = [{{at = 0.{'1' * 5000}, lasts = 1, note = 60}}]", "note 1 of 1: at = 0.111"),
        ("notes = [{at = 1e300, lasts = 1, note = 60}]", "lasts over 1,000,000,000 days"),
        ("notes = [{at = 0, lasts = 14401, note = 60}]", "lasts 2 h, and the longest allowed is 2 h"),
        ("notes = [{at = 0, lasts = 20000, note = 60}]", "lasts 2 h 46 min, and the longest allowed is 2 h"),
        ("title = 1.5\nnotes = [{at = 0, lasts = 1, note = 60}]", "title = 1.5: must be text"),
        ("title = inf\nnotes = [{at = 0, lasts = 1, note = 60}]", "title = inf: must be text"),
        ("tempo_bpm = true\nnotes = [{at = 0, lasts = 1, note = 60}]", "tempo_bpm = true: must be"),
        ("tempo_bpm = nan\nnotes = [{at = 0, lasts = 1, note = 60}]", "tempo_bpm = nan: must be"),
        ("tempo_bpm = 1000.001\nnotes = [{at = 0, lasts = 1, note = 60}]", "tempo_bpm = 1000.001: must be"),
        ("notes = [", "is not valid TOML"),
        ("notes = " + "[" * 5000, "has tables or arrays nested far too deeply"),
        (
            f"notes = [{{at = {'9' * 5000}, lasts = 1, note = 60}}]",
            "holds a whole number of thousands of digits",
        ),
    ],
    ids=range(20),
)
def test_single_mistakes(text: str, said: str) -> None:
    assert line_of(text).startswith("line.toml: " + said)


def test_the_length_limit_includes_its_end_and_can_be_raised() -> None:
    two_hours = "tempo_bpm = 60\nnotes = [{at = 0, lasts = 7200, note = 60}]"
    assert parse_phrase(two_hours).end == 7200
    longer = two_hours.replace("7200", "7200.001")
    with pytest.raises(PhraseError, match="raise the limit"):
        parse_phrase(longer)
    assert parse_phrase(longer, longest_s=7201.0).end == Fraction(7_200_001, 1000)


def test_too_many_notes(monkeypatch: pytest.MonkeyPatch) -> None:
    assert MOST_NOTES == 100_000
    most = MOST_NOTES if LONG else 50
    monkeypatch.setattr(phrase_module, "MOST_NOTES", most)
    rows = ["{at=0,lasts=1,note=60}"] * most
    assert len(parse_phrase(f"notes = [{','.join(rows)}]").notes) == most
    line = line_of(f"notes = [{','.join([*rows, rows[0]])}]")
    assert line == f"line.toml: notes has {most + 1:,} entries, and the most is {most:,}; split the phrase"


def test_the_content_hash_is_of_the_exact_notes_alone() -> None:
    phrase = parse_phrase(LINE)
    data = f"0 25/32 50 {(1.0).hex()}\n5/8 15/16 57 {(0.9).hex()}\n"
    assert phrase.content_hash() == hashlib.sha256(data.encode()).hexdigest()
    assert (
        replace(phrase, title="another", path=Path("x"), tempo_bpm=None).content_hash()
        == phrase.content_hash()
    )
    first, second = phrase.notes
    for changed in (
        (second, first),
        (first,),
        (replace(first, start=Fraction(1, 10**30)), second),
        (replace(first, end=first.end + Fraction(1, 10**30)), second),
        (replace(first, number=51), second),
        (replace(first, velocity=0.99), second),
    ):
        assert replace(phrase, notes=changed).content_hash() != phrase.content_hash()


def test_an_empty_phrase_ends_at_once() -> None:
    assert Phrase("silence", ()).end == 0


def refusal(path: Path, **choice: int) -> str:
    with pytest.raises(PhraseError) as caught:
        load_phrase(path, **choice)
    (line,) = caught.value.lines
    assert line.startswith(str(path))
    return line


def test_load_phrase_goes_by_content(tmp_path: Path) -> None:
    (tmp_path / "line.txt").write_text(LINE)
    assert load_phrase(str(tmp_path / "line.txt")).title == "Ferry line"
    (tmp_path / "line.toml").write_bytes(b"MThd")
    assert "truncated" in refusal(tmp_path / "line.toml")
    (tmp_path / "line.mid").write_text(LINE)
    assert "not a Standard MIDI File" in refusal(tmp_path / "line.mid")
    (tmp_path / "line.rmi").write_bytes(b"RIFF....RMIDdata")
    assert "wrapped in RIFF" in refusal(tmp_path / "line.rmi")


def test_a_byte_order_mark_before_a_phrase_changes_nothing(tmp_path: Path) -> None:
    (tmp_path / "bom.toml").write_bytes(b"\xef\xbb\xbf" + LINE.encode())
    assert load_phrase(tmp_path / "bom.toml").notes == parse_phrase(LINE).notes


@pytest.mark.parametrize("number", ["-0.0", "-0", "1" + "0" * 400, "-1e400", "true"])
def test_odd_numbers_are_exact_or_refused_in_one_line(number: str) -> None:
    for key in ("tempo_bpm", "at", "lasts", "velocity"):
        note = {"at": "0", "lasts": "1", "note": "60", key: number}
        note.pop("tempo_bpm", None)
        tempo = f"tempo_bpm = {number}\n" if key == "tempo_bpm" else ""
        text = tempo + "notes = [{ " + ", ".join(f"{name} = {value}" for name, value in note.items()) + " }]"
        if number.startswith("-0") and key in ("at", "velocity"):
            (read,) = parse_phrase(text).notes
            assert math.copysign(1.0, read.velocity) == 1.0
            continue
        with pytest.raises(PhraseError) as caught:
            parse_phrase(text)
        (line,) = caught.value.lines
        assert key in line or "longest allowed" in line
        assert len(line) < 160


def preset_of(tmp_path: Path, phrase: str) -> Preset:
    slews = "[pitch]\nrise = 0\nfall = 0\n[gain]\nrise = 0\nfall = 0\n"
    return parse_preset(slews + phrase, tmp_path / "lead.toml")


def test_a_preset_s_phrase_is_found_with_its_choice_and_that_of_the_caller(tmp_path: Path) -> None:
    tracks = (
        "4D54726B 0000000C 00 90 3C 40 60 90 3C 00 00 FF 2F 00",
        "4D54726B 0000000C 00 91 3E 40 60 91 3E 00 00 FF 2F 00",
    )
    header = "4D546864 00000006 0001 0002 0060"
    (tmp_path / "song.mid").write_bytes(bytes.fromhex(header + tracks[0] + tracks[1]))
    preset = preset_of(tmp_path, '[phrase]\nfile = "song.mid"\ntrack = 2\n')
    assert [note.number for note in load_preset_phrase(preset).notes] == [62]
    assert [note.number for note in load_preset_phrase(preset, track=1, channel=1).notes] == [60]
    with pytest.raises(PhraseError, match="the longest allowed is 100 ms"):
        load_preset_phrase(preset, longest_s=0.1)
    bare = preset_of(tmp_path, "")
    with pytest.raises(SettingError, match=r"lead\.toml: names no phrase; add \[phrase\] with file to it"):
        load_preset_phrase(bare)


def test_a_preset_s_phrase_is_refused_in_lines_that_name_preset_key_and_file(tmp_path: Path) -> None:
    begin = f"{tmp_path / 'lead.toml'}: phrase.file: "

    def refused(file: str) -> tuple[str, ...]:
        with pytest.raises(PhraseError) as caught:
            load_preset_phrase(preset_of(tmp_path, f"[phrase]\nfile = '{file}'\n"))
        assert all(line.startswith(begin) for line in caught.value.lines)
        return caught.value.lines

    assert refused("gone.toml") == (
        f"{begin}{tmp_path / 'gone.toml'}: there is no such file; check its name and folder",
    )
    (tmp_path / "wrong.toml").write_text("notes = []\nfoo = 1\n")
    assert len(refused("wrong.toml")) == 2
    (line,) = refused("long" * 10_000)
    assert len(line) < 500


def test_load_phrase_refuses_what_it_cannot_use(tmp_path: Path) -> None:
    assert "no such file" in refusal(tmp_path / "gone.toml")
    assert "is a folder" in refusal(tmp_path)
    for name, data, reason in (
        ("latin.toml", b"title = '\xe9'", "not UTF-8"),
        ("two boms.toml", b"\xef\xbb\xbf" * 2 + LINE.encode(), "not valid TOML"),
        ("nul.toml", b"\0" * 100, "NUL"),
        ("empty.toml", b"", "notes is missing"),
        ("big.toml", b"#" * 8_000_001, "8,000,000 bytes of text"),
        ("huge.toml", b"#" * 16_000_001, "16,000,000 bytes"),
    ):
        (tmp_path / name).write_bytes(data)
        assert reason in refusal(tmp_path / name)


def test_a_toml_phrase_has_no_tracks_to_choose(tmp_path: Path) -> None:
    (tmp_path / "line.toml").write_text(LINE)
    assert "no MIDI file" in refusal(tmp_path / "line.toml", track=1)
    assert "no MIDI file" in refusal(tmp_path / "line.toml", channel=1)


BEATS = st.decimals(0, 500, places=4)
ROWS = st.tuples(BEATS, st.decimals("0.0001", 50, places=4), st.integers(0, 127), st.decimals(0, 1, places=3))


@seeded
@given(st.lists(ROWS, min_size=1, max_size=20), st.decimals(10, 1000, places=2))
def test_any_phrase_means_what_its_decimals_say(rows: list[tuple[object, ...]], tempo: object) -> None:
    text = "".join(f"[[notes]]\nat={a}\nlasts={b}\nnote={c}\nvelocity={d}\n" for a, b, c, d in rows)
    phrase = parse_phrase(f"tempo_bpm = {tempo}\n{text}")
    beat = 60 / Fraction(str(tempo))
    for note, (at, lasts, number, velocity) in zip(phrase.notes, rows, strict=True):
        assert note.start == Fraction(str(at)) * beat
        assert note.end == (Fraction(str(at)) + Fraction(str(lasts))) * beat
        assert note.number == number
        assert note.velocity == float(str(velocity))
