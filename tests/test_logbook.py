"""Logs written and read back: whole, streamed, and harmless whatever they hold."""

import io
import json
import os
import random
import stat
import tracemalloc
from pathlib import Path

import pytest

from conftest import LONG
from glidesmith.errors import LogError, OutputError
from glidesmith.logbook import FORMAT, Logbook, log_beside
from glidesmith.logreader import LogReader
from glidesmith.moves import make_move
from glidesmith.replay import replay, span_of
from glidesmith.sink import MemorySink
from playing import Player, bank

HEADER = {"format": FORMAT, "version": 1}


@pytest.fixture(scope="module")
def log(tmp_path_factory) -> Path:
    """The log of a short session in which a little of everything moves."""
    folder = tmp_path_factory.mktemp("log")
    with Player(*bank("night-ferry-lead", "fog-horn"), log=folder / "session.jsonl") as player:
        session = player.session
        session.play()
        session.capture_start(folder / "take.wav")
        player.play(3000)
        session.set(1, "pitch.rise", "120 ms")
        session.load(3, next(p for p in bank_files() if 'wave = "file"' in p.read_text()))
        session.select(3)
        player.play(3000)
        session.phrase(bank_files()[0].parent.parent / "shared" / "phrases" / "ferry-line.toml")
        session.key_down(60)
        player.play(3000)
        session.capture_stop()
    return folder / "session.jsonl"


def bank_files() -> list[Path]:
    from conftest import PRESETS

    return sorted(PRESETS.glob("*.toml"))


def read(path: Path):
    with LogReader(path) as reader:
        sink = MemorySink()
        found = replay(reader, span_of(reader), sink)
        sink.close()
    return found


def complaint(path: Path) -> str:
    with pytest.raises(LogError) as problem:
        read(path)
    (line,) = problem.value.lines
    assert line.startswith(f"{path}: ")
    assert line.isprintable()
    assert len(line) < 500
    return line


def damaged(log: Path, folder: Path, number: int, text: str | bytes) -> Path:
    """The log with one line, from 1, replaced."""
    lines = log.read_bytes().splitlines(keepends=True)
    lines[number - 1] = text if isinstance(text, bytes) else text.encode() + b"\n"
    path = folder / "damaged.jsonl"
    path.write_bytes(b"".join(lines))
    return path


def edited(log: Path, folder: Path, number: int, **changes) -> Path:
    line = json.loads(log.read_bytes().splitlines()[number - 1])
    return damaged(log, folder, number, json.dumps({**line, **changes}))


def test_the_log_replays_as_it_is(log):
    assert read(log).same is True


