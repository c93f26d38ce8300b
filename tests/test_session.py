"""Sessions.

Moves that reach the deck, undo, saving, captures, level match, facts. No sound card, no clock.
"""

import json
import os
import shutil
import threading
from pathlib import Path

import numpy as np
import pytest
import soundfile

from commands import run
from conftest import LONG, PRESETS
from glidesmith.errors import GlidesmithError, OutputError, SettingError
from glidesmith.levelmatch import matched_gains, too_quiet
from glidesmith.loudness import measure_loudness
from glidesmith.meters import Meters
from glidesmith.phrase import load_phrase
from glidesmith.preset import load_preset
from glidesmith.rendering import render
from glidesmith.service import Service
from glidesmith.session import GESTURE_S, Session
from making import make_phrase, make_preset
from playing import PHRASE_FILES, RATE, Player, bank

PHRASE = make_phrase(("0", "1/4", 60), ("1/4", "1/2", 67))


def player(*tables, **options) -> Player:
    """A session of small presets on one phrase of half a second."""
    return Player([make_preset(**table) for table in tables or ({},)], PHRASE, **options)


def lines_of(path: Path) -> list[dict]:
    return [json.loads(line) for line in path.read_text().splitlines()[1:]]


def sent(path: Path) -> list[str]:
    return [line["sent"] for line in lines_of(path) if "sent" in line]


# The same chain


@pytest.mark.parametrize("block", [64, 509, 2048])
def test_what_is_heard_is_the_render(block):
    """DESIGN section 3: one chain. At level 0 and unmatched, bit for bit."""
    presets, phrases = bank("customs-shed-ledger", "fog-horn")
    for preset, phrase in zip(presets, phrases, strict=True):
        wanted = render(preset, phrase).audio[: 3 * RATE]
        with Player([preset], [phrase], level_db=0.0, fade=False, match=False, loop=False) as live:
            live.session.play()
            live.play(wanted.size, block)
            ceiling = 10.0 ** (-6.0 / 20.0)
            assert np.abs(wanted).max() < ceiling
            assert np.array_equal(live.audio, wanted)


# Moves on their way


def test_one_snapshot_at_most_is_under_way_and_all_moves_are_logged(tmp_path):
    with player(log=tmp_path / "log") as live:
        live.play(100)
        swaps = []
        real = live.session.deck.send
        live.session.deck.send = lambda command: swaps.append(command) or real(command)
        for step in range(50):
            live.session.set(1, "pitch.rise", 0.01 * (step + 1))
            live.session.tick()
        assert len(swaps) == 1
        live.play(100, 50)
        assert len(swaps) == 2
        live.play(100)
    moves = [line for line in lines_of(tmp_path / "log") if line["do"] == "set"]
    assert [line["value"] for line in moves] == [0.01 * (step + 1) for step in range(50)]
    assert [line["at"] for line in moves] == [100] + 49 * [150]
    assert sum("sent" in line for line in moves) == 2


def test_keys_and_level_overtake_settings_on_their_way(tmp_path):
    with player(log=tmp_path / "log") as live:
        live.play(10)
        live.session.set(1, "pitch.rise", 0.1)
        live.session.set(1, "pitch.rise", 0.2)
        live.session.level(-40.0)
        live.session.key_down(60)
        live.play(10)
        live.play(10)
    assert sent(tmp_path / "log") == ["swap", "swap", "level", "note", "swap"]


def test_a_slot_that_waits_comes_at_the_loops_start(tmp_path):
    with player({}, {"oscillator": {"wave": "sine"}}, log=tmp_path / "log") as live:
        session = live.session
        session.play()
        live.play(5000)
        session.select(2, "loop")
        live.play(5000)
        assert session.state()["waiting_slot"] == 2
        assert session.state()["current"] == 1
        live.play(RATE)
        assert session.state()["waiting_slot"] is None
        assert session.state()["current"] == 2
        rows = session.deck.rows(0)[1]
        changed = rows["sample"][rows["slot"] == 2][0]
        assert 24_000 <= changed < 24_000 + session.deck.row_every  # half a second is the loop
    assert "arrive" in [line["do"] for line in lines_of(tmp_path / "log")]


