"""Messages are understood or refused, whatever they are, and never anything else."""

import json

import pytest
from hypothesis import given
from hypothesis import strategies as st

from glidesmith.errors import SettingError
from glidesmith.panel_messages import (
    KINDS,
    LONGEST_MESSAGE,
    MessageError,
    checked_value,
    is_slow,
    read_message,
)
from glidesmith.settings import KEYS

JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=20),
    lambda children: (
        st.lists(children, max_size=3) | st.dictionaries(st.text(max_size=8), children, max_size=3)
    ),
    max_leaves=8,
)
FIELDS = (
    "slot",
    "key",
    "value",
    "table",
    "on",
    "when",
    "percent",
    "db",
    "note",
    "path",
    "count",
    "id",
    "at",
    "x",
)


def understood(text):
    """The message, or None where it is refused as it should be: in one printable line."""
    told = ""
    try:
        return read_message(text)
    except MessageError as problem:
        told = str(problem)
    assert told.isprintable()
    assert 0 < len(told) < 400
    return None


@given(st.text(max_size=200) | JSON.map(json.dumps))
def test_any_text_is_understood_or_refused(text):
    message = understood(text)
    assert message is None or message["do"] in KINDS


@given(
    st.sampled_from(sorted(KINDS)),
    st.dictionaries(
        st.sampled_from(FIELDS), JSON | st.sampled_from([1, 3, True, 0.5, "now", "pitch.rise", "drone"])
    ),
)
def test_fields_of_any_kind_are_checked(do, fields):
    message = understood(json.dumps({"do": do, **fields}))
    if message is not None:
        assert set(message) <= {"do", "id", "at", *KINDS[do].fields, *KINDS[do].optional}
        assert is_slow(message) in (True, False)


@pytest.mark.parametrize("key", [key for key in KEYS if key.table != "phrase"], ids=lambda key: key.name)
def test_values_go_through_the_keys_own_rule(key):
    """The default is taken as it stands, as it is typed, and as None; an array never."""
    if key.default is not None:
        plain = key.plain(key.default)
        assert checked_value(key.name, plain) == plain
        typed = str(plain).lower() if isinstance(plain, bool) else str(plain)
        assert checked_value(key.name, typed) == plain
    assert checked_value(key.name, None) is None
    with pytest.raises(SettingError):
        checked_value(key.name, [1])


def test_the_pages_longest_message_fits():
    longest = json.dumps(
        {"do": "save", "slot": 8, "path": 1024 * "\u00e9", "replace": True, "id": 2**40, "at": 1e13}
    )
    assert len(longest.encode()) < LONGEST_MESSAGE
    assert understood(longest) is not None