def test_a_line_says_what_moved_where_and_when(log):
    lines = [json.loads(line) for line in log.read_text().splitlines()]
    assert lines[0]["format"] == "glidesmith session log"
    assert lines[0]["sample_rate"] == 48_000
    rise = next(line for line in lines if line.get("key") == "pitch.rise")
    assert (rise["at"], rise["slot"], rise["value"]) == (3000, 1, "120 ms")
    assert lines[0]["phrases"][0]["notes"][0][0] == "0"
    assert lines[-1] == {"at": 9000, "do": "end"}
    (capture,) = [line for line in lines[1:] if line["do"] == "capture"]
    assert (capture["from"], capture["to"]) == (0, 9000)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "is not JSON"),
        ("[1]", "is no JSON object"),
        ("{", "is not JSON"),
        ('{"at": NaN, "do": "play"}', "is not JSON"),
        ("[" * 100_000, "is not JSON"),
        ('{"at": ' + "9" * 5000 + "}", "is not JSON"),
        (b"\xff\xfe\n", "is not JSON"),
        ('{"do": "play"}', "at = nothing"),
        ('{"at": -1, "do": "play"}', "at = -1"),
        ('{"at": 1.5, "do": "play"}', "at = 1.5"),
        ('{"at": 10000000000000, "do": "play"}', "a day's worth"),
        ('{"at": 0, "do": "explode"}', "there is no move"),
        ('{"at": 0, "do": "\\u001b[2J"}', "there is no move"),
        ('{"at": 0, "do": "play", "sent": "swap"}', "the log is damaged"),
        ('{"at": 0, "do": "play", "sent": "rm"}', "must be one of swap"),
        ('{"at": 0, "do": "play"}', "the log is damaged"),
        ('{"at": 0, "do": "set", "slot": 7, "key": "pitch.rise", "value": 1}', "slot 7 is empty"),
        ('{"at": 0, "do": "set", "slot": 1, "key": "pitch.rise", "value": 99}', "pitch.rise = 99"),
        ('{"do": "capture", "from": 7, "to": 3}', "is after"),
    ],
)
def test_a_damaged_line_is_told_by_its_number(log, tmp_path, text, said):
    line = complaint(damaged(log, tmp_path, 4, text))
    assert ": line 4: " in line
    assert said in line


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"format": "another"}, "is no session log"),
        ({"version": 2}, "update it"),
        ({"version": "1"}, "the log is damaged"),
        ({"sample_rate": 1}, "sample_rate = 1"),
        ({"options": None}, "options"),
        ({"options": {"loop": 1}}, "loop = 1"),
        ({"slots": {}}, "with slot 1"),
        ({"phrases": []}, "1 to 8 phrases"),
        ({"phrases": [{"notes": [["0", "1", 300, 1]]}]}, "note 1"),
        ({"slots": {"1": {"phrase": 5}}}, "place of a phrase"),
        ({"slots": {"1": {"phrase": 0, "preset": {"settings": {"pitch": 3}}}}}, "pitch = 3"),
        ({"slots": {"1": {"phrase": 0, "preset": {}}}}, "settings is missing"),
    ],
)
def test_a_damaged_header_is_told(log, tmp_path, changes, said):
    assert said in complaint(edited(log, tmp_path, 1, **changes))


def test_another_engines_log_replays_with_a_word_of_caution(log, tmp_path):
    found = read(edited(log, tmp_path, 1, engine="0.0.9"))
    assert found.same is True
    assert "made by Glidesmith 0.0.9" in found.warnings[0]


def test_a_log_that_tells_of_other_samples_is_not_believed(log, tmp_path):
    number = next(i for i, text in enumerate(log.read_text().splitlines(), 1) if "audio_sha256" in text)
    found = read(edited(log, tmp_path, number, audio_sha256="0" * 64))
    assert found.same is False
    assert "not those that were captured" in found.warnings[0]


@pytest.mark.parametrize("kept", [0, 1, 1000])
def test_a_log_that_is_cut_off_is_told(log, tmp_path, kept):
    path = tmp_path / "cut.jsonl"
    path.write_bytes(log.read_bytes()[:kept])
    assert "cut.jsonl" in complaint(path)


def test_a_cut_last_line_says_how_to_mend_it(log, tmp_path):
    path = tmp_path / "cut.jsonl"
    path.write_bytes(log.read_bytes()[:-5])
    assert "is cut off; take it out" in complaint(path)


def test_a_huge_line_is_not_read_in(log, tmp_path, monkeypatch):
    monkeypatch.setattr("glidesmith.logreader.MOST_LINE_BYTES", 100_000)
    line = complaint(damaged(log, tmp_path, 3, " " * 200_000))
    assert "is over 100,000 bytes" in line


def test_a_huge_log_is_not_read(log, tmp_path, monkeypatch):
    monkeypatch.setattr("glidesmith.logreader.MOST_LOG_BYTES", 1000)
    assert "is over 1,000 bytes" in complaint(log)


def test_what_is_no_file_is_told(tmp_path):
    assert "there is no such file" in complaint(tmp_path / "none.jsonl")
    assert "no regular file" in complaint(tmp_path)
    os.mkfifo(tmp_path / "pipe")
    assert "no regular file" in complaint(tmp_path / "pipe")


