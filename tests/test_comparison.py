"""Comparison sets: candidates, equal loudness, curves, and a folder that never holds two sets.

Loudness is checked with `pyloudnorm` (DeMan filters), an independent meter, to 0.1 LU; true peak by polyphase
interpolation (`scipy.signal.resample_poly`, 16 times), to 0.2 dB.
"""

import hashlib
import io
import json
import math
import sys
import types
import warnings
from fractions import Fraction
from pathlib import Path

import numpy as np
import pyloudnorm
import pytest
import soundfile
from scipy.signal import resample_poly, sosfilt

import glidesmith.comparison as comparison
from conftest import PRESETS
from glidesmith import OutputError, PresetError, SettingError, compare, load_preset, measure, render
from glidesmith.candidates import axes_from_texts, axes_from_values, file_name, read_sheet, varied_candidates
from glidesmith.curves import curves
from glidesmith.loudness import k_weighting
from glidesmith.program import compile_program
from making import make_phrase, make_preset, random_phrase

PHRASE = make_phrase((0, "0.4", 57), ("0.3", "0.7", 64), ("0.7", "1.1", 57, 0.7))
LAWS = {"pitch.law": ["rc", "exp", "cosine"]}


@pytest.fixture(autouse=True)
def pages(monkeypatch):
    """What the page is given, set by set; a short file stands for the page."""
    given = []

    def write_page(path, data, audio):
        given.append((json.loads(json.dumps(data, allow_nan=False)), [bytes(one) for one in audio]))
        Path(path).write_bytes(b"a page")

    module = types.ModuleType("glidesmith.page")
    module.write_page = write_page
    monkeypatch.setitem(sys.modules, "glidesmith.page", module)
    return given


def snapshot(folder):
    """Each file's name, content and time: what "nothing was overwritten" means."""
    return {
        path.name: (hashlib.sha256(path.read_bytes()).hexdigest(), path.stat().st_mtime_ns)
        for path in sorted(folder.iterdir())
        if path.is_file()
    }


def contents(folder):
    return {name: digest for name, (digest, _) in snapshot(folder).items()}


def lufs(audio, sample_rate):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return pyloudnorm.Meter(sample_rate, filter_class="DeMan").integrated_loudness(
            np.asarray(audio, float)
        )


def true_peak_db(audio):
    return 20.0 * math.log10(np.abs(resample_poly(audio, 16, 1, window=("kaiser", 8.0))).max())


# Candidates


def test_all_combinations_in_the_order_of_the_command_line():
    axes = axes_from_texts(["pitch.law=rc,exp", "pitch.rise=60ms, 1.5s", "gain.fall=80 ms"])
    found = varied_candidates([make_preset()], axes, 16)
    assert [c.label for c in found] == [
        "rc, rise 60 ms",
        "rc, rise 1.5 s",
        "exp, rise 60 ms",
        "exp, rise 1.5 s",
    ]
    assert found[3].varied == {"pitch.law": "exp", "pitch.rise": 1.5, "gain.fall": 0.08}
    assert (found[3].preset.pitch.slew.law, found[3].preset.pitch.slew.rise) == ("exp", 1.5)


@pytest.mark.parametrize(
    ("text", "labels"),
    [
        ("gain.law=linear,rc", ["gain linear", "gain rc"]),
        ("amplifier.law=linear,decibel", ["amplifier linear", "amplifier decibel"]),
        ("oscillator.level_db=-12,-6.5 dB", ["level -12 dB", "level -6.5 dB"]),
        ("oscillator.wave=saw,sine", ["saw", "sine"]),
        ("tuning.zero_volts=C4,Bb3", ["tuning zero volts C4", "tuning zero volts A#3"]),
        ("pitch.rise=250us,0", ["rise 250 µs", "rise 0 s"]),
        ("converter.bits=8,12", ["converter bits 8", "converter bits 12"]),
        ("pitch.bend=1,0.5", ["bend 1 /V", "bend 0.5 /V"]),
        ('oscillator.width="0.5",.25', ["width 0.5", "width 0.25"]),
    ],
)
def test_labels_say_what_is_varied(text, labels):
    assert [c.label for c in varied_candidates([make_preset()], axes_from_texts([text]), 16)] == labels


@pytest.mark.parametrize(
    ("number", "label", "count", "name"),
    [
        (1, "rc, rise 60 ms", 3, "01-rc-rise-60ms.wav"),
        (2, "rise 250 µs", 3, "02-rise-250us.wav"),
        (3, "level -6.5 dB", 3, "03-level-minus6.5db.wav"),
        (4, "drone note D#3", 3, "04-drone-note-dsharp3.wav"),
        (5, "Über / .. \\ <script>", 3, "05-uber-script.wav"),
        (6, "夜船", 3, "06.wav"),
        (7, "x" * 300, 3, f"07-{'x' * 60}.wav"),
        (8, "rc", 120, "008-rc.wav"),
    ],
)
def test_file_names_sort_and_are_plain(number, label, count, name):
    assert file_name(number, label, count) == name


@pytest.mark.parametrize(
    ("texts", "words"),
    [
        (["pitch.law"], "give a key and its values"),
        (["pitch.lww=rc,exp"], 'did you mean "pitch.law"'),
        (["pitch.law=rc,exp", "pitch.law=log"], "given twice"),
        (["pitch.law=rc,,exp"], "value 2 of 3 is empty"),
        (["pitch.law="], "empty"),
        (["pitch.law=rc,rc"], "there twice"),
        (["pitch.rise=60ms,0.06"], "there twice"),
        (["pitch.rise=60ms,soon"], 'pitch.rise = "soon"'),
        (["pitch.rise=60ms,90 s"], "0 or 1 µs to 60 s"),
        (["pitch.steps_per_octave=12,1.5"], "whole number"),
        (["title=a,b"], "a title changes nothing"),
        (["phrase.file=a.mid,b.mid"], "one phrase"),
        (["\x1b[31m=1,2"], "no preset key"),
    ],
)
def test_what_can_not_be_varied_is_told_in_a_line(texts, words):
    with pytest.raises(SettingError) as caught:
        axes_from_texts(texts)
    (line,) = caught.value.lines
    assert words in line
    assert line.isprintable()


