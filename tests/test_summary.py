"""The summary as a file: built in pieces, the same bytes for the same records, no text becoming markup."""

import base64
import hashlib
import json
import re
import tracemalloc
from html.parser import HTMLParser

import pytest

from glidesmith import summary
from glidesmith.errors import OutputError
from glidesmith.pageparts import PARTS
from glidesmith.summary import CURVE_HEIGHT, CURVE_WIDTH, curve_path, row_of, summary_pieces, write_summary
from records import make_record, make_records

HOSTILE = "</script><script>alert(1)</script><!-- {{script}} \u2028 \u202e & \" ' \udcff"
OWN_CODE_BYTES = 45_000


class Elements(HTMLParser):
    """Every element's name and attributes, and the text inside scripts, styles and titles."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.found: list[tuple[str, dict[str, str | None], list[str]]] = []
        self.inside = False
        self.feed(text)

    def handle_starttag(self, tag, attributes):
        self.found.append((tag, dict(attributes), []))
        self.inside = True

    def handle_endtag(self, tag):
        self.inside = False

    def handle_data(self, data):
        if self.inside:
            self.found[-1][2].append(data)

    def of(self, tag):
        return [(attributes, "".join(text)) for name, attributes, text in self.found if name == tag]


def page_of(records, failures=(), **kept):
    return b"".join(summary_pieces(records, failures, **kept)).decode("utf-8")


def data_of(text):
    [found] = [text for attributes, text in Elements(text).of("script") if attributes["type"] != "module"]
    return json.loads(found)


class Anew:
    """Records that are made while they are gone through, as a manifest's are read."""

    def __init__(self, count, size=0):
        self.count, self.size = count, size

    def __iter__(self):
        for number in range(self.count):
            yield make_record(f"take-{number:06d}.wav", warnings=["x" * self.size])


def test_each_record_has_a_row_with_its_figures():
    glides = [
        {"note": 3, "from": "D3", "to": "A3", "short_by_cents": 12.34},
        {"note": 5, "from": "A3", "to": "D3", "short_by_cents": 40.06},
    ]
    record = make_record(
        "deck/tune--line.wav",
        preset="deck/tune.toml",
        phrase="line.mid",
        varied={"pitch.law": "rc", "pitch.rise": 0.06},
        never_lands=glides,
        edge_clicks=2,
        clipped=17,
        lufs=None,
        true_peak_dbtp=-0.128,
        gain_db=2.5,
        title="Deck tune",
        warnings=["one"],
        without_effect=["two"],
        curve=[[0.0, 0.0], [1.0, 1.0]],
    )
    [row] = data_of(page_of([record]))["rows"]
    assert row[:4] == ["deck/tune--line.wav", "Deck tune", "deck/tune.toml", "line.mid"]
    assert row[4:10] == ["pitch.law rc, pitch.rise 0.06", 2.0, 2, ["A3", "D3", 40.1], 2, 17]
    assert row[10:14] == [None, -0.13, 2.5, ["one", "two"]]
    names = re.search(r"const FIELDS = (\[.*?\]);", (PARTS / "summary.js").read_text("utf-8"))
    assert names is not None
    assert len(json.loads(names[1])) == len(row)


def test_a_preset_that_names_its_item_is_left_out():
    assert row_of(make_record("deck/tune.wav"))[2] == ""


def test_totals_count_items_and_not_their_faults():
    records = [
        make_record("a.wav", never_lands=[{"note": 1, "from": "C4", "to": "D4", "short_by_cents": 9.0}] * 3),
        make_record("b.wav", edge_clicks=4, clipped=2),
        make_record("c.wav", engine="0.2.0"),
    ]
    data = data_of(page_of(records, ["d.toml: is no preset", "e.toml: can't be read"], title="Bank"))
    assert data["totals"] == {"items": 3, "never": 1, "clicks": 1, "clips": 1, "seconds": 6.0, "failures": 2}
    assert data["failures"] == ["d.toml: is no preset", "e.toml: can't be read"]
    assert (data["title"], data["engines"]) == ("Bank", ["0.1.0", "0.2.0"])


def test_nothing_at_all_is_a_page_too():
    data = data_of(page_of([]))
    assert data["rows"] == []
    assert data["totals"]["items"] == 0


def test_the_worst_stay_where_there_are_too_many_rows(monkeypatch):
    monkeypatch.setattr(summary, "MOST_ROWS", 3)
    never = [{"note": 1, "from": "C4", "to": "D4", "short_by_cents": 9.0}]
    records = [
        make_record("a.wav"),
        make_record("b.wav", warnings=["?"]),
        make_record("c.wav", clipped=1),
        make_record("d.wav"),
        make_record("e.wav", edge_clicks=1),
        make_record("f.wav", never_lands=never),
    ]
    data = data_of(page_of(records))
    assert [row[0] for row in data["rows"]] == ["c.wav", "e.wav", "f.wav"]
    assert data["totals"]["items"] == 6


def test_failures_beyond_the_most_are_counted(monkeypatch):
    monkeypatch.setattr(summary, "MOST_FAILURES", 2)
    data = data_of(page_of([], (f"{number}.toml: is no preset" for number in range(5))))
    assert len(data["failures"]) == 2
    assert data["totals"]["failures"] == 5


def test_the_same_records_give_the_same_bytes():
    assert page_of(make_records(50)) == page_of(make_records(50))
    assert not re.search(r"20[0-9]{2}-[0-9]{2}-[0-9]{2}", page_of(make_records(50)))


