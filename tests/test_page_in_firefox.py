"""The page in Debian's Firefox, from disk: that its sound is decoded and played, and that rounds are kept."""

import asyncio
import base64
import json
from importlib.util import find_spec

import numpy as np
import pytest

from browser import OFFLINE, decoded, example_set
from firefox import FIREFOX, NEEDED, firefox
from glidesmith.page import write_page

pytestmark = pytest.mark.skipif(FIREFOX is None or find_spec("aiohttp") is None, reason=NEEDED)

SAMPLE_RATE = 48_000
LEVEL = 10.0 ** (-20.0 / 20.0)
AHEAD_S, SWITCH_S = 0.030, 0.010

BEGIN = """(() => {
  document.getElementById("listener").value = "Ines";
  document.getElementById("blind-form").requestSubmit();
  return document.getElementById("trial").textContent;
})()"""


async def tried(path, profile):
    async with firefox(profile) as tab:
        preload = f"() => {{ {OFFLINE.replace('SECONDS', '2')} }}"
        await tab.command("script.addPreloadScript", functionDeclaration=preload)
        await tab.open(path)
        await tab.evaluate("document.getElementById('play').click()")
        await tab.wait_until("document.getElementById('play').textContent === 'Pause'")
        played = await tab.evaluate("perform([], 0)")
        begun = await tab.evaluate(BEGIN)
        await tab.evaluate("document.getElementById('give-up').click()")
        await tab.open(path)
        record = await tab.evaluate("document.getElementById('record').textContent")
        return json.loads(played), json.loads(begun), json.loads(record), tab


def test_it_plays_and_keeps_rounds(tmp_path):
    """Playing is what the clip holds, from the first sample that is wholly there on."""
    data, audio, _ = example_set(SAMPLE_RATE)
    path = tmp_path / "index.html"
    write_page(path, data, audio)
    profile = tmp_path / "profile"
    profile.mkdir()
    played, begun, record, tab = asyncio.run(tried(path, profile))
    assert [line for line in tab.logged if line.startswith(("error", "warn"))] == []
    assert "data:," in tab.requests  # the page's icon: requests are told
    assert all(url.startswith(("data:", "file:")) for url in tab.requests)
    output = np.frombuffer(base64.b64decode(played["samples"]), "<f4").astype(np.float64)
    first, there = round(AHEAD_S * SAMPLE_RATE), round((AHEAD_S + SWITCH_S) * SAMPLE_RATE) + 1
    expected = LEVEL * decoded(audio[0])[there - first : output.size - first]
    np.testing.assert_allclose(output[there:], expected, atol=2e-6)
    assert np.abs(expected).max() > 0.01
    assert begun == "Trial 1 of 16"
    assert "Ines" in record
    assert "unfinished" in record