def test_python_gives_values_as_a_preset_does():
    axes = axes_from_values({"pitch.rise": ["60 ms", 0.1], "drone.note": ["D3", 60]})
    assert axes == {"pitch.rise": (0.06, 0.1), "drone.note": (50, 60)}
    for bad in (
        {"pitch.law": "rc"},
        {"pitch.law": []},
        {"pitch.law": [None]},
        {"pitch.rise": [True, 1]},
        {3: [1]},
    ):
        with pytest.raises(SettingError):
            axes_from_values(bad)


def test_too_many_and_too_few_are_refused_with_the_way_out():
    axes = axes_from_texts(["pitch.law=rc,exp,log", "pitch.rise=1ms,2ms,3ms,4ms,5ms,6ms"])
    with pytest.raises(SettingError, match=r"3 × 6 = 18 candidates, and at most 16 are made; .*--most 18"):
        varied_candidates([make_preset()], axes, 16)
    assert len(varied_candidates([make_preset()], axes, 18)) == 18
    with pytest.raises(SettingError, match="only one candidate"):
        varied_candidates([make_preset()], {}, 16)


def test_a_combination_that_is_no_preset_is_named_once():
    base = make_preset(envelope={"attack": 0.01, "decay": 0.1, "sustain": 0.5, "release": 0.1})
    with pytest.raises(PresetError) as caught:
        varied_candidates([base], axes_from_texts(["gain.law=rc,curve,cosine", "pitch.law=rc,exp"]), 16)
    assert len(caught.value.lines) == 2
    assert caught.value.lines[0].startswith('candidate "gain curve, rc": gain.law = "curve"')
    assert "(and 1 more candidate)" in caught.value.lines[0]


SHEET = """\
title = "Which law?"
[as-it-is]
["slow exp"]
pitch.law = "exp"
pitch.rise = "120 ms"
["slow exp".gain]
rise = 0.01
"""


def test_a_sheet_names_its_candidates(tmp_path):
    path = tmp_path / "sheet.toml"
    path.write_text(SHEET)
    title, (first, second) = read_sheet(make_preset(), path, 16)
    assert (title, first.label, second.label) == ("Which law?", "as-it-is", "slow exp")
    assert first.preset == make_preset()
    assert second.varied == {"pitch.law": "exp", "pitch.rise": 0.12, "gain.rise": 0.01}


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[a]\n", "only one candidate"),
        ("", "no candidates"),
        ("[a]\n[b]\npitch.lww = 1\n", 'did you mean "pitch.law"'),
        ("[a]\n[b]\npitch.rise = 'soon'\n", "[b] pitch.rise"),
        ("[a]\n[b]\nphrase.file = 'x'\n", "one phrase"),
        ("[a]\n[b]\ntitle = 'x'\n", "a title changes nothing"),
        ("a = 1\n[b]\n[c]\n", "must be a table"),
        ("title = 1\n[b]\n[c]\n", "title"),
        ('[""]\n[b]\n', "needs a name"),
        ("[a]\n[a]\n", "TOML"),
        ("".join(f"[c{n}]\n" for n in range(17)), "17 candidates"),
        ("[a]\n[b]\npitch.timing = 'fixed'\n", 'candidate "b"'),
    ],
)
def test_sheets_that_can_not_be_used_are_refused_in_a_line(tmp_path, text, words):
    path = tmp_path / "sheet.toml"
    path.write_text(text)
    with pytest.raises(SettingError) as caught:
        read_sheet(make_preset(), path, 16)
    (line,) = caught.value.lines
    assert line.startswith(str(path))
    assert words in line


@pytest.mark.parametrize(
    ("names", "labels"),
    [
        (["a", "a ", "a (1)"], ["a (2)", "a (3)", "a (1)"]),
        (["a", " a", "a  (2)", "a (2)"], ["a (1)", "a (3)", "a  (2)", "a (2)"]),
        (["a (1)", "a", "a ", "b"], ["a (1)", "a (2)", "a (3)", "b"]),
    ],
)
def test_no_two_labels_are_alike(tmp_path, names, labels):
    path = tmp_path / "sheet.toml"
    path.write_text("".join(f'["{name}"]\n"pitch.rise" = 0.{n}\n' for n, name in enumerate(names, 1)))
    assert [candidate.label for candidate in read_sheet(make_preset(), path, 16)[1]] == labels


def test_a_preset_given_as_a_sheet_is_told_as_that(tmp_path):
    path = PRESETS / "night-ferry-lead.toml"
    with pytest.raises(SettingError) as caught:
        read_sheet(make_preset(), path, 16)
    (line,) = caught.value.lines
    assert line.startswith(f"{path}: is a preset, not a sheet")
    (tmp_path / "sheet.toml").write_text("[pitch]\npitch.rise = 0.1\n[gain]\ngain.rise = 0.2\n")
    found = read_sheet(make_preset(), tmp_path / "sheet.toml", 16)[1]
    assert [candidate.label for candidate in found] == ["pitch", "gain"]


