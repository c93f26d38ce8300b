"""Times with units and note names, held against the published frequencies of the MIDI notes."""

import csv
import math
from fractions import Fraction

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from conftest import REFERENCE
from glidesmith.errors import SettingError
from glidesmith.units import (
    format_time,
    note_hz,
    note_name,
    note_number,
    parse_note,
    parse_time,
    spoken_duration,
)

seeded = settings(derandomize=True, deadline=None, database=None, max_examples=300)


@pytest.mark.parametrize(
    ("written", "seconds"),
    [
        ("80 ms", 0.08),
        ("80ms", 0.08),
        (" 80  ms ", 0.08),
        ("1.2 s", 1.2),
        ("250us", 250e-6),
        ("250 µs", 250e-6),
        ("250 μs", 250e-6),
        ("2 min", 120.0),
        ("0.5min", 30.0),
        (".5 s", 0.5),
        ("5. s", 5.0),
        ("1e3 ms", 1.0),
        ("+3 ms", 0.003),
        ("0 s", 0.0),
        (0, 0.0),
        (2, 2.0),
        (0.08, 0.08),
    ],
)
def test_parse_time_reads_every_notation(written: object, seconds: float) -> None:
    assert parse_time(written) == seconds


def test_a_time_in_milliseconds_is_the_very_double_of_its_decimal() -> None:
    """Multiplying by 0.001 would miss 9 ms, 1.1 ms and many others by one unit in the last place."""
    for tenths in range(1, 20_000):
        assert parse_time(f"{tenths // 10}.{tenths % 10} ms") == float(Fraction(tenths, 10_000))


@pytest.mark.parametrize(
    "wrong",
    [
        "80",
        "ms",
        "",
        "80 cm",
        "80 MS",
        "8 0 ms",
        "1,2 s",
        "0x10 s",
        "nan s",
        "inf s",
        "-5 ms",
        "1e9999 s",
        "1e999 min",
        "1e9999999999 s",
        "9" * 100_000 + " s",
        "٣ s",
        -1,
        -1e-9,
        math.nan,
        math.inf,
        -math.inf,
        10**400,
        True,
        False,
        None,
        [1],
        {},
        b"80 ms",
    ],
    ids=range(28),
)
def test_parse_time_refuses_the_rest_in_one_line(wrong: object) -> None:
    with pytest.raises(SettingError) as caught:
        parse_time(wrong)
    assert len(caught.value.lines) == 1
    assert "is not a time" in str(caught.value)
    assert len(str(caught.value)) < 250


@pytest.mark.parametrize(
    ("seconds", "written"),
    [
        (0.08, "80 ms"),
        (1.2, "1.2 s"),
        (60.0, "60 s"),
        (0.00025, "250 µs"),
        (1e-6, "1 µs"),
        (0.001, "1 ms"),
        (0.0, "0 s"),
        (0.9999, "999.9 ms"),
    ],
)
def test_format_time_picks_the_unit(seconds: float, written: str) -> None:
    assert format_time(seconds) == written


def test_format_time_rounds_for_people_when_asked() -> None:
    assert format_time(0.0812345, 3) == "81.2 ms"
    assert format_time(0.00099999, 3) == "1 ms"


@seeded
@given(st.floats(min_value=0.0, allow_nan=False, allow_infinity=False))
def test_a_formatted_time_reads_back_as_the_same_double(seconds: float) -> None:
    assert parse_time(format_time(seconds)) == seconds


@seeded
@given(st.text())
def test_parse_time_of_any_text_gives_a_time_or_a_line(text: str) -> None:
    problem = ""
    try:
        assert 0.0 <= parse_time(text) < math.inf
    except SettingError as caught:
        problem = str(caught)
    assert problem.isprintable()


def test_spoken_durations() -> None:
    assert spoken_duration(7200) == "2 h"
    assert spoken_duration(11_520) == "3 h 12 min"
    assert spoken_duration(75) == "1 min 15 s"
    assert spoken_duration(Fraction(5, 2)) == "2.5 s"
    assert spoken_duration(52_000 * 86_400) == "52,000 days"
    assert spoken_duration(Fraction(10**5000)) == "over 1,000,000,000 days"


def published_notes() -> list[tuple[int, str, float]]:
    lines = (REFERENCE / "equal-tempered-notes.csv").read_text().splitlines()
    rows = csv.DictReader(line for line in lines if not line.startswith("#"))
    return [(int(row["midi_number"]), row["name"], float(row["frequency_hz"])) for row in rows]


def test_note_names_numbers_and_frequencies_agree_with_the_published_table() -> None:
    """Source: shared/reference/equal-tempered-notes.csv (ISO 16); tolerance: half its last digit."""
    table = published_notes()
    assert [number for number, _, _ in table] == list(range(128))
    for number, name, frequency_hz in table:
        assert parse_note(name) == number
        assert note_name(number) == name
        assert note_hz(number) == pytest.approx(frequency_hz, abs=0.00501, rel=0)


def test_the_octave_the_reference_and_the_cent() -> None:
    assert note_hz(69) == 440.0
    assert note_hz(81) == 880.0
    assert note_hz(69, 442.0) == 442.0
    assert note_hz(69.01) / note_hz(69) == pytest.approx(2 ** (1 / 1200), rel=1e-14)


@pytest.mark.parametrize(
    ("name", "number"),
    [
        ("C4", 60),
        ("Cb4", 59),
        ("B#3", 60),
        ("Bb3", 58),
        ("bb3", 58),
        ("b3", 59),
        ("d#3", 51),
        ("Eb3", 51),
        ("G9", 127),
    ],
)
def test_sharps_flats_and_small_letters(name: str, number: int) -> None:
    assert parse_note(name) == number


@pytest.mark.parametrize(
    "wrong", ["", "H4", "C", "4", "C10", "C-2", "Cb-1", "G#9", "A9", "C##4", "C♯4", "C 4", "C4 ", "C٤"]
)
def test_parse_note_refuses_what_is_no_midi_note(wrong: str) -> None:
    with pytest.raises(SettingError, match="must be a note from C-1 to G9"):
        parse_note(wrong)


@pytest.mark.parametrize("wrong", [-1, 128, 60.0, True, None, [60], 10**5000], ids=range(7))
def test_note_numbers_are_whole_and_in_range(wrong: object) -> None:
    with pytest.raises(SettingError):
        note_number(wrong)
    assert note_number(60) == note_number("C4") == 60