def test_records_that_can_be_read_once_only_are_refused():
    with pytest.raises(ValueError, match="gone through twice"):
        summary_pieces(iter(make_records(2)))


def test_memory_does_not_grow_with_the_number_of_records():
    """Ten times the records, each of a few kilobytes: the peak stays within half a megabyte of the first."""
    peaks = []
    for count in (200, 2_000):
        tracemalloc.start()
        for _ in summary_pieces(Anew(count, size=5_000)):
            pass
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[1] - peaks[0] < 500_000


def test_a_row_takes_a_few_hundred_bytes_and_the_code_is_small():
    records = make_records(1_000)
    empty = len(page_of([]))
    assert empty < OWN_CODE_BYTES
    assert (len(page_of(records)) - empty) / len(records) < 300


def test_hostile_text_stays_text():
    def texts(word):
        record = make_record(
            f"{word}.wav",
            preset=word,
            title=word,
            phrase=word,
            varied={word: word},
            warnings=[word],
            never_lands=[{"note": 1, "from": word, "to": word, "short_by_cents": 9.0}],
            engine=word,
        )
        return page_of([record], [word], title=word)

    plain, hostile = texts("plain"), texts(HOSTILE)
    assert [found[0] for found in Elements(hostile).found] == [found[0] for found in Elements(plain).found]
    [data] = [text for attributes, text in Elements(hostile).of("script") if attributes["type"] != "module"]
    assert not set("<>&\u2028\u2029") & set(data)
    assert data_of(hostile)["title"] == HOSTILE
    assert data_of(hostile)["rows"][0][0] == f"{HOSTILE}.wav"
    assert "\u202e" not in hostile


def test_only_these_very_scripts_and_this_style_sheet_are_allowed():
    """W3C, Content Security Policy Level 3: base64 of the SHA-256 of the text; media from beside."""
    text = page_of(make_records(3))
    elements = Elements(text)
    [policy] = [a["content"] for a, _ in elements.of("meta") if a.get("http-equiv")]
    directives = dict(part.split(" ", 1) for part in policy.split("; "))
    [script] = [source for a, source in elements.of("script") if a["type"] == "module"]
    [(_, style)] = elements.of("style")
    for directive, source in (("script-src", script), ("style-src", style)):
        digest = base64.b64encode(hashlib.sha256(source.encode()).digest()).decode()
        assert directives.pop(directive) == f"'sha256-{digest}'"
    assert directives == {
        "default-src": "'none'",
        "media-src": "'self' file:",
        "img-src": "data:",
        "base-uri": "'none'",
        "form-action": "'none'",
    }


def test_nothing_in_the_page_names_another_place():
    text = page_of([])
    assert not re.search(r"https?:|//[a-z]+\.|url\((?!#)|@import", text)
    for _, attributes, _ in Elements(text).found:
        assert "src" not in attributes
        assert "style" not in attributes
        assert not any(name.startswith("on") for name in attributes)


def test_scripts_neither_write_markup_nor_fetch():
    forbidden = (
        r"innerHTML|outerHTML|insertAdjacentHTML|document\.write|\beval\b|new Function|srcdoc|DOMParser|"
        r"createContextualFragment|fetch\(|XMLHttpRequest|WebSocket|EventSource|sendBeacon|import\(|Worker"
    )
    assert not re.search(forbidden, (PARTS / "summary.js").read_text(encoding="utf-8"))


def places_of(path):
    """The points of a path "Mx yldx dy …", by the grammar of SVG paths (W3C, SVG 2, 9.3)."""
    numbers = [int(number) for number in re.findall(r"-?[0-9]+", path)]
    points = [tuple(numbers[:2])]
    for dx, dy in zip(numbers[2::2], numbers[3::2], strict=True):
        points.append((points[-1][0] + dx, points[-1][1] + dy))
    return points


def test_a_curve_fills_its_box():
    path = curve_path([[1.0, -1.0], [2.0, 0.0], [2.0, 1.0], [5.0, 1.0]])
    inner = CURVE_HEIGHT - 8
    assert places_of(path) == [
        (0, 4 + inner),
        (CURVE_WIDTH // 4, 4 + inner // 2),
        (CURVE_WIDTH // 4, 4),
        (CURVE_WIDTH, 4),
    ]
    assert path.startswith("M0 56l60-26")


@pytest.mark.parametrize("points", [[], [[0.0, 1.0]]])
def test_without_points_there_is_no_curve(points):
    assert curve_path(points) == ""


def test_a_pitch_that_never_moves_is_a_line_in_the_middle():
    assert places_of(curve_path([[0.0, 0.3], [2.0, 0.3]])) == [(0, 30), (CURVE_WIDTH, 30)]


def test_the_file_appears_whole_or_not_at_all(tmp_path):
    path = tmp_path / "summary.html"
    size = write_summary(path, make_records(5))
    assert size == path.stat().st_size
    before = path.read_bytes()
    broken = [make_record(), {"item": "no record"}]
    with pytest.raises(KeyError):
        write_summary(path, broken)
    assert path.read_bytes() == before
    assert list(tmp_path.iterdir()) == [path]
    with pytest.raises(OutputError, match="folder"):
        write_summary(tmp_path / "absent" / "summary.html", [])


def test_what_a_killed_writer_left_is_cleared_away(tmp_path):
    """The part file is known by the first bytes of the page, so that it need not be removed by hand."""
    part = tmp_path / "summary.html.part"
    part.write_bytes(next(summary_pieces(make_records(500)))[:20_000])
    write_summary(tmp_path / "summary.html", make_records(1))
    assert not part.exists()
