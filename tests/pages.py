"""The comparison page in Chromium for tests: fixtures, which modules import by name, and helpers."""

import json
from functools import cache
from io import BytesIO
from pathlib import Path

import numpy as np
import pytest
import soundfile

from browser import CANDIDATES, CHROMIUM, NEEDED, browser, example_set, opened
from glidesmith.page import write_page
from glidesmith.sheets import read_sheet

try:
    import playwright.sync_api as _  # noqa: F401
except ImportError:
    CHROMIUM = None
in_chromium = pytest.mark.skipif(CHROMIUM is None, reason=NEEDED)

SAMPLE_RATE = 48_000
LEVEL = 10.0 ** (-20.0 / 20.0)
SWITCH_S, SEAM_S, AHEAD_S = 0.010, 0.005, 0.030
SETTLED_S = AHEAD_S + SWITCH_S + 0.001  # the first run has risen from silence
LABELS = list(CANDIDATES)


@pytest.fixture(scope="module")
def chromium():
    with browser() as found:
        yield found


@cache
def _example():
    return example_set(SAMPLE_RATE)


@pytest.fixture(scope="module")
def example():
    return _example()


@pytest.fixture(scope="module")
def page(example, tmp_path_factory) -> Path:
    path = tmp_path_factory.mktemp("page") / "index.html"
    write_page(path, *example[:2])
    return path


@pytest.fixture(scope="module")
def tones(example):
    """A sine for each candidate, as FLAC: a click of -80 dB would stand out."""
    clips = []
    for index, candidate in enumerate(example[0]["candidates"]):
        time = np.arange(candidate["frames"]) / SAMPLE_RATE
        tone = np.round((0.2 - 0.04 * index) * np.sin(2 * np.pi * (200.0 + 31.0 * index) * time) * 2**23)
        file = BytesIO()
        soundfile.write(file, tone.astype(np.int32) << 8, SAMPLE_RATE, subtype="PCM_24", format="FLAC")
        clips.append(file.getvalue())
    return clips


@pytest.fixture(scope="module")
def tone_page(example, tones, tmp_path_factory) -> Path:
    path = tmp_path_factory.mktemp("tones") / "index.html"
    write_page(path, example[0], tones)
    return path


@pytest.fixture
def tab(chromium, page):
    with opened(chromium, page) as found:
        yield found
        assert found.complaints == []
        assert found.requests == [page.as_uri()]


@pytest.fixture
def held_tab(chromium, page):
    """A tab whose audio goes on only when asked to."""
    with opened(chromium, page, held=True) as found:
        yield found
        assert found.complaints == []


def ramp(times, start_s, lasts_s=SWITCH_S):
    return np.clip((times - start_s) / lasts_s, 0.0, 1.0)


def at_position(clips, index, positions):
    """A clip's samples at positions in seconds; silence past its end and before its start."""
    places = np.round(positions * SAMPLE_RATE).astype(int)
    clip = clips[index]
    return np.where((places >= 0) & (places < clip.size), clip[np.clip(places, 0, clip.size - 1)], 0.0)


def position(tab):
    return float(tab.page.inner_text("#position").split()[0])


def play_a_loop(tab, start_s, end_s):
    tab.page.fill("#loop-start", str(start_s))
    tab.page.fill("#loop-end", str(end_s))
    tab.page.locator("#loop-end").blur()
    tab.page.click("#play")
    assert tab.page.inner_text("#play") == "Pause"


def chosen(tab):
    return tab.page.eval_on_selector_all(
        "#candidates input", "(all) => all.findIndex((each) => each.checked)"
    )


def redrawn(tab):
    tab.page.evaluate("() => new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(done)))")


def begin(tab, kind="abx", trials=5, listener="Ines"):
    tab.page.fill("#listener", listener)
    tab.page.check(f"#kind-{kind}")
    if kind == "abx":
        tab.page.fill("#trials", str(trials))
    tab.page.click("#blind-form button[type=submit]")
    assert tab.page.is_visible("#trial")


def saved(tab, within="#result"):
    """The sheet that is downloaded, accepted by what adds sheets up, and the name offered for its file."""
    with tab.page.expect_download() as download:
        tab.page.locator(f"{within} .save").last.click()
    path = Path(download.value.path())
    sheet = json.loads(path.read_text())
    read = read_sheet(path)
    assert (read.listener, read.finished) == (sheet["listener"], sheet["finished"])
    return sheet, download.value.suggested_filename