def test_a_setting_moved_meanwhile_does_not_keep_the_waiting_slot_away():
    with player({}, {"oscillator": {"wave": "sine"}}) as live:
        live.session.play()
        live.play(5000)
        live.session.select(2, "loop")
        live.play(1000)
        live.session.set(1, "pitch.rise", 0.3)
        live.session.set(2, "pitch.fall", 0.2)
        live.play(RATE)
        assert live.session.state()["current"] == 2
        assert live.session.deck.state().slot == 2


def test_a_waiting_slot_can_be_called_off():
    with player({}, {}) as live:
        live.session.play()
        live.play(5000)
        live.session.select(2, "loop")
        live.play(1000)
        live.session.select(1)
        live.play(RATE)
        assert live.session.state()["current"] == 1
        assert live.session.deck.state().slot == 1


@pytest.mark.parametrize("then", ["key_down", "stop", "play"])
def test_a_waiting_slot_is_there_at_once_where_no_loop_goes_on(then):
    with player({}, {}) as live:
        live.session.play()
        live.play(5000)
        live.session.select(2, "loop")
        live.play(1000)
        getattr(live.session, then)(*([60] if then == "key_down" else []))
        live.play(4000)
        assert live.session.state()["current"] == 2
        assert live.session.deck.state().slot == 2
        live.play(4000)
        assert live.session.deck.rows(0)[1][-1]["slot"] == (-1 if then == "stop" else 2)


def test_a_held_key_goes_on_in_another_slot():
    with player({}, {"tuning": {"zero_volts": "C5"}}) as live:
        live.session.key_down(72)
        live.play(10_000)
        live.session.select(2)
        live.play(10_000)
        _, rows = live.session.deck.rows(0)
        last = rows[-1]
        assert (last["slot"], last["target_volts"], last["gain"]) == (2, 0.0, 1.0)


def test_legato_and_return_glide_and_a_release_is_silent():
    with player({"pitch": {"law": "linear", "rise": 0.1, "fall": 0.1, "glide": "overlap"}}) as live:
        session = live.session
        session.key_down(60, 1.0)
        live.play(4800)
        session.key_down(72, 1.0)
        live.play(2400)
        assert session.deck.rows(0)[1][-1]["pitch_volts"] == pytest.approx(0.5, abs=0.1)
        live.play(9600)
        session.key_up(72)
        live.play(9600)
        assert session.deck.rows(0)[1][-1]["target_volts"] == 0.0
        session.key_up(60)
        live.play(9600)
        assert session.deck.rows(0)[1][-1]["gain"] == 0.0


# Undo, tokens, state


def test_moves_of_one_key_in_quick_succession_are_one_step_of_undo():
    with player() as live:
        for value in (0.1, 0.2, 0.3):
            live.session.set(1, "pitch.rise", value)
            live.now += GESTURE_S / 2
        live.now += GESTURE_S
        live.session.set(1, "pitch.rise", 0.4)
        assert live.session.state()["undo"] == 2
        live.session.undo()
        assert live.session.state()["slots"][0]["settings"]["pitch.rise"] == 0.3
        live.session.undo()
        assert live.session.state()["slots"][0]["settings"]["pitch.rise"] == 0.06
        live.session.redo()
        assert live.session.state()["redo"] == 1


def test_the_state_is_json_and_its_revision_grows_with_it():
    with player({}, {}) as live:
        session = live.session
        first = session.state()
        assert json.loads(json.dumps(first, allow_nan=False)) == first
        assert session.state() is first
        session.set(2, "pitch.rise", 0.5)
        second = session.state()
        assert second["revision"] > first["revision"]
        assert second["slots"][1]["changed"]
        assert not second["slots"][0]["changed"]
        assert second["slots"][1]["facts_revision"] > first["slots"][1]["facts_revision"]
        assert second["slots"][0]["facts_revision"] == first["slots"][0]["facts_revision"]
        session.play()
        live.play(100)
        assert session.state()["playing"] == "phrase"
        assert session.state()["phrase"] == {
            "title": "Under test", "path": None, "length_s": 0.5, "loop_s": 0.5, "notes": 2, "tempo_bpm": None
        }  # fmt: skip
        session.tempo(50)
        assert session.state()["phrase"]["loop_s"] == 1.0


