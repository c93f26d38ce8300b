"""What a panel may ask for: each message by its name, with the fields that it needs and what it does.

A message is a JSON object such as ``{"do": "set", "slot": 1, "key": "pitch.rise", "value": "80 ms"}``. What
is not in the table is refused; what is goes through the same checks as a preset file.
"""

import json
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from glidesmith.panel_guard import PHRASE_SUFFIXES, PRESET_SUFFIXES
from glidesmith.settings import KEY, LEAVES, find_key
from glidesmith.text import shortened, shown, suggestion

if TYPE_CHECKING:
    from glidesmith.panel_guard import Folders

LONGEST_MESSAGE = 16_384
"""Bytes. The page's longest is a title being typed."""

SLOTS = 8
CYCLE_SUFFIXES = (".wav",)
CAPTURE_SUFFIXES = (".wav",)
_LONGEST_TEXT = 2048

Message = dict[str, Any]
Check = Callable[[object], bool]


class MessageError(ValueError):
    """A message that can't be understood, with a line that says why."""


def read_message(text: str) -> Message:
    """The message in a text, its fields checked. Raises MessageError.

    Besides the fields of its kind it may have ``id``, a whole number that the answer repeats, and ``at``, the
    time of the event in the browser in milliseconds since 1970.
    """
    try:
        message = json.loads(text, parse_constant=_refuse_constant)
    except (ValueError, RecursionError):
        raise MessageError(f"{shown(text)} is not JSON") from None
    if not isinstance(message, dict) or not isinstance(message.get("do"), str):
        raise MessageError(f'{shown(text)} is not an object with a "do"')
    kind = KINDS.get(message["do"])
    if kind is None:
        raise MessageError(f"there is no message {shown(message['do'])}{suggestion(message['do'], KINDS)}")
    fields = {**_COMMON, **kind.fields, **kind.optional}
    for name, value in message.items():
        if name != "do" and (name not in fields or not fields[name](value)):
            raise MessageError(
                f"{shown(message['do'])} with {shortened(name)} = {shown(value)} makes no sense"
            )
    missing = [name for name in kind.fields if name not in message]
    if missing:
        raise MessageError(f"{shown(message['do'])} without {', '.join(missing)} makes no sense")
    return message


def perform(message: Message, session: Any, folders: "Folders", holder: object = None) -> Any:
    """Do what a message that `read_message` returned asks of the session.

    ``holder`` is whoever sent it, by whom keys are held. False where nothing was to be done.
    Raises a GlidesmithError where a value or a path is against its rule.
    """
    return KINDS[message["do"]].action({**message, "holder": holder}, session, folders)


def is_slow(message: Message) -> bool:
    """True where the message reads or writes files, so that the server must not wait for it."""
    return KINDS[message["do"]].slow or (message["do"] == "set" and KEY[message["key"]].kind == "file")


@dataclass(frozen=True, slots=True)
class Kind:
    """One kind of message: ``fields`` must be there, ``optional`` may."""

    action: Callable[[Message, Any, "Folders"], Any]
    fields: Mapping[str, Check] = field(default_factory=dict)
    optional: Mapping[str, Check] = field(default_factory=dict)
    slow: bool = False


def checked_value(key: str, value: object) -> object:
    """A setting's value as typed or moved, checked by the rule of its key; None takes it out.

    Texts may carry units. Raises SettingError.
    """
    if value is None:
        return None
    found = find_key(key)
    checked = found.parse(value) if isinstance(value, str) else found.check(value)
    return found.plain(checked)


def _refuse_constant(name: str) -> float:
    raise ValueError(name)


def _whole(low: int, high: int) -> Check:
    return lambda value: type(value) is int and low <= value <= high


def _number(low: float, high: float) -> Check:
    def check(value: object) -> bool:
        return isinstance(value, int | float) and not isinstance(value, bool) and low <= value <= high

    return check


def _flag(value: object) -> bool:
    return isinstance(value, bool)


def _text(value: object) -> bool:
    return isinstance(value, str) and len(value) <= _LONGEST_TEXT


def _value(value: object) -> bool:
    return (
        value is None
        or _text(value)
        or isinstance(value, bool | int)
        or (isinstance(value, float) and math.isfinite(value))
    )


