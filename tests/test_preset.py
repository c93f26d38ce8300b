"""Presets: what is read, what is refused and in which words, and writing back with everything else kept."""

import errno
import hashlib
import json
import math
import os
import pickle
import tomllib
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from glidesmith import text as text_module
from glidesmith.errors import OutputError, PresetError, SettingError
from glidesmith.preset import (
    Amplifier,
    Converter,
    Drone,
    Envelope,
    Oscillator,
    PhraseSource,
    Pitch,
    Preset,
    SlewSettings,
    Tuning,
    load_preset,
    parse_preset,
    preset_from_mapping,
    save_preset,
    settings_hash,
    update_preset_text,
)
from glidesmith.settings import KEY, KEYS

seeded = settings(derandomize=True, deadline=None, database=None, max_examples=200)

LEAST = "[pitch]\nrise = 0.06\nfall = 0.09\n[gain]\nrise = 0.004\nfall = 0.08\n"

FULL = """\
# The lead of the third scene.
title = "Night ferry lead"   # as the cue sheet has it

[oscillator]
wave = "saw"
level_db = -12.0

[pitch]                      # the slew on the pitch voltage
law = "rc"
rise = "60 ms"               # up is quick
fall = "90 ms"
glide = "overlap"
steps_per_octave = 0

# The gate opens softly.
[gain]
law = "linear"
rise = "4 ms"
fall = "80 ms"

[envelope]                   # optional
attack = 0.01
decay = 0.2
sustain = 0.6
release = 0.3

[amplifier]
law = "decibel"
range_db = 60.0

[tuning]
a4_hz = 440.0
zero_volts = "C4"

[converter]                  # optional
bits = 12
span_volts = 10.0
rate_hz = 1000.0

[phrase]
file = "../shared/phrases/ferry-line.toml"
"""


def lines_of(text: str, path: Path | None = Path("lead.toml")) -> tuple[str, ...]:
    with pytest.raises(PresetError) as caught:
        parse_preset(text, path)
    for line in caught.value.lines:
        assert line.isprintable()
    return caught.value.lines


def line_of(text: str) -> str:
    (line,) = lines_of(text)
    return line


def test_the_least_preset_has_every_default_of_the_design() -> None:
    slew = SlewSettings("linear", 0.06, 0.09, "rate", 1.0, 0.1, 0.0)
    assert parse_preset(LEAST, Path("bank/ferry.toml")) == Preset(
        title="ferry",
        oscillator=Oscillator("saw", 0.5, -12.0, None),
        pitch=Pitch(slew, "always", 0),
        gain=replace(slew, rise=0.004, fall=0.08),
        envelope=None,
        amplifier=Amplifier("linear", 60.0, 0.0),
        tuning=Tuning(440.0, 60, 0.0),
        converter=None,
        drone=None,
        phrase=None,
        path=Path("bank/ferry.toml"),
    )
    assert parse_preset(LEAST).title == "untitled"


def test_the_full_preset_reads_as_the_design_shows_it() -> None:
    preset = parse_preset(FULL, Path("presets/lead.toml"))
    assert preset.title == "Night ferry lead"
    assert preset.pitch == Pitch(SlewSettings("rc", 0.06, 0.09, "rate", 1.0, 0.1, 0.0), "overlap", 0)
    assert preset.gain == SlewSettings("linear", 0.004, 0.08, "rate", 1.0, 0.1, 0.0)
    assert preset.envelope == Envelope(0.01, 0.2, 0.6, 0.3, "linear", False)
    assert preset.amplifier == Amplifier("decibel", 60.0, 0.0)
    assert preset.converter == Converter(12, 10.0, 1000.0)
    assert preset.phrase == PhraseSource(Path("presets/../shared/phrases/ferry-line.toml"), None, None)


def test_optional_tables_have_their_own_defaults() -> None:
    preset = parse_preset(
        LEAST
        + '[converter]\n[drone]\nnote = "Eb3"\n[phrase]\nfile = "/abs/line.mid"\ntrack = 2\nchannel = 16\n',
        Path("presets/lead.toml"),
    )
    assert preset.converter == Converter(12, 10.0, 0.0)
    assert preset.drone == Drone(51, -30.0)
    assert preset.phrase == PhraseSource(Path("/abs/line.mid"), 2, 16)


