"""The one table of preset keys: what each is called, what it may be, what it is when left out.

Checking, suggestions, the command line's ``KEY=VALUE``, help and documentation all read this table; nothing
else says what a key may hold.
"""

import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

from glidesmith.errors import SettingError
from glidesmith.text import nearest, shortened, shown, suggestion
from glidesmith.units import format_time, note_name, note_number, parse_time

Kind = Literal["time", "number", "whole", "choice", "flag", "note", "file", "text"]
Presence = Literal["required", "default", "optional"]

LAWS = ("linear", "rc", "log", "exp", "soft", "curve", "cosine")
TIMINGS = ("rate", "fixed")
WAVES = ("sine", "triangle", "saw", "pulse", "file")
PROGRESS_LAWS = ("curve", "cosine")
"""Laws that go by the progress of the glide from its start to its end, not by where the output stands."""

_NEVER_FIXED = {
    "rc": "its time is a time constant, and it comes near its target without a fixed end",
    "log": "its speed follows the output level, so its duration depends on where the glide starts",
    "exp": "its speed follows the output level, so its duration depends on where the glide starts",
    "soft": "it slows down close to its target and has no fixed end",
}


@dataclass(frozen=True, slots=True)
class Key:
    """One preset key.

    ``name`` is dotted, as ``"pitch.rise"``. ``lowest`` and ``highest`` bound times (seconds), numbers and
    whole numbers, both included; ``or_zero`` allows 0 below ``lowest`` too. ``default`` is None where the
    key must be given (``required``) and where leaving it out means "none" or "by the law". ``counts_for``
    names another key and those of its values with which alone this one has an effect.
    """

    name: str
    kind: Kind
    description: str
    default: object = None
    required: bool = False
    lowest: float = 0.0
    highest: float = 0.0
    or_zero: bool = False
    choices: tuple[str, ...] = ()
    unit: str = ""
    counts_for: tuple[str, tuple[str, ...]] | None = None

    @property
    def table(self) -> str:
        """The table that the key stands in; empty for ``title``."""
        return self.name.rpartition(".")[0]

    @property
    def leaf(self) -> str:
        """The key's name inside its table."""
        return self.name.rpartition(".")[2]

    @property
    def rule(self) -> str:
        """What the value must be, as an error message says it after the value."""
        return _RULES[self.kind](self)

    @property
    def range_text(self) -> str:
        """The range or choices, short, for documentation: ``"0 or 1 µs to 60 s"``."""
        if self.kind == "time":
            return f"{'0 or ' if self.or_zero else ''}{_time_text(self.lowest)} to {_time_text(self.highest)}"
        if self.kind in ("number", "whole"):
            unit = f" {self.unit}" if self.unit else ""
            return f"{'0 or ' if self.or_zero else ''}{self.lowest:,g} to {self.highest:,g}{unit}"
        if self.kind == "choice":
            return ", ".join(self.choices)
        return {"flag": "true or false", "note": "C-1 to G9", "file": "a path", "text": "any text"}[self.kind]

    def check(self, value: object) -> object:
        """The value in the form the program works with, if the rule allows it.

        Times become float seconds, numbers floats, notes MIDI numbers; the other kinds stay as they are.
        Raises SettingError with key, value and rule.
        """
        try:
            checked = _CHECKS[self.kind](self, value)
        except SettingError:
            checked = None
        if checked is None:
            near = suggestion(value, self.choices) if self.choices and isinstance(value, str) else ""
            raise SettingError(f"{self.name} = {shown(value)}: {self.rule}{near}")
        return checked

    def parse(self, text: str) -> object:
        """The checked value of a text on the command line, where a number may carry its unit.

        Raises SettingError with key, value and rule.
        """
        return self.check(_READERS[self.kind](self, text))

    def plain(self, value: object) -> object:
        """A checked value as JSON and TOML carry it: notes by name, all else as it is."""
        return note_name(value) if self.kind == "note" and isinstance(value, int) else value


@dataclass(frozen=True, slots=True)
class Table:
    """One table of a preset: must it be there, or has it defaults throughout, or does its part go with it?"""

    name: str
    presence: Presence
    description: str