def _one_of(*choices: str) -> Check:
    return lambda value: isinstance(value, str) and value in choices


def _set(message: Message, session: Any, folders: "Folders") -> None:
    key, value = message["key"], checked_value(message["key"], message["value"])

    def allowed(file: Path) -> Path:
        return folders.inside(str(file), *CYCLE_SUFFIXES)

    session.set(message["slot"], key, value, message.get("gesture"), allowed)


def _save(message: Message, session: Any, folders: "Folders") -> None:
    path = folders.inside(message["path"], *PRESET_SUFFIXES, writing=True)
    session.save(message["slot"], path, replace=message.get("replace", False))


def _capture(message: Message, session: Any, folders: "Folders") -> None:
    path = folders.inside(message["path"], *CAPTURE_SUFFIXES, writing=True)
    session.capture_start(path, replace=message.get("replace", False))


def _load(message: Message, session: Any, folders: "Folders") -> None:
    session.load(message["slot"], folders.inside(message["path"], *PRESET_SUFFIXES))


def _phrase(message: Message, session: Any, folders: "Folders") -> None:
    session.phrase(folders.inside(message["path"], *PHRASE_SUFFIXES), message.get("slot"))


_SLOT = _whole(1, SLOTS)
_NOTE = _whole(0, 127)
_COMMON: dict[str, Check] = {"id": _whole(0, 2**53), "at": _number(0.0, 1e15)}

KINDS: dict[str, Kind] = {
    "set": Kind(_set, {"slot": _SLOT, "key": _one_of(*KEY), "value": _value}, {"gesture": _whole(0, 2**53)}),
    "table": Kind(
        lambda m, session, _: session.set(m["slot"], m["table"], m["on"]),
        {"slot": _SLOT, "table": _one_of(*LEAVES), "on": _flag},
    ),
    "select": Kind(
        lambda m, session, _: session.select(m["slot"], m.get("when", "now")),
        {"slot": _SLOT},
        {"when": _one_of("now", "loop")},
    ),
    "copy": Kind(lambda m, session, _: session.copy(m["from"], m["to"]), {"from": _SLOT, "to": _SLOT}),
    "undo": Kind(lambda m, session, _: session.undo()),
    "redo": Kind(lambda m, session, _: session.redo()),
    "play": Kind(lambda m, session, _: session.play()),
    "stop": Kind(lambda m, session, _: session.stop()),
    "panic": Kind(lambda m, session, _: session.panic()),
    "loop": Kind(lambda m, session, _: session.loop(m["on"]), {"on": _flag}),
    "tempo": Kind(lambda m, session, _: session.tempo(m["percent"]), {"percent": _number(10, 400)}),
    "transpose": Kind(
        lambda m, session, _: session.transpose(m["semitones"]), {"semitones": _whole(-24, 24)}
    ),
    "level": Kind(lambda m, session, _: session.level(float(m["db"])), {"db": _number(-60, 0)}),
    "match": Kind(lambda m, session, _: session.match(m["on"]), {"on": _flag}),
    "key_down": Kind(
        lambda m, session, _: session.key_down(m["note"], float(m.get("velocity", 0.8)), m["holder"]),
        {"note": _NOTE},
        {"velocity": _number(0.0, 1.0)},
    ),
    "key_up": Kind(lambda m, session, _: session.key_up(m["note"], m["holder"]), {"note": _NOTE}),
    "save": Kind(_save, {"slot": _SLOT, "path": _text}, {"replace": _flag}, slow=True),
    "load": Kind(_load, {"slot": _SLOT, "path": _text}, slow=True),
    "phrase": Kind(_phrase, {"path": _text}, {"slot": _SLOT}, slow=True),
    "capture": Kind(_capture, {"path": _text}, {"replace": _flag}, slow=True),
    "capture_stop": Kind(lambda m, session, _: session.capture_stop(), slow=True),
    # The server answers these itself.
    "files": Kind(lambda m, session, folders: None),
    "listen": Kind(lambda m, session, folders: None, {"on": _flag}, {"take": _flag}),
    "frames": Kind(
        lambda m, session, folders: None,
        {"count": _whole(1, 16_384)},
        {"starved": _whole(0, 2**53), "latency_s": _number(0.0, 60.0)},
    ),
}