def test_timing_follows_the_law_unless_given() -> None:
    curve = parse_preset(LEAST.replace("[gain]", '[gain]\nlaw = "curve"'))
    assert curve.gain.timing == "fixed"
    rate = parse_preset(LEAST.replace("[gain]", '[gain]\nlaw = "curve"\ntiming = "rate"'))
    assert rate.gain.timing == "rate"
    fixed = parse_preset(LEAST.replace("[pitch]", '[pitch]\ntiming = "fixed"'))
    assert fixed.pitch.slew.timing == "fixed"


def test_settings_that_a_law_has_no_use_for_are_allowed() -> None:
    preset = parse_preset(
        LEAST.replace("[pitch]", '[pitch]\nlaw = "rc"\nknee = 0.5\nbend = 2\ncurvature = -3')
    )
    assert preset.pitch.slew == SlewSettings("rc", 0.06, 0.09, "rate", 2.0, 0.5, -3.0)


def test_all_mistakes_are_told_at_once_each_with_file_key_value_rule_and_nearest_key() -> None:
    lines = lines_of(
        'titel = "x"\n[ptich]\nrise = 1\n[pitch]\nrise = "-5 ms"\nfal = 3\nlaw = "liner"\n'
        '[gain]\nrise = nan\nfall = 61\nbend = true\n[converter]\nbits = 12.0\n[tuning]\nzero_volts = "H4"\n'
    )
    expected = [
        ('titel = "x"', 'did you mean "title"?'),
        ("[ptich]", 'did you mean "pitch"?'),
        ('pitch.rise = "-5 ms"', "0 or 1 µs to 60 s"),
        ("pitch.fal = 3", 'did you mean "pitch.fall"?'),
        ('pitch.law = "liner"', 'did you mean "linear"?'),
        ("gain.rise = nan", "0 or 1 µs to 60 s"),
        ("gain.fall = 61", "0 or 1 µs to 60 s"),
        ("gain.bend = true", "must be a number: 0.01 to 10 /V"),
        ("converter.bits = 12.0", "must be a whole number: 4 to 24"),
        ('tuning.zero_volts = "H4"', "must be a note from C-1 to G9"),
        ("pitch.fall is missing", "0 or 1 µs to 60 s"),
    ]
    assert len(lines) == len(expected)
    for line, (what, rule) in zip(lines, expected, strict=True):
        assert line.startswith(f"lead.toml: {what}")
        assert rule in line


def test_missing_tables_and_keys() -> None:
    assert [line.split(" is missing")[0] for line in lines_of("")] == [
        "lead.toml: [pitch]",
        "lead.toml: [gain]",
    ]
    lines = lines_of("[pitch]\n[gain]\nrise = 1\n[envelope]\nattack = 0\n[drone]\n[phrase]\ntrack = 1\n")
    assert [line.split(" is missing")[0].removeprefix("lead.toml: ") for line in lines] == [
        "pitch.rise",
        "pitch.fall",
        "gain.fall",
        "envelope.decay",
        "envelope.sustain",
        "envelope.release",
        "drone.note",
        "phrase.file",
    ]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (
            "pitch = 3\n" + LEAST.partition("[gain]")[1] + LEAST.partition("[gain]")[2],
            "pitch = 3: must be one table",
        ),
        (LEAST.replace("[gain]", "[[gain]]"), "gain = an array: must be one table, begun by [gain]"),
        (LEAST + "[pitch.rise]\n", "is not valid TOML"),
        (LEAST + "[gain.more]\n", "[gain.more] is no table"),
        (LEAST.replace("0.06", "{ ms = 60 }"), "pitch.rise = a table"),
        (LEAST.replace("0.06", "[60]"), "pitch.rise = an array"),
        (LEAST.replace("0.06", "1979-05-27"), "pitch.rise = 1979-05-27"),
        (LEAST.replace("0.06", "0x" + "f" * 9000), "pitch.rise = a number of 36,000 bits"),
        ("title = 3\n" + LEAST, "title = 3: must be text"),
        (LEAST + "x\x07 = 1", "is not valid TOML"),
        (LEAST + '"x\\u0007\\n" = 1', "gain.x\\x07\\n = 1: there is no such key"),
        (LEAST + "rise = 2", "is not valid TOML"),
        ("title = 'a", "is not valid TOML"),
    ],
    ids=range(13),
)
def test_shapes_that_no_preset_has(text: str, said: str) -> None:
    assert line_of(text).startswith("lead.toml: " + said)