TABLES = (
    Table("oscillator", "default", "the tone"),
    Table("pitch", "required", "the slew on the pitch voltage"),
    Table("gain", "required", "the slew on the amplifier's control"),
    Table("envelope", "optional", "an attack, decay, sustain, release envelope before the gain slew"),
    Table("amplifier", "default", "how gain control becomes gain"),
    Table("tuning", "default", "what the volts mean"),
    Table("converter", "optional", "the steps of a digital sequencer before the pitch slew"),
    Table("drone", "optional", "a quiet sine on one note, to hear landing as beats"),
    Table("phrase", "optional", "what is played; the command line may give it instead"),
)


def _slew_keys(table: str, volt: str) -> tuple[Key, ...]:
    def time(leaf: str, direction: str) -> Key:
        described = f"T for glides {direction}: seconds per {volt}, time constant or duration, by the law"
        return Key(
            f"{table}.{leaf}", "time", described, required=True, lowest=1e-6, highest=60.0, or_zero=True
        )

    def number(
        leaf: str, described: str, default: float, lowest: float, highest: float, unit: str, *laws: str
    ) -> Key:
        return Key(
            f"{table}.{leaf}",
            "number",
            described,
            default=default,
            lowest=lowest,
            highest=highest,
            unit=unit,
            counts_for=(f"{table}.law", laws),
        )

    return (
        Key(f"{table}.law", "choice", "the slew law", default="linear", choices=LAWS),
        time("rise", "upwards"),
        time("fall", "downwards"),
        Key(
            f"{table}.timing",
            "choice",
            "constant rate or constant time; by the law if left out",
            choices=TIMINGS,
        ),
        number("bend", "how strongly log and exp depend on the output", 1.0, 0.01, 10.0, "/V", "log", "exp"),
        number("knee", "how near the target soft begins to slow down", 0.1, 0.001, 2.0, "V", "soft"),
        number(
            "curvature", "the bow of curve; over 0 starts fast, 0 is straight", 0.0, -20.0, 20.0, "", "curve"
        ),
    )


def _level(name: str, described: str, default: float) -> Key:
    return Key(name, "number", described, default=default, lowest=-60.0, highest=0.0, unit="dB")


def _stage(leaf: str, described: str) -> Key:
    return Key(f"envelope.{leaf}", "time", described, required=True, lowest=0.0, highest=60.0)


KEYS: tuple[Key, ...] = (
    Key("title", "text", "what the patch is called; the file's name if left out"),
    Key("oscillator.wave", "choice", "the waveform", default="saw", choices=WAVES),
    Key(
        "oscillator.width",
        "number",
        "the pulse's high part of a cycle",
        default=0.5,
        lowest=0.05,
        highest=0.95,
        counts_for=("oscillator.wave", ("pulse",)),
    ),
    _level("oscillator.level_db", "the oscillator's peak level", -12.0),
    Key("oscillator.file", "file", 'the WAV that holds one cycle, for wave = "file"; relative to the preset'),
    *_slew_keys("pitch", "volt"),
    Key(
        "pitch.glide", "choice", "which notes glide", default="always", choices=("always", "overlap", "never")
    ),
    Key("pitch.steps_per_octave", "whole", "glissando steps; 0 is smooth", 0, lowest=0, highest=96),
    *_slew_keys("gain", "full level"),
    _stage("attack", "from the present level to full level"),
    _stage("decay", "from full level to sustain"),
    Key("envelope.sustain", "number", "the level while the note is held", required=True, highest=1.0),
    _stage("release", "from the present level to silence"),
    Key("envelope.shape", "choice", "the form of each stage", default="linear", choices=("linear", "rc")),
    Key("envelope.retrigger", "flag", "start again on an overlapping note", default=False),
    Key("amplifier.law", "choice", "gain by level", default="linear", choices=("linear", "decibel")),
    Key(
        "amplifier.range_db",
        "number",
        "range of decibel",
        default=60.0,
        lowest=20.0,
        highest=120.0,
        unit="dB",
        counts_for=("amplifier.law", ("decibel",)),
    ),
    Key(
        "amplifier.velocity_db",
        "number",
        "how far the softest velocity lowers it",
        0.0,
        highest=60.0,
        unit="dB",
    ),
    Key("tuning.a4_hz", "number", "the frequency of A4", 440.0, lowest=400.0, highest=480.0, unit="Hz"),
    Key("tuning.zero_volts", "note", "the note at 0 V", default=60),
    Key(
        "tuning.scale_error_cents_per_octave",
        "number",
        "how far the oscillator's tracking is off",
        default=0.0,
        lowest=-100.0,
        highest=100.0,
        unit="cents",
    ),
    Key("converter.bits", "whole", "resolution", 12, lowest=4, highest=24),
    Key("converter.span_volts", "number", "from lowest to highest", 10.0, lowest=1.0, highest=20.0, unit="V"),
    Key(
        "converter.rate_hz",
        "number",
        "how often it is set; 0 is at once",
        default=0.0,
        lowest=10.0,
        highest=48_000.0,
        or_zero=True,
        unit="Hz",
    ),
    Key("drone.note", "note", "the note it sounds", required=True),
    _level("drone.level_db", "the drone's peak level", -30.0),
    Key(
        "phrase.file", "file", "a TOML phrase or a Standard MIDI File; relative to the preset", required=True
    ),
    Key(
        "phrase.track",
        "whole",
        "the only track of a MIDI file to play, counted from 1",
        lowest=1,
        highest=65_535,
    ),
    Key(
        "phrase.channel",
        "whole",
        "the only MIDI channel to play; all but 10 if left out",
        lowest=1,
        highest=16,
    ),
)

