"""One item made: its file, its record, its level; the same wherever it is made.

Loudness is checked with `pyloudnorm` (DeMan filters), an independent meter, to 0.1 LU; true peak by polyphase
interpolation (`scipy.signal.resample_poly`, 16 times), to 0.2 dB.
"""

import hashlib
import json
import math
import pickle
import warnings
from fractions import Fraction
from pathlib import Path

import numpy as np
import pyloudnorm
import pytest
import soundfile
from scipy.signal import resample_poly

import glidesmith.production as production
from glidesmith import OutputError, SettingError, load_phrase, measure, render
from glidesmith.preset import settings_hash
from glidesmith.production import (
    Failure,
    LocalPlace,
    Options,
    Order,
    PhraseFile,
    StoppedError,
    attempt,
    produce,
    run_here,
)
from making import make_preset

NOTES = ((0, 1.2, "D3"), (1, 1.5, "A3"), (2.5, 1.4, "C4"))


def phrase_file(notes=NOTES, name="line.toml"):
    rows = ", ".join(f'{{ at = {at}, lasts = {lasts}, note = "{note}" }}' for at, lasts, note in notes)
    data = f"tempo_bpm = 60\nnotes = [{rows}]\n".encode()
    from glidesmith.phrase import parse_phrase

    return PhraseFile(name, parse_phrase(data.decode()).content_hash(), None, None, 7200.0, data)


def make_order(patch=None, options=None, item="leads/lead.wav", **changes):
    patch = patch or make_preset()
    facts = {
        "item": item,
        "preset": "leads/lead.toml",
        "patch": patch,
        "settings_sha256": settings_hash(patch),
        "phrase": phrase_file(),
        "varied": {"pitch.rise": 0.06},
        "sources": {"leads/lead.toml": "ab" * 32},
        "without_effect": ("pitch.bend has no effect",),
        "options": options or Options(),
    }
    return Order(**{**facts, **changes})


@pytest.fixture
def place(tmp_path):
    folder = tmp_path / "takes"
    folder.mkdir()
    return LocalPlace(folder)


def lufs(audio, rate=48_000):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return pyloudnorm.Meter(rate, filter_class="DeMan").integrated_loudness(np.asarray(audio, float))


def true_peak_db(audio):
    return 20.0 * math.log10(np.abs(resample_poly(audio, 16, 1, window=("kaiser", 8.0))).max())


def phrase_of(order, tmp_path):
    path = tmp_path / order.phrase.name
    path.write_bytes(order.phrase.data)
    return load_phrase(path)


@pytest.mark.parametrize("depth", [16, 24, "float"])
def test_the_file_holds_what_rendering_gives(place, tmp_path, depth):
    order = make_order(options=Options(depth=depth, sample_rate=44_100))
    record = produce(order, place)
    read, rate = soundfile.read(place.root / order.item, dtype="float32")
    audio = render(order.patch, phrase_of(order, tmp_path), 44_100).audio
    assert rate == 44_100
    assert read.size == audio.size == record["frames"]
    step = 0.0 if depth == "float" else 0.5 * 2.0 ** (1 - depth)
    assert np.abs(read - audio).max() <= step + 1e-9


def test_the_record_is_fit_for_json_and_says_how_it_sounds(place, tmp_path):
    order = make_order(make_preset(pitch={"rise": 0.9, "fall": 0.9}))
    record = produce(order, place)
    assert json.loads(json.dumps(record, allow_nan=False)) == record
    data = (place.root / order.item).read_bytes()
    assert record["file_sha256"] == hashlib.sha256(data).hexdigest()
    assert record["bytes"] == len(data)
    audio = soundfile.read(place.root / order.item)[0]
    assert record["lufs"] == pytest.approx(lufs(audio), abs=0.1)
    assert record["true_peak_dbtp"] == pytest.approx(true_peak_db(audio), abs=0.2)
    assert record["peak_db"] == pytest.approx(20 * math.log10(np.abs(audio).max()), abs=0.001)
    facts = measure(order.patch, phrase_of(order, tmp_path))
    assert record["glides"] == len(facts.glides) == 2
    assert [glide["short_by_cents"] for glide in record["never_lands"]] == pytest.approx(
        [glide.short_by_cents for glide in facts.never_land], abs=1e-3
    )
    assert record["edge_clicks"] == sum(gate.edge_click for gate in facts.gates)
    assert record["without_effect"] == ["pitch.bend has no effect"]
    assert record["curve"][0] == pytest.approx([0.0, -10 / 12], abs=1e-3)
    assert record["curve"][-1][0] == pytest.approx(record["frames"] / 48_000, abs=1e-3)


