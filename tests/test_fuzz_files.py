"""Damaged files of every kind: each is read or gets its lines, and nothing hangs or fails otherwise.

10,000 cases of each kind under the command for long runs, 300 otherwise, from fixed seeds. The alarm is far
above what any case takes: it is there so that a hang shows as a failure, not to measure.
"""

import random
import signal
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from conftest import LONG
from glidesmith.errors import GlidesmithError, PhraseError, PresetError
from glidesmith.phrase import Phrase, load_phrase
from glidesmith.preset import Preset, load_preset, parse_preset, update_preset_text

CASES = 10_000 if LONG else 300
PATIENCE_S = 60
seeded = settings(derandomize=True, deadline=None, database=None, max_examples=2_000 if LONG else 150)

PRESETS = (
    """\
title = "Quay é"
[oscillator]
wave = "pulse"
width = 0.25
[pitch]
law = "rc"
rise = "60 ms" # up
fall = 0.09
glide = "overlap"
[gain]
rise = "4 ms"
fall = 80e-3
[envelope]
attack = 0.01
decay = "1 s"
sustain = 0.6
release = 0.3
retrigger = true
""".encode(),
    b"""\
pitch.rise = 1
pitch.fall = 2
gain = { rise = "250 us", fall = 0 }
[tuning]
zero_volts = "Eb3"
[converter]
bits = 12
rate_hz = 1_000.0
[drone]
note = 50
[phrase]
file = "line.mid"
track = 2
""",
)
PHRASES = (
    b"""\
title = "Ferry line"
tempo_bpm = 96.0
notes = [
  { at = 0.0, lasts = 1.25, note = "D3" }, # one
  { at = 1.0, lasts = 0.5, note = "A3", velocity = 0.9 },
]
""",
    b"""\
tempo_bpm = 133.7
[[notes]]
at = 1e-1
lasts = 1_0
note = 60
[[notes]]
at = 0x10
lasts = 0.5
note = "C4"
""",
)
MIDI_FILES = tuple(
    bytes.fromhex(text)
    for text in (
        "4D 54 68 64 00 00 00 06 00 00 00 01 00 60 4D 54 72 6B 00 00 00 3B 00 FF 58 04 04 02 18 08"
        "00 FF 51 03 07 A1 20 00 C0 05 00 C1 2E 00 C2 46 00 92 30 60 00 3C 60 60 91 43 40 60 90 4C 20"
        "81 40 82 30 40 00 3C 40 00 81 43 40 00 80 4C 40 00 FF 2F 00",
        "4D 54 68 64 00 00 00 06 00 01 00 02 E7 28 4D 54 72 6B 00 00 00 1A 00 FF 03 04 4C 65 61 64"
        "00 F0 03 7E 7F F7 00 E3 00 40 00 B3 07 64 00 FF 2F 00"
        "4D 54 72 6B 00 00 00 17 00 90 3C 40 83 60 3C 00 00 99 23 40 10 23 00 00 80 3C 40 00 FF 2F 00",
    )
)
TOML_TOKENS = (
    *b'[ ] [[ ]] { } = . , " \' """ \\ # nan -inf 1e999999999 -0.0 0x true 1979-05-27 =1e-999'.split(),
    *b"[envelope] [pitch] pitch rise notes at lasts".split(),
    *(b'"\\u0000"', b'"\\ud800"', b"\\U00110000", b'"-5 ms"', b'"1e999 s"', b"\n", b"\r", b"\t"),
    *(b"\0", b"\x1b[2J", b"\xff", b"\xef\xbb\xbf", b"\xe2\x80\xae"),
    *(b"9" * 5000, b"[" * 2000, b"a." * 500),
)
MIDI_TOKENS = tuple(
    bytes.fromhex(token.decode())
    for token in (
        b"4D546864 4D54726B 00 7F 80 FF FFFFFF7F 80808080 00000000 FF2F00 FF5103FFFFFF FF5103000000 "
        b"FF5100 F07F F7 F8 00903C40 00803C40 00992340 FF7FFFFFFF7F"
    ).split()
)


class HangError(BaseException):
    """Not an Exception, so that nothing on the way can take it for a mistake of the file."""


@contextmanager
def no_hang() -> Iterator[None]:
    """Fail where what is inside takes minutes; a system without alarms has only the runner's own limit."""
    if not hasattr(signal, "setitimer"):
        yield
        return

    def ring(*_: object) -> None:
        raise HangError("still running after a minute")

    before = signal.signal(signal.SIGALRM, ring)
    signal.setitimer(signal.ITIMER_REAL, PATIENCE_S)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0)
        signal.signal(signal.SIGALRM, before)


def mutated(rng: random.Random, seeds: tuple[bytes, ...], tokens: tuple[bytes, ...]) -> bytes:
    """A seed after one to eight cuts, copies, changed bits, foreign tokens and splices."""
    data = bytearray(rng.choice(seeds))
    for _ in range(rng.choice((1, 1, 1, 2, 3, 8))):
        at = rng.randrange(len(data) + 1)
        to = min(len(data), at + rng.choice((1, 1, 2, 4, 20, 200)))
        match rng.randrange(8):
            case 0:
                del data[at:to]
            case 1:
                data[at:at] = data[at:to] * rng.choice((1, 1, 3, 50))
            case 2 if at < len(data):
                data[at] ^= 1 << rng.randrange(8)
            case 3 if at < len(data):
                data[at] = rng.randrange(256)
            case 4 | 5:
                data[at:to] = rng.choice(tokens)
            case 6:
                data[at:at] = rng.choice(tokens)
            case 7:
                other = rng.choice(seeds)
                data[at:] = other[rng.randrange(len(other)) :]
            case _:
                del data[at:]
    return bytes(data)