def test_refused_moves_change_nothing():
    with player() as live:
        before = live.session.state()
        for refused in (
            lambda: live.session.set(1, "pitch.rise", 99),
            lambda: live.session.set(1, "pitch.rise", float("nan")),
            lambda: live.session.set(1, "oscillator.file", "none.wav"),
            lambda: live.session.select(3),
            lambda: live.session.select(0),
            lambda: live.session.tempo(5),
            lambda: live.session.transpose(25),
            lambda: live.session.level(3.0),
            lambda: live.session.key_down(128),
            lambda: live.session.load(1, "none.toml"),
            lambda: live.session.phrase("none.mid"),
            live.session.undo,
            live.session.capture_stop,
        ):
            with pytest.raises(GlidesmithError):
                refused()
        assert live.session.state() is before


def test_a_loaded_preset_brings_its_phrase_unless_all_share_one(tmp_path):
    presets, phrases = bank("fog-horn", "deck-tune")
    with Player(presets, phrases) as live:
        live.session.load(1, PRESETS / "night-ferry-lead.toml")
        assert live.session.state()["phrase"]["title"] == "Ferry line"
        live.session.phrase(PHRASE_FILES[0])
        live.session.load(1, PRESETS / "night-ferry-lead.toml")
        assert live.session.state()["phrase"]["title"] == load_phrase(PHRASE_FILES[0]).title


# Saving


@pytest.fixture
def lead(tmp_path) -> Path:
    path = tmp_path / "lead.toml"
    path.write_text(
        '# The ferry\'s lead, invented.\ntitle = "Lead"\n\n[pitch]  # slow\nlaw = "rc"\nrise = "60 ms"\n'
        'fall = "90 ms"\n\n[gain]\nrise = 0.004\nfall = 0.08\n\n[envelope]\nattack = 0.01\ndecay = 0.1\n'
        "sustain = 0.5\nrelease = 0.2\n"
    )
    return path


def test_a_slot_is_saved_with_comments_kept(lead):
    with Player([load_preset(lead)], PHRASE) as live:
        live.session.set(1, "pitch.rise", "120 ms")
        live.session.set(1, "envelope", None)
        live.session.set(1, "oscillator.wave", "sine")
        assert live.session.state()["slots"][0]["changed"]
        assert live.session.save(1) == lead
        assert not live.session.state()["slots"][0]["changed"]
        text = lead.read_text()
        assert text.startswith("# The ferry's lead, invented.")
        assert "[pitch]  # slow" in text
        assert 'rise = "120 ms"' in text
        saved = load_preset(lead)
        assert saved.envelope is None
        assert saved.settings() == live.session.state()["slots"][0]["settings"]
        live.session.undo()
        live.session.undo()
        assert live.session.state()["slots"][0]["changed"]
        live.session.set(1, "pitch.law", None)
        live.session.save(1)
        assert load_preset(lead).envelope is not None
        assert "law" not in load_preset(lead).given["pitch"]


def test_a_file_that_the_slot_was_not_loaded_from_is_kept(lead, tmp_path):
    other = tmp_path / "other.toml"
    shutil.copy(lead, other)
    with Player([load_preset(lead)], PHRASE) as live:
        live.session.set(1, "pitch.rise", 0.5)
        with pytest.raises(OutputError, match="is there already"):
            live.session.save(1, other)
        live.session.copy(1, 2)
        with pytest.raises(OutputError, match="is there already"):
            live.session.save(2, lead)
        with pytest.raises(SettingError, match="belongs to no file yet"):
            live.session.save(2)
        assert other.read_text() == lead.read_text()
        live.session.save(1, other, replace=True)
        assert load_preset(other).pitch.slew.rise == 0.5
        live.session.set(1, "pitch.rise", 0.6)
        live.session.save(1)  # its own file by now
        assert load_preset(other).pitch.slew.rise == 0.6
        live.session.save(2, tmp_path / "new.toml")
        assert "# The ferry's lead" in (tmp_path / "new.toml").read_text()


def test_a_file_that_has_changed_meanwhile_is_kept(lead):
    with Player([load_preset(lead)], PHRASE) as live:
        live.session.set(1, "pitch.rise", 0.5)
        lead.write_text(lead.read_text().replace('"90 ms"', '"95 ms"'))
        with pytest.raises(OutputError, match="no longer says what was loaded"):
            live.session.save(1)
        assert '"95 ms"' in lead.read_text()
        lead.write_text("broken")
        with pytest.raises(OutputError, match="no longer says"):
            live.session.save(1)


