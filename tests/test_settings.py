"""The table of preset keys, held against the table of the design and used as the command line uses it."""

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from glidesmith.errors import SettingError
from glidesmith.settings import (
    KEY,
    KEYS,
    LAWS,
    TABLES,
    Key,
    find_key,
    is_timed,
    keys_as_markdown,
    parse_value,
    resolved_timing,
)

seeded = settings(derandomize=True, deadline=None, database=None, max_examples=300)

DEFAULTS = {
    "oscillator.wave": "saw",
    "oscillator.width": 0.5,
    "oscillator.level_db": -12.0,
    "pitch.law": "linear",
    "pitch.bend": 1.0,
    "pitch.knee": 0.1,
    "pitch.curvature": 0.0,
    "pitch.glide": "always",
    "pitch.steps_per_octave": 0,
    "gain.law": "linear",
    "gain.bend": 1.0,
    "gain.knee": 0.1,
    "gain.curvature": 0.0,
    "envelope.shape": "linear",
    "envelope.retrigger": False,
    "amplifier.law": "linear",
    "amplifier.range_db": 60.0,
    "amplifier.velocity_db": 0.0,
    "tuning.a4_hz": 440.0,
    "tuning.zero_volts": 60,
    "tuning.scale_error_cents_per_octave": 0.0,
    "converter.bits": 12,
    "converter.span_volts": 10.0,
    "converter.rate_hz": 0.0,
    "drone.level_db": -30.0,
}
REQUIRED = {
    *("pitch.rise", "pitch.fall", "gain.rise", "gain.fall"),
    *("envelope.attack", "envelope.decay", "envelope.sustain", "envelope.release"),
    *("drone.note", "phrase.file"),
}
OPEN = {"title", "oscillator.file", "pitch.timing", "gain.timing", "phrase.track", "phrase.channel"}
RANGES = {
    "oscillator.width": (0.05, 0.95),
    "oscillator.level_db": (-60, 0),
    "pitch.bend": (0.01, 10),
    "pitch.knee": (0.001, 2),
    "pitch.curvature": (-20, 20),
    "pitch.steps_per_octave": (0, 96),
    "gain.bend": (0.01, 10),
    "gain.knee": (0.001, 2),
    "gain.curvature": (-20, 20),
    "envelope.attack": (0, 60),
    "envelope.decay": (0, 60),
    "envelope.sustain": (0, 1),
    "envelope.release": (0, 60),
    "amplifier.range_db": (20, 120),
    "amplifier.velocity_db": (0, 60),
    "tuning.a4_hz": (400, 480),
    "tuning.scale_error_cents_per_octave": (-100, 100),
    "converter.bits": (4, 24),
    "converter.span_volts": (1, 20),
    "converter.rate_hz": (10, 48_000),
    "drone.level_db": (-60, 0),
    "pitch.rise": (1e-6, 60),
    "pitch.fall": (1e-6, 60),
    "gain.rise": (1e-6, 60),
    "gain.fall": (1e-6, 60),
    "phrase.track": (1, 65_535),
    "phrase.channel": (1, 16),
}
ZERO_TOO = {"pitch.rise", "pitch.fall", "gain.rise", "gain.fall", "converter.rate_hz"}


def test_the_table_has_the_keys_and_defaults_of_the_design() -> None:
    assert {key.name for key in KEYS} == DEFAULTS.keys() | REQUIRED | OPEN
    assert len(KEYS) == len(KEY)
    assert {key.name for key in KEYS if key.required} == REQUIRED
    for name, default in DEFAULTS.items():
        assert KEY[name].default == default
        assert type(KEY[name].default) is type(default)
        assert KEY[name].check(default) == default
    assert all(KEY[name].default is None for name in REQUIRED | OPEN)


def test_only_pitch_and_gain_must_be_there() -> None:
    assert [table.name for table in TABLES if table.presence == "required"] == ["pitch", "gain"]
    assert [table.name for table in TABLES if table.presence == "optional"] == [
        "envelope",
        "converter",
        "drone",
        "phrase",
    ]


@pytest.mark.parametrize("name", RANGES)
def test_ranges_include_their_ends_and_nothing_beyond(name: str) -> None:
    key = KEY[name]
    lowest, highest = RANGES[name]
    step = 1 if key.kind == "whole" else 1e-9
    for inside in (lowest, highest):
        assert key.check(inside) == inside
    for outside in (lowest - step, highest + step, -1e300, 1e300, 10**400, math.nan, math.inf, -math.inf):
        with pytest.raises(SettingError):
            key.check(outside)
    if name in ZERO_TOO:
        assert key.check(0) == 0
        assert math.copysign(1, key.check(-0.0)) == 1  # type: ignore[arg-type]
    elif lowest > 0:
        with pytest.raises(SettingError):
            key.check(0)