def test_several_presets_are_compared_by_what_differs(tmp_path, pages):
    one, two = (
        make_preset(title="Lead"),
        make_preset(title="Bass", pitch={"law": "exp"}, drone={"note": "D3"}),
    )
    done = compare([one, two], tmp_path / "set", phrase=PHRASE)
    first, second = done.facts["candidates"]
    assert [first["label"], second["label"]] == ["Lead", "Bass"]
    assert first["varied"] == {"pitch.law": "rc", "drone.note": None, "drone.level_db": None}
    assert second["varied"] == {"pitch.law": "exp", "drone.note": "D3", "drone.level_db": -30.0}
    assert done.facts["title"] == "Lead, Bass"


def test_the_same_settings_twice_are_refused(tmp_path):
    with pytest.raises(SettingError, match="have the same settings"):
        compare([make_preset(title="One"), make_preset(title="Two")], tmp_path / "set", phrase=PHRASE)
    assert not (tmp_path / "set").exists()


# Loudness


@pytest.mark.parametrize("rate", [44_100, 96_000])
def test_every_candidate_is_as_loud_by_an_independent_meter(tmp_path, rate):
    preset = make_preset(oscillator={"level_db": -30.0}, amplifier={"velocity_db": 12.0})
    vary = {
        "oscillator.wave": ["saw", "sine"],
        "oscillator.level_db": [-60, -3],
    }
    phrase = random_phrase(6, seed=1)
    done = compare(preset, tmp_path / "set", phrase=phrase, vary=vary, sample_rate=rate)
    assert done.facts["loudness"]["gated"]
    for entry in done.facts["candidates"]:
        audio, found_rate = soundfile.read(tmp_path / "set" / entry["file"])
        assert (found_rate, len(audio)) == (rate, entry["frames"])
        assert lufs(audio, rate) == pytest.approx(done.facts["loudness"]["common_lufs"], abs=0.1), entry[
            "label"
        ]
        assert entry["lufs"] == pytest.approx(done.facts["loudness"]["common_lufs"], abs=0.01)
        assert true_peak_db(audio) < -1.0 + 0.2
        assert entry["true_peak_dbtp"] < -1.0


def test_the_target_is_reached_where_the_peaks_allow_it(tmp_path):
    facts = compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS).facts
    assert facts["loudness"] == {
        "common_lufs": -23.0,
        "target_lufs": -23.0,
        "limited_by": None,
        "gated": True,
        "metered_s": pytest.approx(facts["candidates"][0]["frames"] / 48_000),
    }


def test_a_peaky_candidate_lowers_all(tmp_path):
    """Short bursts in a long phrase: the peak of the narrow pulse is far over its loudness."""
    clicks = make_phrase(*((k, k + Fraction(1, 100), 33) for k in range(4)))
    preset = make_preset(gain={"rise": 0.0, "fall": 0.001})
    vary = {"oscillator.wave": ["pulse", "sine"], "oscillator.width": [0.05]}
    facts = compare(preset, tmp_path / "set", phrase=clicks, vary=vary).facts
    loudness = facts["loudness"]
    assert loudness["limited_by"] == "pulse"
    assert loudness["common_lufs"] < -23.0
    pulse, sine = facts["candidates"]
    assert -1.02 < pulse["true_peak_dbtp"] < -1.0
    assert sine["true_peak_dbtp"] < -1.0
    for entry in facts["candidates"]:
        audio, rate = soundfile.read(tmp_path / "set" / entry["file"])
        assert lufs(audio, rate) == pytest.approx(loudness["common_lufs"], abs=0.1)


def test_the_gain_told_is_the_gain_applied_to_the_render(tmp_path):
    done = compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS)
    for entry in done.facts["candidates"]:
        plain = render(make_preset().changed(entry["varied"]), PHRASE).audio
        plain = np.pad(plain, (0, entry["frames"] - plain.size))
        expected = np.rint(
            (plain * np.float64(10.0 ** (entry["gain_db"] / 20.0))).astype(np.float32) * 2.0**23
        )
        codes, _ = soundfile.read(tmp_path / "set" / entry["file"], dtype="int32")
        assert np.array_equal(codes >> 8, expected.astype(np.int32))


def test_a_phrase_shorter_than_a_block_is_matched_without_the_gate(tmp_path):
    short = make_phrase((0, "0.1", 57), ("0.1", "0.2", 64))
    facts = compare(
        make_preset(), tmp_path / "set", phrase=short, vary={"oscillator.wave": ["saw", "sine"]}
    ).facts
    assert facts["loudness"]["gated"] is False
    assert all(
        entry["lufs"] == pytest.approx(facts["loudness"]["common_lufs"]) for entry in facts["candidates"]
    )


BRIEF = [
    (make_phrase((0, "0.6", 57), ("0.6", "1.3", 64)), {"gain.rise": [0, 10, 60]}),
    (make_phrase((0, "0.6", 57)), {"gain.rise": [0.04, 0.3, 0.8]}),
    (make_phrase((0, "0.45", 57), ("0.45", "0.93", 64)), {"gain.fall": [0.001, 0.3, 2]}),
    (make_phrase((0, "0.51", 57)), {"oscillator.wave": ["saw", "sine"], "gain.law": ["rc", "linear"]}),
]


