"""What moves mean: by the table of preset keys (DESIGN section 6) and the rules that preset files go by."""

import json
import random
from fractions import Fraction

import pytest

from conftest import PRESETS
from glidesmith.console import SWITCHED_TABLES, Console, exact_tempo, unused_keys
from glidesmith.content import phrase_as_json, phrase_from_json, preset_as_json, preset_from_json
from glidesmith.errors import GlidesmithError, PresetError, SettingError
from glidesmith.moves import make_move, move_from_dict
from glidesmith.preset import load_preset, preset_from_mapping
from glidesmith.settings import KEY, LAWS
from glidesmith.slotting import filled_slot
from glidesmith.undoing import MOST_STEPS, Steps
from making import make_phrase, make_preset
from playing import MOVED_KEYS, random_value

PHRASE = make_phrase(("0", "1/3", 50), ("1/3", "1", 62, 0.7))


def console(*tables, **options) -> Console:
    presets = [make_preset(**table) for table in tables or ({},)]
    return Console([filled_slot(preset, PHRASE, "") for preset in presets], **options)


def do(desk: Console, kind: str, **values) -> None:
    """Apply a move as it comes through JSON."""
    move = make_move(kind, **values)
    desk.apply(move_from_dict(json.loads(json.dumps(move.as_dict()))))


def put(desk: Console, key: str, value: object, slot: int = 1, **more) -> None:
    do(desk, "set", slot=slot, key=key, value=value, **more)


def values(desk: Console, slot: int = 1) -> dict:
    return desk.slot(slot).preset.values()


@pytest.mark.parametrize("key", MOVED_KEYS)
def test_every_setting_moves_to_any_value_that_a_file_may_have(key):
    draw = random.Random(key)
    table = KEY[key].table
    for _ in range(8):
        desk = console(
            {"envelope": {"attack": 0, "decay": 0, "sustain": 1, "release": 0}} if "env" in key else {}
        )
        if table in SWITCHED_TABLES and table != "envelope":
            put(desk, table, True)
        value = random_value(draw, key)
        if value == "file":  # needs a file, which a test of its own has
            continue
        if KEY[key].leaf == "timing":
            put(desk, key.replace("timing", "law"), "linear")
        put(desk, key, value)
        assert values(desk)[key] == KEY[key].plain(KEY[key].check(value))
        written = preset_from_mapping(desk.slot(1).preset.given)
        assert written == desk.slot(1).preset


def test_values_may_be_given_as_in_a_file():
    desk = console()
    put(desk, "pitch.rise", "80 ms")
    put(desk, "tuning.zero_volts", "A3")
    assert values(desk)["pitch.rise"] == 0.08
    assert values(desk)["tuning.zero_volts"] == "A3"
    put(desk, "tuning.zero_volts", None)
    assert values(desk)["tuning.zero_volts"] == "C4"


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("pitch.rise", 99.0),
        ("pitch.rise", "soon"),
        ("pitch.rise", None),
        ("pitch.law", "lin"),
        ("oscillator.width", 0.99),
        ("oscillator.wave", "file"),
        ("pitch.steps_per_octave", 2.5),
        ("tuning.zero_volts", "H9"),
        ("amplifier.range_db", True),
    ],
)
def test_a_value_against_its_rule_gets_the_lines_of_a_preset_file_and_changes_nothing(key, value):
    desk = console()
    before = desk.bank
    table, _, leaf = key.rpartition(".")
    mapping = {name: dict(table) for name, table in make_preset().given.items() if name != "title"}
    mapping.setdefault(table, {})[leaf] = value
    if value is None:
        del mapping[table][leaf]
    with pytest.raises(PresetError) as expected:
        preset_from_mapping(mapping)
    with pytest.raises(SettingError) as found:
        put(desk, key, value)
    assert found.value.lines == expected.value.lines
    assert desk.bank is before
    assert desk.steps.depth == (0, 0)


@pytest.mark.parametrize(
    ("key", "value", "said"),
    [
        ("pitch.rize", 1.0, 'did you mean "pitch.rise"'),
        ("pitch", 1.0, "is a table; move one of its keys"),
        ("phrase.file", "x.mid", "is no setting that moves"),
        ("envelope.attack", 0.1, "is off; turn it on"),
        ("drone", 3, "must be true or false"),
        ("envelope", {"attak": 1}, "there is no such key"),
    ],
)
def test_what_is_no_setting_is_told_in_one_line(key, value, said):
    desk = console()
    with pytest.raises(SettingError) as problem:
        put(desk, key, value)
    (line,) = problem.value.lines
    assert said in line
    assert line.isprintable()