@pytest.mark.parametrize("name", [key.name for key in KEYS])
def test_no_key_takes_a_value_of_another_kind(name: str) -> None:
    key = KEY[name]
    wrong: list[object] = [[], {}, None, b"x", object()]
    if key.kind != "flag":
        wrong += [True, False]
    if key.kind not in ("text", "file"):
        wrong += ["nonsense", "", "1"]
    if key.kind in ("text", "file", "choice", "flag"):
        wrong += [0, 1, 0.5]
    if key.kind == "whole":
        wrong += [float(key.lowest)]
    if key.kind == "note":
        wrong += [60.0, 128, -1, "H4"]
    if key.kind == "file":
        wrong += ["", "  ", "a\0b"]
    for value in wrong:
        with pytest.raises(SettingError) as caught:
            key.check(value)
        (line,) = caught.value.lines
        assert line.startswith(f"{name} = ")
        assert key.rule in line
        assert line.isprintable()


def test_whole_numbers_are_taken_for_floats_and_become_floats() -> None:
    assert type(KEY["oscillator.level_db"].check(-12)) is float
    assert type(KEY["pitch.rise"].check(1)) is float
    assert type(KEY["converter.bits"].check(12)) is int


def test_times_take_units_and_refuse_what_is_out_of_range() -> None:
    rise = KEY["pitch.rise"]
    assert rise.check("80 ms") == 0.08
    assert rise.check("250us") == 250e-6
    assert rise.check("1 min") == 60.0
    for wrong in ("0.5 us", "61 s", "2 min", "-5 ms", "-0.1 s", "80"):
        with pytest.raises(SettingError, match="0 or 1 µs to 60 s"):
            rise.check(wrong)
    assert KEY["envelope.attack"].check("0.5 us") == 5e-7


def test_a_mistyped_choice_names_the_nearest() -> None:
    with pytest.raises(SettingError, match=r'did you mean "triangle"\?'):
        KEY["oscillator.wave"].check("trianle")


@pytest.mark.parametrize(
    ("name", "near"),
    [
        ("pitch.rize", "pitch.rise"),
        ("ptich.rise", "pitch.rise"),
        ("rise", "pitch.rise"),
        ("gain.knie", "gain.knee"),
        ("range_db", "amplifier.range_db"),
        ("envelope.sustian", "envelope.sustain"),
        ("tuning.scale_error", "tuning.scale_error_cents_per_octave"),
        ("pitch.rise_time", "pitch.rise"),
        ("ptich.rize", "pitch.rise"),
    ],
)
def test_an_unknown_key_names_the_nearest(name: str, near: str) -> None:
    with pytest.raises(SettingError) as caught:
        find_key(name)
    assert f'did you mean "{near}"?' in str(caught.value)


def test_an_unknown_key_of_a_table_far_from_its_keys_gets_their_list() -> None:
    with pytest.raises(SettingError) as caught:
        find_key("phrase.frob")
    assert str(caught.value) == '"phrase.frob" is no preset key; [phrase] has file, track, channel'


@pytest.mark.parametrize("wave", ["plse", "pusle", "puls"])
def test_a_wave_two_letters_off_is_understood(wave: str) -> None:
    with pytest.raises(SettingError, match=r'must be one of "sine", .* \(did you mean "pulse"\?\)$'):
        KEY["oscillator.wave"].check(wave)


def test_a_wave_far_from_all_gets_the_list() -> None:
    with pytest.raises(SettingError, match=r'must be one of "sine", "triangle", "saw", "pulse", "file"$'):
        KEY["oscillator.wave"].check("sqaure")


@pytest.mark.parametrize("key", [key for key in KEYS if key.kind in ("time", "number", "whole")], ids=str)
@pytest.mark.parametrize("value", [10**400, -(10**400), True, False, -1e308, math.inf, math.nan])
def test_no_number_is_too_odd_for_one_line(key: Key, value: object) -> None:
    with pytest.raises(SettingError) as caught:
        key.check(value)
    (line,) = caught.value.lines
    assert line.startswith(f"{key.name} = ")
    assert len(line) < 160


@pytest.mark.parametrize("key", [key for key in KEYS if key.kind in ("time", "number")], ids=str)
def test_negative_zero_is_zero(key: Key) -> None:
    if key.or_zero or key.lowest <= 0.0 <= key.highest:
        value = key.check(-0.0)
        assert isinstance(value, float)
        assert math.copysign(1.0, value) == 1.0


def test_what_a_key_counts_for_are_choices_of_another_key_of_its_table() -> None:
    for key in KEYS:
        if key.counts_for is not None:
            other, useful = key.counts_for
            assert KEY[other].table == key.table
            assert set(useful) < set(KEY[other].choices)