KEY: dict[str, Key] = {key.name: key for key in KEYS}
"""Each key by its dotted name."""

LEAVES: dict[str, tuple[str, ...]] = {
    table.name: tuple(key.leaf for key in KEYS if key.table == table.name) for table in TABLES
}
"""The keys inside each table, without its name."""


def find_key(name: str) -> Key:
    """The key of that dotted name. Raises SettingError with the nearest one where there is none."""
    key = KEY.get(name)
    if key is None:
        raise SettingError(f"{shown(name)} is no preset key{suggested_key(name)}")
    return key


def suggested_key(name: str) -> str:
    """`` (did you mean "pitch.rise"?)`` for a mistyped dotted name.

    A key that exists in the named table comes first, then one of the same name elsewhere. Where none is near,
    the keys of the named table are listed; without a table, there is nothing to say.
    """
    table, _, leaf = name.rpartition(".")
    if table in LEAVES and (found := nearest(leaf, LEAVES[table])):
        return f' (did you mean "{table}.{found}"?)'
    same_leaf = [key.name for key in KEYS if key.leaf == leaf]
    if same_leaf:
        return f' (did you mean "{same_leaf[0]}"?)'
    if table in LEAVES:
        return f"; [{shortened(table)}] has {', '.join(LEAVES[table])}"
    return suggestion(name, KEY)


def parse_value(name: str, text: str) -> object:
    """The checked value of ``name = text`` as given on a command line.

    Times and other numbers may carry their unit (``"80 ms"``, ``"-12 dB"``); a time without one is in
    seconds. Notes are names or MIDI numbers. Raises SettingError for unknown keys and for values out of
    their rule.
    """
    return find_key(name).parse(text)


def resolved_timing(law: str, timing: str | None = None) -> str:
    """The timing in force: as given, else ``"fixed"`` for ``curve`` and ``cosine``, ``"rate"`` for others.

    Raises SettingError where ``fixed`` is asked of a law that can't have it, with the reason.
    """
    if timing is None:
        return "fixed" if law in PROGRESS_LAWS else "rate"
    if timing == "fixed" and law in _NEVER_FIXED:
        raise SettingError(
            f'timing = "fixed": the {law} law can\'t have it: {_NEVER_FIXED[law]}; '
            "use linear, curve or cosine, or leave timing out"
        )
    return timing


def is_timed(law: str, timing: str) -> bool:
    """True where a glide runs by its own clock, so that its target must stand still meanwhile."""
    return law in PROGRESS_LAWS or timing == "fixed"


def keys_as_markdown() -> str:
    """The whole table for documentation, one row a key, in Markdown."""
    rows = ["| key | default | range | what it is |", "|---|---|---|---|"]
    rows += [
        f"| `{key.name}` | {_default_text(key)} | {key.range_text} | {key.description} |" for key in KEYS
    ]
    return "\n".join(rows) + "\n"