def test_lines_do_not_blame_the_file_that_the_preset_came_from():
    desk = Console([filled_slot(load_preset(PRESETS / "deck-tune.toml"), PHRASE, "")])
    with pytest.raises(SettingError, match=r"^pitch\.rise = 99"):
        put(desk, "pitch.rise", 99)


def test_a_law_that_cannot_have_a_fixed_time_takes_its_own_timing_along():
    """DESIGN section 4: only linear, curve and cosine offer it."""
    for law in LAWS:
        desk = console({"pitch": {"law": "linear", "timing": "fixed"}})
        put(desk, "pitch.law", law)
        wanted = "fixed" if law in ("linear", "curve", "cosine") else "rate"
        assert values(desk)["pitch.timing"] == wanted
        do(desk, "undo")
        assert values(desk)["pitch.law"] == "linear"
        assert values(desk)["pitch.timing"] == "fixed"


def test_combinations_without_meaning_are_refused_whole():
    """DESIGN section 4: no fixed time for rc; no timed glide behind an envelope."""
    desk = console()
    for refused in ("pitch.timing", "gain.timing"):
        put(desk, refused.replace("timing", "law"), "rc")
        with pytest.raises(SettingError, match="can't have it"):
            put(desk, refused, "fixed")
    put(desk, "envelope", {})
    for law in ("curve", "cosine"):
        with pytest.raises(SettingError, match="has no meaning with an"):
            put(desk, "gain.law", law)
    put(desk, "envelope", False)
    put(desk, "gain.law", "cosine")
    with pytest.raises(SettingError, match="has no meaning with an"):
        put(desk, "envelope", True)
    assert desk.slot(1).preset.envelope is None


@pytest.mark.parametrize(
    ("table", "key", "value"),
    [("envelope", "sustain", 0.25), ("converter", "bits", 7), ("drone", "level_db", -41.0)],
)
def test_an_optional_table_that_comes_back_has_its_last_values(table, key, value):
    desk = console()
    put(desk, table, {})
    put(desk, f"{table}.{key}", value)
    put(desk, table, None)
    assert f"{table}.{key}" not in values(desk)
    put(desk, table, True)
    assert values(desk)[f"{table}.{key}"] == value


def test_a_table_that_is_on_stays_as_it_is():
    desk = console()
    put(desk, "converter", {"bits": 5, "span_volts": 4.0})
    put(desk, "converter", None)
    put(desk, "converter", True)
    put(desk, "converter.span_volts", None)
    before = values(desk)
    put(desk, "converter", True)
    assert values(desk) == before
    put(desk, "converter", {"bits": 9})
    assert values(desk)["converter.bits"] == 9


def test_a_drone_begins_on_the_first_note_of_the_phrase():
    desk = console()
    put(desk, "drone", True)
    assert values(desk)["drone.note"] == "D3"  # MIDI 50


def test_the_wave_file_comes_back_with_its_cycle():
    preset = load_preset(next(p for p in sorted(PRESETS.glob("*.toml")) if 'wave = "file"' in p.read_text()))
    desk = Console([filled_slot(preset, PHRASE, "")])
    cycle = desk.slot(1).cycle
    assert cycle
    put(desk, "oscillator.wave", "saw")
    assert desk.slot(1).cycle is None
    put(desk, "oscillator.wave", "file")
    assert desk.slot(1).cycle == cycle
    assert desk.slot(1).preset.oscillator.file == preset.oscillator.file
    with pytest.raises(SettingError, match="samples are missing"):
        put(desk, "oscillator.file", "other.wav")
    put(desk, "oscillator.wave", "sine")
    put(desk, "oscillator.file", "other.wav", cycle=cycle[::1])
    assert desk.slot(1).preset.oscillator.wave == "file"