def test_at_random_damage_there_is_one_line_or_a_replay(log, tmp_path):
    data, draw = log.read_bytes(), random.Random(5)
    refused = 0
    for _ in range(1500 if LONG else 60):
        changed = bytearray(data)
        for _ in range(draw.choice((1, 1, 3, 20))):
            at = draw.randrange(len(changed))
            if draw.random() < 0.5:
                changed[at] = draw.randrange(256)
            else:
                del changed[at : at + draw.randrange(1, 200)]
        path = tmp_path / "random.jsonl"
        path.write_bytes(changed)
        try:
            read(path)
        except LogError as problem:
            refused += 1
            told = problem.lines
            assert all(line.startswith(f"{path}: ") and line.isprintable() for line in told)
    assert refused > 10


def test_names_in_a_log_open_no_file_and_write_none(log, tmp_path, monkeypatch):
    """A cycle's file and a preset's path are only names: with them pointing elsewhere all is as before."""
    lines = log.read_text().splitlines()
    text = "\n".join(line.replace(".wav", "-elsewhere.wav").replace(".toml", "-gone.toml") for line in lines)
    path = tmp_path / "moved.jsonl"
    path.write_text(text + "\n")
    opened: list[str] = []
    real_open, real_os_open = io.open, os.open

    def note(file, *more, **options):
        opened.append(str(file))
        return real_open(file, *more, **options)

    def note_os(file, *more, **options):
        opened.append(str(file))
        return real_os_open(file, *more, **options)

    read(path)  # what is imported late is imported
    monkeypatch.setattr(io, "open", note)
    monkeypatch.setattr("builtins.open", note)
    monkeypatch.setattr(os, "open", note_os)
    assert read(path).same is True
    assert [name for name in opened if not name.isdigit()] == [str(path)]  # descriptors apart


def test_a_private_log_is_for_its_user_alone_and_goes(tmp_path):
    book = Logbook(None, HEADER)
    folder = book.path.parent
    assert stat.S_IMODE(folder.stat().st_mode) == 0o700
    assert stat.S_IMODE(book.path.stat().st_mode) == 0o600
    book.copy(tmp_path / "copy.jsonl")
    assert json.loads((tmp_path / "copy.jsonl").read_text()) == HEADER
    book.close()
    assert not folder.exists()
    book.write_move(1, make_move("play"), None)


def test_a_log_never_takes_the_place_of_a_file(tmp_path):
    (tmp_path / "there").write_text("mine")
    (tmp_path / "link").symlink_to(tmp_path / "nowhere")
    for name in ("there", "link"):
        with pytest.raises(OutputError, match="is there already"):
            Logbook(tmp_path / name, HEADER)
    with pytest.raises(OutputError, match="is a folder"):
        Logbook(tmp_path, HEADER)
    with pytest.raises(OutputError, match="does not exist"):
        Logbook(tmp_path / "none" / "log", HEADER)
    assert (tmp_path / "there").read_text() == "mine"


def test_a_log_on_a_full_disk_says_so_once_and_takes_nothing_more():
    full = Path("/dev/full")
    if not full.exists():
        pytest.skip("no device that is always full here")
    book = Logbook(None, HEADER)
    book._file.close()
    book._file = full.open("w")
    book.write_move(1, make_move("play"), "play")
    with pytest.raises(OutputError, match="the disk is full"):
        book.flush()
    assert book.broken
    book.write_move(2, make_move("stop"), "stop")
    book.close()


def test_lines_go_to_the_disk_and_not_into_memory():
    book = Logbook(None, HEADER)
    move = make_move("set", slot=1, key="pitch.rise", value=0.123, gesture=5)
    for at in range(1000):
        book.write_move(at, move, "swap")
    tracemalloc.start()
    for at in range(100_000 if LONG else 20_000):
        book.write_move(at, move, "swap")
    book.flush()
    grown, _ = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert grown < 100_000
    assert book.path.stat().st_size > 1_000_000
    book.close()


def test_a_capture_has_its_log_beside_it():
    assert log_beside(Path("takes/one.wav")) == Path("takes/one.log.jsonl")