def test_a_preset_of_no_file_is_saved_anew_and_a_folder_that_is_not_there_told(tmp_path):
    with player({"drone": {"note": "D3"}}) as live:
        live.session.save(1, tmp_path / "new.toml")
        saved = load_preset(tmp_path / "new.toml")
        assert saved.settings() == live.session.state()["slots"][0]["settings"]
        with pytest.raises(OutputError, match="does not exist"):
            live.session.save(1, tmp_path / "none" / "new.toml")


def test_a_cycle_is_found_from_the_new_folder(tmp_path):
    """The preset names its cycle relative to itself; saved elsewhere the name leads to the same file."""
    path = next(path for path in sorted(PRESETS.glob("*.toml")) if 'wave = "file"' in path.read_text())
    with Player([load_preset(path)], PHRASE) as live:
        live.session.set(1, "pitch.rise", 0.5)
        live.session.save(1, tmp_path / "moved.toml")
        moved = load_preset(tmp_path / "moved.toml")
        assert moved.oscillator.file
        assert moved.oscillator.file.samefile(load_preset(path).oscillator.file)
        assert not Path(moved.given["oscillator"]["file"]).is_absolute()
        assert not live.session.state()["slots"][0]["changed"]


# Captures


def test_a_capture_is_what_is_heard_from_its_start_to_its_end(tmp_path):
    with player() as live:
        live.session.play()
        live.play(1000)
        live.session.capture_start(tmp_path / "take.wav")
        assert live.session.state()["capture"]["path"] == str(tmp_path / "take.wav")
        live.play(100_000)
        facts = live.session.capture_stop()
        live.play(1000)
        assert (facts["from"], facts["to"], facts["lost"]) == (1000, 101_000, 0)
        samples, rate = soundfile.read(tmp_path / "take.wav", dtype="float32")
        assert rate == RATE
        assert np.array_equal(samples, live.audio[1000:101_000])
        assert facts["log"] == str(tmp_path / "take.log.jsonl")
        assert live.session.state()["capture"] is None


def test_a_capture_that_ends_before_the_next_look_has_all_its_moves(tmp_path):
    with player() as live:
        session = live.session
        session.play()
        session.capture_start(tmp_path / "take.wav")
        session.deck.play(np.zeros(1000, np.float32))
        session.set(1, "oscillator.level_db", -3.0)
        session.deck.play(np.zeros(5000, np.float32))
        facts = session.capture_stop()
    result = run("render", "--replay", facts["log"], "-o", tmp_path / "again.wav", "--json")
    assert json.loads(result.stdout)["rendered"][0]["same"] is True


def test_samples_lost_are_counted_silent_and_told(tmp_path):
    with player() as live:
        live.session.play()
        live.session.capture_start(tmp_path / "take.wav")
        live.play(1000)
        live.session.deck.play(np.zeros(700_000, np.float32))
        live.play(512)
        facts = live.session.capture_stop()
        assert facts["frames"] == 701_512
        assert facts["lost"] > 100_000
        assert any("missing from the capture" in line for line in live.session.state()["warnings"])
    result = run("render", "--replay", facts["log"], "-o", tmp_path / "again.wav", "--json")
    assert result.exit_code == 0
    assert "lost from the capture" in result.stderr


def test_a_capture_replaces_no_file_unasked_and_none_in_use(tmp_path, lead):
    with Player([load_preset(lead)], PHRASE) as live:
        (tmp_path / "take.wav").write_text("mine")
        with pytest.raises(OutputError, match="is there already"):
            live.session.capture_start(tmp_path / "take.wav")
        (tmp_path / "two.log.jsonl").write_text("mine")
        with pytest.raises(OutputError, match=r"two\.log\.jsonl: is there already"):
            live.session.capture_start(tmp_path / "two.wav")
        with pytest.raises(OutputError, match="is in use"):
            live.session.capture_start(lead, replace=True)
        with pytest.raises(OutputError, match="does not exist"):
            live.session.capture_start(tmp_path / "none" / "take.wav")
        live.session.capture_start(tmp_path / "take.wav", replace=True)
        with pytest.raises(SettingError, match="is being captured to"):
            live.session.capture_start(tmp_path / "three.wav")
        live.play(100)
        live.session.capture_stop()
        assert soundfile.info(tmp_path / "take.wav").frames == 100


