"""The summary of a batch: one page beside the WAVs, with a sortable table, small curves and a player.

It is made of the finished records alone, in pieces, so that its memory does not grow with the number of
items, and it holds no clock time: the same records give the same bytes. What goes to the page of each record
is a short row; texts go in as JSON and become text, never markup. The players read the WAVs by their relative
address, since the page stands beside them; nothing else is loaded (see `glidesmith.page` for the policy).
"""

import html
import json
import math
import re
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from glidesmith.pageparts import joined, part, policy
from glidesmith.partfile import PartFile
from glidesmith.text import printable, shortened

SUMMARY_FILE = "summary.html"

SCRIPTS = ("text.js", "summary.js")
STYLES = ("page.css", "summary.css")
"""The colours, the type and the controls are those of the comparison page."""

MOST_ROWS = 50_000
"""A browser sorts so many in about a tenth of a second; beyond them the worst are shown."""

MOST_FAILURES = 2_000
CURVE_WIDTH, CURVE_HEIGHT = 240, 60
"""The box that small curves are drawn in: whole numbers, finer than the screen shows them."""

_MOST_WARNINGS = 5
_LONGEST_WARNING = 300
_MOST_ENGINES = 5
_CHUNK_BYTES = 1 << 16
_SLOT = re.compile(r"\{\{(\w+)\}\}")

Record = Mapping[str, Any]


def write_summary(
    path: Path, records: Iterable[Record], failures: Iterable[str] = (), *, title: str = "Batch"
) -> int:
    """Write the page of a batch; it appears whole or not at all.

    Parameters
    ----------
    path : Path
        The page's file, in the folder that the records' ``item`` names are relative to.
    records : iterable of mappings
        The finished records (see `glidesmith.production`). They are gone through twice: a list, or anything
        that begins anew each time it is iterated over.
    failures : iterable of str
        What could not be made and why, a line each.
    title : str
        The page's heading.

    Returns
    -------
    int
        How many bytes the page has.

    Raises
    ------
    ValueError
        For records that can be gone through only once.
    OutputError
        Where the file can't be written; what was there is unchanged.
    """
    file = PartFile(path)
    try:
        for piece in summary_pieces(records, failures, title=title):
            file.write(piece)
    except BaseException:
        file.abandon()
        raise
    file.close()
    return file.size


_PLAYED_FROM = "media-src 'self' file:"
"""The page plays WAVs from where it stands itself."""


def summary_pieces(
    records: Iterable[Record], failures: Iterable[str] = (), *, title: str = "Batch"
) -> Iterator[bytes]:
    """The page in pieces of some 64 KiB, for wherever it is written; see `write_summary`."""
    if iter(records) is records:
        raise ValueError("the records are gone through twice: give a list, not an iterator")
    script, style = joined(SCRIPTS), joined(STYLES)
    slots = {
        "policy": policy(script, style, _PLAYED_FROM),
        "title": html.escape(printable(title)),
        "style": style,
        "script": script,
    }
    return _chunked(_texts(part("summary.html"), slots, _data(records, failures, title)))


def _texts(skeleton: str, slots: Mapping[str, str], data: Iterator[str]) -> Iterator[str]:
    """The page's text: what goes into a slot is never looked at for slots again."""
    parts = _SLOT.split(skeleton)
    for text, name in zip(parts[::2], [*parts[1::2], None], strict=True):
        yield text
        if name == "data":
            yield from data
        elif name is not None:
            yield slots[name]


def _chunked(texts: Iterator[str]) -> Iterator[bytes]:
    held: list[str] = []
    size = 0
    for text in texts:
        held.append(text)
        size += len(text)
        if size >= _CHUNK_BYTES:
            yield "".join(held).encode("utf-8")
            held, size = [], 0
    yield "".join(held).encode("utf-8")


def _data(records: Iterable[Record], failures: Iterable[str], title: str) -> Iterator[str]:
    """The page's JSON: what counts for all first, then a row for each record."""
    census = _Census(records)
    named, failed = _told_failures(failures)
    head = {
        "title": title,
        "engines": sorted(census.engines),
        "totals": {**census.totals(), "failures": failed},
        "failures": named,
    }
    yield _json_in_html(head)[:-1] + ',"rows":['
    room = census.room()
    separator = ""
    for record in records:
        rank = _rank(record)
        if room[rank]:
            room[rank] -= 1
            yield separator + _json_in_html(row_of(record))
            separator = ",\n"
    yield "]}"


def _told_failures(failures: Iterable[str]) -> tuple[list[str], int]:
    named: list[str] = []
    count = 0
    for count, line in enumerate(failures, 1):
        if count <= MOST_FAILURES:
            named.append(shortened(line, 2 * _LONGEST_WARNING))
    return named, count