def test_hundreds_of_mistakes_are_counted() -> None:
    lines = lines_of(LEAST + "".join(f"k{number} = {number}\n" for number in range(500)))
    assert len(lines) == 21
    assert lines[-1] == "lead.toml: and 480 more mistakes like these"


@pytest.mark.parametrize("law", ["rc", "log", "exp", "soft"])
@pytest.mark.parametrize("table", ["pitch", "gain"])
def test_fixed_timing_of_a_law_without_it_says_why(law: str, table: str) -> None:
    line = line_of(LEAST.replace(f"[{table}]", f'[{table}]\nlaw = "{law}"\ntiming = "fixed"'))
    assert line.startswith(f'lead.toml: {table}.timing = "fixed": the {law} law can\'t have it: ')


@pytest.mark.parametrize(
    ("keys", "said"),
    [
        ('law = "curve"', 'gain.law = "curve"'),
        ('law = "cosine"', 'gain.law = "cosine"'),
        ('law = "cosine"\ntiming = "rate"', 'gain.law = "cosine"'),
        ('timing = "fixed"', 'gain.timing = "fixed"'),
    ],
)
def test_a_timed_gain_law_has_no_meaning_with_an_envelope(keys: str, said: str) -> None:
    timed = LEAST.replace("[gain]", "[gain]\n" + keys)
    assert parse_preset(timed).envelope is None
    line = line_of(timed + "[envelope]\nattack = 0\ndecay = 0\nsustain = 1\nrelease = 0\n")
    assert line.startswith(
        f"lead.toml: {said}: has no meaning with an [envelope]: a timed glide starts afresh"
    )


@pytest.mark.parametrize("law", ["linear", "rc", "log", "exp", "soft"])
def test_other_gain_laws_go_with_an_envelope_and_timed_pitch_does(law: str) -> None:
    text = LEAST.replace("[gain]", f'[gain]\nlaw = "{law}"').replace("[pitch]", '[pitch]\nlaw = "curve"')
    assert parse_preset(text + "[envelope]\nattack = 0\ndecay = 0\nsustain = 1\nrelease = 0\n").envelope


def test_wave_file_and_its_file_go_together() -> None:
    assert "oscillator.file is missing" in line_of(LEAST + '[oscillator]\nwave = "file"\n')
    assert 'the wave is "saw"' in line_of(LEAST + '[oscillator]\nfile = "cycle.wav"\n')
    both = parse_preset(LEAST + '[oscillator]\nwave = "file"\nfile = "cycle.wav"\n', Path("bank/a.toml"))
    assert both.oscillator == Oscillator("file", 0.5, -12.0, Path("bank/cycle.wav"))


def test_a_mistake_does_not_bring_a_second_one_with_it() -> None:
    assert '"curved"' in line_of(LEAST.replace("[gain]", '[gain]\nlaw = "curved"\ntiming = "fixed"'))
    assert '"fil"' in line_of(LEAST + '[oscillator]\nwave = "fil"\nfile = "cycle.wav"\n')


def test_load_preset_names_the_file_in_every_refusal(tmp_path: Path) -> None:
    def refusal(name: str, data: bytes | None = None) -> str:
        if data is not None:
            (tmp_path / name).write_bytes(data)
        with pytest.raises(PresetError) as caught:
            load_preset(tmp_path / name)
        (line,) = caught.value.lines
        assert line.startswith(text_module.printable(str(tmp_path / name)) + ": ")
        return line

    assert "no such file" in refusal("gone.toml")
    assert "is a folder" in refusal("")
    assert "UTF-8" in refusal("latin.toml", b"title = '\xe9'")
    assert "not valid TOML" in refusal("boms.toml", b"\xef\xbb\xbf" * 2 + LEAST.encode())
    assert "NUL" in refusal("nul.toml", b"title = '\0'")
    assert "not valid TOML" in refusal("bad.toml", b"title = ")
    assert "nested far too deeply" in refusal("deep.toml", b"a = " + b"[" * 5000)
    assert "1,000,000 bytes" in refusal("big.toml", b"#" * 1_000_001)
    assert "\\x1b" in refusal("esc\x1b.toml", b"x = ")
    (tmp_path / "good.toml").write_text(FULL)
    assert load_preset(str(tmp_path / "good.toml")).title == "Night ferry lead"