@pytest.mark.parametrize(("phrase", "vary"), BRIEF)
@pytest.mark.parametrize("rate", [22_050, 44_100, 48_000])
def test_brief_phrases_are_as_loud_by_an_independent_meter_however_they_end(tmp_path, phrase, vary, rate):
    """What ends in the middle of a hop counts as much as what ends on one: all clips are of one length."""
    facts = compare(make_preset(), tmp_path, phrase=phrase, vary=vary, sample_rate=rate).facts
    assert facts["loudness"]["gated"]
    assert len({entry["frames"] for entry in facts["candidates"]}) == 1
    for entry in facts["candidates"]:
        audio, _ = soundfile.read(tmp_path / entry["file"])
        assert len(audio) == entry["frames"]
        assert len(audio) * 10 % rate == 0
        assert not audio[-3 * rate // 10 + 1 :].any(), "a gating block's reach of silence"
        assert lufs(audio, rate) == pytest.approx(facts["loudness"]["common_lufs"], abs=0.1), entry["label"]


def weighted_energy(audio, rate):
    """The sum of the squares of the K-weighted signal, by scipy's filter with the standard's coefficients."""
    weighted = sosfilt(k_weighting(rate), np.pad(np.asarray(audio, float), (0, rate)))
    return float((weighted**2).sum())


@pytest.mark.parametrize("fall", [["rc", "linear"], ["linear", "rc"]])
def test_candidates_on_both_sides_of_a_block_are_measured_one_way(tmp_path, fall):
    """0.38 s and over 2 s: by one energy over one time, the longer one's; no gate for either."""
    brief = make_phrase((0, "0.1", 57))
    preset = make_preset(gain={"rise": 0.004, "fall": 0.28})
    facts = compare(preset, tmp_path, phrase=brief, vary={"gain.law": fall}).facts
    lengths = [render(preset.changed(entry["varied"]), brief).audio.size for entry in facts["candidates"]]
    assert min(lengths) < 0.4 * 48_000 < max(lengths)
    assert facts["loudness"]["gated"] is False
    assert facts["loudness"]["metered_s"] == pytest.approx(max(lengths) / 48_000)
    assert {entry["rendered"]["gated"] for entry in facts["candidates"]} == {False}
    for entry in facts["candidates"]:
        audio, _ = soundfile.read(tmp_path / entry["file"])
        level = -0.691 + 10.0 * math.log10(weighted_energy(audio, 48_000) / max(lengths))
        assert level == pytest.approx(facts["loudness"]["common_lufs"], abs=0.01), entry["label"]


def test_a_longer_candidate_lengthens_the_clips_that_are_there(tmp_path):
    """They are not rendered again, and the set is to the byte what it would be made at once."""
    short = {"gain.fall": [0.08, 0.09]}
    longer = {"gain.fall": [0.08, 0.09, 0.8]}
    before = compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=short).facts["candidates"][0]
    done = compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=longer)
    assert done.facts["candidates"][0]["frames"] > before["frames"]
    assert done.kept == ("gain fall 80 ms", "gain fall 90 ms")
    compare(make_preset(), tmp_path / "fresh", phrase=PHRASE, vary=longer)
    assert contents(tmp_path / "set") == contents(tmp_path / "fresh")
    compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=short, replace=True)
    compare(make_preset(), tmp_path / "short", phrase=PHRASE, vary=short)
    assert contents(tmp_path / "set") == contents(tmp_path / "short")


def test_a_longer_candidate_of_a_set_without_the_gate_has_the_others_made_again(tmp_path):
    brief = make_phrase((0, "0.1", 57))
    short, longer = {"gain.fall": [0.05, 0.06]}, {"gain.fall": [0.05, 0.06, 0.9]}
    compare(make_preset(), tmp_path / "set", phrase=brief, vary=short)
    assert compare(make_preset(), tmp_path / "set", phrase=brief, vary=longer).kept == ()
    compare(make_preset(), tmp_path / "fresh", phrase=brief, vary=longer)
    assert contents(tmp_path / "set") == contents(tmp_path / "fresh")


@pytest.mark.parametrize("rate", [65_536, 65_537, 96_001, 192_001])
def test_rates_that_flac_does_not_have_are_refused_in_a_line(tmp_path, rate):
    with pytest.raises(SettingError) as caught:
        compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS, sample_rate=rate)
    (line,) = caught.value.lines
    below = rate // 10 * 10
    assert "multiples of 10" in line
    assert f"take {below} or {below + 10}" in line
    assert not (tmp_path / "set").exists()


@pytest.mark.parametrize("rate", [8001, 65_535, 65_540, 192_010])
def test_all_other_rates_make_a_set(tmp_path, rate):
    brief = make_phrase((0, "0.2", 57), ("0.2", "0.45", 64))
    facts = compare(make_preset(), tmp_path, phrase=brief, vary=LAWS, sample_rate=rate).facts
    for entry in facts["candidates"]:
        audio, found = soundfile.read(tmp_path / entry["file"])
        assert (found, len(audio)) == (rate, entry["frames"])


def test_a_silent_candidate_is_refused(tmp_path):
    preset = make_preset(gain={"law": "linear", "rise": 0.004, "fall": 0.08})
    high = make_phrase((0, 1, 127), (1, 2, 126))
    vary = {"oscillator.wave": ["saw", "sine"]}
    with pytest.raises(SettingError, match=r'candidate "(saw|sine)" is silent'):
        compare(preset, tmp_path / "set", phrase=high, vary=vary, sample_rate=8000)
    assert not (tmp_path / "set").exists()


def test_what_is_faint_is_not_silent(tmp_path):
    """Some 115 dB under full scale, far under the meter's absolute gate of -70 LUFS."""
    preset = make_preset(oscillator={"level_db": -60.0}, amplifier={"velocity_db": 60.0})
    faint = make_phrase(*((k, k + 1, 50 + k, 0.08) for k in range(5)))
    vary = {"oscillator.wave": ["saw", "sine"]}
    for entry in compare(preset, tmp_path / "set", phrase=faint, vary=vary).facts["candidates"]:
        assert entry["gain_db"] > 80.0
        audio, rate = soundfile.read(tmp_path / "set" / entry["file"])
        assert lufs(audio, rate) == pytest.approx(-23.0, abs=0.1)