def outcome(read: Callable[[], object], kind: type[GlidesmithError]) -> object:
    """What was read, or None where the refusal was of the right kind and in lines fit for printing."""
    lines: tuple[str, ...] = ("fine",)
    result: object = None
    with no_hang():
        try:
            result = read()
        except kind as problem:
            lines = problem.lines
    assert lines
    assert all(line and line.isprintable() and len(line) < 1_000 for line in lines)
    assert len(lines) <= 21
    return result


def fuzz(
    name: str, file: Path, seeds: tuple[bytes, ...], tokens: tuple[bytes, ...], read: Callable[[Path], object]
) -> int:
    """How many of the damaged files were still read."""
    kind = PresetError if name == "preset" else PhraseError
    rng = random.Random(name)
    still_read = 0
    for case in range(CASES):
        data = mutated(rng, seeds, tokens)
        file.write_bytes(data)
        try:
            still_read += outcome(lambda: read(file), kind) is not None
        except BaseException as problem:
            problem.add_note(f"{name} case {case}: {data!r}")
            raise
    return still_read


def sound(phrase: Phrase) -> Phrase:
    for note in phrase.notes:
        assert 0 <= note.start < note.end <= 7200
        assert 0 <= note.number <= 127
        assert 0.0 <= note.velocity <= 1.0
    assert phrase.notes
    assert all(line.isprintable() for line in phrase.ignored)
    return phrase


@pytest.mark.parametrize("seeds", [PRESETS, PHRASES, MIDI_FILES], ids=["presets", "phrases", "MIDI"])
def test_the_seeds_themselves_are_sound(seeds: tuple[bytes, ...], tmp_path: Path) -> None:
    for data in seeds:
        (tmp_path / "file").write_bytes(data)
        assert load_preset(tmp_path / "file") if seeds is PRESETS else sound(load_phrase(tmp_path / "file"))


def test_damaged_presets(tmp_path: Path) -> None:
    def read(file: Path) -> Preset:
        preset = load_preset(file)
        assert preset.changed({}) == preset
        preset.settings()
        return preset

    still_read = fuzz("preset", tmp_path / "preset.toml", PRESETS, TOML_TOKENS, read)
    assert 0 < still_read < CASES


def test_damaged_phrases(tmp_path: Path) -> None:
    still_read = fuzz(
        "phrase", tmp_path / "phrase.toml", PHRASES, TOML_TOKENS, lambda file: sound(load_phrase(file))
    )
    assert 0 < still_read < CASES


def test_damaged_midi_files(tmp_path: Path) -> None:
    still_read = fuzz(
        "MIDI", tmp_path / "song.mid", MIDI_FILES, MIDI_TOKENS, lambda file: sound(load_phrase(file))
    )
    assert 0 < still_read < CASES


def test_damaged_presets_are_written_back_right_or_not_at_all() -> None:
    """Whatever survives damage is changed as asked with all remarks kept, or refused."""
    rng = random.Random("write")
    changes = {"pitch.rise": "75 ms", "pitch.knee": 0.25, "drone.note": 40, "envelope": None, "title": "a\nb"}
    written = 0
    for _ in range(CASES):
        try:
            text = mutated(rng, PRESETS, TOML_TOKENS).decode()
            before = parse_preset(text)
        except (UnicodeDecodeError, PresetError):
            continue
        after = outcome(lambda text=text: update_preset_text(text, changes), PresetError)
        if after is not None:
            written += 1
            assert parse_preset(str(after)) == before.changed(changes)
    assert written > CASES // 50


@seeded
@given(st.binary(max_size=300))
def test_any_bytes_at_all(tmp_path_factory: pytest.TempPathFactory, data: bytes) -> None:
    file = tmp_path_factory.getbasetemp() / "any"
    file.write_bytes(data)
    outcome(lambda: load_preset(file), PresetError)
    outcome(lambda: load_phrase(file), PhraseError)
    file.write_bytes(b"MThd\0\0\0\x06\0\x01\0\x01\0\x60MTrk" + len(data).to_bytes(4, "big") + data)
    outcome(lambda: load_phrase(file), PhraseError)


@seeded
@given(st.text(max_size=300))
def test_any_text_at_all(tmp_path_factory: pytest.TempPathFactory, text: str) -> None:
    file = tmp_path_factory.getbasetemp() / "any"
    file.write_bytes(text.encode("utf-8", "surrogatepass"))
    outcome(lambda: load_preset(file), PresetError)
    outcome(lambda: load_phrase(file), PhraseError)


@pytest.mark.skipif(not hasattr(signal, "setitimer"), reason="this system has no alarm")
def test_the_guard_sees_a_hang(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(no_hang.__wrapped__.__globals__, "PATIENCE_S", 0.01)  # type: ignore[attr-defined]

    def endless() -> None:
        while True:
            pass

    with pytest.raises(HangError):
        outcome(endless, PresetError)