def test_a_byte_order_mark_is_passed_over_and_written_back(tmp_path: Path) -> None:
    file = tmp_path / "marked.toml"
    file.write_bytes(b"\xef\xbb\xbf" + FULL.encode())
    assert load_preset(file) == replace(parse_preset(FULL, file), path=file)
    save_preset(file, {"title": "Ferry"})
    written = FULL.replace('"Night ferry lead"', '"Ferry"').encode()
    assert file.read_bytes() == b"\xef\xbb\xbf" + written
    copy = tmp_path / "below" / "copy.toml"
    copy.parent.mkdir()
    save_preset(copy, {}, file)
    assert copy.read_bytes().startswith(b"\xef\xbb\xbf# The lead")


LAW_LINES = {
    "bend": "pitch.bend has no effect with law {law}; it counts for log and exp",
    "knee": "pitch.knee has no effect with law {law}; it counts for soft",
    "curvature": "pitch.curvature has no effect with law {law}; it counts for curve",
}
LAW_KEYS = {"log": "bend", "exp": "bend", "soft": "knee", "curve": "curvature"}


@pytest.mark.parametrize("law", ["linear", "rc", "log", "exp", "soft", "curve", "cosine"])
def test_settings_without_effect_are_told_by_law(law: str) -> None:
    given = f'[pitch]\nlaw = "{law}"\nbend = 2\nknee = 0.1\ncurvature = 3\n'
    preset = parse_preset(LEAST.replace("[pitch]\n", given))
    told = [line.format(law=law) for leaf, line in LAW_LINES.items() if leaf != LAW_KEYS.get(law)]
    assert list(preset.unused()) == told


def test_settings_without_effect_are_told_of_every_table_and_follow_changes() -> None:
    text = LEAST.replace("[gain]\n", "[gain]\nknee = 0.2\n")
    preset = parse_preset(text + "[oscillator]\nwidth = 0.3\n[amplifier]\nrange_db = 40\n")
    assert preset.unused() == (
        "oscillator.width has no effect with wave saw; it counts for pulse",
        "gain.knee has no effect with law linear; it counts for soft",
        "amplifier.range_db has no effect with law linear; it counts for decibel",
    )
    used = {"oscillator.wave": "pulse", "gain.law": "soft", "amplifier.law": "decibel"}
    assert preset.changed(used).unused() == ()


def test_defaults_are_not_told_as_without_effect() -> None:
    for text in (LEAST, FULL):
        preset = parse_preset(text)
        assert preset.unused() == ()
        bare = replace(preset, given=None, path=Path("lead.toml"))
        assert bare.unused() == ()
        assert bare.changed({"pitch.rise": 0.5}).unused() == ()


def test_a_preset_says_where_it_is_from() -> None:
    assert parse_preset(LEAST, Path("bank/a\x1b.toml")).where == "bank/a\\x1b.toml"
    assert parse_preset(LEAST).where == ""
    assert len(parse_preset(LEAST, Path("x" * 5000)).where) <= 200


def test_an_unknown_key_of_a_table_gets_its_keys() -> None:
    line = line_of(LEAST + '[phrase]\nfile = "a.mid"\nfrob = 3\n')
    assert line == "lead.toml: phrase.frob = 3: there is no such key; [phrase] has file, track, channel"


def test_presets_made_of_mappings_name_no_file() -> None:
    assert preset_from_mapping({"pitch": {"rise": 1, "fall": 1}, "gain": {"rise": 1, "fall": 1}}).path is None
    with pytest.raises(PresetError) as caught:
        preset_from_mapping({"pitch": {"rise": -1, "fall": 1}, "gain": {"rise": 1, "fall": 1}}, "candidate 3")
    assert str(caught.value).startswith("candidate 3: pitch.rise = -1: ")
    assert isinstance(caught.value, SettingError)


def test_presets_travel_between_processes() -> None:
    preset = parse_preset(FULL, Path("lead.toml"))
    assert pickle.loads(pickle.dumps(preset)) == preset
    assert hash(preset) == hash(parse_preset(FULL, Path("lead.toml")))


