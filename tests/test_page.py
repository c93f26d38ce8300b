"""The page as a file: whole, small, asking for nothing, and letting no text from files become markup."""

import base64
import hashlib
import json
import re
from html.parser import HTMLParser

import numpy as np
import pytest

from browser import decoded, example_set
from glidesmith.errors import OutputError
from glidesmith.page import SCRIPTS, write_page
from glidesmith.pageparts import PARTS

HOSTILE = "</script><script>alert(1)</script><!-- {{script}} \u2028 \u202e & \" ' \udcff"
OWN_CODE_BYTES = 160_000


class Elements(HTMLParser):
    """Every element with its attributes, and the text of scripts and styles."""

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

    def of(self, tag, **wanted):
        return [
            (attributes, "".join(text))
            for name, attributes, text in self.found
            if name == tag and all(attributes.get(key) == value for key, value in wanted.items())
        ]


@pytest.fixture(scope="module")
def example():
    return example_set(24_000)


@pytest.fixture
def page_of(tmp_path):
    def written(data, audio):
        path = tmp_path / "index.html"
        size = write_page(path, data, audio)
        assert size == path.stat().st_size
        assert list(tmp_path.iterdir()) == [path]
        return path.read_text(encoding="utf-8")

    return written


def small_set(**changes):
    """Just enough for a file that is looked at and not opened."""
    return {"title": "Small", "candidates": [], **changes}


def policy_of(text):
    [(attributes, _)] = Elements(text).of("meta", **{"http-equiv": "Content-Security-Policy"})
    return dict(part.split(" ", 1) for part in attributes["content"].split("; "))


def test_the_data_come_back_as_they_were(example, page_of):
    data, audio, _ = example
    elements = Elements(page_of(data, audio))
    [(_, text)] = elements.of("script", type="application/json")
    assert json.loads(text) == json.loads(json.dumps(data))


def test_the_audio_comes_back_bit_for_bit(example, page_of):
    data, audio, _ = example
    elements = Elements(page_of(data, audio))
    for number, flac in enumerate(audio, 1):
        [(_, text)] = elements.of("script", id=f"audio-{number}")
        assert base64.b64decode(text, validate=True) == flac
        assert np.abs(decoded(flac)).max() > 0.01


def test_audio_longer_than_one_piece_joins_without_padding_inside(page_of, monkeypatch):
    monkeypatch.setattr("glidesmith.page._PIECE", 3 * 5)
    flac = bytes(range(256)) * 3
    [(_, text)] = Elements(page_of(small_set(candidates=[{}]), [flac])).of("script", id="audio-1")
    assert base64.b64decode(text, validate=True) == flac


def test_the_page_is_at_most_two_fifths_larger_than_the_wavs(example, page_of):
    """1.4 times the WAVs and 300 KB; the page's own code under 160 KB."""
    data, audio, wav_bytes = example
    assert len(page_of(data, audio)) <= 1.4 * wav_bytes + 300_000
    assert len(page_of(small_set(), [])) < OWN_CODE_BYTES


def test_only_these_very_scripts_and_this_style_sheet_are_allowed(example, page_of):
    """W3C, Content Security Policy Level 3: base64 of the SHA-256 of the element's text."""
    text = page_of(*example[:2])
    elements, policy = Elements(text), policy_of(text)
    for tag, directive, wanted in (("script", "script-src", {"type": "module"}), ("style", "style-src", {})):
        [(_, source)] = elements.of(tag, **wanted)
        digest = base64.b64encode(hashlib.sha256(source.encode()).digest()).decode()
        assert policy[directive] == f"'sha256-{digest}'"
    assert policy["default-src"] == policy["base-uri"] == policy["form-action"] == "'none'"
    assert set(policy) == {"default-src", "script-src", "style-src", "img-src", "base-uri", "form-action"}
    assert policy["img-src"] == "data:"
    kinds = {attributes["type"] for attributes, _ in elements.of("script")}
    assert kinds == {"module", "application/json", "text/plain"}


def test_nothing_in_the_page_names_another_place(page_of):
    text = page_of(small_set(), [])
    assert not re.search(r"https?:|//[a-z]+\.|url\((?!#)|@import", text)
    for _, attributes, _ in Elements(text).found:
        assert "src" not in attributes
        assert "style" not in attributes
        assert not any(name.startswith("on") for name in attributes)
        assert (attributes.get("href") or "#").startswith(("#", "data:,"))


@pytest.mark.parametrize("name", SCRIPTS)
def test_scripts_neither_write_markup_nor_fetch(name):
    text = (PARTS / name).read_text(encoding="utf-8")
    forbidden = (
        r"innerHTML|outerHTML|insertAdjacentHTML|document\.write|\beval\b|new Function|srcdoc|DOMParser|"
        r"createContextualFragment|fetch\(|XMLHttpRequest|WebSocket|EventSource|sendBeacon|import\(|Worker"
    )
    assert not re.search(forbidden, text)


def test_every_source_is_used():
    """By this page, or by another module that joins pages of these parts."""
    modules = "".join(path.read_text(encoding="utf-8") for path in PARTS.parent.glob("*.py"))
    assert all(f'"{path.name}"' in modules for path in PARTS.iterdir())
    assert all((PARTS / name).is_file() for name in ("page.html", "page.css", *SCRIPTS))


def test_hostile_text_stays_text(page_of):
    plain, hostile = (
        page_of(small_set(title=title, candidates=[{"label": title}]), [b"x"]) for title in ("plain", HOSTILE)
    )
    assert [found[0] for found in Elements(hostile).found] == [found[0] for found in Elements(plain).found]
    [(_, text)] = Elements(hostile).of("script", type="application/json")
    assert json.loads(text)["title"] == HOSTILE
    assert not set("<>&\u2028\u2029") & set(text)
    [(_, title)] = Elements(hostile).of("title")
    assert "alert(1)" in title
    assert "\u202e" not in hostile


def test_audio_that_does_not_fit_the_candidates_is_refused(tmp_path):
    with pytest.raises(ValueError, match="1 pieces of audio for 0 candidates"):
        write_page(tmp_path / "index.html", small_set(), [b"x"])
    assert not list(tmp_path.iterdir())


def test_a_page_that_fails_leaves_what_was_there(tmp_path):
    path = tmp_path / "index.html"
    path.write_text("before")
    with pytest.raises(ValueError, match="JSON compliant"):
        write_page(path, small_set(title="x", level=float("nan")), [])
    with pytest.raises(TypeError):
        write_page(path, small_set(candidates=[{}]), [None])
    assert path.read_text() == "before"
    assert list(tmp_path.iterdir()) == [path]


def test_a_folder_that_is_missing_is_said_in_a_line(tmp_path):
    with pytest.raises(OutputError, match="its folder does not exist"):
        write_page(tmp_path / "missing" / "index.html", small_set(), [])