def test_candidates_that_sound_the_same_are_told(tmp_path):
    done = compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary={"pitch.knee": [0.1, 0.2]})
    assert any("sound the same" in line for line in done.warnings)


# What is written


def test_the_set_is_whole_and_says_what_it_holds(tmp_path, pages):
    done = compare(
        make_preset(), tmp_path / "a" / "set", phrase=PHRASE, vary=LAWS, equal="landing", from_note="A3"
    )
    names = ["01-rc.wav", "02-exp.wav", "03-cosine.wav", "comparison.json", "index.html"]
    assert sorted(contents(done.folder)) == names
    facts = json.loads((done.folder / "comparison.json").read_text())
    assert facts == json.loads(json.dumps(done.facts))
    assert facts["kind"] == "glidesmith comparison"
    assert facts["equal"]["mode"] == "landing"
    assert facts["equal"]["from"] == "A3"
    assert facts["equal"]["up_s"] == pytest.approx(0.06 * math.log(240.0), abs=1e-9)
    assert facts["equal"]["down_s"] == pytest.approx(0.09 * math.log(240.0), abs=1e-9)
    assert facts["phrase"] == {"title": "Under test", "sha256": PHRASE.content_hash(), "length_s": 1.1}
    for entry in facts["candidates"]:
        preset = make_preset().changed(
            {key: entry["settings"][key] for key in ("pitch.law", "pitch.rise", "pitch.fall")}
        )
        assert entry["facts"] == json.loads(json.dumps(measure(preset, PHRASE).as_dict()))
        assert "curves" not in entry
    assert facts["candidates"][0]["differs"] == []
    assert facts["candidates"][1]["differs"] != []


def test_the_page_gets_the_same_facts_with_curves_and_the_very_samples(tmp_path, pages):
    done = compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS)
    ((data, audio),) = pages
    for entry, flac in zip(data["candidates"], audio, strict=True):
        lines = entry.pop("curves")
        assert set(lines) == {"target", "pitch", "gate", "control", "gain"}
        from_page, _ = soundfile.read(io.BytesIO(flac), dtype="int32")
        from_file, _ = soundfile.read(done.folder / entry["file"], dtype="int32")
        assert np.array_equal(from_page, from_file)
    assert data == json.loads(json.dumps(done.facts))


def test_a_set_is_the_same_bytes_each_time(tmp_path):
    for name in ("one", "two"):
        compare(make_preset(), tmp_path / name, phrase=PHRASE, vary=LAWS)
    assert contents(tmp_path / "one") == contents(tmp_path / "two")


def test_the_sets_name_depends_on_all_that_is_heard(tmp_path):
    def name(**options):
        place = tmp_path / str(len(list(tmp_path.iterdir())))
        given = {"phrase": PHRASE, "vary": LAWS, **options}
        return compare(make_preset(), place, **given).facts["set"]

    first = name()
    assert name() == first
    assert name(vary={"pitch.law": ["cosine", "rc", "exp"]}) == first
    others = [
        name(vary={"pitch.law": ["rc", "exp"]}),
        name(sample_rate=44_100),
        name(equal="landing"),
        name(phrase=make_phrase((0, 1, 60), (1, 2, 61))),
    ]
    assert len({first, *others}) == 5


def test_progress_goes_from_the_first_step_to_the_last(tmp_path):
    steps = []
    compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS, progress=lambda *s: steps.append(s))
    assert steps == [(n, 6) for n in range(1, 7)]


# Running again


def test_one_more_candidate_costs_one_render_and_gives_the_same_set(tmp_path, monkeypatch):
    compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS)
    before = snapshot(tmp_path / "set")
    rendered = []
    import glidesmith.takes

    plain = glidesmith.takes.render_program
    monkeypatch.setattr(
        glidesmith.takes, "render_program", lambda program: rendered.append(1) or plain(program)
    )
    more = {"pitch.law": ["rc", "linear", "exp", "cosine"]}
    done = compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=more)
    assert (done.rendered, done.kept) == (("linear",), ("rc", "exp", "cosine"))
    assert len(rendered) == 1
    compare(make_preset(), tmp_path / "fresh", phrase=PHRASE, vary=more)
    assert contents(tmp_path / "set") == contents(tmp_path / "fresh")
    assert snapshot(tmp_path / "set")["01-rc.wav"] == before["01-rc.wav"], "not even written again"


def test_a_candidate_that_lowers_the_loudness_has_the_others_made_again(tmp_path):
    clicks = make_phrase(*((k, k + Fraction(1, 100), 33) for k in range(4)))
    preset = make_preset(gain={"rise": 0.0, "fall": 0.001}, oscillator={"width": 0.05})
    compare(preset, tmp_path / "set", phrase=clicks, vary={"oscillator.wave": ["sine", "triangle"]})
    waves = {"oscillator.wave": ["sine", "triangle", "pulse"]}
    done = compare(preset, tmp_path / "set", phrase=clicks, vary=waves)
    assert done.kept == ()
    compare(preset, tmp_path / "fresh", phrase=clicks, vary=waves)
    assert contents(tmp_path / "set") == contents(tmp_path / "fresh")


