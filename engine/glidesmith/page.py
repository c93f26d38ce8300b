"""The page of a comparison set: one file that opens from disk in any browser and needs nothing else.

Its sources stand in ``page_parts``: a skeleton in HTML, a style sheet, and scripts that are joined in the
order of `SCRIPTS`. The set's data go in as JSON, the audio as FLAC in base64: a page opened from disk may
fetch nothing. A content security policy in the page's head allows these very scripts and this style sheet, by
their hashes, and nothing else: no network, no other script, whatever the data say.
"""

import base64
import html
import json
import re
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from glidesmith.pageparts import joined, part, policy
from glidesmith.partfile import PartFile
from glidesmith.text import printable

SCRIPTS = (
    "text.js",
    "chance.js",
    "sound.js",
    "lines.js",
    "graph.js",
    "transfer.js",
    "figures.js",
    "record.js",
    "rounds.js",
    "setup.js",
    "blind.js",
    "bar.js",
    "page.js",
)

_PIECE = 3 << 20
"""Bytes of audio turned into base64 at a time: a multiple of 3, so that the pieces join."""

_SLOT = re.compile(r"\{\{(\w+)\}\}")


def write_page(path: Path, data: Mapping[str, Any], audio: Sequence[bytes]) -> int:
    """Write the page of a comparison set.

    Parameters
    ----------
    path : Path
        The page's file; it appears whole or not at all.
    data : mapping
        What ``comparison.json`` holds, each of the ``candidates`` with its ``curves``: lines as lists of
        points (seconds, value), pitch and target in octaves from C4, gate, control and gain 0 to 1.
    audio : sequence of bytes
        A FLAC file for each candidate, in their order.

    Returns
    -------
    int
        How many bytes the page has.

    Raises
    ------
    ValueError
        Where there is not one piece of audio for each candidate, or a number in the data is not finite.
    OutputError
        Where the file can't be written; what was there is unchanged.
    """
    if len(data["candidates"]) != len(audio):
        raise ValueError(f"{len(audio)} pieces of audio for {len(data['candidates'])} candidates")
    script, style = joined(SCRIPTS), part("page.css")
    slots = {
        "policy": policy(script, style),
        "title": html.escape(printable(str(data["title"]))),
        "style": style,
        "data": _json_in_html(data),
        "script": script,
    }
    file = PartFile(path)
    try:
        for piece in _pieces(part("page.html"), slots, audio):
            file.write(piece)
    except BaseException:
        file.abandon()
        raise
    file.close()
    return file.size


def _json_in_html(data: Mapping[str, Any]) -> str:
    """JSON that ends no element and opens none: only ASCII, and of that no ``<``, ``>`` or ``&``."""
    text = json.dumps(data, ensure_ascii=True, allow_nan=False, separators=(",", ":"))
    return text.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026")


def _pieces(skeleton: str, slots: Mapping[str, str], audio: Sequence[bytes]) -> Iterator[bytes]:
    """The page in pieces: what goes into a slot is never looked at for slots again."""
    parts = _SLOT.split(skeleton)
    for text, name in zip(parts[::2], [*parts[1::2], None], strict=True):
        yield text.encode("utf-8")
        if name == "audio":
            yield from _audio_pieces(audio)
        elif name is not None:
            yield slots[name].encode("utf-8")


def _audio_pieces(audio: Sequence[bytes]) -> Iterator[bytes]:
    for number, flac in enumerate(audio, 1):
        yield f'<script type="text/plain" id="audio-{number}">'.encode("ascii")
        view = memoryview(flac)
        for start in range(0, len(view), _PIECE):
            yield base64.b64encode(view[start : start + _PIECE])
        yield b"</script>\n"