@pytest.mark.parametrize("target", [-40.0, -23.0, -16.0])
def test_a_loudness_is_reached(place, target):
    order = make_order(options=Options(loudness_lufs=target))
    record = produce(order, place)
    audio = soundfile.read(place.root / order.item)[0]
    assert lufs(audio) == pytest.approx(target, abs=0.1)
    assert record["lufs"] == pytest.approx(target, abs=0.005)
    assert record["true_peak_dbtp"] == pytest.approx(true_peak_db(audio), abs=0.2)
    assert record["warnings"] == []


def test_the_true_peak_stops_the_loudness_and_that_is_said(place):
    order = make_order(make_preset(oscillator={"wave": "pulse", "width": 0.05}), Options(loudness_lufs=-3.0))
    record = produce(order, place)
    audio = soundfile.read(place.root / order.item)[0]
    assert true_peak_db(audio) < -1.0 + 0.05
    assert -1.05 < record["true_peak_dbtp"] < -1.0
    assert record["lufs"] < -3.0
    assert f"reaches {record['lufs']:.1f} LUFS, not -3" in record["warnings"][0]


def test_what_is_faint_is_brought_up_through_the_meters_gate(place):
    """At its own level, under -70 LUFS, the meter's gate lets nothing through."""
    faint = make_preset(oscillator={"level_db": -60.0}, amplifier={"law": "linear", "velocity_db": 40.0})
    line = b'tempo_bpm = 60\nnotes = [{ at = 0, lasts = 2, note = "A3", velocity = 0 }]\n'
    from glidesmith.phrase import parse_phrase

    file = PhraseFile("f.toml", parse_phrase(line.decode()).content_hash(), None, None, 60.0, line)
    order = make_order(faint, Options(loudness_lufs=-23.0, depth="float"), phrase=file)
    record = produce(order, place)
    assert record["lufs"] == pytest.approx(-23.0, abs=0.005)
    assert lufs(soundfile.read(place.root / order.item)[0]) == pytest.approx(-23.0, abs=0.1)


def test_without_the_meter_nothing_is_measured_but_the_peak(place):
    metered = produce(make_order(), place)
    plain = produce(make_order(options=Options(meter=False)), place)
    assert plain["lufs"] is plain["true_peak_dbtp"] is None
    assert (plain["peak_db"], plain["file_sha256"]) == (metered["peak_db"], metered["file_sha256"])


@pytest.mark.parametrize("block", [1 << 20, 4_099, 4_096])
@pytest.mark.parametrize("target", [None, -20.0])
def test_the_blocks_leave_no_trace(place, monkeypatch, block, target):
    """Long phrases are made in blocks, and rendered again where their level is settled first."""
    order = make_order(options=Options(loudness_lufs=target))
    whole = produce(order, place)
    monkeypatch.setattr(production, "_BLOCK", block)
    monkeypatch.setattr(production, "_MOST_HELD", 10_000)
    assert produce(order, place) == whole


def test_an_order_travels_and_gives_the_same_record(place):
    order = make_order()
    assert produce(pickle.loads(pickle.dumps(order)), place) == produce(order, place)
    assert len(pickle.dumps(order)) < 4_000


def test_clipping_is_counted(place):
    loud = make_preset(oscillator={"level_db": 0.0, "wave": "pulse", "width": 0.05})
    record = produce(make_order(loud), place)
    assert record["clipped"] > 0
    assert "clipped" in record["warnings"][0]
    assert record["peak_db"] == 0.0