def harmed(path, harm):
    data = path.read_bytes()
    made = {"short": data[: len(data) // 2], "other": data[:-3] + b"abc", "rubbish": b"rubbish"}
    path.unlink() if harm == "gone" else path.write_bytes(made[harm])


@pytest.mark.parametrize("harm", ["short", "other", "rubbish"])
def test_a_wav_that_was_changed_since_is_written_over_only_when_asked(tmp_path, harm):
    folder = tmp_path / "set"
    compare(make_preset(), folder, phrase=PHRASE, vary=LAWS)
    made = contents(folder)
    harmed(folder / "02-exp.wav", harm)
    before = snapshot(folder)
    for vary in (LAWS, {"pitch.law": [*LAWS["pitch.law"], "log"]}):
        with pytest.raises(OutputError) as caught:
            compare(make_preset(), folder, phrase=PHRASE, vary=vary)
        (line,) = caught.value.lines
        assert '"02-exp.wav" was changed since' in line
        assert "--replace" in line
        assert snapshot(folder) == before
    done = compare(make_preset(), folder, phrase=PHRASE, vary=LAWS, replace=True)
    assert any("02-exp.wav" in line and "written anew" in line for line in done.warnings)
    assert done.rendered == ("exp",)
    assert contents(folder) == made
    assert compare(make_preset(), folder, phrase=PHRASE, vary=LAWS).warnings == ()


@pytest.mark.parametrize("harm", ["gone", "short", "other", "rubbish"])
def test_a_wav_of_a_run_that_did_not_end_is_made_again(tmp_path, harm):
    """The page is what a run writes last; a WAV that is gone is made again in any case."""
    compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS)
    before = contents(tmp_path / "set")
    harmed(tmp_path / "set" / "02-exp.wav", harm)
    if harm != "gone":
        (tmp_path / "set" / "index.html").unlink()
    done = compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS)
    assert done.rendered == ("exp",)
    assert done.warnings == ()
    assert contents(tmp_path / "set") == before


def test_a_run_killed_while_it_writes_wavs_anew_is_finished_by_the_next(tmp_path, monkeypatch):
    """A candidate that lowers the loudness: the facts are new, the WAVs not yet. That is no change."""
    clicks = make_phrase(*((k, k + Fraction(1, 100), 33) for k in range(4)))
    preset = make_preset(gain={"rise": 0.0, "fall": 0.001}, oscillator={"width": 0.05})
    waves = {"oscillator.wave": ["sine", "triangle", "pulse"]}
    compare(preset, tmp_path / "set", phrase=clicks, vary={"oscillator.wave": ["sine", "triangle"]})

    class Killed(BaseException):
        pass

    def killed(self):
        raise Killed

    with monkeypatch.context() as broken:
        broken.setattr(comparison.WavSink, "close", killed)
        with pytest.raises(Killed):
            compare(preset, tmp_path / "set", phrase=clicks, vary=waves)
    assert compare(preset, tmp_path / "set", phrase=clicks, vary=waves).warnings == ()
    compare(preset, tmp_path / "fresh", phrase=clicks, vary=waves)
    assert contents(tmp_path / "set") == contents(tmp_path / "fresh")


OTHER_SETS = [
    {"vary": {"pitch.law": ["rc", "exp"]}},
    {"vary": {"pitch.rise": [0.01, 0.02]}},
    {"sample_rate": 44_100},
    {"equal": "midpoint"},
    {"phrase": make_phrase((0, 1, 60), (1, 2, 67))},
]


@pytest.mark.parametrize("options", OTHER_SETS)
def test_another_set_is_refused_and_replaced_when_asked(tmp_path, options):
    folder = tmp_path / "set"
    given = {"phrase": PHRASE, "vary": LAWS}
    compare(make_preset(), folder, **given)
    before = snapshot(folder)
    with pytest.raises(OutputError) as caught:
        compare(make_preset(), folder, **{**given, **options})
    (line,) = caught.value.lines
    assert "holds another set" in line
    assert "--replace" in line
    assert snapshot(folder) == before
    compare(make_preset(), folder, **{**given, **options}, replace=True)
    compare(make_preset(), tmp_path / "fresh", **{**given, **options})
    assert contents(folder) == contents(tmp_path / "fresh")


@pytest.mark.parametrize("name", ["notes.txt", "index.html", "01-rc.wav", "comparison.json"])
def test_a_folder_that_holds_something_else_is_refused(tmp_path, name):
    (tmp_path / name).write_text("mine")
    with pytest.raises(OutputError) as caught:
        compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS)
    (line,) = caught.value.lines
    assert str(tmp_path) in line
    assert "--replace" in line
    assert contents(tmp_path).keys() == {name}
    assert (tmp_path / name).read_text() == "mine"


def test_what_is_not_the_sets_stays_even_when_it_is_replaced(tmp_path):
    (tmp_path / "notes.txt").write_text("mine")
    done = compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS, replace=True)
    assert any("notes.txt" in line for line in done.warnings)
    again = compare(make_preset(), tmp_path, phrase=PHRASE, vary={"pitch.law": ["log", "exp"]}, replace=True)
    assert (tmp_path / "notes.txt").read_text() == "mine"
    assert {entry["file"] for entry in again.facts["candidates"]} == {p.name for p in tmp_path.glob("*.wav")}


def test_sheets_hidden_files_and_parts_of_a_killed_run_are_no_hindrance(tmp_path):
    (tmp_path / ".hidden").write_text("x")
    (tmp_path / "Thumbs.db").write_text("x")
    (tmp_path / "ann.json").write_text(json.dumps({"kind": "glidesmith listening sheet"}))
    (tmp_path / "all.json").write_text(json.dumps({"kind": "glidesmith listening sheets"}))
    begun = {
        "01-rc.wav.part": "RIFF....WAVELIST....Glidesmith",
        "index.html.part": "<!doctype html><title>Glidesmith",
        "comparison.json.part": '{"kind": "glidesmith comp',
    }
    for name, content in begun.items():
        (tmp_path / name).write_text(content)
    compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS)
    assert not list(tmp_path.glob("*.part"))
    assert (tmp_path / "ann.json").exists()