def test_settings_are_flat_effective_and_fit_for_json(tmp_path: Path) -> None:
    (tmp_path / "cycle.wav").write_bytes(b"RIFF")
    text = LEAST + '[oscillator]\nwave = "file"\nfile = "cycle.wav"\n[drone]\nnote = 50\n'
    preset = parse_preset(text, tmp_path / "a.toml")
    flat = preset.settings()
    assert json.loads(json.dumps(flat, allow_nan=False)) == flat
    assert flat["oscillator.file"] == f"sha256:{hashlib.sha256(b'RIFF').hexdigest()}"
    assert flat["drone.note"] == "D3"
    assert flat["pitch.timing"] == "rate"
    assert flat["title"] == "a"
    assert "envelope.attack" not in flat
    missing = parse_preset(text.replace("cycle", "gone"), tmp_path / "a.toml")
    assert missing.settings()["oscillator.file"] == (tmp_path / "gone.wav").as_posix()


def test_every_setting_is_in_settings_and_changes_the_hash() -> None:
    base = parse_preset(
        LEAST
        + "[envelope]\nattack = 0\ndecay = 0\nsustain = 1\nrelease = 0\n[converter]\n[drone]\nnote = 40\n"
        + '[phrase]\nfile = "a.mid"\ntrack = 1\nchannel = 1\n'
    )
    other: dict[str, object] = {"pitch.timing": "fixed", "gain.law": "rc", "oscillator.wave": "sine"}
    for key in KEYS:
        if key.name in ("oscillator.file", "gain.timing"):
            continue
        value = other.get(key.name, _another(key.name))
        changed = base.changed({key.name: value})
        assert key.name in changed.settings()
        assert changed.settings()[key.name] != base.settings()[key.name]
        unheard = key.name == "title" or key.table == "phrase"
        assert (settings_hash(changed) == settings_hash(base)) == unheard, key.name


def _another(name: str) -> object:
    key = KEY[name]
    if key.kind in ("time", "number"):
        return 0.7 * key.lowest + 0.3 * key.highest
    if key.kind == "choice":
        return key.choices[-1]
    return {"whole": 7, "flag": True, "note": "F5", "file": "b.mid", "text": "another"}[key.kind]


def test_the_hash_is_that_of_the_canonical_json_and_blind_to_notation(tmp_path: Path) -> None:
    preset = parse_preset(LEAST)
    heard = {name: value for name, value in preset.settings().items() if name != "title"}
    canonical = json.dumps(heard, sort_keys=True, separators=(",", ":")).encode()
    assert settings_hash(preset) == hashlib.sha256(canonical).hexdigest()
    same = LEAST.replace("0.06", '"60 ms"') + 'title2 = 1\n[tuning]\na4_hz = 440\nzero_volts = "B#3"\n'
    assert settings_hash(
        parse_preset(same.replace("title2 = 1\n", ""), tmp_path / "b.toml")
    ) == settings_hash(preset)


def test_changed_starts_from_what_was_given() -> None:
    preset = parse_preset(FULL, Path("presets/lead.toml"))
    slower = preset.changed({"pitch.rise": "120 ms", "oscillator.level_db": -6})
    assert slower == replace(
        preset,
        pitch=replace(preset.pitch, slew=replace(preset.pitch.slew, rise=0.12)),
        oscillator=replace(preset.oscillator, level_db=-6.0),
    )
    assert preset.changed({}) == preset
    assert preset.changed({"envelope": None}).envelope is None
    assert preset.changed({"amplifier.range_db": None}).amplifier.range_db == 60.0
    assert preset.pitch.slew.rise == 0.06


def test_changed_lets_an_open_timing_follow_the_law_and_drops_an_unused_wave_file() -> None:
    preset = parse_preset(LEAST)
    assert preset.changed({"pitch.law": "curve"}).pitch.slew.timing == "fixed"
    assert preset.changed({"pitch.law": "curve"}).changed({"pitch.law": "rc"}).pitch.slew.timing == "rate"
    filed = preset.changed({"oscillator.wave": "file", "oscillator.file": Path("cycle.wav")})
    assert filed.oscillator.file == Path("cycle.wav")
    assert filed.changed({"oscillator.wave": "saw"}).oscillator.file is None