def _default_text(key: Key) -> str:
    if key.required:
        return "must be given"
    if key.leaf == "timing":
        return "by law"
    value = key.plain(key.default)
    if value is None:
        return "–"
    return (
        f"{value:g}"
        if isinstance(value, float)
        else str(value).lower()
        if value in (True, False)
        else str(value)
    )


def _time_text(seconds: float) -> str:
    return "0" if seconds == 0 else format_time(seconds)


def _check_time(key: Key, value: object) -> object:
    seconds = parse_time(value)
    return seconds if _within(key, seconds) else None


def _check_number(key: Key, value: object) -> object:
    if isinstance(value, bool) or not isinstance(value, int | float) or not _within(key, value):
        return None
    return float(value) + 0.0


def _check_whole(key: Key, value: object) -> object:
    return value if type(value) is int and _within(key, value) else None


def _within(key: Key, value: float) -> bool:
    return key.lowest <= value <= key.highest or (key.or_zero and value == 0)


def _check_choice(key: Key, value: object) -> object:
    return value if isinstance(value, str) and value in key.choices else None


def _check_flag(key: Key, value: object) -> object:
    return value if isinstance(value, bool) else None


def _check_note(key: Key, value: object) -> object:
    return note_number(value)


def _check_file(key: Key, value: object) -> object:
    return value if isinstance(value, str) and value.strip() and "\0" not in value else None


def _check_text(key: Key, value: object) -> object:
    return value if isinstance(value, str) else None


_CHECKS: dict[Kind, Callable[[Key, object], object]] = {
    "time": _check_time,
    "number": _check_number,
    "whole": _check_whole,
    "choice": _check_choice,
    "flag": _check_flag,
    "note": _check_note,
    "file": _check_file,
    "text": _check_text,
}

_RULES: dict[Kind, Callable[[Key], str]] = {
    "time": lambda key: f'must be a time of {key.range_text}: seconds as a number, or with a unit as "80 ms"',
    "number": lambda key: f"must be a number: {key.range_text}",
    "whole": lambda key: f"must be a whole number: {key.range_text}",
    "choice": lambda key: "must be one of " + ", ".join(f'"{choice}"' for choice in key.choices),
    "flag": lambda key: "must be true or false",
    "note": lambda key: 'must be a note from C-1 to G9, as "D#3" or "Eb3", or a MIDI number from 0 to 127',
    "file": lambda key: "must be the path of a file, in quotes",
    "text": lambda key: "must be text, in quotes",
}

_NUMBER = re.compile(
    r"\s*([+-]?(?:[0-9]{1,40}(?:\.[0-9]{0,40})?|\.[0-9]{1,40})(?:[eE][+-]?[0-9]{1,4})?)\s*(\S*)\s*"
)
_WHOLE = re.compile(r"\s*([+-]?[0-9]{1,40})\s*")


def _read_time(key: Key, text: str) -> object:
    found = _NUMBER.fullmatch(text)
    return float(found[1]) if found and not found[2] else text


def _read_number(key: Key, text: str) -> object:
    found = _NUMBER.fullmatch(text)
    if not found or found[2].lower() not in ("", key.unit.lower()):
        return text
    number = float(found[1])
    return number if math.isfinite(number) else text


def _read_whole(key: Key, text: str) -> object:
    found = _WHOLE.fullmatch(text)
    return int(found[1]) if found else text


def _read_flag(key: Key, text: str) -> object:
    return {"true": True, "false": False}.get(text.strip().lower(), text)


def _read_choice(key: Key, text: str) -> object:
    return text.strip()


def _read_as_it_is(key: Key, text: str) -> object:
    return text


def _read_note(key: Key, text: str) -> object:
    found = _WHOLE.fullmatch(text)
    return int(found[1]) if found else text.strip()


_READERS: dict[Kind, Callable[[Key, str], object]] = {
    "time": _read_time,
    "number": _read_number,
    "whole": _read_whole,
    "choice": _read_choice,
    "flag": _read_flag,
    "note": _read_note,
    "file": _read_as_it_is,
    "text": _read_as_it_is,
}
