"""Times with units and note names: the two notations that presets, phrases and the command line share.

Times are seconds. Notes are MIDI numbers, written in scientific pitch notation with C4 = 60 (ISO 16 puts
A4, number 69, at 440 Hz).
"""

import math
import re
from fractions import Fraction
from typing import TYPE_CHECKING

from glidesmith.errors import SettingError
from glidesmith.text import shown

if TYPE_CHECKING:
    from decimal import Decimal

_TIME = re.compile(r"\s*([+-]?)([0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE]([+-]?[0-9]{1,4}))?\s*([a-zµμ]+)\s*")
_LONGEST_TIME = 64
_DECIMAL_SHIFT = {"s": 0, "ms": -3, "us": -6, "µs": -6, "μs": -6}
_TIME_RULE = 'must be seconds as a number, or a string with a unit (us, µs, ms, s or min), as "80 ms"'

_NOTE = re.compile(r"([A-Ga-g])([#b]?)(-1|[0-9])", re.ASCII)
_SEMITONES = {"C": 0, "D": 2, "E": 4, "F": 5, "G": 7, "A": 9, "B": 11}
_ACCIDENTALS = {"": 0, "#": 1, "b": -1}
_NAMES = ("C", "C#", "D", "D#", "E", "F", "F#", "G", "G#", "A", "A#", "B")
_NOTE_RULE = 'must be a note from C-1 to G9, written as "D#3" or "Eb3"'
HIGHEST_NOTE = 127


def parse_time(value: object) -> float:
    """Seconds, from a number of seconds or a string with a unit: ``"80 ms"``, ``"1.2 s"``, ``"2 min"``.

    The result is the double nearest to what is written. It is finite and not negative; narrower ranges are
    up to the setting.

    Raises SettingError for anything else, booleans and NaN included.
    """
    seconds = _seconds_of_text(value) if isinstance(value, str) else _seconds_of_number(value)
    if not (0.0 <= seconds < math.inf):
        raise SettingError(f"{shown(value)} is not a time: it must be finite and not negative")
    return seconds + 0.0


def _seconds_of_number(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise SettingError(f"{shown(value)} is not a time: it {_TIME_RULE}")
    try:
        return float(value)
    except OverflowError:
        return math.inf


def _seconds_of_text(text: str) -> float:
    found = _TIME.fullmatch(text) if len(text) <= _LONGEST_TIME else None
    if not found:
        raise SettingError(f"{shown(text)} is not a time: it {_TIME_RULE}")
    sign, digits, exponent, unit = found.groups(default="")
    power = int(exponent or 0)
    if unit == "min":
        seconds = _of_minutes(digits, power)
    elif unit in _DECIMAL_SHIFT:
        # Moving the decimal point in the text and rounding once makes "80 ms" the very double that 0.08 is.
        seconds = float(f"{digits}e{power + _DECIMAL_SHIFT[unit]}")
    else:
        raise SettingError(f"{shown(text)} is not a time: it {_TIME_RULE}")
    return -seconds if sign == "-" else seconds


def _of_minutes(digits: str, power: int) -> float:
    if abs(power) > 400:
        return math.inf if power > 0 else 0.0
    try:
        return float(Fraction(f"{digits}e{power}") * 60)
    except OverflowError:
        return math.inf


def format_time(seconds: float, digits: int | None = None) -> str:
    """A time with the unit that suits it: ``"250 µs"``, ``"80 ms"``, ``"1.2 s"``.

    Without ``digits``, `parse_time` reads the very same double back. With it, the time is rounded to so many
    significant digits, for people.
    """
    from decimal import Decimal

    exact = Decimal(repr(float(seconds)) if digits is None else f"{seconds:.{digits - 1}e}")
    size = abs(exact)
    if size == 0 or size >= 1:
        return f"{_plain(exact)} s"
    if size >= Decimal("0.001"):
        return f"{_plain(exact.scaleb(3))} ms"
    return f"{_plain(exact.scaleb(6))} µs"


def _plain(number: "Decimal") -> str:
    if number and not -9 <= number.adjusted() < 15:
        return str(number)
    text = f"{number:f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def spoken_duration(seconds: Fraction | float) -> str:
    """A long duration as one would say it: ``"3 h 12 min"``, ``"52,000 days"``; any size."""
    whole = int(seconds)
    if whole < 60:
        return format_time(float(seconds), 3)
    days, rest = divmod(whole, 86_400)
    if days > 10**9:
        return "over 1,000,000,000 days"
    if days >= 2:
        return f"{days:,} days"
    hours, minutes = whole // 3600, whole % 3600 // 60
    if hours:
        return f"{hours} h {minutes} min" if minutes else f"{hours} h"
    return f"{minutes} min {rest % 60} s" if rest % 60 else f"{minutes} min"


def parse_note(name: str) -> int:
    """The MIDI number, 0 to 127, of a note name in scientific pitch notation.

    C4 is 60; octaves run from -1 to 9; ``#`` raises by a semitone, ``b`` lowers by one. Raises SettingError.
    """
    found = _NOTE.fullmatch(name) if isinstance(name, str) else None
    if not found:
        raise SettingError(f"{shown(name)} is not a note: it {_NOTE_RULE}")
    letter, accidental, octave = found.groups()
    number = 12 * (int(octave) + 1) + _SEMITONES[letter.upper()] + _ACCIDENTALS[accidental]
    if not 0 <= number <= HIGHEST_NOTE:
        raise SettingError(f"{shown(name)} is out of range: it {_NOTE_RULE}")
    return number


def note_number(value: object) -> int:
    """The MIDI number of a note given by name or by number. Raises SettingError."""
    if isinstance(value, str):
        return parse_note(value)
    if isinstance(value, bool) or not isinstance(value, int) or not 0 <= value <= HIGHEST_NOTE:
        raise SettingError(f"{shown(value)} is not a note: it {_NOTE_RULE}, or a MIDI number from 0 to 127")
    return value


def note_name(number: int) -> str:
    """The name of a MIDI note number, with sharps: 51 is ``"D#3"``. Raises SettingError outside 0 to 127."""
    number = note_number(number)
    return f"{_NAMES[number % 12]}{number // 12 - 1}"


def note_hz(number: float, a4_hz: float = 440.0) -> float:
    """The equal-tempered frequency of a MIDI note number: a4 · 2^((n − 69)/12). It may lie between two notes.

    A4 is 440 Hz by ISO 16.
    """
    return a4_hz * math.exp2((number - 69.0) / 12.0)