def test_an_unknown_key_far_from_all_names_none() -> None:
    with pytest.raises(SettingError) as caught:
        find_key("zzz\x1b" * 1000)
    assert "did you mean" not in str(caught.value)
    assert str(caught.value).isprintable()
    assert len(str(caught.value)) < 120


@pytest.mark.parametrize(
    ("name", "text", "value"),
    [
        ("pitch.rise", "80 ms", 0.08),
        ("pitch.rise", "0.08", 0.08),
        ("pitch.rise", " 1.2 s", 1.2),
        ("pitch.rise", "0", 0.0),
        ("pitch.law", "rc", "rc"),
        ("pitch.law", " rc ", "rc"),
        ("oscillator.level_db", "-12", -12.0),
        ("oscillator.level_db", "-12 dB", -12.0),
        ("tuning.a4_hz", "442Hz", 442.0),
        ("converter.bits", "16", 16),
        ("pitch.bend", "2 /V", 2.0),
        ("pitch.curvature", "-5", -5.0),
        ("envelope.retrigger", "true", True),
        ("envelope.retrigger", "False", False),
        ("tuning.zero_volts", "Eb3", 51),
        ("tuning.zero_volts", "51", 51),
        ("oscillator.file", "cycle one.wav", "cycle one.wav"),
        ("title", "12", "12"),
    ],
)
def test_parse_value_reads_what_the_command_line_gives(name: str, text: str, value: object) -> None:
    parsed = parse_value(name, text)
    assert parsed == value
    assert type(parsed) is type(value)


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("pitch.rise", "-5 ms"),
        ("pitch.rise", "nan"),
        ("pitch.rise", "inf"),
        ("pitch.rise", "1e999"),
        ("pitch.rise", "1_0"),
        ("pitch.rise", "0x10"),
        ("pitch.rise", "80 dB"),
        ("oscillator.level_db", "-12 Hz"),
        ("oscillator.level_db", "1e999"),
        ("oscillator.level_db", "true"),
        ("converter.bits", "12.0"),
        ("converter.bits", "12 bits"),
        ("envelope.retrigger", "1"),
        ("envelope.retrigger", ""),
        ("pitch.law", ""),
        ("tuning.zero_volts", "128"),
        ("no.key", "1"),
        ("", ""),
    ],
)
def test_parse_value_refuses_the_rest(name: str, text: str) -> None:
    with pytest.raises(SettingError) as caught:
        parse_value(name, text)
    assert len(caught.value.lines) == 1


@seeded
@given(st.sampled_from([key.name for key in KEYS]), st.text(max_size=40))
def test_parse_value_of_any_text_gives_a_checked_value_or_a_line(name: str, text: str) -> None:
    problem = ""
    try:
        value = parse_value(name, text)
        assert KEY[name].check(value) == value
    except SettingError as caught:
        problem = str(caught)
    assert problem.isprintable()


def test_timing_is_settled_by_law() -> None:
    assert {law: resolved_timing(law) for law in LAWS} == {
        "linear": "rate",
        "rc": "rate",
        "log": "rate",
        "exp": "rate",
        "soft": "rate",
        "curve": "fixed",
        "cosine": "fixed",
    }
    for law in ("linear", "curve", "cosine"):
        assert resolved_timing(law, "fixed") == "fixed"
        assert resolved_timing(law, "rate") == "rate"


@pytest.mark.parametrize("law", ["rc", "log", "exp", "soft"])
def test_fixed_timing_of_a_law_without_it_says_why(law: str) -> None:
    assert resolved_timing(law, "rate") == "rate"
    with pytest.raises(SettingError) as caught:
        resolved_timing(law, "fixed")
    assert f"the {law} law can't have it: its" in str(caught.value) or "it slows down" in str(caught.value)
    assert "use linear, curve or cosine" in str(caught.value)


def test_timed_glides_are_those_by_progress_and_those_of_fixed_duration() -> None:
    assert not is_timed("linear", "rate")
    assert not is_timed("rc", "rate")
    assert is_timed("linear", "fixed")
    assert all(is_timed(law, timing) for law in ("curve", "cosine") for timing in ("rate", "fixed"))


def test_documentation_has_a_row_for_every_key() -> None:
    rows = keys_as_markdown().splitlines()
    assert len(rows) == 2 + len(KEYS)
    assert "| `pitch.rise` | must be given | 0 or 1 µs to 60 s |" in keys_as_markdown()
    assert "| `converter.rate_hz` | 0 | 0 or 10 to 48,000 Hz |" in keys_as_markdown()
    assert "| `tuning.zero_volts` | C4 |" in keys_as_markdown()
    assert "| `pitch.timing` | by law | rate, fixed |" in keys_as_markdown()
    assert all(row.count("|") == 5 for row in rows)