def test_changed_works_without_a_file_behind_it() -> None:
    parsed = parse_preset(FULL, Path("presets/lead.toml"))
    bare = replace(parsed, given=None)
    again = bare.changed({"pitch.rise": 0.5})
    assert again.pitch.slew.rise == 0.5
    assert again.phrase is not None
    assert parsed.phrase is not None
    assert again.phrase.file == parsed.phrase.file.absolute()
    assert replace(again, pitch=parsed.pitch, phrase=parsed.phrase) == parsed


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"pitch.rize": 1}, 'pitch.rize = 1: there is no such key (did you mean "pitch.rise"?)'),
        ({"ptich.rise": 1}, '[ptich] is no table of a preset (did you mean "pitch"?)'),
        ({"pitch": 3}, "pitch = 3: must be one table"),
        ({"pitch.rise": None}, "pitch.rise is missing"),
        ({"pitch.rise": math.nan}, "pitch.rise = nan"),
        ({"gain.law": "curve"}, 'gain.law = "curve": has no meaning with an [envelope]'),
        ({"a.b.c": 1}, "[a.b] is no table"),
    ],
)
def test_changes_are_checked_by_the_same_rules(changes: dict[str, object], said: str) -> None:
    preset = parse_preset(FULL, Path("lead.toml"))
    with pytest.raises(PresetError) as caught:
        preset.changed(changes)
    assert str(caught.value).startswith("lead.toml: " + said)
    with pytest.raises(PresetError) as written:
        update_preset_text(FULL, changes, Path("lead.toml"))
    assert str(written.value) == str(caught.value)


def changed_lines(before: str, after: str) -> tuple[list[str], list[str]]:
    old, new = before.splitlines(), after.splitlines()
    return [line for line in old if line not in new], [line for line in new if line not in old]


def test_writing_back_changes_the_line_and_nothing_else() -> None:
    after = update_preset_text(
        FULL, {"pitch.rise": "80 ms", "tuning.zero_volts": "A4", "title": "Ferry, slower"}
    )
    assert changed_lines(FULL, after) == (
        [
            'title = "Night ferry lead"   # as the cue sheet has it',
            'rise = "60 ms"               # up is quick',
            'zero_volts = "C4"',
        ],
        [
            'title = "Ferry, slower"   # as the cue sheet has it',
            'rise = "80 ms"               # up is quick',
            'zero_volts = "A4"',
        ],
    )


def test_writing_back_keeps_each_notation() -> None:
    after = update_preset_text(FULL, {"pitch.rise": 0.25, "envelope.attack": 0.5, "tuning.zero_volts": 57})
    assert 'rise = "250 ms"               # up is quick' in after
    assert "attack = 0.5\n" in after
    assert 'zero_volts = "A3"' in after
    numbered = FULL.replace('zero_volts = "C4"', "zero_volts = 60")
    assert "zero_volts = 57" in update_preset_text(numbered, {"tuning.zero_volts": 57})


def test_writing_what_is_already_there_changes_no_byte() -> None:
    same: dict[str, object] = {
        "pitch.rise": 0.06,
        "gain.law": "linear",
        "tuning.a4_hz": 440,
        "tuning.zero_volts": 60,
    }
    assert update_preset_text(FULL, same) == FULL
    assert update_preset_text(FULL, {}) == FULL


def test_writing_back_adds_keys_and_tables() -> None:
    after = update_preset_text(FULL, {"pitch.knee": 0.25, "drone.note": 50, "drone.level_db": -20.0})
    assert changed_lines(FULL, after) == ([], ["knee = 0.25", "[drone]", 'note = "D3"', "level_db = -20.0"])
    assert "steps_per_octave = 0\nknee = 0.25\n\n# The gate opens softly.\n[gain]" in after
    assert after.endswith('ferry-line.toml"\n\n[drone]\nnote = "D3"\nlevel_db = -20.0\n')


def test_a_title_is_added_above_the_tables() -> None:
    for text in (LEAST, "# only a remark\n" + LEAST, "\n\n# two\n\n# remarks\n\n" + LEAST):
        after = update_preset_text(text, {"title": "Ferry"})
        assert parse_preset(after).title == "Ferry"
        assert [line for line in text.splitlines() if line] == [
            line for line in after.splitlines() if line and "Ferry" not in line
        ]