def test_undo_goes_back_over_settings_loads_copies_tempo_and_phrase_and_redo_forward():
    desk = console({}, {})
    banks = [desk.bank]
    steps = [
        ("set", {"slot": 1, "key": "pitch.rise", "value": 0.5}),
        ("load", {"slot": 3, "preset": make_preset(title="Other")}),
        ("copy", {"source": 3, "slot": 2}),
        ("tempo", {"percent": 80}),
        ("transpose", {"semitones": -3}),
        ("phrase", {"phrase": make_phrase(("0", "1", 40)), "slot": 2}),
        ("set", {"slot": 2, "key": "envelope", "value": {}}),
    ]
    for kind, fields in steps:
        do(desk, kind, **fields)
        banks.append(desk.bank)
    for bank in reversed(banks[:-1]):
        do(desk, "undo")
        assert desk.bank is bank
    with pytest.raises(SettingError, match="nothing to undo"):
        do(desk, "undo")
    for bank in banks[1:]:
        do(desk, "redo")
        assert desk.bank is bank
    with pytest.raises(SettingError, match="nothing to redo"):
        do(desk, "redo")


def test_undo_never_moves_level_match_transport_or_the_chosen_slot():
    desk = console({}, {})
    put(desk, "pitch.rise", 0.5)
    do(desk, "level", level_db=-50.0)
    do(desk, "match_gain", slot=1, gain_db=-6.0)
    do(desk, "loop", on=False)
    do(desk, "match", on=False)
    do(desk, "select", slot=2, when="now")
    for quiet in ("play", "stop", "panic"):
        do(desk, quiet)
    assert desk.steps.depth == (1, 0)
    do(desk, "undo")
    assert (desk.level_db, desk.gains_db, desk.loop, desk.match, desk.current) == (
        -50,
        {1: -6},
        False,
        False,
        2,
    )


def test_the_moves_of_one_gesture_are_one_step():
    desk = console()
    for value in (0.1, 0.2, 0.3):
        put(desk, "pitch.rise", value, gesture=7)
    put(desk, "pitch.fall", 0.4, gesture=7)
    put(desk, "pitch.fall", 0.5, gesture=8)
    assert desk.steps.depth == (3, 0)
    do(desk, "undo")
    assert values(desk)["pitch.fall"] == 0.4
    do(desk, "undo")
    do(desk, "undo")
    assert values(desk)["pitch.rise"] == 0.06


def test_a_gesture_ends_with_undo_and_with_another_slot():
    desk = console({}, {})
    put(desk, "pitch.rise", 0.1, gesture=1)
    do(desk, "undo")
    put(desk, "pitch.rise", 0.2, gesture=1)
    do(desk, "select", slot=2, when="now")
    put(desk, "pitch.rise", 0.3, gesture=1)
    assert desk.steps.depth == (2, 0)


def test_undo_forgets_the_oldest_steps():
    steps: Steps[int] = Steps()
    for state in range(MOST_STEPS + 10):
        steps.add(state)
    assert steps.depth == (MOST_STEPS, 0)
    states = [steps.undo(-1) for _ in range(MOST_STEPS + 1)]
    assert states[-2:] == [10, None]


def test_undoing_a_load_into_the_slot_that_sounds_goes_to_one_that_is_there():
    desk = console()
    do(desk, "load", slot=5, preset=make_preset())
    do(desk, "select", slot=5, when="now")
    do(desk, "undo")
    assert desk.filled() == [1]
    assert desk.current == 1


def test_slots_are_filled_selected_and_waited_for():
    desk = console({}, {})
    with pytest.raises(SettingError, match="slot 4 is empty"):
        do(desk, "select", slot=4, when="now")
    do(desk, "copy", source=2, slot=8)
    assert desk.filled() == [1, 2, 8]
    do(desk, "select", slot=8, when="loop")
    assert (desk.current, desk.waiting) == (1, 8)
    do(desk, "select", slot=1, when="loop")
    assert desk.waiting is None
    do(desk, "select", slot=2, when="loop")
    do(desk, "arrive", slot=2)
    assert (desk.current, desk.waiting) == (2, None)
    with pytest.raises(SettingError, match="to itself"):
        do(desk, "copy", source=2, slot=2)


def test_a_copy_belongs_to_no_file_and_its_changes_are_its_own():
    path = PRESETS / "deck-tune.toml"
    desk = Console([filled_slot(load_preset(path), PHRASE, "")])
    do(desk, "copy", source=1, slot=2)
    assert desk.slot(1).source.path == path
    assert desk.slot(2).source.path is None
    put(desk, "pitch.rise", 0.33, slot=2)
    assert values(desk)["pitch.rise"] != 0.33