@pytest.mark.parametrize("name", ["01-rc.wav", "index.html", "comparison.json"])
def test_a_file_of_somebody_s_own_is_not_overwritten_even_to_replace(tmp_path, name):
    (tmp_path / name).write_text('{"kind": "x"}')
    with pytest.raises(OutputError, match="move it elsewhere"):
        compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS, replace=True)
    assert [p.name for p in tmp_path.iterdir()] == [name]
    assert (tmp_path / name).read_text() == '{"kind": "x"}'


@pytest.mark.parametrize(
    "change",
    [
        lambda facts: facts.pop("loudness"),
        lambda facts: facts.update(loudness=None),
        lambda facts: facts["loudness"].update(common_lufs=[1]),
        lambda facts: facts["candidates"][0].pop("gain_db"),
        lambda facts: facts["candidates"][0].update(gain_db=[1]),
        lambda facts: facts["candidates"][0].update(lufs=float("nan")),
        lambda facts: facts["candidates"][0].update(true_peak_dbtp=1e300),
        lambda facts: facts["candidates"][0].update(warnings=None),
        lambda facts: facts["candidates"][0]["rendered"].update(lufs=float("inf")),
    ],
)
def test_figures_that_are_damaged_are_refused_and_can_be_replaced(tmp_path, change):
    compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS)
    path = tmp_path / "comparison.json"
    facts = json.loads(path.read_text())
    change(facts)
    path.write_text(json.dumps(facts))
    with pytest.raises(OutputError, match="is damaged"):
        compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS)
    compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS, replace=True)
    assert json.loads(path.read_text())["loudness"]["common_lufs"] < 0


@pytest.mark.parametrize(
    "damage",
    [
        lambda facts: "{",
        lambda facts: json.dumps({**facts, "version": 99}),
        lambda facts: json.dumps({**facts, "candidates": [{}]}),
        lambda facts: json.dumps(
            {**facts, "candidates": [{**facts["candidates"][0], "file": "../../x.wav"}]}
        ),
        lambda facts: json.dumps({**facts, "kind": "something"}),
        lambda facts: "[" * 100_000,
    ],
)
def test_facts_that_are_damaged_are_refused(tmp_path, damage):
    compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS)
    path = tmp_path / "comparison.json"
    path.write_text(damage(json.loads(path.read_text())))
    before = snapshot(tmp_path)
    with pytest.raises(OutputError, match=r"comparison\.json"):
        compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS)
    assert snapshot(tmp_path) == before


def test_when_the_page_fails_nothing_is_touched(tmp_path, monkeypatch):
    compare(make_preset(), tmp_path, phrase=PHRASE, vary=LAWS)
    before = snapshot(tmp_path)
    monkeypatch.setattr(sys.modules["glidesmith.page"], "write_page", lambda *_: 1 / 0)
    with pytest.raises(ZeroDivisionError):
        compare(make_preset(), tmp_path, phrase=PHRASE, vary={"pitch.law": [*LAWS["pitch.law"], "log"]})
    assert snapshot(tmp_path) == before


def test_a_run_killed_while_files_take_their_names_is_finished_by_the_next(tmp_path, monkeypatch):
    compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS)
    vary = {"pitch.law": ["log", "linear"]}

    class Killed(BaseException):
        pass

    def killed(self):
        raise Killed

    with monkeypatch.context() as broken:
        broken.setattr(comparison.WavSink, "close", killed)
        with pytest.raises(Killed):
            compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=vary, replace=True)
    assert not (tmp_path / "set" / "index.html").exists(), "no page of the old set beside facts of the new"
    compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=vary, replace=True)
    compare(make_preset(), tmp_path / "fresh", phrase=PHRASE, vary=vary)
    assert set(contents(tmp_path / "fresh")) <= set(contents(tmp_path / "set"))


def test_what_a_set_is_made_from_is_never_written_over(tmp_path):
    preset = tmp_path / "01-rc.wav"
    preset.write_bytes((PRESETS / "night-ferry-lead.toml").read_bytes())
    with pytest.raises(SettingError, match="is what the set is made from"):
        compare(load_preset(preset), tmp_path, phrase=PHRASE, vary=LAWS, replace=True)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"most": 1}, "2 to 256"),
        ({"most": 2}, "at most 2"),
        ({"sample_rate": 1}, "8000"),
        ({"tolerance_cents": 0}, "tolerance"),
        ({"equal": "loudness"}, "landing"),
        ({"vary": {}}, "only one candidate"),
        ({"vary": None, "phrase": None}, "only one candidate"),
        ({"phrase": None}, "names no phrase"),
        ({"sheet": "sheet.toml"}, "either a sheet or keys"),
        ({"phrase": make_phrase((0, 7000, 60))}, "minutes of audio"),
    ],
)
def test_bad_input_leaves_nothing_behind(tmp_path, options, words):
    with pytest.raises(SettingError) as caught:
        compare(make_preset(), tmp_path / "set", **{"phrase": PHRASE, "vary": LAWS, **options})
    (line,) = caught.value.lines
    assert words in line
    assert not (tmp_path / "set").exists()