class _Census:
    """What one passage through the records tells: how many there are of each kind."""

    def __init__(self, records: Iterable[Record]) -> None:
        self.engines: set[str] = set()
        self._counts: Counter[str] = Counter()
        self._ranks: Counter[int] = Counter()
        self._seconds = 0.0
        for record in records:
            self._take(record)

    def _take(self, record: Record) -> None:
        if len(self.engines) < _MOST_ENGINES:
            self.engines.add(shortened(str(record["engine"])))
        self._counts["items"] += 1
        self._counts["never"] += bool(record["never_lands"])
        self._counts["clicks"] += record["edge_clicks"] > 0
        self._counts["clips"] += record["clipped"] > 0
        self._ranks[_rank(record)] += 1
        self._seconds += record["frames"] / record["sample_rate"]

    def totals(self) -> dict[str, float]:
        counts = {name: self._counts[name] for name in ("items", "never", "clicks", "clips")}
        return {**counts, "seconds": round(self._seconds, 3)}

    def room(self) -> list[int]:
        """How many rows of each rank the page takes, the worst first."""
        left = MOST_ROWS
        rooms = []
        for rank in range(_RANKS):
            rooms.append(min(self._ranks[rank], left))
            left -= rooms[-1]
        return rooms


_RANKS = 5


def _rank(record: Record) -> int:
    """Why an item is looked at: 0 it never lands, 1 it clicks, 2 it clips, 3 it has warnings, 4 nothing."""
    found = (record["never_lands"], record["edge_clicks"], record["clipped"], _to_be_told(record))
    return next((rank for rank, value in enumerate(found) if value), _RANKS - 1)


def _to_be_told(record: Record) -> list[str]:
    """Warnings, and what of the preset and the phrase has no effect."""
    return [*record["warnings"], *record["without_effect"]]


def row_of(record: Record) -> list[object]:
    """What the page gets of a record, in the order of FIELDS in summary.js.

    The preset is left out ("") where the item is named after it, and of the glides that never land there is
    the number and the farthest off.
    """
    never = record["never_lands"]
    worst = max(never, key=lambda glide: glide["short_by_cents"], default=None)
    item, preset = str(record["item"]), str(record["preset"])
    warnings = _to_be_told(record)
    told = [shortened(str(line), _LONGEST_WARNING) for line in warnings[:_MOST_WARNINGS]]
    if len(warnings) > _MOST_WARNINGS:
        told.append(f"and {len(warnings) - _MOST_WARNINGS} more, which manifest.jsonl has")
    return [
        item,
        shortened(str(record["title"])),
        "" if item == f"{preset.removesuffix('.toml')}.wav" else preset,
        record.get("phrase") or "",
        _varied(record.get("varied") or {}),
        round(record["frames"] / record["sample_rate"], 3),
        len(never),
        worst and [str(worst["from"]), str(worst["to"]), round(worst["short_by_cents"], 1)],
        record["edge_clicks"],
        record["clipped"],
        _figure(record.get("lufs")),
        _figure(record.get("true_peak_dbtp")),
        _figure(record.get("gain_db")),
        told,
        curve_path(record.get("curve") or ()),
    ]


def _varied(varied: Mapping[str, object]) -> str:
    words = (
        f"{key} {value if isinstance(value, str) else json.dumps(value)}" for key, value in varied.items()
    )
    return printable(", ".join(words))


def _figure(value: float | None) -> float | None:
    return round(value, 2) if value is not None and math.isfinite(value) else None


def curve_path(points: Sequence[Sequence[float]]) -> str:
    """Points (time, value) as the path of a drawing in SVG, scaled to fill the box of the small curves.

    Whole numbers, and each place relative to the one before, so that a page of ten thousand stays small.
    """
    if len(points) < 2:
        return ""
    times, values = ([float(point[axis]) for point in points] for axis in (0, 1))
    begin, span_s = times[0], (times[-1] - times[0]) or 1.0
    low, high = min(values), max(values)
    margin, height = 4, CURVE_HEIGHT - 8
    across = [round((time - begin) / span_s * CURVE_WIDTH) for time in times]
    span = high - low
    down = [margin + round(height * ((high - value) / span if span else 0.5)) for value in values]
    places = list(zip(across, down, strict=True))
    steps = [
        (x - before_x, y - before_y)
        for (x, y), (before_x, before_y) in zip(places[1:], places[:-1], strict=True)
        if (x, y) != (before_x, before_y)
    ]
    return f"M{places[0][0]} {places[0][1]}l" + " ".join(f"{x} {y}" for x, y in steps).replace(" -", "-")


def _json_in_html(data: object) -> str:
    """JSON that ends no element and opens none: only ASCII, and of that no ``<``, ``>`` or ``&``."""
    text = json.dumps(data, ensure_ascii=True, allow_nan=False, separators=(",", ":"))
    return text.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026")