def test_a_transposition_beyond_the_range_of_notes_is_refused():
    high = make_phrase(("0", "1", 120))
    desk = Console([filled_slot(make_preset(), high, "")])
    do(desk, "transpose", semitones=7)
    with pytest.raises(SettingError, match="takes C9 of phrase"):
        do(desk, "transpose", semitones=8)
    with pytest.raises(SettingError, match="out of the range"):
        do(desk, "phrase", phrase=make_phrase(("0", "1", 127)))
    assert desk.bank.semitones == 7


def test_a_loaded_preset_keeps_the_slots_phrase_unless_it_brings_one():
    desk = console()
    do(desk, "load", slot=1, preset=make_preset())
    assert desk.slot(1).phrase.notes == PHRASE.notes
    other = make_phrase(("0", "1", 41))
    do(desk, "load", slot=6, preset=make_preset(), phrase=other)
    assert desk.slot(6).phrase.notes == other.notes


def test_tempo_is_exact_in_thousandths_of_a_per_cent():
    assert exact_tempo(100.0) == 1
    assert exact_tempo(33.333) == Fraction(33_333, 100_000)
    desk = console()
    do(desk, "tempo", percent=66.66666666)
    assert desk.bank.tempo_percent == 66.667
    assert desk.view(1).tempo == Fraction(66_667, 100_000)


def test_what_has_no_effect_is_known():
    found = unused_keys(make_preset(pitch={"law": "soft"}))
    assert "pitch.knee" not in found
    assert {"pitch.bend", "pitch.curvature", "gain.knee", "oscillator.width", "amplifier.range_db"} <= set(
        found
    )


@pytest.mark.parametrize("path", sorted(PRESETS.glob("*.toml")), ids=lambda path: path.stem)
def test_presets_and_phrases_come_through_json_as_they_were(path):
    preset = load_preset(path)
    found = preset_from_json(json.loads(json.dumps(preset_as_json(preset))))
    assert found == preset
    assert found.given == preset.given
    draw = random.Random(1)
    rows = [
        (Fraction(i, 7), Fraction(i, 7) + Fraction(1, 3), draw.randint(0, 127), draw.random())
        for i in range(99)
    ]
    phrase = make_phrase(*rows)
    assert phrase_from_json(json.loads(json.dumps(phrase_as_json(phrase)))).notes == phrase.notes


@pytest.mark.parametrize(
    "mapping",
    [
        None,
        [],
        {"do": 3},
        {"do": "explode"},
        {"do": "set", "slot": 1, "key": "pitch.rise"},
        {"do": "set", "slot": 9, "key": "pitch.rise", "value": 1},
        {"do": "set", "slot": True, "key": "pitch.rise", "value": 1},
        {"do": "set", "slot": 1, "key": "pitch.rise", "value": [1]},
        {"do": "set", "slot": 1, "key": "pitch.rise", "value": 1, "more": 1},
        {"do": "set", "slot": 1, "key": "x" * 5000, "value": 1},
        {"do": "tempo", "percent": 401},
        {"do": "level", "level_db": 0.5},
        {"do": "match_gain", "slot": 1, "gain_db": 1.0},
        {"do": "load", "slot": 1, "preset": {"settings": {"pitch": {}}}},
        {"do": "load", "slot": 1, "preset": {"settings": 3}},
        {"do": "phrase", "phrase": {"notes": []}},
        {"do": "phrase", "phrase": {"notes": [["1", "0", 60, 1.0]]}},
        {"do": "phrase", "phrase": {"notes": [["0", "1e999999999", 60, 1.0]]}},
        {"do": "phrase", "phrase": {"notes": [["0", "1/0", 60, 1.0]]}},
        {"do": "phrase", "phrase": {"notes": [["0", "9999999", 60, 1.0]]}},
        {"do": "phrase", "phrase": {"notes": [["0", "1", 128, 1.0]]}},
        {"do": "set", "slot": 1, "key": "oscillator.file", "value": "x", "cycle": "AAAA"},
        {"do": "set", "slot": 1, "key": "oscillator.file", "value": "x", "cycle": "~"},
        {"do": "set", "slot": 1, "key": "oscillator.file", "value": "x", "cycle": "A" * 800_000},
    ],
)
def test_moves_that_make_no_sense_are_told_in_printable_lines(mapping):
    with pytest.raises(GlidesmithError) as problem:
        move_from_dict(mapping)
    assert all(line.isprintable() and len(line) < 400 for line in problem.value.lines)