def test_no_presets_and_a_sheet_for_several_are_refused(tmp_path):
    with pytest.raises(SettingError, match="no presets"):
        compare([], tmp_path / "set", phrase=PHRASE)
    two = [make_preset(title="A"), make_preset(title="B", pitch={"law": "exp"})]
    with pytest.raises(SettingError, match="one preset"):
        compare(two, tmp_path / "set", phrase=PHRASE, sheet="sheet.toml")


@pytest.mark.parametrize("name", ["", "comparison.json"])
def test_a_link_that_leads_nowhere_is_told_as_that(tmp_path, name):
    folder = tmp_path / "set"
    if name:
        folder.mkdir()
    (folder / name).symlink_to(tmp_path / "gone")
    for replace in (False, True):
        with pytest.raises(OutputError) as caught:
            compare(make_preset(), folder, phrase=PHRASE, vary=LAWS, replace=replace)
        (line,) = caught.value.lines
        assert line.startswith(f"{folder / name}: is a link to ")
        assert "not there" in line
    assert not (tmp_path / "gone").exists()


def test_a_file_in_place_of_the_folder_is_told(tmp_path):
    (tmp_path / "set").write_text("mine")
    with pytest.raises(OutputError):
        compare(make_preset(), tmp_path / "set", phrase=PHRASE, vary=LAWS)
    assert (tmp_path / "set").read_text() == "mine"


# Curves


CURVED = [
    {},
    {"pitch": {"law": "cosine", "rise": 0.2, "fall": 0.3}},
    {
        "pitch": {"law": "exp", "rise": 0.4, "fall": 0.4, "bend": 3.0},
        "gain": {"law": "rc", "rise": 0.05, "fall": 0.1},
    },
    {"pitch": {"steps_per_octave": 12}, "tuning": {"zero_volts": "A3"}},
    {
        "envelope": {"attack": 0.02, "decay": 0.1, "sustain": 0.4, "release": 0.2, "shape": "rc"},
        "gain": {"law": "soft", "rise": 0.05, "fall": 0.03},
        "amplifier": {"law": "decibel"},
    },
]  # fmt: skip


@pytest.mark.parametrize("tables", CURVED)
def test_the_curves_are_what_the_engine_plays(tables):
    """Against the trace of the render: within two pixels of 1200 over the picture's height, jumps apart."""
    preset = make_preset(**tables)
    program = compile_program(preset, PHRASE, 48_000)
    rendering = render(preset, PHRASE, trace=True)
    lines = curves(preset, PHRASE, program.length / 48_000)
    shift = (preset.tuning.zero_volts - 60) / 12.0
    times = np.arange(program.length) / 48_000
    for name, played, height in (
        ("pitch", rendering.pitch_volts + shift, 7.0 / 12.0),
        ("control", rendering.gain_control, 1.0),
        ("gain", rendering.gain, 1.0),
    ):
        points = np.array(lines[name])
        assert len(points) < 400
        assert (np.diff(points[:, 0]) >= 0).all()
        off = np.abs(np.interp(times, points[:, 0], points[:, 1]) - played)
        # A steep flank may lie a pixel of 4800 to the side: what the line is there, the play is nearby.
        near = int(2 * program.length / 4800) + 2
        rows = np.lib.stride_tricks.sliding_window_view(np.pad(played, near, mode="edge"), 2 * near + 1)
        drawn = np.interp(times, points[:, 0], points[:, 1])
        beyond = np.maximum(rows.min(1) - drawn, drawn - rows.max(1))
        assert (np.minimum(off, np.maximum(beyond, 0.0)) < 2.0 * height / 1200.0).all(), name


def test_curves_of_a_long_phrase_stay_small():
    phrase = make_phrase(*((Fraction(k, 10), Fraction(k + 1, 10), 50 + 7 * (k % 3)) for k in range(600)))
    lines = curves(make_preset(), phrase, 61.0)
    assert sum(len(line) for name, line in lines.items() if name != "target") < 12_000


def test_pitch_of_presets_with_other_zeros_can_be_laid_over_each_other():
    one, two = make_preset(), make_preset(tuning={"zero_volts": "C2"})
    assert curves(one, PHRASE, 1.0)["target"] == curves(two, PHRASE, 1.0)["target"]
    assert curves(one, PHRASE, 1.0)["target"][0] == [0.0, -0.25]


def test_a_candidate_that_was_next_to_inaudible_is_told_beside_its_gain(tmp_path):
    done = compare(make_preset(), tmp_path, phrase=PHRASE, vary={"gain.rise": [60.0, 0.001]})
    (line,) = (line for line in done.warnings if "dB quieter" in line)
    assert done.facts["candidates"][0]["gain_db"] > 30
    assert done.facts["candidates"][0]["label"] in line


def test_a_preset_without_a_title_goes_by_its_file(tmp_path):
    for name, title in (("nameless", ""), ("named", "With a name")):
        (tmp_path / f"{name}.toml").write_text(
            f'title = "{title}"\n[pitch]\nrise = 0.1\nfall = 0.{len(name)}\n[gain]\nrise = 0.01\nfall = 0.1\n'
        )
    presets = [load_preset(tmp_path / "nameless.toml"), load_preset(tmp_path / "named.toml")]
    done = compare(presets, tmp_path / "set", phrase=PHRASE)
    assert [entry["label"] for entry in done.facts["candidates"]] == ["nameless", "With a name"]


def test_what_varies_is_what_is_heard_after_equalising(tmp_path):
    presets = [make_preset(title="One"), make_preset(title="Other", pitch={"law": "exp", "rise": 0.03})]
    done = compare(presets, tmp_path, phrase=PHRASE, equal="landing")
    for entry in done.facts["candidates"]:
        assert {key: entry["settings"].get(key) for key in entry["varied"]} == entry["varied"]