def test_a_session_that_ends_finishes_its_capture(tmp_path):
    with player() as live:
        live.session.capture_start(tmp_path / "take.wav")
        live.play(1000)
    assert soundfile.info(tmp_path / "take.wav").frames == 1000
    assert lines_of(tmp_path / "take.log.jsonl")[-1]["do"] == "capture"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["take.log.jsonl", "take.wav"]


def test_a_disk_that_takes_nothing_ends_the_capture_and_the_sound_goes_on(tmp_path, monkeypatch):
    with player() as live:
        live.session.play()
        live.session.capture_start(tmp_path / "take.wav")
        monkeypatch.setattr(
            "glidesmith.partfile.PartFile.write",
            lambda *_: (_ for _ in ()).throw(OutputError("take.wav: the disk is full")),
        )
        live.play(40_000)
        assert "the disk is full" in "\n".join(live.session.state()["warnings"])
        assert live.session.state()["capture"] is None
        assert live.session.state()["playing"] == "phrase"
    assert list(tmp_path.iterdir()) == []


# Level match


def loudness(live: Player, seconds: float = 2.0) -> float:
    live.play(RATE // 2)
    begin = live.audio.size
    live.play(int(seconds * RATE))
    return measure_loudness(live.audio[begin:], RATE).integrated_lufs


def test_slots_are_heard_equally_loud():
    """Tolerance 0.3 LU.

    A loop cut at any place is measured, and one that begins with its first note matched.
    """
    tables = [{"oscillator": {"level_db": -6.0}}, {"oscillator": {"level_db": -20.0, "wave": "sine"}}]
    with player(*tables, level_db=-10.0) as live:
        live.session.play()
        live.session.settle()
        heard = []
        for slot in (1, 2):
            live.session.select(slot)
            heard.append(loudness(live))
        assert heard[0] == pytest.approx(heard[1], abs=0.3)
        gains = [slot["match_gain_db"] for slot in live.session.state()["slots"]]
        assert gains[0] < -10.0
        assert gains[1] == 0.0
        live.session.match(False)
        live.session.select(1)
        assert loudness(live) > heard[0] + 10.0


def test_the_match_follows_once_the_hand_rests():
    with player({}, {"oscillator": {"level_db": -20.0}}) as live:
        live.session.play()
        live.session.settle()
        live.play(RATE // 4)
        before = live.session.state()["slots"][0]["match_gain_db"]
        for step in range(10):
            live.session.set(2, "oscillator.level_db", -20.0 - step)
            live.play(RATE // 20)
            assert not live.session._matcher.measure_next()
        live.play(RATE // 5)
        assert live.session._matcher.measure_next()
        live.play(1000)
        after = live.session.state()["slots"][0]["match_gain_db"]
        assert after == pytest.approx(before - 9.0, abs=0.1)


def test_one_slot_alone_is_left_as_it_is(tmp_path):
    with player(log=tmp_path / "log") as live:
        live.session.settle()
        live.play(1000)
        assert live.session.state()["slots"][0]["match_gain_db"] == 0.0
    assert "match_gain" not in [line["do"] for line in lines_of(tmp_path / "log")]


def test_gains_only_attenuate_and_silence_is_no_measure():
    assert matched_gains({1: -20.0, 2: -26.5, 3: None}) == {1: -6.5, 2: 0.0, 3: 0.0}
    assert matched_gains({1: -20.0}) == {1: 0.0}
    assert matched_gains({1: -10.0, 2: -80.0}) == {1: -30.0, 2: 0.0}
    assert too_quiet({1: -10.0, 2: -80.0, 3: None}) == [2, 3]


# Facts, curves, meters


@pytest.mark.parametrize("name", ["night-ferry-lead", "customs-shed-stairs", "deck-tune"])
def test_facts_are_those_that_measure_prints_of_the_saved_preset(name, tmp_path):
    """To the last bit; the same closed forms."""
    presets, _ = bank(name)
    path = PHRASE_FILES[0]
    with Player(presets, load_phrase(path)) as live:
        live.session.set(1, "pitch.rise", "333 ms")
        live.session.save(1, tmp_path / "saved.toml")
        found = live.session.facts(1)
        assert live.session.facts(1) is found
    printed = run("measure", tmp_path / "saved.toml", "--phrase", path, "--json")
    assert json.loads(json.dumps(found)) == json.loads(printed.stdout)


def test_facts_are_of_the_phrase_at_its_tempo_and_transposition():
    with player() as live:
        first = live.session.facts(1)
        live.session.tempo(50)
        live.session.transpose(12)
        slow = live.session.facts(1)
        assert slow["glides"][0]["start_s"] == 2.0 * first["glides"][0]["start_s"]
        assert (first["glides"][0]["from"], slow["glides"][0]["from"]) == ("C4", "C5")


def test_curves_run_over_one_round_and_a_loop_glides_into_its_first_note():
    with player({"pitch": {"law": "linear", "rise": 0.1, "fall": 0.1}}) as live:
        live.session.loop(False)
        once = live.session.curves(1)
        live.session.loop(True)
        looped = live.session.curves(1)
        assert once["end_s"] == looped["end_s"] == 0.5
        for found in (once, looped):
            for name in ("target", "pitch", "gate", "control", "gain"):
                times = [time for time, _ in found[name]]
                assert times[0] == 0.0
                assert times[-1] == pytest.approx(0.5)
                assert times == sorted(times)
        assert once["pitch"][0][1] == 0.0  # the first note is there at once
        assert looped["pitch"][0][1] == pytest.approx(
            7 / 12, abs=1e-4
        )  # and in a loop comes from the last one
        assert looped["transfer"][0] == [0.0, 0.0]
        assert looped["transfer"][-1] == [1.0, 1.0]


def test_curves_of_a_loop_are_what_the_deck_does():
    """Against the deck's own trace in the second round.

    1/1200 of the picture's height for each pixel's worth.
    """
    presets, phrases = bank("night-ferry-lead")
    with Player(presets, phrases) as live:
        found = live.session.curves(1)
        live.session.play()
        cursor, kept = 0, []
        for _ in range(int(2.2 * found["end_s"] * RATE / 2048)):
            live.play(2048, 2048)
            cursor, rows = live.session.deck.rows(cursor)
            kept.append(rows)
        rows = np.concatenate(kept)
        rows = rows[rows["round"] == 1]
        times = rows["position"] / RATE
        for name, field, span in (("pitch", "pitch_volts", 2.0), ("control", "control", 1.0)):
            line = np.array(found[name])
            drawn = np.interp(times, line[:, 0], line[:, 1])
            near = np.abs(drawn - rows[field]) < 4.0 * span / 1200
            assert near.mean() > 0.98, name


def test_meters_show_the_last_seconds_in_bounded_memory():
    """Against `measure_loudness` of the same seconds; tolerance 0.01 LU and dB."""
    generator = np.random.default_rng(4)
    meters = Meters(8000)
    blocks = [
        (generator.standard_normal(1000) * level).astype(np.float32)
        for level in np.repeat((0.2, 0.01, 0.1), (600, 40, 40))
    ]
    for block in blocks:
        meters.add(block)
    found = meters.readings()
    heard = np.concatenate(blocks)
    assert found["short_term_lufs"] == pytest.approx(
        measure_loudness(heard[-24_000:], 8000).short_term_max_lufs, abs=0.01
    )
    assert found["momentary_lufs"] == pytest.approx(
        measure_loudness(heard[-3200:], 8000).momentary_max_lufs, abs=0.05
    )
    last = np.abs(heard[-25_000:]).max()
    assert found["peak_dbfs"] == pytest.approx(20 * np.log10(last), abs=0.01)
    assert found["true_peak_dbtp"] >= found["peak_dbfs"]
    assert meters._meter.meter["frames"][0] < 61 * 8000


def test_silent_meters_are_json():
    assert set(Meters(48_000).readings().values()) == {None}
    meters = Meters(48_000)
    meters.add(np.zeros(48_000, np.float32))
    assert set(meters.readings().values()) == {None}


# Threads and long runs


def test_with_threads_of_their_own_nothing_is_lost(tmp_path):
    """A driver, the service, the matcher and two hands at once; the replay is what the driver heard."""
    presets, phrases = bank("night-ferry-lead", "winch-constant-time")
    session = Session(presets, phrases, RATE, log=tmp_path / "log")
    heard, end = [], threading.Event()

    def drive() -> None:
        while not end.is_set():
            out = np.zeros(300, np.float32)
            session.deck.play(out)
            heard.append(out)
            end.wait(0.001)

    def turn(key: str, slot: int) -> None:
        for step in range(150):
            session.set(slot, key, 0.001 * (step + 1))
            if step % 10 == 0:
                session.select(slot)
            end.wait(0.001)

    driver = threading.Thread(target=drive)
    hands = [threading.Thread(target=turn, args=args) for args in (("pitch.rise", 1), ("gain.fall", 2))]
    session.play()
    driver.start()
    with session.service():
        session.capture_start(tmp_path / "take.wav")
        for hand in hands:
            hand.start()
        for hand in hands:
            hand.join()
        facts = session.capture_stop()
    end.set()
    driver.join()
    session.close()
    captured, _ = soundfile.read(tmp_path / "take.wav", dtype="float32")
    assert np.array_equal(captured, np.concatenate(heard)[facts["from"] : facts["to"]])
    result = run("render", "--replay", tmp_path / "log", "-o", tmp_path / "again.wav", "--json")
    assert json.loads(result.stdout)["rendered"][0]["same"] is True
    moves = [line for line in lines_of(tmp_path / "log") if line["do"] == "set"]
    assert len(moves) == 300


def test_the_service_survives_a_fault_and_starts_and_stops_at_will(monkeypatch):
    with player() as live:
        session = live.session
        calls = threading.Event()

        def fail() -> None:
            calls.set()
            raise RuntimeError("boom")

        monkeypatch.setattr(session, "tick", fail)
        service = session.service()
        assert isinstance(service, Service)
        service.start()
        service.start()
        assert calls.wait(10)
        service.stop()
        service.stop()
        monkeypatch.undo()
        assert any("boom" in line for line in session.state()["warnings"])


def resident_bytes() -> int:
    """What the process holds in memory, by Linux's /proc; 0 elsewhere."""
    statm = Path("/proc/self/statm")
    return int(statm.read_text().split()[1]) * os.sysconf("SC_PAGE_SIZE") if statm.exists() else 0


def test_a_long_session_in_which_settings_move_all_the_time_keeps_its_memory_and_its_place(tmp_path):
    """30 minutes of deck time (1 in the short run) and a move every 18 ms: 100,000 of them in the long run.

    Memory grows by under 4 MB from the run's first third to its end.
    """
    minutes = 30 if LONG else 1
    block, rate = 864, 48_000
    count = minutes * 60 * rate // block
    presets, phrases = bank("winch-constant-time", "fog-horn")
    keys = ("pitch.rise", "pitch.fall", "gain.fall", "pitch.bend", "oscillator.level_db")
    live = Player(presets, phrases, log=tmp_path / "log")
    session, out = live.session, np.zeros(block, np.float32)
    session.play()
    grown, cursor, rows_seen, last_row = [], 0, 0, -1
    for step in range(count):
        key = keys[step % 5]
        value = -40.0 + step % 30 if key.endswith("db") else 0.01 + 0.001 * (step % 200)
        session.set(1 + step % 2, key, value)
        if step % 50 == 0:
            session.select(1 + step // 50 % 2)
        session.deck.play(out)
        live.now += block / rate
        session.tick()
        cursor, rows = session.deck.rows(cursor)
        rows_seen += rows.size
        if rows.size:
            assert rows["sample"][0] == last_row + session.deck.row_every or last_row < 0
            last_row = rows["sample"][-1]
        if step in (count // 3, count - 1):
            grown.append(resident_bytes())
    state = session.deck.state()
    assert state.sample == session.deck.sample == count * block
    assert rows_seen == -(-count * block // session.deck.row_every)
    live.close()
    lines = [line for line in lines_of(tmp_path / "log") if line["do"] == "set"]
    assert len(lines) == count
    stamps = [line["at"] for line in lines]
    assert stamps == sorted(stamps)
    assert grown[1] - grown[0] < 4_000_000