def test_stopping_leaves_nothing(place):
    with pytest.raises(StoppedError):
        produce(make_order(), place, lambda: True)
    asked = []
    with pytest.raises(StoppedError):  # at the last moment
        produce(make_order(), place, lambda: bool(asked.append(1)) or len(asked) > 1)
    assert [path for path in place.root.rglob("*") if path.is_file()] == []


def test_what_fails_is_returned_in_lines(place, tmp_path):
    out = place.root / "leads"
    out.write_bytes(b"in the way")
    failure = attempt(make_order(), place)
    assert isinstance(failure, Failure)
    assert "what should be its folder is a file" in failure.lines[0]
    assert not failure.fatal
    bad = make_order(make_preset(oscillator={"wave": "file", "file": "x.wav"}), cycle=b"no sound")
    (line,) = attempt(bad, place).lines
    assert "is not a WAV file" in line
    gone = LocalPlace(tmp_path / "gone")
    assert "does not exist" in attempt(make_order(), gone).lines[0]
    assert not gone.root.exists()


def test_running_here_numbers_what_it_makes(place):
    orders = iter([make_order(item="a.wav"), make_order(item="b.wav")])
    assert [(number, record["item"]) for number, record in run_here(orders, place)] == [
        (0, "a.wav"), (1, "b.wav")
    ]  # fmt: skip


# The place


def test_a_file_appears_whole_or_not_at_all(place):
    draft = place.begin("a/b.wav")
    draft.write(b"one")
    assert [path.name for path in place.root.rglob("*.*")] == ["b.wav.part"]
    draft.close()
    assert (place.root / "a/b.wav").read_bytes() == b"one"
    draft = place.begin("a/b.wav")
    draft.write(b"two")
    draft.abandon()
    draft.abandon()
    assert (place.root / "a/b.wav").read_bytes() == b"one"
    assert [path.name for path in (place.root / "a").iterdir()] == ["b.wav"]


def test_a_leftover_part_is_replaced_and_anybodys_own_is_refused(place):
    (place.root / "a.wav.part").write_bytes(b"RIFF....WAVE Glidesmith")
    with place.begin("a.wav") as draft:
        draft.write(b"new")
    assert (place.root / "a.wav").read_bytes() == b"new"
    (place.root / "b.wav.part").write_bytes(b"mine")
    with pytest.raises(OutputError, match="is in the way"):
        place.begin("b.wav")
    assert (place.root / "b.wav.part").read_bytes() == b"mine"


def test_a_link_is_replaced_and_not_written_through(place, tmp_path):
    target = tmp_path / "precious.wav"
    target.write_bytes(b"mine")
    (place.root / "a.wav").symlink_to(target)
    (place.root / "b.wav.part").symlink_to(target)
    with place.begin("a.wav") as draft:
        draft.write(b"new")
    with pytest.raises(OutputError):
        place.begin("b.wav")
    assert target.read_bytes() == b"mine"
    assert (place.root / "a.wav").read_bytes() == b"new"


def test_names_that_no_file_can_have_are_told(place):
    with pytest.raises(OutputError, match="too long"):
        place.begin("x" * 300 + ".wav")
    with pytest.raises(OutputError, match="not a name that a file can have"):
        place.begin("a\0.wav")


def test_phrases_are_read_as_their_orders_say(place):
    """Two readings of one file, by channel, are not taken for each other."""
    from conftest import PHRASES

    data = (PHRASES / "engine-room.mid").read_bytes()
    frames = set()
    for channel in (1, 2):
        phrase = load_phrase(PHRASES / "engine-room.mid", channel=channel)
        file = PhraseFile("engine-room.mid", phrase.content_hash(), None, channel, 7200.0, data)
        record = produce(make_order(phrase=file), place)
        assert record["frames"] >= phrase.end * 48_000 > Fraction(0)
        frames.add((record["frames"], record["file_sha256"]))
    assert len(frames) == 2


def test_settings_that_the_engine_refuses_raise(place):
    with pytest.raises(SettingError, match="sample rate"):
        produce(make_order(options=Options(sample_rate=1000)), place)


def test_getting_ready_leaves_no_file(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    production.get_ready()
    assert list(Path().iterdir()) == []