def test_writing_back_takes_keys_and_tables_out_and_leaves_other_remarks() -> None:
    remarked = FULL.replace("[amplifier]", "# Loudness.\n[amplifier]")
    after = update_preset_text(remarked, {"envelope": None, "pitch.glide": None, "converter": None})
    preset = parse_preset(after)
    assert preset.envelope is None
    assert preset.converter is None
    assert preset.pitch.glide == "always"
    assert "# Loudness.\n[amplifier]" in after
    assert "# The gate opens softly.\n[gain]" in after
    assert update_preset_text(FULL, {"drone": None, "pitch.bend": None}) == FULL


@pytest.mark.parametrize(
    "text",
    [
        'pitch.rise = 1\npitch.fall = "2 s" # c\ngain = {rise = 1, fall = 2}\n',
        "pitch = { rise = 1, fall = 2 } # inline\n[gain]\nrise = 1\nfall = 2",
        "[gain]\nrise=1\nfall=2\n[oscillator]\n[pitch]\nfall=1\n\n\nrise=2",
        "  [pitch]\n  rise = 1\n  fall = 2\n\n  [gain]\n  rise = 1\n  fall = 1  # last",
        '"pitch"."rise" = 1\n\'pitch\'.fall = 1\n["gain"]\n"rise" = 1\nfall = 1\n',
        "[pitch]\nrise = 1\nfall = 1\n# between\n\n#\n[gain]\nrise = 1\nfall = 1\n# end",
    ],
)
def test_unusual_layouts_are_written_right_or_refused(text: str) -> None:
    changes: dict[str, object] = {
        "pitch.rise": 0.5,
        "gain.law": "rc",
        "pitch.knee": 0.2,
        "envelope.sustain": 0.5,
    }
    changes |= {"envelope.attack": "1 ms", "envelope.decay": 1, "envelope.release": 0.0, "title": "x"}
    after = update_preset_text(text, changes)
    expected = parse_preset(text).changed(changes)
    assert parse_preset(after) == expected
    for line in text.splitlines():
        if "#" in line:
            assert line[line.index("#") :] in after


def test_line_ends_stay_as_they_were() -> None:
    windows = FULL.replace("\n", "\r\n")
    after = update_preset_text(windows, {"pitch.knee": 0.2, "drone.note": "C3", "title": "a\nb"})
    assert after.count("\n") == after.count("\r\n")
    assert parse_preset(after).title == "a\nb"


def test_titles_with_control_characters_are_written_escaped() -> None:
    nasty = 'bell\x07 escape\x1b quote" back\\slash\n\t\x7f\x85\u2028 end'
    after = update_preset_text(FULL, {"title": nasty})
    assert tomllib.loads(after)["title"] == nasty
    assert "\x07" not in after
    assert "\x1b" not in after


def test_an_empty_text_becomes_a_preset() -> None:
    changes: dict[str, object] = {"pitch.rise": "60 ms", "pitch.fall": 0.1, "gain.rise": 0, "gain.fall": 0.1}
    after = update_preset_text("", {"title": "New", **changes})
    assert parse_preset(after).title == "New"
    assert parse_preset(after).pitch.slew.rise == 0.06


def test_a_layout_the_editor_fails_on_is_left_alone(monkeypatch: pytest.MonkeyPatch) -> None:
    import tomlkit

    monkeypatch.setattr(tomlkit, "dumps", lambda _: LEAST)
    with pytest.raises(PresetError, match=r"^lead.toml: is laid out so that pitch.rise can't be changed"):
        update_preset_text(FULL, {"pitch.rise": 1.0}, Path("lead.toml"))


def test_save_preset_writes_whole_files(tmp_path: Path) -> None:
    file = tmp_path / "lead.toml"
    file.write_bytes(FULL.encode())
    saved = save_preset(file, {"pitch.rise": "80 ms"})
    assert saved == load_preset(file)
    assert saved.pitch.slew.rise == 0.08
    assert file.read_text().count("#") == FULL.count("#")
    assert list(tmp_path.iterdir()) == [file]


def test_save_preset_does_not_touch_a_file_that_stays_the_same(tmp_path: Path) -> None:
    file = tmp_path / "lead.toml"
    file.write_bytes(FULL.encode())
    os.utime(file, (1, 1))
    save_preset(file, {"pitch.rise": 0.06})
    assert file.stat().st_mtime == 1


def test_save_preset_to_another_folder_takes_relative_files_along(tmp_path: Path) -> None:
    (tmp_path / "bank").mkdir()
    (tmp_path / "out" / "deep").mkdir(parents=True)
    (tmp_path / "cycle.wav").write_bytes(b"x")
    source = tmp_path / "bank" / "lead.toml"
    source.write_text(
        LEAST + '[oscillator]\nwave = "file"\nfile = "../cycle.wav"\n[phrase]\nfile = "/abs/a.mid"\n'
    )
    saved = save_preset(tmp_path / "out" / "deep" / "lead.toml", {"pitch.rise": 0.5}, source=source)
    assert 'file = "../../cycle.wav"' in (tmp_path / "out" / "deep" / "lead.toml").read_text()
    assert saved.oscillator.file is not None
    assert saved.oscillator.file.read_bytes() == b"x"
    assert saved.phrase == PhraseSource(Path("/abs/a.mid"), None, None)
    assert load_preset(source).pitch.slew.rise == 0.06


def test_nothing_is_lost_when_saving_fails(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file = tmp_path / "lead.toml"
    file.write_bytes(FULL.encode())
    with pytest.raises(PresetError):
        save_preset(file, {"pitch.rise": -1})
    with pytest.raises(PresetError, match="no such file"):
        save_preset(tmp_path / "gone.toml", {"pitch.rise": 1})

    def fail(*_: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(text_module.os, "fsync", fail)
    with pytest.raises(OutputError, match="the disk is full"):
        save_preset(file, {"pitch.rise": 1})
    assert file.read_bytes() == FULL.encode()
    assert list(tmp_path.iterdir()) == [file]


def values_for(name: str) -> st.SearchStrategy[object]:
    key = KEY[name]
    if key.kind in ("time", "number"):
        return st.floats(key.lowest, key.highest)
    if key.kind == "whole":
        return st.integers(int(key.lowest), int(key.highest))
    if key.kind == "choice":
        return st.sampled_from(
            [choice for choice in key.choices if choice not in ("file", "curve", "cosine")]
        )
    if key.kind == "note":
        return st.integers(0, 127)
    return {"flag": st.booleans(), "file": st.just("a.mid"), "text": st.text()}[key.kind]


FREE_KEYS = [key.name for key in KEYS if key.leaf not in ("timing",) and key.name != "oscillator.file"]
REMARK = st.sampled_from(["", "# a remark\n", "\n", "\n# two\n\n"])
SOME_CHANGES = st.lists(st.sampled_from(FREE_KEYS), max_size=5, unique=True).flatmap(
    lambda names: st.fixed_dictionaries({name: values_for(name) for name in names})
)


@seeded
@given(SOME_CHANGES, st.lists(REMARK, min_size=8, max_size=8), st.permutations(range(4)))
def test_any_change_to_any_layout_says_what_was_asked_and_keeps_every_remark(
    changes: dict[str, object], remarks: list[str], order: list[int]
) -> None:
    tables = [
        "[pitch]\nrise = 1 # one\nfall = 2\n",
        "[gain]\nrise = 1\nfall = 2 # two\n",
        "[envelope]\nattack = 0\ndecay = 0\nsustain = 1\nrelease = 0\n",
        '[drone]\nnote = "C3"\n[phrase]\nfile = "b.mid"\n[converter]\n',
    ]
    text = remarks[0] + "".join(tables[index] + remarks[index + 1] for index in order)
    after = update_preset_text(text, changes)
    assert parse_preset(after) == parse_preset(text).changed(changes)
    assert [line for line in after.splitlines() if line.startswith("#")] == [
        line for line in text.splitlines() if line.startswith("#")
    ]


JUNK = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8) | st.dates(),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
    max_leaves=8,
)
LEAF_NAMES = st.sampled_from([key.leaf for key in KEYS]) | st.text(max_size=8)
TABLE_NAMES = st.sampled_from([key.table or "title" for key in KEYS]) | st.text(max_size=8)


@seeded
@given(st.dictionaries(TABLE_NAMES, st.dictionaries(LEAF_NAMES, JUNK, max_size=6) | JUNK, max_size=6))
def test_any_mapping_is_a_preset_or_gets_its_lines(mapping: dict[str, object]) -> None:
    lines: tuple[str, ...] = ("candidate: ",)
    try:
        preset = preset_from_mapping(mapping, "candidate")
        assert preset.changed({}) == preset
    except PresetError as caught:
        lines = caught.lines
    assert lines
    assert all(line.startswith("candidate: ") and line.isprintable() for line in lines)
